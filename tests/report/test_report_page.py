"""The page as a reader's browser gets it."""

from __future__ import annotations

import base64
import dataclasses
import io
import re
from html.parser import HTMLParser

import numpy as np
import pytest
from PIL import Image
from report_scene import certificate, lattice, make_inputs, rounded

from volmap.report import ReportInput, methods, report, tables
from volmap.types import Certificate, Gate, InputError, LandmarkPairs, Surface, TetMesh, Verdict, VolumeMap
from volmap.types.notice import caution

VOID = {"meta", "img", "br", "link", "input", "hr"}


class Reader(HTMLParser):
    """Checks nesting; collects tags, attributes and what a reader reads."""

    def __init__(self, text: str) -> None:
        super().__init__(convert_charrefs=True)
        self.open: list[str] = []
        self.tags: list[tuple[str, dict[str, str | None]]] = []
        self.words: list[str] = []
        self.faults: list[str] = []
        self.feed(text)
        self.close()
        self.faults += [f"{tag} never closed" for tag in self.open]

    def handle_starttag(self, tag: str, attrs: list[tuple[str, str | None]]) -> None:
        self.tags.append((tag, dict(attrs)))
        if tag not in VOID:
            self.open.append(tag)

    def handle_startendtag(self, tag: str, attrs: list[tuple[str, str | None]]) -> None:
        self.tags.append((tag, dict(attrs)))

    def handle_endtag(self, tag: str) -> None:
        if not self.open or self.open.pop() != tag:
            self.faults.append(f"</{tag}> at {self.getpos()}")

    def handle_data(self, data: str) -> None:
        if self.open[-1:] != ["style"]:
            self.words.append(data)

    @property
    def text(self) -> str:
        return " ".join(" ".join(self.words).split())

    def of(self, tag: str) -> list[dict[str, str | None]]:
        return [attributes for name, attributes in self.tags if name == tag]


def pictures(reader: Reader) -> list[np.ndarray]:
    found = []
    for image in reader.of("img"):
        source = image["src"] or ""
        assert source.startswith("data:image/png;base64,")
        png = base64.b64decode(source.partition(",")[2], validate=True)
        found.append(np.asarray(Image.open(io.BytesIO(png)).convert("RGB")))
    return found


def check_page(text: str) -> Reader:
    """What holds for every report, whatever it is about."""
    assert text.lstrip().startswith("<!DOCTYPE html>")
    reader = Reader(text)
    assert reader.faults == []
    assert reader.of("html")[0]["lang"] == "en"
    assert reader.text.count(caution()) == 2
    assert reader.text.index(caution()) < 100
    assert not reader.of("script")
    assert not reader.of("link")
    assert not reader.of("iframe")
    for _, attributes in reader.tags:
        for name, value in attributes.items():
            assert not name.startswith("on")
            if name in ("src", "href", "action", "srcset", "data", "poster"):
                assert (value or "").startswith(("data:image/png;base64,", "#"))
    assert not re.search(r"@import|url\(|https?://", text)
    ids = [a["id"] for _, a in reader.tags if "id" in a]
    assert len(ids) == len(set(ids))
    assert {(a["href"] or "")[1:] for a in reader.of("a")} <= set(ids)
    assert all(len(image["alt"] or "") > 30 for image in reader.of("img"))
    assert all(head.get("scope") in ("row", "col", "colgroup") for head in reader.of("th"))
    for pixels in pictures(reader):
        assert pixels.std() > 8
        packed = pixels[::3, ::3].astype(np.int64) @ [65536, 256, 1]
        assert len(np.unique(packed)) > 100
    assert "smoothest guess, not a measurement" in reader.text
    assert "None" not in reader.text
    return reader


def test_the_page_is_whole_and_says_everything(page: str, inputs: ReportInput) -> None:
    reader = check_page(page)
    assert len(reader.of("img")) == 6  # outsides, cut open, parts, cuts, histogram, solve
    words = reader.text
    order = ["Passed with warnings", "What was compared", "in pictures", "By label", "Gates", "Landmarks"]
    order += ["Worst places", "Methods", "What the map cannot know"]
    heads = [words.rindex(o) for o in order]
    assert heads[1:] == sorted(heads[1:])
    assert words.index(order[0]) < words.index("What was compared")
    for gate in inputs.certificate.gates:
        assert gate.name in words
        assert gate.limit_source in words
    assert "not assessed check points" in words
    for shown in ("max 1.4 mm", "max above 1.2 mm", "P99.9 2.1", "(24.0, −2.0, 1.0) mm in B", "0.973"):
        assert shown in words
    assert inputs.source.sha256[:12] in words
    assert "L-A-S (left-handed)" in words
    assert "guide steered the map" in words
    assert "Smallest volume ratio met at any step: 0.54." in words
    assert "rose over the ladder 0.01, 0.1, 1" in words
    assert len(page) < 4e6


def test_the_same_inputs_give_the_same_bytes(page: str) -> None:
    assert report(make_inputs(6)) == page


