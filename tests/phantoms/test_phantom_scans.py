"""Grids, shells, slabs and twins as the scanner sees them."""

import nibabel
import numpy as np
import pytest
from scipy.ndimage import binary_dilation
from scipy.ndimage import label as pieces
from skimage.measure import euler_number
from volmap_phantoms import make, names
from volmap_phantoms.scanner import Protocol, grid_around
from volmap_phantoms.twin_bodies import BODIES

from volmap.types import InputError


@pytest.mark.parametrize("code", ["RAS", "LPS", "PIR", "SAL", "ILP"])
def test_untilted_grid_has_the_code_it_was_given(code):
    # independent library: nibabel's orientation letters; and the margin holds on all sides
    points = np.random.default_rng(0).uniform(-20, 30, (500, 3))
    grid = grid_around(points, Protocol((1.0, 1.5, 2.0), code, margin_mm=5.0))
    assert "".join(nibabel.aff2axcodes(grid.affine)) == code
    index = grid.to_index(points)
    room = np.minimum(index.min(axis=0), np.array(grid.shape) - 1 - index.max(axis=0)) * grid.spacing
    assert room.min() > 5.0 - 1e-4
    assert room.max() < 5.0 + 2.0


def test_tilted_grid_has_its_spacing_no_shear_and_survives_float32():
    points = np.random.default_rng(0).uniform(-20, 30, (500, 3))
    grid = grid_around(points, Protocol((0.9, 0.9, 2.0), "LPS", (9.0, -7.0, 14.0)))
    assert grid.spacing == pytest.approx([0.9, 0.9, 2.0], abs=1e-6)
    assert grid.shear < 1e-6
    assert np.abs(np.array(nibabel.affines.obliquity(grid.affine))).max() > 0.1
    assert np.array_equal(grid.affine, grid.affine.astype(np.float32))
    assert Protocol((0.9, 0.9, 2.0), "LPS").cubic(3.0).spacing_mm == (3.0, 3.0, 3.0)


def test_shell_layers_have_the_volume_of_spheres_and_one_cavity():
    # closed form 4/3 pi (B^3 - A^3); counting errs by under 0.5 % at 1.3 mm; the background is air and cavity
    phantom = make("pressure-shell")
    for k, visit in enumerate(phantom.visits):
        labels = visit.labels.labels
        for label, inner, outer in ((1, 15.0, 23.5), (2, 23.5, 30.0)):
            volume = (labels == label).sum() * visit.labels.grid.voxel_mm3
            assert volume == pytest.approx(4 / 3 * np.pi * (outer**3 - inner**3), rel=5e-3)
        assert pieces(labels == 0)[1] == 2
        ratio = phantom.truth.volume_ratio(visit.beads.points, k, 0)
        assert np.array_equal(ratio, np.ones(24))


def test_slab_keeps_its_volumes_at_every_visit():
    # law: incompressible, so voxel volumes agree between visits within counting error
    phantom = make("folded-slab")
    count = {}
    for k, visit in enumerate(phantom.visits):
        labels = visit.labels.labels
        assert labels[1:-1, 1:-1, 1:-1].sum() == labels.sum()
        count[k] = np.bincount(labels.ravel())[1:] * visit.labels.grid.voxel_mm3
        assert np.array_equal(phantom.truth.labels(visit.beads.points, k) > 0, np.ones(24, bool))
    for k in (1, 2):
        assert count[k] == pytest.approx(count[0], rel=0.025)
        assert count[k].sum() == pytest.approx(count[0].sum(), rel=3e-3)
    start = phantom.visits[0].beads.points
    there = phantom.truth.carry(start, 0, 2)
    assert there == pytest.approx(phantom.visits[2].beads.points, abs=1e-9)
    assert phantom.truth.carry(there, 2, 0) == pytest.approx(start, abs=1e-9)


