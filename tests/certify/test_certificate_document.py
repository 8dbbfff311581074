"""The document's schema, its way back, and a doctored one."""

import copy
import json

import numpy as np
import pytest

from volmap.certify import as_document, certify, compare, from_document, not_repeated
from volmap.certify.document import plain
from volmap.types import Certificate, Gate, InputError, Verdict
from volmap.types.notice import caution


@pytest.fixture(scope="module")
def gates(sound, table):
    return certify(sound, table)[0]


@pytest.fixture
def document(sound, gates, table):
    certificate = Certificate(
        source={"name": "a.nii.gz", "sha256": sound.source.sha256, "labels": {1: {"mm3": np.float64(3)}}},
        target={"name": "b.nii.gz", "sha256": sound.target.sha256, "labels": {}},
        gates=gates,
        measures=certify(sound, table)[1],
        seconds={"map": 1.5},
        peak_mb=120,
        status="done",
        notes=("a note",),
    )
    return json.loads(json.dumps(as_document(certificate), allow_nan=False))


def test_the_schema_of_the_contract(document):
    wanted = "schema notice source target settings versions mesh gates measures seconds peak_mb verdict"
    assert set(wanted.split()) <= set(document)
    assert (document["schema"], document["notice"]) == ("volmap-certificate/1", caution())
    assert document["verdict"] == "pass"
    for gate in document["gates"]:
        assert {"name", "value", "unit", "warn", "fail", "limit_source", "verdict", "where"} <= set(gate)
        assert all(set(p) == {"point_mm", "space", "note"} for p in gate["where"])
        assert len(gate["where"]) <= 10


def test_there_and_back(document):
    again = as_document(from_document(document))
    assert json.loads(json.dumps(again)) == document


def test_a_faithful_certificate_agrees(document, gates):
    assert compare(from_document(document), gates) == []
    assert not_repeated(from_document(document), gates) == ()


def gate_of(document, name):
    return next(g for g in document["gates"] if g["name"] == name)


def disagreements(document, gates):
    return [(d.gate, d.what) for d in compare(from_document(document), gates)]


def test_doctored_values_are_named(document, gates):
    changed = copy.deepcopy(document)
    gate_of(changed, "inverted_tets")["value"]["count"] = 3
    assert disagreements(changed, gates) == [("inverted_tets", "value.count")]
    sentence = compare(from_document(changed), gates)[0].sentence
    assert "inverted_tets: value.count is stored as 3 and recomputed as 0" in sentence
    gate_of(document, "boundary_distance_mm")["fail"]["max_above"] = 99.0
    gate_of(document, "overlap")["value"]["per_label"]["target"]["1"]["dice"] += 1e-3
    gate_of(document, "check_points_mm")["value"]["mean"] *= 1 + 1e-6
    assert disagreements(document, gates) == [
        ("boundary_distance_mm", "fail.max_above"),
        ("overlap", "value.per_label.target.1.dice"),
    ]


def test_doctored_verdicts_are_named(document, gates):
    gate_of(document, "volume_ratio")["verdict"] = "warn"
    document["verdict"] = "warn"
    assert disagreements(document, gates) == [("volume_ratio", "verdict")]


def test_a_gate_left_out_or_added_is_named(document, gates):
    document["gates"] = [g for g in document["gates"] if g["name"] != "field_folds"]
    document["gates"].append(gate_of(document, "overlap") | {"name": "beauty"})
    assert disagreements(document, gates) == [("field_folds", "gate"), ("beauty", "gate")]


def test_what_cannot_be_run_again_is_said_and_not_compared(document, gates):
    mute = tuple(
        Gate(g.name, None, g.unit, g.warn, g.fail, g.limit_source, Verdict.NOT_ASSESSED)
        if g.name == "order_difference_mm"
        else g
        for g in gates
    )
    assert compare(from_document(document), mute) == []
    assert not_repeated(from_document(document), mute) == ("order_difference_mm",)


@pytest.mark.parametrize(
    ("change", "fault"),
    [
        (lambda d: d.update(schema="volmap-certificate/2"), "another schema"),
        (lambda d: d.pop("mesh"), "missing mesh"),
        (lambda d: d.update(extra=1), "unknown extra"),
        (lambda d: d.update(source=[]), "source is not an object"),
        (lambda d: d.update(gates={}), "gates is not a list"),
        (lambda d: d.update(peak_mb="1"), "peak_mb is not a number"),
        (lambda d: d["seconds"].update(map=None), "seconds are not numbers"),
        (lambda d: d["gates"].append(d["gates"][0]), "occurs twice"),
        (lambda d: d["gates"][2].update(verdict="fine"), "gate 2: a verdict is unknown"),
        (lambda d: d["gates"][2].pop("where"), "gate 2: the keys"),
        (lambda d: d["gates"][2].update(where=["here"]), "not an object"),
        (lambda d: d["gates"][2].update(unit=None), "unit is not text"),
        (lambda d: d.update(notes="a"), "notes is not a list"),
        (lambda d: d["gates"].__setitem__(0, 3), "gate 0: not an object"),
    ],
)
def test_documents_that_are_not_certificates(document, change, fault):
    change(document)
    with pytest.raises(InputError, match=fault):
        from_document(document)


def test_a_verdict_that_does_not_follow_is_refused(document):
    document["verdict"] = "fail"
    with pytest.raises(InputError, match="does not follow") as caught:
        from_document(document)
    assert caught.value.refused
    with pytest.raises(InputError, match="not an object"):
        from_document([])


def test_plain_values():
    found = plain(
        {1: np.float32(0.5), "a": (np.int64(2), np.bool_(True), float("nan"), None), "b": np.eye(2)}
    )
    assert found == {"1": 0.5, "a": [2, True, None, None], "b": [[1.0, 0.0], [0.0, 1.0]]}
    assert type(found["a"][1]) is bool
    with pytest.raises(TypeError, match="cannot hold"):
        plain({"a": object()})
