"""A map on disk: written whole or not at all, read back and checked."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import asdict, dataclass, field, replace
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from volmap.carry import grid_mistake
from volmap.certify import as_document, from_document
from volmap.io.atomic import whole_folder
from volmap.io.given_boundary import read_given_boundary, write_given_boundary
from volmap.io.json_documents import read_json, write_json
from volmap.io.landmarks import read_pairs, write_pairs
from volmap.io.nifti import read_field, read_image, read_labels, write_field, write_image, write_labels
from volmap.io.opening import shown_name
from volmap.io.vtk_xml import read_mesh, read_surface, write_mesh, write_surface
from volmap.types import (
    Certificate,
    GivenBoundary,
    GivingWay,
    GridField,
    ImageVolume,
    InputError,
    IterationRecord,
    LabelCodes,
    LabelVolume,
    LandmarkPairs,
    Status,
    Surface,
    TetMesh,
    VolumeMap,
)
from volmap.types.notice import caution

MAP, OTHER = "map.vtu", "other_order.vtu"
ALONE = "alone_mm"  # point array of both: where the points went before the solves were drawn together
SURFACES = {"source": "source_surface.vtp", "target": "target_surface.vtp"}
LABELS = {"source": "source_labels.nii.gz", "target": "target_labels.nii.gz"}
FIELDS = ("forward", "backward")
GIVEN = "given_boundary.vtp"
CARRIED, RATIO = "carried_labels.nii.gz", "volume_ratio.nii.gz"
CERTIFICATE, REPORT, STEPS, PAIRS = "certificate.json", "report.html", "steps.json", "landmarks.csv"


@dataclass(frozen=True, eq=False)
class MapFolder:
    """A map with everything that is stored beside it.

    Parameters
    ----------
    map : VolumeMap
        From SOURCE into TARGET.
    solved_on : str
        'source' or 'target': whose own mesh the tets of the map are.  When it is 'target', the points
        of the map are the images of TARGET's mesh in SOURCE.
    source, target : LabelVolume
    source_surface, target_surface : Surface
        Label surfaces of the scans' own meshes.
    forward, backward : GridField
    carried : LabelVolume
        SOURCE's labels on TARGET's grid.
    volume_ratio : ImageVolume
        J on SOURCE's grid.
    sidecars : mapping of str to dict
        Of 'forward' and 'backward'.
    certificate : Certificate
    other : VolumeMap, optional
        The pair solved on the other scan's mesh, from TARGET into SOURCE.
    alone : (VolumeMap, VolumeMap), optional
        `map` and `other` before the two solves were drawn together; None when they never were.
    pairs : LandmarkPairs, optional
        Guides and checks.
    status : Status
        How the solve ended.
    history : tuple of IterationRecord
    distortion : (m,) float64
        W_S of each tet.
    given : GivenBoundary, optional
        The boundary correspondence the map was asked to keep, from SOURCE to TARGET.
    giving_way : tuple of GivingWay
        What other tolerances would have cost.
    """

    map: VolumeMap
    solved_on: str
    source: LabelVolume
    target: LabelVolume
    source_surface: Surface
    target_surface: Surface
    forward: GridField
    backward: GridField
    carried: LabelVolume
    volume_ratio: ImageVolume
    sidecars: Mapping[str, dict[str, Any]]
    certificate: Certificate
    other: VolumeMap | None = None
    alone: tuple[VolumeMap, VolumeMap] | None = None
    pairs: LandmarkPairs | None = None
    status: Status = Status.OUT_OF_STEPS
    history: tuple[IterationRecord, ...] = ()
    distortion: NDArray[np.float64] = field(default_factory=lambda: np.zeros(0))
    given: GivenBoundary | None = None
    giving_way: tuple[GivingWay, ...] = ()

    @property
    def own_meshes(self) -> dict[str, TetMesh]:
        """The scans' own meshes, as far as they are stored: 'source', 'target'."""
        found = {self.solved_on: self.map.mesh if self.solved_on == "source" else self.map.image_mesh}
        if self.other is not None:
            if self.solved_on == "source":
                found["target"] = self.other.mesh
            else:
                found["source"] = self.other.image_mesh
        return found


def write_map_folder(path: Path, folder: MapFolder, *, report_html: str, overwrite: bool = False) -> None:
    """Write a map folder; it stands whole under its name, or not at all.

    Raises
    ------
    InputError
        The place is taken or cannot be written.
    """
    with whole_folder(path, overwrite=overwrite, holding=CERTIFICATE) as place:
        _write_meshes(place, folder)
        for name in FIELDS:
            grid_field: GridField = getattr(folder, name)
            write_field(place / f"{name}.nii.gz", grid_field)
            write_json(place / f"{name}.json", folder.sidecars[name])
            defined = grid_field.support.astype(np.uint16)
            support = LabelVolume(grid_field.grid, defined, {1: "defined"}, f"{name}_support")
            write_labels(place / f"{name}_support.nii.gz", support)
        write_labels(place / CARRIED, folder.carried)
        write_image(place / RATIO, folder.volume_ratio)
        for side, file in LABELS.items():
            write_labels(place / file, getattr(folder, side))
        if folder.pairs is not None:
            write_pairs(place / PAIRS, folder.pairs)
        if folder.given is not None:
            write_given_boundary(place / GIVEN, folder.given)
        steps = [asdict(record) for record in folder.history]
        told = {"schema": "volmap-steps/1", "notice": caution(), "status": folder.status.name}
        rows = {"giving_way": [asdict(row) for row in folder.giving_way]} if folder.giving_way else {}
        write_json(place / STEPS, told | {"steps": steps} | rows)
        write_json(place / CERTIFICATE, as_document(folder.certificate))
        (place / REPORT).write_text(report_html, encoding="utf-8")


