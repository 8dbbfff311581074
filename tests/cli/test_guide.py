"""The guide: pages on a terminal, and the numbers that stand in them, recomputed."""

import json
import re
from typing import get_args

import numpy as np
import pytest
from volmap_cli.main import main
from volmap_cli.pages import as_text, pages

from volmap.types.notice import caution

TOPICS = tuple(pages())


def flat(topic):
    return " ".join(pages()[topic].markdown.split())


def number_after(words, text):
    """The number after some words of a page, up to the next blank."""
    found = re.search(re.escape(words) + r"\s*([-+]?\d+(?:\.\d+)?)", text)
    assert found, words
    return float(found[1])


def test_without_a_topic_it_lists_them(capsys):
    assert main(["guide"]) == 0
    told = capsys.readouterr().out
    for page in pages().values():
        assert re.search(rf"^  {page.topic} +{page.title}$", told, re.MULTILINE)
    for topic in ("directions", "carrying", "certificate", "measures", "limits", "formats", "privacy"):
        assert topic in TOPICS


@pytest.mark.parametrize("topic", TOPICS)
def test_every_page_says_all_its_words_in_lines_that_fit(topic, capsys, monkeypatch):
    monkeypatch.setenv("COLUMNS", "72")
    assert main(["guide", topic]) == 0
    lines = capsys.readouterr().out.splitlines()
    assert lines[0] == pages()[topic].title
    assert lines[-1] == caution()
    assert max(map(len, lines[:-1])) <= 72
    letters = re.compile(r"[^a-zA-Z0-9]")
    shown, stored = letters.sub("", "".join(lines[1:-1])), letters.sub("", pages()[topic].markdown)
    if "|" not in pages()[topic].markdown:
        assert shown == stored
    assert sorted(shown) == sorted(stored)  # cells of tables stand side by side


@pytest.mark.parametrize("width", [40, 60, 100, 300])
def test_tables_fit_any_terminal(width):
    for page in pages().values():
        assert max(map(len, as_text(page, width).splitlines())) <= min(width, 100)


def test_json_holds_the_page_as_stored(capsys):
    assert main(["guide", "directions", "--json"]) == 0
    document = json.loads(capsys.readouterr().out)
    assert document["text"] == pages()["directions"].markdown
    assert document["notice"] == caution()
    assert main(["guide", "--json"]) == 0
    assert [t["topic"] for t in json.loads(capsys.readouterr().out)["topics"]] == list(TOPICS)


def test_an_unknown_topic_is_a_usage_fault_with_the_list(capsys):
    assert main(["guide", "direction"]) == 2
    told = capsys.readouterr().err
    for topic in TOPICS:
        assert topic in told


def test_worked_number_of_directions():
    # closed form: phi(x) = 2 x, its inverse y / 2
    text = flat("directions")
    assert "y = 2 x" in text
    x = number_after("At x =", text)
    y = 2 * x
    assert number_after("the forward displacement is", text) == y - x
    assert number_after("matching point in TARGET is", text) == y
    assert number_after("backward displacement there is", text) == y / 2 - y
    assert number_after("forward field at 20 mm gives", text) == -y
    # (the forward field at 20 says +20; turned round -20, where -10 is right)
    assert number_after("mm: wrong by", text) == abs(-y - (y / 2 - y))


def test_signs_of_lps_in_directions():
    # law: LPS = diag(-1, -1, 1) RAS, for places and vectors (DICOM PS3.3 C.7.6.2.1.1; NIfTI-1)
    text = flat("directions")
    triples = [
        np.array([float(v) for v in found])
        for found in re.findall(r"\((-?[\d.]+), (-?[\d.]+), (-?[\d.]+)\)", text)
    ]
    assert len(triples) == 6
    turn = np.array([-1, -1, 1])
    for ras, lps in ((0, 2), (1, 3), (4, 5)):
        assert np.array_equal(turn * triples[ras], triples[lps])


