"""Things carried through a map folder, files in and files out; read and written with other libraries."""

import csv
from dataclasses import replace

import meshio
import nibabel
import numpy as np
import pytest
from scipy.ndimage import map_coordinates
from vtkmodules.util.numpy_support import vtk_to_numpy
from vtkmodules.vtkIOXML import vtkXMLUnstructuredGridReader

from volmap import pipeline
from volmap.types import InputError

HEADER = ["name", "x_mm", "y_mm", "z_mm"]


def write_points(path, points):
    with path.open("w", encoding="utf-8", newline="") as stream:
        writer = csv.writer(stream)
        writer.writerow(HEADER)
        writer.writerows([f"p{i}", *map(repr, row)] for i, row in enumerate(points.tolist()))


def read_points(path):
    with path.open(encoding="utf-8", newline="") as stream:
        rows = list(csv.DictReader(stream))
    return np.array([[float(row[c]) for c in HEADER[1:]] for row in rows])


INNER = np.random.default_rng(5).uniform(-8, 8, (40, 3))


def test_points_there_and_back_to_a_nanometre(tmp_path, small_pair):
    # law: the inverse of a piecewise affine map is exact; 1e-9 mm is float64 rounding at this size, doubled
    write_points(tmp_path / "here.csv", INNER)
    pipeline.carry_file(tmp_path / "here.csv", small_pair.folder, tmp_path / "there.csv")
    pipeline.carry_file(tmp_path / "there.csv", small_pair.folder, tmp_path / "home.csv", reverse=True)
    there, home = read_points(tmp_path / "there.csv"), read_points(tmp_path / "home.csv")
    assert np.abs(home - INNER).max() < 1e-9
    assert np.linalg.norm(there - (1.06 * INNER + [1.5, 0, -1]), axis=1).mean() < 0.5
    assert np.linalg.norm(there - INNER, axis=1).min() > 0.1


def test_a_point_far_outside_is_told_and_left_out(tmp_path, small_pair):
    write_points(tmp_path / "here.csv", np.array([[0.0, 0, 0], [90.0, 0, 0]]))
    findings = pipeline.carry_file(tmp_path / "here.csv", small_pair.folder, tmp_path / "there.csv")
    assert len(read_points(tmp_path / "there.csv")) == 1
    assert [f.code for f in findings] == ["outside-left-out"]
    assert "p1" in findings[0].sentence
    assert "mm" in findings[0].sentence


def test_an_uncertainty_that_stays_behind_is_told(tmp_path, small_pair):
    (tmp_path / "here.csv").write_text(
        "name,x_mm,y_mm,z_mm,role,sd_mm\nä,1,2,3,guide,0.5\n", encoding="utf-8"
    )
    findings = pipeline.carry_file(tmp_path / "here.csv", small_pair.folder, tmp_path / "there.csv")
    assert [f.code for f in findings] == ["sd-left-out"]
    text = (tmp_path / "there.csv").read_text(encoding="utf-8").splitlines()
    assert text[0] == "name,x_mm,y_mm,z_mm,role"
    assert text[1].startswith("ä,")
    assert text[1].endswith(",guide")


def carried_volume(small_pair, tmp_path, voxels, *, reverse=False, **choice):
    scan = nibabel.load(small_pair.target if reverse else small_pair.source)
    image = nibabel.Nifti1Image(voxels, scan.affine)
    image.header.set_xyzt_units("mm")
    nibabel.save(image, tmp_path / "in.nii.gz")
    out = tmp_path / "out.nii.gz"
    findings = pipeline.carry_file(tmp_path / "in.nii.gz", small_pair.folder, out, reverse=reverse, **choice)
    return nibabel.load(out), [f.code for f in findings]


@pytest.mark.parametrize("reverse", [False, True])
def test_the_scans_own_labels_arrive_on_the_other_scans(tmp_path, small_pair, reverse):
    start, end = (small_pair.target, small_pair.source) if reverse else (small_pair.source, small_pair.target)
    voxels = np.asarray(nibabel.load(start).dataobj)
    image, codes = carried_volume(small_pair, tmp_path, voxels, reverse=reverse)
    there = nibabel.load(end)
    assert np.array_equal(image.affine, there.affine)
    assert image.get_data_dtype() == np.uint8
    a, b = np.asarray(image.dataobj), np.asarray(there.dataobj)
    for label in (1, 2):
        assert 2 * ((a == label) & (b == label)).sum() / ((a == label).sum() + (b == label).sum()) > 0.93
    assert codes == ["carried-as-labels"]


def test_an_image_is_sampled_where_each_voxel_comes_from(tmp_path, small_pair):
    # truth: y -> x by the stored backward field, then SciPy's linear interpolation
    scan = nibabel.load(small_pair.source)
    i, j, k = np.indices(scan.shape)
    voxels = (100 + 3.5 * i - 2.25 * j + 0.5 * k).astype(np.float32)
    image, codes = carried_volume(small_pair, tmp_path, voxels)
    assert codes == ["carried-as-image", "either-scan"]  # both scans have one grid
    field = nibabel.load(small_pair.folder / "backward.nii.gz")
    u = np.asarray(field.dataobj)[:, :, :, 0, :]
    place = np.argwhere(np.isfinite(u[..., 0]))
    x = nibabel.affines.apply_affine(field.affine, place) + u[tuple(place.T)]
    wanted = map_coordinates(voxels, nibabel.affines.apply_affine(np.linalg.inv(scan.affine), x).T, order=1)
    values = np.asarray(image.dataobj)
    assert np.array_equal(np.isfinite(values), np.isfinite(u[..., 0]))
    assert np.abs(values[tuple(place.T)] - wanted).max() < 1e-3


