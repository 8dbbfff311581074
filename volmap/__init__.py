"""Certified volumetric maps between the insides of segmented organs; for research only.

The verbs are those of the command line::

    import volmap
    folder = volmap.map_pair(volmap.read_labels("visit0.nii.gz"), volmap.read_labels("visit1.nii.gz"))
    moved = volmap.carry(volmap.read_landmarks("beads.csv"), folder.map)

Names are imported when they are first used, so that ``import volmap`` stays cheap.
"""

from importlib import import_module
from typing import Any

_HOME = {
    "Certificate": "types",
    "Finding": "types",
    "Grid": "types",
    "GridField": "types",
    "ImageVolume": "types",
    "InputError": "types",
    "LabelVolume": "types",
    "LandmarkPairs": "types",
    "Landmarks": "types",
    "MapFolder": "mapfolder",
    "MapJob": "pipeline",
    "MapSettings": "mapping",
    "MeshSettings": "mesh",
    "Surface": "types",
    "TetMesh": "types",
    "VolumeMap": "types",
    "carry": "carry",
    "certify_folder": "pipeline",
    "map_pair": "pipeline",
    "mend": "screen",
    "mesh": "mesh",
    "read_image": "io.nifti",
    "read_labels": "io.nifti",
    "read_landmarks": "io.landmarks",
    "read_map_folder": "mapfolder",
    "read_pairs": "io.landmarks",
    "report_of": "pipeline",
    "screen": "screen",
    "write_image": "io.nifti",
    "write_labels": "io.nifti",
    "write_landmarks": "io.landmarks",
    "write_map": "pipeline",
}
__all__ = sorted(_HOME)


def __getattr__(name: str) -> Any:
    if name not in _HOME:
        raise AttributeError(f"module 'volmap' has no attribute {name!r}")
    return getattr(import_module(f"volmap.{_HOME[name]}"), name)


def __dir__() -> list[str]:
    return __all__