def test_worked_number_of_carrying():
    # closed forms of each rule for F = diag(2, 1.25, 1.25), by numpy and not by the program's own rules
    text = flat("carrying")
    gradient = np.diag([2.0, 1.25, 1.25])
    j = np.linalg.det(gradient)
    assert number_after("so J =", text) == j
    assert number_after("density of 100 becomes", text) == 100 / j
    assert number_after("(now", text) == j
    vector = np.array([1.0, 0, 0])
    truth = {
        "line": gradient @ vector,
        "turn": vector,  # a symmetric F turns nothing
        "gradient": np.linalg.inv(gradient).T @ vector,
        "flux": gradient @ vector / j,
    }
    for rule, expected in truth.items():
        found = re.search(rf"\(([\d.]+), ([\d.]+), ([\d.]+)\) by `{rule}`", text)
        assert found
        assert [float(v) for v in found.groups()] == pytest.approx(expected)


def test_every_mode_and_rule_of_carry_stands_in_the_page():
    from volmap.carry.settings import ImageMode, LabelMode
    from volmap.types import Rule

    table = [line for line in pages()["carrying"].markdown.splitlines() if line.startswith("|")]
    how = " ".join(line.split("|")[2] for line in table)
    for rule in Rule:
        assert f"--rule {rule.value}`" in how
    for mode in get_args(LabelMode):
        assert f"--labels {mode}`" in how
    for mode in get_args(ImageMode):
        assert mode in how
    said = set(re.findall(r"--rule (\w+)`", how)) - {rule.value for rule in Rule}
    assert not said


def test_worked_number_of_measures():
    # closed form: area and volume of a ball
    text = flat("measures")
    radius, off = number_after("a ball of", text), number_after("is off by", text)
    area, volume = 4 * np.pi * radius**2, 4 / 3 * np.pi * radius**3
    assert number_after("everywhere has", text) == round(area)
    assert number_after("its volume of", text) == round(volume)
    assert number_after("mm3 is off by", text) == round(area * off)
    assert number_after("mm3, or", text) == round(100 * area * off / volume, 1)


def test_limits_of_reliability_are_those_of_the_program():
    from volmap.certify import read_gate_table
    from volmap.measure.reliability import NEAR_VOXELS, ORDERS_VOXELS, REASONS, RESIDUAL_VOXELS

    rows = {
        line.split("|")[1].strip(" `"): line
        for line in pages()["measures"].markdown.splitlines()
        if line.startswith("| `")
    }
    assert list(rows) == list(REASONS)
    assert number_after("within", rows["gate"]) == NEAR_VOXELS
    assert number_after("within", rows["boundary"]) == NEAR_VOXELS
    assert number_after("more than", rows["boundary"]) == RESIDUAL_VOXELS
    assert number_after("more than", rows["orders"]) == ORDERS_VOXELS
    table = read_gate_table(None)
    warn = table["volume_ratio"].warns_at(1.0)
    assert f"{warn['p0_1_below']:g} to {warn['p99_9_above']:g}" in rows["volume_ratio"]
    assert table["boundary_distance_mm"].fails_at(1.0)["mean_above"] == RESIDUAL_VOXELS
    assert table["order_difference_mm"].fails_at(1.0)["alone_mean_above"] == ORDERS_VOXELS


def test_every_gate_is_explained():
    from volmap.certify.table import STATISTICS

    for gate in STATISTICS:
        assert gate in pages()["certificate"].markdown


def test_every_option_and_verb_named_in_a_page_is_there():
    from volmap_cli.main import VERBS, _parser

    parser = _parser()
    verbs = next(action for action in parser._actions if action.dest == "verb").choices
    known = {option for verb in VERBS for action in verbs[verb]._actions for option in action.option_strings}
    for topic, page in pages().items():
        for option in re.findall(r"(?<![\w-])--[a-z][a-z-]+", page.markdown):
            assert option in known, (topic, option)
        for verb in re.findall(r"`volmap (\w+)", page.markdown):
            assert verb in VERBS, (topic, verb)
