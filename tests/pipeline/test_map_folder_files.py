"""A map folder, file by file, read with libraries that are not the program's own.

Readers: nibabel for NIfTI, VTK for VTU and VTP, json and csv of the standard library.  Truth: nifti1.h for
the header, the closed form of the pair (see tests/conftest.py), SciPy's interpolation, VTK's cell search.
"""

import gzip
import hashlib
import json
import struct

import nibabel
import numpy as np
import pytest
from scipy.ndimage import map_coordinates
from vtkmodules.util.numpy_support import vtk_to_numpy
from vtkmodules.vtkCommonDataModel import vtkStaticCellLocator
from vtkmodules.vtkIOXML import vtkXMLPolyDataReader, vtkXMLUnstructuredGridReader

from volmap.types.notice import caution, short_caution

ASKED = {
    "map.vtu",
    "target_surface.vtp",
    "forward.nii.gz",
    "forward.json",
    "backward.nii.gz",
    "backward.json",
    "forward_support.nii.gz",
    "backward_support.nii.gz",
    "carried_labels.nii.gz",
    "volume_ratio.nii.gz",
    "certificate.json",
    "report.html",
}
BESIDE = {
    "source_surface.vtp",
    "other_order.vtu",
    "source_labels.nii.gz",
    "target_labels.nii.gz",
    "steps.json",
    "landmarks.csv",
}
GATES = [
    "inverted_tets",
    "boundary_crossings",
    "boundary_distance_mm",
    "overlap",
    "volume_ratio",
    "round_trip_mm",
    "order_difference_mm",
    "field_folds",
    "check_points_mm",
    "labels_agree",
    "solve_settled",
]


def vtk_data(path):
    reader = vtkXMLUnstructuredGridReader() if path.suffix == ".vtu" else vtkXMLPolyDataReader()
    reader.SetFileName(str(path))
    reader.Update()
    return reader.GetOutput()


def arrays(attributes):
    return {
        attributes.GetArrayName(i): vtk_to_numpy(attributes.GetArray(i))
        for i in range(attributes.GetNumberOfArrays())
    }


def words(data):
    field = data.GetFieldData()
    found = {}
    for i in range(field.GetNumberOfArrays()):
        array = field.GetAbstractArray(i)
        found[array.GetName()] = str(array.GetVariantValue(0).ToString())
    return found


def corners(data):
    return vtk_to_numpy(data.GetCells().GetConnectivityArray()).reshape(-1, 4)


@pytest.fixture(scope="module")
def mapped(small_pair):
    return vtk_data(small_pair.folder / "map.vtu")


@pytest.fixture(scope="module")
def certificate(small_pair):
    return json.loads((small_pair.folder / "certificate.json").read_text(encoding="utf-8"))


def test_the_folder_holds_what_the_contract_asks_and_nothing_else(small_pair):
    assert {p.name for p in small_pair.folder.iterdir()} == ASKED | BESIDE


def test_map_vtu(mapped, small_pair):
    kinds = {mapped.GetCellType(i) for i in range(mapped.GetNumberOfCells())}
    assert kinds == {10}  # VTK_TETRA
    x = vtk_to_numpy(mapped.GetPoints().GetData())
    points, cells = arrays(mapped.GetPointData()), arrays(mapped.GetCellData())
    assert set(points) == {"image_mm", "alone_mm"}
    assert set(cells) == {"label", "volume_ratio", "stretch", "distortion"}
    y, tets = points["image_mm"], corners(mapped)
    assert y.shape == x.shape
    assert y.dtype == x.dtype == np.float64
    before, after = (np.einsum("tij->tji", p[tets[:, 1:]] - p[tets[:, :1]]) for p in (x, y))
    ratio = np.linalg.det(after) / np.linalg.det(before)
    assert np.linalg.det(before).min() > 0
    assert np.allclose(cells["volume_ratio"], ratio, rtol=1e-9)
    stretch = np.linalg.svd(after @ np.linalg.inv(before), compute_uv=False)
    assert np.allclose(cells["stretch"], stretch, rtol=1e-9)
    assert cells["distortion"].min() >= 0
    assert set(np.unique(cells["label"])) == {1, 2}
    told = words(mapped)
    assert told["frame"] == "RAS+ mm"
    assert told["units"] == "mm"
    assert told["notice"] == caution()
    assert told["source"] == small_pair.source.name
    assert told["target"] == small_pair.target.name


