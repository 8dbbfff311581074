"""What things are carried through: one map folder, or several whose maps follow one another."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace
from itertools import pairwise
from pathlib import Path
from typing import Any

from volmap import carry as carrying
from volmap.mapfolder import MapFolder, read_map_folder
from volmap.pipeline.belonging import KnownScan
from volmap.types import (
    Finding,
    Grid,
    InputError,
    LabelVolume,
    Level,
    MapChain,
    Progress,
    VolumeMap,
    silent,
)
from volmap.types.map_chain import named


@dataclass(frozen=True, eq=False)
class Leg:
    """One map folder of a way.

    Parameters
    ----------
    name : str
        Of the folder, without its path.
    folder : MapFolder
    turned : bool
        True when the way goes through it from its TARGET to its SOURCE.
    """

    name: str
    folder: MapFolder
    turned: bool = False

    @property
    def start(self) -> LabelVolume:
        """The labels of the scan in which this leg starts."""
        return self.folder.target if self.turned else self.folder.source

    @property
    def end(self) -> LabelVolume:
        """The labels of the scan in which it ends."""
        return self.folder.source if self.turned else self.folder.target

    @property
    def map(self) -> VolumeMap:
        """Its map, from start to end."""
        return self.folder.map.reversed() if self.turned else self.folder.map

    def reversed(self) -> Leg:
        """The same folder the other way."""
        return Leg(self.name, self.folder, not self.turned)

    def known(self, *, at_end: bool) -> KnownScan:
        """What is known of the scan at its start or its end, to tell what belongs to it."""
        labels = self.end if at_end else self.start
        role = "target" if at_end != self.turned else "source"
        images = dict(self.folder.certificate.settings.get("images", {}))
        image = str(dict(images.get(role, {})).get("sha256", ""))
        body = self.map.image_mesh if at_end else self.map.mesh
        return KnownScan(labels.name, labels.grid, frozenset({labels.sha256, image} - {""}), body)

    @property
    def scans(self) -> str:
        """Both scans of the folder, in words."""
        return " and ".join(named(v.name, v.sha256) for v in (self.folder.source, self.folder.target))


@dataclass(frozen=True, eq=False)
class Way:
    """Legs that follow one another, in the direction in which things go.

    Parameters
    ----------
    legs : tuple of Leg
    findings : tuple of Finding
        Which folders were turned round to make them join.
    reverse : bool
        True when the user asked for the way from its end to its start.
    """

    legs: tuple[Leg, ...]
    findings: tuple[Finding, ...] = ()
    reverse: bool = False

    @property
    def ends(self) -> tuple[KnownScan, KnownScan]:
        """What is known of the scans at its start and at its end."""
        start, end = self.legs[0].known(at_end=False), self.legs[-1].known(at_end=True)
        if self.reverse:
            return replace(start, side="target", turn="leave out --reverse"), replace(end, side="source")
        return replace(start, side="source"), replace(end, side="target")

    @property
    def between(self) -> tuple[KnownScan, ...]:
        """What is known of the scans it only passes through."""
        return tuple(leg.known(at_end=True) for leg in self.legs[:-1])

    @property
    def start(self) -> LabelVolume:
        """The labels of the scan in which things start."""
        return self.legs[0].start

    @property
    def end(self) -> LabelVolume:
        """The labels of the scan in which they arrive."""
        return self.legs[-1].end

    @property
    def map(self) -> VolumeMap | MapChain:
        """From `start` to `end`."""
        maps = tuple(leg.map for leg in self.legs)
        return maps[0] if len(maps) == 1 else MapChain(maps)

    @property
    def end_sha256(self) -> str:
        """Digest of the scan in which things arrive."""
        return self.end.sha256

    @property
    def voxel_mm(self) -> float:
        """One voxel of the scan in which things start."""
        return self.start.grid.voxel_mm

    def carry(
        self, thing: Any, settings: carrying.CarrySettings, *, onto: Grid | None = None
    ) -> carrying.Carried:
        """A thing of `start`, carried to `end`; a volume onto the voxels of that scan, or onto others."""
        return carrying.carry(thing, self.map, onto=onto or self.end.grid, settings=settings)

    @property
    def told(self) -> dict[str, Any]:
        """What the document beside a carried file says of the way; names only, no paths."""
        by = ("from SOURCE to TARGET", "from TARGET to SOURCE, by the exact inverse")
        through = [
            {"map": leg.name, "from": leg.start.name, "to": leg.end.name, "direction": by[leg.turned]}
            for leg in self.legs
        ]
        return {
            "from": {"name": self.start.name, "sha256": self.start.sha256},
            "to": {"name": self.end.name, "sha256": self.end.sha256},
            "through": through,
            "how": "by the exact piecewise affine map of each folder in turn; no sampled field between",
        }

    def reversed(self) -> Way:
        """From the end to the start."""
        return Way(tuple(leg.reversed() for leg in reversed(self.legs)), self.findings, not self.reverse)


def read_way(through: Sequence[Path], *, reverse: bool = False, progress: Progress = silent) -> Way:
    """Read map folders and lay them one after the other.

    Parameters
    ----------
    through : sequence of Path
        Map folders in the order in which the visits follow one another.  One that runs the other way round
        (B to A where A to B is wanted) is told by the digests of its scans, turned, and named in a finding.
    reverse : bool
        The whole way from its end to its start.
    progress : Progress

    Raises
    ------
    InputError
        A folder that is none or damaged; folders that do not join.
    """
    legs = []
    for step, path in enumerate(through):
        progress("read", step, len(through), path.absolute().name)
        legs.append(Leg(path.absolute().name, read_map_folder(path)))
    way = joined_way(legs)
    return way.reversed() if reverse else way


def joined_way(legs: Sequence[Leg]) -> Way:
    """Legs in the given order, turned where that makes them join.

    The first one is left as it is when the second can follow it so.

    Raises
    ------
    InputError
        No leg, or two neighbours that have no scan in common where they should meet.
    """
    if not legs:
        raise InputError("there is nothing to carry through", expected="at least one map folder")
    for first in (legs[0], legs[0].reversed()):
        path = _followed(first, legs[1:])
        if len(path) == len(legs):
            return Way(path, tuple(_turned_finding(leg) for leg in path if leg.turned))
    raise _does_not_join(legs)


def _followed(first: Leg, rest: Sequence[Leg]) -> tuple[Leg, ...]:
    """As many legs as join, one after the other."""
    path = [first]
    for leg in rest:
        fitting = [x for x in (leg, leg.reversed()) if x.start.sha256 == path[-1].end.sha256]
        if not fitting:
            break
        path.append(fitting[0])
    return tuple(path)


def _does_not_join(legs: Sequence[Leg]) -> InputError:
    """The first two neighbours at which every way ends."""
    reached = max(len(_followed(first, legs[1:])) for first in (legs[0], legs[0].reversed()))
    before, after = list(pairwise(legs))[reached - 1]
    return InputError(
        "two maps do not join",
        where=f"{before.name}, then {after.name}",
        found=f"{after.name} between {after.scans}",
        expected=f"it to go on from where {before.name} ends, which is between {before.scans}",
        remedy="name the folders in the order of the visits, each two neighbours with one scan in common",
        refused=True,
    )


def _turned_finding(leg: Leg) -> Finding:
    sentence = (
        f"maps {leg.folder.source.name} to {leg.folder.target.name} and was turned round: its exact inverse "
        f"leads from {leg.start.name} to {leg.end.name}, where it was needed (told by their digests)"
    )
    return Finding(Level.NOTE, "turned-map", leg.name, sentence)
