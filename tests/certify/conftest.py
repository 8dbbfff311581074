"""A small map with everything known, and everything right."""

import numpy as np
import pytest
from box_of_two_labels import SIZE, box, drawn_box, field, moved, moved_back

from volmap.certify import Evidence, read_gate_table
from volmap.types import LandmarkPairs, Status, VolumeMap


@pytest.fixture(scope="session")
def table():
    return read_gate_table()


@pytest.fixture(scope="session")
def sound():
    """An affine map of a box of two labels: every gate must pass."""
    mesh = box((8, 6, 5), SIZE, split=8.0)
    source_affine = np.array([[-1.0, 0, 0, 17.4], [0, 1, 0, -1.6], [0, 0, 1, -1.7], [0, 0, 0, 1]])
    target_affine = np.array([[0.8, 0, 0, 3.0], [0, 0.8, 0, -5.0], [0, 0, 0.8, 0.0], [0, 0, 0, 1]])
    source = drawn_box((20, 16, 14), source_affine, lambda x: x, SIZE, 8.0)
    target = drawn_box((30, 20, 20), target_affine, moved_back, SIZE, 8.0)
    volume_map = VolumeMap(mesh, moved(mesh.points))
    finer = box((10, 7, 6), SIZE, split=8.0)
    inner = np.array([[4.0, 5, 5], [8, 6, 5], [12, 3, 7], [1, 1, 1], [15, 11, 9]])
    pairs = LandmarkPairs(("a", "b", "c", "d", "e"), inner, moved(inner) + np.array([0.3, 0, 0.4]))
    return Evidence(
        map=volume_map,
        source=source,
        target=target,
        source_surface=mesh.interfaces,
        target_surface=volume_map.image_mesh.interfaces,
        forward=field(source, moved, ("source", "target")),
        backward=field(target, moved_back, ("target", "source")),
        other=VolumeMap(finer.moved(moved(finer.points)), finer.points, "target", "source"),
        checks=pairs,
        status=Status.SETTLED,
    )