def test_the_map_is_the_growth_the_bodies_were_made_with(mapped):
    # closed form, to half a voxel (1.65 mm): the labels of both scans were rounded to voxels
    x = vtk_to_numpy(mapped.GetPoints().GetData())
    y = arrays(mapped.GetPointData())["image_mm"]
    apart = np.linalg.norm(y - (1.06 * x + [1.5, 0, -1]), axis=1)
    assert apart.mean() < 0.4
    assert np.median(arrays(mapped.GetCellData())["volume_ratio"]) == pytest.approx(1.06**3, rel=0.02)


@pytest.mark.parametrize("side", ["source", "target"])
def test_label_surfaces(small_pair, side):
    surface = vtk_data(small_pair.folder / f"{side}_surface.vtp")
    cells = arrays(surface.GetCellData())
    assert set(cells) == {"label_inside", "label_outside"}
    sides = {tuple(row) for row in np.stack([cells["label_inside"], cells["label_outside"]], axis=1).tolist()}
    assert sides == {(1, 0), (2, 1)}
    x = vtk_to_numpy(surface.GetPoints().GetData())
    labels = nibabel.load(small_pair.root / getattr(small_pair, side).name)
    filled = np.argwhere(np.asarray(labels.dataobj) > 0)
    centres = nibabel.affines.apply_affine(labels.affine, filled)
    assert np.abs(x.min(axis=0) - centres.min(axis=0)).max() < 2.0
    assert np.abs(x.max(axis=0) - centres.max(axis=0)).max() < 2.0
    assert words(surface)["notice"] == caution()


@pytest.mark.parametrize(("direction", "grid"), [("forward", "source"), ("backward", "target")])
def test_field_header_is_that_of_nifti1_h(small_pair, direction, grid):
    image = nibabel.load(small_pair.folder / f"{direction}.nii.gz")
    scan = nibabel.load(getattr(small_pair, grid))
    header = image.header
    assert header["dim"].tolist() == [5, *scan.shape, 1, 3, 1, 1]
    assert int(header["intent_code"]) == 1006  # NIFTI_INTENT_DISPVECT
    assert header.get_data_dtype() == np.float32
    assert header.get_xyzt_units()[0] == "mm"
    assert bytes(header["descrip"]).rstrip(b"\0") == short_caution().encode("ascii")
    raw = gzip.decompress((small_pair.folder / f"{direction}.nii.gz").read_bytes())
    assert struct.unpack("<2f", raw[112:120]) == (1.0, 0.0)  # scl_slope, scl_inter
    assert np.array_equal(image.affine, scan.affine)
    assert int(header["sform_code"]) > 0
    u = np.asarray(image.dataobj)[:, :, :, 0, :]
    gone = np.isnan(u)
    assert np.array_equal(gone.all(axis=-1), gone.any(axis=-1))
    support = nibabel.load(small_pair.folder / f"{direction}_support.nii.gz")
    assert support.get_data_dtype() == np.uint8
    assert np.array_equal(np.asarray(support.dataobj), ~gone[..., 0])
    labelled = np.asarray(scan.dataobj) > 0
    assert (~gone[..., 0] != labelled).mean() < 0.02  # the mesh rounds corners


