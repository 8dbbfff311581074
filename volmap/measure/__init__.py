"""Measures for statistics: volumes of regions and their change, volume ratio, stretches, reliability."""

from volmap.measure.inner_residual import mending_divergence
from volmap.measure.regions import Region, drawn_regions, label_regions
from volmap.measure.reliability import REASONS, Reliability, reliability
from volmap.measure.residual import Residual, Ways, boundary_residual
from volmap.measure.single import point_table, tet_table
from volmap.measure.summaries import ChangeUncertainty, change_mm3, long_form, mended_mm3, region_table
from volmap.measure.uncertainty import VolumeUncertainty, volume_uncertainty

__all__ = [
    "REASONS",
    "ChangeUncertainty",
    "Region",
    "Reliability",
    "Residual",
    "VolumeUncertainty",
    "Ways",
    "boundary_residual",
    "change_mm3",
    "drawn_regions",
    "label_regions",
    "long_form",
    "mended_mm3",
    "mending_divergence",
    "point_table",
    "region_table",
    "reliability",
    "tet_table",
    "volume_uncertainty",
]
