"""Where to start: rigid and affine alignments of two labelled surfaces.

Several starts are refined by alternating closest points and least squares (Besl & McKay, IEEE PAMI 14(2),
1992), first rigid (at the target's volume), then affine; the smallest residual wins, among nearly equal
ones the one that leaves the guides nearest, and then the smallest rotation.  Starts that run into each other
are followed once.
"""

from __future__ import annotations

from dataclasses import dataclass, field, replace

import numpy as np
from numpy.typing import NDArray

from volmap.kernels import closest
from volmap.mapping.fits import fit_affine, fit_rigid, homogeneous
from volmap.mapping.patches import areas, face_normals
from volmap.types import InputError, LandmarkPairs, Surface

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]

SAMPLES = 1000  # points a label at most, for the last rounds of the starts that are left
FEW_SAMPLES = 100  # for everything before
SAME_PLACE = 0.02  # share of the body's size within which two starts have run into each other
NEARLY_EQUAL = 1.05  # residuals within this factor of the best count as equal
ROUGH = 0.02  # and so do those that differ by less than this share of a mesh edge
NO_GAP_MM = 1e-6  # no residual below this tells anything
AT_REST = 1e-3  # share of the body's size by which no point moves any more
ACROSS = 0.03  # share of a match that acts across the normal in affine rounds
HOLD = 0.02  # share by which a body is held where it was at the beginning of a lap


@dataclass(frozen=True)
class _Lap:
    """Rounds of matching and fitting for every start still running.

    Parameters
    ----------
    all_samples, rigid : bool
    rounds : int
        At most.
    hopeless : float
        Starts whose residual then is larger than this factor times the best run no further.
    """

    all_samples: bool
    rigid: bool
    rounds: int
    hopeless: float


LAPS = (
    _Lap(all_samples=False, rigid=True, rounds=8, hopeless=np.inf),
    _Lap(all_samples=False, rigid=False, rounds=6, hopeless=3.0),
    _Lap(all_samples=False, rigid=False, rounds=6, hopeless=1.5),
    _Lap(all_samples=True, rigid=False, rounds=6, hopeless=1.5),
    _Lap(all_samples=True, rigid=False, rounds=14, hopeless=1.5),
)


@dataclass(frozen=True, eq=False)
class Alignment:
    """An affine that lays the source on the target.

    Parameters
    ----------
    name : str
        Which start it came from.
    matrix : (4, 4) float64
        Source world to target world, mm; positive determinant.
    residual_mm : float
        Root mean square distance between the label surfaces, both ways.
    """

    name: str
    matrix: Floats
    residual_mm: float

    def apply(self, points: Floats) -> Floats:
        """(n, 3) source points to target points, mm."""
        return np.asarray(points @ self.matrix[:3, :3].T + self.matrix[:3, 3])

    @property
    def rotation_deg(self) -> float:
        """Angle of its rotation part, degrees."""
        return _angle_deg(self.matrix)


def turned_deg(one: Alignment, other: Alignment) -> float:
    """Angle by which one alignment is turned against another, degrees."""
    return _angle_deg(np.linalg.inv(one.matrix) @ other.matrix)


def _angle_deg(matrix: Floats) -> float:
    u, _, v = np.linalg.svd(matrix[:3, :3])
    return float(np.degrees(np.arccos(np.clip((np.trace(u @ v) - 1) / 2, -1, 1))))


