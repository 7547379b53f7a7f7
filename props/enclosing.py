"""Length and breadth of the smallest rectangle around a section: its size squared up to its own sides.

A slice seldom lies square to the picture; what a calliper reads across it are these two.
"""

from __future__ import annotations

from dataclasses import replace

import numpy as np

from .properties import section_properties
from .section import Section
from .uncertainty import OutlineUncertainty, Quantity, quantify


def enclosing_angle(section: Section) -> float:
    """Angle from x to the longer side of the smallest enclosing rectangle, rad in (-pi/2, pi/2].

    The smallest rectangle has a side in common with the convex hull (Freeman and Shapira 1975).
    """
    from shapely import get_coordinates

    hull = get_coordinates(section.to_polygon().convex_hull)[:-1]
    sides = np.roll(hull, -1, axis=0) - hull
    angles = np.unique(np.arctan2(sides[:, 1], sides[:, 0]) % (np.pi / 2))
    along = np.stack([np.cos(angles), np.sin(angles)], axis=1)
    across = np.stack([-along[:, 1], along[:, 0]], axis=1)
    length, breadth = np.ptp(hull @ along.T, axis=0), np.ptp(hull @ across.T, axis=0)
    best = int(np.argmin(length * breadth))
    angle = float(angles[best] if length[best] >= breadth[best] else angles[best] + np.pi / 2)
    return angle - np.pi if angle > np.pi / 2 else angle


def measured_quantities(
    section: Section, uncertainty: OutlineUncertainty, density: float | None = None
) -> dict[str, Quantity]:
    """All figures of a measured outline with their uncertainty: its properties, and its size squared up.

    density : kg/m^3, adds the mass per metre
    """
    quantities = quantify(section, section_properties(section, density=density), uncertainty)
    return quantities | enclosing_dimensions(section, uncertainty)


def enclosing_dimensions(section: Section, uncertainty: OutlineUncertainty) -> dict[str, Quantity]:
    """`enclosing_length` and `enclosing_breadth` of a section, mm, with their uncertainty.

    They are width and depth of the section turned square, at the angle found; that the angle itself is uncertain
    changes them in second order only.
    """
    angle = enclosing_angle(section)
    c, s = np.cos(angle), np.sin(angle)
    turn = np.array([[c, -s], [s, c]])
    turned = section.with_vertices(section.vertices @ turn)
    moved = replace(
        uncertainty,
        modes=tuple(replace(mode, displacement=mode.displacement @ turn) for mode in uncertainty.modes),
        simplification={},
    )
    length, breadth = np.ptp(turned.vertices, axis=0)
    sizes = quantify(turned, {"width": float(length), "depth": float(breadth)}, moved)
    return {"enclosing_length": sizes["width"], "enclosing_breadth": sizes["depth"]}
