"""The plastic axis, which halves the area, and the plastic modulus about it, for bending about any direction.

One material of one yield strength; a transformed section is not known here.

The area beyond a straight cut is the sum over edges of the integral of u dv along the piece beyond it: along the cut
itself dv = 0, so no polygon need be clipped. Between two neighbouring vertex levels that area is a quadratic of the
cut's position, which is solved exactly.
"""

from __future__ import annotations

from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from .integrals import Boundary

Floats = NDArray[np.float64]

# Areas of two parts that differ by less than this share are equal but for the rounding of coordinates.
_EQUAL = 1e-9
_BLOCK = 16384


class PlasticAxis(NamedTuple):
    """The axis parallel to a direction that halves the area.

    offset : mm, position along v (a right angle counter-clockwise of the direction) from the origin of the edges
    width : mm, length of the axis inside the region; 0 in a gap between parts
    gap : mm, width of the empty strip whose middle the axis is; 0 if it cuts the region
    modulus : mm^3, integral of |v - offset| over the region
    """

    offset: float
    width: float
    gap: float
    modulus: float


def plastic_axis(edges: Boundary, area: float, cosine: float, sine: float) -> PlasticAxis:
    """Plastic axis and modulus for bending about an axis of the given direction.

    edges : the region's edges about its centroid; area, mm^2
    """
    strips = _Strips(edges, cosine, sine)
    gap = _halving_gap(edges, strips, area)
    if gap is not None:
        lower, upper = gap
        offset, width, empty = 0.5 * (lower + upper), 0.0, upper - lower
    else:
        offset, empty = strips.cut_leaving(0.5 * area), 0.0
        width = strips.width(offset)
    # Moments about the centroid vanish, hence the lower half's share follows from the upper half's.
    modulus = 2.0 * strips.moment_above(offset) + offset * area
    return PlasticAxis(offset, width, empty, modulus)


def cut_offset(edges: Boundary, area_above: float, cosine: float, sine: float) -> float:
    """Position along v, mm, of the cut that leaves `area_above` beyond it."""
    return _Strips(edges, cosine, sine).cut_leaving(area_above)


