"""All phantoms by name."""

from __future__ import annotations

from dataclasses import replace
from importlib import import_module
from typing import TYPE_CHECKING

from volmap.types.errors import InputError

if TYPE_CHECKING:
    from .phantom import Phantom

_DESCRIPTIONS = {
    "gel-column": "a soft column with two inclusions, bent and stretched; simulated, 4 visits, 24 beads",
    "pressure-shell": "a thick incompressible sphere inflated by pressure; exact solution, 3 visits",
    "twin-bodies": "two different bodies of one family with labelled structures; landmarks only, 2 bodies",
    "folded-slab": "a thick bent slab that unbends; exact solution, 3 visits",
}


def names() -> dict[str, str]:
    """Every phantom and what it is, in one line."""
    return dict(_DESCRIPTIONS)


def make(name: str, *, seed: int = 0, voxel_mm: float | None = None) -> Phantom:
    """Make a phantom.

    Parameters
    ----------
    name : str
        One of `names`.
    seed : int
        Places the beads and draws texture and noise; the truth does not depend on it.
    voxel_mm : float, optional
        Edge of cubic voxels for every visit; None keeps the phantom's own (anisotropic) spacing.

    Raises
    ------
    InputError
        Unknown name; a voxel edge outside 0.3 to 10 mm.
    """
    if name not in _DESCRIPTIONS:
        raise InputError(
            "there is no phantom of that name",
            where="phantom",
            found=repr(name),
            expected=", ".join(_DESCRIPTIONS),
            remedy="list them with `volmap phantom --list`",
        )
    if voxel_mm is not None and not 0.3 <= voxel_mm <= 10.0:
        raise InputError(
            "the voxel edge cannot show these bodies",
            where="voxel_mm",
            found=f"{voxel_mm:g} mm",
            expected="0.3 to 10 mm",
            remedy="choose an edge in that range, or none for the phantom's own spacing",
        )
    module = import_module(f".{name.replace('-', '_')}", __package__)
    made: Phantom = module.make(seed=seed, voxel_mm=voxel_mm)
    voxels = "its own" if voxel_mm is None else f"{voxel_mm:g}"
    return replace(made, settings={"seed": str(seed), "voxel_mm": voxels})
