"""The top face of a thick slice: labels without the walls that the camera sees beside and within it.

Knows how far a wall reaches from the plane that the reference gives; the place of an edge is for `edges`.
"""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import NDArray

from .face import MIN_SEPARATION, SHARP_PX, components, eroded, otsu, rim

# Pictures come as float32, places as float64.
Array = NDArray[Any]
Mask = NDArray[np.bool_]


def without_hidden_foot(solid: Mask, shift: Array, most: float) -> Mask:
    """The top face of an upright slice from the mask of all that is seen of it.

    solid : (h, w) top face and walls
    shift : (h, w, 2) from every point of the face to the point square below it, pixels; `most` its largest length

    The picture of the slice is its face swept along the shift; what stays inside when eroded along
    it is the face (a closing along the same line, exact but for gaps that the walls fill).
    """
    import cv2

    height, width = solid.shape
    x, y = np.meshgrid(np.arange(width, dtype=np.float32), np.arange(height, dtype=np.float32))
    face = solid
    steps = int(np.clip(np.ceil(most / 2), 1, 6))
    for part in np.arange(1, steps + 1) / steps:
        seen = cv2.remap(
            solid.astype(np.uint8),
            x + np.float32(part) * shift[..., 0],
            y + np.float32(part) * shift[..., 1],
            cv2.INTER_NEAREST,
        )
        face = face & seen.astype(bool)
    return face


def without_seen_walls(face: Mask, solid: Mask, tone: Array, depth: float) -> Mask:
    """The face without what is left of walls in its re-entrant corners, where these look unlike the face.

    face : (h, w) as `without_hidden_foot` leaves it; solid : (h, w) face and walls
    tone : (h, w) light; depth : pixels that a wall may reach into the mask

    The walls that were found teach their tone, the middle of the face teaches its own; what lies against a
    found wall and looks like one is one. Left alone where the two tones are not clearly apart.
    """
    import cv2

    ring = np.ones((3, 3), np.uint8)
    walls = eroded(solid & ~face)
    middle = eroded(face, 3)
    if walls.sum() < 50 or middle.sum() < 50:
        return face
    level = np.log(np.maximum(tone, 1e-4))
    dark, light = float(np.median(level[walls])), float(np.median(level[middle]))
    spread = 1.4826 * np.sqrt(
        0.5 * (np.median(np.abs(level[walls] - dark)) ** 2 + np.median(np.abs(level[middle] - light)) ** 2)
    )
    if abs(light - dark) < MIN_SEPARATION * spread:
        return face
    alike = face & (np.abs(level - dark) < np.abs(level - light))
    # Re-entrant corners are where a disc of the wall's breadth does not reach from outside.
    size = 2 * int(np.ceil(depth)) + 1
    disc = cv2.getStructuringElement(cv2.MORPH_ELLIPSE, (size, size))
    padded = np.pad(solid, size).astype(np.uint8)
    pocket = cv2.morphologyEx(padded, cv2.MORPH_CLOSE, disc) - padded
    near = cv2.dilate(pocket, disc)[size:-size, size:-size].astype(bool)
    labels, areas = components(alike & near)
    beside = np.unique(labels[cv2.dilate((solid & ~face).astype(np.uint8), ring).astype(bool) & alike])
    wall = np.zeros(len(areas), bool)
    # A re-entrant corner hides no more than a wall's breadth squared; more is a dark part of the face.
    wall[beside] = (areas[beside] > 8) & (areas[beside] < depth**2)
    wall[0] = False
    face = face & ~wall[labels]
    # A bore narrower than it is deep shows nothing but its wall: a dark round in the face, as dark as the walls are.
    labels, areas = components(alike & middle)
    for index in np.flatnonzero(areas >= 20):
        place = labels == index
        as_dark = abs(float(np.median(level[place])) - dark) < 0.25 * abs(light - dark)
        # Streaks and rings are long; scratches and pits of rust are ragged.
        if index and as_dark and _roundness(place) > 0.85:
            face &= ~place
    return face


