"""A map folder as shapes with everything on them: VTK solids, GIFTI surfaces."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from volmap import carry as carrying
from volmap.io.atomic import require_place, whole_folder
from volmap.io.gifti import SURFACE, VALUES, write_gifti_surface, write_gifti_values
from volmap.io.json_documents import write_json
from volmap.io.vtk_xml import write_mesh
from volmap.kernels.closest import build_tree, closest
from volmap.mapfolder import MapFolder, read_map_folder
from volmap.pipeline.exporting import Exported, verdict_findings
from volmap.types import Progress, Surface, VolumeMap, silent
from volmap.types.notice import caution

CONTENTS = "contents.json"
SOLIDS = {"source": "solid_in_source.vtu", "target": "solid_in_target.vtu"}
Floats = NDArray[np.float64]


def export_solid(
    through: Path, out: Path, *, overwrite: bool = False, progress: Progress = silent
) -> Exported:
    """Write the tets of a map in both worlds, with everything that is known of them.

    Parameters
    ----------
    through : Path
        Map folder.
    out : Path
        Folder to write: `solid_in_source.vtu`, `solid_in_target.vtu`, `contents.json`.
    overwrite : bool
        Replace such a folder.
    progress : Progress

    Raises
    ------
    InputError
        No map folder, or a place that is taken.
    """
    require_place(out, overwrite=overwrite, folder=True, holding=CONTENTS)
    progress("read", 0, 0, through.absolute().name)
    folder = read_map_folder(through)
    progress("measure", 0, 0, "stretches, turns, distances")
    cells, on_points = _cell_arrays(folder), _point_arrays(folder)
    told: dict[str, Any] = {
        "schema": "volmap-export/1",
        "kind": "VTK solid",
        "what": "the tets of the map in both worlds, with what is known of each tet and point",
        "files": {
            SOLIDS["source"]: "in the world of SOURCE; `to_target_mm` leads to TARGET",
            SOLIDS["target"]: "the same tets in the world of TARGET; `to_source_mm` leads back",
        },
        "labels": _names(folder),
        "cell_arrays": _CELLS,
        "point_arrays": _POINTS,
        "frame": "RAS+, mm; components of vectors along x, y, z of the world",
        "notice": caution(),
    }
    with whole_folder(out, overwrite=overwrite, holding=CONTENTS) as place:
        for side, file in SOLIDS.items():
            progress("write", 0, 0, file)
            _write_solid(place / file, folder, side, cells, on_points)
        write_json(place / CONTENTS, told)
    return Exported((*SOLIDS.values(), CONTENTS), told, verdict_findings(folder, through))


def export_surfaces(
    through: Path, out: Path, *, overwrite: bool = False, progress: Progress = silent
) -> Exported:
    """Write the closed surface of each label as GIFTI: SOURCE's, its image in TARGET, and TARGET's own.

    Parameters
    ----------
    through, out, overwrite, progress
        As in `export_solid`; the folder holds .surf.gii and .shape.gii files and `contents.json`.

    Raises
    ------
    InputError
        As `export_solid`.
    """
    require_place(out, overwrite=overwrite, folder=True, holding=CONTENTS)
    progress("read", 0, 0, through.absolute().name)
    folder = read_map_folder(through)
    on_points = _point_arrays(folder)
    files: dict[str, str] = {}
    with whole_folder(out, overwrite=overwrite, holding=CONTENTS) as place:
        for shape in _label_shapes(folder, on_points):
            progress("write", 0, 0, shape.stem)
            _write_shape(place, shape)
            files |= {f"{shape.stem}{SURFACE}": shape.what}
            if shape.values:
                files |= {f"{shape.stem}{VALUES}": f"{', '.join(shape.values)} on its points"}
        told: dict[str, Any] = {
            "schema": "volmap-export/1",
            "kind": "GIFTI surfaces",
            "what": "the closed surface of each label in SOURCE, its image in TARGET, and TARGET's own",
            "files": files,
            "labels": _names(folder),
            "point_arrays": {k: v for k, v in _POINTS.items() if k in on_points},
            "frame": "NIfTI world, RAS+, mm, float32; triangles counter-clockwise seen from outside",
            "notice": caution(),
        }
        write_json(place / CONTENTS, told)
    return Exported((*files, CONTENTS), told, verdict_findings(folder, through))


_CELLS = {
    "label": "label of the tet",
    "volume_ratio": "J, volume in TARGET over volume in SOURCE",
    "stretch": "principal stretches, descending",
    "stretch_direction_1": "unit direction of the largest stretch in this file's world, of any sign",
    "stretch_direction_2": "of the middle stretch",
    "stretch_direction_3": "of the smallest stretch",
    "rotation": "R of F = R U from SOURCE to TARGET, row by row",
    "distortion": "distortion energy per volume, of the energy the map was solved with",
}
_POINTS = {
    "volume_ratio": "J of all tets around the point, by volume",
    "moved_mm": "how far the point goes",
    "boundary_distance_mm": "how far a point of a label surface is from the scan's own surface of its label, "
    "the larger of both worlds; NaN inside",
}


def _cell_arrays(folder: MapFolder) -> dict[str, NDArray[Any]]:
    """Arrays of the tets that are the same in both worlds."""
    energy = folder.distortion
    return {"volume_ratio": folder.map.volume_ratio} | ({"distortion": energy} if len(energy) else {})


def _point_arrays(folder: MapFolder) -> dict[str, Floats]:
    here = folder.map
    return {
        "volume_ratio": here.volume_ratio_at_points,
        "moved_mm": np.linalg.norm(here.images - here.mesh.points, axis=1),
        "boundary_distance_mm": _boundary_distance(folder),
    }


def _boundary_distance(folder: MapFolder) -> Floats:
    """(n,) the larger distance of a point and its image from the scans' surfaces; NaN inside."""
    here = folder.map
    far = np.full(len(here.mesh.points), np.nan)
    worlds = ((here.mesh.points, folder.source_surface), (here.images, folder.target_surface))
    for label in here.mesh.present:
        rows = np.unique(here.mesh.interfaces.of_label(label).triangles)
        for points, scan in worlds:
            surface = scan.of_label(label)
            if len(surface.triangles):
                far[rows] = np.fmax(far[rows], _distances(points[rows], surface))
    return far


