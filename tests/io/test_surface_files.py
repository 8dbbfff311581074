"""Closed triangle surfaces read through meshio."""

import contextlib
import struct

import meshio
import numpy as np
import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from volmap.io.surfaces import read_closed_surface
from volmap.types import InputError

CUBE = np.array([[i, j, k] for i in (0, 1) for j in (0, 1) for k in (0, 1)], float)
SIDES = np.array([[0, 1, 3], [0, 3, 2], [4, 6, 7], [4, 7, 5], [0, 4, 5], [0, 5, 1], [2, 3, 7], [2, 7, 6],
                  [0, 2, 6], [0, 6, 4], [1, 5, 7], [1, 7, 3]], np.int32)  # fmt: skip


def write(path, triangles=SIDES, points=CUBE):
    meshio.Mesh(points, [("triangle", np.asarray(triangles, np.int32))]).write(path)
    return path


def volume(points, triangles):
    return np.linalg.det(points[triangles]).sum() / 6


@pytest.mark.parametrize("suffix", [".stl", ".ply", ".off", ".obj", ".vtk"])
@pytest.mark.parametrize("turned", [False, True])
def test_a_cube_of_edge_two_encloses_eight(tmp_path, suffix, turned):
    # Closed form: volume 8, whichever way the file turns its triangles; 8 corners after welding.
    triangles = SIDES[:, ::-1] if turned else SIDES
    points, read = read_closed_surface(write(tmp_path / f"ö{suffix}", triangles, 2 * CUBE))
    assert (len(points), len(read)) == (8, 12)
    assert volume(points, read) == pytest.approx(8)


def test_text_stl(tmp_path):
    text = "solid a\n"
    for corners in CUBE[SIDES]:
        loop = "".join("vertex {} {} {}\n".format(*p) for p in corners)
        text += f"facet normal 0 0 0\nouter loop\n{loop}endloop\nendfacet\n"
    (tmp_path / "a.stl").write_text(text + "endsolid a\n")
    points, triangles = read_closed_surface(tmp_path / "a.stl")
    assert volume(points, triangles) == pytest.approx(1)


def test_a_hole_a_third_side_and_a_turned_triangle_are_refused(tmp_path):
    with pytest.raises(InputError, match="not closed, found 3 open edges") as caught:
        read_closed_surface(write(tmp_path / "a.ply", SIDES[1:]))
    assert caught.value.refused
    turned = SIDES.copy()
    turned[0] = turned[0][::-1]
    with pytest.raises(InputError, match="turned against"):
        read_closed_surface(write(tmp_path / "b.ply", turned))
    with pytest.raises(InputError, match="more than two"):
        read_closed_surface(write(tmp_path / "c.ply", np.concatenate([SIDES, [[0, 3, 1]], [[0, 1, 7]]])))


def test_flat_and_quads_and_unknown(tmp_path):
    with pytest.raises(InputError, match=r"no volume|few|turned"):
        read_closed_surface(write(tmp_path / "a.ply", SIDES, CUBE * [1, 1, 0]))
    meshio.Mesh(CUBE, [("quad", np.array([[0, 1, 3, 2]], np.int32))]).write(tmp_path / "q.ply")
    with pytest.raises(InputError, match="quad"):
        read_closed_surface(tmp_path / "q.ply")
    (tmp_path / "a.stlx").write_text("x")
    with pytest.raises(InputError, match="no surface file"):
        read_closed_surface(tmp_path / "a.stlx")


def test_a_surface_cut_short_and_one_of_nothing(tmp_path):
    meshio.stl.write(tmp_path / "a.stl", meshio.Mesh(CUBE, [("triangle", SIDES)]), binary=True)
    whole = (tmp_path / "a.stl").read_bytes()
    for content in (whole[: 84 + 50 * 5 + 17], b"solid a\nendsolid a\n"):
        (tmp_path / "a.stl").write_bytes(content)
        with pytest.raises(InputError, match=r"damaged or cut short|damaged or not") as caught:
            read_closed_surface(tmp_path / "a.stl")
        assert not caught.value.refused


def test_a_claim_of_four_billion_triangles(tmp_path):
    (tmp_path / "a.stl").write_bytes(b"x" * 80 + struct.pack("<I", 2**32 - 1) + b"\0" * 500)
    with pytest.raises(InputError):
        read_closed_surface(tmp_path / "a.stl")


FUZZ = settings(max_examples=120, deadline=None, suppress_health_check=[HealthCheck.function_scoped_fixture])


@FUZZ
@given(data=st.binary(max_size=200), suffix=st.sampled_from(["stl", "ply", "off", "obj"]),
       at=st.floats(0, 1), change=st.booleans())  # fmt: skip
def test_random_bytes_and_damaged_files(tmp_path, capfd, data, suffix, at, change):
    # Law: any bytes are read or refused, and nothing is said on the terminal.
    path = tmp_path / f"a.{suffix}"
    if change:
        good = bytearray(write(path).read_bytes())
        capfd.readouterr()
        place = int(at * (len(good) - 1))
        good[place : place + len(data[:3])] = data[:3]
        data = bytes(good)
    path.write_bytes(data)
    with contextlib.suppress(InputError):
        read_closed_surface(path)
    assert capfd.readouterr() == ("", "")