def _write_meshes(place: Path, folder: MapFolder) -> None:
    here = folder.map
    cells: dict[str, NDArray[Any]] = {"volume_ratio": here.volume_ratio, "stretch": here.stretches}
    if len(folder.distortion):
        cells["distortion"] = folder.distortion
    names = {"source": here.source, "target": here.target}
    main_alone, other_alone = _alone_arrays(folder)
    write_mesh(
        place / MAP,
        here.mesh,
        point_data={"image_mm": here.images} | main_alone,
        cell_data=cells,
        field_data=names | {"solved_on": folder.solved_on},
    )
    if folder.other is not None:
        write_mesh(
            place / OTHER,
            folder.other.mesh,
            point_data={"image_mm": folder.other.images} | other_alone,
            field_data={"source": names["target"], "target": names["source"]},
        )
    for side, file in SURFACES.items():
        write_surface(place / file, getattr(folder, f"{side}_surface"))


def _alone_arrays(folder: MapFolder) -> tuple[dict[str, NDArray[np.float64]], ...]:
    """Point arrays `alone_mm` of both maps: where each solve alone put the points of its mesh."""
    if folder.alone is None:
        return {}, {}
    here, there = folder.alone
    if folder.solved_on == "source":
        return {ALONE: here.images}, {ALONE: there.images}
    return {ALONE: here.mesh.points}, {ALONE: there.mesh.points}


def _alone(
    volume_map: VolumeMap,
    other: VolumeMap | None,
    solved_on: str,
    arrays: tuple[NDArray[Any] | None, NDArray[Any] | None],
) -> tuple[VolumeMap, VolumeMap] | None:
    """What `_alone_arrays` laid down; None when one of the arrays is missing."""
    here, there = arrays
    if other is None or here is None or there is None:
        return None
    found = []
    for now, alone in ((volume_map, here), (other, there)):
        if solved_on == "source":
            found.append(VolumeMap(now.mesh, alone, now.source, now.target))
        else:
            found.append(VolumeMap(now.mesh.moved(alone), now.images, now.source, now.target))
    return found[0], found[1]


def read_map_folder(path: Path) -> MapFolder:
    """Read a map folder and check that its files belong together.

    Raises
    ------
    InputError
        No map folder, a file missing or damaged, or files that do not belong to one map.
    """
    certificate = read_certificate(path)
    mesh, points, cells, told = read_mesh(_file(path, MAP))
    names = {side: str(getattr(certificate, side).get("name", side)) for side in ("source", "target")}
    digests = tuple(str(getattr(certificate, side).get("sha256", "")) for side in ("source", "target"))
    volume_map = VolumeMap(mesh, _images(points, MAP), names["source"], names["target"], *digests)
    _require_cells(cells, volume_map)
    source, target = (_labels(path, side, certificate) for side in ("source", "target"))
    other, other_alone = _other(path, names)
    solved_on = _solved_on(told)
    status, history, giving_way = _steps(path)
    pairs = read_pairs(path / PAIRS) if (path / PAIRS).exists() else None
    folder = MapFolder(
        map=volume_map,
        solved_on=solved_on,
        source=source,
        target=target,
        source_surface=read_surface(_file(path, SURFACES["source"])),
        target_surface=read_surface(_file(path, SURFACES["target"])),
        forward=read_field(
            _file(path, "forward.nii.gz"), grid_space=names["source"], points_into=names["target"]
        ),
        backward=read_field(
            _file(path, "backward.nii.gz"), grid_space=names["target"], points_into=names["source"]
        ),
        carried=read_labels(_file(path, CARRIED)),
        volume_ratio=read_image(_file(path, RATIO)),
        sidecars={name: read_json(_file(path, f"{name}.json")) for name in FIELDS},
        certificate=certificate,
        other=other,
        alone=_alone(volume_map, other, solved_on, (points.get(ALONE), other_alone)),
        pairs=pairs,
        status=status,
        history=history,
        distortion=np.asarray(cells.get("distortion", np.zeros(0)), np.float64),
        given=read_given_boundary(path / GIVEN) if (path / GIVEN).exists() else None,
        giving_way=giving_way,
    )
    _require_same_grids(folder)
    _require_supports(path, folder)
    return folder


