"""Curves as chords: circular and elliptical arcs, Bezier curves.

Arcs keep their area (vertices slightly outside, see `shapes.arcs`), also when stretched to an ellipse. Bezier curves
keep their vertices on the curve and are split finely enough for the tolerance.
"""

from __future__ import annotations

import math

import numpy as np
from numpy.typing import ArrayLike

from ..section import Points
from ..shapes.arcs import DEFAULT_TOLERANCE, arc, chord_angle, chord_angle_for_distance

FULL_TURN = 2.0 * math.pi

MOST_CHORDS = 100_000
"""Chords of one curve: an arc of a hundred metres to a ten thousandth of a millimetre. More is a slip of units."""


def elliptical_arc(
    centre: ArrayLike, major: ArrayLike, minor: ArrayLike, start: float, sweep: float, tolerance: float
) -> Points:
    """Points (n, 2) of centre + cos(p) major + sin(p) minor for p from start to start + sweep, both ends included.

    major, minor : conjugate half-axes, (2,); equal and perpendicular for a circle
    tolerance : largest distance between chord and curve, in the unit of the axes
    Raises ValueError for a curve that is not finite or takes more than MOST_CHORDS.
    """
    axes = np.array([major, minor], float)
    size = float(np.hypot(*axes.T).max())
    if not (math.isfinite(size) and math.isfinite(sweep) and size > 0.0):
        raise ValueError("an arc is not finite")
    widest = min(chord_angle_for_distance(size, tolerance), chord_angle(DEFAULT_TOLERANCE))
    if abs(sweep) > MOST_CHORDS * widest:
        raise ValueError("an arc is far larger than the tolerance")
    if abs(sweep) < 1e-12:
        end = np.array([[math.cos(start), math.sin(start)]]) @ axes
        return np.asarray(centre, float) + np.repeat(end, 2, axis=0)
    return np.asarray(centre, float) + arc((0.0, 0.0), 1.0, start, sweep, widest) @ axes


def full_ellipse(centre: ArrayLike, major: ArrayLike, minor: ArrayLike, tolerance: float) -> Points:
    """Points of the whole ellipse, not closed; the four ends of the axes lie on it exactly."""
    quarters = [
        elliptical_arc(centre, major, minor, 0.25 * k * FULL_TURN, 0.25 * FULL_TURN, tolerance) for k in range(4)
    ]
    return np.concatenate([quarter[:-1] for quarter in quarters])


def bulged(first: ArrayLike, last: ArrayLike, bulge: float, tolerance: float) -> Points:
    """Points of the arc from first to last, both included; bulge = tan(sweep / 4), positive counter-clockwise."""
    a, b = np.asarray(first, float), np.asarray(last, float)
    if bulge == 0.0 or np.array_equal(a, b):
        return np.array([a, b])
    chord = b - a
    # The centre lies on the chord's perpendicular bisector, to its left for a counter-clockwise arc below half a turn.
    centre = 0.5 * (a + b) + 0.25 * (1.0 / bulge - bulge) * np.array([-chord[1], chord[0]])
    radius = float(np.hypot(*(a - centre)))
    start = math.atan2(*(a - centre)[::-1])
    points = elliptical_arc(centre, (radius, 0.0), (0.0, radius), start, 4.0 * math.atan(bulge), tolerance)
    points[0], points[-1] = a, b
    return points


def bezier(control: ArrayLike, tolerance: float) -> Points:
    """Points of a quadratic or cubic Bezier curve, (3 or 4, 2) control points, both ends included.

    Raises ValueError for a curve that is not finite or takes more than MOST_CHORDS.
    """
    p = np.asarray(control, float)
    degree = len(p) - 1
    # |B''| <= d (d - 1) max |second difference|, and a chord over h strays by at most |B''| h^2 / 8.
    bend = degree * (degree - 1) * float(np.hypot(*np.diff(p, 2, axis=0).T).max())
    chords = math.sqrt(bend / (8.0 * tolerance))
    if not chords <= MOST_CHORDS:  # not a number compares false
        raise ValueError("a curve is not finite, or far larger than the tolerance")
    count = max(1, math.ceil(chords))
    t = np.linspace(0.0, 1.0, count + 1)[:, None]
    for _ in range(degree):
        p = p[:-1, None, :] * (1.0 - t) + p[1:, None, :] * t if p.ndim == 2 else p[:-1] * (1.0 - t) + p[1:] * t
    points = p[0]
    points[0], points[-1] = np.asarray(control, float)[[0, -1]]
    return points
