"""Rectangles and rectangular hollow sections with rounded corners."""

from __future__ import annotations

from ..section import Part, Points, Section
from .arcs import DEFAULT_TOLERANCE, rounded_outline
from .dimensions import require_less, require_not_negative, require_positive


def rectangle(depth: float, width: float, corner_radius: float = 0.0, tolerance: float = DEFAULT_TOLERANCE) -> Section:
    """A solid rectangle centred on the origin; lengths in mm.

    Raises UsageError for a dimension out of range, OutlineError for a radius that does not fit.
    """
    require_positive(depth=depth, width=width)
    require_not_negative(corner_radius=corner_radius)
    return Section((Part(_loop(depth, width, corner_radius, tolerance)),))


def hollow_rectangle(
    depth: float,
    width: float,
    thickness: float,
    outer_radius: float = 0.0,
    inner_radius: float | None = None,
    tolerance: float = DEFAULT_TOLERANCE,
) -> Section:
    """A rectangular or square hollow section of one wall thickness, centred on the origin; lengths in mm.

    inner_radius : of the inner corners; the outer radius less the thickness (not below 0) if not given, as in a
        wall bent about one centre
    tolerance : relative error of second moments through arcs drawn as chords
    Raises UsageError for a dimension out of range, OutlineError for a radius that does not fit.
    """
    require_positive(depth=depth, width=width, thickness=thickness)
    inner = max(outer_radius - thickness, 0.0) if inner_radius is None else inner_radius
    require_not_negative(outer_radius=outer_radius, inner_radius=inner)
    require_less(("wall_thickness_taken_twice", 2.0 * thickness), ("smaller_side", min(depth, width)))
    hole = _loop(depth - 2.0 * thickness, width - 2.0 * thickness, inner, tolerance)
    return Section((Part(_loop(depth, width, outer_radius, tolerance), (hole,)),))


def _loop(depth: float, width: float, radius: float, tolerance: float) -> Points:
    h, b = 0.5 * depth, 0.5 * width
    return rounded_outline([(-b, -h), (b, -h), (b, h), (-b, h)], [radius] * 4, tolerance)
