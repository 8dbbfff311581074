"""A sampled field used as a user would, and how far that is from the exact map."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from volmap.kernels.trilinear import homecoming, sample
from volmap.types import GridField, InputError, VolumeMap

N_RANDOM = 100_000


def sample_field(
    field: GridField, points: NDArray[np.float64]
) -> tuple[NDArray[np.float64], NDArray[np.bool_]]:
    """Displacements between voxel centres, trilinear.

    Parameters
    ----------
    field : GridField
    points : (n, 3) float64, mm, RAS+
        In the world of the field's grid.

    Returns
    -------
    displacement : (n, 3) float64, mm
        NaN where not inside.
    inside : (n,) bool
        True where every voxel with a share in the answer is defined.
    """
    displacement = sample(field.displacement, field.grid.to_index(points))
    return displacement, ~np.isnan(displacement[:, 0])


@dataclass(frozen=True)
class RoundTrip:
    """There by one field and back by the other.

    Parameters
    ----------
    mean_mm, p95_mm, max_mm : float
        Distance between a voxel centre and where it comes back to; NaN when nothing was measured.
    coverage : float
        Part of the supported voxels for which the way back was defined (the image of a voxel near the
        boundary may lie in a cell with an undefined corner).
    n_voxels : int
        Voxels measured.
    worst_mm : tuple of 3 float
        The voxel centre with the largest distance, world mm, RAS+.
    """

    mean_mm: float
    p95_mm: float
    max_mm: float
    coverage: float
    n_voxels: int
    worst_mm: tuple[float, float, float]


def round_trip(there: GridField, back: GridField) -> RoundTrip:
    """Send every supported voxel centre of `there` out and, by trilinear sampling of `back`, home again.

    Parameters
    ----------
    there, back : GridField
        A pair: forward and backward, in either order.

    Raises
    ------
    InputError
        When `there` does not point into the space of `back`, or `back` not into that of `there`.
    """
    if (there.points_into, there.grid_space) != (back.grid_space, back.points_into):
        raise InputError(
            "two fields are not a pair",
            found=f"{there.grid_space} to {there.points_into} and {back.grid_space} to {back.points_into}",
            expected="one to lead back where the other starts",
        )
    to_index = np.asarray(np.linalg.inv(back.grid.affine), np.float64)
    distance = homecoming(there.displacement, back.displacement, there.grid.affine, to_index)
    known = np.flatnonzero(~np.isnan(distance))
    return _summary(there, known, distance.ravel()[known])


def _summary(there: GridField, voxel: NDArray[np.int64], distance: NDArray[np.float32]) -> RoundTrip:
    """Numbers of the voxels (flat, in order) that came home."""
    if not len(voxel):
        nan = float("nan")
        return RoundTrip(nan, nan, nan, 0.0, 0, (nan, nan, nan))
    place = np.unravel_index(voxel[distance.argmax()], there.grid.shape)
    worst = there.grid.to_world(np.array([place], np.float64))[0]
    return RoundTrip(
        mean_mm=float(distance.mean(dtype=np.float64)),
        p95_mm=float(np.percentile(distance, 95)),
        max_mm=float(distance.max()),
        coverage=len(voxel) / int(np.count_nonzero(there.support)),
        n_voxels=len(voxel),
        worst_mm=(float(worst[0]), float(worst[1]), float(worst[2])),
    )


@dataclass(frozen=True)
class FieldError:
    """Difference between a sampled field and the map it was sampled from.

    Parameters
    ----------
    mean_mm, p95_mm, max_mm : float
        NaN when nothing was measured.
    n_points : int
        Places measured: those where the trilinear sample is defined.
    """

    mean_mm: float
    p95_mm: float
    max_mm: float
    n_points: int


def field_error(field: GridField, exact: VolumeMap, *, n_random: int = N_RANDOM, seed: int = 0) -> FieldError:
    """Compare at all mesh points, at all tet centroids and at random places spread evenly by volume.

    Mesh points are where a piecewise affine map bends, so the largest difference sits there or close by.

    Parameters
    ----------
    field : GridField
    exact : VolumeMap
        With its mesh in the space of the field's grid: the map for a forward field, ``map.reversed()`` for
        a backward one.
    n_random : int
    seed : int
        Same seed, same places.
    """
    places, images = places_throughout(exact, n_random=n_random, seed=seed)
    found, inside = sample_field(field, places)
    if not inside.any():
        return FieldError(float("nan"), float("nan"), float("nan"), 0)
    error = np.linalg.norm(places + found - images, axis=1)[inside]
    return FieldError(
        float(error.mean()), float(np.percentile(error, 95)), float(error.max()), int(inside.sum())
    )


def places_throughout(
    exact: VolumeMap, *, n_random: int, seed: int
) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Places in the mesh and, without any search, their exact images.

    Parameters
    ----------
    exact : VolumeMap
    n_random : int
    seed : int

    Returns
    -------
    places, images : (n, 3) float64, mm
        All points of the mesh, then a centroid a tet, then `n_random` places spread evenly by volume.
    """
    tets, volumes = exact.mesh.tets, np.abs(exact.mesh.volumes)
    random = np.random.default_rng(seed)
    tet = np.searchsorted(np.cumsum(volumes), random.random(n_random) * volumes.sum())
    tet = np.concatenate([np.arange(len(tets)), np.minimum(tet, len(tets) - 1)])
    weights = random.dirichlet(np.ones(4), len(tet))  # uniform in a tet
    weights[: len(tets)] = 0.25

    def at(values: NDArray[np.float64]) -> NDArray[np.float64]:
        inner = np.zeros((len(tet), 3))
        for a in range(4):
            inner += weights[:, a, None] * values[tets[tet, a]]
        return np.concatenate([values, inner])

    return at(exact.mesh.points), at(exact.images)
