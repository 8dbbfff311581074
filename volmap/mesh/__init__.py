"""Floor 2, mesh: from a label volume, or a closed surface, to tetrahedra."""

from volmap.mesh.closed_surface import mesh_surface
from volmap.mesh.levels import MeshLevels, mesh_levels
from volmap.mesh.mesher import MeshResult, mesh
from volmap.mesh.quality import LabelQuality, QualityTable
from volmap.mesh.settings import MeshSettings

__all__ = [
    "LabelQuality",
    "MeshLevels",
    "MeshResult",
    "MeshSettings",
    "QualityTable",
    "mesh",
    "mesh_levels",
    "mesh_surface",
]
