"""Whether a face taken to lie in the plane of the reference stands above it: its walls would show beside it.

Knows where an upright wall would end for a height; measures no height to rely on.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence

import numpy as np
from numpy.typing import NDArray

from .edges import normal_profiles
from .light import Light
from .trace import Trace

Array = NDArray[np.float64]
Mask = NDArray[np.bool_]

# A wall's tone differs from its face's, or from the ground's, by this part of the outline's contrast, or is not told
# (stated assumption: a fiftieth is a few times what a good picture resolves).
LEAST_STEP = 0.02
# Standard errors by which a step must stand out of the surface's own pattern, and times over the sides without walls.
LEAST_ERRORS, LEAST_RATIO = 5.0, 3.0
# Heights tried, mm, each a twelfth above the one before: a wall's end is found within a twelfth of its breadth.
_HEIGHTS = np.geomspace(2.0, 100.0, 50)
_SECTORS, _LEAST_POINTS = 8, 20
# Points of an outline closer than this share the pattern of the surface (stated assumption), in points.
_TOGETHER = 8
# Px between samples across the outline.
_STEP = 0.5


def standing_height(
    traces: Sequence[Trace], light: Light, blur: float, rise: Callable[[Array, float], Array]
) -> float | None:
    """About how high above the reference plane a face stands, mm; None where no walls show.

    rise : (n, 2) photo pixels of points of the plane, mm -> (n, 2) photo pixels of the points square above them

    What is traced around a slice is its top edge, and where the camera sees its walls that or its foot. So where
    walls show, the light steps along lines a wall's breadth inwards or outwards, by one amount all along a side; a
    surface's own pattern steps by chance, and a rim around the face on every side.
    """
    points = np.concatenate([t.points for t in traces])
    normals = np.concatenate([t.normals for t in traces])
    contrast = np.concatenate([np.abs(t.outer - t.inner) for t in traces])
    good = np.concatenate([t.located for t in traces])
    points, normals, contrast = points[good], normals[good], contrast[good]
    half = max(2.0, 1.5 * blur)
    breadths = {float(h): np.sum((points - rise(points, float(h))) * normals, axis=1) for h in _HEIGHTS}
    deepest = max((float(np.abs(b).max(initial=0.0)) for b in breadths.values()), default=0.0) + 2.0 * half
    depths = np.arange(0.0, deepest, _STEP)
    best, found = 0.0, None
    for way in (-1.0, 1.0):
        profiles = normal_profiles(light, points, way * normals, depths) / contrast[:, None]
        room = _room(traces, points, way * normals, depths, inside=way < 0)
        for height, breadth in breadths.items():
            steps = _steps(profiles, np.abs(breadth), half)
            fits = np.abs(breadth) + 2.0 * half < room
            strength = _strength(steps, breadth * fits, normals, least=2.0 * half + 1.0)
            if strength > best:
                best, found = strength, height
    return found


def _room(traces: Sequence[Trace], points: Array, ways: Array, depths: Array, *, inside: bool) -> Array:
    """(n,) px that one can go from the outline's (n, 2) points their way without meeting it again."""
    import cv2

    loops = [t.points for t in traces]
    low = np.min([loop.min(axis=0) for loop in loops], axis=0) - 2.0
    size = np.ceil(np.max([loop.max(axis=0) for loop in loops], axis=0) - low).astype(int) + 3
    face = np.zeros((size[1], size[0]), np.uint8)
    cv2.fillPoly(face, [np.rint(loop - low).astype(np.int32) for loop in loops], 1)
    far = depths >= 3.0
    places = np.rint(points[:, None] + depths[far, None] * ways[:, None] - low).astype(int)
    within = np.all((places >= 0) & (places < size), axis=2)
    x, y = np.clip(places, 0, size - 1).transpose(2, 0, 1)
    wrong = ((face[y, x] > 0) & within) != inside
    return np.where(wrong.any(axis=1), depths[far][wrong.argmax(axis=1)], depths[-1] + 1.0)


def _steps(profiles: Array, depth: Array, half: float) -> Array:
    """(n,) mean light over `half` px further in than (n,) depths, less that over as much before them."""
    window = int(np.ceil(half / _STEP))
    sums = np.cumsum(np.pad(profiles, ((0, 0), (1, 0))), axis=1)
    at = np.clip(np.rint(depth / _STEP).astype(int), window, sums.shape[1] - 1 - window)
    rows = np.arange(len(sums))
    return (sums[rows, at + window] - 2.0 * sums[rows, at] + sums[rows, at - window]) / window


def _strength(steps: Array, breadth: Array, normals: Array, least: float) -> float:
    """The mean step where walls would show, in parts of the outline's contrast; 0 where none is proven.

    breadth : (n,) px of wall that would show, negative on the sides that face away
    """
    sector = np.floor((np.arctan2(normals[:, 1], normals[:, 0]) / (2 * np.pi) % 1.0) * _SECTORS).astype(int)

    def sides(chosen: Mask) -> list[tuple[float, float, int]]:
        parts = [steps[chosen & (sector == index)] for index in range(_SECTORS)]
        return [(*_median(part), len(part)) for part in parts if len(part) >= _LEAST_POINTS]

    seen, hidden = sides(breadth > least), sides(breadth < -least)
    count = sum(n for *_, n in seen)
    told = [(abs(middle), n) for middle, error, n in seen if abs(middle) > max(LEAST_STEP, LEAST_ERRORS * error)]
    if not told or sum(n for _, n in told) <= 0.5 * count:
        return 0.0
    strength = sum(step * n for step, n in told) / count
    pattern = max((abs(middle) for middle, *_ in hidden), default=0.0)
    return strength if strength > LEAST_RATIO * pattern else 0.0


def _median(steps: Array) -> tuple[float, float]:
    """(median, its standard error) of steps along an outline, of which neighbours share their surface."""
    middle = float(np.median(steps))
    spread = 1.4826 * float(np.median(np.abs(steps - middle)))
    return middle, 1.25 * spread / np.sqrt(max(len(steps) / _TOGETHER, 1.0))
