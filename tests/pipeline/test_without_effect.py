"""Options that would change nothing on the thing at hand are faults of use.

Truth: the rule of the house, whoever says something expects an effect (common practice, no source).
"""

import shutil

import nibabel
import numpy as np
import pytest
from volmap_cli.main import main

KINDS = ("points", "doses", "lines", "labels", "image", "vectors")
# Every option that belongs to some kinds of things alone, and the kinds it has an effect on.
EFFECTS = {
    ("--labels", "one-hot"): {"labels"},
    ("--labels", "nearest"): {"labels"},
    ("--image", "cubic"): {"image", "vectors"},
    ("--onto", "image.nii.gz"): {"labels", "image", "vectors"},
    ("--axes", "lps"): {"vectors"},
    ("--frame", "0"): {"labels", "image"},
    ("--threshold", "1.5"): {"labels", "image"},  # makes labels of an image
    ("--names", "names.tsv"): {"labels"},
    ("--vertices-only",): {"lines"},
    ("--rule", "density"): {"doses", "image"},
}


@pytest.fixture(scope="module")
def things(small_pair, tmp_path_factory):
    """One of each kind, all in the world of SOURCE."""
    room = tmp_path_factory.mktemp("kinds")
    (room / "points.csv").write_text("name,x_mm,y_mm,z_mm\na,1,2,3\n", encoding="utf-8")
    (room / "doses.csv").write_text("name,x_mm,y_mm,z_mm,dose_mg\na,1,2,3,4\n", encoding="utf-8")
    (room / "lines.csv").write_text("line,x_mm,y_mm,z_mm\na,1,2,3\na,2,2,3\n", encoding="utf-8")
    (room / "names.tsv").write_text("index\tname\n1\tone\n2\ttwo\n", encoding="utf-8")
    scan = nibabel.load(small_pair.source)
    shutil.copyfile(small_pair.source, room / "labels.nii.gz")
    values = np.random.default_rng(1).normal(size=(*scan.shape, 1, 3)).astype(np.float32)
    for name, stored, intent in (("image", values[..., 0, 0], "none"), ("vectors", values, "vector")):
        picture = nibabel.Nifti1Image(stored, scan.affine)
        picture.header.set_intent(intent)
        picture.header.set_xyzt_units("mm")
        nibabel.save(picture, room / f"{name}.nii.gz")
    return room


@pytest.mark.parametrize("kind", KINDS)
@pytest.mark.parametrize("option", EFFECTS, ids=" ".join)
def test_an_option_has_an_effect_or_is_refused(things, small_pair, tmp_path, capsys, kind, option):
    ending = "csv" if kind in ("points", "doses", "lines") else "nii.gz"
    own = {"doses": ["--rule", "dose=value"], "vectors": ["--rule", "turn"]}.get(kind, [])
    if option == ("--rule", "density"):
        own = []
        if kind == "vectors":
            pytest.skip("that no rule for vectors fits is tested with the rules")
    said = [str(things / word) if (things / word).exists() else word for word in option]
    out = tmp_path / f"out.{ending}"
    command = [
        "carry",
        str(things / f"{kind}.{ending}"),
        "--through",
        str(small_pair.folder),
        "--out",
        str(out),
    ]
    status = main([*command, "--belongs-to", "source", "--quiet", *own, *said])
    told = capsys.readouterr().err
    if kind in EFFECTS[option]:
        assert status == 0, told
    else:
        assert status == 2, told
        assert option[0] in told
        assert "no effect" in told
        assert not list(tmp_path.iterdir())


@pytest.mark.parametrize("kind", ["points", "doses", "lines"])
def test_only_volumes_are_told_what_they_hold(things, small_pair, tmp_path, capsys, kind):
    command = [
        "carry",
        str(things / f"{kind}.csv"),
        "--through",
        str(small_pair.folder),
        "--rule",
        "dose=value",
    ]
    if kind != "doses":
        command = command[:-2]
    assert main([*command, "--out", str(tmp_path / "o.csv"), "--as", "image"]) == 2
    assert "--as image has no effect" in capsys.readouterr().err
