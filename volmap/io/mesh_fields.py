"""Meshes with their data as things whose data are carried: which array is what, by its components.

An array of one component is a scalar, of three a vector along x, y, z of the world, of six a symmetric tensor
in VTK's order (xx, yy, zz, xy, yz, xz), of nine a symmetric tensor row by row.  Whole numbers of one
component and bytes are labels or colours.
"""

from __future__ import annotations

import os
from collections.abc import Mapping, Sequence
from dataclasses import replace
from typing import Any

import numpy as np
from numpy.typing import NDArray

from volmap.io.atomic import whole_file
from volmap.io.meshes import read_mesh_file
from volmap.io.vtk_xml import write_mesh, write_surface
from volmap.types.errors import InputError, UnsaidError
from volmap.types.findings import Finding, Level
from volmap.types.mesh_fields import MeshFields
from volmap.types.notice import short_caution
from volmap.types.quantities import Quantity, Rule, Rules
from volmap.types.surface import Surface
from volmap.types.tetmesh import TetMesh

SURFACE_OUT = (".vtp", ".stl", ".ply")
_NORMALS = {".ply": {"nx", "ny", "nz"}, ".stl": {"facet_normals"}}  # meshio's names for them
_OF_SIX = np.array([[0, 3, 5], [3, 1, 4], [5, 4, 2]])
_RANK = {1: 0, 3: 1, 6: 2, 9: 2}
PathLike = str | os.PathLike[str]


def read_mesh_fields(
    path: PathLike, rules: Rules, *, earlier: Mapping[str, Rule] | None = None
) -> tuple[MeshFields, tuple[Finding, ...]]:
    """A mesh or surface of any format of `read_mesh_file`, and what is to become of its data.

    Parameters
    ----------
    path : path
    rules : Rules
        Vectors and tensors need one.  A scalar without keeps its value, and a finding says so.  An array of
        several components that is no vector is kept when its own rule is `value`.
    earlier : mapping of str to Rule, optional
        By which it was carried before; holds where `rules` say nothing.

    Raises
    ------
    UnsaidError
        A vector or tensor without a rule, a rule for an array that is not there.
    InputError
        As `read_mesh_file`; a tensor that is not symmetric.
    """
    file = read_mesh_file(path)
    ending = os.path.splitext(os.fspath(path))[1].lower()
    normals = _NORMALS.get(ending, set())
    data = [
        {k: v for k, v in arrays.items() if k not in normals} for arrays in (file.point_data, file.cell_data)
    ]
    rules.require_known({**data[0], **data[1]}, file.name)
    findings = list(file.findings)
    taken = {k: rule for k, rule in (earlier or {}).items() if _unsaid(k, rules, data)}
    if taken:
        rules = replace(rules, of_each={**taken, **rules.of_each})
        findings.append(rules_as_before(taken, file.name))
    if normals & {*file.point_data, *file.cell_data}:
        sentence = "its normals were left out: they follow from the triangles"
        findings.append(Finding(Level.NOTE, "normals-left-out", file.name, sentence))
    assumed: list[str] = []
    (at_points, kept_at_points), (at_cells, kept_at_cells) = (
        _sorted(arrays, rules, file.name, assumed) for arrays in data
    )
    if assumed:
        sentence = f"scalars without a rule keep their values: {', '.join(dict.fromkeys(assumed))}"
        remedy = f"say --rule {assumed[0]}=density for an amount in a volume"
        findings.append(Finding(Level.NOTE, "values-kept", file.name, sentence, remedy))
    left = [name for name in rules.left_out if name in {**data[0], **data[1]}]
    if left:
        sentence = f"left out, as asked for: {', '.join(left)}"
        findings.append(Finding(Level.NOTE, "left-out", file.name, sentence))
    fields = MeshFields(file.body, at_points, at_cells, kept_at_points, kept_at_cells)
    return fields, tuple(findings)


def write_mesh_fields(path: PathLike, fields: MeshFields, *, overwrite: bool = False) -> None:
    """Write tets as .vtu and triangles as .vtp, with data; or triangles alone as .stl or .ply.

    Tensors are written with nine components, row by row.

    Raises
    ------
    InputError
        An ending that cannot hold it; the place is taken or cannot be written.
    """
    require_fitting(path, fields)
    if os.fspath(path).lower().endswith(SURFACE_OUT[1:]):
        _write_triangles(path, fields.body, overwrite=overwrite)
        return
    said = [f"{q.name}: {q.rule.value}" for q in (*fields.at_points, *fields.at_cells)]
    data: dict[str, Any] = {
        "point_data": _arrays(fields.at_points, fields.kept_at_points),
        "cell_data": _arrays(fields.at_cells, fields.kept_at_cells),
        "field_data": {"rules": "; ".join(said)} if said else {},
    }
    if isinstance(fields.body, TetMesh):
        write_mesh(path, fields.body, **data, overwrite=overwrite)
    else:
        write_surface(path, fields.body, **data, overwrite=overwrite)


