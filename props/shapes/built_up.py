"""Sections built up of plates and angles: welded I and box, riveted girder.

Welds and rivets are not drawn: pieces in contact count as fully connected, and rivet holes are taken away where a
loss of section is assessed.
"""

from __future__ import annotations

import math

from ..errors import UsageError
from ..section import Section
from .angle import angle
from .arcs import DEFAULT_TOLERANCE
from .dimensions import require_less, require_not_negative, require_positive
from .hollow_rectangle import rectangle
from .placing import assemble, placed


def plate(width: float, depth: float, x: float = 0.0, y: float = 0.0) -> Section:
    """A rectangular plate, `width` along x and `depth` along y, its centre at (x, y); mm."""
    return placed(rectangle(depth, width), x, y)


def welded_i(
    depth: float,
    web_thickness: float,
    top_width: float,
    top_thickness: float,
    bottom_width: float | None = None,
    bottom_thickness: float | None = None,
) -> Section:
    """An I of three plates, overall `depth`, the origin at mid-depth; the bottom flange as the top one if not given.

    Lengths in mm. Raises UsageError for a dimension out of range.
    """
    bottom_width = top_width if bottom_width is None else bottom_width
    bottom_thickness = top_thickness if bottom_thickness is None else bottom_thickness
    require_positive(
        depth=depth,
        web_thickness=web_thickness,
        top_width=top_width,
        top_thickness=top_thickness,
        bottom_width=bottom_width,
        bottom_thickness=bottom_thickness,
    )
    require_less(("thickness_of_both_flanges", top_thickness + bottom_thickness), ("depth", depth))
    h = 0.5 * depth
    web = depth - top_thickness - bottom_thickness
    return assemble(
        [
            plate(web_thickness, web, 0.0, 0.5 * (bottom_thickness - top_thickness)),
            plate(top_width, top_thickness, 0.0, h - 0.5 * top_thickness),
            plate(bottom_width, bottom_thickness, 0.0, 0.5 * bottom_thickness - h),
        ]
    )


def welded_box(
    depth: float, width: float, web_thickness: float, flange_thickness: float, flange_overhang: float = 0.0
) -> Section:
    """A box of two flanges and two webs between them, the origin at its centre; lengths in mm.

    width : of the flanges
    flange_overhang : of the flanges beyond the outer faces of the webs, each side
    Raises UsageError for a dimension out of range.
    """
    require_positive(depth=depth, width=width, web_thickness=web_thickness, flange_thickness=flange_thickness)
    require_not_negative(flange_overhang=flange_overhang)
    require_less(("thickness_of_both_flanges", 2.0 * flange_thickness), ("depth", depth))
    require_less(("webs_and_overhangs_together", 2.0 * (web_thickness + flange_overhang)), ("width", width))
    web_x = 0.5 * width - flange_overhang - 0.5 * web_thickness
    flange_y = 0.5 * (depth - flange_thickness)
    return assemble(
        [plate(web_thickness, depth - 2.0 * flange_thickness, side * web_x, 0.0) for side in (-1, 1)]
        + [plate(width, flange_thickness, 0.0, side * flange_y) for side in (-1, 1)]
    )


def riveted_i(
    back_to_back: float,
    web_depth: float,
    web_thickness: float,
    angle_depth: float,
    angle_width: float,
    angle_thickness: float,
    root_radius: float = 0.0,
    toe_radius: float = 0.0,
    cover_width: float = 0.0,
    cover_thickness: float = 0.0,
    tolerance: float = DEFAULT_TOLERANCE,
) -> Section:
    """A girder of a web plate, four angles and, if given, a cover plate on each flange; the origin at its centre.

    back_to_back : depth over the outer faces of the angles; the web may be shallower, the covers lie outside
    angle_depth, angle_width : upright leg (on the web) and lying leg
    cover_width, cover_thickness : of one flange's cover plates together; 0 for none
    Lengths in mm. Raises UsageError for a dimension out of range.
    """
    require_positive(back_to_back=back_to_back, web_depth=web_depth, web_thickness=web_thickness)
    require_not_negative(cover_width=cover_width, cover_thickness=cover_thickness)
    if web_depth > back_to_back:
        raise UsageError(
            "bad-dimension",
            f"The web depth ({web_depth:g} mm) is more than the depth over the angles ({back_to_back:g} mm).",
            "Give the depth back to back of the angles, and the depth of the web plate alone.",
        )
    if (cover_width > 0.0) != (cover_thickness > 0.0):
        raise UsageError(
            "bad-dimension",
            f"The cover plates measure {cover_width:g} x {cover_thickness:g} mm.",
            "Give both their width and their thickness, or neither.",
        )
    require_less(("depth_of_two_angles", 2.0 * angle_depth), ("depth_back_to_back", back_to_back))
    h, w = 0.5 * back_to_back, 0.5 * web_thickness
    leg = angle(angle_depth, angle_width, angle_thickness, root_radius, toe_radius, tolerance)
    pieces = [plate(web_thickness, web_depth)]
    pieces += [
        placed(leg, w, -h),
        placed(leg, -w, -h, mirrored=True),
        placed(leg, -w, h, turn=math.pi),
        placed(leg, w, h, turn=math.pi, mirrored=True),
    ]
    if cover_thickness > 0.0:
        y = h + 0.5 * cover_thickness
        pieces += [plate(cover_width, cover_thickness, 0.0, side * y) for side in (-1, 1)]
    return assemble(pieces)
