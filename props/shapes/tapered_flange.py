"""Flanges whose inner face slopes: how thick they are at the tip and at the web.

Knows one flange of an upright section; the outline is drawn by the shape it belongs to.
"""

from __future__ import annotations

from .dimensions import require_less, require_positive


def flange_ends(
    depth: float, outstand: float, thickness: float, slope: float, thickness_from_tip: float | None
) -> tuple[float, float]:
    """Thickness of a flange at its tip and at the web, mm.

    depth : of the section; outstand : from the web to the tip
    slope : rise of the inner face per unit of width
    thickness_from_tip : distance from the tip at which `thickness` holds; the middle of the outstand if None
    Raises UsageError where the flange has no thickness left at its tip, or meets the other one at the web.
    """
    place = 0.5 * outstand if thickness_from_tip is None else thickness_from_tip
    tip = thickness - slope * place
    root = tip + slope * outstand
    require_positive(thickness_of_flange_at_its_tip=tip)
    require_less(("thickness_of_flange_at_the_web", root), ("half_depth", 0.5 * depth))
    return tip, root
