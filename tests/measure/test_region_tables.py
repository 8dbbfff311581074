"""Rows of measures: closed forms, exact volumes, and slow twins of the weighted statistics."""

from fractions import Fraction

import numpy as np
import pytest
from bodies import cubes
from exact_volumes import exact_volume

from volmap import measure
from volmap.kernels.statistics import weighted_quantiles
from volmap.measure import ChangeUncertainty, Reliability, VolumeUncertainty
from volmap.types import Grid, LabelVolume, VolumeMap

STRETCH = np.array([[1.2, 0.1, 0.0], [0.0, 0.9, 0.2], [0.0, 0.0, 1.1]])  # det 1.188


def body():
    return cubes((6, 5, 4), (12.0, 10.0, 8.0), label_of=lambda c: np.where(c[:, 0] > 6, 2, 1))


def random_map(seed=0):
    """A map with another gradient in every tet."""
    mesh = body()
    rng = np.random.default_rng(seed)
    return VolumeMap(mesh, mesh.points @ STRETCH.T + rng.normal(0, 0.12, mesh.points.shape))


def scans(shape=(14, 12, 10)):
    """Two volumes whose voxel counts are known: label 1 and 2, voxels of 1 and of 2 mm3."""
    labels = np.zeros(shape, np.uint16)
    labels[1:7, 1:11, 1:9], labels[7:13, 1:11, 1:9] = 1, 2
    near = Grid(shape, np.diag([1.0, 1, 1, 1]))
    far = Grid(shape, np.diag([2.0, 1, 1, 1]))
    names = {1: "left", 2: "right"}
    return LabelVolume(near, labels, names, "a"), LabelVolume(far, labels, names, "b")


def trusted(volume_map, bad=()):
    against = np.zeros((len(volume_map.mesh.tets), len(measure.REASONS)), bool)
    against[list(bad), 1] = True
    return Reliability(against)


def table_of(volume_map, regions, *, reliable=None, uncertainties=None):
    return measure.region_table(
        volume_map,
        regions,
        reliable=reliable or trusted(volume_map),
        uncertainties=uncertainties or [ChangeUncertainty()] * len(regions),
        verdict="pass",
        about={"schema": "test"},
    )


def row(table, number):
    at = list(table["region"]).index(number)
    return {column.header: column.values[at] for column in table.columns}


def test_an_affine_map_has_its_determinant_and_singular_values_everywhere():
    mesh = body()
    volume_map = VolumeMap(mesh, mesh.points @ STRETCH.T + 5.0)
    table = table_of(volume_map, measure.label_regions(volume_map, *scans()))
    stretches = np.linalg.svd(STRETCH, compute_uv=False)
    for number in (1, 2):
        found = row(table, number)
        assert found["volume_source_mm3"] == pytest.approx(480.0, rel=1e-12)
        assert found["volume_target_mm3"] == pytest.approx(480.0 * 1.188, rel=1e-12)
        assert found["volume_change_percent"] == pytest.approx(18.8, rel=1e-9)
        for key in ("p1", "p50", "p99", "mean", "min", "max"):
            assert found[f"volume_ratio_{key}_1"] == pytest.approx(1.188, rel=1e-9)
            for name, value in zip(("largest", "middle", "smallest"), stretches, strict=True):
                assert found[f"stretch_{name}_{key}_1"] == pytest.approx(value, rel=1e-9)
        assert found["log_volume_ratio_mean_1"] == pytest.approx(np.log(1.188), rel=1e-9)


def test_volumes_of_labels_are_those_of_the_tets_and_of_the_voxels():
    volume_map = random_map()
    table = table_of(volume_map, measure.label_regions(volume_map, *scans()))
    for number in (1, 2):
        found, own = row(table, number), volume_map.mesh.tets[volume_map.mesh.labels == number]
        for key, points in (("source", volume_map.mesh.points), ("target", volume_map.images)):
            exact = sum((exact_volume(points[t]) for t in own), Fraction(0)) / 6
            assert found[f"volume_{key}_mm3"] == pytest.approx(float(exact), rel=1e-12)
        assert found["volume_source_voxels_mm3"] == 480.0  # 6 x 10 x 8 voxels of 1 mm3
        assert found["volume_target_voxels_mm3"] == 960.0
        assert found["volume_change_voxels_percent"] == 100.0
        # law: the mean of J weighted by volume in SOURCE is the ratio of the volumes
        ratio = found["volume_target_mm3"] / found["volume_source_mm3"]
        assert found["volume_ratio_mean_1"] == pytest.approx(ratio, rel=1e-12)


