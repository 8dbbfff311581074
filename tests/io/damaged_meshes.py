"""Damaged meshes, surfaces and given boundaries."""

from __future__ import annotations

import base64
import re
import struct
import zlib

import numpy as np
from damaged_case import HERE, Case, cut, put
from sound_files import CUBE, SIDES, TETS, mesh_bytes


def text_changes(data, changes):
    made = {}
    for name, (old, new) in changes.items():
        assert old in data, name
        made[name] = data.replace(old, new, 1)
    return made


def vtu_damages(data):
    made = {f"cut at {share}": cut(data, share) for share in (0, 0.01, 0.3, 0.7, 0.99)}
    n_points = re.search(rb'NumberOfPoints="(\d+)"', data)
    n_cells = re.search(rb'NumberOfCells="(\d+)"', data)
    for name, found in (("points", n_points), ("cells", n_cells)):
        for value in (b"0", b"7", b"99999999999", b"-1", b"many"):
            made[f"{name} {value.decode()}"] = data.replace(
                found.group(0), found.group(0).replace(found.group(1), value)
            )
    made |= text_changes(data, {
        "another kind": (b'type="UnstructuredGrid"', b'type="ImageData"'),
        "type of number": (b'type="Float64"', b'type="Float65"'),
        "smaller numbers": (b'type="Float64"', b'type="Float32"'),
        "a tag unclosed": (b"</Points>", b""),
        "no points": (b"Points>", b"Pints>"),
        "entities": (b"<VTKFile", b'<!DOCTYPE a [<!ENTITY b "c">]><VTKFile'),
        "packing": (b"vtkZLibDataCompressor", b"vtkLZMADataCompressor"),
        "components": (b'NumberOfComponents="3"', b'NumberOfComponents="0"'),
        "offsets": (b'offset="0"', b'offset="999999999"'),
    } if b"appended" in data else {})  # fmt: skip
    return made


def packed_bomb(blocks=48, megabytes=32):
    """A VTU whose points unpack to a gigabyte and a half of zeros, in as many blocks as the format wants."""
    block = zlib.compress(bytes(megabytes * 2**20), 9)
    head = struct.pack(f"<{3 + blocks}I", blocks, megabytes * 2**20, 0, *[len(block)] * blocks)
    coded = base64.b64encode(head) + base64.b64encode(block * blocks)
    return (
        b'<VTKFile type="UnstructuredGrid" byte_order="LittleEndian" header_type="UInt32" '
        b'compressor="vtkZLibDataCompressor"><UnstructuredGrid>'
        b'<Piece NumberOfPoints="67108864" NumberOfCells="0"><Points>'
        b'<DataArray type="Float64" Name="Points" NumberOfComponents="3" format="binary">'
        + coded
        + b"</DataArray></Points></Piece></UnstructuredGrid></VTKFile>"
    )


def mesh_cases(folder, through):

    from volmap.io.vtk_xml import write_mesh
    from volmap.types import TetMesh

    write_mesh(folder / "own.vtu", TetMesh(20 * CUBE, TETS, np.ones(len(TETS), int)))
    own = (folder / "own.vtu").read_bytes()

    def carried(name):
        return ["carry", f"{HERE}/{name}", "--through", through, "--out", f"{HERE}/out.vtu", "--quiet"]

    damages = vtu_damages(own) | {"bomb": packed_bomb()}
    return [Case(f"vtu/{name}", {"x.vtu": data}, carried("x.vtu")) for name, data in damages.items()]


def carried_surface_cases(folder, through):
    """Surfaces and lines in VTP, which `carry` takes."""
    from volmap.io.polylines import write_polylines
    from volmap.io.vtk_xml import write_surface
    from volmap.types import Polylines, Surface

    write_surface(folder / "s.vtp", Surface(3 * CUBE, SIDES, np.tile([1, 0], (12, 1))))
    write_polylines(folder / "l.vtp", Polylines(("a", "b"), 3 * CUBE, np.array([0, 4, 8])))
    cases = []
    for kind, name in (("vtp", "s.vtp"), ("vtp lines", "l.vtp")):
        data = (folder / name).read_bytes()
        made = {f"cut at {share}": cut(data, share) for share in (0, 0.02, 0.4, 0.8, 0.99)}
        made |= text_changes(
            data,
            {
                "another kind": (b'type="PolyData"', b'type="UnstructuredGrid"'),
                "points": (b'NumberOfPoints="8"', b'NumberOfPoints="9"'),
                "points huge": (b'NumberOfPoints="8"', b'NumberOfPoints="9999999999"'),
                "type": (b'type="Float64"', b'type="Float16"'),
                "offset": (b'offset="0"', b'offset="77777"'),
            },
        )
        command = ["carry", f"{HERE}/x.vtp", "--through", through, "--out", f"{HERE}/out.vtp", "--quiet"]
        cases += [Case(f"{kind}/{damage}", {"x.vtp": spoilt}, command) for damage, spoilt in made.items()]
    return cases


