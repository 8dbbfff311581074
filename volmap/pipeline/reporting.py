"""The report of a map folder, and writing both."""

from __future__ import annotations

from collections.abc import Mapping
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from volmap import carry as carrying
from volmap.mapfolder import MapFolder, write_map_folder
from volmap.report import ReportInput, report
from volmap.types import Certificate, ImageVolume, Progress, silent


def report_of(
    folder: MapFolder,
    *,
    source_image: ImageVolume | None = None,
    target_image: ImageVolume | None = None,
    progress: Progress = silent,
) -> str:
    """The report of a map folder, as HTML."""
    checks, carried, baseline = folder.pairs, None, None
    if checks is not None:
        carried = carrying.move_points(folder.map, checks.points, reach_mm=folder.source.grid.voxel_mm).points
        baseline = affine_baseline(folder.certificate, checks.points)
    return report(
        ReportInput(
            map=folder.map,
            certificate=folder.certificate,
            source=folder.source,
            target=folder.target,
            target_surface=folder.target_surface,
            source_image=source_image,
            target_image=target_image,
            checks=checks,
            carried=carried,
            baseline=baseline,
            history=folder.history,
        ),
        progress=progress,
    )


def affine_baseline(certificate: Certificate, points: NDArray[np.float64]) -> NDArray[np.float64] | None:
    """Where the affine fitted to the same label surfaces sends points (n, 3) mm; None when not stored."""
    alignment: Mapping[str, Any] = certificate.settings.get("alignment", {})
    affine = np.asarray(alignment.get("affine", ()), np.float64)
    if affine.shape != (4, 4):
        return None
    return np.asarray(points @ affine[:3, :3].T + affine[:3, 3])


def write_map(
    path: Path,
    folder: MapFolder,
    *,
    source_image: ImageVolume | None = None,
    target_image: ImageVolume | None = None,
    overwrite: bool = False,
    progress: Progress = silent,
) -> None:
    """Write a map folder with its report.

    Raises
    ------
    InputError
        The place is taken or cannot be written.
    """
    html = report_of(folder, source_image=source_image, target_image=target_image, progress=progress)
    progress("write", 0, 0, path.absolute().name)
    write_map_folder(path, folder, report_html=html, overwrite=overwrite)
