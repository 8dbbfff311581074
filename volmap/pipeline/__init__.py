"""Floor 4: the one place that strings the stages together; command line, desk and study call it."""

from volmap.mapping import MapSettings
from volmap.mesh import MeshSettings
from volmap.pipeline.carrying import carry_file
from volmap.pipeline.exporting import Exported, export_registration, export_segmentation
from volmap.pipeline.files import (
    Screened,
    map_files,
    mend_file,
    mesh_file,
    report_folder,
    screen_files,
)
from volmap.pipeline.loops import MEANING as LOOP_MEANING
from volmap.pipeline.loops import Loop, loop_folders
from volmap.pipeline.machine import use_threads
from volmap.pipeline.measuring import Measured, measure_files, measure_folder, measure_map
from volmap.pipeline.opinion import SecondOpinion, certify_folder, evidence_of
from volmap.pipeline.pair import MapJob, map_pair
from volmap.pipeline.reporting import affine_baseline, report_of, write_map
from volmap.pipeline.shapes import export_solid, export_surfaces

__all__ = [
    "LOOP_MEANING",
    "Exported",
    "Loop",
    "MapJob",
    "MapSettings",
    "Measured",
    "MeshSettings",
    "Screened",
    "SecondOpinion",
    "affine_baseline",
    "carry_file",
    "certify_folder",
    "evidence_of",
    "export_registration",
    "export_segmentation",
    "export_solid",
    "export_surfaces",
    "loop_folders",
    "map_files",
    "map_pair",
    "measure_files",
    "measure_folder",
    "measure_map",
    "mend_file",
    "mesh_file",
    "report_folder",
    "report_of",
    "screen_files",
    "use_threads",
    "write_map",
]
