"""Whose is it?  What belongs to the other end is refused; what says nothing must be vouched for."""

import json
from dataclasses import replace

import numpy as np
import pytest

from volmap import pipeline
from volmap.io.nifti import read_image
from volmap.pipeline.belonging import KnownScan, digests_of, grid_of_the_start, require_belonging
from volmap.types import Grid, ImageVolume, InputError, LabelVolume, Landmarks, Level, TetMesh

FINE, COARSE, OTHER = (Grid((6, 6, 6), np.diag([mm, mm, mm, 1.0])) for mm in (1.0, 2.0, 3.0))


def labels(grid, seed=0, name="labels"):
    voxels = np.random.default_rng(seed).integers(0, 3, grid.shape).astype(np.uint16)
    return LabelVolume(grid, voxels, {}, name)


def image(grid, seed=0):
    return ImageVolume(
        grid, np.random.default_rng(seed).normal(size=grid.shape).astype(np.float32), "", "image"
    )


def tet(low, size=4.0):
    corners = low + size * np.array([[0.0, 0, 0], [1, 0, 0], [0, 1, 0], [0, 0, 1]])
    return TetMesh(corners, np.array([[0, 1, 2, 3]]), np.array([1]))


A, B = labels(FINE, 1, "A"), labels(COARSE, 2, "B")
IMAGE_A, IMAGE_B = image(OTHER, 3), image(OTHER, 4)
START = KnownScan("A", FINE, frozenset({A.sha256, IMAGE_A.sha256}), tet(0.0), "source")
END = KnownScan("B", COARSE, frozenset({B.sha256, IMAGE_B.sha256}), tet(20.0), "target")


def codes(thing, start=START, end=END, **options):
    return [(f.level, f.code) for f in require_belonging(thing, start, end, name="thing.nii", **options)]


def turned(scan, side):
    return replace(scan, side=side, turn="leave out --reverse")


NOTE, WARN = Level.NOTE, Level.WARN


def test_the_voxels_of_the_scan_it_comes_from_are_not_taken_for_the_others_in_silence():
    # law: said of the start's voxels alone; nothing tells where both scans have the same, or neither has them
    (said,) = grid_of_the_start(FINE, START, END, name="onto.nii")
    assert (said.level, said.code, said.where) == (WARN, "onto-the-start", "onto.nii")
    assert "the voxel grid of A" in said.sentence
    assert grid_of_the_start(COARSE, START, END, name="onto.nii") == ()
    assert grid_of_the_start(OTHER, START, END, name="onto.nii") == ()
    assert grid_of_the_start(FINE, START, replace(END, grid=FINE), name="onto.nii") == ()


@pytest.mark.parametrize(
    ("thing", "options", "said"),
    [
        (A, {}, []),
        (IMAGE_A, {}, []),
        (IMAGE_A, {"belongs_to": "source"}, []),
        (ImageVolume(FINE, A.labels.astype(np.float32)), {}, []),
        (image(FINE), {}, [(NOTE, "told-by-grid")]),
        (labels(FINE, 9), {}, [(NOTE, "told-by-grid")]),
        (image(OTHER), {"belongs_to": "source"}, [(WARN, "vouched-for")]),
        (image(COARSE), {"belongs_to": "source"}, [(WARN, "vouched-for")]),
    ],
    ids=[
        "its labels",
        "its image, known by digest though its grid is another",
        "the same, vouched for too",
        "its labels read as an image",
        "same grid",
        "other labels on the same grid",
        "another grid, vouched for",
        "the end's grid, vouched for",
    ],
)
def test_what_is_carried(thing, options, said):
    assert codes(thing, **options) == said


@pytest.mark.parametrize(
    ("thing", "options", "words"),
    [
        (
            B,
            {},
            "thing.nii: is a volume of B (its digest says so), but would be carried from A; to carry it the "
            "other way add --reverse",
        ),
        (IMAGE_B, {}, "is a volume of B (its digest says so)"),
        (B, {"belongs_to": "source"}, "is a volume of B (its digest says so)"),
        (ImageVolume(COARSE, B.labels.astype(np.float32)), {}, "is a volume of B (its digest says so)"),
        (
            image(COARSE),
            {},
            "has the voxel grid of B, but would be carried from A; to carry it the other way add --reverse",
        ),
        (
            image(OTHER),
            {},
            "neither its digest nor its voxel grid, found 6 x 6 x 6 voxels of 3 x 3 x 3 mm, "
            "expected 6 x 6 x 6 voxels of 1 x 1 x 1 mm, as A has; if it lies in the world of A, say "
            "--belongs-to source",
        ),
        (
            image(FINE),
            {"belongs_to": "target"},
            "is said to belong to B (target), but would be carried from A",
        ),
        (A, {"belongs_to": "target"}, "is said to belong to B (target), but would be carried from A"),
    ],
)
def test_what_is_refused_and_in_which_words(thing, options, words):
    with pytest.raises(InputError) as caught:
        codes(thing, **options)
    assert caught.value.refused
    assert words in caught.value.sentence


def test_a_volume_of_a_scan_the_way_passes_through_is_refused():
    middle = KnownScan("M", FINE, frozenset({labels(FINE, 7).sha256}))
    assert codes(labels(FINE, 8), between=[middle]) == [(NOTE, "told-by-grid")]
    with pytest.raises(InputError, match=r"is a volume of M .* name only the maps that lead on from M"):
        codes(labels(FINE, 7), between=[middle])


