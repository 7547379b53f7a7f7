"""Closed shapes in a photo, roughly: the one around a picked point, or all of them.

Thresholds at many levels, so that no single brightness decides. Knows no sizes; what is found is good to a few pixels.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from ..photo import Photo

Array = NDArray[np.float64]
Bytes = NDArray[np.uint8]

# Shapes are looked for on a picture of this size, px along the longer side.
_SEARCH_SIZE = 1200
_LEVEL_STEP = 5
# Shapes smaller than this, px along the diagonal of their box at full size, hold too few edge points.
LEAST_PX = 24.0
_MOST_SHAPES = 4000


@dataclass(frozen=True, eq=False)
class Shapes:
    """Closed contours, (k, 2) photo pixels each, and whether larger ones were cut by the frame."""

    contours: tuple[Array, ...]
    cut: bool


def shapes_seen(photo: Photo, near: tuple[float, float] | None = None) -> Shapes:
    """Outer contours of everything that is lighter or darker than what surrounds it.

    near : a photo pixel; only shapes of whose own tone it is are taken
    """
    import cv2

    pictures, factor = _pictures(photo)
    least = LEAST_PX / factor
    contours: list[Array] = []
    cut = False
    for picture in pictures:
        height, width = picture.shape
        if near is None:
            for level in range(_LEVEL_STEP, 255, _LEVEL_STEP):
                mask = (picture > level).astype(np.uint8)
                found, _ = cv2.findContours(mask, cv2.RETR_LIST, cv2.CHAIN_APPROX_NONE)
                for contour in found:
                    x, y, w, h = cv2.boundingRect(contour)
                    if np.hypot(w, h) < least or min(w, h) < least / 4:
                        continue
                    if x <= 1 or y <= 1 or x + w >= width - 1 or y + h >= height - 1:
                        cut = True
                    else:
                        contours.append(contour.reshape(-1, 2).astype(float))
        else:
            x, y = (round((v + 0.5) / factor - 0.5) for v in near)
            x, y = min(max(x, 0), width - 1), min(max(y, 0), height - 1)
            own = int(np.median(picture[max(y - 1, 0) : y + 2, max(x - 1, 0) : x + 2]))
            for level in range(_LEVEL_STEP, 255, _LEVEL_STEP):
                mask = (picture > level) if own > level else (picture <= level)
                contour = _component_contour(mask.astype(np.uint8), x, y)
                if contour is None:
                    continue
                bx, by, w, h = cv2.boundingRect(contour)
                if np.hypot(w, h) < least:
                    continue
                if bx <= 1 or by <= 1 or bx + w >= width - 1 or by + h >= height - 1:
                    cut = True
                else:
                    contours.append(contour.reshape(-1, 2).astype(float))
    contours.sort(key=lambda c: -len(c))
    return Shapes(tuple((c + 0.5) * factor - 0.5 for c in contours[:_MOST_SHAPES]), cut)


def _pictures(photo: Photo) -> tuple[list[Bytes], float]:
    """Brightness and, in colour, saturation, reduced; and photo pixels to one of theirs."""
    import cv2

    from ..measure import grey

    bright = grey(photo)
    factor = max(1.0, max(bright.shape) / _SEARCH_SIZE)
    size = (round(bright.shape[1] / factor), round(bright.shape[0] / factor))
    pictures = [bright]
    if photo.pixels.ndim == 3:
        pixels = photo.pixels if photo.pixels.dtype == np.uint8 else (photo.pixels >> 8).astype(np.uint8)
        pictures.append(np.asarray(pixels.max(axis=2) - pixels.min(axis=2), np.uint8))
    small = [p if factor == 1.0 else cv2.resize(p, size, interpolation=cv2.INTER_AREA) for p in pictures]
    return [np.asarray(cv2.medianBlur(p, 3), np.uint8) for p in small], factor


def _component_contour(mask: Bytes, x: int, y: int) -> NDArray[np.int32] | None:
    """Outer contour of the connected part of a mask that holds a pixel or one beside it."""
    import cv2

    part = mask[max(y - 1, 0) : y + 2, max(x - 1, 0) : x + 2]
    if not part.any():
        return None
    if not mask[y, x]:
        row, column = np.argwhere(part)[0]
        x, y = max(x - 1, 0) + int(column), max(y - 1, 0) + int(row)
    filled = mask.copy()
    cv2.floodFill(filled, None, (x, y), 2)  # type: ignore[call-overload]
    found, _ = cv2.findContours((filled == 2).astype(np.uint8), cv2.RETR_EXTERNAL, cv2.CHAIN_APPROX_NONE)
    return np.asarray(max(found, key=len), np.int32) if found else None


def quadrilateral(contour: Array) -> Array | None:
    """The quadrilateral whose sides a contour follows, (4, 2) px, or None.

    Corners that are rounded, or hidden under something, are where the longest sides would meet. Order: counter-
    clockwise as seen, the first the lower left in that turn in which the sides run most nearly along the picture.
    """
    import cv2

    # Pixel coordinates have y down: reversed here, so that counter-clockwise is as seen.
    hull = cv2.convexHull(contour.astype(np.float32)).reshape(-1, 2)
    area = abs(float(cv2.contourArea(contour.astype(np.float32))))
    around = float(cv2.arcLength(hull, True))
    polygon = cv2.approxPolyDP(hull, 0.012 * around, True).reshape(-1, 2).astype(float)
    if not 4 <= len(polygon) <= 8:
        return None
    if len(polygon) > 4:
        sides = np.linalg.norm(np.roll(polygon, -1, axis=0) - polygon, axis=1)
        longest = np.sort(np.argsort(-sides)[:4])
        if sides[longest].sum() < 0.75 * sides.sum():
            return None
        lines = []
        for index in longest:
            p, q = polygon[index], polygon[(index + 1) % len(polygon)]
            lines.append(np.cross([*p, 1.0], [*q, 1.0]))
        crossings = [np.cross(lines[i - 1], lines[i]) for i in range(4)]
        if min(abs(c[2]) for c in crossings) < 1e-9:
            return None
        polygon = np.array([c[:2] / c[2] for c in crossings])
    if not _convex(polygon):
        return None
    whole = abs(float(cv2.contourArea(polygon.astype(np.float32))))
    sides = np.linalg.norm(np.roll(polygon, -1, axis=0) - polygon, axis=1)
    if whole <= 0 or not 0.75 < area / whole < 1.1 or sides.min() < LEAST_PX / 2:
        return None
    return upright_order(polygon)


def _convex(polygon: Array) -> bool:
    edge = np.roll(polygon, -1, axis=0) - polygon
    following = np.roll(edge, -1, axis=0)
    turn = edge[:, 0] * following[:, 1] - edge[:, 1] * following[:, 0]
    return bool(np.all(turn > 0) or np.all(turn < 0))


def upright_order(corners: Array) -> Array:
    """Four corners as lower left, lower right, upper right, upper left, as nearly as they lie so in the picture."""
    x, y = corners.T
    # y is down: a positive sum runs clockwise as seen.
    if float(np.sum(x * np.roll(y, -1) - np.roll(x, -1) * y)) > 0:
        corners = corners[::-1]
    turns = [np.roll(corners, -k, axis=0) for k in range(4)]
    return max(turns, key=lambda c: float((c[0] + c[1] - c[2] - c[3])[1]) / _size(c))


def _size(corners: Array) -> float:
    return float(np.linalg.norm(corners[2] - corners[0]) + np.linalg.norm(corners[3] - corners[1]))
