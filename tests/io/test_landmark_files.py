"""Landmark files after the contract: header, roles, numbers, line numbers."""

import contextlib

import numpy as np
import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from volmap.io import landmarks
from volmap.io.landmarks import read_landmarks, read_pairs, write_landmarks, write_pairs
from volmap.types import InputError, LandmarkPairs, Landmarks

POINTS = "name,x_mm,y_mm,z_mm"
PAIRS = POINTS + ",to_x_mm,to_y_mm,to_z_mm"


def write(path, text):
    path.write_bytes(text.encode("utf-8"))
    return path


def test_points_with_byte_order_mark_quotes_and_other_line_ends(tmp_path):
    text = '\ufeffname,x_mm,y_mm,z_mm,role\r\n"bead, 1",1.5,-2,3e1,guide\r\n\r\nbœad 2,0,0,-0.125,check\r\n'
    marks = read_landmarks(write(tmp_path / "a.csv", text))
    assert marks.names == ("bead, 1", "bœad 2")
    assert marks.points.tolist() == [[1.5, -2, 30], [0, 0, -0.125]]
    assert marks.roles == ("guide", "check")
    assert marks.sd_mm is None


def test_a_role_that_is_not_stated_is_check(tmp_path):
    assert read_landmarks(write(tmp_path / "a.csv", f"{POINTS}\na,1,2,3\n")).roles == ("check",)


def test_optional_columns_in_either_order(tmp_path):
    marks = read_landmarks(write(tmp_path / "a.csv", f"{POINTS},sd_mm,role\na,1,2,3,0.5,guide\n"))
    assert marks.sd_mm.tolist() == [0.5]
    assert marks.roles == ("guide",)
    pairs = read_pairs(write(tmp_path / "b.csv", f"{PAIRS},sd_mm,role\na,1,2,3,4,5,6,0.5,guide\n"))
    assert pairs.points.tolist() == [[1, 2, 3]]
    assert pairs.to_points.tolist() == [[4, 5, 6]]
    assert pairs.sd_mm.tolist() == [0.5]


@pytest.mark.parametrize(
    ("text", "words", "line"),
    [
        ("", "empty", ""),
        ("\n\n", "no header", ""),
        (f"{POINTS}\n", "no landmark", ""),
        ("name,x,y,z\na,1,2,3\n", "header", "line 1"),
        ("name;x_mm;y_mm;z_mm\na;1;2;3\n", "header", "line 1"),
        ("x_mm,y_mm,z_mm,name\n1,2,3,a\n", "header", "line 1"),
        (f"{POINTS},role,role\na,1,2,3,check,check\n", "header", "line 1"),
        (f"{PAIRS}\na,1,2,3,4,5,6\n", "header", "line 1"),
        (f"{POINTS}\na,1,2,3\nb,1,2\n", "columns", "line 3"),
        (f"{POINTS}\na,1,2,3,check\n", "columns", "line 2"),
        (f"{POINTS}\na,1,2,three\n", "z_mm is not a finite", "line 2"),
        (f"{POINTS}\na,1,2,3\n\nb,nan,2,3\n", "x_mm is not a finite", "line 4"),
        (f"{POINTS}\na,1,inf,3\n", "y_mm is not a finite", "line 2"),
        (f"{POINTS}\na,1_0,2,3\n", "x_mm is not a finite", "line 2"),
        (f"{POINTS}\na,1,2,3\na,4,5,6\n", "twice", "line 3"),
        (f"{POINTS},role\na,1,2,3,guide\na,1,2,3,check\n", "both guide and check", "line 3"),
        (f"{POINTS},role\na,1,2,3,Guide\n", "role", "line 2"),
        (f"{POINTS}\n,1,2,3\n", "no name", "line 2"),
        (f"{POINTS},sd_mm\na,1,2,3,0\n", "above 0", "line 2"),
        (f'{POINTS}\n"a,1,2,3\n', "not CSV", "line"),
    ],
)
def test_a_fault_is_told_with_its_line(tmp_path, text, words, line):
    with pytest.raises(InputError, match=words) as caught:
        read_landmarks(write(tmp_path / "beads.csv", text))
    assert caught.value.sentence.startswith(f"beads.csv, {line}" if line else "beads.csv: ")
    assert not caught.value.refused


