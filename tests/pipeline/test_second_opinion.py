"""`certify` on a fresh folder agrees; on a doctored one it says so, loudly, whatever was changed.

Each fault is planted with libraries that are not the program's own.
"""

import gzip
import json
import shutil
import struct

import nibabel
import numpy as np
import pytest
from vtkmodules.util.numpy_support import vtk_to_numpy
from vtkmodules.vtkIOXML import (
    vtkXMLPolyDataReader,
    vtkXMLPolyDataWriter,
    vtkXMLUnstructuredGridReader,
    vtkXMLUnstructuredGridWriter,
)

from volmap import pipeline
from volmap.types import InputError, Verdict


@pytest.fixture
def folder(small_pair, tmp_path):
    """A copy to doctor."""
    return shutil.copytree(small_pair.folder, tmp_path / "doctored")


def test_a_fresh_folder_agrees(small_pair):
    opinion = pipeline.certify_folder(small_pair.folder)
    assert opinion.disagreements == ()
    assert opinion.not_repeated == ()
    assert opinion.certificate.verdict in (Verdict.PASS, Verdict.WARN)


def change_json(path, change):
    document = json.loads(path.read_text(encoding="utf-8"))
    change(document)
    path.write_text(json.dumps(document, indent=2), encoding="utf-8")


def change_voxels(path, change):
    """Change voxels in place, the header untouched."""
    raw = bytearray(gzip.decompress(path.read_bytes()))
    kind = {2: "u1", 16: "<f4", 512: "<u2"}[struct.unpack("<h", raw[70:72])[0]]
    shape = tuple(n for n in nibabel.load(path).shape)
    voxels = np.frombuffer(bytes(raw[352:]), kind).reshape(shape, order="F").copy()
    change(voxels)
    path.write_bytes(gzip.compress(bytes(raw[:352]) + voxels.tobytes(order="F"), mtime=0))


def change_vtk(path, change):
    mesh = path.suffix == ".vtu"
    reader = vtkXMLUnstructuredGridReader() if mesh else vtkXMLPolyDataReader()
    reader.SetFileName(str(path))
    reader.Update()
    data = reader.GetOutput()
    change(data)
    writer = vtkXMLUnstructuredGridWriter() if mesh else vtkXMLPolyDataWriter()
    writer.SetFileName(str(path))
    writer.SetInputData(data)
    writer.Write()


def gate(document, name):
    return next(entry for entry in document["gates"] if entry["name"] == name)


def better_value(folder):
    change_json(
        folder / "certificate.json", lambda d: gate(d, "boundary_distance_mm")["value"].update(mean=0.001)
    )
    return "boundary_distance_mm: value.mean"


def lost_gate(folder):
    change_json(folder / "certificate.json", lambda d: d["gates"].remove(gate(d, "round_trip_mm")))
    return "round_trip_mm: gate is stored as 'missing'"


def gate_verdict(folder):
    def change(document):
        for entry in document["gates"]:
            entry["verdict"] = "fail"
        document["verdict"] = "fail"

    change_json(folder / "certificate.json", change)
    return "verdict is stored as 'fail'"


def wider_limit(folder):
    change_json(
        folder / "certificate.json", lambda d: gate(d, "boundary_distance_mm")["fail"].update(mean_above=99.0)
    )
    return "boundary_distance_mm: fail.mean_above"


def unmeasured(folder):
    change_json(
        folder / "certificate.json",
        lambda d: gate(d, "check_points_mm").update(value=None, verdict="not-assessed"),
    )
    return "check_points_mm: verdict"


def other_measure(folder):
    change_json(folder / "certificate.json", lambda d: d["measures"]["volume_ratio"].update(p50=1.0))
    return "measures.volume_ratio.p50"


def other_volume(folder):
    change_json(folder / "certificate.json", lambda d: d["target"]["labels"]["2"].update(volume_mm3=1.0))
    return "target.labels.2.volume_mm3"


def other_mesh(folder):
    change_json(folder / "certificate.json", lambda d: d["mesh"].update(min_dihedral_deg=31.0))
    return "mesh.min_dihedral_deg"


def field_voxels(folder):
    def change(u):
        u[18:22, 16:20, 14:16, 0, 1] += 0.05

    change_voxels(folder / "forward.nii.gz", change)
    return "forward.nii.gz: the stored field is not the map"


def carried(folder):
    def change(labels):
        labels[20, 18, 15] = 3 - labels[20, 18, 15]

    change_voxels(folder / "carried_labels.nii.gz", change)
    return "carried_labels.nii.gz: 1 voxels"


def ratio(folder):
    def change(values):
        values[20, 18, 15] *= 1.01

    change_voxels(folder / "volume_ratio.nii.gz", change)
    return "volume_ratio.nii.gz: 1 voxels"


def surface(folder):
    def change(data):
        points = vtk_to_numpy(data.GetPoints().GetData())
        points[:] += 0.01

    change_vtk(folder / "target_surface.vtp", change)
    return "target_surface.vtp"