def located(data, points):
    """The tet VTK finds at each point, and the point's barycentric coordinates in it."""
    locator = vtkStaticCellLocator()
    locator.SetDataSet(data)
    locator.BuildLocator()
    tet = np.array([locator.FindCell(p) for p in points])
    x = vtk_to_numpy(data.GetPoints().GetData())[corners(data)[tet]]
    edges = np.einsum("tij->tji", x[:, 1:] - x[:, :1])
    inner = np.linalg.solve(edges, (points - x[:, 0])[..., None])[..., 0]
    return tet, np.concatenate([1 - inner.sum(axis=1, keepdims=True), inner], axis=1)


def test_fields_are_the_map_at_the_voxel_centres(mapped, small_pair):
    image = nibabel.load(small_pair.folder / "forward.nii.gz")
    u = np.asarray(image.dataobj)[:, :, :, 0, :]
    voxels = np.argwhere(np.isfinite(u[..., 0]))[::97]
    x = nibabel.affines.apply_affine(image.affine, voxels)
    tet, weights = located(mapped, x)
    assert (tet >= 0).all()
    y = np.einsum("tc,tci->ti", weights, arrays(mapped.GetPointData())["image_mm"][corners(mapped)[tet]])
    assert np.abs(x + u[tuple(voxels.T)] - y).max() < 1e-4
    # where y lies, the backward field sends it home again, to its own sampling
    back = nibabel.load(small_pair.folder / "backward.nii.gz")
    v = np.asarray(back.dataobj)[:, :, :, 0, :]
    index = nibabel.affines.apply_affine(np.linalg.inv(back.affine), y).T
    home = y + np.stack([map_coordinates(v[..., c], index, order=1, cval=np.nan) for c in range(3)], axis=1)
    error = np.linalg.norm(home - x, axis=1)
    told = json.loads((small_pair.folder / "forward.json").read_text(encoding="utf-8"))["round_trip"]
    assert np.nanmean(error) == pytest.approx(told["mean_mm"], rel=0.5)
    assert np.nanmax(error) <= told["max_mm"] + 1e-3


def test_carried_labels_and_volume_ratio(small_pair, mapped):
    carried = nibabel.load(small_pair.folder / "carried_labels.nii.gz")
    target = nibabel.load(small_pair.target)
    assert np.array_equal(carried.affine, target.affine)
    a, b = np.asarray(carried.dataobj), np.asarray(target.dataobj)
    for label in (1, 2):
        dice = 2 * ((a == label) & (b == label)).sum() / ((a == label).sum() + (b == label).sum())
        assert dice > 0.95
    ratio = nibabel.load(small_pair.folder / "volume_ratio.nii.gz")
    assert ratio.get_data_dtype() == np.float32
    values = np.asarray(ratio.dataobj)
    support = np.asarray(nibabel.load(small_pair.folder / "forward_support.nii.gz").dataobj) > 0
    assert np.array_equal(np.isfinite(values), support)
    # as many mm3 arrive as the target holds: J integrates to the volume of the target
    swept = float(np.nansum(values)) * abs(np.linalg.det(ratio.affine[:3, :3]))
    there = float((b > 0).sum()) * abs(np.linalg.det(target.affine[:3, :3]))
    assert swept == pytest.approx(there, rel=0.02)


def digest(path):
    """The digest as its description in the sidecar says, from what nibabel reads."""
    image = nibabel.load(path)
    h = hashlib.sha256()
    h.update(np.array(image.shape, "<i8").tobytes())
    h.update(np.asarray(image.dataobj).astype("<u2").tobytes(order="F"))
    h.update(image.affine.astype("<f4").tobytes())
    return h.hexdigest()


