"""The plastic axis, which halves the area, and the plastic modulus about it, for bending about any direction.

One material of one yield strength; a transformed section is not known here.

The area beyond a straight cut is the sum over edges of the integral of x dy along the piece beyond it: along the cut
itself dy = 0, so no polygon need be clipped. Between two neighbouring vertex levels that area is a quadratic of the
cut's position, which is solved exactly.
"""

from __future__ import annotations

import math
from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from .integrals import Boundary

Floats = NDArray[np.float64]

# Areas of two parts that differ by less than this share are equal but for the rounding of coordinates.
_EQUAL = 1e-9
_BLOCK = 16384


class PlasticAxis(NamedTuple):
    """The axis parallel to x that halves the area.

    offset : mm, its y from the origin of the edges
    width : mm, length of the axis inside the region; 0 in a gap between parts
    gap : mm, width of the empty strip whose middle the axis is; 0 if it cuts the region
    modulus : mm^3, integral of |y - offset| over the region
    """

    offset: float
    width: float
    gap: float
    modulus: float


def plastic_axis(edges: Boundary, area: float) -> PlasticAxis:
    """Plastic axis and modulus for bending about x; turn the edges for another direction.

    edges : the region's edges about its centroid; area, mm^2
    """
    gap = _halving_gap(edges, area)
    if gap is not None:
        lower, upper = gap
        offset, width, empty = 0.5 * (lower + upper), 0.0, upper - lower
    else:
        offset, empty = cut_offset(edges, 0.5 * area), 0.0
        cut = _cut((*edges.start, *edges.end), offset)
        width = 0.5 * (cut.width_above + cut.width_below)
    # Moments about the centroid vanish, hence the lower half's share follows from the upper half's.
    modulus = 2.0 * _moment_above(edges, offset) + offset * area
    return PlasticAxis(offset, width, empty, modulus)


def cut_offset(edges: Boundary, area_above: float) -> float:
    """The y, mm, of the cut parallel to x that leaves `area_above` beyond it.

    Newton's method on the local quadratic, inside a bracket; the root counts once it lies between the vertex
    levels for which the quadratic holds. Steps that do not change sides are lengthened, so that the bracket
    closes, and edges outside the bracket are not looked at again.
    """
    x0, y0, x1, y1 = *edges.start, *edges.end
    lower, upper = float(y0.min()), float(y0.max())
    beyond_bracket = 0.0
    offset, repeats, was_up = min(max(0.0, lower), upper), 0, None
    for turn in range(200):
        cut = _cut((x0, y0, x1, y1), offset)
        excess = beyond_bracket + cut.area_above - area_above
        if excess == 0.0 or not lower < upper:
            return offset
        up = excess > 0.0
        if up:
            step, level = _quadratic_step(excess, cut.width_above, cut.growth_above), min(cut.level_above, upper)
        else:
            step, level = _quadratic_step(-excess, cut.width_below, -cut.growth_below), max(cut.level_below, lower)
        root = offset + step if up else offset - step
        if (root <= level) if up else (root >= level):
            return root
        lower, upper = (offset, upper) if up else (lower, offset)
        repeats = repeats + 1 if up == was_up else 0
        was_up = up
        offset = level if step == math.inf else offset + (root - offset) * 2.0**repeats
        if turn % 4 == 3 or not lower < offset < upper:
            inside = y0[(y0 > lower) & (y0 < upper)]
            offset = float(np.median(inside)) if len(inside) else 0.5 * (lower + upper)
        if turn == 0:
            # One end of the bracket is still that of the region: leaving edges out would cost more than it saves.
            continue
        low, high = np.minimum(y0, y1), np.maximum(y0, y1)
        gone = low >= upper
        beyond_bracket += float((0.5 * (y1[gone] - y0[gone]) * (x0[gone] + x1[gone])).sum())
        keep = np.flatnonzero(~gone & (high > lower))
        x0, y0, x1, y1 = x0[keep], y0[keep], x1[keep], y1[keep]
    return offset


class _Cut(NamedTuple):
    """A cut through some edges: area beyond it; just above and just below it, the width of the region, its growth
    with y, and the nearest vertex level, up to which that growth holds."""

    area_above: float
    width_above: float
    growth_above: float
    level_above: float
    width_below: float
    growth_below: float
    level_below: float


