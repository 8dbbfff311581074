"""The page: pictures and tables laid out as one self-contained HTML text."""

from __future__ import annotations

from collections.abc import Callable
from importlib.resources import files
from typing import Any

from jinja2 import Environment, FunctionLoader, StrictUndefined
from markupsafe import Markup

from volmap.report import evidence, gallery, methods, scales, tables
from volmap.report.inputs import ReportInput
from volmap.report.pictures import Picture
from volmap.types import Progress, Verdict, silent
from volmap.types.notice import caution


def report(inputs: ReportInput, *, progress: Progress = silent) -> str:
    """Write the report of one map.

    Parameters
    ----------
    inputs : ReportInput
    progress : Progress

    Returns
    -------
    str
        HTML that opens offline, without scripts; the same inputs give the same text.
    """
    pictures = _pictures(inputs, progress)
    names = tables.label_names(inputs)
    certificate = inputs.certificate
    text = (
        _environment()
        .get_template("page.html")
        .render(
            style=_style(),
            title=scales.plain_text(inputs.title) or _title(inputs),
            caution=caution(),
            interior=scales.INTERIOR,
            verdict=certificate.verdict.value,
            verdict_word=scales.VERDICT_WORDS[certificate.verdict],
            verdict_sentence=tables.verdict_sentence(certificate),
            status=scales.plain_text(certificate.status, 400),
            notes=[scales.plain_text(n, 600) for n in certificate.notes],
            source=scales.plain_text(inputs.source.name),
            target=scales.plain_text(inputs.target.name),
            compared=tables.compared(inputs),
            labels=tables.label_rows(inputs),
            gates=tables.gate_rows(certificate, names),
            given=tables.given_boundary(certificate),
            landmarks=evidence.landmark_table(inputs),
            places=evidence.worst_places(inputs),
            methods=methods.methods(inputs),
            settings=methods.settings_rows(inputs),
            versions=methods.version_rows(inputs),
            costs=_costs(inputs),
            **pictures,
        )
    )
    progress("report", len(_STAGES), len(_STAGES))
    return text


_STAGES = ("bodies", "cut open", "parts", "cuts", "histogram", "solve")


def _pictures(inputs: ReportInput, progress: Progress) -> dict[str, Any]:
    scene = gallery.Scene(inputs)
    found: dict[str, Picture | list[Picture] | None] = {}
    makers: tuple[tuple[str, Callable[[], Picture | list[Picture] | None]], ...] = (
        ("outsides", lambda: gallery.outsides(scene)),
        ("opened", lambda: gallery.opened_up(scene)),
        ("parts", lambda: gallery.parts(scene)),
        ("cuts", lambda: gallery.label_cuts(scene)),
        ("histogram", lambda: gallery.ratio_histogram(scene)),
        ("course", lambda: gallery.solve_picture(inputs)),
    )
    for step, (name, make) in enumerate(makers):
        progress("report", step, len(_STAGES), _STAGES[step])
        found[name] = make()
    return found | {"left_out": len(inputs.labels) - len(scene.shown)}


def _title(inputs: ReportInput) -> str:
    return f"{scales.plain_text(inputs.source.name, 60)} → {scales.plain_text(inputs.target.name, 60)}"


def _costs(inputs: ReportInput) -> str:
    seconds = dict(inputs.certificate.seconds)
    if not seconds:
        return ""
    stages = ", ".join(f"{scales.plain_text(k)} {scales.number(v, 2)} s" for k, v in seconds.items())
    peak = inputs.certificate.peak_mb
    return f"Time: {stages}." + (f" Peak memory: {scales.number(round(peak))} MB." if peak else "")


def _environment() -> Environment:
    here = files("volmap.report")
    return Environment(
        loader=FunctionLoader(lambda name: here.joinpath(name).read_text(encoding="utf-8")),
        autoescape=True,
        undefined=StrictUndefined,
        trim_blocks=True,
        lstrip_blocks=True,
    )


def _style() -> Markup:
    """The page's own style sheet, with the colours of the verdicts from the one table of them."""
    inks = "".join(
        f".v-{v.value}{{--ink:{scales.VERDICT_INKS[v]};--tint:{scales.VERDICT_TINTS[v]}}}\n" for v in Verdict
    )
    return Markup(files("volmap.report").joinpath("page.css").read_text(encoding="utf-8") + inks)
