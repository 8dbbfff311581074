"""A grid of image planes: PS3.3 C.7.6.2 (one plane a file) and C.7.6.16.2 (many frames in one).

Equation C.7.6.2.1-1 of PS3.3: the centre of the pixel in column i and row j lies at
``position + i * column_spacing * row_cosines + j * row_spacing * column_cosines``, mm, LPS.
Here i runs along a row, j down a column, k from plane to plane.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from volmap.io.dicom.fields import item, items, reals, whole
from volmap.types.errors import InputError
from volmap.types.findings import Finding, Level
from volmap.types.grid import Grid

LPS_TO_RAS = np.diag([-1.0, -1.0, 1.0, 1.0])
_COSINE = 1e-3  # what decimals that were rounded off may do to a direction
_SAME_PLACE = 0.01  # of a pixel: two planes nearer than this are one
_ODD, _OFF = 0.01, 0.1  # of the step: how far off its regular place a plane is said to lie, and refused
_LARGEST_FILLED = 2**27
_STEEPEST_DEG = 60.0


@dataclass(frozen=True, eq=False)
class Planes:
    """Where the planes of one volume lie, in the order they were found.

    Parameters
    ----------
    positions : (n, 3) float64, mm, LPS
        Centre of the first pixel.
    orientation : (6,) float64
        Direction of a row (i), then of a column (j), LPS.
    spacing_mm : (2,) float64
        Between rows, then between columns (PS3.3 10.7.1.3).
    shape : (int, int)
        Rows, columns.
    between_mm, thickness_mm : float or None
        Spacing Between Slices, Slice Thickness.
    names : sequence of str
        What to call each plane in a sentence: "frame 3", a file name.
    where : str
    """

    positions: NDArray[np.float64]
    orientation: NDArray[np.float64]
    spacing_mm: NDArray[np.float64]
    shape: tuple[int, int]
    between_mm: float | None
    thickness_mm: float | None
    names: Sequence[str]
    where: str

    @property
    def normal(self) -> NDArray[np.float64]:
        """(3,) unit vector, row direction x column direction, LPS."""
        across = np.cross(self.orientation[:3], self.orientation[3:])
        return np.asarray(across / np.linalg.norm(across))


@dataclass(frozen=True)
class Plane:
    """One plane as a file tells it; the fields of `Planes` for one."""

    position: NDArray[np.float64]
    orientation: NDArray[np.float64]
    spacing_mm: NDArray[np.float64]
    between_mm: float | None
    thickness_mm: float | None


def plane_of_image(ds: Any, where: str) -> Plane:
    """The plane of a file that holds one image.

    Raises
    ------
    InputError
        No place in the patient, or nonsense for one.
    """
    return _plane(ds, ds, ds, where)


def planes_of_frames(groups: FunctionalGroups) -> list[Plane]:
    """The plane of every frame, from the functional groups (its own before the shared one).

    Raises
    ------
    InputError
        No place in the patient, or nonsense for one.
    """
    return [
        _plane(
            groups.of(n, "PlanePositionSequence"),
            groups.of(n, "PlaneOrientationSequence"),
            groups.of(n, "PixelMeasuresSequence"),
            groups.name_of(n),
        )
        for n in range(groups.n_frames)
    ]


class FunctionalGroups:
    """The functional groups of a multi-frame object (PS3.3 C.7.6.16).

    Parameters
    ----------
    ds : pydicom.Dataset
    where : str

    Raises
    ------
    InputError
        Fewer descriptions than frames.
    """

    def __init__(self, ds: Any, where: str) -> None:
        self._where = where
        self.findings: tuple[Finding, ...] = ()
        self.n_frames = whole(ds, "NumberOfFrames", where, least=1) or 1
        self._shared = item(ds, "SharedFunctionalGroupsSequence", where)
        self._own = items(ds, "PerFrameFunctionalGroupsSequence", where)
        if len(self._own) > self.n_frames:
            sentence = (
                f"describes {len(self._own)} frames, but holds {self.n_frames}; the first ones are read"
            )
            self.findings = (Finding(Level.WARN, "frames_missing", where, sentence),)
        if len(self._own) < self.n_frames:
            raise InputError(
                "does not describe each of its frames", where=where, found=f"{len(self._own)} descriptions",
                expected=f"{self.n_frames}, one a frame", remedy="export it again",
            )  # fmt: skip

    def name_of(self, frame: int) -> str:
        """What to call a frame (counted from 0) in an error: file and number, from 1."""
        return f"{self._where}, frame {frame + 1}"

    def of(self, frame: int, keyword: str) -> Any:
        """The group `keyword` of a frame (from 0), its own before the shared one; None if it has none."""
        own = item(self._own[frame], keyword, self._where)
        if own is None and self._shared is not None:
            return item(self._shared, keyword, self._where)
        return own


def _plane(position: Any, orientation: Any, measures: Any, where: str) -> Plane:
    position = {} if position is None else position
    orientation = {} if orientation is None else orientation
    measures = {} if measures is None else measures
    place = _asked(reals(position, "ImagePositionPatient", 3, where), "ImagePositionPatient", where)
    turned = _asked(reals(orientation, "ImageOrientationPatient", 6, where), "ImageOrientationPatient", where)
    edges = _asked(reals(measures, "PixelSpacing", 2, where), "PixelSpacing", where)
    lengths = np.linalg.norm(turned.reshape(2, 3), axis=1)
    if np.abs(lengths - 1).max() > _COSINE or abs(turned[:3] @ turned[3:]) > _COSINE:
        raise InputError(
            "its ImageOrientationPatient is nonsense", where=where,
            found=f"lengths {lengths[0]:.4g} and {lengths[1]:.4g}, product {turned[:3] @ turned[3:]:.4g}",
            expected="two unit vectors at right angles", remedy="export it again",
        )  # fmt: skip
    if edges.min() <= 0 or np.abs(place).max() > 1e6 or edges.max() > 1e4:
        raise InputError(
            "its place or pixel size is nonsense", where=where,
            found=f"pixels of {edges[0]:.4g} x {edges[1]:.4g} mm", remedy="export it again",
        )  # fmt: skip
    return Plane(place, turned, edges, *(_length(measures, keyword, where) for keyword in _LENGTHS))


_LENGTHS = ("SpacingBetweenSlices", "SliceThickness")


def _length(measures: Any, keyword: str, where: str) -> float | None:
    """A length above 0, or None: these two are often nonsense, and the positions say it better."""
    try:
        found = reals(measures, keyword, 1, where)
    except InputError:
        return None
    return float(abs(found[0])) if found is not None and 0 < abs(found[0]) < 1e4 else None


def _asked(found: NDArray[np.float64] | None, keyword: str, where: str) -> NDArray[np.float64]:
    if found is None:
        raise InputError(
            f"has no place in the patient (no {keyword})", where=where,
            remedy="give a volume of slices with position, orientation and pixel spacing",
        )  # fmt: skip
    return found


def together(planes: Sequence[Plane], shape: tuple[int, int], names: Sequence[str], where: str) -> Planes:
    """Planes of one volume, once orientation and pixel size are the same in all.

    Raises
    ------
    InputError
        They differ; the first plane that does is named.
    """
    first = planes[0]
    for plane, name in zip(planes, names, strict=True):
        if np.abs(plane.orientation - first.orientation).max() > _COSINE:
            _differs("orientation", name, names[0], where)
        if np.abs(plane.spacing_mm / first.spacing_mm - 1).max() > _COSINE:
            _differs("pixel size", name, names[0], where)
    between = {plane.between_mm for plane in planes}
    thickness = {plane.thickness_mm for plane in planes}
    return Planes(
        np.array([plane.position for plane in planes]),
        first.orientation,
        first.spacing_mm,
        shape,
        between.pop() if len(between) == 1 else None,
        thickness.pop() if len(thickness) == 1 else None,
        names,
        where,
    )


def _differs(what: str, name: str, first: str, where: str) -> None:
    raise InputError(
        f"holds planes that differ in {what}", where=where, found=f"{name} unlike {first}",
        remedy="give the planes of one regular volume alone",
    )  # fmt: skip


@dataclass(frozen=True, eq=False)
class Stack:
    """A grid and where each plane goes in it.

    Parameters
    ----------
    grid : Grid
        RAS+; (columns, rows, planes).
    index : (n,) int64
        k of each of the planes, in the order they were given.
    findings : tuple of Finding
    """

    grid: Grid
    index: NDArray[np.int64]
    findings: tuple[Finding, ...]


def stacked(planes: Planes, *, gaps: bool, downward: bool = False) -> Stack:
    """Sort planes along their normal and make a regular grid of them.

    Parameters
    ----------
    planes : Planes
        Several may share a place.
    gaps : bool
        Planes may be missing (of a segmentation, empty frames are left out).  The distance of planes is then
        Spacing Between Slices, else the smallest there is, and must fit all of them.
    downward : bool
        Count k against the normal: a left-handed grid of the same voxels.

    Raises
    ------
    InputError
        Planes beside each other, irregular, or too few to tell the spacing.
    """
    depth = planes.positions @ planes.normal
    order = np.argsort(depth, kind="stable")
    apart = np.diff(depth[order]) > _SAME_PLACE * planes.spacing_mm.min()
    rank = np.empty(len(order), np.int64)
    rank[order] = np.concatenate([[0], np.cumsum(apart)])
    lead = order[np.concatenate([[True], apart])]  # one plane of each place, by depth
    _require_one_place(planes, rank, lead)
    steps, step_mm, findings = _counted(planes, lead, depth[lead], gaps)
    if len(lead) > 1:
        step = (planes.positions[lead[-1]] - planes.positions[lead[0]]) / steps[-1]
    else:
        step = planes.normal * step_mm
    findings += _require_regular(planes, lead, steps, step)
    _require_room(planes, int(steps[-1]) + 1, len(lead))
    index, origin = steps[rank], planes.positions[lead[0]]
    if downward:
        index, origin, step = steps[-1] - index, planes.positions[lead[-1]], -step
    return Stack(_grid(planes, origin, step, int(steps[-1]) + 1), index, findings)


def _grid(planes: Planes, origin: NDArray[np.float64], step: NDArray[np.float64], n: int) -> Grid:
    affine = np.eye(4)
    affine[:3, 0] = planes.orientation[:3] * planes.spacing_mm[1]
    affine[:3, 1] = planes.orientation[3:] * planes.spacing_mm[0]
    affine[:3, 2] = step
    affine[:3, 3] = origin
    world = (LPS_TO_RAS @ affine).astype(np.float32).astype(np.float64) + 0.0  # what NIfTI-1 keeps of it
    try:
        return Grid((planes.shape[1], planes.shape[0], n), world)
    except InputError as fault:
        raise fault.at(planes.where) from fault


def _require_one_place(planes: Planes, rank: NDArray[np.int64], lead: NDArray[np.int64]) -> None:
    beside = np.linalg.norm(planes.positions - planes.positions[lead][rank], axis=1)
    if beside.max() > 0.5 * planes.spacing_mm.min():
        worst = int(beside.argmax())
        raise InputError(
            "holds planes that lie beside each other", where=planes.where,
            found=f"{planes.names[worst]} {beside.max():.4g} mm beside {planes.names[lead[rank[worst]]]}",
            expected="planes one above the other", remedy="give one stack of planes alone",
        )  # fmt: skip


def _counted(
    planes: Planes, lead: NDArray[np.int64], depth: NDArray[np.float64], gaps: bool
) -> tuple[NDArray[np.int64], float, tuple[Finding, ...]]:
    """How many steps up each place lies, and how long a step is."""
    if len(depth) == 1:
        return np.zeros(1, np.int64), *_step_of_one(planes)
    between, distance = planes.between_mm, np.diff(depth)
    if gaps and between is not None and _multiples(distance, between):
        steps = np.rint(distance / between).astype(np.int64)
        return np.concatenate([[0], np.cumsum(steps)]), between, _filled(planes, steps, "as it states")
    typical = float(np.median(distance))
    if np.abs(distance / typical - 1).max() <= 2 * _OFF:
        return np.arange(len(depth)), typical, _contradiction(planes, typical)
    smallest = float(distance.min())
    if gaps and between is None and _multiples(distance, smallest):
        steps = np.rint(distance / smallest).astype(np.int64)
        said = "the smallest distance of two planes, as it states no spacing between slices"
        return np.concatenate([[0], np.cumsum(steps)]), smallest, _filled(planes, steps, said)
    worst = int(np.abs(distance - typical).argmax())
    names = planes.names[lead[worst]], planes.names[lead[worst + 1]]
    missing = _multiples(distance, smallest) and not gaps
    raise InputError(
        "lacks planes" if missing else "has planes at irregular distances", where=planes.where,
        found=f"{distance[worst]:.4g} mm between {names[0]} and {names[1]}",
        expected=f"{typical:.4g} mm as between the others",
        remedy="give every slice of one series" if missing else "give planes at one distance",
    )  # fmt: skip


def _multiples(distance: NDArray[np.float64], step: float) -> bool:
    steps = np.rint(distance / step)
    return bool((steps >= 1).all() and np.abs(distance / step - steps).max() <= _OFF)


def _step_of_one(planes: Planes) -> tuple[float, tuple[Finding, ...]]:
    if planes.between_mm is not None:
        return planes.between_mm, ()
    if planes.thickness_mm is None:
        raise InputError(
            "holds one plane and does not say how thick it is", where=planes.where,
            expected="SpacingBetweenSlices or SliceThickness", remedy="give a volume of several planes",
        )  # fmt: skip
    sentence = f"one plane; its slice thickness, {planes.thickness_mm:g} mm, is taken for its spacing"
    return planes.thickness_mm, (Finding(Level.WARN, "thickness_as_spacing", planes.where, sentence),)


def _contradiction(planes: Planes, step_mm: float) -> tuple[Finding, ...]:
    if planes.between_mm is None or abs(planes.between_mm / step_mm - 1) <= _OFF:
        return ()
    sentence = (
        f"states {planes.between_mm:g} mm between slices, but its planes lie {step_mm:.4g} mm apart; "
        "the positions are used"
    )
    return (Finding(Level.WARN, "spacing_contradicts", planes.where, sentence),)


def _filled(planes: Planes, steps: NDArray[np.int64], said: str) -> tuple[Finding, ...]:
    n = int(steps.sum()) - len(steps)
    if not n:
        return ()
    many = "a plane is" if n == 1 else f"{n} planes are"
    sentence = f"{many} left out between others and taken for empty; the spacing is {said}"
    level = Level.WARN if n >= len(steps) else Level.NOTE  # half of the planes, or more
    return (Finding(level, "planes_left_out", planes.where, sentence),)


def _require_regular(
    planes: Planes, lead: NDArray[np.int64], steps: NDArray[np.int64], step: NDArray[np.float64]
) -> tuple[Finding, ...]:
    """Planes lie where the grid says; a step that leans (gantry tilt) is a grid all the same."""
    regular = planes.positions[lead[0]] + steps[:, None] * step
    off = np.linalg.norm(planes.positions[lead] - regular, axis=1)
    length, worst = float(np.linalg.norm(step)), int(off.argmax())
    lean_deg = math.degrees(math.acos(min(abs(float(step @ planes.normal)) / length, 1.0)))
    if off.max() > _OFF * min(length, float(planes.spacing_mm.min()) * 10):
        raise InputError(
            "has a plane off the line of the others", where=planes.where,
            found=f"{planes.names[lead[worst]]} {off.max():.4g} mm off",
            expected=f"a regular stack, {length:.4g} mm a step", remedy="give planes of one regular volume",
        )  # fmt: skip
    if lean_deg > _STEEPEST_DEG:
        raise InputError(
            "its planes are shifted more than stacked", where=planes.where,
            found=f"a stack that leans by {lean_deg:.0f} degrees",
            expected=f"at most {_STEEPEST_DEG:.0f}",
        )  # fmt: skip
    findings = []
    if off.max() > _ODD * length:
        sentence = (
            f"planes lie up to {off.max():.3g} mm off regular places ({planes.names[lead[worst]]} most); "
            "the regular ones are used"
        )
        findings.append(Finding(Level.WARN, "planes_not_quite_regular", planes.where, sentence))
    if lean_deg > 0.1:
        sentence = f"the stack of planes leans by {lean_deg:.1f} degrees (a tilted gantry); kept as it is"
        findings.append(Finding(Level.NOTE, "leaning_stack", planes.where, sentence))
    return tuple(findings)


def _require_room(planes: Planes, n: int, given: int) -> None:
    voxels = n * planes.shape[0] * planes.shape[1]
    if n > 8 * given and voxels > _LARGEST_FILLED:
        raise InputError(
            "leaves out too many planes", where=planes.where, found=f"{given} of {n} planes",
            expected=f"at most {_LARGEST_FILLED} voxels in all", remedy="export it with its empty planes",
        )  # fmt: skip
