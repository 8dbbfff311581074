"""Does a thing belong to the scan it is carried from?  Told by digest, then by grid, then by place.

The direction of a carry is the easiest thing to get wrong and the hardest to see afterwards, so a thing that
speaks against it is refused, and a thing that says nothing has to be vouched for by the user.
"""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from typing import Any, Literal

import numpy as np
from numpy.typing import NDArray

from volmap.kernels.locate import build_buckets, locate
from volmap.types import Finding, Grid, ImageVolume, InputError, LabelVolume, Level, TetMesh
from volmap.types.volumes import digest

Side = Literal["source", "target"]

N_ASKED = 2000  # points of a thing that are looked up in both bodies
MORE = 0.05  # share of them by which more must lie in the end body than in the start body to be told


@dataclass(frozen=True, eq=False)
class KnownScan:
    """What is known of a scan at one end of a way.

    Parameters
    ----------
    name : str
    grid : Grid
    digests : frozenset of str
        Of its label volume, and of its image when one was named when the map was made.
    body : TetMesh, optional
        The body in this scan's world.
    side : 'source' or 'target'
        Which end of the way as the user named it, before `--reverse`.
    turn : str
        What to do to carry things that start here the other way.
    """

    name: str
    grid: Grid | None
    digests: frozenset[str]
    body: TetMesh | None = None
    side: Side = "source"
    turn: str = "add --reverse"


def require_belonging(
    thing: Any,
    start: KnownScan,
    end: KnownScan,
    *,
    name: str,
    belongs_to: Side | None = None,
    between: Sequence[KnownScan] = (),
) -> tuple[Finding, ...]:
    """Refuse a thing that does not belong to the scan it is carried from, or that nobody vouches for.

    Parameters
    ----------
    thing : noun
        A volume (with `grid` and voxels), or something with `points`.
    start, end : KnownScan
        Where it is carried from and to.
    name : str
        Of its file, for messages.
    belongs_to : 'source' or 'target', optional
        Whose world the user says it lies in.
    between : sequence of KnownScan
        The scans that the way only passes through.

    Returns
    -------
    tuple of Finding
        How it was told, where that was not by its digest.

    Raises
    ------
    InputError
        It belongs to the other end, or nothing tells and nobody says.
    """
    if belongs_to is not None and belongs_to != start.side:
        raise _wrong_way(
            f"is said to belong to {end.name} ({belongs_to}), but would be carried from {start.name}",
            name,
            start,
        )
    grid = getattr(thing, "grid", None)
    if isinstance(grid, Grid):
        if _known_as(thing, start, end, between, name):
            return ()
        return _of_volume(thing, grid, start, end, name, belongs_to)
    points = getattr(thing, "points", None)
    if points is not None:
        return _of_points(np.asarray(points, np.float64), start, end, name, belongs_to)
    return ()


def grid_of_the_start(onto: Grid, start: KnownScan, end: KnownScan, *, name: str) -> tuple[Finding, ...]:
    """Are the voxels that a volume is to arrive on those of the scan it comes from?  May be meant; is said.

    Parameters
    ----------
    onto : Grid
    start, end : KnownScan
        Where the volume is carried from and to.
    name : str
        Of the file of `onto`.
    """
    here, there = (scan.grid is not None and scan.grid.same_place(onto) for scan in (start, end))
    if there or not here:
        return ()
    sentence = (
        f"has the voxel grid of {start.name}, from which the volume comes; it was taken for voxels in the "
        f"world of {end.name}, where the volume arrives"
    )
    remedy = f"check the direction; for the voxels of {end.name} leave out --onto"
    return (Finding(Level.WARN, "onto-the-start", name, sentence, remedy),)


def _known_as(thing: Any, start: KnownScan, end: KnownScan, between: Sequence[KnownScan], name: str) -> bool:
    """True when its digest says that it belongs to the start; refused when it says another scan."""
    for found in digests_of(thing):
        if found in start.digests:
            return True
        for scan in (end, *between):
            if found not in scan.digests:
                continue
            what = f"is a volume of {scan.name} (its digest says so), but would be carried from {start.name}"
            if scan is end:
                raise _wrong_way(what, name, start)
            remedy = f"name only the maps that lead on from {scan.name}"
            raise InputError(what, where=name, remedy=remedy, refused=True)
    return False