def distortion(folder):
    change_vtk(
        folder / "map.vtu",
        lambda d: vtk_to_numpy(d.GetCellData().GetArray("distortion")).__imul__(0.5),
    )
    return "map.vtu: `distortion`"


def status(folder):
    change_json(folder / "steps.json", lambda d: d.update(status="STALLED"))
    return "solve_settled: verdict"


def last_step(folder):
    change_json(folder / "steps.json", lambda d: d["steps"][-1].update(smallest_ratio=0.99))
    return "steps.json: the last step's smallest volume ratio"


def sidecar(folder):
    change_json(folder / "backward.json", lambda d: d["round_trip"].update(mean_mm=1e-6))
    return "backward.json: .round_trip.mean_mm"


def sidecar_words(folder):
    change_json(folder / "forward.json", lambda d: d["uses"].reverse())
    return "forward.json: .uses[0]"


def landmark(folder):
    path = folder / "landmarks.csv"
    lines = path.read_text(encoding="utf-8").splitlines()
    cells = lines[1].split(",")
    cells[4] = str(float(cells[4]) + 0.5)
    path.write_text("\n".join([lines[0], ",".join(cells), *lines[2:]]) + "\n", encoding="utf-8")
    return "check_points_mm: value"


def alone(folder):
    def change(data):
        array = vtk_to_numpy(data.GetPointData().GetArray("alone_mm"))
        array += 0.1

    change_vtk(folder / "other_order.vtu", change)
    return "order_difference_mm: value.alone.mean"


def not_alone(folder):
    change_vtk(folder / "map.vtu", lambda data: data.GetPointData().RemoveArray("alone_mm"))
    return "order_difference_mm: value.alone"


DISAGREE = [
    alone,
    not_alone,
    better_value,
    lost_gate,
    gate_verdict,
    wider_limit,
    unmeasured,
    other_measure,
    other_volume,
    other_mesh,
    field_voxels,
    carried,
    ratio,
    surface,
    distortion,
    status,
    last_step,
    sidecar,
    sidecar_words,
    landmark,
]


@pytest.mark.parametrize("doctor", DISAGREE)
def test_a_doctored_folder_is_found_out(folder, doctor):
    wanted = doctor(folder)
    opinion = pipeline.certify_folder(folder)
    assert any(wanted in sentence for sentence in opinion.disagreements), opinion.disagreements


def moved_image(folder):
    def change(data):
        images = vtk_to_numpy(data.GetPointData().GetArray("image_mm"))
        images[len(images) // 2] += 0.2

    change_vtk(folder / "map.vtu", change)
    return "map.vtu"


def whole_verdict(folder):
    change_json(
        folder / "certificate.json", lambda d: d.update(verdict="warn" if d["verdict"] == "pass" else "pass")
    )
    return "verdict does not follow"


def swapped_labels(folder):
    shutil.copyfile(folder / "target_labels.nii.gz", folder / "source_labels.nii.gz")
    return "source_labels.nii.gz"


def swapped_fields(folder):
    forward, backward = folder / "forward.nii.gz", folder / "backward.nii.gz"
    forward.rename(folder / "x")
    backward.rename(forward)
    (folder / "x").rename(backward)
    return "forward"


def deleted(folder):
    (folder / "backward.nii.gz").unlink()
    return "doctored/backward.nii.gz"


def no_steps(folder):
    (folder / "steps.json").unlink()
    return "steps.json"


def truncated(folder):
    path = folder / "forward.nii.gz"
    path.write_bytes(path.read_bytes()[:-2000])
    return "forward.nii.gz"


def truncated_mesh(folder):
    path = folder / "map.vtu"
    path.write_bytes(path.read_bytes()[:-2000])
    return "map.vtu"


def support(folder):
    def change(defined):
        defined[20, 18, 15] = 0

    change_voxels(folder / "forward_support.nii.gz", change)
    return "forward_support.nii.gz"


def unknown_status(folder):
    change_json(folder / "steps.json", lambda d: d.update(status="DONE"))
    return "steps.json"


UNUSABLE = [
    moved_image,
    whole_verdict,
    swapped_labels,
    swapped_fields,
    deleted,
    no_steps,
    truncated,
    truncated_mesh,
    support,
    unknown_status,
]


@pytest.mark.parametrize("doctor", UNUSABLE)
def test_files_that_do_not_belong_together_are_refused(folder, doctor):
    wanted = doctor(folder)
    with pytest.raises(InputError) as caught:
        pipeline.certify_folder(folder)
    assert wanted in caught.value.sentence
    assert ";" in caught.value.sentence  # a remedy


def test_a_map_without_the_other_order_is_not_called_passed(small_pair, folder):
    (folder / "other_order.vtu").unlink()
    opinion = pipeline.certify_folder(folder)
    assert opinion.not_repeated == ("order_difference_mm",)
    fresh = opinion.certificate.gate("order_difference_mm")
    assert fresh.verdict is Verdict.NOT_ASSESSED
