"""Outlines: closed loops traced through edge points, and their simplification to polygons.

Knows loops of points with a scatter. Does not know where the points came from.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

Array = NDArray[np.float64]


def resampled(loop: Array, spacing: float) -> Array:
    """A closed (n, 2) loop with points evenly spaced along it, about `spacing` apart."""
    steps = np.linalg.norm(np.roll(loop, -1, axis=0) - loop, axis=1)
    along = np.concatenate([[0.0], np.cumsum(steps)])
    count = max(8, round(along[-1] / spacing))
    closed = np.vstack([loop, loop[:1]])
    at = np.arange(count) * (along[-1] / count)
    return np.stack([np.interp(at, along, closed[:, 0]), np.interp(at, along, closed[:, 1])], axis=1)


def loop_normals(loop: Array, reach: int = 1) -> Array:
    """(n, 2) unit normals to the right of the way a closed loop runs, from neighbours `reach` points away."""
    tangent = np.roll(loop, -reach, axis=0) - np.roll(loop, reach, axis=0)
    length = np.linalg.norm(tangent, axis=1, keepdims=True)
    return np.stack([tangent[:, 1], -tangent[:, 0]], axis=1) / np.maximum(length, 1e-12)


def bridged(points: Array, known: NDArray[np.bool_]) -> Array:
    """(n, 2) points around a loop with the unknown ones set on straight bridges between their known neighbours."""
    if known.all() or not known.any():
        return points
    n = len(points)
    index = np.arange(n)
    return np.stack([np.interp(index, index[known], points[known, axis], period=n) for axis in (0, 1)], axis=1)


# A turn of this much within the reach of the blur is a corner that the blur has rounded, not an arc.
CORNER_TURN_RAD = np.deg2rad(40.0)
_SIDE_POINTS = 8


def with_corners(points: Array, spacing: float, rounding: float) -> Array:
    """A dense closed (n, 2) loop with the corners restored that blur has rounded.

    spacing : between points along the loop; rounding : length to either side of a corner that its rounding spoils

    Where two straight sides meet within the rounding, they are prolonged to where they intersect: the half level of a
    blurred corner cuts it by about the blur, and a corner is where a turned section has its outermost fibre.
    """
    n = len(points)
    skip = int(np.ceil(rounding / spacing))
    if n < 4 * (skip + _SIDE_POINTS):
        return points
    index = np.arange(n)[:, None]
    sides = []
    for sign in (-1, 1):
        side = points[(index + sign * (skip + np.arange(_SIDE_POINTS))) % n]
        middle = side.mean(axis=1)
        about = side - middle[:, None]
        xx, yy, xy = (about[..., 0] ** 2).mean(1), (about[..., 1] ** 2).mean(1), (about[..., 0] * about[..., 1]).mean(1)
        angle = 0.5 * np.arctan2(2 * xy, xx - yy)
        along = np.stack([np.cos(angle), np.sin(angle)], axis=1)
        # Both sides are directed the way the loop runs.
        run = sign * (side[:, -1] - side[:, 0])
        along *= np.where(np.sum(along * run, axis=1) < 0, -1.0, 1.0)[:, None]
        across = np.abs(about[..., 0] * along[:, None, 1] - about[..., 1] * along[:, None, 0])
        sides.append((middle, along, across.max(axis=1)))
    (before, d0, bend0), (after, d1, bend1) = sides
    cross = d0[:, 0] * d1[:, 1] - d0[:, 1] * d1[:, 0]
    turn = np.arctan2(cross, np.sum(d0 * d1, axis=1))
    sharp = (np.abs(turn) > CORNER_TURN_RAD) & (np.maximum(bend0, bend1) < 0.5)
    gap = after - before
    t = (gap[:, 0] * d1[:, 1] - gap[:, 1] * d1[:, 0]) / np.where(np.abs(cross) < 1e-6, 1.0, cross)
    meet = before + t[:, None] * d0
    distance = np.linalg.norm(meet - points, axis=1)
    restored = points.copy()
    free = np.ones(n, bool)
    # The middle of a rounded corner is the point nearest to where its sides meet.
    for i in np.argsort(np.where(sharp, distance, np.inf)):
        if not sharp[i] or distance[i] > rounding:
            break
        near = (i + np.arange(-skip, skip + 1)) % n
        if not free[near].all():
            continue
        free[near] = False
        for k in near[:skip]:
            restored[k] = before[i] + ((points[k] - before[i]) @ d0[i]) * d0[i]
        for k in near[skip + 1 :]:
            restored[k] = after[i] + ((points[k] - after[i]) @ d1[i]) * d1[i]
        restored[i] = meet[i]
    return restored


def with_points(loop: Array, points: Array) -> Array:
    """A closed (n, 2) loop with further vertices on its edges, where they come nearest to (k, 2) points."""
    if len(points) == 0:
        return loop
    along = np.roll(loop, -1, axis=0) - loop
    square = np.maximum(np.sum(along**2, axis=1), 1e-300)
    to = points[:, None] - loop
    share = np.clip(np.sum(to * along, axis=2) / square, 0.0, 1.0)
    edge = np.argmin(np.sum((to - share[..., None] * along) ** 2, axis=2), axis=1)
    share = share[np.arange(len(points)), edge]
    inner = (share > 1e-6) & (share < 1.0 - 1e-6)
    order = np.lexsort((share[inner], edge[inner]))
    edge, share = edge[inner][order], share[inner][order]
    return np.insert(loop, edge + 1, loop[edge] + share[:, None] * along[edge], axis=0)


def gaps(known: NDArray[np.bool_]) -> list[NDArray[np.intp]]:
    """The runs of unknown places around a loop, each as the indices of its places in order."""
    n = len(known)
    if known.all():
        return []
    if not known.any():
        return [np.arange(n)]
    start = int(np.argmax(known))
    lost = (np.flatnonzero(~np.roll(known, -start)) + start) % n
    breaks = np.flatnonzero(np.diff((lost - start) % n) > 1) + 1
    return list(np.split(lost, breaks))


def breakpoints(loop: Array, tolerance: float) -> NDArray[np.intp]:
    """Indices of the points that a closed loop can be reduced to within a distance.

    Ramer (1972), Douglas and Peucker (1973), with a stack instead of recursion.
    """
    first = int(np.argmax(np.linalg.norm(loop - loop.mean(axis=0), axis=1)))
    second = int(np.argmax(np.linalg.norm(loop - loop[first], axis=1)))
    n = len(loop)
    closed = np.vstack([loop, loop])
    a, b = sorted((first, second))
    kept = {a, b}
    stack = [(a, b), (b, a + n)]
    while stack:
        i, j = stack.pop()
        if j - i < 2:
            continue
        chord = closed[j] - closed[i]
        length = float(np.hypot(*chord))
        offset = closed[i + 1 : j] - closed[i]
        if length > 0:
            distance = np.abs(offset[:, 0] * chord[1] - offset[:, 1] * chord[0]) / length
        else:
            distance = np.linalg.norm(offset, axis=1)
        worst = int(np.argmax(distance))
        if distance[worst] > tolerance:
            k = i + 1 + worst
            kept.add(k % n)
            stack += [(i, k), (k, j)]
    return np.array(sorted(kept))


def simplified(loop: Array, tolerance: float) -> Array:
    """A polygon of few sides through a dense closed (n, 2) loop, enclosing the same area.

    tolerance : how far the loop's points may lie from the polygon, in the loop's unit; a few
        standard deviations of the points' scatter

    Between breakpoints a straight side is fitted to the points by total least squares and
    neighbouring sides are intersected, so that every side averages the scatter of its points;
    what the area still lacks is put back by one small parallel offset of all sides.
    """
    keys = breakpoints(loop, tolerance)
    if len(keys) < 3:
        return loop
    n = len(loop)
    ends = np.append(keys[1:], keys[0] + n)
    # Sums over the doubled loop give every side's mean and scatter at once.
    about = loop - loop[0]
    doubled = np.vstack([about, about])
    moments = np.column_stack([doubled, doubled[:, 0] ** 2, doubled[:, 1] ** 2, doubled[:, 0] * doubled[:, 1]])
    total = np.vstack([np.zeros(5), np.cumsum(moments, axis=0)])
    # The points at a corner belong to neither side: leave them out where a side has points to spare.
    count = ends - keys + 1
    trim = np.where(count > 8, np.minimum(2, count // 4), 0)
    low, high = keys + trim, ends + 1 - trim
    sums = total[high] - total[low]
    weight = (high - low)[:, None]
    mean = sums[:, :2] / weight
    xx, yy, xy = (sums[:, 2:] / weight - np.column_stack([mean[:, 0] ** 2, mean[:, 1] ** 2, mean[:, 0] * mean[:, 1]])).T
    turn = 0.5 * np.arctan2(2 * xy, xx - yy)
    direction = np.stack([np.cos(turn), np.sin(turn)], axis=1)
    corner = about[keys]
    last, next_ = np.roll(np.arange(len(keys)), 1), np.arange(len(keys))
    cross = direction[last, 0] * direction[next_, 1] - direction[last, 1] * direction[next_, 0]
    between = mean[next_] - mean[last]
    along = (between[:, 0] * direction[next_, 1] - between[:, 1] * direction[next_, 0]) / np.where(
        np.abs(cross) < 1e-9, 1.0, cross
    )
    meet = mean[last] + along[:, None] * direction[last]
    # Nearly parallel sides meet anywhere: there the traced corner itself is the better vertex.
    sound = (np.abs(cross) > 0.05) & (np.linalg.norm(meet - corner, axis=1) < 4 * tolerance)
    polygon = np.where(sound[:, None], meet, corner)
    return _with_area(polygon, _area(about)) + loop[0]


def _area(loop: Array) -> float:
    x, y = loop.T
    return 0.5 * float(np.sum(x * np.roll(y, -1) - np.roll(x, -1) * y))


def mitred(polygon: Array, distance: float | Array) -> Array:
    """(n, 2) displacement of a polygon's vertices that moves every side by a distance to its right.

    distance : one value, or (n,) the distance at every vertex. Outward for a counter-clockwise loop.
    The displacement of a very sharp corner is held to three times the distance.
    """
    side = np.roll(polygon, -1, axis=0) - polygon
    length = np.maximum(np.linalg.norm(side, axis=1, keepdims=True), 1e-300)
    after = np.stack([side[:, 1], -side[:, 0]], axis=1) / length
    before = np.roll(after, 1, axis=0)
    both = after + before
    scale = 1.0 / np.maximum(1.0 + np.sum(after * before, axis=1), 2.0 / 9.0)
    return both * scale[:, None] * np.broadcast_to(np.asarray(distance, float).reshape(-1, 1), (len(polygon), 1))


def _with_area(polygon: Array, area: float) -> Array:
    """The polygon with all sides moved in parallel so that it encloses the stated signed area."""
    for _ in range(4):
        missing = area - _area(polygon)
        unit = mitred(polygon, 1.0)
        rate = (_area(polygon + 1e-3 * unit) - _area(polygon - 1e-3 * unit)) / 2e-3
        if rate == 0 or abs(missing) < 1e-12 * abs(area):
            break
        polygon = polygon + unit * (missing / rate)
    return polygon
