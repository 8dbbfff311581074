"""Certified volumetric maps between the insides of segmented organs; for research only.

The verbs are those of the command line::

    import volmap
    folder = volmap.map_pair(volmap.read_labels("visit0.nii.gz"), volmap.read_labels("visit1.nii.gz"))
    moved = volmap.carry(volmap.read_landmarks("beads.csv"), folder.map).thing

Names are imported when they are first used, so that ``import volmap`` stays cheap.  A verb and the package
that holds it share a name (``volmap.carry``, ``volmap.mesh``, ``volmap.screen``): such a package is callable.
"""

import sys
from importlib import import_module
from types import ModuleType
from typing import Any

_HOME = {
    "CarrySettings": "carry",
    "Certificate": "types",
    "Finding": "types",
    "Grid": "types",
    "GridField": "types",
    "ImageVolume": "types",
    "InputError": "types",
    "LabelShares": "types",
    "LabelVolume": "types",
    "LandmarkPairs": "types",
    "Landmarks": "types",
    "MapChain": "types",
    "MapFolder": "mapfolder",
    "MapJob": "pipeline",
    "MapSettings": "mapping",
    "Measurements": "types",
    "MeshFields": "types",
    "MeshSettings": "mesh",
    "Polylines": "types",
    "Quantity": "types",
    "Reading": "io.reading",
    "Rule": "types",
    "Rules": "types",
    "Surface": "types",
    "TensorVolume": "types",
    "TetMesh": "types",
    "VectorVolume": "types",
    "VolumeMap": "types",
    "carry": "carry",
    "certify_folder": "pipeline",
    "export_registration": "pipeline",
    "export_segmentation": "pipeline",
    "export_solid": "pipeline",
    "export_surfaces": "pipeline",
    "loop_error": "carry",
    "map_pair": "pipeline",
    "measure_map": "pipeline",
    "mend": "screen",
    "mesh": "mesh",
    "read_components": "io.nifti_components",
    "read_image": "io.volumes",
    "read_labels": "io.volumes",
    "read_landmarks": "io.landmarks",
    "read_map_folder": "mapfolder",
    "read_measurements": "io.measurements",
    "read_mesh_fields": "io.mesh_fields",
    "read_pairs": "io.landmarks",
    "read_polylines": "io.polylines",
    "report_of": "pipeline",
    "screen": "screen",
    "write_image": "io.nifti",
    "write_labels": "io.nifti",
    "write_landmarks": "io.landmarks",
    "write_map": "pipeline",
    "write_measurements": "io.measurements",
    "write_table": "io.tables",
    "write_mesh_fields": "io.mesh_fields",
    "write_polylines": "io.polylines",
    "write_shares": "io.nifti_components",
    "write_tensors": "io.nifti_components",
    "write_vectors": "io.nifti_components",
}
__all__ = sorted(_HOME)


def __getattr__(name: str) -> Any:
    if name not in _HOME:
        raise AttributeError(f"module 'volmap' has no attribute {name!r}")
    home = import_module(f"volmap.{_HOME[name]}")
    return home if _HOME[name] == name else getattr(home, name)


def __dir__() -> list[str]:
    return __all__


class _Front(ModuleType):
    """This package: a part that is named after its verb becomes callable when Python binds it here."""

    def __setattr__(self, name: str, value: Any) -> None:
        if _HOME.get(name) == name and isinstance(value, ModuleType):
            value.__class__ = type("Verb", (ModuleType,), {"__call__": staticmethod(getattr(value, name))})
        super().__setattr__(name, value)


sys.modules[__name__].__class__ = _Front
