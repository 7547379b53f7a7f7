"""Rolled I and H sections: parallel or tapered flanges, root and toe radii."""

from __future__ import annotations

import numpy as np

from ..section import Part, Section
from .arcs import DEFAULT_TOLERANCE, rounded_outline
from .dimensions import require_less, require_not_negative, require_positive
from .tapered_flange import flange_ends


def rolled_i(
    depth: float,
    width: float,
    web_thickness: float,
    flange_thickness: float,
    root_radius: float = 0.0,
    toe_radius: float = 0.0,
    flange_slope: float = 0.0,
    thickness_from_tip: float | None = None,
    tolerance: float = DEFAULT_TOLERANCE,
) -> Section:
    """A doubly symmetric I, web upright, origin at its centre; lengths in mm.

    flange_slope : rise of the inner flange face per unit of width, 0.14 for 14 %
    thickness_from_tip : distance from the flange tip at which `flange_thickness` holds; the middle of the
        outstand if not given. Without slope it makes no difference.
    root_radius, toe_radius : tangent to the web and to the (sloping) inner face of the flange
    tolerance : relative error of second moments through arcs drawn as chords
    Raises UsageError for a dimension out of range, OutlineError for a radius that does not fit.
    """
    require_positive(depth=depth, width=width, web_thickness=web_thickness, flange_thickness=flange_thickness)
    require_not_negative(root_radius=root_radius, toe_radius=toe_radius, flange_slope=flange_slope)
    require_less(("web_thickness", web_thickness), ("width", width))
    outstand = 0.5 * (width - web_thickness)
    tip, root = flange_ends(depth, outstand, flange_thickness, flange_slope, thickness_from_tip)

    h, b, w = 0.5 * depth, 0.5 * width, 0.5 * web_thickness
    upper_right = np.array([[w, 0.0], [w, h - root], [b, h - tip], [b, h]])
    right = np.concatenate([upper_right[:0:-1] * [1, -1], upper_right[1:]])
    radii = np.array([0.0, toe_radius, root_radius])
    right_radii = np.concatenate([radii, radii[::-1]])
    corners = np.concatenate([right, -right])
    return Section((Part(rounded_outline(corners, np.tile(right_radii, 2), tolerance)),))
