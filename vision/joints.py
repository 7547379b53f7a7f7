"""The joint between two parts of a face, to a part of a pixel: one line that both share.

Knows rough lines and light on either side; not what bounds the parts all round.
"""

from __future__ import annotations

import itertools
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from ..props.errors import Refusal
from .edges import approach, locate
from .light import Light
from .part_labels import LabelMap, Labels
from .references.reference import Reference

Array = NDArray[np.float64]

# Points along a joint, px; and the share of it that may be lost before it is refused.
SPACING = 1.5
_REFUSE_LOST = 0.6
# Least share of the difference between both sides that lies in the step itself (stated assumption).
_STEP_SHARE = 0.6


@dataclass(frozen=True)
class Joint:
    """The line between two parts, mm.

    line : (n, 2) vertices, the ends on the outline or on other joints; closed ones repeat no vertex
    scatter, correlation : of its points across it, mm
    lost : share of it that was not seen
    """

    parts: tuple[int, int]
    line: Array
    closed: bool
    scatter: float
    correlation: float
    lost: float


def rough_joints(labels: LabelMap, count: int) -> list[tuple[tuple[int, int], Array, bool]]:
    """(parts, line in photo pixels, closed) of every stretch along which two parts meet on the face."""
    import cv2
    from skimage.measure import find_contours

    found: list[tuple[tuple[int, int], Array, bool]] = []
    near_face = cv2.dilate(labels.face.astype(np.uint8), np.ones((3, 3), np.uint8)).astype(bool)
    for first in range(1, count + 1):
        soft = cv2.GaussianBlur((labels.labels == first).astype(np.float32), (0, 0), 1.0)
        for contour in find_contours(soft, 0.5):
            points = contour[:, ::-1]
            closed = bool(np.array_equal(points[0], points[-1]))
            points = points[:-1] if closed else points
            rows, columns = np.rint(points[:, ::-1]).astype(int).T
            other = _label_beside(labels.labels, points, first)
            other[~near_face[rows, columns]] = 0
            for second in range(first + 1, count + 1):
                for run in runs(other == second, closed):
                    if len(run) >= 8:
                        found.append(
                            ((first - 1, second - 1), labels.outside(points[run]), closed and len(run) == len(points))
                        )
    return found


def _label_beside(labels: Labels, points: Array, own: int) -> Labels:
    """(n,) the label other than `own` nearest to each (x, y)."""
    x, y = np.rint(points).astype(int).T
    height, width = labels.shape
    found = np.zeros(len(points), np.int32)
    steps = sorted(itertools.product(range(-2, 3), repeat=2), key=lambda s: s[0] ** 2 + s[1] ** 2)
    for dx, dy in steps:
        there = labels[np.clip(y + dy, 0, height - 1), np.clip(x + dx, 0, width - 1)]
        found = np.where((found == 0) & (there != own), there, found)
    return found


def runs(chosen: NDArray[np.bool_], closed: bool) -> list[NDArray[np.intp]]:
    """Runs of chosen places along a line; round the end of a closed one."""
    if not chosen.any():
        return []
    if chosen.all():
        return [np.arange(len(chosen))]
    start = int(np.argmin(chosen)) if closed else 0
    places = (np.flatnonzero(np.roll(chosen, -start)) + start) % len(chosen)
    breaks = np.flatnonzero(np.diff((places - start) % len(chosen)) > 1) + 1
    return list(np.split(places, breaks))


def located(
    points: Array, parts: tuple[int, int], closed: bool, light: Light, blur: float, reach: float, reference: Reference
) -> Joint:
    """A rough joint located to a part of a pixel and reduced to few vertices, mm."""
    normals = line_normals(points, 4, closed)
    mix = _clearest(light, points, normals, reach)
    shift, found = approach(mix, points, normals, reach, max(4.0, 3.0 * blur))
    if found.sum() < 8:
        raise unseen(parts)
    index = np.arange(len(points))
    shift = _median_filtered(np.interp(index, index[found], shift[found]), 9)
    points = points + shift[:, None] * normals
    edge = locate(mix, points, normals, blur)
    shift = np.sum((edge.points - points) * normals, axis=1)
    contrast = np.abs(edge.outer - edge.inner)
    # A joint is a step: most of what differs between both sides differs within the blur.
    beside = (3.0 * blur + 5.0) * normals
    step = float(np.median(mix.at(points + beside) - mix.at(points - beside)))
    clear = (contrast > 3.0 * edge.residual) & ((edge.outer - edge.inner) * np.sign(step) > _STEP_SHARE * abs(step))
    level = _median_filtered(np.where(clear, shift, 0.0), 9)
    seen = clear & (contrast > 0.25 * np.median(contrast)) & (np.abs(shift - level) < max(1.0, 2.0 * blur))
    lost = 1.0 - float(seen.mean())
    if lost > _REFUSE_LOST or seen.sum() < 8:
        raise unseen(parts)
    places = reference.face.to_mm(points[seen] + shift[seen, None] * normals[seen])
    line, off = _straightened(places, closed)
    scatter = float(np.sqrt(np.mean(off**2)))
    spacing = float(np.median(np.hypot(*np.diff(places, axis=0).T)))
    return Joint(parts, line, closed, scatter, _correlation_length(off, spacing), lost)


