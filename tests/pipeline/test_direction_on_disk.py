"""Directions, proved from the files: mistakes planted in a map folder are caught and named in one sentence.

The files are changed with libraries that are not the program's own.
"""

import json
import shutil

import nibabel
import numpy as np
import pytest
from volmap_cli.main import main

from volmap import pipeline
from volmap.types import InputError


@pytest.fixture
def folder(small_pair, tmp_path):
    """A copy to change."""
    return shutil.copytree(small_pair.folder, tmp_path / "karte")


def change_field(path, vectors=lambda u: u, affine=lambda a: a):
    """Write a field again, its vectors or its affine changed."""
    image = nibabel.load(path)
    u = vectors(np.asarray(image.dataobj)[:, :, :, 0, :])[:, :, :, None, :]
    header = image.header.copy()
    written = nibabel.Nifti1Image(np.ascontiguousarray(u), None, header)
    matrix = affine(image.affine.copy())
    written.set_sform(matrix, 1)
    written.set_qform(matrix, 1)
    nibabel.save(written, path)


def change_sidecar(path, change):
    document = json.loads(path.read_text(encoding="utf-8"))
    change(document)
    path.write_text(json.dumps(document), encoding="utf-8")


def swap(folder, *endings):
    for ending in endings:
        one, other = folder / f"forward{ending}", folder / f"backward{ending}"
        one.rename(folder / "x")
        other.rename(one)
        (folder / "x").rename(other)


def test_a_sound_folder_proves_both_directions(small_pair, capsys):
    opinion = pipeline.certify_folder(small_pair.folder)
    assert [p.split(":")[0] for p in opinion.proofs] == ["forward.nii.gz", "backward.nii.gz"]
    for name, sentence in zip(("forward", "backward"), opinion.proofs, strict=True):
        point = json.loads((small_pair.folder / f"{name}.json").read_text(encoding="utf-8"))["check_point"]
        assert f"voxel {tuple(point['voxel'])}" in sentence
        # an independent reading: nibabel's voxel and affine give the same x, u and y
        image = nibabel.load(small_pair.folder / f"{name}.nii.gz")
        i, j, k = point["voxel"]
        x, u = image.affine @ [i, j, k, 1], np.asarray(image.dataobj)[i, j, k, 0]
        np.testing.assert_allclose(x[:3], point["x_mm"], atol=1e-3)
        np.testing.assert_array_equal(u, np.float32(point["u_mm"]))
        np.testing.assert_allclose(x[:3] + u, point["y_mm"], atol=1e-3)
    assert main(["certify", str(small_pair.folder), "--json", "--quiet"]) == 0
    told = json.loads(capsys.readouterr().out)
    assert told["second_opinion"]["direction_proofs"] == list(opinion.proofs)


SIGN, LPS, ORDER = "their sign turned", "as in LPS instead of RAS+", "components in the order y, x, z"


@pytest.mark.parametrize("name", ["forward", "backward"])
@pytest.mark.parametrize(
    ("vectors", "named"),
    [
        (lambda u: -u, SIGN),
        (lambda u: u * np.float32([-1, -1, 1]), LPS),
        (lambda u: u[..., [1, 0, 2]], ORDER),
    ],
    ids=["negated", "LPS", "swapped components"],
)
def test_turned_vectors(folder, name, vectors, named):
    change_field(folder / f"{name}.nii.gz", vectors)
    opinion = pipeline.certify_folder(folder)
    assert opinion.disagreements[0].startswith(f"{name}.nii.gz: the vector at voxel")
    assert named in opinion.disagreements[0]
    (whole,) = [s for s in opinion.disagreements if s.startswith(f"{name}.nii.gz: the stored field is not")]
    assert named in whole
    assert len(opinion.proofs) == 1


def test_negated_vectors_with_a_check_point_to_match(folder):
    """Whoever also writes the document anew is found out by the exact map."""
    change_field(folder / "forward.nii.gz", lambda u: -u)

    def turned(document):
        point = document["check_point"]
        point["u_mm"] = [-v for v in point["u_mm"]]
        point["y_mm"] = [x + u for x, u in zip(point["x_mm"], point["u_mm"], strict=True)]

    change_sidecar(folder / "forward.json", turned)
    first, *rest = pipeline.certify_folder(folder).disagreements
    assert first.startswith("forward.nii.gz: the exact map sends the check point")
    assert any(SIGN in sentence for sentence in rest)


def test_the_other_directions_files_under_this_name(folder):
    """Both scans of the small pair have one grid, so only the vectors can tell."""
    swap(folder, ".nii.gz", "_support.nii.gz")
    opinion = pipeline.certify_folder(folder)
    for name in ("forward", "backward"):
        (whole,) = [
            s for s in opinion.disagreements if s.startswith(f"{name}.nii.gz: the stored field is not")
        ]
        assert whole.endswith("it holds the displacements of the other direction")


def test_the_same_with_their_documents(folder):
    swap(folder, ".nii.gz", "_support.nii.gz", ".json")
    said = pipeline.certify_folder(folder).disagreements
    assert "forward.json: says that the field of forward.nii.gz runs 'backward'" in said
    assert any(s.startswith("forward.nii.gz: the exact map sends the check point") for s in said)


def test_fields_swapped_without_their_supports(folder):
    swap(folder, ".nii.gz")
    with pytest.raises(
        InputError, match=r"forward_support\.nii\.gz.*of the other direction.*files were swapped"
    ):
        pipeline.certify_folder(folder)


def off_by_one(matrix):
    matrix[:3, 3] += matrix[:3, 1]
    return matrix


def in_lps(matrix):
    return np.diag([-1.0, -1.0, 1.0, 1.0]) @ matrix


@pytest.mark.parametrize(
    ("affine", "named"),
    [
        (off_by_one, "its affine is off by 1 voxel along j"),
        (in_lps, "its affine has x and y turned, as in LPS"),
    ],
)
@pytest.mark.parametrize("name", ["forward", "backward"])
def test_a_grid_that_is_not_the_scans(folder, name, affine, named):
    change_field(folder / f"{name}.nii.gz", affine=affine)
    with pytest.raises(InputError) as caught:
        pipeline.certify_folder(folder)
    assert f"{name}.nii.gz: does not lie on the grid of" in caught.value.sentence
    assert named in caught.value.sentence


@pytest.mark.parametrize(
    ("change", "said"),
    [
        (lambda d: d["grid_space"].update(sha256="0" * 64), "grid_space has the digest 000000000000"),
        (lambda d: d["points_into"].update(sha256="f" * 64), "points_into has the digest ffffffffffff"),
        (
            lambda d: d["points_into"].update(role="SOURCE"),
            "points_into is said to be 'SOURCE', and is TARGET",
        ),
        (lambda d: d.update(direction="backward"), "runs 'backward'"),
        (lambda d: d.pop("grid_space"), "grid_space has the digest None"),
        (lambda d: d.pop("check_point"), "holds no check point"),
    ],
)
def test_a_document_that_speaks_of_another_scan_or_direction(folder, change, said):
    change_sidecar(folder / "forward.json", change)
    assert any(said in sentence for sentence in pipeline.certify_folder(folder).disagreements)