def test_latin_1_is_told(tmp_path):
    (tmp_path / "a.csv").write_bytes(f"{POINTS}\nkn\xf6chel,1,2,3\n".encode("latin-1"))
    with pytest.raises(InputError, match="UTF-8"):
        read_landmarks(tmp_path / "a.csv")


NAMES = st.lists(
    st.text(st.characters(exclude_categories=("Cs", "Cc")), min_size=1).map(str.strip).filter(bool),
    min_size=1, max_size=5, unique=True,
)  # fmt: skip
FUZZ = settings(max_examples=80, deadline=None, suppress_health_check=[HealthCheck.function_scoped_fixture])


@FUZZ
@given(names=NAMES, seed=st.integers(0, 10**6))
def test_reading_undoes_writing(tmp_path, names, seed):
    # Law: the same doubles come back, bit for bit.
    rng = np.random.default_rng(seed)
    a, b = rng.normal(size=(2, len(names), 3)) * 10.0 ** rng.integers(-6, 6)
    roles = tuple(rng.choice(["guide", "check"], len(names)).tolist())
    write_landmarks(tmp_path / "a.csv", Landmarks(tuple(names), a, roles), overwrite=True)
    back = read_landmarks(tmp_path / "a.csv")
    assert (back.names, back.roles) == (tuple(names), roles)
    assert np.array_equal(back.points, a)
    write_pairs(tmp_path / "b.csv", LandmarkPairs(tuple(names), a, b, roles), overwrite=True)
    pairs = read_pairs(tmp_path / "b.csv")
    assert np.array_equal(pairs.points, a)
    assert np.array_equal(pairs.to_points, b)


@FUZZ
@given(data=st.binary(max_size=200), headed=st.booleans())
def test_random_bytes(tmp_path, data, headed):
    (tmp_path / "a.csv").write_bytes((POINTS.encode() + b"\n" if headed else b"") + data)
    with contextlib.suppress(InputError):
        read_landmarks(tmp_path / "a.csv")


def _large(path, spoil=None):
    rows = np.random.default_rng(0).normal(size=(20_000, 3)).tolist()
    lines = [f" p{i},{x!r},{y!r}, {z!r},guide,0.5" for i, (x, y, z) in enumerate(rows)]
    if spoil is not None:
        lines[17_000] = spoil
    text = "name,x_mm,y_mm,z_mm,role,sd_mm\n" + "\n".join(lines) + "\n"
    path.write_text(text, encoding="utf-8")
    return np.array(rows)


def test_large_files_are_read_by_columns_to_the_same(tmp_path, monkeypatch):
    """Law: the fast reader and the one that reads line by line give the same landmarks."""
    points = _large(tmp_path / "l.csv")
    fast = landmarks.read_landmarks(tmp_path / "l.csv")
    monkeypatch.setattr(landmarks, "_LARGE", 2**40)
    slow = landmarks.read_landmarks(tmp_path / "l.csv")
    np.testing.assert_array_equal(fast.points, points)
    np.testing.assert_array_equal(slow.points, points)
    assert (fast.names, fast.roles, fast.sd_mm.tolist()) == (slow.names, slow.roles, slow.sd_mm.tolist())


@pytest.mark.parametrize(
    ("spoil", "said"),
    [
        ("p5,1,2,3,guide,1", "a landmark's name stands twice"),
        ("q,1,2,x,guide,1", "z_mm is not a finite number"),
        ("q,1,2,nan,guide,1", "z_mm is not a finite number"),
        ("q,1,2,3,steer,1", "role is unknown"),
        ("q,1,2,3,guide,0", "sd_mm is not above 0"),
        (",1,2,3,guide,1", "has no name"),
        ("q,1,2,3,guide", "wrong number of columns"),
    ],
)
def test_large_files_that_are_damaged_name_the_line(tmp_path, spoil, said):
    _large(tmp_path / "l.csv", spoil)
    with pytest.raises(InputError) as caught:
        landmarks.read_landmarks(tmp_path / "l.csv")
    assert said in caught.value.sentence
    assert "line 17002" in caught.value.sentence
