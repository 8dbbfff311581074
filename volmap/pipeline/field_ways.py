"""What things are carried through when it is a sampled field: its file, and the document beside it."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np

from volmap import carry as carrying
from volmap.io.json_documents import read_json
from volmap.io.nifti import read_field
from volmap.pipeline.belonging import KnownScan, Side
from volmap.pipeline.places import NIFTI
from volmap.types import Finding, Grid, GridField, InputError, Level, UnsaidError

SCHEMA = "volmap-field/1"


@dataclass(frozen=True, eq=False)
class FieldWay:
    """A field in the direction in which a kind of thing goes.

    Parameters
    ----------
    name : str
        Of its file.
    field : GridField
    document : mapping
        Its .json.
    pulls : bool
        True for volumes, which come from where the field points to onto its grid; False for points, which
        go from its grid to where it points to.
    """

    name: str
    field: GridField
    document: Mapping[str, Any]
    pulls: bool

    @property
    def ends(self) -> tuple[KnownScan, KnownScan]:
        """What is known of the scans at its start and at its end."""
        here, there = (self._known(key) for key in ("grid_space", "points_into"))
        return (there, here) if self.pulls else (here, there)

    @property
    def between(self) -> tuple[KnownScan, ...]:
        """None: a field leads straight from one scan to the other."""
        return ()

    def _known(self, key: str) -> KnownScan:
        told = self.document[key]
        side: Side = "source" if told["role"] == "SOURCE" else "target"
        grid = self.field.grid if key == "grid_space" else _grid(told)
        turn = f"use {self.document.get('paired_file', 'the field of the other direction')}"
        return KnownScan(told["name"], grid, frozenset({told["sha256"]} - {""}), None, side, turn)

    @property
    def end_sha256(self) -> str:
        """Digest of the scan in which things arrive."""
        return str(self.document["grid_space" if self.pulls else "points_into"]["sha256"])

    @property
    def voxel_mm(self) -> float:
        """One voxel of the field."""
        return self.field.grid.voxel_mm

    def carry(
        self, thing: Any, settings: carrying.CarrySettings, *, onto: Grid | None = None
    ) -> carrying.Carried:
        """A thing in its new place, with a note that it was the field that carried it.

        Raises
        ------
        InputError
            Voxels other than the field's are asked for, or as `carry_by_field`.
        """
        if onto is not None:
            raise UnsaidError(
                "a field carries volumes onto its own voxels",
                where=self.name,
                remedy="carry it through the map folder, or leave out --onto",
            )
        carried = carrying.carry_by_field(thing, self.field, settings=settings)
        note = Finding(Level.NOTE, "sampled-field", self.name, self.how)
        return carrying.Carried(carried.thing, (note, *carried.findings), carried.facts)

    @property
    def findings(self) -> tuple[Finding, ...]:
        """None: a field is not turned round."""
        return ()

    @property
    def how(self) -> str:
        """How things were carried, in words."""
        if self.pulls:
            return (
                f"carried by the sampled field {self.name}: each voxel of its grid took the value at "
                "y = x + u(x); at its voxel centres the field is the exact map, rounded to float32"
            )
        error = self.document.get("against_exact_map")
        most = error.get("max_mm") if isinstance(error, dict) else None
        far = f"; the two differ by up to {most:.3g} mm" if isinstance(most, float) else ""
        return (
            f"carried by the sampled field {self.name}, trilinear between its voxel centres, not by the "
            f"exact map{far}"
        )

    @property
    def told(self) -> dict[str, Any]:
        """What the document beside a carried file says of the way."""
        start, end = ("points_into", "grid_space") if self.pulls else ("grid_space", "points_into")
        names = [{k: self.document[key][k] for k in ("name", "sha256")} for key in (start, end)]
        through = [{"field": self.name, "from": names[0]["name"], "to": names[1]["name"]}]
        return {"from": names[0], "to": names[1], "through": through, "how": self.how}


def is_field_file(path: Path) -> bool:
    """True for a file, rather than a map folder, to carry through."""
    return path.is_file() and path.name.lower().endswith(NIFTI)


def read_field_way(path: Path, *, pulls: bool) -> FieldWay:
    """Read a field and its document, and prove by the check point that they belong together.

    Parameters
    ----------
    path : Path
        A field (.nii, .nii.gz) with its .json beside it.
    pulls : bool
        See `FieldWay`.

    Raises
    ------
    InputError
        No document, one of another kind, or a field that is not what its document says.
    """
    stem = path.name[: -len(next(e for e in reversed(NIFTI) if path.name.lower().endswith(e)))]
    beside = path.with_name(f"{stem}.json")
    if not beside.is_file():
        raise InputError(
            "has no document beside it, and nothing else says which way the field runs",
            where=path.name,
            expected=beside.name,
            remedy=f"keep {beside.name} beside it, as `volmap map` wrote it",
        )
    document = read_json(beside)
    _require_document(document, beside.name)
    names = (document["grid_space"]["name"], document["points_into"]["name"])
    field = read_field(path, grid_space=names[0], points_into=names[1])
    said = _grid(document["grid_space"])
    if said is not None and not said.same_place(field.grid):
        raise InputError(
            f"does not lie on the grid that {beside.name} names",
            where=path.name,
            found=carrying.grid_mistake(field.grid, said),
            remedy="use the files as `volmap map` wrote them",
            refused=True,
        )
    proof = carrying.direction_proof(field, document, name=path.name)
    if proof.faults:
        raise InputError(
            proof.faults[0].removeprefix(f"{path.name}: "),
            where=path.name,
            remedy="use the files as `volmap map` wrote them",
            refused=True,
        )
    return FieldWay(path.name, field, document, pulls)


def _require_document(document: Mapping[str, Any], where: str) -> None:
    """Refuse a document that does not say where the field lies and points to."""
    if document.get("schema") != SCHEMA:
        raise InputError(
            "is not the document of a field",
            where=where,
            found=f"schema {document.get('schema')!r}",
            expected=SCHEMA,
        )
    roles = {"forward": ("SOURCE", "TARGET"), "backward": ("TARGET", "SOURCE")}.get(
        str(document.get("direction")), ("", "")
    )
    for key, role in zip(("grid_space", "points_into"), roles, strict=True):
        told = document.get(key)
        fits = isinstance(told, dict) and all(
            isinstance(told.get(k), str) for k in ("name", "sha256", "role")
        )
        if not isinstance(told, dict) or not fits or told["role"] != role:
            raise InputError(
                f"does not say in which scan {key} is",
                where=where,
                found=f"direction {document.get('direction')!r}, {key} {told!r}"[:200],
                expected="direction forward or backward, and for both scans role, name and sha256 to match",
                remedy="use the files as `volmap map` wrote them",
            )


def _grid(told: Mapping[str, Any]) -> Grid | None:
    """The grid a document names, or None when it names none.

    Raises
    ------
    InputError
        It names one that is none.
    """
    grid = told.get("grid")
    if grid is None:
        return None
    try:
        return Grid(tuple(grid["shape"]), np.array(grid["affine"], np.float64))
    except (TypeError, KeyError, ValueError, OverflowError) as fault:
        raise InputError(
            "the grid in its document is not as written",
            where=str(told.get("name")),
            found=str(grid)[:80],
            expected="shape and affine",
            remedy="use the files as `volmap map` wrote them",
        ) from fault
