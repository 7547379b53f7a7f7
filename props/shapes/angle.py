"""Angles: equal or unequal legs, root and toe radii."""

from __future__ import annotations

from ..section import Part, Section
from .arcs import DEFAULT_TOLERANCE, rounded_outline
from .dimensions import require_less, require_not_negative, require_positive


def angle(
    depth: float,
    width: float,
    thickness: float,
    root_radius: float = 0.0,
    toe_radius: float = 0.0,
    tolerance: float = DEFAULT_TOLERANCE,
) -> Section:
    """An angle with its heel on the origin, one leg up the y axis, the other along the x axis; lengths in mm.

    depth, width : outer lengths of the upright and of the lying leg
    toe_radius : on the inner corner of each leg's end
    tolerance : relative error of second moments through arcs drawn as chords
    Raises UsageError for a dimension out of range, OutlineError for a radius that does not fit.
    """
    require_positive(depth=depth, width=width, thickness=thickness)
    require_not_negative(root_radius=root_radius, toe_radius=toe_radius)
    require_less(("thickness", thickness), ("depth", depth))
    require_less(("thickness", thickness), ("width", width))
    corners = [(0, 0), (width, 0), (width, thickness), (thickness, thickness), (thickness, depth), (0, depth)]
    radii = [0.0, 0.0, toe_radius, root_radius, toe_radius, 0.0]
    return Section((Part(rounded_outline(corners, radii, tolerance)),))
