"""How much of each pixel a polygon covers, exactly.

The area under every piece of edge is summed pixel by pixel, so a straight edge has no sampling
error at all. Knows nothing of cameras or of colour.
"""

from __future__ import annotations

from collections.abc import Iterable

import numpy as np
from numpy.typing import NDArray

Floats = NDArray[np.float64]
Box = tuple[int, int, int, int]
"""First column, first row, one past the last column, one past the last row."""
STRIP = 256


def loops_to_segments(loops: Iterable[Floats]) -> Floats:
    """The edges of closed loops, (n, 2) each, as one (m, 2, 2) array: edge, end, coordinate."""
    return np.concatenate([np.stack([loop, np.roll(loop, -1, axis=0)], axis=1) for loop in map(np.asarray, loops)])


def subdivided(segments: Floats, pieces: NDArray[np.intp]) -> Floats:
    """(m, 2, 2) segments cut into `pieces` (m,) equal parts each."""
    which = np.repeat(np.arange(len(segments)), pieces)
    part = np.arange(len(which)) - np.repeat(np.cumsum(pieces) - pieces, pieces)
    start, along = segments[which, 0], (segments[:, 1] - segments[:, 0])[which]
    t0 = (part / pieces[which])[:, None]
    t1 = ((part + 1) / pieces[which])[:, None]
    return np.stack([start + t0 * along, start + t1 * along], axis=1)


def bounding_box(segments: Floats, width: int, height: int) -> Box:
    """The pixels that (m, 2, 2) segments can touch, within a frame of `width` x `height` pixels."""
    low, high = segments.min(axis=(0, 1)), segments.max(axis=(0, 1))
    x0, y0 = np.clip(np.floor(low + 0.5), 0, (width, height)).astype(int)
    x1, y1 = np.clip(np.floor(high + 0.5) + 1, 0, (width, height)).astype(int)
    return int(x0), int(y0), int(max(x1, x0)), int(max(y1, y0))


def coverage(segments: Floats, box: Box) -> NDArray[np.float32]:
    """Share of every pixel of `box` inside the closed loops that `segments` (m, 2, 2) make up.

    Pixel (i, j) is the square from (i - 0.5, j - 0.5) to (i + 0.5, j + 0.5). Shells and holes run
    opposite ways round; which of the two is clockwise does not matter.
    """
    x_first, y_first, x_end, y_end = box
    width, height = x_end - x_first, y_end - y_first
    if width <= 0 or height <= 0:
        return np.zeros((max(height, 0), max(width, 0)), np.float32)
    start = segments[:, 0] - (x_first - 0.5, y_first - 0.5)
    step = segments[:, 1] - segments[:, 0]

    # Cut every segment where it crosses a pixel boundary inside the box.
    count = len(segments)
    owner = [np.arange(count), np.arange(count)]
    where = [np.zeros(count), np.ones(count)]
    for axis, limit in ((0, width), (1, height)):
        low = np.minimum(start[:, axis], start[:, axis] + step[:, axis])
        high = np.maximum(start[:, axis], start[:, axis] + step[:, axis])
        first = np.maximum(np.floor(low) + 1, 0)
        crossings = np.maximum(np.minimum(np.ceil(high) - 1, limit) - first + 1, 0).astype(np.intp)
        segment = np.repeat(np.arange(count), crossings)
        line = first[segment] + np.arange(len(segment)) - np.repeat(np.cumsum(crossings) - crossings, crossings)
        owner.append(segment)
        where.append((line - start[segment, axis]) / step[segment, axis])
    segment, t = np.concatenate(owner), np.clip(np.concatenate(where), 0, 1)
    order = np.argsort(2.0 * segment + t)
    segment, t = segment[order], t[order]
    x = start[segment, 0] + t * step[segment, 0]
    y = start[segment, 1] + t * step[segment, 1]
    same = segment[1:] == segment[:-1]
    x_mid = (0.5 * (x[1:] + x[:-1]))[same]
    y_mid = (0.5 * (y[1:] + y[:-1]))[same]
    rise = (y[1:] - y[:-1])[same]

    keep = (y_mid > 0) & (y_mid < height) & (x_mid < width) & (rise != 0)
    x_mid, y_mid, rise = np.maximum(x_mid[keep], 0.0), y_mid[keep], rise[keep]
    column, row = x_mid.astype(np.intp), y_mid.astype(np.intp)
    share = x_mid - column
    order = np.argsort(row, kind="stable")
    row, index = row[order], (row * (width + 1) + column)[order]
    left, right = (rise * (1 - share))[order], (rise * share)[order]

    # Strips of rows keep the double-precision sums small.
    covered = np.empty((height, width), np.float32)
    for top in range(0, height, STRIP):
        bottom = min(top + STRIP, height)
        part = slice(*np.searchsorted(row, (top, bottom)))
        place, size = index[part] - top * (width + 1), (bottom - top) * (width + 1)
        area = np.bincount(place, left[part], size) + np.bincount(place + 1, right[part], size)
        covered[top:bottom] = np.abs(np.cumsum(area.reshape(-1, width + 1), axis=1)[:, :width])
    return np.clip(covered, 0, 1, out=covered)
