"""A phantom on disk: whole or not at all."""

from __future__ import annotations

import csv
import json
import shutil
import tempfile
from collections.abc import Iterable
from itertools import combinations
from pathlib import Path
from typing import Any

import nibabel
import numpy as np
from numpy.typing import NDArray

from volmap.types import ImageVolume, InputError, LabelVolume
from volmap.types.grid import Grid
from volmap.types.notice import caution, short_caution

from .phantom import Phantom, Truth

POINT_HEADER = ("name", "x_mm", "y_mm", "z_mm", "role")
PAIR_HEADER = ("name", "x_mm", "y_mm", "z_mm", "to_x_mm", "to_y_mm", "to_z_mm", "role", "sd_mm")
BEAD_SD_MM = 0.1


def write(phantom: Phantom, folder: Path) -> Path:
    """Write every file of a phantom into a new folder.

    Parameters
    ----------
    phantom : Phantom
    folder : Path
        Must not exist; it appears only when everything is written.

    Returns
    -------
    Path
        The folder.

    Raises
    ------
    InputError
        The folder exists, or cannot be made.
    """
    folder = Path(folder)
    if folder.exists():
        raise InputError(
            "the folder exists already",
            where=folder.name,
            expected="a name that is free",
            remedy="choose another name or remove the folder",
        )
    try:
        folder.parent.mkdir(parents=True, exist_ok=True)
        unfinished = Path(tempfile.mkdtemp(prefix=f".{folder.name}-", dir=folder.parent))
    except OSError as error:
        raise InputError(
            "the folder cannot be made",
            where=folder.name,
            found=str(error.strerror),
            remedy="choose another place",
        ) from error
    try:
        _write_files(phantom, unfinished)
        unfinished.chmod(0o755)
        unfinished.rename(folder)
    except BaseException:
        shutil.rmtree(unfinished, ignore_errors=True)
        raise
    return folder


def _write_files(phantom: Phantom, folder: Path) -> None:
    for k, visit in enumerate(phantom.visits):
        save_labels(visit.labels, folder / f"visit{k}_labels.nii.gz")
        save_image(visit.image, folder / f"visit{k}_image.nii.gz")
        beads = visit.beads
        rows = ((n, *_mm(p), role) for n, p, role in zip(beads.names, beads.points, beads.roles, strict=True))
        write_table(folder / f"beads_visit{k}.csv", POINT_HEADER, rows)
    for a, b in combinations(range(len(phantom.visits)), 2):
        write_table(folder / f"beads_{a}_to_{b}.csv", PAIR_HEADER, _pairs(phantom, a, b))
    names = phantom.visits[0].labels.names
    with (folder / "labels.tsv").open("w", encoding="utf-8", newline="") as stream:
        writer = csv.writer(stream, delimiter="\t", lineterminator="\n")
        writer.writerow(("index", "name"))
        writer.writerows(sorted(names.items()))
    text = json.dumps(_truth_record(phantom), indent=1, allow_nan=False)
    (folder / "truth.json").write_text(text + "\n", encoding="utf-8")
    (folder / "README.md").write_text(_readme(phantom), encoding="utf-8")


def save_labels(volume: LabelVolume, file: Path) -> None:
    """Write labels as NIfTI-1, uint8 when they fit, uint16 otherwise."""
    kind = np.uint8 if volume.labels.max(initial=0) < 256 else np.uint16
    _save(volume.labels.astype(kind), volume.grid, file)


def save_image(volume: ImageVolume, file: Path) -> None:
    """Write an image as NIfTI-1, int16: intensities rounded to whole numbers, as a scanner stores them."""
    _save(np.clip(np.rint(volume.values), -32768, 32767).astype(np.int16), volume.grid, file)


def _save(voxels: NDArray[Any], grid: Grid, file: Path) -> None:
    image: Any = nibabel.Nifti1Image(voxels, grid.affine)  # type: ignore[no-untyped-call]
    image.set_sform(grid.affine, code=1)
    image.set_qform(grid.affine, code=1)
    image.header.set_xyzt_units("mm")
    image.header["descrip"] = short_caution().encode("ascii")
    nibabel.save(image, file)