def _of_volume(
    thing: Any, grid: Grid, start: KnownScan, end: KnownScan, name: str, belongs_to: Side | None
) -> tuple[Finding, ...]:
    here, there = (s.grid is not None and s.grid.same_place(grid) for s in (start, end))
    if here and not there:
        sentence = f"is not known by its digest, and was taken for a volume of {start.name}: same voxel grid"
        return (Finding(Level.NOTE, "told-by-grid", name, sentence),)
    if belongs_to is not None:
        return (_vouched(start, name, "the voxels of both" if here else "neither digest nor voxels tell"),)
    if here:
        told = _of_points(_some_labelled(thing), start, end, name, belongs_to)
        if told:
            return told
        sentence = (
            f"{start.name} and {end.name} have the same voxel grid, so nothing tells to which of them it "
            f"belongs; it was carried from {start.name}"
        )
        remedy = f"check the direction, or vouch for it with --belongs-to {start.side}"
        return (Finding(Level.WARN, "either-scan", name, sentence, remedy),)
    if there:
        raise _wrong_way(
            f"has the voxel grid of {end.name}, but would be carried from {start.name}", name, start
        )
    raise InputError(
        f"nothing tells that it belongs to {start.name}: neither its digest nor its voxel grid",
        where=name,
        found=_grid_words(grid),
        expected=f"{_grid_words(start.grid)}, as {start.name} has" if start.grid is not None else "",
        remedy=f"if it lies in the world of {start.name}, say --belongs-to {start.side}",
        refused=True,
    )


def digests_of(thing: Any) -> Iterator[str]:
    """Digests of a volume, its own first: a file of whole numbers may be read as labels or as an image."""
    if hasattr(thing, "sha256"):
        yield str(thing.sha256)
    if isinstance(thing, LabelVolume):
        yield digest(np.asfortranarray(thing.labels).astype("<f4"), thing.grid.affine)
    if isinstance(thing, ImageVolume):
        values = np.asarray(thing.values)
        with np.errstate(invalid="ignore"):
            whole = values.astype("<u2")
        if np.array_equal(whole, values):
            yield digest(whole, thing.grid.affine)


def _some_labelled(thing: Any) -> NDArray[np.float64]:
    """Centres of some of the labelled voxels of a label volume, in the world; none of other volumes."""
    if not isinstance(thing, LabelVolume):
        return np.empty((0, 3))
    voxels = np.flatnonzero(thing.labels)
    some = voxels[:: max(1, len(voxels) // N_ASKED)]
    return thing.grid.to_world(
        np.stack(np.unravel_index(some, thing.labels.shape), axis=1).astype(np.float64)
    )


def _grid_words(grid: Grid | None) -> str:
    if grid is None:
        return ""
    sides = " x ".join(f"{mm:.3g}" for mm in grid.spacing)
    return f"{' x '.join(map(str, grid.shape))} voxels of {sides} mm"


def _of_points(
    points: NDArray[np.float64], start: KnownScan, end: KnownScan, name: str, belongs_to: Side | None
) -> tuple[Finding, ...]:
    """Points have no digest; those of the end scan mostly lie outside the body of the start scan."""
    if start.body is None or end.body is None or not len(points):
        return ()
    asked = points[:: max(1, len(points) // N_ASKED)]
    n_start, n_end = (int(_inside(body, asked).sum()) for body in (start.body, end.body))
    if n_end - n_start <= MORE * len(asked):
        return ()
    told = (
        f"{n_start} of {len(asked)} points lie inside the body of {start.name}, from which they are carried, "
        f"and {n_end} inside that of {end.name}"
    )
    if belongs_to is not None:
        return (_vouched(start, name, told),)
    if not n_start:
        raise _wrong_way(told, name, start)
    remedy = f"check the direction, or vouch for it with --belongs-to {start.side}"
    return (Finding(Level.WARN, "nearer-the-end", name, told, remedy),)


def _inside(body: TetMesh, points: NDArray[np.float64]) -> NDArray[np.bool_]:
    vertices, tets = np.array(body.points), np.array(body.tets)
    return np.asarray(locate(build_buckets(vertices, tets), vertices, tets, points)[0] >= 0)


def _vouched(start: KnownScan, name: str, why: str) -> Finding:
    sentence = f"was carried from {start.name} because --belongs-to {start.side} says so ({why})"
    return Finding(Level.WARN, "vouched-for", name, sentence)


def _wrong_way(what: str, name: str, start: KnownScan) -> InputError:
    return InputError(what, where=name, remedy=f"to carry it the other way {start.turn}", refused=True)
