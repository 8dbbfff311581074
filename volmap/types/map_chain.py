"""Maps that follow one another."""

from __future__ import annotations

from dataclasses import dataclass
from itertools import pairwise

from volmap.types.errors import InputError
from volmap.types.frozen import Frozen
from volmap.types.tetmesh import TetMesh
from volmap.types.volume_map import VolumeMap


@dataclass(frozen=True, eq=False)
class MapChain(Frozen):
    """Maps one after the other: A to B, B to C, and so on.

    A composition of piecewise affine maps is piecewise affine, but on no mesh at hand; so things go through
    each map in turn, exactly, and nothing is sampled between.  By the chain rule the gradients multiply: F of
    the whole is the product of the F of the maps, the last one leftmost.

    Parameters
    ----------
    maps : tuple of VolumeMap
        In the order in which things go through them; each starts in the scan in which the one before ends,
        by digest where both are known, else by name.

    Raises
    ------
    InputError
        No map, or two that do not join.
    """

    maps: tuple[VolumeMap, ...]

    def __post_init__(self) -> None:
        object.__setattr__(self, "maps", tuple(self.maps))
        if not self.maps:
            raise InputError("a chain needs at least one map")
        for before, after in pairwise(self.maps):
            _require_joint(before, after)

    @property
    def source(self) -> str:
        """Short name of the scan in which the chain starts."""
        return self.maps[0].source

    @property
    def target(self) -> str:
        """Short name of the scan in which it ends."""
        return self.maps[-1].target

    @property
    def source_sha256(self) -> str:
        """Digest of the scan in which the chain starts; empty when not known."""
        return self.maps[0].source_sha256

    @property
    def target_sha256(self) -> str:
        """Digest of the scan in which it ends; empty when not known."""
        return self.maps[-1].target_sha256

    @property
    def mesh(self) -> TetMesh:
        """The body it starts from: the mesh of the first map.

        What of it gets through every later map may be less, where the bodies of two maps of one scan differ.
        """
        return self.maps[0].mesh

    @property
    def image_mesh(self) -> TetMesh:
        """The body it ends in: the mesh of the last map where it lands."""
        return self.maps[-1].image_mesh

    def reversed(self) -> MapChain:
        """The exact inverse: the inverses, last one first."""
        return MapChain(tuple(step.reversed() for step in reversed(self.maps)))


def joined(before: VolumeMap, after: VolumeMap) -> bool:
    """Does one map start where the other ends?  By digest where both scans have one, else by name."""
    if before.target_sha256 and after.source_sha256:
        return before.target_sha256 == after.source_sha256
    return before.target == after.source


def _require_joint(before: VolumeMap, after: VolumeMap) -> None:
    if joined(before, after):
        return
    raise InputError(
        "two maps do not join: the second does not start in the scan in which the first ends",
        where=f"{before.source} to {before.target}, then {after.source} to {after.target}",
        found=f"the second one starts in {named(after.source, after.source_sha256)}",
        expected=f"{named(before.target, before.target_sha256)}, in which the first one ends",
        remedy="give the maps in the order of the visits, each pair of neighbours with one scan in common",
        refused=True,
    )


def named(name: str, sha256: str) -> str:
    """A scan by name, with the beginning of its digest."""
    return f"{name} (digest {sha256[:12]})" if sha256 else f"{name} (digest not known)"
