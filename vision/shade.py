"""A face among its shadows: labels on a reduced picture where no one level of light parts them.

Knows that a shadow's border is slow or follows its caster, and that an edge does neither.
"""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import NDArray

from .face import SHARP_PX, SHARP_SHARE, components, eroded, filled, rim, without_specks

# Pictures come as float32, places as float64.
Array = NDArray[Any]
Mask = NDArray[np.bool_]

# Breadth of a penumbra in which a region may end, reduced pixels: two hundredths of the picture (stated assumption).
PENUMBRA_PX = 20
# Likeness (common part over whole) of what a shadow should cover and of what is dim, for it to be one (stated
# assumption: soft ends and directions in steps of 15 degrees cost it a third).
SHADOW_LIKENESS = 0.6
# Tint of a shadow that a room's other light gives it, and how far it reaches in heights of what casts it: a lamp at 27
# degrees above the table (stated assumptions).
SHADOW_TINT, SHADOW_REACH = 0.2, 2.0


def flooded(tone: NDArray[np.float32], distance: Array, searched: Mask) -> tuple[Mask, float]:
    """(face, separation) where a shadow is as dark as parts of the face, so that no one level parts them.

    tone : (h, w, c) light over that of the background
    distance : (h, w) distance from the background, 0 on it

    The background is what can be reached from clean background without crossing a steep slope: a shadow's
    border is a slow slope and is crossed, the edge of the face is not, even where shadow lies behind it. Of
    several limits the one is taken at which the region changes least from one to the next (maximally stable
    regions; Matas et al. 2002); the outline then settles on the crest between both sides.
    separation : step across the outline that nine tenths of it exceed, over the scatter of the background
    """
    import cv2

    slope = _slope(tone)
    inside = eroded(searched, 3)
    clean = inside & (distance < 0.1 * np.percentile(distance[inside], 99))
    if clean.sum() < 100:
        return np.zeros_like(searched), 0.0
    scatter = 1.4826 * float(np.median(np.abs(distance[clean])))
    quiet = float(np.median(slope[clean]))
    ring = np.ones((3, 3), np.uint8)
    crest = np.asarray(cv2.dilate(slope, ring), np.float32)
    near = np.asarray(cv2.dilate(crest, ring), np.float32)
    cores: list[Mask] = []
    borders: list[float] = []
    # From just above the grain of the paper to half of the steepest edges.
    # The edges of a small face are a small part of the picture: its couple of hundred steepest pixels.
    few = min(200, int(inside.sum()))
    steepest = float(np.partition(slope[inside], -few)[-few])
    limits = np.geomspace(3.0 * quiet, max(0.5 * steepest, 6.0 * quiet), 10)
    for limit in limits:
        labels, _ = components(inside & (slope < limit))
        reached = np.bincount(labels[clean], minlength=labels.max() + 1)
        reached[0] = 0
        ground = (reached > 0.02 * clean.sum())[labels]
        core = eroded(inside & ~ground)
        core = without_specks(core, 64)
        border = rim(core)
        cores.append(core)
        borders.append(float(np.percentile(near[border], 15)) if border.any() else 0.0)
    areas = np.array([float(core.sum()) for core in cores])
    steepness = np.array(borders[:-1])
    change = np.abs(np.diff(areas)) / np.maximum(areas[:-1], 1.0)
    # A crossing that had stopped at a shadow would leave a border barely steeper than the limit itself.
    stable = (steepness > 2.0 * limits[:-1]) & (change < 0.1)
    if not stable.any():
        return np.zeros_like(searched), 0.0
    # Around a small face a soft shadow can be as stable as the face; the face has a far steeper border.
    stable &= steepness > 0.6 * float(steepness[stable].max())
    core = cores[int(np.argmin(np.where(stable, change, np.inf)))]
    face, step = _on_the_crest(core, tone, crest, near, inside)
    return face & searched, 3.0 * step / max(scatter, 1e-6)


def _on_the_crest(
    core: Mask, tone: NDArray[np.float32], crest: NDArray[np.float32], near: NDArray[np.float32], inside: Mask
) -> tuple[Mask, float]:
    """(face, step) of a core grown or cut back to the crest of the slope around it.

    crest : (h, w) steepest slope within a pixel; near : within two
    step : steepness of the border that nine tenths of it exceed
    """
    import cv2

    # The slope itself is a band of a few pixels; both sides meet on its crest.
    wide = cv2.dilate(core.astype(np.uint8), cv2.getStructuringElement(cv2.MORPH_ELLIPSE, (7, 7))).astype(bool)
    # Where a far steeper edge runs a little within, the region ends in a penumbra: the crest is looked for inwards too.
    within = cv2.getStructuringElement(cv2.MORPH_ELLIPSE, (2 * PENUMBRA_PX + 1, 2 * PENUMBRA_PX + 1))
    steepest_near = cv2.dilate(np.where(core, crest, 0.0).astype(np.float32), within)
    penumbra = rim(core) & (near < steepest_near / 3.0)
    narrow = eroded(core) & ~cv2.dilate(penumbra.astype(np.uint8), within).astype(bool)
    face = settled(tone, narrow, ~wide)
    border = rim(face) & inside
    return face, float(np.percentile(near[border], 10)) if border.any() else 0.0


