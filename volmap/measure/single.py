"""Measures of single tets and of single mesh points."""

from __future__ import annotations

from collections.abc import Mapping

import numpy as np
from numpy.typing import NDArray

from volmap.measure.reliability import Reliability
from volmap.measure.summaries import STRETCHES
from volmap.types import Column, Table, VolumeMap

Floats = NDArray[np.float64]


def tet_table(
    volume_map: VolumeMap,
    reliable: Reliability,
    *,
    names: Mapping[int, str],
    verdict: str,
    about: Mapping[str, object],
) -> Table:
    """One row a tet: centre in both scans, volumes, volume ratio, stretches, label, reliability."""
    mesh = volume_map.mesh
    good = reliable.tets
    words = tuple("" if ok else reliable.words(t) for t, ok in enumerate(good))
    labels = mesh.labels
    columns = (
        Column("tet", np.arange(len(mesh.tets)), "", "Number of the tet in map.vtu."),
        *_labels(labels, names, "Label of the tet."),
        *_places(
            mesh.points[mesh.tets].mean(axis=1), volume_map.images[mesh.tets].mean(axis=1), "its centre"
        ),
        Column("volume_source", mesh.volumes.copy(), "mm3", "Volume in SOURCE."),
        Column("volume_target", volume_map.image_mesh.volumes.copy(), "mm3", "Volume in TARGET."),
        Column(
            "volume_ratio", volume_map.volume_ratio.copy(), "1", "Volume in TARGET over volume in SOURCE."
        ),
        *_stretches(volume_map.stretches),
        Column("reliable", good, "", "Whether nothing speaks against the map here."),
        Column("left_out_for", words, "", "What speaks against it, words of the guide page `measures`."),
        _verdict(verdict, len(good)),
    )
    return Table(columns, dict(about))


def point_table(
    volume_map: VolumeMap,
    reliable: Reliability,
    *,
    names: Mapping[int, str],
    verdict: str,
    about: Mapping[str, object],
) -> Table:
    """One row a mesh point: place in both scans, and measures of the tets around it.

    Volume ratio and stretches are those of the tets around the point, gradients averaged with their volumes
    (after Zienkiewicz & Zhu, Int. J. Numer. Methods Eng. 33, 1992); the volume ratio is the volume of all
    of them in TARGET over that in SOURCE.
    """
    mesh = volume_map.mesh
    labels, several = _labels_around(volume_map)
    columns = (
        Column("point", np.arange(len(mesh.points)), "", "Number of the point in map.vtu."),
        *_labels(labels, names, "Label that takes up most volume around the point."),
        Column("on_boundary", several, "", "Whether labels, or body and outside, meet at the point."),
        *_places(mesh.points, volume_map.images, "the point"),
        Column(
            "volume_ratio",
            volume_map.volume_ratio_at_points.copy(),
            "1",
            "Volume in TARGET over volume in SOURCE of the tets around the point.",
        ),
        *_stretches(_stretches_around(volume_map)),
        Column("reliable", reliable.of_points(mesh), "", "Whether every tet around the point is reliable."),
        _verdict(verdict, len(mesh.points)),
    )
    return Table(columns, dict(about))


def _labels(labels: NDArray[np.int64], names: Mapping[int, str], meaning: str) -> tuple[Column, Column]:
    words = tuple(names.get(int(v), f"label {v}") for v in labels)
    return Column("label", np.array(labels), "", meaning), Column("name", words, "", "Name of the label.")


def _places(here: Floats, there: Floats, what: str) -> list[Column]:
    found = []
    for points, head, world in ((here, "", "SOURCE"), (there, "image_", "TARGET")):
        for axis, values in zip("xyz", points.T, strict=True):
            name, meaning = f"{head}{axis}", f"World coordinate of {what} in {world}, RAS+."
            found.append(Column(name, np.array(values), "mm", meaning))
    return found


def _stretches(stretches: Floats) -> list[Column]:
    return [
        Column(name, np.array(values), "1", "Principal stretch, length in TARGET over length in SOURCE.")
        for name, values in zip(STRETCHES, stretches.T, strict=True)
    ]


def _verdict(verdict: str, n: int) -> Column:
    return Column("verdict", (verdict,) * n, "", "What the map's certificate says: pass, warn or fail.")


def _labels_around(volume_map: VolumeMap) -> tuple[NDArray[np.int64], NDArray[np.bool_]]:
    """(n,) label of most volume around each point, of equals the smaller; (n,) whether others meet there."""
    mesh, n = volume_map.mesh, len(volume_map.mesh.points)
    label, most = np.zeros(n, np.int64), np.zeros(n)
    for value in mesh.present:
        own = mesh.labels == value
        volume = np.bincount(mesh.tets[own].ravel(), np.repeat(np.abs(mesh.volumes[own]), 4), n)
        more = volume > most
        label[more], most[more] = value, volume[more]
    several = np.zeros(n, bool)
    several[mesh.interfaces.triangles.ravel()] = True
    return label, several


def _stretches_around(volume_map: VolumeMap) -> Floats:
    """(n, 3) stretches of the deformation gradients around each point, averaged with the tets' volumes."""
    mesh, n = volume_map.mesh, len(volume_map.mesh.points)
    corners, weights = mesh.tets.ravel(), np.repeat(mesh.volumes, 4)
    whole = np.bincount(corners, weights, n)
    used = whole > 0
    gradients = np.empty((int(used.sum()), 3, 3))
    for i in range(3):
        for j in range(3):
            parts = np.repeat(volume_map.gradients[:, i, j], 4)
            gradients[:, i, j] = np.bincount(corners, weights * parts, n)[used] / whole[used]
    found = np.full((n, 3), np.nan)
    found[used] = np.linalg.svd(gradients, compute_uv=False)
    return found