def read_certificate(path: Path) -> Certificate:
    """The certificate of a map folder.

    Raises
    ------
    InputError
        No map folder, or a damaged certificate.
    """
    if not (path / CERTIFICATE).is_file():
        raise InputError(
            "is not a map folder",
            where=shown_name(path.absolute()),
            found="" if path.exists() else "nothing of that name",
            expected=f"a folder that `volmap map` has written, with {CERTIFICATE}",
            remedy="check the name, or map the pair first",
        )
    return from_document(read_json(_file(path, CERTIFICATE)), where=CERTIFICATE)


def _file(path: Path, name: str) -> Path:
    if not (path / name).is_file():
        raise InputError(
            "a file of the map folder is missing",
            where=f"{path.absolute().name}/{name}",
            remedy="map the pair again; a map folder must stay whole",
        )
    return path / name


def _images(points: Mapping[str, NDArray[Any]], name: str) -> NDArray[np.float64]:
    if "image_mm" not in points:
        raise InputError("holds no point array `image_mm`", where=name, remedy="map the pair again")
    return np.asarray(points["image_mm"], np.float64)


def _require_cells(cells: Mapping[str, NDArray[Any]], volume_map: VolumeMap) -> None:
    for name, fresh in (("volume_ratio", volume_map.volume_ratio), ("stretch", volume_map.stretches)):
        stored = cells.get(name)
        if stored is None or stored.shape != fresh.shape or not np.allclose(stored, fresh, rtol=1e-6):
            raise InputError(
                f"its cell array `{name}` is not what its points give",
                where=MAP,
                remedy="map the pair again",
                refused=True,
            )


def _solved_on(told: Mapping[str, Any]) -> str:
    side = str(told.get("solved_on", ""))
    if side not in ("source", "target"):
        raise InputError(
            "does not say whose mesh it was solved on",
            where=MAP,
            found=repr(side),
            expected="solved_on = source or target in its FieldData",
            remedy="map the pair again",
        )
    return side


def _labels(path: Path, side: str, certificate: Certificate) -> LabelVolume:
    stored = read_labels(_file(path, LABELS[side]))
    told: Mapping[str, Any] = getattr(certificate, side)
    if told.get("sha256") != stored.sha256:
        raise InputError(
            f"the {side} labels are not those the certificate speaks of",
            where=f"{path.absolute().name}/{LABELS[side]}",
            found=f"digest {stored.sha256[:12]}",
            expected=str(told.get("sha256"))[:12],
            remedy="map the pair again",
            refused=True,
        )
    labels = {int(k): v for k, v in dict(told.get("labels", {})).items()}
    names = {k: str(v.get("name", "")) for k, v in labels.items()}
    codes = {k: LabelCodes.of(v["codes"]) for k, v in labels.items() if "codes" in v}
    return replace(stored, names=names, name=str(told.get("name", side)), codes=codes)


def _other(path: Path, names: Mapping[str, str]) -> tuple[VolumeMap | None, NDArray[Any] | None]:
    if not (path / OTHER).exists():
        return None, None
    mesh, points, _, _ = read_mesh(path / OTHER)
    other = VolumeMap(mesh, _images(points, OTHER), names["target"], names["source"])
    return other, points.get(ALONE)


def _steps(path: Path) -> tuple[Status, tuple[IterationRecord, ...], tuple[GivingWay, ...]]:
    document = read_json(_file(path, STEPS))
    try:
        steps = tuple(IterationRecord(**step) for step in document.get("steps", []))
        rows = tuple(
            GivingWay(**row | {"where_mm": tuple(row["where_mm"])}) for row in document.get("giving_way", [])
        )
        return Status[str(document.get("status"))], steps, rows
    except (TypeError, KeyError) as fault:
        raise InputError(
            "a step of the solve is not as written",
            where=STEPS,
            found=str(fault),
            remedy="map the pair again",
        ) from fault


def _require_same_grids(folder: MapFolder) -> None:
    pairs = (
        ("forward.nii.gz", folder.forward.grid, folder.source, folder.target),
        (RATIO, folder.volume_ratio.grid, folder.source, folder.target),
        ("backward.nii.gz", folder.backward.grid, folder.target, folder.source),
        (CARRIED, folder.carried.grid, folder.target, folder.source),
    )
    for name, grid, owner, other in pairs:
        if grid.same_place(owner.grid):
            continue
        swapped = grid.same_place(other.grid)
        raise InputError(
            f"does not lie on the grid of {owner.name}",
            where=name,
            found=f"that of {other.name}, as the file of the other direction has it"
            if swapped
            else grid_mistake(grid, owner.grid),
            remedy="map the pair again; a map folder must stay as it was written",
        )


def _require_supports(path: Path, folder: MapFolder) -> None:
    for name in FIELDS:
        file = f"{name}_support.nii.gz"
        support = read_labels(_file(path, file))
        grid_field: GridField = getattr(folder, name)
        if support.labels.shape != grid_field.grid.shape or (support.labels != grid_field.support).any():
            other: GridField = folder.backward if name == "forward" else folder.forward
            swapped = np.array_equal(support.labels, other.support)
            raise InputError(
                f"is not where {name}.nii.gz is defined",
                where=file,
                found="where the field of the other direction is defined: two files were swapped"
                if swapped
                else "",
                remedy="map the pair again",
            )
