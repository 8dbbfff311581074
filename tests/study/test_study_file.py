"""Study files: what is right is read, what is wrong is named; the published schema says the same."""

import json
import tomllib
from importlib.resources import files

import jsonschema
import pytest

from volmap.kernels.energies import ENERGIES
from volmap.study.begin import begin_study
from volmap.study.design import Between, Within
from volmap.study.study_file import read_study
from volmap.types import InputError

GOOD = """schema = "volmap-study/1"
name = "rigs"
[design]
within = "both"
between = "subject"
reference = "rig-01"
[settings]
edge_mm = 2.5
seed = 3
[[subject]]
name = "rig-01"
group = "soft"
[[subject.visit]]
name = "v0"
day = 0
labels = "a.nii.gz"
[[subject.visit]]
name = "v1"
day = 7.5
labels = "b.nii.gz"
image = "c.nii.gz"
"""


@pytest.fixture
def study_file(tmp_path):
    for name in "abc":
        (tmp_path / f"{name}.nii.gz").write_bytes(b"volume")

    def written(text):
        (tmp_path / "study.toml").write_text(text, encoding="utf-8")
        return tmp_path / "study.toml"

    return written


def test_a_good_file_is_read(study_file):
    study = read_study(study_file(GOOD))
    assert (study.within, study.between, study.reference) == (Within.BOTH, Between.SUBJECT, "rig-01")
    assert (study.settings.edge_mm, study.settings.seed, study.settings.threads) == (2.5, 3, 1)
    (subject,) = study.subjects
    assert [(v.name, v.day, v.labels.name) for v in subject.visits] == [
        ("v0", 0.0, "a.nii.gz"),
        ("v1", 7.5, "b.nii.gz"),
    ]
    assert subject.visits[1].image == study.folder / "c.nii.gz"


FAULTS = [
    ('name = "rigs"', "", "`name` is missing", True),
    ('"volmap-study/1"', '"volmap-study/2"', "no study file of this program", True),
    ("seed = 3", "seeds = 3", "not known.*seeds", True),
    ("seed = 3", "seed = -1", "too small", True),
    ("seed = 3", "seed = true", "wrong kind.*whole number", True),
    ("edge_mm = 2.5", "edge_mm = 0", "not above 0", True),
    ("edge_mm = 2.5", 'edge_mm = "2.5"', "wrong kind", True),
    ("edge_mm = 2.5", "edge_mm = inf", "not finite", False),  # JSON Schema knows no infinity
    ('within = "both"', 'within = "all"', "none of its choices.*baseline", True),
    (
        'reference = "rig-01"',
        'reference = "rig-02"',
        "none of the subjects",
        False,
    ),  # no schema counts names
    ('reference = "rig-01"', "", "a reference subject goes with", False),
    ('name = "v1"', 'name = "v0"', "visit stands twice", False),
    ('name = "v1"', 'name = "../v1"', "cannot name a folder", True),
    ("day = 7.5", "day = -1", "order of time", False),
    ("day = 7.5", 'day = "2020-01-01"', "wrong kind.*a number", True),
    ('"b.nii.gz"', '"missing.nii.gz"', "not there.*missing.nii.gz", False),
    ('labels = "b.nii.gz"\n', "", "`labels` is missing", True),
    ("[[subject]]", "[subject]", "is not TOML|wrong kind", False),
]


@pytest.mark.parametrize(("old", "new", "sentence", "in_schema"), FAULTS)
def test_a_fault_is_named(study_file, old, new, sentence, in_schema):
    assert old in GOOD
    text = GOOD.replace(old, new, 1)
    with pytest.raises(InputError, match=sentence) as caught:
        read_study(study_file(text))
    assert "\n" not in caught.value.sentence
    assert caught.value.where.startswith("study.toml")
    if in_schema:  # an independent reading: jsonschema with the file in shared/
        assert not _valid(text)


def _schema():
    return json.loads(files("volmap_shared").joinpath("study.schema.json").read_text(encoding="utf-8"))


def _valid(text):
    return jsonschema.Draft202012Validator(_schema()).is_valid(tomllib.loads(text))


def test_the_schema_names_the_energies_of_the_library():
    settings = _schema()["properties"]["settings"]["properties"]
    assert set(settings["energy"]["enum"]) == set(ENERGIES)


def test_the_schema_takes_what_the_program_takes():
    assert _valid(GOOD)


def test_bids_names_say_subject_and_session(tmp_path):
    for name in (
        "sub-02/ses-1/anat/sub-02_ses-1_dseg.nii.gz",
        "sub-02/ses-10/anat/sub-02_ses-10_dseg.nii.gz",
        "sub-02/ses-2/anat/sub-02_ses-2_space-T1w_dseg.nii.gz",
        "sub-01/anat/sub-01_dseg.nii",
        "sub-01/anat/sub-01_T1w.nii.gz",
        "derivatives/other_labels.nii.gz",
    ):
        path = tmp_path / name
        path.parent.mkdir(parents=True, exist_ok=True)
        path.write_bytes(b"volume")
    begun = begin_study(tmp_path)
    study = read_study(begun.file)
    assert [(s.name, [v.name for v in s.visits]) for s in study.subjects] == [
        ("01", ["1"]),
        ("02", ["1", "2", "10"]),  # numbers as numbers
    ]
    assert any("1 more label volumes have no BIDS names" in sentence for sentence in begun.guesses)
    assert any("days are counted" in sentence for sentence in begun.guesses)
    assert _valid(begun.file.read_text(encoding="utf-8"))


def test_other_names_are_ordered_as_they_count(tmp_path):
    for name in ("rig a/visit2_labels.nii.gz", "rig a/visit10_labels.nii.gz", "rig b/x_seg.nrrd"):
        (tmp_path / name).parent.mkdir(exist_ok=True)
        (tmp_path / name).write_bytes(b"volume")
    study = read_study(begin_study(tmp_path).file)
    assert [s.name for s in study.subjects] == ["rig-a", "rig-b"]
    assert [v.labels.name for v in study.subjects[0].visits] == [
        "visit2_labels.nii.gz",
        "visit10_labels.nii.gz",
    ]


def test_a_study_file_is_not_overwritten(tmp_path):
    (tmp_path / "x_labels.nii.gz").write_bytes(b"volume")
    begin_study(tmp_path)
    with pytest.raises(InputError, match=r"study.toml"):
        begin_study(tmp_path)
    begin_study(tmp_path, overwrite=True)


def test_a_folder_without_scans_is_refused(tmp_path):
    with pytest.raises(InputError, match="holds no label volumes"):
        begin_study(tmp_path)
    assert not list(tmp_path.iterdir())
