"""Broken inputs: landmark tables and surfaces."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray
from scipy.spatial import ConvexHull

from .broken import OUT, Bench, BrokenInput

HEADER = "name,x_mm,y_mm,z_mm,to_x_mm,to_y_mm,to_z_mm,role,sd_mm"
ROWS = ("a,-8,2,1,-7,2,0,guide,1", "b,6,2,3,8,2,2,guide,1", "c,0,-6,-8,2,-6,-10,check,1")
FILE = "guides.csv"


def make(bench: Bench) -> list[BrokenInput]:
    """Write them all."""
    tables = [
        ("guides-header", "columns that are not those of pairs", "id,x,y,z\na,1,2,3\n", 3, "header|column"),
        (
            "guides-word",
            "a word where a number should be",
            _table("d,1,two,3,1,2,3,guide,1"),
            3,
            "number|two",
        ),
        ("guides-nan", "a coordinate that is NaN", _table("d,1,nan,3,1,2,3,guide,1"), 3, "finite|nan|number"),
        ("guides-twice", "two landmarks of one name", _table(ROWS[0]), 3, "twice|duplicate|same name"),
        ("guides-role", "a role that does not exist", _table("d,1,2,3,1,2,3,helper,1"), 3, "role"),
        (
            "guides-both-roles",
            "one landmark as guide and as check",
            _table("a,-8,2,1,-7,2,0,check,1"),
            3,
            "twice|both|duplicate|same name",
        ),
        ("guides-short-row", "a row with too few columns", _table("d,1,2,3"), 3, "column|row|line"),
        ("guides-no-rows", "a header and nothing below it", HEADER + "\n", 3, "no landmark|empty|no row"),
        ("guides-sd", "an uncertainty of 0 mm", _table("d,1,2,3,1,2,3,guide,0"), 3, "sd_mm"),
        ("guides-outside", "a guide far outside the body", _table("d,90,0,0,1,2,3,guide,1"), 1, "outside"),
    ]
    entries = [_guides(bench, n, f, t.encode("utf-8"), s, w) for n, f, t, s, w in tables]
    encoded = _table("d\u00e9j\u00e0,1,2,3,1,2,3,guide,1").encode("latin-1")
    entries.append(
        _guides(bench, "guides-encoding", "a table that is not UTF-8", encoded, 3, "utf-8|encoding")
    )
    return entries + _surfaces(bench)


def _table(extra: str) -> str:
    return "\n".join((HEADER, *ROWS, extra)) + "\n"


def _guides(bench: Bench, name: str, fault: str, content: bytes, status: int, words: str) -> BrokenInput:
    source, target = bench.good(name, "source"), bench.good(name, "target")
    file = bench.place(name, FILE)
    file.write_bytes(content)
    arguments = ("map", str(source), str(target), "--out", OUT, "--guides", str(file))
    return BrokenInput(name, fault, arguments, FILE, status, (words,))


def _surfaces(bench: Bench) -> list[BrokenInput]:
    corners, triangles = _ball()
    files = {
        "surface-open": (_stl(corners, triangles[5:]), "a surface with a hole", 1, "closed|open"),
        "surface-flipped": (
            _stl(corners, np.concatenate([triangles[:40, ::-1], triangles[40:]])),
            "a surface with triangles turned against their neighbours",
            1,
            "turned|orient|neighbour",
        ),
        "surface-empty": (
            _stl(corners, triangles[:0]),
            "a surface of no triangles",
            3,
            "triangle|face|empty",
        ),
        "surface-damaged": (
            _stl(corners, triangles)[: 84 + 50 * 30 + 17],
            "a surface file that ends in the middle",
            3,
            "damaged|cut|read",
        ),
    }
    entries = []
    for name, (content, fault, status, words) in files.items():
        file = bench.place(name, "surface.stl")
        file.write_bytes(content)
        arguments = ("mesh", str(file), "--out", OUT)
        entries.append(BrokenInput(name, fault, arguments, "surface.stl", status, (words,)))
    return entries


def _ball() -> tuple[NDArray[np.float64], NDArray[np.int64]]:
    """A closed ball of radius 20 mm, triangles counter-clockwise from outside."""
    k = np.arange(120) + 0.5
    polar, turn = np.arccos(1 - k / 60), np.pi * (1 + np.sqrt(5)) * k
    corners = 20 * np.stack(
        [np.sin(polar) * np.cos(turn), np.sin(polar) * np.sin(turn), np.cos(polar)], axis=1
    )
    triangles = ConvexHull(corners).simplices.astype(np.int64)
    inward = np.linalg.det(corners[triangles]) < 0
    triangles[inward] = triangles[inward][:, ::-1]
    return corners, triangles[np.lexsort(triangles.T)]


def _stl(corners: NDArray[np.float64], triangles: NDArray[np.int64]) -> bytes:
    """Binary STL: 80 bytes, a count, then 50 bytes a triangle."""
    record = np.zeros(len(triangles), np.dtype([("floats", "<f4", 12), ("attribute", "<u2")]))
    record["floats"][:, 3:] = corners[triangles].reshape(-1, 9)
    return bytes(80) + np.uint32(len(triangles)).tobytes() + record.tobytes()
