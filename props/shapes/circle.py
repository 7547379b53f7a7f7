"""Round bars and tubes.

The extreme fibres right, left, above and below lie exactly on the circle, so that the section moduli about x and y
are as good as the second moments.
"""

from __future__ import annotations

from ..section import Part, Points, Section
from .arcs import DEFAULT_TOLERANCE, rounded_outline
from .dimensions import require_less, require_positive


def circle(diameter: float, tolerance: float = DEFAULT_TOLERANCE) -> Section:
    """A round bar centred on the origin; lengths in mm.

    Raises UsageError for a dimension out of range.
    """
    require_positive(diameter=diameter)
    return Section((Part(_loop(0.5 * diameter, tolerance)),))


def tube(diameter: float, thickness: float, tolerance: float = DEFAULT_TOLERANCE) -> Section:
    """A circular hollow section of outer `diameter`, centred on the origin; lengths in mm.

    Raises UsageError for a dimension out of range.
    """
    require_positive(diameter=diameter, thickness=thickness)
    require_less(("wall_thickness", thickness), ("outer_radius", 0.5 * diameter))
    return Section((Part(_loop(0.5 * diameter, tolerance), (_loop(0.5 * diameter - thickness, tolerance),)),))


def _loop(radius: float, tolerance: float) -> Points:
    square = [(-radius, -radius), (radius, -radius), (radius, radius), (-radius, radius)]
    return rounded_outline(square, [radius] * 4, tolerance)