def test_the_user_may_say_what_a_volume_holds(tmp_path, small_pair):
    # an 8-bit picture has whole numbers, few of them: by its values it would pass for labels
    scan = nibabel.load(small_pair.source)
    voxels = (np.indices(scan.shape).sum(axis=0) % 200).astype(np.uint8)
    _, codes = carried_volume(small_pair, tmp_path, voxels)
    assert "carried-as-labels" in codes
    for left in ("out.nii.gz", "out.nii.gz.json"):
        (tmp_path / left).unlink()
    image, codes = carried_volume(small_pair, tmp_path, voxels, kind="image")
    assert image.get_data_dtype() == np.float32
    assert "carried-as-labels" not in codes
    with pytest.raises(InputError, match="whole numbers"):
        carried_volume(small_pair, tmp_path, voxels + np.float32(0.5), kind="labels", overwrite=True)


def test_a_mesh_through_files(tmp_path, small_pair):
    # meshio writes, VTK reads; the corners go the way of points
    corners = np.array([[0.0, 0, 0], [3, 0, 0], [0, 3, 0], [0, 0, 3], [3, 3, 3]])
    tets = np.array([[0, 1, 2, 3], [1, 2, 3, 4]])
    flipped = np.linalg.det(corners[tets[:, 1:]] - corners[tets[:, :1]]) < 0
    tets[flipped] = tets[flipped][:, [0, 2, 1, 3]]
    data = {"label": [np.array([1, 2])]}
    meshio.Mesh(corners, [("tetra", tets)], cell_data=data).write(tmp_path / "in.vtu")
    pipeline.carry_file(tmp_path / "in.vtu", small_pair.folder, tmp_path / "out.vtu")
    reader = vtkXMLUnstructuredGridReader()
    reader.SetFileName(str(tmp_path / "out.vtu"))
    reader.Update()
    carried = reader.GetOutput()
    write_points(tmp_path / "here.csv", corners)
    pipeline.carry_file(tmp_path / "here.csv", small_pair.folder, tmp_path / "there.csv")
    assert np.array_equal(vtk_to_numpy(carried.GetPoints().GetData()), read_points(tmp_path / "there.csv"))
    connectivity = vtk_to_numpy(carried.GetCells().GetConnectivityArray())
    assert np.array_equal(connectivity.reshape(-1, 4), tets)
    assert vtk_to_numpy(carried.GetCellData().GetArray("label")).tolist() == [1, 2]


@pytest.mark.parametrize(
    ("thing", "out", "said"),
    [
        ("notes.txt", "out.txt", "notes.txt"),
        ("here.csv", "out.nii.gz", "out.nii.gz"),
        ("here.csv", "here.csv", "exists already"),
        ("here.csv", "no/such/out.csv", "does not exist"),
        ("pairs.csv", "out.csv", "pairs.csv"),
        ("gone.csv", "out.csv", "gone.csv"),
    ],
)
def test_wrong_kinds_and_places(tmp_path, small_pair, thing, out, said):
    write_points(tmp_path / "here.csv", INNER)
    (tmp_path / "notes.txt").write_text("hello", encoding="utf-8")
    (tmp_path / "pairs.csv").write_bytes(small_pair.pairs.read_bytes())
    before = sorted(tmp_path.iterdir())
    with pytest.raises(InputError) as caught:
        pipeline.carry_file(tmp_path / thing, small_pair.folder, tmp_path / out)
    assert said in caught.value.sentence
    assert ";" in caught.value.sentence  # a remedy
    assert sorted(tmp_path.iterdir()) == before


def test_a_volume_that_lies_elsewhere_is_refused(tmp_path, small_pair):
    scan = nibabel.load(small_pair.source)
    affine = scan.affine.copy()
    affine[:3, 3] += 500
    nibabel.save(nibabel.Nifti1Image(np.asarray(scan.dataobj), affine), tmp_path / "far.nii.gz")
    with pytest.raises(InputError, match=r"far\.nii\.gz: the volume holds no part of the body") as caught:
        pipeline.carry_file(
            tmp_path / "far.nii.gz", small_pair.folder, tmp_path / "out.nii.gz", belongs_to="source"
        )
    assert caught.value.refused


def test_two_files_of_one_name_are_told_apart(tmp_path, small_pair, small_job, without_report):
    files = []
    for place, file in (("visit 0", small_pair.source), ("visit 1", small_pair.target)):
        (tmp_path / place).mkdir()
        files.append(tmp_path / place / "labels.nii.gz")
        files[-1].write_bytes(file.read_bytes())
    job = replace(small_job, both_orders=False)
    folder = without_report(pipeline.map_files, *files, tmp_path / "map", job)
    assert folder.certificate.source["name"] == "labels.nii.gz (source)"
    assert folder.certificate.target["name"] == "labels.nii.gz (target)"
    assert pipeline.certify_folder(tmp_path / "map").disagreements == ()
    screened = pipeline.screen_files(files)
    assert [r.name for r in screened.results] == ["labels.nii.gz (source)", "labels.nii.gz (target)"]