def surface_cases(folder):
    made = {}
    for ending, how in ((".stl", {"binary": True}), (".ply", {"binary": True}), (".off", {}), (".obj", {}),
                        (".vtk", {"binary": True})):  # fmt: skip
        data = mesh_bytes(folder, ending, **how)
        for share in (0, 0.02, 0.3, 0.6, 0.97)[: 4 if ending == ".obj" else 5]:
            made[f"{ending[1:]}/cut at {share}"] = (ending, cut(data, share))
        if ending == ".stl":
            made["stl/huge"] = (ending, put(data, 80, "<I", 2**32 - 1))
            made["stl/one more"] = (ending, put(data, 80, "<I", 13))
            made["stl/NaN"] = (ending, put(data, 96, "<f", np.nan))
            made["stl/infinite"] = (ending, put(data, 96, "<f", np.inf))
        if ending == ".ply":
            for name, (old, new) in {
                "huge": (b"element vertex 8", b"element vertex 99999999999"),
                "negative": (b"element vertex 8", b"element vertex -8"),
                "fewer points": (b"element vertex 8", b"element vertex 7"),
                "type": (b"property double x", b"property quad x"),
                "order": (b"binary_little_endian", b"binary_middle_endian"),
            }.items():
                assert old in data, name
                made[f"ply/{name}"] = (ending, data.replace(old, new, 1))
        if ending == ".vtk":
            for name, (old, new) in {
                "huge": (b"POINTS 8", b"POINTS 99999999999"),
                "negative": (b"POINTS 8", b"POINTS -8"),
                "fewer points": (b"POINTS 8", b"POINTS 5"),
                "kind": (b"UNSTRUCTURED_GRID", b"STRUCTURED_NONE"),
            }.items():
                assert old in data, name
                made[f"vtk/{name}"] = (ending, data.replace(old, new, 1))
    return [
        Case(name, {f"x{ending}": data}, ["mesh", f"{HERE}/x{ending}", "--out", f"{HERE}/out.vtu", "--quiet"])
        for name, (ending, data) in made.items()
    ]


LEGACY = b"""# vtk DataFile Version 3.0
a cube
ASCII
DATASET POLYDATA
POINTS 4 float
0 0 0 9 0 0
0 9 0 0 0 9
POLYGONS 4 16
3 0 2 1 3 0 1 3
3 0 3 2 3 1 2 3
POINT_DATA 4
SCALARS heat float 1
LOOKUP_TABLE default
1 2 3 4
"""
LEGACY_CHANGES = {
    "version": (b"# vtk", b"# vtx"),
    "coding": (b"ASCII", b"UTF-8"),
    "kind": (b"POLYDATA", b"STRUCTURED_POINTS"),
    "no kind": (b"DATASET POLYDATA\n", b""),
    "huge": (b"POINTS 4", b"POINTS 999999999999"),
    "one point more": (b"POINTS 4", b"POINTS 5"),
    "one point fewer": (b"POINTS 4", b"POINTS 3"),
    "negative": (b"POINTS 4", b"POINTS -4"),
    "type": (b"4 float", b"4 half"),
    "a word": (b"9 0 0", b"9 o 0"),
    "NaN": (b"9 0 0", b"9 nan 0"),
    "cells more": (b"POLYGONS 4", b"POLYGONS 5"),
    "cells huge": (b"POLYGONS 4 16", b"POLYGONS 4 99999999999"),
    "corner beyond": (b"3 1 2 3", b"3 1 2 4"),
    "corner negative": (b"3 1 2 3", b"3 1 2 -3"),
    "a cell of nine": (b"3 1 2 3", b"9 1 2 3"),
    "rows more": (b"POINT_DATA 4", b"POINT_DATA 5"),
    "no table": (b"LOOKUP_TABLE default\n", b""),
    "section": (b"POINT_DATA", b"PINT_DATA"),
    "points twice as one": (b"POLYGONS 4 16\n", b"\n"),
}


def legacy_cases():
    return [
        Case(
            f"vtk text/{name}",
            {"x.vtk": data},
            ["mesh", f"{HERE}/x.vtk", "--out", f"{HERE}/out.vtu", "--quiet"],
        )
        for name, data in text_changes(LEGACY, LEGACY_CHANGES).items()
    ]


def boundary_cases(folder, source, target):
    data = mesh_bytes(folder, ".ply", images=False, binary=False)
    vtu = mesh_bytes(folder, ".vtu", images=True)
    made = {
        "no image": (".ply", data),
        "cut": (".vtu", cut(vtu, 0.6)),
        "empty": (".vtu", b""),
        "NaN": (".vtu", None),
    }
    del made["NaN"]
    return [
        Case(
            f"boundary/{name}",
            {f"x{ending}": data},
            ["map", source, target, "--boundary", f"{HERE}/x{ending}", "--out", f"{HERE}/out", "--quiet"],
        )
        for name, (ending, data) in made.items()
    ]
