"""Shared by all tests: one small pair, mapped once a session and written by the program itself.

The second body is the first one, grown by 6 % and shifted (`volmap_phantoms.broken.body`), so the truth of
every inner point is known in closed form: y = 1.06 x + (1.5, 0, -1), up to the voxels' rounding.
"""

from dataclasses import dataclass
from pathlib import Path

import numpy as np
import pytest

GROWTH, SHIFT_MM = 1.06, np.array([1.5, 0.0, -1.0])
INNER_MM = np.array(
    [
        [-8.0, 2.0, 1.0],
        [6.0, 2.0, 3.0],
        [0.0, -6.0, -8.0],
        [2.0, 8.0, 6.0],
        [-4.0, -4.0, 9.0],
        [10.0, 1.0, -3.0],
    ]
)


def grown(points):
    return GROWTH * points + SHIFT_MM


@dataclass(frozen=True)
class SmallPair:
    """Files of the pair and of its map, in a folder whose name holds a space and a letter beyond ASCII."""

    root: Path
    source: Path
    target: Path
    pairs: Path
    folder: Path


@pytest.fixture(scope="session")
def small_job():
    from volmap import pipeline

    return pipeline.MapJob(mesh=pipeline.MeshSettings(wanted_tets=4000))


@pytest.fixture(scope="session")
def small_pair(tmp_path_factory, small_job):
    from volmap_phantoms.broken import body
    from volmap_phantoms.writer import save_labels

    from volmap import pipeline
    from volmap.io.landmarks import write_pairs
    from volmap.types import LandmarkPairs

    root = tmp_path_factory.mktemp("zwei Körper")
    files = [root / "before.nii.gz", root / "nachher ü.nii.gz"]
    for turn, file in enumerate(files):
        save_labels(body(turn), file)
    (root / "labels.tsv").write_text("index\tname\n1\tshell\n2\tKern é\n", encoding="utf-8")
    names = tuple(f"bead {i}" for i in range(len(INNER_MM)))
    write_pairs(root / "beads.csv", LandmarkPairs(names, INNER_MM, grown(INNER_MM)))
    pipeline.map_files(*files, root / "karte 1", small_job, guides=root / "beads.csv")
    return SmallPair(root, *files, root / "beads.csv", root / "karte 1")
