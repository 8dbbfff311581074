"""What the residual of the boundaries would do inside: the smoothest displacement that mends them all.

Where the map's surfaces of labels are moved onto the scans' own, the inside has to follow.  Its displacement
w is taken as harmonic (each component a solution of Laplace's equation with the residual as boundary values,
the smoothest one in the sense of Dirichlet), with linear finite elements on the map's own tets.  By the
divergence theorem the integral of div w over a label is the integral of w . n over its surface, so for a
region that is a label this says what `uncertainty` says of the label's difference.
"""

from __future__ import annotations

from collections.abc import Mapping

import numpy as np
from numpy.typing import NDArray
from scipy.sparse import coo_array, csr_array
from scipy.sparse.linalg import LinearOperator, cg

from volmap.kernels.tets import shape_gradients
from volmap.measure.residual import Residual
from volmap.types import TetMesh

Floats = NDArray[np.float64]
MOST_STEPS = 3000
_LAZINESS = 0.01  # keeps a point from sliding along faces that are nearly level, a hundredth of their pull


def mending_divergence(mesh: TetMesh, residuals: Mapping[int, Residual]) -> Floats | None:
    """Divergence of the displacement that moves the labels' surfaces onto the scan's.

    Parameters
    ----------
    mesh : TetMesh
        The map's body in one world.
    residuals : mapping of int to Residual
        Of each label there, from ``mesh.interfaces.of_label(label)``.

    Returns
    -------
    (m,) float64 or None
        Of each tet: its share of its volume to be gained.  None when the mesh is not valid, no residual is
        known, or the equations were not solved.
    """
    if not residuals or (mesh.volumes <= 0).any():
        return None
    points, moves = _at_points(mesh, residuals)
    return harmonic_divergence(mesh, points, moves)


def _at_points(mesh: TetMesh, residuals: Mapping[int, Residual]) -> tuple[NDArray[np.int64], Floats]:
    """Points of the mesh on surfaces of labels, and the move of each that brings its faces onto the scan's.

    Each face asks for its own way along its own normal; the move is the least-squares answer, by area, so
    that corners move out with all of their faces (quadrics: Garland & Heckbert, SIGGRAPH 1997, from memory).
    """
    n = len(mesh.points)
    weight, matrix, right = np.zeros(n), np.zeros((n, 3, 3)), np.zeros((n, 3))
    for label, residual in residuals.items():
        triangles, ways = mesh.interfaces.of_label(label).triangles, residual.to_scan
        corners = mesh.points[triangles]
        cross = np.cross(corners[:, 1] - corners[:, 0], corners[:, 2] - corners[:, 0])
        areas = np.linalg.norm(cross, axis=1) / 2
        normals = cross / np.maximum(2 * areas, 1e-300)[:, None]
        pieces = (ways.offset_mm * ways.areas).reshape(-1, 3).sum(axis=1)
        for corner in triangles.T:
            weight += np.bincount(corner, areas, n)
            for d in range(3):
                right[:, d] += np.bincount(corner, pieces * normals[:, d], n)
                for e in range(3):
                    matrix[:, d, e] += np.bincount(corner, areas * normals[:, d] * normals[:, e], n)
    points = np.flatnonzero(weight > 0)
    held = matrix[points] + _LAZINESS * weight[points, None, None] * np.eye(3)
    return points, np.asarray(np.linalg.solve(held, right[points, :, None])[..., 0], np.float64)


def harmonic_divergence(mesh: TetMesh, points: NDArray[np.int64], moves: Floats) -> Floats | None:
    """Divergence of the harmonic displacement with given values at some points.

    Parameters
    ----------
    mesh : TetMesh
        Every tet positive.
    points : (k,) int64
        Among them every point of the outer boundary.
    moves : (k, 3) float64, mm

    Returns
    -------
    (m,) float64 or None
        None when the equations were not solved to 1e-8.
    """
    n = len(mesh.points)
    gradients = shape_gradients(mesh.points, mesh.tets)
    stiffness = _stiffness(mesh, gradients)
    moved = np.zeros((n, 3))
    moved[points] = moves
    free = np.ones(n, bool)
    free[points] = False
    free &= np.bincount(mesh.tets.ravel(), minlength=n) > 0
    inner = np.flatnonzero(free)
    if len(inner):
        matrix = csr_array(stiffness[inner][:, inner])
        inverse = 1.0 / matrix.diagonal()
        scaled = LinearOperator(matrix.shape, matvec=lambda v: inverse * np.ravel(v), dtype=np.float64)
        right = -(stiffness @ moved)[inner]
        for d in range(3):
            moved[inner, d], left = cg(matrix, right[:, d], rtol=1e-8, maxiter=MOST_STEPS, M=scaled)
            if left:
                return None
    return np.asarray(np.einsum("mad,mad->m", gradients, moved[mesh.tets]))


def _stiffness(mesh: TetMesh, gradients: Floats) -> csr_array:
    """(n, n) of Laplace's equation with linear elements."""
    local = np.einsum("mad,mbd,m->mab", gradients, gradients, mesh.volumes)
    rows = np.repeat(mesh.tets, 4, axis=1).ravel()
    columns = np.tile(mesh.tets, (1, 4)).ravel()
    n = len(mesh.points)
    return csr_array(coo_array((local.ravel(), (rows, columns)), shape=(n, n)))
