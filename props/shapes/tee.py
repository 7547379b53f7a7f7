"""Tees: rolled with tapered flange and web, or cut from an I section."""

from __future__ import annotations

from ..section import Part, Section
from .arcs import DEFAULT_TOLERANCE, rounded_outline
from .dimensions import require_less, require_not_negative, require_positive


def tee(
    depth: float,
    width: float,
    web_thickness: float,
    flange_thickness: float,
    root_radius: float = 0.0,
    toe_radius: float = 0.0,
    web_toe_radius: float = 0.0,
    flange_slope: float = 0.0,
    thickness_from_tip: float | None = None,
    web_slope: float = 0.0,
    tolerance: float = DEFAULT_TOLERANCE,
) -> Section:
    """A tee, flange on top with its outer face on y = 0, web down the y axis; lengths in mm.

    depth : overall, from the outer face of the flange to the end of the web
    flange_slope : rise of the inner flange face per unit of width, 0.02 for 2 %
    thickness_from_tip : distance from the flange tip at which `flange_thickness` holds; the middle of the
        outstand if not given
    web_slope : widening of the web per side and unit of depth towards the flange; `web_thickness` holds at half
        the depth of the tee
    toe_radius, web_toe_radius : at the flange tips (inner corner), at the end of the web (both corners)
    tolerance : relative error of second moments through arcs drawn as chords
    Raises UsageError for a dimension out of range, OutlineError for a radius that does not fit.
    """
    require_positive(depth=depth, width=width, web_thickness=web_thickness, flange_thickness=flange_thickness)
    require_not_negative(
        root_radius=root_radius,
        toe_radius=toe_radius,
        web_toe_radius=web_toe_radius,
        flange_slope=flange_slope,
        web_slope=web_slope,
    )
    require_less(("web_thickness", web_thickness), ("width", width))
    require_less(("flange_thickness", flange_thickness), ("depth", depth))
    place = 0.25 * (width - web_thickness) if thickness_from_tip is None else thickness_from_tip
    b = 0.5 * width
    tip = flange_thickness - flange_slope * place
    web_end = 0.5 * web_thickness - web_slope * 0.5 * depth
    require_positive(thickness_of_flange_at_its_tip=tip, half_thickness_of_web_at_its_end=web_end)
    # Root: where the inner flange face y = -tip - slope (b - x) meets the web face x = web_end + web_slope (y + depth).
    root_y = -(tip + flange_slope * (b - web_end - web_slope * depth)) / (1.0 - flange_slope * web_slope)
    root_x = web_end + web_slope * (root_y + depth)
    require_less(("thickness_of_flange_at_the_web", -root_y), ("depth", depth))
    require_less(("half_thickness_of_web_at_the_flange", root_x), ("half_width", b))
    right = [(web_end, -depth), (root_x, root_y), (b, -tip), (b, 0.0)]
    left = [(-x, y) for x, y in reversed(right)]
    radii = [web_toe_radius, root_radius, toe_radius, 0.0]
    return Section((Part(rounded_outline(right + left, radii + radii[::-1], tolerance)),))