def test_the_worst_of_the_gates_and_the_reason_come_first() -> None:
    """Truth: by hand for each verdict."""
    assert tables.verdict_sentence(certificate()) == (
        "No gate failed, but 1 of 4 assessed gates warns (boundary distance); 1 gate was not assessed."
    )

    def one(verdict: Verdict) -> str:
        return tables.verdict_sentence(
            Certificate({}, {}, (Gate("round_trip_mm", 1, "mm", 1, 1, "", verdict),))
        )

    assert one(Verdict.PASS) == "The one assessed gate passed."
    assert one(Verdict.FAIL).startswith("1 of 1 assessed gate failed (round trip).")
    assert "nothing is known" in one(Verdict.NOT_ASSESSED)


def test_label_rows_hold_the_known_volumes_and_ratios() -> None:
    """Truth: counts of voxels; a uniform map by 1.1 has J = 1.331 everywhere."""
    inputs = make_inputs(6)
    uniform = VolumeMap(inputs.map.mesh, 1.1 * inputs.map.mesh.points)
    body, inclusion = tables.label_rows(dataclasses.replace(inputs, map=uniform))
    assert {body[k] for k in ("ratio_mean", "ratio_p1", "ratio_p50", "ratio_p99")} == {"1.331"}
    count = int((inputs.source.labels == 2).sum())
    assert inclusion["source_mm3"].replace("\u202f", "") == str(round(count * 1.2 * 1.2 * 2.0))
    assert (body["distance_mean"], body["distance_max"], body["dice"]) == ("0.11", "1.40", "0.973")
    assert (inclusion["distance_max"], inclusion["dice"]) == ("0.50", "0.942")


def test_landmark_errors_are_the_distances_in_the_target(page: str) -> None:
    """Truth: offsets of 0.4 and 1.7 mm along all three axes: 0.4 sqrt 3 and 1.7 sqrt 3."""
    words = Reader(page).text
    assert "bead 6 check" in words
    assert words.count(") 0.69 2.94") == 7
    assert "checks (evidence) 5 0.69 0.69 0.69 2.94 2.94 2.94" in words


HOSTILE = "<script>alert('x')</script> $a_b$ \"><img src=x onerror=y> & {{ 7*7 }} 器官 \x00\u202e"


