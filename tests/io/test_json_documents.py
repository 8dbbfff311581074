"""JSON: strict, the same bytes for the same document, safe for numpy."""

import contextlib
import json
from enum import StrEnum
from pathlib import Path

import numpy as np
import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from volmap.io.json_documents import json_text, read_json, write_json
from volmap.types import InputError


class Word(StrEnum):
    YES = "yes"


def test_numpy_values_enums_and_numbers_that_are_not_finite():
    document = {
        "b": np.float64(0.1), "a": np.int64(3), "n": np.nan, "i": [np.inf, 1.0], "w": Word.YES,
        "x": np.array([[1.0, np.nan]]), "t": (np.bool_(True), None), 5: np.float32(0.5), "ü": "é",
    }  # fmt: skip
    text = json_text(document)
    assert json.loads(text) == {
        "b": 0.1, "a": 3, "n": None, "i": [None, 1.0], "w": "yes", "x": [[1.0, None]], "t": [True, None],
        "5": 0.5, "ü": "é",
    }  # fmt: skip
    assert text.endswith("}\n")
    assert next(iter(json.loads(text))) == "b"
    assert list(json.loads(json_text({"b": 1, "a": 2}, sort=True))) == ["a", "b"]


def test_a_path_has_no_word_in_json(tmp_path):
    # Contract: no path may leave the program.
    with pytest.raises(TypeError):
        write_json(tmp_path / "a.json", {"file": Path("/home/somebody")})
    assert list(tmp_path.iterdir()) == []


@pytest.mark.parametrize(
    ("text", "words"),
    [("{", "not JSON"), ("[1]", "one JSON object"), ('{"a": NaN}', "finite"), ('{"a": Infinity}', "finite"),
     ('{"a": 1, "a": 2}', "twice"), ("[" * 100000, "JSON"), ('{"a": ' + "1" * 5000 + "}", "JSON"),
     (" ", "not JSON")],
)  # fmt: skip
def test_what_is_refused(tmp_path, text, words):
    (tmp_path / "a.json").write_text(text)
    with pytest.raises(InputError, match=words) as caught:
        read_json(tmp_path / "a.json")
    assert caught.value.where.startswith("a.json")


PLAIN = st.recursive(
    st.none() | st.booleans() | st.integers() | st.floats(allow_nan=False, allow_infinity=False) | st.text(),
    lambda inner: st.lists(inner, max_size=3) | st.dictionaries(st.text(), inner, max_size=3),
    max_leaves=8,
)
FUZZ = settings(max_examples=80, deadline=None, suppress_health_check=[HealthCheck.function_scoped_fixture])


@FUZZ
@given(document=st.dictionaries(st.text(), PLAIN, max_size=3))
def test_reading_undoes_writing(tmp_path, document):
    # Law: writing and reading is the identity (lone surrogates, which no UTF-8 has, aside).
    write_json(tmp_path / "a.json", document, overwrite=True)
    assert read_json(tmp_path / "a.json") == document


@FUZZ
@given(data=st.binary(max_size=100))
def test_random_bytes(tmp_path, data):
    (tmp_path / "a.json").write_bytes(data)
    with contextlib.suppress(InputError):
        read_json(tmp_path / "a.json")
