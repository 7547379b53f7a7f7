"""Second moments about turned axes, and the principal axes of a section.

Works on moments alone, never on outlines.
"""

from __future__ import annotations

import math
from typing import NamedTuple, TypeVar

import numpy as np
from numpy.typing import NDArray

Value = TypeVar("Value", float, NDArray[np.float64])

# Below this share of the polar second moment a difference of second moments is rounding: coordinates of eight to ten
# figures, summed, are no better.
ROUNDING = 1e-11


class PrincipalAxes(NamedTuple):
    """Principal second moments, mm^4, and the angle from x to the major axis, rad, in (-pi/2, pi/2]."""

    major: float
    minor: float
    angle: float

    @property
    def major_direction(self) -> tuple[float, float]:
        """Cosine and sine of the major axis."""
        return _direction(self.angle)


def principal_axes(second_x: float, second_y: float, product: float) -> PrincipalAxes:
    """Principal axes from the centroidal second moments and product moment, mm^4.

    Where both second moments are equal (square, circle) any axis is a principal one: the angle is then 0.
    """
    mean, half, polar = 0.5 * (second_x + second_y), 0.5 * (second_x - second_y), second_x + second_y
    if abs(product) <= ROUNDING * polar:
        product = 0.0
    if abs(half) <= ROUNDING * polar and product == 0.0:
        half = 0.0
    radius = math.hypot(half, product)
    # 0 - product, since atan2 of a negative zero is a negative zero.
    angle = 0.5 * math.atan2(0.0 - product, half) if radius > 0.0 else 0.0
    if angle <= -0.5 * math.pi:
        angle = 0.5 * math.pi
    return PrincipalAxes(mean + radius, mean - radius, angle)


def turned_moments(
    second_x: Value, second_y: Value, product: Value, cosine: float, sine: float
) -> tuple[Value, Value, Value]:
    """Second moments about u and v, and their product moment, for axes turned counter-clockwise; mm^4.

    Linear in the moments, so it turns small changes of them as well (floats or arrays).
    """
    cc, ss, cs = cosine * cosine, sine * sine, cosine * sine
    about_u = cc * second_x + ss * second_y - 2.0 * cs * product
    about_v = ss * second_x + cc * second_y + 2.0 * cs * product
    return about_u, about_v, cs * (second_x - second_y) + (cc - ss) * product


def _direction(angle: float) -> tuple[float, float]:
    # Exact for axes along y, where the cosine of pi/2 in floating point is not zero.
    return (0.0, 1.0) if angle == 0.5 * math.pi else (math.cos(angle), math.sin(angle))