def require_fitting(path: PathLike, fields: MeshFields) -> None:
    """Refuse a name whose format cannot hold the body and its data.

    Raises
    ------
    InputError
    """
    name = os.path.basename(os.fspath(path))
    wanted = (".vtu",) if isinstance(fields.body, TetMesh) else SURFACE_OUT
    if not name.lower().endswith(wanted):
        raise InputError(
            "is no name for what comes out", where=name,
            expected=f"a name that ends in {' or '.join(wanted)}", remedy="change the ending of the name",
        )  # fmt: skip
    data = [q.name for q in (*fields.at_points, *fields.at_cells)]
    data += [*fields.kept_at_points, *fields.kept_at_cells]
    labelled = isinstance(fields.body, Surface) and len(fields.body.pairs) > 1
    if name.lower().endswith(SURFACE_OUT[1:]) and (data or labelled):
        raise InputError(
            "cannot hold what lies on the surface", where=name,
            found=", ".join([*data, *(["labels"] if labelled else [])])[:100],
            expected="a name that ends in .vtp",
            remedy="change the ending, or leave the arrays out (--leave-out)",
        )  # fmt: skip


def rules_as_before(taken: Mapping[str, Rule], where: str) -> Finding:
    """Rules of the document beside a file that nobody overruled."""
    said = ", ".join(f"{name}: {rule.value}" for name, rule in taken.items())
    sentence = f"rules were taken from the document beside it, which says how it was carried before ({said})"
    return Finding(Level.NOTE, "rules-as-before", where, sentence)


def _unsaid(name: str, rules: Rules, data: Sequence[Mapping[str, NDArray[Any]]]) -> bool:
    """Whether an array is there, and the user says nothing of it."""
    for arrays in data:
        if name in arrays:
            rank = _RANK.get(arrays[name].reshape(len(arrays[name]), -1).shape[1])
            return name not in rules.left_out and (rank is None or rules.of(name, rank) is None)
    return False


def _sorted(
    arrays: Mapping[str, NDArray[Any]], rules: Rules, where: str, assumed: list[str]
) -> tuple[tuple[Quantity, ...], dict[str, NDArray[Any]]]:
    """Quantities, and what is kept; scalars without a rule are named in `assumed`."""
    quantities, kept = [], {}
    for name, values in arrays.items():
        flat = values.reshape(len(values), -1)
        n_components, rule = flat.shape[1], rules.of_each.get(name)
        whole = values.dtype.kind in "iub" and (n_components == 1 or values.dtype.itemsize == 1)
        if name in rules.left_out:
            continue
        if (whole and rule is None) or (rule is Rule.VALUE and n_components > 1):
            kept[name] = values
        elif n_components not in _RANK:
            raise UnsaidError(
                f"the array {name} has {n_components} components, and is neither scalar, vector nor tensor",
                where=where, remedy=f"keep its numbers (--rule {name}=value) or leave it out "
                f"(--leave-out {name})",
            )  # fmt: skip
        else:
            quantities.append(_quantity(name, flat, rules, where, assumed))
    return tuple(quantities), kept


def _quantity(name: str, flat: NDArray[Any], rules: Rules, where: str, assumed: list[str]) -> Quantity:
    rank = _RANK[flat.shape[1]]
    if rank == 0 and rules.of(name, 0) is None:
        assumed.append(name)
        rule = Rule.VALUE
    else:
        rule = rules.required(name, rank, where)
    values = flat.astype(np.float64)
    if rank == 0:
        values = values[:, 0]
    elif rank == 2:
        values = values[:, _OF_SIX] if flat.shape[1] == 6 else values.reshape(-1, 3, 3)
    try:
        return Quantity(name, "", values, rule)
    except InputError as fault:
        raise fault.at(f"{where}, array {name}") from fault


def _arrays(quantities: tuple[Quantity, ...], kept: Mapping[str, NDArray[Any]]) -> dict[str, NDArray[Any]]:
    return {q.name: q.values for q in quantities} | dict(kept)


def _write_triangles(path: PathLike, body: TetMesh | Surface, *, overwrite: bool) -> None:
    """Binary STL (single precision) or PLY (double)."""
    import importlib

    import meshio

    assert isinstance(body, Surface)
    kind = os.fspath(path).lower()[-3:]
    mesh = meshio.Mesh(np.array(body.points), [("triangle", np.array(body.triangles))])
    with whole_file(path, overwrite=overwrite) as temporary:
        importlib.import_module(f"meshio.{kind}").write(os.fspath(temporary), mesh, binary=True)
        temporary.write_bytes(_signed(temporary.read_bytes(), kind))


def _signed(raw: bytes, kind: str) -> bytes:
    """The caution where meshio puts its own name, and the day of writing in a PLY."""
    caution = short_caution().encode("ascii", "replace")
    if kind == "stl":
        return caution[:79].ljust(80) + raw[80:]
    header, end, body = raw.partition(b"end_header\n")
    lines = [line for line in header.splitlines(keepends=True) if not line.startswith(b"comment")]
    return b"".join([*lines, b"comment " + caution + b"\n", end, body])