@dataclass(eq=False)
class _Label:
    """One label's closed surface on one body, thinned to a sample with weights."""

    points: Floats
    triangles: Ints
    tree: closest.Tree
    sample: Floats
    weight: Floats
    normals: Floats
    volume_mm3: float

    @staticmethod
    def of(surface: Surface, label: int, rng: np.random.Generator) -> _Label:
        used, local = np.unique(surface.of_label(label).triangles, return_inverse=True)
        triangles = np.ascontiguousarray(local.reshape(-1, 3))
        points = np.array(surface.points[used])
        area = areas(points, triangles)
        weight = np.bincount(triangles.ravel(), np.repeat(area / 3, 3), len(points))
        keep = np.arange(len(points))
        if len(keep) > SAMPLES:
            keep = np.sort(rng.choice(len(keep), SAMPLES, replace=False))
        share = weight[keep] / weight[keep].sum() * np.sqrt(area.sum())
        tree = closest.build_tree(points, triangles)
        faces = np.repeat(face_normals(points, triangles), 3, axis=0)
        sums = [np.bincount(triangles.ravel(), faces[:, d], len(points)) for d in range(3)]
        volume = _enclosed_mm3(points, triangles)
        return _Label(points, triangles, tree, points[keep], share, _unit(np.stack(sums, axis=1)), volume)

    def thinned(self, most: int) -> _Label:
        """The same label with every k-th sample only."""
        k = max(1, -(-len(self.sample) // most))
        return replace(self, sample=self.sample[::k].copy(), weight=self.weight[::k] * k)

    def nearest(self, queries: Floats, guess: Ints | None) -> tuple[Floats, Floats, Ints]:
        """Closest points, normals there, and their triangles: a good guess for queries that moved a little.

        Normals are interpolated between the points of a triangle, so that they do not jump at its edges.
        """
        triangle, barycentric, _ = closest.closest(
            self.tree, self.points, self.triangles, queries, guess=guess
        )
        corners = self.triangles[triangle]
        place = np.einsum("qk,qkd->qd", barycentric, self.points[corners])
        return place, np.einsum("qk,qkd->qd", barycentric, self.normals[corners]), triangle


_Bodies = tuple[list[_Label], list[_Label]]


def _unit(vectors: Floats) -> Floats:
    return np.asarray(vectors / np.maximum(np.linalg.norm(vectors, axis=1, keepdims=True), 1e-300))


def _enclosed_mm3(points: Floats, triangles: Ints) -> float:
    """Volume inside a closed surface (divergence theorem)."""
    a, b, c = np.moveaxis((points - points.mean(axis=0))[triangles], 1, 0)
    return float(np.einsum("ij,ij->", np.cross(a, b), c) / 6.0)


def _change(before: Floats, after: Floats, points: Floats) -> float:
    """Largest move of any point between two affines, as a share of the images' spread."""
    difference = after - before
    moves = points @ difference[:3, :3].T + difference[:3, 3]
    spread = np.sqrt((points @ after[:3, :3].T).var(axis=0).sum())
    return float(np.sqrt((moves**2).sum(axis=1).max()) / spread)


@dataclass(frozen=True)
class _Matches:
    """Points of the source, their anchors on the target, normals there, and weights."""

    points: Floats
    anchors: Floats
    normals: Floats
    weights: Floats

    def rms(self, matrix: Floats) -> float:
        gap = self.points @ matrix[:3, :3].T + matrix[:3, 3] - self.anchors
        return float(np.sqrt(self.weights @ (gap**2).sum(axis=1) / self.weights.sum()))


@dataclass(eq=False)
class _Run:
    """One start on its way: where it lies, and the triangles last found nearest, label by label."""

    name: str
    matrix: Floats
    guesses: list[Ints | None] = field(default_factory=list)

    def matches(self, bodies: _Bodies) -> _Matches:
        """Closest points in both directions, for every label."""
        inverse = np.linalg.inv(self.matrix)
        guesses = self.guesses or [None] * (2 * len(bodies[0]))
        points, anchors, normals, weights = [], [], [], []
        for k, (s, t) in enumerate(zip(*bodies, strict=True)):
            moved = s.sample @ self.matrix[:3, :3].T + self.matrix[:3, 3]
            there, facing, ahead = t.nearest(moved, guesses[2 * k])
            moved = t.sample @ inverse[:3, :3].T + inverse[:3, 3]
            here, looking, back = s.nearest(moved, guesses[2 * k + 1])
            points += [s.sample, here]
            anchors += [there, t.sample]
            normals += [_unit(facing), _unit(looking @ inverse[:3, :3])]
            weights += [s.weight, t.weight]
            guesses[2 * k : 2 * k + 2] = ahead, back
        self.guesses = guesses
        return _Matches(*(np.concatenate(x) for x in (points, anchors, normals, weights)))

    def refine(self, bodies: _Bodies, scale: float | None, rounds: int) -> None:
        """Closest points and least squares in turn, until at rest; rigid at a scale, or affine for None."""
        self.guesses = []
        first = self.matrix
        for _ in range(rounds):
            m = self.matches(bodies)
            before = self.matrix
            if scale is None:
                self.matrix = fit_affine(
                    m.points,
                    m.anchors,
                    m.weights,
                    normals=m.normals,
                    across=ACROSS,
                    before=first,
                    hold=HOLD,
                )
            else:
                self.matrix = fit_rigid(m.points, m.anchors, m.weights, scale=scale)
            if _change(before, self.matrix, m.points) < AT_REST:
                break

    def alignment(self, bodies: _Bodies) -> Alignment:
        return Alignment(self.name, self.matrix, self.matches(bodies).rms(self.matrix))


def _moments(labels: list[_Label]) -> tuple[Floats, Floats, Floats]:
    """Weighted mean and principal axes of all samples; centre of each label."""
    points = np.concatenate([x.sample for x in labels])
    weight = np.concatenate([x.weight for x in labels])
    w = (weight / weight.sum())[:, None]
    mean = (w * points).sum(axis=0)
    _, axes = np.linalg.eigh((w * (points - mean)).T @ (points - mean))
    centres = np.stack([(x.weight[:, None] * x.sample).sum(axis=0) / x.weight.sum() for x in labels])
    return mean, axes, centres


def _starts(bodies: _Bodies, guides: LandmarkPairs | None, growth: float) -> list[tuple[str, Floats]]:
    """Every start by name; all but 'world' enlarge the source to the target's volume."""
    source, target = bodies
    mean_s, axes_s, centres_s = _moments(source)
    mean_t, axes_t, centres_t = _moments(target)
    even = growth * np.eye(3)
    starts = [("world", np.eye(4)), ("centres", homogeneous(even, mean_t - growth * mean_s))]
    if len(source) >= 3:
        fitted = fit_rigid(centres_s, centres_t, np.ones(len(source)), scale=growth)
        starts.append(("label centres", fitted))
    if guides is not None and len(guides.names) >= 3:
        fitted = fit_rigid(guides.points, guides.to_points, np.ones(len(guides.names)), scale=growth)
        starts.append(("guides", fitted))
    for k, signs in enumerate(([1, 1, 1], [1, -1, -1], [-1, 1, -1], [-1, -1, 1])):
        turn = axes_t @ np.diag(signs) @ axes_s.T
        if np.linalg.det(turn) < 0:
            turn = axes_t @ np.diag([-signs[0], signs[1], signs[2]]) @ axes_s.T
        starts.append(
            (f"principal axes {k + 1}", homogeneous(growth * turn, mean_t - growth * turn @ mean_s))
        )
    return starts


def align(
    source: Surface,
    target: Surface,
    *,
    start: str = "auto",
    guides: LandmarkPairs | None = None,
    seed: int = 0,
) -> tuple[Alignment, tuple[Alignment, ...]]:
    """The best affine start, and all that were tried.

    Parameters
    ----------
    source, target : Surface
        With the same labels.
    start : str
        'auto', or the name of one start.
    guides : LandmarkPairs, optional
        They decide between starts that fit equally well; three or more give a start of their own.
    seed : int

    Raises
    ------
    InputError
        No start of that name.
    """
    rng = np.random.default_rng(seed)
    labels = sorted({int(v) for v in np.unique(source.sides) if v})
    here, there = ([_Label.of(surface, label, rng) for label in labels] for surface in (source, target))
    bodies = here, there
    growth = np.cbrt(sum(x.volume_mm3 for x in bodies[1]) / sum(x.volume_mm3 for x in bodies[0]))
    runs = [_Run(name, m) for name, m in _starts(bodies, guides, growth) if start in ("auto", name)]
    if not runs:
        raise InputError("this start does not exist for these scans", where="start", found=start)
    tried = _raced(runs, bodies, growth)
    best = min(a.residual_mm for a in tried)
    rough_mm = ROUGH * median_side_mm(target)
    equal = [a for a in tried if a.residual_mm <= NEARLY_EQUAL * best + rough_mm]
    if guides is not None and len(guides.names):
        nearest_mm = min(_guides_mm(a, guides) for a in equal)
        equal = [a for a in equal if _guides_mm(a, guides) <= NEARLY_EQUAL * nearest_mm + rough_mm]
    return min(equal, key=lambda a: round(a.rotation_deg, 1)), tried


def median_side_mm(surface: Surface) -> float:
    """Median of the first side of every triangle, mm: how long an edge is."""
    sides = surface.points[surface.triangles[:, 1]] - surface.points[surface.triangles[:, 0]]
    return float(np.median(np.linalg.norm(sides, axis=1)))


def _guides_mm(alignment: Alignment, guides: LandmarkPairs) -> float:
    """Root mean square distance at which an alignment leaves the guides, weighted by 1 / sd^2."""
    assert guides.sd_mm is not None
    gap = alignment.apply(guides.points) - guides.to_points
    return float(np.sqrt(np.average((gap**2).sum(axis=1), weights=guides.sd_mm**-2.0)))


def _raced(runs: list[_Run], bodies: _Bodies, growth: float) -> tuple[Alignment, ...]:
    """Where every start ends; those that run into an earlier one end where that one does."""
    few = [x.thinned(FEW_SAMPLES) for x in bodies[0]], [x.thinned(FEW_SAMPLES) for x in bodies[1]]
    points = np.concatenate([label.sample for label in few[0]])
    leader = {run: run for run in runs}
    ended: dict[_Run, Alignment] = {}
    running = runs
    for lap in LAPS:
        here = bodies if lap.all_samples else few
        ahead: list[_Run] = []
        for run in running:
            run.refine(here, growth if lap.rigid else None, lap.rounds)
            met = [r for r in ahead if _change(r.matrix, run.matrix, points) < SAME_PLACE]
            if met:
                leader = {r: met[0] if to is run else to for r, to in leader.items()}
            else:
                ahead.append(run)
                ended[run] = run.alignment(here)
        best = min(ended[r].residual_mm for r in ahead)
        running = [r for r in ahead if ended[r].residual_mm <= lap.hopeless * best + NO_GAP_MM]
    return tuple(replace(ended[leader[run]], name=run.name) for run in runs)