def _cut(ends: tuple[Floats, ...], offset: float) -> _Cut:
    """The cut at `offset` through edges with ends x0, y0, x1, y1."""
    blocks = [_cut_block([w[i : i + _BLOCK] for w in ends], offset) for i in range(0, len(ends[0]), _BLOCK)]
    areas, widths_above, growths_above, above, widths_below, growths_below, below = zip(*blocks, strict=True)
    return _Cut(
        math.fsum(areas),
        math.fsum(widths_above),
        math.fsum(growths_above),
        min(above),
        math.fsum(widths_below),
        math.fsum(growths_below),
        max(below),
    )


def _cut_block(ends: list[Floats], offset: float) -> _Cut:
    x0, y0, x1, y1 = ends
    above0, above1 = y0 > offset, y1 > offset
    below0, below1 = y0 < offset, y1 < offset
    area = float((0.5 * (y1 - y0) * (x0 + x1))[~(below0 | below1)].sum())
    # An edge going up has the region on its left, at smaller x. Edges that start or end on the cut belong to
    # one side of it only.
    meeting = np.flatnonzero((above0 != above1) | (below0 != below1))
    a, b, c, d = x0[meeting], y0[meeting], x1[meeting], y1[meeting]
    slope = (c - a) / (d - b)
    at_cut = a + slope * (offset - b)
    side = np.sign(d - b)
    is_above, is_below = np.maximum(b, d) > offset, np.minimum(b, d) < offset
    top, x_top = np.maximum(b, d), np.where(b > d, a, c)
    crossing = is_above & is_below
    area += float((side * 0.5 * (top - offset) * (x_top + at_cut))[crossing].sum())
    return _Cut(
        area,
        float((side * at_cut)[is_above].sum()),
        float((side * slope)[is_above].sum()),
        float(y0.min(initial=math.inf, where=above0)),
        float((side * at_cut)[is_below].sum()),
        float((side * slope)[is_below].sum()),
        float(y0.max(initial=-math.inf, where=below0)),
    )


def _quadratic_step(area: float, width: float, growth: float) -> float:
    """The step t > 0 with width t + growth t^2 / 2 = area; infinite if the local quadratic never reaches it."""
    square = width * width + 2.0 * growth * area
    if square < 0.0:
        return math.inf
    denominator = width + math.sqrt(square)
    return 2.0 * area / denominator if denominator > 0.0 else math.inf


def _moment_above(edges: Boundary, offset: float) -> float:
    """Integral of y - offset over the region beyond the cut."""
    sums = []
    for i in range(0, edges.start.shape[1], _BLOCK):
        (x0, y0), (x1, y1) = edges.start[:, i : i + _BLOCK], edges.end[:, i : i + _BLOCK]
        y0, y1 = y0 - offset, y1 - offset
        beyond = (y0 > 0.0) | (y1 > 0.0)
        x0, y0, x1, y1 = x0[beyond], y0[beyond], x1[beyond], y1[beyond]
        # Where an edge crosses, its lower end moves up to the cut.
        for x, y, other_x, other_y in ((x0, y0, x1, y1), (x1, y1, x0, y0)):
            crossing = y < 0.0
            share = y[crossing] / (y[crossing] - other_y[crossing])
            x[crossing] += share * (other_x[crossing] - x[crossing])
            y[crossing] = 0.0
        sums.append(float(((y1 - y0) * ((x0 + x1) * (y0 + y1) + x0 * y0 + x1 * y1)).sum()))
    return math.fsum(sums) / 6.0


def _halving_gap(edges: Boundary, area: float) -> tuple[float, float] | None:
    """The empty strip between parts that has half the area on either side, if there is one."""
    if len(edges.part_starts) < 2:
        return None
    (x0, y0), (x1, y1) = edges.start, edges.end
    lows = np.minimum.reduceat(y0, edges.part_starts)
    highs = np.maximum.reduceat(y0, edges.part_starts)
    areas = np.add.reduceat(0.5 * (x0 * y1 - x1 * y0), edges.part_starts)
    order = np.argsort(lows)
    lows, highs = lows[order], np.maximum.accumulate(highs[order])
    halving = np.abs(np.cumsum(areas[order])[:-1] - 0.5 * area) <= _EQUAL * area
    found = np.flatnonzero(halving & (lows[1:] >= highs[:-1]))
    return (float(highs[found[0]]), float(lows[found[0] + 1])) if len(found) else None
