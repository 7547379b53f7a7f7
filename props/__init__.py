"""Polygons, section properties and their uncertainty. Never sees a pixel."""
