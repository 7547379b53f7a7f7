"""Properties about axes of a person's own: any origin, any angle.

By the laws of parallel axes and of rotation, from the centroidal properties; nothing is integrated twice.
"""

from __future__ import annotations

import math
from collections.abc import Mapping

import numpy as np

from .axes import turned_moments
from .derived import quantify_figures
from .errors import UsageError
from .properties import analyse
from .result import Quantity
from .section import Section
from .uncertainty import OutlineUncertainty

UNITS: Mapping[str, str] = {
    "area": "mm^2",
    "centroid_u": "mm",
    "centroid_v": "mm",
    "first_moment_u": "mm^3",
    "first_moment_v": "mm^3",
    "second_moment_u": "mm^4",
    "second_moment_v": "mm^4",
    "product_moment_uv": "mm^4",
    "polar_second_moment": "mm^4",
    "radius_of_gyration_u": "mm",
    "radius_of_gyration_v": "mm",
    "reach_above": "mm",
    "reach_below": "mm",
    "reach_left": "mm",
    "reach_right": "mm",
}


def properties_about(
    section: Section, origin: tuple[float, float] | None = None, angle: float = 0.0
) -> dict[str, float]:
    """Properties about axes u and v of one's own.

    origin : where the axes cross, section coordinates, mm; the centroid if not given
    angle : from x to u, rad, counter-clockwise; v is a quarter turn further
    Returns values by the names of UNITS: `first_moment_u` is the integral of v over the area (about the u axis),
    `second_moment_u` that of v^2, `product_moment_uv` that of u v; `reach_above` and `_below` the distances of the
    farthest fibres from the u axis, `_right` and `_left` from the v axis, negative where the section does not reach
    across the axis.
    Raises UsageError for an origin or angle that is not finite.

    >>> from cutface.props.shapes import rectangle
    >>> round(properties_about(rectangle(200.0, 50.0), (0.0, -100.0))["second_moment_u"])
    133333333
    """
    if not all(math.isfinite(value) for value in (*(origin or ()), angle)):
        raise UsageError(
            "bad-axis", "The axis is not given by finite numbers.", "Give x, y in mm and the angle in rad."
        )
    analysis = analyse(section)
    area, _, _, second_x, second_y, product = analysis.moments
    cosine, sine = math.cos(angle), math.sin(angle)
    about_u, about_v, about_uv = turned_moments(second_x, second_y, product, cosine, sine)
    centroid = analysis.edges.origin
    to_centroid = centroid - np.asarray(centroid if origin is None else origin, float)
    u, v = cosine * to_centroid[0] + sine * to_centroid[1], cosine * to_centroid[1] - sine * to_centroid[0]
    about_u, about_v, about_uv = about_u + area * v * v, about_v + area * u * u, about_uv + area * u * v
    x, y = analysis.edges.start
    along, across = cosine * x + sine * y + u, cosine * y - sine * x + v
    return {
        "area": area,
        "centroid_u": float(u),
        "centroid_v": float(v),
        "first_moment_u": float(area * v),
        "first_moment_v": float(area * u),
        "second_moment_u": float(about_u),
        "second_moment_v": float(about_v),
        "product_moment_uv": float(about_uv),
        "polar_second_moment": float(about_u + about_v),
        "radius_of_gyration_u": math.sqrt(about_u / area),
        "radius_of_gyration_v": math.sqrt(about_v / area),
        "reach_above": float(across.max()),
        "reach_below": float(-across.min()),
        "reach_left": float(-along.min()),
        "reach_right": float(along.max()),
    }


def quantify_about(
    section: Section,
    uncertainty: OutlineUncertainty,
    origin: tuple[float, float] | None = None,
    angle: float = 0.0,
) -> dict[str, Quantity]:
    """`properties_about` with the uncertainty of the outline; the axes themselves are exact, or go with the centroid.

    Raises UsageError as `properties_about`, and where the uncertainty is not that of this outline.
    """
    return quantify_figures(section, uncertainty, lambda moved: properties_about(moved, origin, angle), UNITS)
