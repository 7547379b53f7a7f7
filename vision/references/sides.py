"""Edges of a reference to a small part of a pixel: the sides of a quadrilateral, the rim of a disc.

Works along normals in linear light, between local plateaus, along curves as the lens bends them. Knows nothing of
sizes.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from ...props.errors import Refusal
from ..edges import EdgePoints, approach, estimate_blur, fit_step, locate, normal_profiles
from ..light import Light

Array = NDArray[np.float64]
Mask = NDArray[np.bool_]

# Where the half level of a clean edge may lie beside the true edge, px, and per px of blur for a tone curve nobody
# knows, the same all round (rectangular); and for each side by itself (stated assumptions, those of a face's outline).
EDGE_BIAS_PX, EDGE_BIAS_TONE, SIDE_BIAS_PX = 0.035, 0.035, 0.05
# Edge points this far apart share no pixels, px; more of them than this on a side say nothing new.
_SPACING, _MOST_POINTS = 3.0, 300
# Share of a side that must be seen, and between how far ends, for it to be carried to its corners.
_LEAST_SEEN, _LEAST_SPAN = 0.3, 0.5
# A lens bends a side by up to this share of its length (barrel of ten percent across the frame: computed).
_BEND = 0.02


@dataclass(frozen=True, eq=False)
class Edge:
    """Points along one edge.

    points : (n, 2) px, half level; normals : (n, 2) outward
    scatter : px, of a point along its normal about a smooth edge
    grouping : by how many times fewer independent points there are (sum of the autocorrelation)
    seen : share of the edge that was located
    contrast : median step outwards, linear light
    """

    points: Array
    normals: Array
    scatter: float
    grouping: float
    seen: float
    contrast: float

    @property
    def std(self) -> Array:
        """(n,) px with which each point counts as an independent one."""
        return np.full(len(self.points), self.scatter * np.sqrt(self.grouping))


@dataclass(frozen=True, eq=False)
class Sides:
    """Four sides of a quadrilateral, counter-clockwise as seen from its lower left corner, and their blur, px."""

    edges: tuple[Edge, Edge, Edge, Edge]
    blur: float

    @property
    def common_bias(self) -> float:
        """Standard uncertainty, px, of what displaces the edges all round alike."""
        return EDGE_BIAS_PX + EDGE_BIAS_TONE * self.blur

    @property
    def corners(self) -> Array:
        """(4, 2) px, lower left, lower right, upper right, upper left: crossings of the sides' chords."""
        lines = []
        for edge in self.edges:
            middle = edge.points.mean(axis=0)
            direction = np.linalg.svd(edge.points - middle, full_matrices=False)[2][0]
            normal = np.array([-direction[1], direction[0]])
            lines.append(np.append(normal, -normal @ middle))
        crossings = [np.cross(lines[i - 1], lines[i]) for i in range(4)]
        return np.array([c[:2] / c[2] for c in crossings])


def find_sides(light: Light, corners: Array, rounded: Array | float = 0.0) -> Sides:
    """The sides of a quadrilateral whose corners are known roughly.

    corners : (4, 2) px, lower left, lower right, upper right, upper left, within a percent or two of its size
    rounded : part of each side's length that its corners round off at either end
    Raises Refusal when a side cannot be seen over enough of its length.
    """
    parts = np.broadcast_to(np.asarray(rounded, float), (4,))
    rough = []
    for index in range(4):
        start, end = corners[index], corners[(index + 1) % 4]
        length = float(np.linalg.norm(end - start))
        margin = min(0.3, 1.3 * parts[index] + max(0.03, 5.0 / max(length, 1.0)))
        count = int(np.clip(length * (1 - 2 * margin) / _SPACING, 8, _MOST_POINTS))
        t = np.linspace(margin, 1 - margin, count)
        direction = (end - start) / max(length, 1e-9)
        outward = np.array([-direction[1], direction[0]])
        points = start + t[:, None] * (end - start)
        normals = np.broadcast_to(outward, points.shape)
        # The other sides must stay out of reach.
        reach = float(np.clip(_BEND * length, 4.0, 25.0))
        bent = _bent(light, points, normals, t, reach)
        if bent is None:
            raise _lost(index)
        rough.append((*bent, t))
    blur = _blur(light, [(points, normals) for points, normals, _ in rough])
    edges = []
    for index, (points, normals, t) in enumerate(rough):
        edge = _refined(light, points, normals, t, blur)
        if edge is None:
            raise _lost(index)
        edges.append(edge)
    return Sides((edges[0], edges[1], edges[2], edges[3]), blur)


def _lost(index: int) -> Refusal:
    side = ("lower", "right", "upper", "left")[index]
    return Refusal(
        "reference-edge-lost",
        f"The {side} edge of the reference cannot be located over enough of its length.",
        "Light it evenly, lay it on a ground of another brightness, keep it whole in the frame and most of each edge "
        "uncovered.",
    )