def write_table(file: Path, header: tuple[str, ...], rows: Iterable[tuple[Any, ...]]) -> None:
    """Write a CSV, UTF-8, with a header."""
    with file.open("w", encoding="utf-8", newline="") as stream:
        writer = csv.writer(stream, lineterminator="\n")
        writer.writerow(header)
        writer.writerows(rows)


def _mm(point: NDArray[np.float64]) -> list[str]:
    return [f"{value:.4f}" for value in point]


def _pairs(phantom: Phantom, a: int, b: int) -> Iterable[tuple[Any, ...]]:
    start, end = phantom.visits[a].beads, phantom.visits[b].beads
    for name, p, q, role in zip(start.names, start.points, end.points, start.roles, strict=True):
        yield (name, *_mm(p), *_mm(q), role, f"{BEAD_SD_MM:g}")


def _truth_record(phantom: Phantom) -> dict[str, Any]:
    labels = {
        f"visit{k}": {str(n): float(round(v, 3)) for n, v in _voxel_volumes(visit.labels).items()}
        for k, visit in enumerate(phantom.visits)
    }
    pairs = {
        f"{a}_to_{b}": _pair_record(phantom, a, b) for a, b in combinations(range(len(phantom.visits)), 2)
    }
    return {
        "notice": caution(),
        "phantom": phantom.name,
        "frame": "NIfTI world, RAS+, mm",
        "settings": dict(phantom.settings),
        "label_voxel_volumes_mm3": labels,
        "pairs": pairs,
    }


def _voxel_volumes(volume: LabelVolume) -> dict[int, float]:
    counts = np.bincount(volume.labels.ravel())
    return {label: float(counts[label] * volume.grid.voxel_mm3) for label in volume.present}


def _pair_record(phantom: Phantom, a: int, b: int) -> dict[str, Any]:
    start, end = phantom.visits[a], phantom.visits[b]
    moved = end.beads.points - start.beads.points
    record: dict[str, Any] = {
        "displacement_mm": dict(zip(start.beads.names, np.round(moved, 4).tolist(), strict=True))
    }
    if phantom.truth is not None:
        ratio = phantom.truth.volume_ratio(start.beads.points, a, b)
        record["volume_ratio_at_beads"] = dict(
            zip(start.beads.names, np.round(ratio, 5).tolist(), strict=True)
        )
        record["volume_ratio"] = ratios_by_label(phantom.truth, start.labels, a, b)
    return record


def ratios_by_label(truth: Truth, volume: LabelVolume, a: int, b: int) -> dict[str, dict[str, float]]:
    """Mean, smallest and largest true volume ratio over (at most 3000) voxel centres of each label."""
    record = {}
    for label in volume.present:
        index = np.argwhere(volume.labels == label)
        index = index[:: max(1, -(-len(index) // 3_000))]
        ratio = truth.volume_ratio(volume.grid.to_world(index.astype(np.float64)), a, b)
        ratio = ratio[np.isfinite(ratio)]
        record[str(label)] = {
            "mean": float(round(ratio.mean(), 5)),
            "min": float(round(ratio.min(), 5)),
            "max": float(round(ratio.max(), 5)),
        }
    return record


def _readme(phantom: Phantom) -> str:
    grids = "\n".join(
        f"* visit {k}: {' x '.join(map(str, v.labels.grid.shape))} voxels of "
        f"{' x '.join(f'{s:.4g}' for s in v.labels.grid.spacing)} mm"
        for k, v in enumerate(phantom.visits)
    )
    return (
        f"# {phantom.name}\n\n{phantom.story}\n\n{grids}\n\n"
        "Files: `visitK_labels.nii.gz` and `visitK_image.nii.gz` (one grid a visit), `labels.tsv` (names), "
        "`beads_visitK.csv` (points at one visit), `beads_A_to_B.csv` (pairs, for `volmap map --guides`; all "
        "have the role `check`, so they measure and never steer), `truth.json` (displacements of the points, "
        "volume ratios). Coordinates are NIfTI world, RAS+, mm. The points are not drawn into the images.\n\n"
        "A truth that is simulated or in closed form is exact for these gels and says nothing about living "
        "tissue.\n\n"
        f"{caution()}\n"
    )
