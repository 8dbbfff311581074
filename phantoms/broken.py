"""`broken`: one bad input for each thing that can be wrong, with the error it must meet.

Each entry holds one fault and is otherwise good. What is only warned of is not here: a label cut by the
border of the scan, sform and qform that disagree, a sheared affine, one file given twice.
"""

from __future__ import annotations

from dataclasses import dataclass
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from volmap.types import LabelVolume
from volmap.types.grid import Grid

from .writer import save_labels

OUT = "{out}"


@dataclass(frozen=True)
class BrokenInput:
    """One bad input.

    Parameters
    ----------
    name : str
    fault : str
        What is wrong, in words.
    arguments : tuple of str
        What follows `volmap` on the command line; ``{out}`` stands for the output, which must not appear.
    file : str
        Name of the file that is at fault; the error names it.
    status : int
        Exit status: 3 not readable or not what it says, 1 readable and refused.
    words : tuple of str
        What the error must say; ``a|b`` means either, in any case of letters.
    """

    name: str
    fault: str
    arguments: tuple[str, ...]
    file: str
    status: int
    words: tuple[str, ...]

    def command(self, out: Path) -> list[str]:
        """The arguments, with the output's place filled in."""
        return [str(out) if argument == OUT else argument for argument in self.arguments]

    def unsaid(self, sentence: str) -> list[str]:
        """Which of the words, and of the file's name, an error does not say."""
        said = sentence.lower()
        wanted = (self.file, *self.words)
        return [w for w in wanted if not any(choice.lower() in said for choice in w.split("|"))]


@dataclass(frozen=True, eq=False)
class Bench:
    """Where broken inputs are made, and the good scans they are made from.

    Parameters
    ----------
    folder : Path
    source, target : LabelVolume
        Two scans of one small body with two labels.
    """

    folder: Path
    source: LabelVolume
    target: LabelVolume

    def place(self, name: str, file: str) -> Path:
        """The path of a file in the entry's own folder, which is made."""
        (self.folder / name).mkdir(parents=True, exist_ok=True)
        return self.folder / name / file

    def good(self, name: str, which: str) -> Path:
        """A good scan ('source' or 'target') in the entry's own folder."""
        file = self.place(name, f"{which}.nii.gz")
        save_labels(self.source if which == "source" else self.target, file)
        return file


def make_all(folder: Path) -> tuple[BrokenInput, ...]:
    """Write every broken input into a folder, each in a folder of its own, the same each time.

    Parameters
    ----------
    folder : Path
        Made when it is not there.

    Returns
    -------
    tuple of BrokenInput
        Paths in the arguments are absolute.
    """
    from . import broken_files, broken_headers, broken_labels, broken_pairs, broken_tables

    bench = Bench(Path(folder).absolute(), body(0), body(1))
    parts = (broken_files, broken_headers, broken_labels, broken_pairs, broken_tables)
    entries = tuple(entry for part in parts for entry in part.make(bench))
    assert len({entry.name for entry in entries}) == len(entries)
    return entries


def small_grid() -> Grid:
    """40 x 36 x 30 voxels of 1.5 x 1.5 x 2 mm."""
    affine = np.diag([1.5, 1.5, 2.0, 1.0])
    affine[:3, 3] = -29.0, -26.0, -30.0
    return Grid((40, 36, 30), affine)


def body(turn: int) -> LabelVolume:
    """A small body of two labels; `turn` 1 is the second scan, somewhat larger and moved."""
    x, y, z = ellipsoid_frame(small_grid())
    grow = 1.0 + 0.06 * turn
    x, y, z = (x - 1.5 * turn) / grow, y / grow, (z + turn) / grow
    labels = ((x / 20) ** 2 + (y / 16) ** 2 + (z / 21) ** 2 < 1).astype(np.uint16)
    labels[((x - 6) / 8) ** 2 + ((y - 2) / 7) ** 2 + ((z - 3) / 9) ** 2 < 1] = 2
    return LabelVolume(small_grid(), labels, {1: "shell", 2: "core"})


def ellipsoid_frame(grid: Grid) -> tuple[NDArray[np.float64], NDArray[np.float64], NDArray[np.float64]]:
    """World x, y, z of every voxel centre, each (I, J, K), mm."""
    place = grid.to_world(np.indices(grid.shape).reshape(3, -1).T.astype(np.float64))
    x, y, z = place.T.reshape(3, *grid.shape)
    return x, y, z
