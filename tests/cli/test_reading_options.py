"""What a user says where a file leaves it open, through the command line."""

import json

import meshio
import nibabel as nib
import numpy as np
import pytest
from volmap_cli.main import main
from volmap_phantoms.broken import body

CUBE = np.array([[i, j, k] for i in (0, 1) for j in (0, 1) for k in (0, 1)], float)
TETS = np.array([[0, 4, 6, 7], [0, 6, 2, 7], [0, 2, 3, 7], [0, 3, 1, 7], [0, 1, 5, 7], [0, 5, 4, 7]])


def save(path, values, affine):
    image = nib.Nifti1Image(values, affine)
    image.header.set_xyzt_units("mm")
    nib.save(image, path)
    return str(path)


def screened(arguments, capsys):
    status = main(["screen", *arguments, "--json", "--quiet"])
    told = json.loads(capsys.readouterr().out)["files"][0]
    return status, {entry["name"]: entry["volume_mm3"] for entry in told["labels"]}, told


def test_frames_thresholds_and_names_of_one_body(tmp_path, capsys):
    # Law: a body is the same whether its labels are stored, stand in a frame, or are made of probabilities.
    sound = body(0)
    labels, affine = np.asarray(sound.labels), sound.grid.affine
    (tmp_path / "names.csv").write_text("index,name\n1,shell\n2,core\n")
    names = ["--names", str(tmp_path / "names.csv")]
    plain = save(tmp_path / "plain.nii.gz", labels.astype(np.uint8), affine)
    frames = save(tmp_path / "frames.nii.gz", np.stack([0 * labels, labels], -1).astype(np.uint8), affine)
    shares = np.stack([labels == 1, labels == 2], -1).astype(np.float32) * 0.9
    shares = save(tmp_path / "shares.nii.gz", shares, affine)
    expected = screened([plain, *names], capsys)[:2]
    assert set(expected[1]) == {"shell", "core"}
    status, volumes, told = screened([frames, "--frame", "1", *names], capsys)
    assert (status, volumes) == expected
    assert "frame-chosen" in [f["code"] for f in told["findings"]]
    status, volumes, told = screened([shares, "--threshold", "0.5", *names], capsys)
    assert (status, volumes) == expected
    assert "labels-by-threshold" in [f["code"] for f in told["findings"]]
    assert main(["screen", frames, "--quiet"]) == 1
    assert "choose one with --frame N" in capsys.readouterr().err


@pytest.mark.parametrize("wrong", [["--frame", "-1"], ["--threshold", "0"], ["--threshold", "much"]])
def test_options_that_mean_nothing_are_a_usage_error(tmp_path, wrong, capsys):
    with pytest.raises(SystemExit) as stop:
        main(["screen", "x.nii", *wrong])
    assert stop.value.code == 2
    assert "Traceback" not in capsys.readouterr().err


@pytest.mark.parametrize("ending", [".vtu", ".vtk", ".msh"])
def test_a_solid_of_tets_is_meshed_anew(tmp_path, ending, capsys):
    # Closed form: the cube of edge 20 holds 8000 mm3.
    solid, out = tmp_path / f"solid{ending}", tmp_path / "mesh.vtu"
    kind = {".msh": "gmsh", ".vtk": "vtk", ".vtu": "vtu"}[ending]
    meshio.Mesh(20 * CUBE, [("tetra", TETS)]).write(solid, file_format=kind)
    assert main(["mesh", str(solid), "--out", str(out), "--edge", "5", "--json", "--quiet"]) == 0
    row = json.loads(capsys.readouterr().out)["quality"]["rows"][0]
    assert row["volume_mm3"] == pytest.approx(8000, rel=1e-9)
    assert out.exists()
