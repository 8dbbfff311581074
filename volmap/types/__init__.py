"""Floor 1: the immutable nouns every stage speaks in.

Coordinates are ``(n, 3) float64, mm, RAS+`` everywhere.  A noun checks cheap truths when it is made and
repairs nothing silently; its arrays are owned copies and read-only.
"""

from volmap.types.certificate import Certificate, Gate, Verdict
from volmap.types.codes import Code, LabelCodes
from volmap.types.component_volumes import TensorVolume, VectorVolume
from volmap.types.errors import InputError, UnsaidError
from volmap.types.findings import Finding, Level
from volmap.types.given_boundary import GivenBoundary, GivingWay
from volmap.types.grid import Grid
from volmap.types.gridfield import GridField
from volmap.types.label_shares import LabelShares
from volmap.types.landmarks import LandmarkPairs, Landmarks
from volmap.types.map_chain import MapChain
from volmap.types.measurements import Measurements
from volmap.types.mesh_fields import MeshFields
from volmap.types.outcome import IterationRecord, Outcome, Status
from volmap.types.polylines import Polylines
from volmap.types.progress import Progress, silent
from volmap.types.quantities import Quantity, Rule, Rules
from volmap.types.surface import Surface
from volmap.types.table import Column, Table
from volmap.types.tetmesh import TetMesh
from volmap.types.volume_map import VolumeMap
from volmap.types.volumes import ImageVolume, LabelVolume

__all__ = [
    "Certificate",
    "Code",
    "Column",
    "Finding",
    "Gate",
    "GivenBoundary",
    "GivingWay",
    "Grid",
    "GridField",
    "ImageVolume",
    "InputError",
    "IterationRecord",
    "LabelCodes",
    "LabelShares",
    "LabelVolume",
    "LandmarkPairs",
    "Landmarks",
    "Level",
    "MapChain",
    "Measurements",
    "MeshFields",
    "Outcome",
    "Polylines",
    "Progress",
    "Quantity",
    "Rule",
    "Rules",
    "Status",
    "Surface",
    "Table",
    "TensorVolume",
    "TetMesh",
    "UnsaidError",
    "VectorVolume",
    "Verdict",
    "VolumeMap",
    "silent",
]
