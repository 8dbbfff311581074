"""Gel phantoms."""
