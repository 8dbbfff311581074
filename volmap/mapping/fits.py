"""Least-squares fits of rigid and affine motions to matched points."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

Floats = NDArray[np.float64]

MOST_STRETCH = 3.0  # an affine is held inside this range of stretches


def homogeneous(linear: Floats, shift: Floats) -> Floats:
    """(4, 4) of a (3, 3) and a shift."""
    matrix = np.eye(4)
    matrix[:3, :3], matrix[:3, 3] = linear, shift
    return matrix


def fit_rigid(points: Floats, anchors: Floats, weight: Floats, *, scale: float = 1.0) -> Floats:
    """Weighted best rotation and shift of points enlarged by `scale` (Kabsch, Acta Cryst. A32, 1976).

    Parameters
    ----------
    points, anchors : (n, 3) float64, mm
    weight : (n,) float64
    scale : float

    Returns
    -------
    (4, 4) float64
    """
    a, b, w = _means(points, anchors, weight)
    u, _, v = np.linalg.svd((w[:, None] * (points - a)).T @ (anchors - b))
    linear = scale * (u @ np.diag([1, 1, np.sign(np.linalg.det(u @ v))]) @ v).T
    return homogeneous(linear, b - linear @ a)


def fit_affine(
    points: Floats,
    anchors: Floats,
    weight: Floats,
    *,
    normals: Floats | None = None,
    across: float = 1.0,
    before: Floats | None = None,
    hold: float = 0.0,
) -> Floats:
    """Weighted least-squares affine, its stretches held inside [1/3, 3].

    With normals, what is left along them counts fully and what is left across them by a share only: matches
    to the closest points of a surface may slide along it, and rounds of matching and fitting end sooner (Chen
    & Medioni, Image and Vision Computing 10(3), 1992).

    Parameters
    ----------
    points, anchors : (n, 3) float64, mm
    weight : (n,) float64
    normals : (n, 3) float64, optional
        Unit vectors at the anchors.
    across : float
        Share of what is left across the normals.
    before : (4, 4) float64, optional
        Where the points were; what moves them from there counts by the share `hold`, so that a round body,
        which may turn freely, stays as it is.
    hold : float

    Returns
    -------
    (4, 4) float64
    """
    a, b, w = _means(points, anchors, weight)
    size = np.sqrt((w[:, None] * (points - a) ** 2).sum())
    x = np.column_stack([(points - a) / size, np.ones(len(points))])
    y = anchors - b
    share = 1.0 if normals is None else across
    wx = w[:, None] * x
    system = share * np.kron(np.eye(3), wx.T @ x)
    right = share * (y.T @ wx).ravel()
    if normals is not None:
        rows = (normals[:, :, None] * x[:, None, :]).reshape(len(x), 12)
        heavy = (1 - share) * w[:, None] * rows
        system += heavy.T @ rows
        right += heavy.T @ (normals * y).sum(axis=1)
    if before is not None:
        system += hold * np.kron(np.eye(3), wx.T @ x)
        right += hold * ((points @ before[:3, :3].T + before[:3, 3] - b).T @ wx).ravel()
    found = np.linalg.solve(system + 1e-12 * np.eye(12), right).reshape(3, 4)
    return _held(found[:, :3] / size, a, b + found[:, 3])


def _means(points: Floats, anchors: Floats, weight: Floats) -> tuple[Floats, Floats, Floats]:
    """Weighted means of both, and weights that sum to one."""
    w = weight / weight.sum()
    return w @ points, w @ anchors, w


def _held(linear: Floats, centre: Floats, image: Floats) -> Floats:
    """The affine that takes a centre to its image, not mirrored, stretches inside their range."""
    u, s, v = np.linalg.svd(linear)
    if np.linalg.det(u @ v) < 0:
        v[2] = -v[2]
    linear = u @ np.diag(np.clip(s, 1 / MOST_STRETCH, MOST_STRETCH)) @ v
    return homogeneous(linear, image - linear @ centre)