@pytest.mark.parametrize("seed", range(4))
def test_quantiles_weighted_by_volume_twin(seed):
    # slow twin: weights that are whole numbers, so each value can be written down that many times
    rng = np.random.default_rng(seed)
    values, weights = rng.choice(rng.normal(size=30), 80), rng.integers(1, 9, 80)
    spelled_out = np.sort(np.repeat(values, weights))
    shares = (0.01, 0.1, 0.5, 0.9, 0.99, 1.0)
    at = [int(np.ceil(share * len(spelled_out) - 1e-9)) - 1 for share in shares]
    assert weighted_quantiles(values, weights.astype(float), shares) == list(spelled_out[np.maximum(at, 0)])


def test_statistics_of_a_region_twin():
    volume_map = random_map(1)
    found = row(table_of(volume_map, measure.label_regions(volume_map, *scans())), 2)
    own = volume_map.mesh.labels == 2
    # all tets of this block have one volume, so plain order statistics are the truth
    assert np.ptp(volume_map.mesh.volumes) < 1e-12
    ratio, n = np.sort(np.linalg.det(volume_map.gradients[own])), int(own.sum())
    for key, share in (("p1", 0.01), ("p50", 0.5), ("p99", 0.99)):
        assert found[f"volume_ratio_{key}_1"] == pytest.approx(ratio[int(np.ceil(share * n)) - 1], rel=1e-9)
    assert found["volume_ratio_min_1"] == pytest.approx(ratio[0])
    assert found["volume_ratio_max_1"] == pytest.approx(ratio[-1])


def test_what_is_not_reliable_is_left_out_and_counted():
    volume_map = random_map(2)
    bad = np.flatnonzero(volume_map.mesh.labels == 1)[:90]
    reliable = trusted(volume_map, bad)
    table = table_of(volume_map, measure.label_regions(volume_map, *scans()), reliable=reliable)
    kept = (volume_map.mesh.labels == 1) & reliable.tets
    found = row(table, 1)
    assert found["reliable_percent"] == pytest.approx(100 * kept.sum() / (volume_map.mesh.labels == 1).sum())
    assert found["left_out_boundary_percent"] == pytest.approx(100 - found["reliable_percent"])
    assert found["left_out_gate_percent"] == 0.0
    volumes = volume_map.mesh.volumes
    assert found["volume_source_reliable_mm3"] == pytest.approx(volumes[kept].sum())
    ratio = (volumes * volume_map.volume_ratio)[kept].sum() / volumes[kept].sum()
    assert found["volume_ratio_mean_reliable_1"] == pytest.approx(ratio)
    assert found["volume_ratio_min_reliable_1"] == pytest.approx(volume_map.volume_ratio[kept].min())
    other = row(table, 2)
    assert other["reliable_percent"] == 100.0
    assert other["volume_ratio_p50_reliable_1"] == other["volume_ratio_p50_1"]


def test_nothing_reliable_leaves_its_columns_empty():
    volume_map = random_map(2)
    reliable = trusted(volume_map, range(len(volume_map.mesh.tets)))
    found = row(table_of(volume_map, measure.label_regions(volume_map, *scans()), reliable=reliable), 1)
    assert found["reliable_percent"] == 0.0
    assert np.isnan(found["volume_ratio_p50_reliable_1"])
    assert np.isfinite(found["volume_ratio_p50_1"])


def test_uncertainties_of_both_scans_add_as_squares_and_their_bounds_as_they_are():
    volume_map = random_map()
    known = ChangeUncertainty(VolumeUncertainty(1.0, 3.0, 10.0), VolumeUncertainty(-2.0, 4.0, 20.0))
    table = table_of(volume_map, measure.label_regions(volume_map, *scans()), uncertainties=[known] * 2)
    found = row(table, 1)
    here, there = found["volume_source_mm3"], found["volume_target_mm3"]
    assert found["volume_change_uncertainty_mm3"] == pytest.approx(5.0)
    assert found["volume_change_bound_mm3"] == pytest.approx(30.0)
    assert found["boundary_difference_source_mm3"] == 1.0
    assert found["boundary_difference_target_mm3"] == -2.0
    # slow twin of the first order: draw both volumes and look at the change in %
    rng = np.random.default_rng(1)
    drawn = 100 * ((there + 4 * rng.normal(size=200_000)) / (here + 3 * rng.normal(size=200_000)) - 1)
    assert found["volume_change_uncertainty_percent"] == pytest.approx(np.std(drawn), rel=0.02)


