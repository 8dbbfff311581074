"""Distortion densities, one file each."""
