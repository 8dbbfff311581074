"""Broken inputs: two good scans that do not show the same shapes, so no map without folds joins them."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from volmap.types import LabelVolume

from .broken import OUT, Bench, BrokenInput, ellipsoid_frame
from .writer import save_labels


def make(bench: Bench) -> list[BrokenInput]:
    """Write them all."""
    labels = bench.target.labels
    x, y, z = ellipsoid_frame(bench.target.grid)
    emptied = np.where(labels == 2, 0, labels)
    renumbered = np.where(labels == 2, 7, labels)
    ball = (x**2 + y**2 + z**2 < 18**2).astype(np.uint16)
    split = _split(x, y, z)
    ring = ((np.hypot(x, y) - 14) ** 2 + z**2 < 8**2).astype(np.uint16)
    hollow = np.where(x**2 + y**2 + z**2 < 8**2, 0, ball).astype(np.uint16)
    return [
        _pair(
            bench,
            "label-missing",
            "the second scan lacks a label",
            bench.source.labels,
            emptied,
            ("label", "2|core"),
        ),
        _pair(
            bench,
            "other-label",
            "the second scan has another label",
            bench.source.labels,
            renumbered,
            ("label", "7|2"),
        ),
        _pair(bench, "pieces-differ", "one piece against three far apart", ball, split, ("piece",)),
        _pair(
            bench, "ring-against-ball", "a ball against a ring", ball, ring, ("euler|handle|topology|hole",)
        ),
        _pair(
            bench,
            "hollow-against-solid",
            "a solid ball against a hollow one",
            ball,
            hollow,
            ("euler|cavit|topology|hole",),
        ),
    ]


def _split(x: NDArray[np.float64], y: NDArray[np.float64], z: NDArray[np.float64]) -> NDArray[np.uint16]:
    """Three balls of 8 mm radius far apart."""
    inside = np.zeros(x.shape, bool)
    for centre in ((-17.0, -13.0, -15.0), (17.0, 12.0, -12.0), (0.0, 0.0, 17.0)):
        inside |= (x - centre[0]) ** 2 + (y - centre[1]) ** 2 + (z - centre[2]) ** 2 < 8**2
    return inside.astype(np.uint16)


def _pair(
    bench: Bench,
    name: str,
    fault: str,
    source: NDArray[np.uint16],
    target: NDArray[np.uint16],
    words: tuple[str, ...],
) -> BrokenInput:
    grid, paths = bench.source.grid, []
    for role, labels in (("source", source), ("target", target)):
        file = bench.place(name, f"{role}.nii.gz")
        save_labels(LabelVolume(grid, labels), file)
        paths.append(str(file))
    return BrokenInput(name, fault, ("map", *paths, "--out", OUT), "target.nii.gz|source.nii.gz", 1, words)