def _distances(points: Floats, surface: Surface) -> Floats:
    corners, triangles = np.array(surface.points), np.array(surface.triangles)
    _, _, squared = closest(build_tree(corners, triangles), corners, triangles, np.ascontiguousarray(points))
    return np.sqrt(squared)


def _write_solid(
    path: Path, folder: MapFolder, side: str, cells: dict[str, NDArray[Any]], on_points: dict[str, Floats]
) -> None:
    here, strain = folder.map, carrying.strain_of(folder.map)
    step = here.images - here.mesh.points
    if side == "source":
        mesh, directions, moved = here.mesh, strain.before, {"to_target_mm": step, "image_mm": here.images}
    else:
        mesh, directions = here.image_mesh, strain.after
        moved = {"to_source_mm": -step, "origin_mm": here.mesh.points}
    arrays: dict[str, NDArray[Any]] = cells | {"stretch": strain.stretches}
    arrays |= {f"stretch_direction_{a + 1}": directions[:, a] for a in range(3)}
    arrays["rotation"] = strain.turns.reshape(-1, 9)
    names = {f"label_{label}": name for label, name in _names(folder).items()}
    told = {"world": side.upper(), "source": here.source, "target": here.target, **names}
    write_mesh(path, mesh, point_data=on_points | moved, cell_data=arrays, field_data=told)


def _names(folder: MapFolder) -> dict[str, str]:
    return {str(label): folder.source.name_of(label) for label in folder.map.mesh.present}


@dataclass(frozen=True, eq=False)
class _Shape:
    """One surface of one label, and the values on its points."""

    stem: str
    what: str
    points: Floats
    triangles: NDArray[np.int64]
    values: dict[str, Floats]


def _label_shapes(folder: MapFolder, on_points: dict[str, Floats]) -> Iterator[_Shape]:
    here: VolumeMap = folder.map
    for label in here.mesh.present:
        name = folder.source.name_of(label)
        surface = here.mesh.interfaces.of_label(label)
        rows, triangles = np.unique(surface.triangles, return_inverse=True)
        triangles = triangles.reshape(-1, 3)
        values = {key: array[rows] for key, array in on_points.items()}
        stem = f"source_label_{label}"
        yield _Shape(stem, f"{name} in SOURCE", here.mesh.points[rows], triangles, values)
        yield _Shape(
            f"{stem}_in_target", f"{name} of SOURCE, carried into TARGET", here.images[rows], triangles, {}
        )
        own = folder.target_surface.of_label(label)
        rows, triangles = np.unique(own.triangles, return_inverse=True)
        yield _Shape(
            f"target_label_{label}", f"{name} in TARGET", own.points[rows], triangles.reshape(-1, 3), {}
        )


def _write_shape(place: Path, shape: _Shape) -> None:
    name, what = shape.stem, f"{shape.what}."
    write_gifti_surface(
        place / f"{name}{SURFACE}", shape.points, shape.triangles, name=name, description=what
    )
    if shape.values:
        write_gifti_values(place / f"{name}{VALUES}", shape.values, name=name, description=what)
