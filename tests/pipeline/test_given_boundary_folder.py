"""A given boundary from file to certificate: kept, stored, certified again, and one map in either order.

The truth of the small pair is known: y = 1.06 x + (1.5, 0, -1), so the given boundary is that affine on a
surface, and inside it must be that affine too (patch test), within the tolerance.
"""

from dataclasses import replace

import numpy as np
import pytest

from volmap import pipeline
from volmap.io.given_boundary import read_given_boundary, write_given_boundary
from volmap.io.nifti import read_labels
from volmap.kernels.surface_map import unit_normals
from volmap.mapfolder import GIVEN, read_map_folder
from volmap.types import GivenBoundary, InputError, Status, Surface, Verdict

TOLERANCE_MM = 0.2


def grown(points):
    return 1.06 * points + (1.5, 0.0, -1.0)


@pytest.fixture(scope="module")
def surface(small_pair) -> Surface:
    """Outer boundary of the source's own mesh."""
    return read_map_folder(small_pair.folder).source_surface


def given_of(surface, images=None, **changes):
    outer = surface.triangles[surface.sides[:, 1] == 0]
    used = np.unique(outer)
    points = surface.points[used]
    images = grown(points) if images is None else images[used]
    given = GivenBoundary(points, np.searchsorted(used, outer), images, TOLERANCE_MM, 3.0, "g.vtp")
    return replace(given, **changes)


@pytest.fixture(scope="module")
def mapped(small_pair, small_job, surface, without_report):
    """The pair mapped from the command's own verb, by a file."""
    write_given_boundary(small_pair.root / "g.vtp", given_of(surface))
    out = small_pair.root / "mit Rand"
    without_report(
        pipeline.map_files,
        small_pair.source,
        small_pair.target,
        out,
        replace(small_job, both_orders=False),
        boundary=small_pair.root / "g.vtp",
        boundary_tolerance_mm=TOLERANCE_MM,
    )
    return out


def test_it_is_kept_and_gives_the_affine_inside(mapped):
    folder = read_map_folder(mapped)
    gate = folder.certificate.gate("given_boundary_mm")
    assert folder.status is Status.SETTLED
    assert gate.verdict is Verdict.PASS
    assert gate.value["max"] <= TOLERANCE_MM
    assert gate.value["coverage"] > 0.98
    centre = np.linalg.norm(folder.map.images - grown(folder.map.mesh.points), axis=1)
    assert np.median(centre) <= TOLERANCE_MM
    assert [row.tolerance_mm for row in folder.giving_way] == pytest.approx(
        [0, TOLERANCE_MM / 2, TOLERANCE_MM, 2 * TOLERANCE_MM, 4 * TOLERANCE_MM]
    )


def test_it_is_stored_and_certified_again_from_the_files(mapped):
    stored = read_given_boundary(mapped / GIVEN)
    assert stored.tolerance_mm == TOLERANCE_MM
    opinion = pipeline.certify_folder(mapped)
    assert opinion.disagreements == ()
    assert opinion.certificate.gate("given_boundary_mm").verdict is Verdict.PASS


def test_another_boundary_in_the_folder_is_noticed(mapped, tmp_path, without_report):
    import shutil

    shutil.copytree(mapped, tmp_path / "m")
    given = read_given_boundary(mapped / GIVEN)
    write_given_boundary(tmp_path / "m" / GIVEN, replace(given, images=given.images + 0.5), overwrite=True)
    opinion = pipeline.certify_folder(tmp_path / "m")
    assert any("given_boundary_mm" in line for line in opinion.disagreements)


def test_in_either_order_it_is_one_map_and_its_inverse(small_pair, small_job, surface):
    """Law: (A, B) with the file and (B, A) with the file reversed; one of the two is solved on its TARGET."""
    a, b = read_labels(small_pair.source), read_labels(small_pair.target)
    job = replace(small_job, both_orders=False)
    images = np.array(grown(surface.points))
    images[:, 0] += 0.5 * np.sin(images[:, 2] / 5)
    given = given_of(surface, images)
    there = pipeline.map_pair(a, b, job, given=given)
    back = pipeline.map_pair(b, a, job, given=given.reversed())
    assert {there.solved_on, back.solved_on} == {"source", "target"}
    np.testing.assert_array_equal(there.map.images, back.map.mesh.points)
    np.testing.assert_array_equal(there.map.mesh.points, back.map.images)
    gates = [folder.certificate.gate("given_boundary_mm") for folder in (there, back)]
    assert gates[0].value["max"] == pytest.approx(gates[1].value["max"])
    assert {gate.verdict for gate in gates} == {Verdict.PASS}


def test_a_planted_fold_is_reported_at_its_place(small_pair, small_job, surface):
    """Two neighbouring points of the surface swapped: no inverted tet, and a place within an edge of them."""
    images = np.array(grown(surface.points))
    outer = surface.triangles[surface.sides[:, 1] == 0]
    normals = np.repeat(unit_normals(surface.points, outer), 3, axis=0)
    sums = np.stack([np.bincount(outer.ravel(), normals[:, i]) for i in range(3)], axis=1)
    flatness = np.linalg.norm(sums, axis=1) / np.maximum(np.bincount(outer.ravel()), 1)
    a, b = max(outer[:, :2].tolist(), key=lambda edge: flatness[edge].min())  # a fold needs a smooth place
    star = np.unique(outer[(outer == a).any(axis=1)])
    images[[a, b]] = images[[b, a]]
    a_volume, b_volume = read_labels(small_pair.source), read_labels(small_pair.target)
    job = replace(small_job, both_orders=False)
    folder = pipeline.map_pair(a_volume, b_volume, job, given=given_of(surface, images))
    gate = folder.certificate.gate("given_boundary_mm")
    assert folder.certificate.gate("inverted_tets").verdict is Verdict.PASS
    assert gate.value["faults"]["folds"] > 0
    edge_mm = np.linalg.norm(surface.points[star] - surface.points[a], axis=1).max()
    assert gate.where
    for place in gate.where:
        apart = np.linalg.norm(surface.points[[a, b]] - place["point_mm"], axis=1).min()
        assert apart <= 1.5 * edge_mm


def test_a_boundary_of_another_body_is_refused_by_name(small_pair, small_job, surface):
    scans = [read_labels(small_pair.source), read_labels(small_pair.target)]
    given = given_of(surface)
    with pytest.raises(InputError, match=r"g\.vtp: the surface does not lie on SOURCE's boundary") as caught:
        pipeline.map_pair(*scans, small_job, given=replace(given, points=given.points + 300.0))
    assert caught.value.refused