def test_offsets_that_are_known_are_covered_though_they_point_in_opposite_ways():
    # closed form: with the scans' own surfaces the volumes are here - 3 and there + 4, so the change is off
    # by 7 (as squares it would be 5), and the change in % by 4 / here + 3 there / here^2 to first order
    volume_map = random_map()
    known = ChangeUncertainty(VolumeUncertainty(-3.0, 3.0, 3.0), VolumeUncertainty(4.0, 4.0, 4.0))
    table = table_of(volume_map, measure.label_regions(volume_map, *scans()), uncertainties=[known] * 2)
    found = row(table, 1)
    here, there = found["volume_source_mm3"], found["volume_target_mm3"]
    assert found["volume_change_uncertainty_mm3"] == found["volume_change_bound_mm3"] == 7.0
    off = 100 * (4 / here + 3 * there / here**2)
    assert found["volume_change_uncertainty_percent"] == pytest.approx(off, rel=1e-12)


def affine_grid(shape, spacing, origin, turn=0.0):
    c, s = np.cos(turn), np.sin(turn)
    axes = np.array([[c, -s, 0], [s, c, 0], [0, 0, 1]]) @ np.diag(spacing)
    affine = np.eye(4)
    affine[:3, :3], affine[:3, 3] = axes, origin
    return Grid(shape, affine)


@pytest.mark.parametrize("side", ["source", "target"])
def test_a_region_that_cuts_tets_has_its_closed_form(side):
    # y = (f(x), y, z) with slope 1 up to x = 6 and 2 beyond; the region 4.4 < x < 7.4, say, is cut by
    # x = 6 inside voxels and inside tets of other shape: volume by integrating the slope
    mesh = body()
    images = mesh.points.copy()
    images[:, 0] += np.maximum(images[:, 0] - 6, 0)
    volume_map = VolumeMap(mesh, images)
    grid = affine_grid((6, 8, 6), (0.5, 0.75, 1.0), (4.65, 1.4, 1.5))  # voxels' faces at x 4.4 ... 7.4
    labels = np.full(grid.shape, 7, np.uint16)
    (region,) = measure.drawn_regions(volume_map, LabelVolume(grid, labels), side=side)
    across = 6.0 * 6.0  # 8 voxels of 0.75, 6 of 1
    found = row(table_of(volume_map, [region]), 7)
    if side == "source":
        here, there = 3.0 * across, (1.6 + 1.4 * 2) * across
    else:
        here, there = (1.6 + 1.4 / 2) * across, 3.0 * across
    drawn, other = ("source", "target") if side == "source" else ("target", "source")
    assert found[f"volume_{drawn}_voxels_mm3"] == pytest.approx(3.0 * across)
    assert np.isnan(found[f"volume_{other}_voxels_mm3"])
    assert found["inside_percent"] == pytest.approx(100.0)
    assert found["volume_source_mm3"] == pytest.approx(here, rel=1e-9)
    assert found["volume_target_mm3"] == pytest.approx(there, rel=1e-9)
    assert found["drawn_in"] == drawn


@pytest.mark.parametrize("handed", [1, -1])
def test_regions_that_fill_all_of_space_share_out_every_tet(handed):
    # law: labels of an oblique grid that holds the body, none of them 0, together hold each tet once
    volume_map = random_map(5)
    grid = affine_grid((17, 18, 11), (1.3, 1.1, 1.2), (1.0, -8.0, -1.3), 0.4)
    if handed < 0:  # the same voxels, counted backwards along j
        backwards = np.diag([1.0, -1.0, 1.0, 1.0])
        backwards[1, 3] = grid.shape[1] - 1
        grid = Grid(grid.shape, grid.affine @ backwards)
    index = grid.to_index(volume_map.mesh.points)
    assert ((index > -0.5) & (index < np.array(grid.shape) - 0.5)).all()
    labels = np.random.default_rng(3).integers(1, 6, grid.shape).astype(np.uint16)
    regions = measure.drawn_regions(volume_map, LabelVolume(grid, labels), side="source")
    held = np.zeros(len(volume_map.mesh.tets))
    for region in regions:
        held[region.tets] += region.source_mm3
    assert held == pytest.approx(volume_map.mesh.volumes, rel=1e-9)


