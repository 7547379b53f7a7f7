"""Pixels and cameras: from a picture to outlines in millimetres with their uncertainty."""
