"""Where to start: rigid and affine alignments of two labelled surfaces.

Several starts are refined by alternating closest points and least squares (Besl & McKay, IEEE PAMI 14(2),
1992), first rigid, then affine; the smallest residual wins, and among nearly equal ones the smallest
rotation.
"""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from volmap.kernels import closest
from volmap.mapping.patches import areas
from volmap.types import InputError, LandmarkPairs, Surface

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]

SAMPLES = 1000  # points a label at most
SCREEN_SAMPLES, SCREEN_ROUNDS = 200, 15  # for the first look at every start
ROUNDS = 40  # for those that are still near the best
HOPELESS = 1.5  # starts whose residual is larger than this factor times the best are not refined further
DOUBTFUL = 1.25  # residuals within this factor of the chosen one leave doubt when they are turned otherwise
OTHERWISE_DEG = 45.0  # between two alignments that are not the same place
NEARLY_EQUAL = 1.05  # residuals within this factor of the best count as equal
AT_REST = 1e-4  # share of the body's size by which no point moves any more
MOST_STRETCH = 3.0  # an affine start is held inside this range of stretches


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
        return _Label(points, triangles, closest.build_tree(points, triangles), points[keep], share)

    def thinned(self, most: int) -> _Label:
        """The same label with every k-th sample only."""
        k = max(1, -(-len(self.sample) // most))
        return replace(self, sample=self.sample[::k].copy(), weight=self.weight[::k] * k)

    def nearest(self, queries: Floats) -> Floats:
        triangle, barycentric, _ = closest.closest(self.tree, self.points, self.triangles, queries)
        return np.asarray(np.einsum("qk,qkd->qd", barycentric, self.points[self.triangles[triangle]]))


def _homogeneous(linear: Floats, shift: Floats) -> Floats:
    matrix = np.eye(4)
    matrix[:3, :3], matrix[:3, 3] = linear, shift
    return matrix


def fit_rigid(points: Floats, anchors: Floats, weight: Floats) -> Floats:
    """Weighted best rotation and shift, (4, 4) (Kabsch, Acta Cryst. A32, 1976)."""
    w = (weight / weight.sum())[:, None]
    a, b = (w * points).sum(axis=0), (w * anchors).sum(axis=0)
    u, _, v = np.linalg.svd((w * (points - a)).T @ (anchors - b))
    rotation = (u @ np.diag([1, 1, np.sign(np.linalg.det(u @ v))]) @ v).T
    return _homogeneous(rotation, b - rotation @ a)


def fit_affine(points: Floats, anchors: Floats, weight: Floats) -> Floats:
    """Weighted least-squares affine, (4, 4), its stretches held inside [1/3, 3]."""
    w = (weight / weight.sum())[:, None]
    a, b = (w * points).sum(axis=0), (w * anchors).sum(axis=0)
    x, y = points - a, anchors - b
    spread = (w * x).T @ x
    linear = np.linalg.solve(spread + 1e-12 * np.trace(spread) * np.eye(3), (w * x).T @ y).T
    u, s, v = np.linalg.svd(linear)
    if np.linalg.det(u @ v) < 0:
        v[2] = -v[2]
    linear = u @ np.diag(np.clip(s, 1 / MOST_STRETCH, MOST_STRETCH)) @ v
    return _homogeneous(linear, b - linear @ a)


def _pairs(source: list[_Label], target: list[_Label], matrix: Floats) -> tuple[Floats, Floats, Floats]:
    """Matched points, anchors and weights in both directions, for every label."""
    inverse = np.linalg.inv(matrix)
    points, anchors, weights = [], [], []
    for s, t in zip(source, target, strict=True):
        points.append(s.sample)
        anchors.append(t.nearest(s.sample @ matrix[:3, :3].T + matrix[:3, 3]))
        points.append(s.nearest(t.sample @ inverse[:3, :3].T + inverse[:3, 3]))
        anchors.append(t.sample)
        weights += [s.weight, t.weight]
    return np.concatenate(points), np.concatenate(anchors), np.concatenate(weights)


def _change(before: Floats, after: Floats, points: Floats) -> float:
    """Largest move of any point between two affines, as a share of the points' spread."""
    difference = after - before
    moves = points @ difference[:3, :3].T + difference[:3, 3]
    return float(np.linalg.norm(moves, axis=1).max() / np.sqrt(points.var(axis=0).sum()))


def _refine(
    source: list[_Label], target: list[_Label], matrix: Floats, *, name: str, rounds: int, rigid: bool
) -> Alignment:
    for fit in (fit_rigid, fit_affine) if rigid else (fit_affine,):
        for _ in range(rounds):
            points, anchors, weights = _pairs(source, target, matrix)
            before, matrix = matrix, fit(points, anchors, weights)
            if _change(before, matrix, points) < AT_REST:
                break
    points, anchors, weights = _pairs(source, target, matrix)
    gap = points @ matrix[:3, :3].T + matrix[:3, 3] - anchors
    rms = float(np.sqrt((weights * (gap**2).sum(axis=1)).sum() / weights.sum()))
    return Alignment(name, matrix, rms)


def _moments(labels: list[_Label]) -> tuple[Floats, Floats, Floats]:
    """Weighted mean and principal axes of all samples; centre of each label."""
    points = np.concatenate([x.sample for x in labels])
    weight = np.concatenate([x.weight for x in labels])
    w = (weight / weight.sum())[:, None]
    mean = (w * points).sum(axis=0)
    _, axes = np.linalg.eigh((w * (points - mean)).T @ (points - mean))
    centres = np.stack([(x.weight[:, None] * x.sample).sum(axis=0) / x.weight.sum() for x in labels])
    return mean, axes, centres


def _starts(
    source: list[_Label], target: list[_Label], guides: LandmarkPairs | None
) -> list[tuple[str, Floats]]:
    mean_s, axes_s, centres_s = _moments(source)
    mean_t, axes_t, centres_t = _moments(target)
    starts = [("world", np.eye(4)), ("centres", _homogeneous(np.eye(3), mean_t - mean_s))]
    if len(source) >= 3:
        starts.append(("label centres", fit_rigid(centres_s, centres_t, np.ones(len(source)))))
    if guides is not None and len(guides.names) >= 3:
        starts.append(("guides", fit_rigid(guides.points, guides.to_points, np.ones(len(guides.names)))))
    for k, signs in enumerate(([1, 1, 1], [1, -1, -1], [-1, 1, -1], [-1, -1, 1])):
        turn = axes_t @ np.diag(signs) @ axes_s.T
        if np.linalg.det(turn) < 0:
            turn = axes_t @ np.diag([-signs[0], signs[1], signs[2]]) @ axes_s.T
        starts.append((f"principal axes {k + 1}", _homogeneous(turn, mean_t - turn @ mean_s)))
    return starts


def doubts(chosen: Alignment, tried: tuple[Alignment, ...]) -> tuple[str, ...]:
    """A sentence when another start fits nearly as well as the chosen one, but turned otherwise."""
    others = [a for a in tried if a.residual_mm <= DOUBTFUL * chosen.residual_mm]
    angles = {a: _angle_deg(np.linalg.inv(chosen.matrix) @ a.matrix) for a in others}
    turned = [a for a in others if angles[a] > OTHERWISE_DEG]
    if not turned:
        return ()
    other = min(turned, key=lambda a: a.residual_mm)
    return (
        f"How the bodies lie on each other is in doubt: start '{other.name}' fits about as well as "
        f"'{chosen.name}' ({other.residual_mm:.2f} mm and {chosen.residual_mm:.2f} mm), but turned by "
        f"{angles[other]:.0f} degrees against it; check with landmarks, or give three guides.",
    )


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
        Three or more give a start of their own.
    seed : int

    Raises
    ------
    InputError
        No start of that name.
    """
    rng = np.random.default_rng(seed)
    labels = sorted({int(v) for v in np.unique(source.sides) if v})
    bodies = [[_Label.of(surface, label, rng) for label in labels] for surface in (source, target)]
    thin = [[label.thinned(SCREEN_SAMPLES) for label in body] for body in bodies]
    tried = [
        _refine(thin[0], thin[1], matrix, name=name, rounds=SCREEN_ROUNDS, rigid=True)
        for name, matrix in _starts(bodies[0], bodies[1], guides)
        if start in ("auto", name)
    ]
    if not tried:
        raise InputError("this start does not exist for these scans", where="start", found=start)
    best = min(a.residual_mm for a in tried)
    tried = [
        _refine(bodies[0], bodies[1], a.matrix, name=a.name, rounds=ROUNDS, rigid=False)
        if a.residual_mm <= HOPELESS * best
        else a
        for a in tried
    ]
    best = min(a.residual_mm for a in tried)
    equal = [a for a in tried if a.residual_mm <= NEARLY_EQUAL * best]
    return min(equal, key=lambda a: round(a.rotation_deg, 1)), tuple(tried)