def _slope(tone: NDArray[np.float32]) -> NDArray[np.float32]:
    """(h, w) steepest slope of any channel of (h, w, c) light, a pixel."""
    import cv2

    smooth = cv2.GaussianBlur(tone, (0, 0), 1.0).reshape(*tone.shape[:2], -1)
    slope = np.zeros(tone.shape[:2], np.float32)
    for channel in np.moveaxis(smooth, -1, 0):
        channel = np.ascontiguousarray(channel)
        gx, gy = cv2.Sobel(channel, cv2.CV_32F, 1, 0, scale=1 / 8), cv2.Sobel(channel, cv2.CV_32F, 0, 1, scale=1 / 8)
        np.maximum(slope, cv2.magnitude(gx, gy), out=slope)
    return slope


def settled(tone: NDArray[np.float32], face: Mask, background: Mask) -> Mask:
    """The face grown until it meets the background, on the crest of the slope between both (watershed; Meyer 1994).

    tone : (h, w, c) light; face, background : (h, w) what surely belongs to either
    """
    import cv2

    smooth = cv2.GaussianBlur(tone, (0, 0), 1.0).reshape(*face.shape, -1)
    markers = np.zeros(face.shape, np.int32)
    markers[background] = 1
    markers[face] = 2
    encoded = np.clip(smooth / max(float(np.percentile(smooth, 99.5)), 1e-6) * 255, 0, 255).astype(np.uint8)
    return cv2.watershed(np.ascontiguousarray(np.broadcast_to(encoded, (*face.shape, 3))), markers) == 2


def is_cast_shadow(dark: Mask, rest: Mask, tone: NDArray[np.float32], furthest: float) -> bool:
    """Whether the dimmer stretches `rest` beside a dark region are the shadow that it casts.

    tone : (h, w, c) light over that of the background
    furthest : pixels that a shadow may reach beyond what casts it

    A lamp's shadow takes light from the ground and no colour; it is the region swept along one direction, and lies to
    one side of every part of it. The lighter half of a face of two tones, or a bright face between its dark walls, is
    not and does not.
    """
    import cv2

    shaded = np.median(tone[rest].reshape(int(rest.sum()), -1), axis=0) if rest.any() else np.zeros(1)
    if shaded.min() < (1.0 - SHADOW_TINT) * shaded.max():
        return False
    factor = max(1, max(dark.shape) // 250)
    size = (dark.shape[1] // factor, dark.shape[0] // factor)
    body, cast = (cv2.resize(m.astype(np.uint8) * 255, size, interpolation=cv2.INTER_AREA) > 127 for m in (dark, rest))
    if not body.any() or cast.sum() < 10:
        return False
    off = cv2.distanceTransform((~body).astype(np.uint8), cv2.DIST_L2, 3)
    longest = float(np.percentile(off[cast], 95))
    if longest * factor > furthest:
        return False
    best = 0.0
    for angle in np.arange(0.0, 360.0, 15.0):
        swept = body
        for step in np.arange(1, int(np.ceil(longest)) + 1):
            x, y = step * np.cos(np.radians(angle)), step * np.sin(np.radians(angle))
            moved = cv2.warpAffine(
                body.astype(np.uint8), np.array([[1, 0, x], [0, 1, y]]), size, flags=cv2.INTER_NEAREST
            )
            swept = swept | moved.astype(bool)
        swept &= ~body
        best = max(best, float((swept & cast).sum() / max((swept | cast).sum(), 1)))
    return best > SHADOW_LIKENESS


def shaded_ground(solid: Mask, tone: NDArray[np.float32], least: float) -> Mask:
    """The ground that shows within bores and cells of a mask, where shade keeps it from being told by its tone.

    solid : (h, w) face, walls, and ground in shade
    tone : (h, w, c) light over that of the background; least : pixels of the smallest patch

    A deep bore shades its own ground evenly or slowly, and has a sharp border all round. Such a patch is ground
    where its light is nearer to the background's than to that of what surrounds it, as ratios of light. Patches of
    the face (knots, rings, rust, streaks) are about as far from the background as the face beside them.
    """
    import cv2

    log = np.log(np.maximum(tone, 0.02)).reshape(*solid.shape, -1)
    slope = _slope(log)
    crest = cv2.dilate(slope, np.ones((5, 5), np.uint8))
    inner = eroded(solid, 2)
    disc = cv2.getStructuringElement(cv2.MORPH_ELLIPSE, (7, 7))
    wide = cv2.getStructuringElement(cv2.MORPH_ELLIPSE, (9, 9))
    ground = np.zeros_like(solid)
    # From the slowest shade to an edge of a fifth in two pixels.
    for limit in np.geomspace(0.01, 0.1, 5):
        _, labels, stats, _ = cv2.connectedComponentsWithStats(
            (inner & (slope < limit)).astype(np.uint8), connectivity=8
        )
        for index in np.flatnonzero(stats[:, cv2.CC_STAT_AREA] >= least):
            if index == 0:
                continue
            x, y, width, height = stats[index, :4]
            here = np.s_[max(y - 9, 0) : y + height + 9, max(x - 9, 0) : x + width + 9]
            place = labels[here] == index
            grown = cv2.dilate(place.astype(np.uint8), disc).astype(bool)
            around = cv2.dilate(filled(grown).astype(np.uint8), wide).astype(bool) & ~filled(grown)
            if not around.any() or np.mean(solid[here][around]) < 0.9:
                continue
            own, beside = np.median(log[here][place], axis=0), np.median(log[here][around], axis=0)
            if np.abs(own).max() > 0.5 * np.abs(beside).max():
                continue
            border = rim(grown)
            if np.mean(crest[here][border] * SHARP_PX > 0.5 * np.abs(own - beside).max()) > SHARP_SHARE:
                ground[here] |= grown
    return ground
