"""Small phantoms whose motion is known from elsewhere: a finite-element simulation and a closed form."""

import numpy as np
import pytest

from volmap.kernels import locate
from volmap.mapping import map_mesh
from volmap.mesh import MeshSettings, mesh
from volmap.types import Status


def carried(volume_map, points):
    """Points of the source by barycentric coordinates."""
    corners, tets = np.array(volume_map.mesh.points), np.array(volume_map.mesh.tets)
    tet, weights = locate.locate(locate.build_buckets(corners, tets), corners, tets, np.array(points))
    assert (tet >= 0).all()
    return np.einsum("kc,kcd->kd", weights, volume_map.images[tets[tet]])


def test_pressure_shell_keeps_its_volume(shell_phantom, shell):
    """Closed form: incompressible, J = 1 everywhere; and every point moves along its radius."""
    body, target = shell
    outcome = map_mesh(body, target, voxel_mm=2.0).outcome
    assert outcome.status is Status.SETTLED
    assert np.abs(outcome.map.volume_ratio_at_points - 1).mean() <= 0.02
    truth = shell_phantom.truth.carry(body.points, 0, 1)
    known = np.isfinite(truth).all(axis=1)
    assert known.mean() > 0.7
    error = np.linalg.norm(outcome.map.images - truth, axis=1)[known]
    moved = np.linalg.norm(truth - body.points, axis=1)[known]
    assert error.mean() < 0.5 * moved.mean()


@pytest.fixture(scope="module")
def column():
    import volmap_phantoms

    phantom = volmap_phantoms.make("gel-column", voxel_mm=2.5)
    meshes = [mesh(v.labels, MeshSettings(wanted_tets=5000)).mesh for v in phantom.visits[:2]]
    return phantom, meshes


def test_gel_column_beads(column):
    """Simulated truth; beads never shown to the solver.  Limits of TG-132, half the affine baseline."""
    phantom, (body, target) = column
    result = map_mesh(body, target.interfaces, voxel_mm=2.5)
    before, after = (v.beads.points for v in phantom.visits[:2])
    error = np.linalg.norm(carried(result.outcome.map, before) - after, axis=1)
    baseline = np.linalg.norm(result.alignment.apply(before) - after, axis=1)
    assert result.outcome.status is Status.SETTLED
    assert error.mean() <= 2.5
    assert error.mean() <= 0.5 * baseline.mean()
    assert np.percentile(error, 95) <= 2.0
    assert error.max() <= 5.0