@pytest.mark.parametrize(
    ("direction", "here", "there"), [("forward", "source", "target"), ("backward", "target", "source")]
)
def test_sidecars_say_all_that_is_asked(small_pair, direction, here, there):
    told = json.loads((small_pair.folder / f"{direction}.json").read_text(encoding="utf-8"))
    role, other = here.upper(), there.upper()
    assert "y = x + u(x)" in told["formula"]
    assert told["grid_space"]["role"] == role
    assert told["points_into"]["role"] == other
    assert told["grid_space"]["sha256"] == digest(getattr(small_pair, here))
    assert told["points_into"]["sha256"] == digest(getattr(small_pair, there))
    assert told["grid_space"]["name"] == getattr(small_pair, here).name
    assert f"resamples images of {other} onto {role}'s grid" in told["uses"][0]
    assert f"moves points from {role} into {other}" in told["uses"][1]
    assert "RAS+" in told["frame"]
    assert told["units"] == "mm"
    assert "NaN" in told["outside"]
    assert "trilinear" in told["interpolation"]
    assert "component" in told["order"]
    assert told["notice"] == caution()
    assert told["paired_file"] == ("backward" if direction == "forward" else "forward") + ".nii.gz"
    assert {"mean_mm", "p95_mm", "max_mm"} <= set(told["round_trip"])
    assert told["against_exact_map"]["max_mm"] > 0
    image = nibabel.load(small_pair.folder / f"{direction}.nii.gz")
    point = told["check_point"]
    x = nibabel.affines.apply_affine(image.affine, point["voxel"])
    u = np.asarray(image.dataobj)[(*point["voxel"], 0)]
    assert np.allclose(point["x_mm"], x, atol=1e-9)
    assert np.array_equal(np.float32(point["u_mm"]), u)
    assert np.allclose(point["y_mm"], x + u, atol=1e-9)


def test_certificate_schema(certificate, small_pair):
    assert certificate["schema"] == "volmap-certificate/1"
    assert certificate["notice"] == caution()
    for side in ("source", "target"):
        told = certificate[side]
        scan = np.asarray(nibabel.load(getattr(small_pair, side)).dataobj)
        assert told["sha256"] == digest(getattr(small_pair, side))
        assert told["labels"]["2"]["name"] == "Kern é"
        assert told["labels"]["1"]["voxels"] == int((scan == 1).sum())
    assert {"points", "tets", "min_dihedral_deg", "volume_error_pct"} <= set(certificate["mesh"])
    assert set(certificate["mesh"]["volume_error_pct"]) == {"1", "2"}
    assert {"settings", "versions", "measures", "seconds", "peak_mb"} <= set(certificate)
    assert certificate["peak_mb"] > 50
    assert set(certificate["measures"]["volume_ratio"]) >= {"p50", "p95", "max"}


def test_every_gate_is_there_with_limit_source_and_verdict(certificate):
    gates = certificate["gates"]
    assert [gate["name"] for gate in gates] == GATES
    for gate in gates:
        assert {"value", "unit", "warn", "fail", "limit_source", "verdict", "where"} <= set(gate)
        assert gate["verdict"] in ("pass", "warn", "fail", "not-assessed")
        assert gate["limit_source"]
    order = ["pass", "warn", "fail"]
    verdicts = [gate["verdict"] for gate in gates if gate["verdict"] != "not-assessed"]
    assert certificate["verdict"] == max(verdicts, key=order.index)
    checks = next(gate for gate in gates if gate["name"] == "check_points_mm")
    assert checks["verdict"] != "not-assessed"
    assert checks["value"]["mean"] < 1.0


def test_every_file_says_research_only(small_pair):
    for path in small_pair.folder.iterdir():
        if path.name.endswith(".nii.gz"):
            assert nibabel.load(path).header["descrip"].item().decode() == short_caution()
        elif path.suffix in (".json",):
            assert json.loads(path.read_text(encoding="utf-8"))["notice"] == caution()
        elif path.suffix == ".html":
            assert caution() in path.read_text(encoding="utf-8")
        elif path.suffix in (".vtu", ".vtp"):
            assert words(vtk_data(path))["notice"] == caution()
        else:
            assert path.name == "landmarks.csv"  # its columns are fixed
    assert "research" in short_caution().lower()
