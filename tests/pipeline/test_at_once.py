"""Work on both scans: the same at once and in turn (law), and nobody waits for the other when one fails."""

import threading

import numpy as np
import pytest

from volmap.mesh import MeshSettings, mesh
from volmap.pipeline.at_once import on_both
from volmap.types import Grid, LabelVolume, silent


def ball(radius):
    x, y, z = np.meshgrid(*[np.arange(15) - 7.0] * 3, indexing="ij")
    labels = (x * x + y * y + z * z < radius**2).astype(np.uint16)
    return LabelVolume(Grid(labels.shape, np.eye(4)), labels)


def test_two_meshes_made_at_once_are_those_made_in_turn():
    told = []

    def work(volume, progress):
        return mesh(volume, MeshSettings(edge_mm=2.0), progress=progress).mesh

    def note(stage, step, total, note=""):
        told.append((stage, step))

    volumes = (ball(5.0), ball(6.0))
    for one, other in zip(
        on_both(work, volumes, note, n_threads=2), on_both(work, volumes, silent, n_threads=1), strict=True
    ):
        assert one.points.tobytes() == other.points.tobytes()
        assert one.tets.tobytes() == other.tets.tobytes()
    assert {stage for stage, _ in told} == {"mesh source", "mesh target"}


@pytest.mark.parametrize("failing", [5.0, 6.0])
def test_a_failure_of_either_is_told_and_ends_both(failing):
    volumes = (ball(5.0), ball(6.0))

    def work(volume, progress):
        if volume.labels.sum() == ball(failing).labels.sum():
            raise ValueError("this one")
        for step in range(100):
            progress("work", step, 100)

    with pytest.raises(ValueError, match="this one"):
        on_both(work, volumes, silent, n_threads=2)
    assert not any(thread.name.startswith("ThreadPool") for thread in threading.enumerate())


def test_an_interruption_stops_the_other_at_its_next_step():
    running = threading.Event()

    def work(volume, progress):
        if threading.current_thread() is threading.main_thread():
            running.wait(10)
            raise KeyboardInterrupt
        for step in range(10**9):  # for ever, but for the stop
            running.set()
            progress("work", step, 10**9)

    with pytest.raises(KeyboardInterrupt):
        on_both(work, (ball(5.0), ball(6.0)), silent, n_threads=2)
