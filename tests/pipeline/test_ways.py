"""Map folders one after the other: joined by the digests of their scans, turned where needed, said."""

import csv
from dataclasses import dataclass, replace

import numpy as np
import pytest

from volmap import pipeline
from volmap.carry import move_points
from volmap.mapfolder import read_map_folder
from volmap.pipeline.ways import Leg, joined_way, read_way
from volmap.types import Grid, InputError, LabelVolume, TetMesh, VolumeMap


@dataclass(frozen=True)
class Stored:
    """What a way asks of a map folder."""

    source: LabelVolume
    target: LabelVolume
    map: VolumeMap


def scan(letter):
    voxels = np.full((2, 2, 2), "ABCDE".index(letter) + 1, np.uint16)
    return LabelVolume(Grid((2, 2, 2), np.eye(4)), voxels, {}, f"scan {letter}")


def leg(name):
    """A folder between two scans; its map moves everything by the distance of their letters along x."""
    corners = np.array([[0.0, 0, 0], [9, 0, 0], [0, 9, 0], [0, 0, 9]]) - 2
    mesh = TetMesh(corners, np.array([[0, 1, 2, 3]]), np.array([1]))
    a, b = (scan(letter) for letter in name)
    shift = np.array([ord(name[1]) - ord(name[0]), 0, 0])
    here = mesh.moved(corners + np.array([ord(name[0]) - ord("A"), 0, 0]))
    return Leg(name, Stored(a, b, VolumeMap(here, here.points + shift, a.name, b.name, a.sha256, b.sha256)))


@pytest.mark.parametrize(
    ("folders", "turned", "ends"),
    [
        ("AB BC", "", "AC"),
        ("AB CB", "CB", "AC"),
        ("BA BC", "BA", "AC"),
        ("BA CB", "BA CB", "AC"),
        ("AB BC AC", "AC", "AA"),
        ("AB CB CD ED", "CB ED", "AE"),
        ("AB AB", "AB", "AA"),
        ("BA", "", "BA"),
    ],
)
def test_folders_are_turned_where_they_join_only_so(folders, turned, ends):
    way = joined_way([leg(name) for name in folders.split()])
    assert [f.where for f in way.findings] == turned.split()
    assert all(f.code == "turned-map" for f in way.findings)
    assert (way.start.name, way.end.name) == (f"scan {ends[0]}", f"scan {ends[1]}")
    moved = move_points(way.map, np.array([[0.5 + ord(ends[0]) - ord("A"), 0.5, 0.5]]))
    np.testing.assert_allclose(moved.points, [[0.5 + ord(ends[1]) - ord("A"), 0.5, 0.5]], atol=1e-12)
    back = way.reversed()
    assert (back.start.name, back.end.name) == (way.end.name, way.start.name)


@pytest.mark.parametrize(
    ("folders", "where", "words"),
    [
        ("AB CD", "AB, then CD", "ABCD"),
        ("AB BC AB", "BC, then AB", "ABC"),
        ("AB BC DE", "BC, then DE", "BCDE"),
    ],
)
def test_folders_that_do_not_join_are_refused_with_names_and_digests(folders, where, words):
    with pytest.raises(InputError) as caught:
        joined_way([leg(name) for name in folders.split()])
    assert caught.value.refused
    assert caught.value.sentence.startswith(f"{where}: two maps do not join")
    for letter in words:
        assert f"scan {letter} (digest {scan(letter).sha256[:12]})" in caught.value.sentence


def test_scans_of_one_name_are_told_apart_by_their_digests():
    legs = [leg("AB"), leg("CD")]
    renamed = replace(legs[1].folder, source=replace(scan("C"), name="scan B"))
    with pytest.raises(InputError, match="do not join"):
        joined_way([legs[0], Leg("CD", renamed)])


def test_points_through_two_folders(tmp_path, small_pair, third_visit):
    """Law: from file to file through both maps is one map after the other, to the bit of the file."""
    points = np.random.default_rng(6).uniform(-7, 7, (50, 3))
    rows = [
        ["name", "x_mm", "y_mm", "z_mm"],
        *([f"p{i}", *map(repr, p)] for i, p in enumerate(points.tolist())),
    ]
    with (tmp_path / "here.csv").open("w", newline="", encoding="utf-8") as stream:
        csv.writer(stream).writerows(rows)
    folders = [small_pair.folder, third_visit.back]
    findings = pipeline.carry_file(tmp_path / "here.csv", folders, tmp_path / "there.csv")
    assert [(f.code, f.where) for f in findings] == [("turned-map", "karte 2 zurück")]
    first, second = (read_map_folder(f).map for f in folders)
    wanted = move_points(second.reversed(), move_points(first, points).points).points
    with (tmp_path / "there.csv").open(encoding="utf-8", newline="") as stream:
        found = np.array([[float(r[c]) for c in rows[0][1:]] for r in csv.DictReader(stream)])
    np.testing.assert_array_equal(found, wanted)
    # closed form (`broken.body`): scan -1 is scan 0 at 0.94 of the size, moved by (-1.5, 0, 1)
    assert np.linalg.norm(found - (0.94 * points + [-1.5, 0, 1]), axis=1).mean() < 0.5
    pipeline.carry_file(tmp_path / "there.csv", folders, tmp_path / "home.csv", reverse=True)
    with (tmp_path / "home.csv").open(encoding="utf-8", newline="") as stream:
        home = np.array([[float(r[c]) for c in rows[0][1:]] for r in csv.DictReader(stream)])
    assert np.abs(home - points).max() < 1e-9


def test_a_way_knows_where_it_starts_and_ends(small_pair, third_visit):
    way = read_way([small_pair.folder, third_visit.back], reverse=True)
    assert way.start.name == "third.nii.gz"
    assert way.end.name == small_pair.source.name
    assert [scan.name for scan in way.between] == [small_pair.target.name]
    assert way.map.source_sha256 == way.start.sha256
    assert way.map.target_sha256 == way.end.sha256
