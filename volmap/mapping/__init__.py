"""Mapping stage: a mesh and a target's label surfaces in, a fold-free map out."""

from volmap.mapping.alignment import Alignment, align
from volmap.mapping.coupling import Coupling, couple
from volmap.mapping.levels import Bodies
from volmap.mapping.mirror import MirrorTrial, mirror_trial
from volmap.mapping.settings import MapSettings
from volmap.mapping.solve import Solved, map_mesh

__all__ = [
    "Alignment",
    "Bodies",
    "Coupling",
    "MapSettings",
    "MirrorTrial",
    "Solved",
    "align",
    "couple",
    "map_mesh",
    "mirror_trial",
]