def _roundness(place: Mask) -> float:
    """The part that a region and the ellipse of its moments share: 1 for an ellipse, less for what is ragged."""
    import cv2

    moments = cv2.moments(place.astype(np.uint8), binaryImage=True)
    x, y = moments["m10"] / moments["m00"], moments["m01"] / moments["m00"]
    spread = np.array([[moments["mu20"], moments["mu11"]], [moments["mu11"], moments["mu02"]]]) / moments["m00"]
    # A pixel is a square and no point; without its own spread a row of pixels would have none.
    inverse = np.linalg.inv(spread + np.eye(2) / 12.0)
    rows, columns = np.mgrid[0 : place.shape[0], 0 : place.shape[1]]
    dx, dy = columns - x, rows - y
    ellipse = inverse[0, 0] * dx * dx + 2 * inverse[0, 1] * dx * dy + inverse[1, 1] * dy * dy <= 4.0
    return float((place & ellipse).sum() / (place | ellipse).sum())


def sharp_patches(face: Mask, tone: Array, least: float) -> list[Array]:
    """(x, y) of compact patches within the face that are darker and sharply bounded, `least` pixels across.

    A bore whose ground lies in shadow looks like that; stains, knots and rust run out softly or are long.
    """
    import cv2

    ring = np.ones((3, 3), np.uint8)
    inner = eroded(face, 2)
    if inner.sum() < 200:
        return []
    usual = float(np.median(tone[inner]))
    smooth = cv2.GaussianBlur(tone, (0, 0), 0.8)
    dark = inner & (smooth < 0.75 * usual)
    labels, areas = components(dark)
    slope = np.hypot(cv2.Sobel(smooth, cv2.CV_32F, 1, 0, scale=1 / 8), cv2.Sobel(smooth, cv2.CV_32F, 0, 1, scale=1 / 8))
    crest = cv2.dilate(slope, ring)
    found = []
    for index in np.flatnonzero(areas >= 0.5 * least**2):
        if index == 0:
            continue
        place = labels == index
        y, x = np.nonzero(place)
        _, (breadth, length), _ = cv2.minAreaRect(np.column_stack([x, y]).astype(np.float32))
        if min(breadth, length) < max(least, 0.35 * max(breadth, length)):
            continue
        border = rim(place)
        step = usual - float(np.median(tone[place]))
        if np.mean(crest[border] * SHARP_PX > 0.5 * step) > 0.8:
            found.append(np.array([x.mean(), y.mean()]))
    return found


def without_walls(face: Mask, background: Mask, tone: Array) -> Mask:
    """The face without the walls of a thick slice that the camera sees below its edges.

    face : (h, w) everything that is not background
    tone : (h, w) light

    A wall shows as a second tone that lies between face and background along its length. A
    dark ring of timber or a patch of rust has a second tone too, but borders the face nearly all
    round; so only regions with more than a quarter of their border on the background are taken
    away (a strip has half of it there).
    """
    import cv2

    if face.sum() < 100:
        return face
    level, separation = otsu(tone[face])
    if separation < MIN_SEPARATION:
        return face
    dark, light = face & (tone <= level), face & (tone > level)
    major, minor = (dark, light) if dark.sum() >= light.sum() else (light, dark)
    labels, areas = components(minor)
    ring = np.ones((3, 3), np.uint8)
    to_background = cv2.dilate((background & ~face).astype(np.uint8), ring).astype(bool) & minor
    to_face = cv2.dilate(major.astype(np.uint8), ring).astype(bool) & minor
    count = len(areas)
    outside = np.bincount(labels[to_background], minlength=count)
    inside = np.bincount(labels[to_face], minlength=count)
    wall = outside > 0.25 * np.maximum(outside + inside, 1)
    wall[0] = False
    # Mixed pixels at every edge are a second tone one pixel wide; they stay where they are.
    opened = cv2.morphologyEx((wall[labels]).astype(np.uint8), cv2.MORPH_OPEN, ring).astype(bool)
    thick = np.zeros(count, bool)
    thick[np.unique(labels[opened])] = True
    thick[0] = False
    return face & ~(thick & wall)[labels]