def unseen(parts: tuple[int, int]) -> Refusal:
    """That the joint between two parts, numbered from 0, is not seen."""
    return Refusal(
        "joint-lost",
        f"The joint between part {parts[0] + 1} and part {parts[1] + 1} cannot be located.",
        "Light the face evenly and clean the joint, or mark it with a fine line, and take the photo again.",
    )


def _clearest(light: Light, points: Array, normals: Array, reach: float) -> Light:
    """The light with the mix of channels in which both sides are farthest apart for their scatter (Fisher 1936)."""
    if light.pixels.ndim == 2:
        return light
    channels = [replace(light, weights=tuple(row)) for row in np.eye(3)]
    step = (reach + 2.0) * normals
    sides = [np.stack([c.at(points + sign * step) for c in channels], axis=1) for sign in (-1.0, 1.0)]
    within = np.cov(sides[0].T) + np.cov(sides[1].T)
    difference = np.median(sides[1], axis=0) - np.median(sides[0], axis=0)
    weights = np.linalg.solve(within + 1e-3 * np.trace(within) * np.eye(3), difference)
    if not np.any(weights):
        return light
    weights = weights / np.abs(weights).sum()
    return replace(light, weights=(float(weights[0]), float(weights[1]), float(weights[2])))


def resampled_line(line: Array, spacing: float, closed: bool) -> Array:
    """The line with points evenly spaced along it; of a closed one without the first point again at its end."""
    if closed:
        line = np.vstack([line, line[:1]])
    along = np.concatenate([[0.0], np.cumsum(np.hypot(*np.diff(line, axis=0).T))])
    count = max(8, round(along[-1] / spacing))
    at = np.linspace(0.0, along[-1], count + 1)[: count if closed else count + 1]
    return np.column_stack([np.interp(at, along, line[:, k]) for k in (0, 1)])


def line_normals(points: Array, reach: int, closed: bool) -> Array:
    """(n, 2) unit normals to the right of the way the line runs."""
    if closed:
        tangent = np.roll(points, -reach, axis=0) - np.roll(points, reach, axis=0)
    else:
        index = np.arange(len(points))
        last = len(points) - 1
        tangent = points[np.minimum(index + reach, last)] - points[np.maximum(index - reach, 0)]
    return np.column_stack([tangent[:, 1], -tangent[:, 0]]) / np.hypot(*tangent.T)[:, None]


def _median_filtered(values: Array, width: int) -> Array:
    from scipy.ndimage import median_filter

    return np.asarray(median_filter(values, width, mode="nearest"))


def _straightened(points: Array, closed: bool) -> tuple[Array, Array]:
    """Few vertices of a line through scattered (n, 2) points, and (n,) how far these lie off it.

    Breaks where the line strays by four standard deviations of the scatter (Ramer 1972); the vertices are then those
    of the polyline with these breaks that fits the points best.
    """
    line = np.vstack([points, points[:1]]) if closed else points
    along = np.concatenate([[0.0], np.cumsum(np.hypot(*np.diff(line, axis=0).T))])
    # Third differences over a dozen points: grain of the materials is longer than the edge's own noise.
    lag = min(12, (len(line) - 1) // 3)
    third = line[3 * lag :] - 3 * line[2 * lag : -lag] + 3 * line[lag : -2 * lag] - line[: -3 * lag]
    # 1 + 9 + 9 + 1: its variance for independent points; most of it is across the line.
    scatter = 1.4826 * float(np.median(np.abs(np.hypot(*third.T)))) / np.sqrt(20.0)
    tolerance = 4.0 * max(scatter, 1e-3)
    breaks, stack = {0, len(line) - 1}, [(0, len(line) - 1)]
    if closed:
        far = int(np.argmax(np.hypot(*(line - line[0]).T)))
        breaks.add(far)
        stack = [(0, far), (far, len(line) - 1)]
    while stack:
        i, j = stack.pop()
        if j - i < 12:
            continue
        chord = line[j] - line[i]
        # Means of neighbours, so that no single point makes a break.
        off = (line[i : j + 1] - line[i]) @ np.array([-chord[1], chord[0]]) / max(float(np.hypot(*chord)), 1e-9)
        off = np.convolve(off, np.full(5, 0.2), mode="same")
        off[:3] = off[-3:] = 0.0
        worst = int(np.argmax(np.abs(off)))
        if abs(off[worst]) > tolerance:
            breaks.add(i + worst)
            stack += [(i, i + worst), (i + worst, j)]
    knots = along[sorted(breaks)]
    hats = np.stack([np.interp(along, knots, row) for row in np.eye(len(knots))], axis=1)
    if closed:
        hats[:, 0] += hats[:, -1]
        hats = hats[:, :-1]
    vertices = np.linalg.lstsq(hats, line, rcond=None)[0]
    fitted = hats @ vertices
    off: Array = np.einsum("ni,ni->n", line - fitted, line_normals(fitted, 1, False))
    return np.asarray(vertices, float), off


def _correlation_length(off: Array, step: float) -> float:
    """Integral of the correlation of deviations along a line over both sides, in the unit of the step."""
    variance = float(np.mean(off**2))
    total = 1.0
    for lag in range(1, len(off) // 4):
        correlation = float(np.mean(off[lag:] * off[:-lag])) / max(variance, 1e-30)
        if correlation < 0.05:
            break
        total += 2.0 * correlation
    return step * total
