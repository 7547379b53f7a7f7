"""Arcs as chords that keep the area, and outlines with rounded corners.

Knows circles and straight lines only; which corner of a section is round is the shapes' affair.

Every chord cuts off as much outside its arc as it leaves inside, so the area of an arc's sector is kept
exactly, chord by chord. Vertices between two chords stand at R sqrt(a / sin a), a the angle of a chord,
about two thirds of the sagitta outside the circle; the two ends of an arc stay where they are, on the circle.
The second moment of a disc drawn so is a^4 / 180 too large (relative), that of plain chords a^2 / 3 too small.
"""

from __future__ import annotations

import math

import numpy as np
from numpy.typing import ArrayLike

from ..errors import OutlineError, UsageError
from ..section import Points

DEFAULT_TOLERANCE = 1e-6
"""Relative error of the second moments of a disc that arcs drawn as chords may cause."""

_WIDEST_CHORD = math.pi / 4


def chord_angle(tolerance: float) -> float:
    """Widest angle of a chord, rad, for which a disc's second moment is off by no more than `tolerance`.

    Raises UsageError unless 1e-12 <= tolerance <= 0.01.
    """
    if not 1e-12 <= tolerance <= 0.01:
        raise UsageError(
            "bad-tolerance",
            f"The arc tolerance {tolerance:g} is out of range.",
            "Give a relative error between 1e-12 and 0.01.",
        )
    return min((180.0 * tolerance) ** 0.25, _WIDEST_CHORD)


def chord_angle_for_distance(radius: float, distance: float) -> float:
    """Widest angle of a chord, rad, that strays from its arc by no more than `distance` (same unit as the radius).

    The vertices stray most, by R a^2 / 12.
    """
    return min(math.sqrt(12.0 * distance / radius), _WIDEST_CHORD)


def arc(centre: ArrayLike, radius: float, start: float, sweep: float, widest: float) -> Points:
    """Vertices (n, 2) along an arc of a circle, both ends included.

    start : angle of the first point, rad
    sweep : signed angle of the arc, rad, positive counter-clockwise
    widest : no chord spans more than this angle, rad
    """
    end, inner, count = _split(abs(sweep), widest)
    steps = np.concatenate([[0.0, end], np.full(count, inner), [end]])
    angles = start + math.copysign(1.0, sweep) * np.cumsum(steps)
    distance = np.full(len(angles), radius * end / math.sin(end))
    distance[[0, -1]] = radius
    return np.asarray(centre, float) + distance[:, None] * np.column_stack([np.cos(angles), np.sin(angles)])


def _split(sweep: float, widest: float) -> tuple[float, float, int]:
    """Angle of the two end chords, angle of the chords between them, their number.

    An end chord joins a point on the circle to one at R e/sin e; the others join two points at R sqrt(a/sin a).
    One vertex serves both, so e / sin e = sqrt(a / sin a): e is about a / sqrt 2.
    """
    count = max(0, math.ceil(sweep / widest - math.sqrt(2.0) - 1e-9))
    inner = sweep / (count + math.sqrt(2.0))
    for _ in range(20):
        end = _end_angle(inner)
        inner = sweep / (count + 2.0 * end / inner)
    return 0.5 * (sweep - count * inner), inner, count


def _end_angle(inner: float) -> float:
    """The angle e with e / sin e = sqrt(a / sin a), by Newton's method."""
    stretch = math.sqrt(inner / math.sin(inner))
    end = inner / math.sqrt(2.0)
    for _ in range(20):
        end -= (end - stretch * math.sin(end)) / (1.0 - stretch * math.cos(end))
    return end


def rounded_outline(corners: ArrayLike, radii: ArrayLike, tolerance: float = DEFAULT_TOLERANCE) -> Points:
    """A polygon with its corners rounded by arcs tangent to both sides, as an open loop of vertices (n, 2), mm.

    corners : (n, 2) sharp corners, not closed, either way round
    radii : (n,) radius at each corner, 0 for a sharp one
    tolerance : relative error of second moments, see `chord_angle`
    Raises OutlineError if a radius does not fit on its two sides.
    """
    points = np.asarray(corners, float)
    rounding = np.asarray(radii, float)
    widest = chord_angle(tolerance)
    before = np.roll(points, 1, axis=0) - points
    after = np.roll(points, -1, axis=0) - points
    length = np.hypot(*after.T)
    to_previous = before / np.hypot(*before.T)[:, None]
    to_next = after / length[:, None]
    cross = to_next[:, 0] * to_previous[:, 1] - to_next[:, 1] * to_previous[:, 0]
    turn = math.pi - np.abs(np.arctan2(cross, np.sum(to_previous * to_next, axis=1)))
    tangent = rounding * np.tan(0.5 * turn)
    _check_fit(points, rounding, tangent, length)

    pieces: list[Points] = []
    for corner, back, on, sense, angle, radius, reach in zip(
        points, to_previous, to_next, np.sign(cross), turn, rounding, tangent, strict=True
    ):
        if radius == 0.0:
            pieces.append(corner[None, :])
            continue
        first = corner + reach * back
        # The centre lies across the first side, on the side the outline turns to.
        inward = sense * np.array([back[1], -back[0]])
        centre = first + radius * inward
        start = math.atan2(*(first - centre)[::-1])
        vertices = arc(centre, radius, start, sense * angle, widest)
        vertices[0], vertices[-1] = first, corner + reach * on
        pieces.append(vertices)
    loop = np.concatenate(pieces)
    # Arcs that meet share their tangent point.
    apart = np.hypot(*(loop - np.roll(loop, 1, axis=0)).T) > 1e-9 * float(length.max())
    return loop[apart]


def _check_fit(points: Points, radii: Points, tangent: Points, length: Points) -> None:
    needed = tangent + np.roll(tangent, -1)
    short = np.flatnonzero(needed > length * (1.0 + 1e-9))
    if len(short):
        i = int(short[0])
        j = (i + 1) % len(points)
        (x1, y1), (x2, y2) = points[i], points[j]
        raise OutlineError(
            "radius-too-large",
            f"The radii {radii[i]:g} and {radii[j]:g} mm need {needed[i]:.4g} mm of the {length[i]:.4g} mm long side "
            f"from ({x1:.4g}, {y1:.4g}) to ({x2:.4g}, {y2:.4g}).",
            "Reduce one of the two radii or check the thicknesses beside them.",
        )
