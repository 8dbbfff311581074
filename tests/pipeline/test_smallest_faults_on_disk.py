"""Faults near the last bit survive the way through the files, and `volmap certify` fails the map for them."""

from dataclasses import replace
from fractions import Fraction

import numpy as np
import pytest
from exact_volumes import exact_volume
from volmap_cli.main import main

from volmap import pipeline
from volmap.mapfolder import read_map_folder, write_map_folder
from volmap.types import TetMesh, Verdict, VolumeMap

RATIO = Fraction(-1, 10**14)


@pytest.fixture(scope="module")
def sound(small_pair):
    return read_map_folder(small_pair.folder)


def written(folder, volume_map, place):
    folder = replace(folder, map=volume_map, distortion=np.zeros(0), alone=None)
    write_map_folder(place, folder, report_html="-")
    return place


def with_one_tet_inverted(volume_map):
    """Images with one tet at about -1e-14 of its volume and all others positive, by rational numbers."""
    tets, images = volume_map.mesh.tets, np.array(volume_map.images)
    for tet in range(len(tets)):
        point, face = tets[tet, 0], tets[tet, 1:]
        star = [t for t in np.flatnonzero((tets == point).any(axis=1)) if t != tet]
        was, before = exact_volume(images[tets[tet]]), images[point].copy()
        centre = images[face].mean(axis=0)
        for bits in range(-40, 40):
            images[point] = centre
            images[point, bits % 3] += bits * np.spacing(centre[bits % 3])
            if not 2 * RATIO < exact_volume(images[tets[tet]]) / was < RATIO / 2:
                continue
            if all(exact_volume(images[tets[t]]) > 0 for t in star):
                return images, tet
        images[point] = before
    raise AssertionError("no tet of this map can be inverted alone")


def test_one_tet_inverted_by_a_relative_volume_of_1e_14(sound, tmp_path, capsys):
    images, tet = with_one_tet_inverted(sound.map)
    place = written(
        sound, VolumeMap(sound.map.mesh, images, sound.map.source, sound.map.target), tmp_path / "x"
    )
    gate = pipeline.certify_folder(place).certificate.gate("inverted_tets")
    assert gate.verdict is Verdict.FAIL
    assert (gate.value["in_mesh"], gate.value["in_image"]) == (0, 1)
    assert f"tet {tet} " in gate.where[0]["note"]
    assert main(["certify", str(place)]) == 1
    told = capsys.readouterr()
    assert "one-to-one" not in told.out + told.err


@pytest.mark.parametrize(("into_mm", "meets"), [(1e-9, True), (-1e-9, False)])
def test_a_boundary_that_crosses_itself_by_a_millionth_of_a_micrometre(sound, tmp_path, into_mm, meets):
    """One more tet, away from the body in SOURCE, whose tip goes into the body's image, or nearly."""
    mesh, images = sound.map.mesh, sound.map.images
    surface = sound.map.image_mesh.interfaces
    triangle = images[surface.triangles[np.argmax(surface.sides[:, 1] == 0)]]
    normal = np.cross(triangle[1] - triangle[0], triangle[2] - triangle[0])
    normal /= np.linalg.norm(normal)
    across = (triangle[1] - triangle[0]) / np.linalg.norm(triangle[1] - triangle[0])
    tip = triangle.mean(axis=0) - into_mm * normal
    beside = np.stack([across, np.cross(normal, across)]) * 0.01
    extra = np.stack([tip, *(tip + 0.5 * normal + beside), tip + 0.5 * normal - beside.sum(axis=0)])
    assert exact_volume(extra) > 0
    n = len(mesh.points)
    far = extra - tip + mesh.points.max(axis=0) + 10.0
    more = TetMesh(
        np.r_[mesh.points, far], np.r_[mesh.tets, n + np.arange(4)[None]], np.r_[mesh.labels, mesh.labels[:1]]
    )
    doctored = VolumeMap(more, np.r_[images, extra], sound.map.source, sound.map.target)
    place = written(sound, doctored, tmp_path / "x")
    certificate = pipeline.certify_folder(place).certificate
    assert certificate.gate("inverted_tets").verdict is Verdict.PASS
    gate = certificate.gate("boundary_crossings")
    assert (gate.value["crossing_pairs"] > 0) == meets == (gate.verdict is Verdict.FAIL)
    assert gate.value["one_to_one"] == (not meets)