def test_twins_have_structures_where_their_sites_are_and_no_truth():
    phantom = make("twin-bodies")
    assert phantom.truth is None
    totals = []
    for visit, body in zip(phantom.visits, BODIES, strict=True):
        labels = visit.labels.labels
        assert visit.labels.present == (1, 2, 3, 4)
        assert [pieces(labels == n)[1] for n in (1, 2, 3, 4)] == [1, 1, 1, 1]
        index = np.rint(visit.labels.grid.to_index(visit.beads.points)).astype(int)
        assert labels[tuple(index.T)].tolist() == [2] * 7 + [3] * 7 + [4] * 7
        a, b, c = body.structures[2].semi_axes_mm
        node = (labels == 2).sum() * visit.labels.grid.voxel_mm3
        assert node == pytest.approx(4 / 3 * np.pi * a * b * c, rel=0.03)
        totals.append((labels > 0).sum() * visit.labels.grid.voxel_mm3)
    assert totals[1] / totals[0] == pytest.approx(1.33, abs=0.02)


@pytest.mark.parametrize("name", ["pressure-shell", "twin-bodies", "folded-slab"])
def test_visits_have_one_topology_and_structures_do_not_touch_the_outside(name):
    # law: bodies that one map joins have one set of labels, pieces and Euler numbers; a structure
    # inside keeps two voxels of its surroundings around it, so meshing cannot change that
    shapes = []
    for visit in make(name).visits:
        labels = visit.labels.labels
        shapes.append([(pieces(labels == n)[1], euler_number(labels == n, 3)) for n in visit.labels.present])
        for n in visit.labels.present[1:] if name != "pressure-shell" else ():
            grown = binary_dilation(labels == n, iterations=2)
            assert np.unique(labels[grown]).tolist() == [1, n]
    assert all(shape == shapes[0] for shape in shapes)


def test_the_image_shows_the_labels_and_the_texture_moves_with_the_material():
    phantom = make("pressure-shell", seed=5)
    a, b = phantom.visits[0], phantom.visits[2]
    means = [a.image.values[a.labels.labels == n].mean() for n in (0, 1, 2)]
    assert means == pytest.approx([20, 150, 100], abs=8)
    index = np.argwhere(a.labels.labels == 2)[::5]
    place = phantom.truth.carry(a.labels.grid.to_world(index.astype(float)), 0, 2)
    there = np.rint(b.labels.grid.to_index(place)).astype(int)
    same = b.labels.labels[tuple(there.T)] == 2
    pair = np.corrcoef(a.image.values[tuple(index[same].T)], b.image.values[tuple(there[same].T)])
    unmoved = np.roll(there[same], 500, axis=0)
    other = np.corrcoef(a.image.values[tuple(index[same].T)], b.image.values[tuple(unmoved.T)])
    assert pair[0, 1] > 0.5  # texture sd 18 against noise sd 12: 0.69 without interpolation error
    assert abs(other[0, 1]) < 0.2


def test_seed_moves_noise_and_beads_and_nothing_else():
    one, same, other = (make("pressure-shell", seed=s, voxel_mm=3.0) for s in (1, 1, 2))
    for a, b, c in zip(one.visits, same.visits, other.visits, strict=True):
        assert a.labels.sha256 == b.labels.sha256 == c.labels.sha256
        assert a.image.sha256 == b.image.sha256 != c.image.sha256
        assert np.array_equal(a.beads.points, b.beads.points)
        assert not np.array_equal(a.beads.points, c.beads.points)
        assert a.labels.grid.spacing == pytest.approx([3, 3, 3])


def test_unknown_names_and_silly_voxels_are_refused_in_words():
    assert set(names()) == {"gel-column", "pressure-shell", "twin-bodies", "folded-slab"}
    with pytest.raises(InputError, match=r"no phantom of that name.*gel-column"):
        make("gel-colum")
    with pytest.raises(InputError, match=r"0\.3 to 10 mm"):
        make("pressure-shell", voxel_mm=0.0)