def test_in_reverse_the_remedies_turn_round():
    start, end = turned(END, "target"), turned(START, "source")
    assert codes(B, start, end) == []
    assert codes(image(OTHER), start, end, belongs_to="target") == [(WARN, "vouched-for")]
    with pytest.raises(InputError, match="leave out --reverse"):
        codes(A, start, end)
    with pytest.raises(InputError, match="say --belongs-to target"):
        codes(image(OTHER), start, end)


def test_one_grid_for_both_scans_is_told_and_settled_by_the_user():
    end = replace(END, grid=FINE)
    assert codes(image(FINE), end=end) == [(WARN, "either-scan")]
    assert codes(image(FINE), end=end, belongs_to="source") == [(WARN, "vouched-for")]
    assert codes(A, end=end) == []


def spread(low, n, size=4.0):
    """Points well inside `tet(low, size)`: barycentric weights of at least a tenth."""
    weights = 0.1 + 0.6 * np.random.default_rng(0).dirichlet(np.ones(4), n)
    return weights @ tet(low, size).points


@pytest.mark.parametrize(
    ("n_start", "n_end", "n_nowhere", "said"),
    [
        (100, 0, 0, []),
        (96, 4, 0, []),
        (48, 52, 0, []),
        (40, 60, 0, [(WARN, "nearer-the-end")]),
        (40, 0, 60, []),
        (0, 5, 95, []),
        (0, 0, 100, []),
    ],
)
def test_points_are_looked_up_in_both_bodies(n_start, n_end, n_nowhere, said):
    """Counts by construction: who lies in which body is known in closed form."""
    points = np.concatenate([spread(0.0, n_start), spread(20.0, n_end), np.full((n_nowhere, 3), 90.0)])
    marks = Landmarks(tuple(map(str, range(100))), points)
    assert codes(marks) == said
    if said:
        (finding,) = require_belonging(marks, START, END, name="m.csv")
        assert "40 of 100 points lie inside the body of A" in finding.sentence
        assert "60 inside that of B" in finding.sentence
        assert codes(marks, belongs_to="source") == [(WARN, "vouched-for")]


def test_points_that_all_lie_in_the_end_body_are_refused():
    marks = Landmarks(tuple(map(str, range(10))), spread(20.0, 10))
    with pytest.raises(InputError, match="0 of 10 points lie inside the body of A") as caught:
        codes(marks)
    assert caught.value.refused
    assert "add --reverse" in caught.value.sentence
    assert codes(marks, belongs_to="source") == [(WARN, "vouched-for")]


def test_labels_on_a_shared_grid_are_looked_up_like_points():
    """A region drawn in the end scan lies in the end body, whatever the grid says."""
    grid = Grid((30, 30, 30), np.eye(4))
    start, end = replace(START, grid=grid), replace(END, grid=grid)
    voxels = np.zeros(grid.shape, np.uint16)
    voxels[21, 21, 21] = 1
    with pytest.raises(InputError, match="0 of 1 points lie inside the body of A"):
        codes(LabelVolume(grid, voxels), start, end)
    assert codes(LabelVolume(grid, np.roll(voxels, -20, (0, 1, 2))), start, end) == [(WARN, "either-scan")]


def test_a_picture_with_whole_numbers_is_known_either_way():
    whole = ImageVolume(FINE, A.labels.astype(np.float32))
    assert set(digests_of(whole)) == set(digests_of(A)) == {A.sha256, whole.sha256}
    assert next(digests_of(A)) == A.sha256
    holes = np.full(FINE.shape, np.nan, np.float32)
    assert list(digests_of(ImageVolume(FINE, holes))) == [ImageVolume(FINE, holes).sha256]


def test_an_image_named_when_mapping_is_known_later(third_visit, tmp_path):
    certificate = json.loads((third_visit.across / "certificate.json").read_text(encoding="utf-8"))
    digest = read_image(third_visit.known).sha256
    assert certificate["settings"]["images"] == {"source": {"name": "known.nii.gz", "sha256": digest}}
    assert pipeline.certify_folder(third_visit.across).disagreements == ()
    carry = dict(thing=third_visit.known, through=third_visit.across, kind="image")
    found = pipeline.carry_file(out=tmp_path / "there.nii.gz", **carry)
    assert not {f.code for f in found} & {"told-by-grid", "vouched-for", "either-scan"}
    words = r"known\.nii\.gz: is a volume of before\.nii\.gz .* leave out --reverse"
    with pytest.raises(InputError, match=words):
        pipeline.carry_file(out=tmp_path / "back.nii.gz", reverse=True, **carry)
    assert not list(tmp_path.glob("back*"))


def test_another_image_needs_the_users_word_and_the_output_keeps_it(third_visit, tmp_path):
    carry = dict(thing=third_visit.other, through=third_visit.across, out=tmp_path / "o.nii.gz", kind="image")
    with pytest.raises(InputError, match=r"other\.nii\.gz: nothing tells that it belongs to before\.nii\.gz"):
        pipeline.carry_file(**carry)
    assert not list(tmp_path.iterdir())
    found = pipeline.carry_file(**carry, belongs_to="source")
    assert "vouched-for" in {f.code for f in found}
    told = json.loads((tmp_path / "o.nii.gz.json").read_text(encoding="utf-8"))
    assert told["belongs_to"] == "before.nii.gz, on the word of the user"
    assert "vouched-for" in {f["code"] for f in told["findings"]}
    assert told["from"]["name"] == "before.nii.gz"
    assert told["through"] == [
        {
            "map": "map 0 2",
            "from": "before.nii.gz",
            "to": "third.nii.gz",
            "direction": "from SOURCE to TARGET",
        }
    ]
    assert "research" in told["notice"]