class _Strips:
    """Edges in coordinates u along the cut and v across it."""

    def __init__(self, edges: Boundary, cosine: float, sine: float) -> None:
        self.u0, self.v0, self.u1, self.v1 = edges.turned(cosine, sine)

    def width(self, offset: float) -> float:
        """Length of the cut inside the region; the mean of both sides where it runs along an edge."""
        low, high = np.minimum(self.v0, self.v1), np.maximum(self.v0, self.v1)
        above = _cut(self.u0, self.v0, self.u1, self.v1, (low <= offset) & (high > offset), offset)[0]
        below = _cut(self.u0, self.v0, self.u1, self.v1, (low < offset) & (high >= offset), offset)[0]
        return 0.5 * (above + below)

    def moment_above(self, offset: float) -> float:
        """Integral of v - offset over the region beyond the cut."""
        total = 0.0
        for i in range(0, len(self.u0), _BLOCK):
            block = slice(i, i + _BLOCK)
            u0, v0, u1, v1 = self.u0[block], self.v0[block] - offset, self.u1[block], self.v1[block] - offset
            beyond = (v0 > 0.0) | (v1 > 0.0)
            u0, v0, u1, v1 = u0[beyond], v0[beyond], u1[beyond], v1[beyond]
            # Where an edge crosses, its lower end moves up to the cut.
            for u, v, other_u, other_v in ((u0, v0, u1, v1), (u1, v1, u0, v0)):
                crossing = v < 0.0
                share = v[crossing] / (v[crossing] - other_v[crossing])
                u[crossing] += share * (other_u[crossing] - u[crossing])
                v[crossing] = 0.0
            total += float(((v1 - v0) * ((u0 + u1) * (v0 + v1) + u0 * v0 + u1 * v1)).sum())
        return total / 6.0

    def cut_leaving(self, area_above: float) -> float:
        """Position of the cut that leaves `area_above` beyond it.

        Newton's method on the local quadratic, inside a bracket; the root counts once it lies between the vertex
        levels for which the quadratic holds. Steps that do not change sides are lengthened, so that the bracket
        closes and the edges outside it need not be looked at again.
        """
        u0, v0, u1, v1 = self.u0, self.v0, self.u1, self.v1
        low, high = np.minimum(v0, v1), np.maximum(v0, v1)
        strip = 0.5 * (v1 - v0) * (u0 + u1)
        lower, upper = float(low.min()), float(high.max())
        beyond_bracket = 0.0
        offset, repeats, was_up = min(max(0.0, lower), upper), 0, None
        for turn in range(200):
            excess = beyond_bracket + float(np.where(low >= offset, strip, 0.0).sum()) - area_above
            crossing = (low < offset) & (high > offset)
            a, b, c, d = u0[crossing], v0[crossing], u1[crossing], v1[crossing]
            top, u_top = np.maximum(b, d), np.where(b > d, a, c)
            at_cut = a + (c - a) * ((offset - b) / (d - b))
            excess += float((np.sign(d - b) * 0.5 * (top - offset) * (u_top + at_cut)).sum())
            if excess == 0.0 or not lower < upper:
                return offset
            up = excess > 0.0
            active = (low <= offset) & (high > offset) if up else (low < offset) & (high >= offset)
            width, growth = _cut(u0, v0, u1, v1, active, offset)
            step = _quadratic_step(abs(excess), width, growth if up else -growth)
            # The nearest vertex level on that side ends the quadratic.
            levels = v0[v0 > offset] if up else v0[v0 < offset]
            level = float(levels.min() if up else levels.max()) if len(levels) else (upper if up else lower)
            root = offset + step if up else offset - step
            if (root <= level) if up else (root >= level):
                return root
            lower, upper = (offset, upper) if up else (lower, offset)
            repeats = repeats + 1 if up == was_up else 0
            was_up = up
            offset = level if step == np.inf else offset + (root - offset) * 2.0**repeats
            if turn % 4 == 3 or not lower < offset < upper:
                inside = v0[(v0 > lower) & (v0 < upper)]
                offset = float(np.median(inside)) if len(inside) else 0.5 * (lower + upper)
            gone = low >= upper
            beyond_bracket += float(strip[gone].sum())
            keep = ~gone & (high > lower)
            u0, v0, u1, v1, low, high, strip = (w[keep] for w in (u0, v0, u1, v1, low, high, strip))
        return offset


def _cut(
    u0: Floats, v0: Floats, u1: Floats, v1: Floats, active: NDArray[np.bool_], offset: float
) -> tuple[float, float]:
    """Width of the region at the cut and its growth per unit of offset, from the edges that cross it."""
    a, b, c, d = u0[active], v0[active], u1[active], v1[active]
    rise = d - b
    slope = (c - a) / rise
    # An edge going up has the region on its left, at smaller u.
    side = np.sign(rise)
    return float((side * (a + slope * (offset - b))).sum()), float((side * slope).sum())


def _quadratic_step(area: float, width: float, growth: float) -> float:
    """The step t > 0 with width t + growth t^2 / 2 = area; infinite if the local quadratic never reaches it."""
    square = width * width + 2.0 * growth * area
    if square < 0.0:
        return np.inf
    denominator = width + square**0.5
    return 2.0 * area / denominator if denominator > 0.0 else np.inf


def _halving_gap(edges: Boundary, strips: _Strips, area: float) -> tuple[float, float] | None:
    """The empty strip between parts that has half the area on either side, if there is one."""
    if len(edges.part_starts) < 2:
        return None
    lows = np.minimum.reduceat(strips.v0, edges.part_starts)
    highs = np.maximum.reduceat(strips.v0, edges.part_starts)
    areas = np.add.reduceat(0.5 * (strips.u0 * strips.v1 - strips.u1 * strips.v0), edges.part_starts)
    order = np.argsort(lows)
    lows, highs = lows[order], np.maximum.accumulate(highs[order])
    halving = np.abs(np.cumsum(areas[order])[:-1] - 0.5 * area) <= _EQUAL * area
    found = np.flatnonzero(halving & (lows[1:] >= highs[:-1]))
    return (float(highs[found[0]]), float(lows[found[0] + 1])) if len(found) else None
