"""Where an NRRD volume lies: its space, directions, origin and units, turned into a RAS+ affine in mm."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

import numpy as np
from numpy.typing import NDArray

from volmap.types.errors import InputError
from volmap.types.findings import Finding, Level
from volmap.types.grid import Grid

_TO_RAS = {  # world axes of the format's named patient spaces, as signs of R, A, S
    "right-anterior-superior": (1, 1, 1),
    "ras": (1, 1, 1),
    "left-anterior-superior": (-1, 1, 1),
    "las": (-1, 1, 1),
    "left-posterior-superior": (-1, -1, 1),
    "lps": (-1, -1, 1),
}
_MILLIMETRES = ("mm", "millimeter", "millimeters", "millimetre", "millimetres")
_LISTS = ("", "???", "list", "time")
_DOMAINS = ("", "???", "domain", "space")


def frame_axis(header: Mapping[str, Any], sizes: tuple[int, ...], where: str) -> int | None:
    """The axis that counts frames; None in three dimensions.

    Raises
    ------
    InputError
        Directions that do not fit the axes, or an axis of vectors, colours or the like.
    """
    directions = np.atleast_2d(np.asarray(header.get("space directions", np.empty((0, 0))), np.float64))
    if "space directions" not in header or len(directions) != len(sizes):
        raise InputError(
            "the header gives no orientation", where=where,
            found=f"{len(directions)} space directions" if len(directions) else "no space directions",
            expected=f"one vector for each of {len(sizes)} axes",
            remedy="export it with its orientation, or copy the header geometry of the scan it was drawn on",
            refused=not len(directions) or not directions.size,
        )  # fmt: skip
    pathless = [axis for axis in range(len(sizes)) if np.isnan(directions[axis]).all()]
    kinds = [str(kind).lower() for kind in header.get("kinds", [""] * len(sizes))]
    if len(kinds) != len(sizes):
        raise InputError("the header's kinds do not fit its axes", where=where, found=" ".join(kinds)[:60])
    if len(sizes) - len(pathless) != 3:
        raise InputError(
            "the volume does not have three axes in space", where=where,
            found=f"{len(sizes) - len(pathless)} space directions", expected="3",
            remedy="export it with its orientation", refused=True,
        )  # fmt: skip
    wrong = [k for a, k in enumerate(kinds) if k not in (_LISTS if a in pathless else _DOMAINS)]
    if wrong:
        raise InputError(
            "is not one number a voxel", where=where, found=f"an axis of the kind {wrong[0][:40]}",
            expected="axes in space, and at most one list of frames",
            remedy="read vectors and tensors as such, not one component of them", refused=True,
        )  # fmt: skip
    return pathless[0] if pathless else None


def affine_of(
    header: Mapping[str, Any], sizes: tuple[int, ...], list_axis: int | None, where: str
) -> tuple[NDArray[np.float64], tuple[Finding, ...]]:
    """Voxel centres to RAS+ world millimetres.

    Raises
    ------
    InputError
        A space whose axes are not the patient's, no origin, another unit, or axes that are not independent.
    """
    signs = _signs(header, where)
    findings = _unit(header, where)
    axes = [axis for axis in range(len(sizes)) if axis != list_axis]
    directions = np.asarray(header["space directions"], np.float64)[axes]
    origin = np.asarray(header.get("space origin", ()), np.float64)
    if directions.shape != (3, 3) or origin.shape != (3,):
        raise InputError(
            "the header gives no place", where=where,
            found="no space origin" if not origin.size else f"a space origin of {origin.size} numbers",
            expected="a space origin and directions of three numbers each",
            remedy="export it with its origin", refused="space origin" not in header,
        )  # fmt: skip
    affine = np.eye(4)
    affine[:3, :3] = directions.T * np.array(signs, np.float64)[:, np.newaxis]
    affine[:3, 3] = origin * signs
    with np.errstate(all="ignore"):
        affine = affine.astype(np.float32).astype(np.float64)  # as NIfTI-1 keeps it when it is written
    try:
        Grid((sizes[axes[0]], sizes[axes[1]], sizes[axes[2]]), affine)
    except InputError as fault:
        raise fault.at(where) from fault
    return affine, findings


def _signs(header: Mapping[str, Any], where: str) -> tuple[int, int, int]:
    space = str(header.get("space", "")).strip().lower()
    if space not in _TO_RAS:
        raise InputError(
            "the header's space does not say where left, front and top are", where=where,
            found=space[:60] or "no space",
            expected="right-anterior-superior, left-anterior-superior or left-posterior-superior",
            remedy="write the space the directions are in into its header", refused=True,
        )  # fmt: skip
    return _TO_RAS[space]


def _unit(header: Mapping[str, Any], where: str) -> tuple[Finding, ...]:
    units = [str(unit).strip().lower() for unit in header.get("space units", [])]
    stated = [unit for unit in units if unit not in ("", "???")]
    if not stated:
        sentence = "the header states no unit of length; millimetres are assumed"
        return (Finding(Level.NOTE, "unit_not_stated", where, sentence, 'add space units: "mm" "mm" "mm"'),)
    other = [unit for unit in stated if unit not in _MILLIMETRES]
    if other or len(units) != 3:
        raise InputError(
            "the header gives lengths in another unit", where=where, found=" ".join(units)[:60],
            expected="millimetres on three axes", remedy="rescale directions and origin to millimetres",
            refused=True,
        )  # fmt: skip
    return ()