def test_a_hostile_and_broken_map_still_has_a_plain_page() -> None:
    """Names that try to be markup, a fold, a point outside, a label the target lacks, an unknown gate."""
    given = make_inputs(6)
    names = {1: HOSTILE, 2: HOSTILE}
    images = np.array(given.map.images)
    images[len(images) // 2 + 3] += [0.0, 0.0, 25.0]
    assert given.checks is not None
    assert given.carried is not None
    carried = np.array(given.carried)
    carried[3] = np.nan
    pairs = LandmarkPairs((HOSTILE,) * 7, given.checks.points, given.checks.to_points, given.checks.roles)
    odd = Gate(
        HOSTILE, {HOSTILE: [HOSTILE, float("nan")]}, HOSTILE, HOSTILE, float("inf"), HOSTILE, Verdict.FAIL,
        ({"note": HOSTILE}, {"point_mm": [1, 2, 3], "space": HOSTILE}), HOSTILE,
    )  # fmt: skip
    empty = Surface(np.zeros((0, 3)), np.zeros((0, 3), int), np.zeros((0, 2), int))
    target = dataclasses.replace(
        given.target,
        labels=np.where(given.target.labels == 2, 0, given.target.labels),
        names=names,
        name=HOSTILE,
    )
    text = report(
        dataclasses.replace(
            given,
            map=VolumeMap(given.map.mesh, images),
            certificate=Certificate(
                {}, {}, (odd,), settings={HOSTILE: HOSTILE}, status=HOSTILE, notes=(HOSTILE,)
            ),
            source=dataclasses.replace(given.source, names=names, name=HOSTILE),
            target=target,
            target_surface=empty,
            target_image=None,
            checks=pairs,
            carried=carried,
            title=HOSTILE,
        )
    )
    reader = check_page(text)
    assert len(reader.of("img")) == 6
    assert "<script>alert('x')</script> $a_b$" in reader.text  # read as words, not as markup
    assert "{{ 7*7 }}" in reader.text  # nor as a template
    assert "outside the mesh" in reader.text
    assert "Failed" in reader.text
    assert "\x00" not in text


def test_a_bare_map_has_a_page_that_says_what_is_missing() -> None:
    """One label, no images, no landmarks, no history, no gates."""
    cube, tets = lattice(4)
    mesh = TetMesh(20.0 * rounded(cube), tets, np.ones(len(tets), np.int64))
    given = make_inputs(6)
    bare = ReportInput(
        map=VolumeMap(mesh, 1.2 * mesh.points),
        certificate=Certificate({}, {}, ()),
        source=given.source,
        target=given.target,
        target_surface=TetMesh(1.2 * mesh.points, tets, mesh.labels).interfaces,
    )
    reader = check_page(report(bare))
    assert len(reader.of("img")) == 4  # no parts, no solve
    for words in ("Not assessed", "holds no gates", "No landmarks were given", "none given", "not certified"):
        assert words in reader.text


def test_carried_points_need_landmarks_and_one_each() -> None:
    given = make_inputs(3)
    with pytest.raises(InputError, match="without landmarks"):
        dataclasses.replace(given, checks=None)
    with pytest.raises(InputError, match="wrong shape"):
        dataclasses.replace(given, carried=np.zeros((2, 3)))


def test_progress_is_told() -> None:
    told: list[tuple[str, int, int, str]] = []

    def listen(stage: str, step: int, total: int, note: str = "") -> None:
        told.append((stage, step, total, note))
        if step == 1:
            raise KeyboardInterrupt

    with pytest.raises(KeyboardInterrupt):
        report(make_inputs(3), progress=listen)
    assert told == [("report", 0, 6, "bodies"), ("report", 1, 6, "cut open")]


def test_values_of_gates_carry_the_units_they_have() -> None:
    """Truth: by hand: counts of other things have no unit; "per_label" is told in another table."""
    names = {1: "body"}
    value = {"count": 0, "tets": 38106}
    assert tables.told(value, "tets", names, {"count"}) == ["count 0 tets", "tets 38\u202f106"]
    value = {"mean": 0.25, "p99_9": 3.0, "samples": 12, "per_label": {"1": 5}}
    assert tables.told(value, "mm", names) == ["mean 0.25 mm", "P99.9 3 mm", "samples 12"]
    assert tables.told({"lowest_dice": 0.9, "shell_mm": 0.3}, "Dice", names) == [
        "lowest dice 0.9",
        "shell 0.3 mm",
    ]
    assert tables.told({"1": {"a": 1, "b": 2}}, "1", names) == ["body: a 1, b 2"]
    assert (
        tables.told({str(k): {"a": 1} for k in range(3, 8)}, "1", names)[-1]
        == "and 2 more in the certificate"
    )
    assert tables.told([0.5, 2.0], "1", names) == ["0.5 to 2"]
    assert tables.told(4.0, "mm", names) == ["4 mm"]
    mixed = {"mean": 0.5, "mean_voxels": 0.4, "coverage": 0.9}
    assert tables.told(mixed, "mm", names, {"mean"}) == ["mean 0.5 mm", "mean 0.4 voxel", "coverage 0.9"]
    assert tables.told(float("inf"), "mm", names) == ["infinite"]
    assert tables.told(None, "mm", names) == ["–"]


def test_the_methods_tell_the_edge_of_the_mesh_not_the_one_asked_for() -> None:
    given = make_inputs(3)
    meshed = dataclasses.replace(given.certificate, mesh={"edge_mm": 3.15})
    told = " ".join(methods.methods(dataclasses.replace(given, certificate=meshed)))
    assert "an edge length of 3.15 mm" in told


@pytest.mark.parametrize(
    ("settings", "words"),
    [
        (
            {"first_weight": 0.01, "weight_factor": 3.1623, "last_weight": 10.0, "uncertainty_voxels": 0.1},
            "rose by factors of 3.16 from 0.01 to at most 10 (0.02 V^(1/3))⁻², and no further once "
            "the residual was within the declared 0.1 voxel",
        ),
        ({"energy": "log-strain"}, "the distortion energy “log-strain”, symmetrised"),
        ({}, "minimising a distortion energy, symmetrised"),
    ],
)
def test_the_methods_tell_the_settings_that_are_known(settings: dict[str, object], words: str) -> None:
    given = make_inputs(3)
    bare = dataclasses.replace(given, certificate=Certificate({}, {}, ()), settings=settings)
    told = " ".join(methods.methods(bare))
    assert words in told
    assert "was not certified" in told
    assert [v for k, v in methods.settings_rows(bare) if k == "energy"] == [
        str(settings[k]) for k in settings if k == "energy"
    ]


@pytest.mark.parametrize(
    ("value", "words"),
    [
        (0, "none was inverted"),
        ({"count": 0, "tets": 9}, "none was inverted"),
        ({"count": 2}, "2 were inverted"),
    ],
)
def test_the_methods_tell_the_exact_signs_only_when_they_were_found(value: object, words: str) -> None:
    gate = Gate("inverted_tets", value, "tets", None, None, "", Verdict.PASS)
    given = make_inputs(3)

    def told(gates: tuple[Gate, ...]) -> str:
        return " ".join(methods.methods(dataclasses.replace(given, certificate=Certificate({}, {}, gates))))

    assert words in told((gate,))
    assert "was not certified" in told((dataclasses.replace(gate, verdict=Verdict.NOT_ASSESSED),))
    assert "was not certified" in told(())


def test_the_methods_tell_that_two_solves_were_drawn_together_only_when_they_were() -> None:
    given = make_inputs(3)

    def told(value: object) -> str:
        gate = Gate("order_difference_mm", value, "mm", None, None, "", Verdict.PASS)
        bare = Certificate({}, {}, (gate,))
        return " ".join(methods.methods(dataclasses.replace(given, certificate=bare)))

    assert "drawn to the middle of the two" in told({"mean": 0.1, "alone": {"mean": 0.2}})
    assert "drawn to the middle" not in told({"mean": 0.1})
    assert "drawn to the middle" not in told(None)
