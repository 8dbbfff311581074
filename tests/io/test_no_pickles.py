"""Pickles run code when they are opened; none ever is, whatever name a file has.

Truth: Python's manual ("The pickle module is not secure") and numpy's, of `load` and `allow_pickle`.
"""

import ast
import contextlib
import io
import pickle
from pathlib import Path

import numpy as np
import pytest

import volmap
from volmap.io.landmarks import read_landmarks
from volmap.io.meshes import read_mesh_file
from volmap.io.reading import Reading
from volmap.io.surfaces import read_closed_surface
from volmap.io.volumes import read_image, read_labels
from volmap.types import InputError


class Trap:
    """Opening it makes a file."""

    def __init__(self, place):
        self.place = place

    def __reduce__(self):
        return Path.touch, (self.place,)


def in_numpy(trap, *, packed):
    out = io.BytesIO()
    values = np.array([trap], object)
    if packed:
        np.savez(out, values)
    else:
        np.save(out, values)
    return out.getvalue()


ENDINGS = [
    "nii",
    "nii.gz",
    "hdr",
    "img",
    "nrrd",
    "nhdr",
    "dcm",
    "npy",
    "npz",
    "pkl",
    "vtu",
    "vtp",
    "vtk",
    "stl",
    "ply",
    "obj",
    "off",
    "msh",
    "mesh",
    "csv",
    "tsv",
]
UNSAFE = {"pickle", "cPickle", "dill", "cloudpickle", "joblib", "shelve", "marshal"}
READERS = {
    "labels": read_labels,
    "image": read_image,
    "names": lambda file: read_labels(file.parent / "sound.nii", Reading(file)),
    "landmarks": read_landmarks,
    "mesh": read_mesh_file,
    "surface": read_closed_surface,
}


@pytest.mark.parametrize("kind", ["pickle", "npy", "npz"])
def test_a_pickle_under_any_name_runs_no_code(tmp_path, kind):
    from volmap.io.nifti import write_labels
    from volmap.types import Grid, LabelVolume

    write_labels(
        tmp_path / "sound.nii", LabelVolume(Grid((3, 3, 3), np.eye(4)), np.ones((3, 3, 3), np.uint16))
    )
    sprung = tmp_path / "sprung"
    data = {
        "pickle": pickle.dumps(Trap(sprung)),
        "npy": in_numpy(Trap(sprung), packed=False),
        "npz": in_numpy(Trap(sprung), packed=True),
    }[kind]
    with contextlib.suppress(Exception):  # the trap works
        pickle.loads(pickle.dumps(Trap(tmp_path / "works")))
    assert (tmp_path / "works").exists()
    for ending in ENDINGS:
        file = tmp_path / f"x.{ending}"
        file.write_bytes(data)
        for reader in READERS.values():
            with pytest.raises(InputError):
                reader(file)
    assert not sprung.exists()


def test_no_line_of_the_library_could_open_one():
    # Law: no import of pickle or of what rests on it, and numpy's `load` only where it refuses objects
    for file in Path(volmap.__file__).parent.rglob("*.py"):
        for node in ast.walk(ast.parse(file.read_text(encoding="utf-8"))):
            names = []
            if isinstance(node, ast.Import):
                names = [alias.name.split(".")[0] for alias in node.names]
            elif isinstance(node, ast.ImportFrom):
                names = [(node.module or "").split(".")[0]]
            assert not {"pickle", "cPickle", "dill", "cloudpickle", "joblib", "shelve", "marshal"} & set(
                names
            ), file
            if isinstance(node, ast.keyword) and node.arg == "allow_pickle":
                assert isinstance(node.value, ast.Constant), file
                assert node.value.value is False, file
