"""volmap: certified volumetric maps between segmented organs; research only."""

__version__ = "0.1.0"