def test_the_part_outside_the_body_is_counted():
    volume_map = random_map()
    grid = affine_grid((8, 4, 4), (1.0, 1.0, 1.0), (-3.5, 2.5, 2.5))  # x from -4 to 4: half outside
    drawn = LabelVolume(grid, np.ones(grid.shape, np.uint16))
    (region,) = measure.drawn_regions(volume_map, drawn, side="source")
    found = row(table_of(volume_map, [region]), 1)
    assert found["inside_percent"] == pytest.approx(50.0, abs=1e-9)
    assert found["volume_source_voxels_mm3"] == 128.0
    assert found["volume_source_mm3"] == pytest.approx(64.0)


def test_the_same_region_drawn_in_either_scan_measures_the_same():
    # a whole label, drawn in A by its voxels and in B by the voxels of an affine image with its own axes
    mesh = body()
    volume_map = VolumeMap(mesh, mesh.points @ np.diag([1.5, 1.0, 0.5]))
    here = affine_grid((12, 10, 8), (1.0, 1.0, 1.0), (0.5, 0.5, 0.5))
    there = affine_grid((12, 10, 8), (1.5, 1.0, 0.5), (0.75, 0.5, 0.25))
    labels = np.zeros(here.shape, np.uint16)
    labels[3:9, 2:7, 1:6] = 4
    rows = [
        row(table_of(volume_map, measure.drawn_regions(volume_map, LabelVolume(grid, labels), side=side)), 4)
        for grid, side in ((here, "source"), (there, "target"))
    ]
    for key in ("volume_source_mm3", "volume_target_mm3", "volume_ratio_p50_1", "stretch_largest_p50_1"):
        assert rows[0][key] == pytest.approx(rows[1][key], rel=1e-9)
    assert rows[0]["volume_source_mm3"] == pytest.approx(150.0)


def test_the_long_form_says_the_same():
    volume_map = random_map()
    wide = table_of(volume_map, measure.label_regions(volume_map, *scans()))
    long = measure.long_form(wide)
    words = ("region", "name", "drawn_in", "verdict", "failed_gates", "uncertainty_from")
    numbers = [c for c in wide.columns if c.name not in words]
    assert len(long) == 2 * len(numbers)
    told = {
        (int(r), m, u): v
        for r, m, u, v in zip(long["region"], long["measure"], long["unit"], long["value"], strict=True)
    }
    assert len(told) == len(long)
    for column in numbers:
        for at, number in enumerate(wide["region"]):
            np.testing.assert_equal(told[number, column.name, column.unit], column.values[at])


def test_each_tet_and_each_point():
    volume_map = random_map(3)
    reliable = trusted(volume_map, [5])
    told = {"names": {1: "left", 2: "right"}, "verdict": "warn", "about": {}}
    tets = measure.tet_table(volume_map, reliable, **told)
    assert len(tets) == len(volume_map.mesh.tets)
    assert tets["volume_ratio_1"][9] == pytest.approx(np.linalg.det(volume_map.gradients[9]))
    assert list(np.flatnonzero(~tets["reliable"])) == [5]
    assert tets["left_out_for"][5] == "boundary"
    assert tets["image_y_mm"][3] == pytest.approx(volume_map.images[volume_map.mesh.tets[3], 1].mean())
    points = measure.point_table(volume_map, reliable, **told)
    assert len(points) == len(volume_map.mesh.points)
    around = (volume_map.mesh.tets == 100).any(axis=1)
    weights = volume_map.mesh.volumes[around]
    mean = np.average(volume_map.gradients[around], axis=0, weights=weights)
    found = [points[f"stretch_{name}_1"][100] for name in ("largest", "middle", "smallest")]
    assert found == pytest.approx(np.linalg.svd(mean, compute_uv=False))
    assert set(np.flatnonzero(~points["reliable"])) == set(volume_map.mesh.tets[5])
    x = volume_map.mesh.points
    meet = (x == 0).any(1) | (x[:, 0] == 12) | (x[:, 1] == 10) | (x[:, 2] == 8) | (x[:, 0] == 6)
    assert (points["on_boundary"] == meet).all()
    assert (points["label"] == np.where(x[:, 0] > 6, 2, 1)).mean() > 0.85
    assert (points["label"][x[:, 0] < 6] == 1).all()
    assert (points["label"][x[:, 0] > 6] == 2).all()