def _bent(light: Light, points: Array, normals: Array, t: Array, reach: float) -> tuple[Array, Array] | None:
    """Rough points of a side moved on the curve that most of its edge follows, and that curve's normals."""
    shift, found = approach(light, points, normals, reach, 5.0)
    if found.sum() < 6:
        return None
    curve = robust_parabola(t[found], shift[found])
    moved = points + np.polyval(curve, t)[:, None] * normals
    return moved, curve_normals(moved, normals)


def curve_normals(points: Array, normals: Array) -> Array:
    """(n, 2) unit normals of an open curve, on the side of the given ones."""
    tangent = np.gradient(points, axis=0)
    own = np.column_stack([-tangent[:, 1], tangent[:, 0]])
    own *= np.sign(np.sum(own * normals, axis=1))[:, None]
    return own / np.maximum(np.linalg.norm(own, axis=1, keepdims=True), 1e-12)


def _refined(light: Light, points: Array, normals: Array, t: Array, blur: float) -> Edge | None:
    shift, found = approach(light, points, normals, 3.0, max(4.0, 3.0 * blur))
    if found.sum() < 6:
        return None
    curve = robust_parabola(t[found], shift[found])
    points = points + np.polyval(curve, t)[:, None] * normals
    normals = curve_normals(points, normals)
    edge = locate(light, points, normals, blur)
    return kept(edge, points, normals, t)


def kept(edge: EdgePoints, points: Array, normals: Array, t: Array) -> Edge | None:
    """The located points of one smooth edge, without strays; None where too few are left.

    t : (n,) parameter along the edge, 0 to 1
    """
    along = np.sum((edge.points - points) * normals, axis=1)
    step = edge.outer - edge.inner
    good = edge.located.copy()
    if good.sum() < 6:
        return None
    typical = float(np.median(step[good]))
    good &= step * np.sign(typical) > 0.3 * abs(typical)
    if good.sum() < 6:
        return None
    curve = robust_parabola(t[good], along[good])
    for _ in range(3):
        residual = along - np.polyval(curve, t)
        spread = 1.4826 * float(np.median(np.abs(residual[good])))
        near = good & (np.abs(residual) < max(0.1, 3.5 * spread))
        if near.sum() < 6:
            return None
        curve = np.polyfit(t[near], along[near], 2)
    residual = (along - np.polyval(curve, t))[near]
    seen = float(near.mean())
    if seen < _LEAST_SEEN or np.ptp(t[near]) < _LEAST_SPAN * np.ptp(t):
        return None
    scatter = float(np.sqrt(np.sum(residual**2) / max(1, len(residual) - 3)))
    return Edge(edge.points[near], normals[near], max(scatter, 0.005), grouping(residual), seen, typical)


def robust_parabola(t: Array, values: Array) -> Array:
    """(3,) coefficients, highest first, of the parabola that most of (n,) values follow (least median of squares)."""
    rng = np.random.default_rng(1)
    best, least = np.array([0.0, 0.0, float(np.median(values))]), np.inf
    third = np.array_split(np.argsort(t), 3)
    for _ in range(80):
        pick = [int(rng.choice(part)) for part in third]
        curve = np.polyfit(t[pick], values[pick], 2) if len(set(t[pick])) == 3 else best
        median = float(np.median(np.abs(values - np.polyval(curve, t))))
        if median < least:
            best, least = curve, median
    near = np.abs(values - np.polyval(best, t)) < max(0.5, 3.0 * 1.4826 * least)
    return np.polyfit(t[near], values[near], 2) if near.sum() >= 4 else best


def grouping(residual: Array) -> float:
    """Sum of the autocorrelation of (n,) residuals over both sides, at least 1: how many points count as one.

    Taken up to where the correlation first falls below two standard deviations of white noise.
    """
    n = len(residual)
    r = residual - residual.mean()
    total = float(r @ r)
    if total == 0 or n < 8:
        return 1.0
    length = 1.0
    for lag in range(1, n // 3):
        rho = float(r[:-lag] @ r[lag:]) / total
        if rho < 2 / np.sqrt(n):
            break
        length += 2 * rho
    return length


def _blur(light: Light, rough: list[tuple[Array, Array]]) -> float:
    points = np.concatenate([p for p, _ in rough])
    normals = np.concatenate([n for _, n in rough])
    return edge_blur(light, points, normals)


def edge_blur(light: Light, points: Array, normals: Array) -> float:
    """Standard deviation of the line spread, px, at edges that pass within a pixel of (n, 2) points."""
    shift, found = approach(light, points, normals, 3.0, 5.0)
    points, normals = (points + shift[:, None] * normals)[found], normals[found]
    if len(points) < 20:
        return 1.0
    offsets = np.arange(-6.0, 6.01, 0.5)
    profiles = normal_profiles(light, points, normals, offsets)
    return estimate_blur(profiles, offsets, fit_step(profiles, offsets, 1.0)[0])
