"""Whether a face taken to lie in the plane of the reference stands above it: its walls would show beside it.

Knows where an upright wall would end for a height; measures no height to rely on.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence

import numpy as np
from numpy.typing import NDArray

from .light import Light
from .trace import Trace

Array = NDArray[np.float64]
Mask = NDArray[np.bool_]

# A wall's tone differs from its face's, or from the ground's, by this part of the outline's contrast, or is not told
# (stated assumption: a fiftieth is a few times what a good picture resolves).
LEAST_STEP = 0.02
# What is told by a single side must be clearer (stated assumption: half of what a grey block's sides differ by).
CLEAR_STEP = 0.1
# Standard errors by which a step must stand out of the surface's own pattern, and times over the sides without walls.
LEAST_ERRORS, LEAST_RATIO = 6.0, 3.0
# Heights tried, mm, each a twelfth above the one before: a wall's end is found within a twelfth of its breadth.
_HEIGHTS = np.geomspace(2.0, 100.0, 50)
_SECTORS, _LEAST_POINTS = 8, 40
# Points of an outline closer than this share the pattern of the surface (stated assumption), in points.
_TOGETHER = 8
# Enough points for a side of any slice; px between samples across the outline.
_MOST_POINTS, _STEP = 1000, 1.0


def standing_height(
    traces: Sequence[Trace],
    light: Light,
    blur: float,
    to_mm: Callable[[Array], Array],
    rise: Callable[[Array, float], Array],
) -> float | None:
    """About how high above the reference plane a face stands, mm; None where no walls show.

    to_mm : (n, 2) photo pixels to (n, 2) mm of the plane
    rise : (n, 2) mm of points of the plane, mm of height -> (n, 2) photo pixels of the points square above them

    What is traced around a slice is its top edge, and where the camera sees its walls that or its foot. So where
    walls show, the light steps along lines a wall's breadth inwards or outwards, by one amount all along a side; a
    surface's own pattern steps by chance, and a rim around the face on every side.
    """
    points = np.concatenate([t.points for t in traces])
    normals = np.concatenate([t.normals for t in traces])
    contrast = np.concatenate([np.abs(t.outer - t.inner) for t in traces])
    thinned = max(1, len(points) // _MOST_POINTS)
    good = np.flatnonzero(np.concatenate([t.located for t in traces]))[::thinned]
    points, normals, contrast = points[good], normals[good], contrast[good]
    independent = min(1.0, thinned / _TOGETHER)
    half = np.ceil(max(2.0, 1.5 * blur))
    feet = to_mm(points)
    breadths = {float(h): np.sum((points - rise(feet, float(h))) * normals, axis=1) for h in _HEIGHTS}
    deepest = max((float(np.abs(b).max(initial=0.0)) for b in breadths.values()), default=0.0) + 2.0 * half
    best, found = 0.0, None
    for way in (-1.0, 1.0):
        room = _room(traces, points, way * normals, deepest, inside=way < 0)
        depths = np.arange(0.0, min(deepest, float(room.max(initial=0.0))) + 2.0 * half, _STEP)
        places = points[:, None] + depths[:, None] * (way * normals)[:, None]
        profiles = light.nearest(places) / contrast[:, None]
        # Running sums give the mean over any window at once.
        sums = np.cumsum(np.pad(profiles, ((0, 0), (1, 0))), axis=1)
        for height, breadth in breadths.items():
            fits = np.abs(breadth) + 2.0 * half < room
            steps = _steps(sums, np.abs(breadth), half)
            strength = _strength(steps, breadth * fits, normals, 2.0 * half + 1.0, independent)
            if strength > best:
                best, found = strength, height
    return found


def _room(traces: Sequence[Trace], points: Array, ways: Array, deepest: float, *, inside: bool) -> Array:
    """(n,) px that one can go from the outline's (n, 2) points their way without meeting it again."""
    import cv2

    loops = [t.points for t in traces]
    low = np.min([loop.min(axis=0) for loop in loops], axis=0) - 2.0
    size = np.ceil(np.max([loop.max(axis=0) for loop in loops], axis=0) - low).astype(int) + 3
    face = np.zeros((size[1], size[0]), np.uint8)
    cv2.fillPoly(face, [np.rint(loop - low).astype(np.int32) for loop in loops], 1)
    depths = np.arange(3.0, deepest + 2.0, 2.0)
    places = np.rint(points[:, None] + depths[:, None] * ways[:, None] - low).astype(int)
    within = np.all((places >= 0) & (places < size), axis=2)
    x, y = np.clip(places, 0, size - 1).transpose(2, 0, 1)
    wrong = ((face[y, x] > 0) & within) != inside
    return np.where(wrong.any(axis=1), depths[wrong.argmax(axis=1)], depths[-1])


def _steps(sums: Array, depth: Array, half: float) -> Array:
    """(n,) mean light over `half` px further in than (n,) depths, less that over as much before them.

    sums : (n, m + 1) running sums of samples _STEP apart
    """
    window = int(np.ceil(half / _STEP))
    at = np.clip(np.rint(depth / _STEP).astype(int), window, sums.shape[1] - 1 - window)
    rows = np.arange(len(sums))
    return (sums[rows, at + window] - 2.0 * sums[rows, at] + sums[rows, at - window]) / window


def _strength(steps: Array, breadth: Array, normals: Array, least: float, independent: float) -> float:
    """The mean step where walls would show, in parts of the outline's contrast; 0 where none is proven.

    breadth : (n,) px of wall that would show, negative on the sides that face away
    independent : share of the points that do not share their surface's pattern
    """
    sector = np.floor((np.arctan2(normals[:, 1], normals[:, 0]) / (2 * np.pi) % 1.0) * _SECTORS).astype(int)

    def sides(chosen: Mask) -> list[tuple[float, float, int]]:
        parts = [steps[chosen & (sector == index)] for index in range(_SECTORS)]
        return [(*_median(part, independent), len(part)) for part in parts if len(part) >= _LEAST_POINTS]

    seen, hidden = sides(breadth > least), sides(breadth < -least)
    count = sum(n for *_, n in seen)
    told = [(abs(middle), n) for middle, error, n in seen if abs(middle) > max(LEAST_STEP, LEAST_ERRORS * error)]
    if not told or sum(n for _, n in told) <= 0.5 * count:
        return 0.0
    # A streak along one side passes for a faint wall.
    if len(told) == 1 and told[0][0] < CLEAR_STEP:
        return 0.0
    strength = sum(step * n for step, n in told) / count
    pattern = max((abs(middle) for middle, *_ in hidden), default=0.0)
    return strength if strength > LEAST_RATIO * pattern else 0.0


def _median(steps: Array, independent: float) -> tuple[float, float]:
    """(median, its standard error) of steps along an outline, a share of which is independent."""
    middle = float(np.median(steps))
    spread = 1.4826 * float(np.median(np.abs(steps - middle)))
    return middle, 1.25 * spread / np.sqrt(max(independent * len(steps), 1.0))
