"""Which pixels are the face: labels on a reduced picture, never the place of an edge.

Knows light relative to a smooth background and regions with holes. Refuses when the picture does
not tell face from background, or does not tell which of several regions is the face.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

from ..props.errors import Refusal

if TYPE_CHECKING:
    from shapely import Polygon

# Pictures come as float32, places as float64.
Array = NDArray[Any]
Mask = NDArray[np.bool_]

# Two classes this many pooled deviations apart share less than 2.3 % of their pixels (Gaussian tails at 2).
MIN_SEPARATION = 4.0
# Below this many a person is told.
CLEAR_SEPARATION = 6.0
# Light of a joint or a dark room over that of white paper (stated assumption).
BLACK_GAP = 0.05
# How much lighter than its median a joint may be in places (stated assumption).
GAP_SPREAD = 2.5
# An edge rises from its background within this many pixels of the labels; a shadow takes many more. A part of
# the outline may run along a shadow or a texture all the same.
SHARP_PX, SHARP_SHARE = 3.0, 0.85
# Breadth of a penumbra in which a region may end, reduced pixels: two hundredths of the picture (stated assumption).
PENUMBRA_PX = 20
# Nine tenths of a hole's middle are nearer to the background than this part of the face's distance: a bright background
# may lie in shadow there, a dark one can look no brighter than it is (stated assumption).
CLEAR_BRIGHT_HOLE, CLEAR_DARK_HOLE = 0.33, 0.1


@dataclass(frozen=True)
class Region:
    """One connected part of a face as roughly traced, photo pixels.

    shell : (n, 2), counter-clockwise as seen with y up; holes : each (m, 2), the other way round
    """

    shell: Array
    holes: tuple[Array, ...]


@dataclass(frozen=True)
class Labels:
    """What the reduced picture shows.

    face : (h, w) pixels of the face
    factor : photo pixels to a reduced pixel
    separation : distance of face and background in pooled deviations
    """

    face: Mask
    factor: int
    separation: float


def smooth_background(places: Array, values: Array, shape: tuple[int, int]) -> NDArray[np.float32]:
    """(h, w, c) quadratic surface through (k, c) values at (k, 2) places of a reduced picture.

    Least squares, iteratively reweighted by Tukey's biweight, so that a few places that are soiled
    or in shadow do not bend it.
    """
    height, width = shape

    def basis(x: Array, y: Array) -> Array:
        u, v = x / width - 0.5, y / height - 0.5
        return np.stack([np.ones_like(u), u, v, u * u, u * v, v * v], axis=-1)

    design = basis(places[:, 0], places[:, 1])
    if len(places) < 12:
        return np.broadcast_to(np.median(values, axis=0).astype(np.float32), (height, width, values.shape[1]))
    # Started from what most places show, so that a face along a part of them has no say.
    off = np.abs(values - np.median(values, axis=0)).max(axis=1)
    weight = (off <= 4.0 * max(float(np.median(off)), 1e-4)).astype(float)
    coefficients = np.zeros((6, values.shape[1]))
    for _ in range(8):
        root = np.sqrt(weight)[:, None]
        coefficients = np.linalg.lstsq(root * design, root * values, rcond=None)[0]
        off = np.abs(values - design @ coefficients).max(axis=1)
        limit = 6.0 * max(float(np.median(off)), 1e-4)
        weight = np.where(off < limit, (1 - (off / limit) ** 2) ** 2, 0.0)
    v = (np.arange(height, dtype=np.float32) / height - 0.5)[:, None]
    u = (np.arange(width, dtype=np.float32) / width - 0.5)[None, :]
    surface = np.empty((values.shape[1], height, width), np.float32)
    for plane, c in zip(surface, coefficients.T.astype(np.float32), strict=True):
        # Horner in u: what multiplies u depends on v alone.
        plane[:] = (c[3] * u + (c[1] + c[4] * v)) * u + (c[0] + c[2] * v + c[5] * v * v)
    return np.moveaxis(surface, 0, -1)


def otsu(values: Array, bins: int = 256) -> tuple[float, float]:
    """(threshold, separation) of a sample in two classes by Otsu's criterion (1979).

    separation : distance of the classes' means over their pooled standard deviation
    """
    # The ends of the range need no more than a few ten thousand of the values.
    low, high = np.percentile(values[:: max(1, len(values) // 50_000)], [0.1, 99.9])
    if not high > low:
        return float(low), 0.0
    counts, edges = np.histogram(np.clip(values, low, high), bins=bins, range=(low, high))
    centres = 0.5 * (edges[1:] + edges[:-1])
    weight = np.cumsum(counts).astype(float)
    total = weight[-1]
    first, second = np.cumsum(counts * centres), np.cumsum(counts * centres**2)
    w1, w2 = weight[:-1], total - weight[:-1]
    with np.errstate(divide="ignore", invalid="ignore"):
        m1, m2 = first[:-1] / w1, (first[-1] - first[:-1]) / w2
        between = np.nan_to_num(w1 * w2 * (m1 - m2) ** 2)
    # Between well separated classes the criterion is flat; the middle of the flat is as far from both as can be.
    best = np.flatnonzero(between >= between.max() * (1 - 1e-9))
    index = int(best[len(best) // 2])
    v1 = second[index] / w1[index] - m1[index] ** 2
    v2 = (second[-1] - second[index]) / w2[index] - m2[index] ** 2
    spread = np.sqrt(max(0.5 * (v1 + v2), 1e-12))
    return float(edges[index + 1]), float((m2[index] - m1[index]) / spread)


def sharp_level(distance: Array, searched: Mask, least: int) -> tuple[float, float]:
    """(level, separation) at which a face parts from a smooth background and its shadows.

    distance : (h, w) distance from the background, 0 on it
    least : pixels of the smallest region that counts

    A face begins with an edge: the distance climbs to any level below its own within a pixel or two. A
    shadow climbs slowly. So the lowest level is taken whose outline is sharp nearly all round: the distance
    falls to nothing within SHARP_PX of it. Unlike a two-class threshold this takes neither a shadow for the
    face nor the dark walls of a bright face for the whole.
    separation : distance of the medians above and below the level over the pooled scatter of both
    """
    import cv2

    small = np.where(searched, distance, 0.0).astype(np.float32)[::2, ::2]
    inside = cv2.erode(searched.astype(np.uint8), np.ones((5, 5), np.uint8)).astype(bool)[::2, ::2]
    values = small[inside]
    thin = values[:: max(1, len(values) // 50_000)]
    high = float(np.percentile(thin, 99.5))
    # The scatter of the background: its lower half mirrored, since faces and shadows only add above.
    low = thin[thin <= np.median(thin)] if np.mean(thin < 0.5 * high) > 0.5 else thin[thin < 0.2 * high]
    scatter = float(np.percentile(low, 95)) if len(low) else 0.0
    if not high > 4.0 * scatter:
        return high, 0.0
    slope = np.hypot(cv2.Sobel(small, cv2.CV_32F, 1, 0, scale=1 / 8), cv2.Sobel(small, cv2.CV_32F, 0, 1, scale=1 / 8))
    levels = np.geomspace(max(2.0 * scatter, 0.02 * high), 0.7 * high, 14)
    shares = []
    for level in levels:
        labels, areas = components((small > level) & inside)
        areas[0] = 0
        mask = (areas * 4 >= least)[labels]
        border = mask & ~cv2.erode(mask.astype(np.uint8), np.ones((3, 3), np.uint8)).astype(bool) & inside
        shares.append(float(np.mean(slope[border] * SHARP_PX > level)) if border.sum() >= 20 else 0.0)
    if max(shares) < SHARP_SHARE:
        return high, 0.0
    level = float(levels[int(np.argmax(np.array(shares) >= 0.95 * max(shares)))])
    below = thin[thin <= level]
    core = cv2.erode(((small > level) & inside).astype(np.uint8), np.ones((3, 3), np.uint8)).astype(bool)
    above = small[core] if core.sum() > 50 else thin[thin > level]
    # A face whose own grain reaches down to the background is cut up by any level: its lower half counts, from the
    # tenth percentile as of a normal distribution; mixed pixels at its edge do not.
    grain = (float(np.median(above)) - float(np.percentile(above, 10))) / 1.2816
    noise = 1.4826 * float(np.median(np.abs(below - np.median(below))))
    apart = float(np.median(above) - np.median(below))
    # The lowest level lies in the foot of the edge, where the scatter of the background frays it; nearer to the middle
    # of the edge the outline is the same, and smooth.
    level = max(level, 0.4 * float(np.percentile(above, 25)))
    return level, apart / max(float(np.hypot(grain, noise)) / np.sqrt(2.0), 1e-6)


def flooded(tone: NDArray[np.float32], distance: Array, searched: Mask) -> tuple[Mask, float]:
    """(face, separation) where a shadow is as dark as parts of the face, so that no one level parts them.

    tone : (h, w, c) light over that of the background
    distance : (h, w) distance from the background, 0 on it

    The background is what can be reached from clean background without crossing a steep slope: a shadow's
    border is a slow slope and is crossed, the edge of the face is not, even where shadow lies behind it. Of
    several limits at which the region changes little to the next (stable regions; Matas et al. 2002) the one with the
    steepest border is taken; the outline then settles on the crest between both sides (watershed; Meyer 1994).
    separation : step across the outline that nine tenths of it exceed, over the scatter of the background
    """
    import cv2

    smooth = cv2.GaussianBlur(tone, (0, 0), 1.0).reshape(*distance.shape, -1)
    slope = np.zeros(distance.shape, np.float32)
    for channel in np.moveaxis(smooth, -1, 0):
        channel = np.ascontiguousarray(channel)
        gx, gy = cv2.Sobel(channel, cv2.CV_32F, 1, 0, scale=1 / 8), cv2.Sobel(channel, cv2.CV_32F, 0, 1, scale=1 / 8)
        np.maximum(slope, cv2.magnitude(gx, gy), out=slope)
    inside = cv2.erode(searched.astype(np.uint8), np.ones((7, 7), np.uint8)).astype(bool)
    clean = inside & (distance < 0.1 * np.percentile(distance[inside], 99))
    if clean.sum() < 100:
        return np.zeros_like(searched), 0.0
    scatter = 1.4826 * float(np.median(np.abs(distance[clean])))
    quiet = float(np.median(slope[clean]))
    ring = np.ones((3, 3), np.uint8)
    crest = cv2.dilate(slope, ring)
    cores: list[Mask] = []
    steepness: list[float] = []
    # From just above the grain of the paper to half of the steepest edges.
    # The edges of a small face are a small part of the picture: its couple of hundred steepest pixels.
    steepest = float(np.partition(slope[inside], -200)[-200])
    limits = np.geomspace(3.0 * quiet, max(0.5 * steepest, 6.0 * quiet), 10)
    for limit in limits:
        labels, _ = components(inside & (slope < limit))
        reached = np.bincount(labels[clean], minlength=labels.max() + 1)
        reached[0] = 0
        ground = (reached > 0.02 * clean.sum())[labels]
        core = cv2.erode((inside & ~ground).astype(np.uint8), ring).astype(bool)
        core = without_specks(core, 64)
        border = core & ~cv2.erode(core.astype(np.uint8), ring).astype(bool)
        cores.append(core)
        steepness.append(float(np.percentile(cv2.dilate(crest, ring)[border], 15)) if border.any() else 0.0)
    areas = np.array([float(core.sum()) for core in cores])
    # A crossing that had stopped at a shadow would leave a border barely steeper than the limit itself.
    steep = np.array(steepness[:-1]) > 2.0 * limits[:-1]
    stable = steep & (np.abs(np.diff(areas)) < 0.1 * np.maximum(areas[:-1], 1.0))
    if not stable.any():
        return np.zeros_like(searched), 0.0
    best = cores[int(np.argmax(np.where(stable, steepness[:-1], 0.0)))]
    border = best & ~cv2.erode(best.astype(np.uint8), ring).astype(bool)
    # The slope itself is a band of a few pixels; both sides meet on its crest.
    wide = cv2.dilate(best.astype(np.uint8), cv2.getStructuringElement(cv2.MORPH_ELLIPSE, (7, 7))).astype(bool)
    narrow = cv2.erode(best.astype(np.uint8), ring).astype(bool)
    # Where a far steeper edge runs a little within, the region ends in a penumbra: the crest is looked for inwards too.
    within = cv2.getStructuringElement(cv2.MORPH_ELLIPSE, (2 * PENUMBRA_PX + 1, 2 * PENUMBRA_PX + 1))
    steepest_near = cv2.dilate(np.where(best, crest, 0.0).astype(np.float32), within)
    penumbra = border & (cv2.dilate(crest, ring) < steepest_near / 3.0)
    narrow &= ~cv2.dilate(penumbra.astype(np.uint8), within).astype(bool)
    markers = np.zeros(distance.shape, np.int32)
    markers[~wide] = 1
    markers[narrow] = 2
    encoded = np.clip(smooth / max(float(np.percentile(smooth, 99.5)), 1e-6) * 255, 0, 255).astype(np.uint8)
    face = cv2.watershed(np.ascontiguousarray(np.broadcast_to(encoded, (*distance.shape, 3))), markers) == 2
    face &= searched
    border = face & ~cv2.erode(face.astype(np.uint8), ring).astype(bool) & inside
    quality = float(np.percentile(cv2.dilate(crest, ring)[border], 10)) if border.any() else 0.0
    return face, 3.0 * quality / max(scatter, 1e-6)


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
    slope = np.zeros(solid.shape, np.float32)
    for channel in np.moveaxis(cv2.GaussianBlur(log, (0, 0), 1.0).reshape(log.shape), -1, 0):
        channel = np.ascontiguousarray(channel)
        gx, gy = cv2.Sobel(channel, cv2.CV_32F, 1, 0, scale=1 / 8), cv2.Sobel(channel, cv2.CV_32F, 0, 1, scale=1 / 8)
        np.maximum(slope, cv2.magnitude(gx, gy), out=slope)
    crest = cv2.dilate(slope, np.ones((5, 5), np.uint8))
    inner = cv2.erode(solid.astype(np.uint8), np.ones((5, 5), np.uint8)).astype(bool)
    ring, disc = np.ones((3, 3), np.uint8), cv2.getStructuringElement(cv2.MORPH_ELLIPSE, (7, 7))
    wide = cv2.getStructuringElement(cv2.MORPH_ELLIPSE, (9, 9))
    ground = np.zeros_like(solid)
    # From the slowest shade to an edge of a fifth in two pixels.
    for limit in np.geomspace(0.01, 0.1, 5):
        _, labels, stats, _ = cv2.connectedComponentsWithStats((inner & (slope < limit)).astype(np.uint8), connectivity=8)
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
            border = grown & ~cv2.erode(grown.astype(np.uint8), ring).astype(bool)
            if np.mean(crest[here][border] * SHARP_PX > 0.5 * np.abs(own - beside).max()) > SHARP_SHARE:
                ground[here] |= grown
    return ground


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
    walls = cv2.erode((solid & ~face).astype(np.uint8), ring).astype(bool)
    middle = cv2.erode(face.astype(np.uint8), np.ones((7, 7), np.uint8)).astype(bool)
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
        if index and abs(float(np.median(level[place])) - dark) < 0.25 * abs(light - dark):
            # Streaks and rings are long; scratches and pits of rust are ragged.
            if _roundness(place) > 0.85:
                face &= ~place
    return face


def _roundness(place: Mask) -> float:
    """How much of itself and of the ellipse with its moments a region shares: 1 for an ellipse, less for ragged ones."""
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
    inner = cv2.erode(face.astype(np.uint8), np.ones((5, 5), np.uint8)).astype(bool)
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
        border = place & ~cv2.erode(place.astype(np.uint8), ring).astype(bool)
        step = usual - float(np.median(tone[place]))
        if np.mean(crest[border] * SHARP_PX > 0.5 * step) > 0.8:
            found.append(np.array([x.mean(), y.mean()]))
    return found


def filled(mask: Mask) -> Mask:
    """The mask with everything that it encloses."""
    import cv2

    flooded = np.pad(mask, 1).astype(np.uint8)
    cv2.floodFill(flooded, None, (0, 0), 2)
    return flooded[1:-1, 1:-1] != 2


def components(mask: Mask) -> tuple[NDArray[np.int32], NDArray[np.int32]]:
    """(labels, areas) of the connected regions of a mask, neighbours by sides and corners; label 0 is outside."""
    import cv2

    _, labels, stats, _ = cv2.connectedComponentsWithStats(mask.astype(np.uint8), connectivity=8)
    return np.asarray(labels, np.int32), np.asarray(stats[:, cv2.CC_STAT_AREA], np.int32)


def without_specks(mask: Mask, least: int) -> Mask:
    """The mask without regions, and without holes, of fewer than `least` pixels."""
    labels, areas = components(mask)
    areas = areas.copy()
    areas[0] = 0
    kept = (areas >= least)[labels]
    labels, areas = components(~kept)
    areas = areas.copy()
    areas[0] = 0
    return kept | ((areas < least)[labels] & (labels > 0))


def opened_background(face: Mask, width: float) -> Mask:
    """The face with every gap closed that is narrower than `width` pixels: pencil strokes, cracks, scratches.

    Morphological opening of the background by a disc; corners of what remains are rounded by its radius,
    which tracing at full size undoes.
    """
    import cv2

    size = int(width) | 1
    if size < 3:
        return face
    disc = cv2.getStructuringElement(cv2.MORPH_ELLIPSE, (size, size))
    # Beyond the picture there is background; without a margin gaps at its border would be closed.
    padded = np.pad(~face, size, constant_values=True).astype(np.uint8)
    opened = cv2.morphologyEx(padded, cv2.MORPH_OPEN, disc)[size:-size, size:-size]
    return ~opened.astype(bool)


def without_false_holes(face: Mask, tone: Array, distance: Array) -> Mask:
    """The face with those of its holes closed that do not show the background.

    tone : (h, w) light
    distance : (h, w) how far each pixel is from the background

    A hole shows the background all over its middle; a dark ring of timber or print merely dips towards it
    here and there.
    """
    import cv2

    holes = filled(face) & ~face
    labels, areas = components(holes)
    if len(areas) < 2:
        return face
    bright = np.median(tone[~filled(face)]) > np.median(tone[face])
    clear = float(np.median(distance[face])) * (CLEAR_BRIGHT_HOLE if bright else CLEAR_DARK_HOLE)
    # What the fitted background misses just outside the face it misses within its holes too.
    solid = filled(face)
    around = cv2.dilate(solid.astype(np.uint8), np.ones((15, 15), np.uint8)).astype(bool) & ~solid
    if bright and around.any():
        clear += float(np.median(distance[around]))
    depth = cv2.distanceTransform(holes.astype(np.uint8), cv2.DIST_L2, 3)[holes]
    of = labels[holes]
    deepest = np.zeros(len(areas))
    np.maximum.at(deepest, of, depth)
    core = depth >= 0.5 * deepest[of]
    of, values = of[core], distance[holes][core]
    order = np.argsort(of, kind="stable")
    middles = [np.percentile(part, 90) for part in np.split(values[order], np.flatnonzero(np.diff(of[order])) + 1)]
    false = np.zeros(len(areas), bool)
    false[np.unique(of)] = np.array(middles) > clear
    return face | false[labels]


def without_gap(face: Mask, tone: Array, white: float) -> Mask:
    """The face without the dark joint around a member that stands in a wall or before an opening.

    tone : (h, w) light; white : light of white paper in the same picture

    A joint shows almost no light and lies all round, so that the face within hardly touches the background.
    Dark heartwood within pale sapwood is laid out alike, but wood is no black hole: what is taken
    away has less than BLACK_GAP of white paper's light and less than half of the face's.
    """
    import cv2

    solid = filled(face)
    if face.sum() < 100:
        return face
    level, separation = otsu(np.log(np.maximum(tone[face], 1e-4)))
    # The joint's own tone, from what of it lies at the outside, and what is not much lighter.
    rim = cv2.distanceTransform(solid.astype(np.uint8), cv2.DIST_L2, 3) < 4.0
    shade = face & rim & (tone <= np.exp(level))
    if not shade.any():
        return face
    dark = face & (tone <= min(np.exp(level), GAP_SPREAD * float(np.median(tone[shade]))))
    # Dark patches that the face encloses are its own; a joint comes to the outside.
    labels, areas = components(dark)
    outer = np.zeros(len(areas), bool)
    outer[np.unique(labels[dark & rim])] = True
    outer[0] = False
    dark = outer[labels]
    lit = face & ~dark
    if separation < 2.0 or not dark.any() or not lit.any():
        return face
    if np.median(tone[dark]) > BLACK_GAP * white or np.median(tone[dark]) > 0.5 * np.median(tone[lit]):
        return face
    ring = np.ones((3, 3), np.uint8)
    # The outermost pixels are mixed with the background; what lies two pixels within tells joint from face.
    within = cv2.distanceTransform(solid.astype(np.uint8), cv2.DIST_L2, 3)
    band = face & (within > 1.5) & (within < 3.5)
    if np.sum(band & lit) > 0.25 * np.sum(band):
        return face
    # The lit pixels outside the joint are the same mixed ones.
    lit &= within > 1.5
    return cv2.morphologyEx(lit.astype(np.uint8), cv2.MORPH_OPEN, ring).astype(bool)


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


def traced(mask: Mask, factor: int) -> list[Region]:
    """The regions of a mask with their holes, largest first, photo pixels.

    Level lines (marching squares, Lorensen and Cline 1987) of the softened mask; good to a pixel of the
    reduced picture, to be refined at full size.
    """
    import cv2
    from shapely import Polygon
    from skimage.measure import find_contours

    soft = cv2.GaussianBlur(np.pad(mask, 2).astype(np.float32), (0, 0), 0.7)
    rings = []
    for contour in find_contours(soft, 0.5):
        if len(contour) < 9 or np.any(contour[0] != contour[-1]):
            continue
        points = (contour[:-1, ::-1] - 2 + 0.5) * factor - 0.5
        rings.append(Polygon(points))
    rings.sort(key=lambda ring: -ring.area)
    shells: list[tuple[Polygon, list[Polygon]]] = []
    for ring in rings:
        inside = [pair for pair in shells if pair[0].covers(ring.representative_point())]
        in_hole = [pair for pair in inside if any(h.covers(ring.representative_point()) for h in pair[1])]
        if len(inside) == len(in_hole):
            shells.append((ring, []))
        else:
            next(pair for pair in inside if pair not in in_hole)[1].append(ring)
    return [
        Region(
            _turning(np.asarray(shell.exterior.coords)[:-1], up=True),
            tuple(_turning(np.asarray(h.exterior.coords)[:-1], up=False) for h in holes),
        )
        for shell, holes in shells
    ]


def _turning(loop: Array, *, up: bool) -> Array:
    """The loop running counter-clockwise (up) or clockwise as seen with y up; pixels have y down."""
    x, y = (loop - loop[0]).T
    area_down = 0.5 * float(np.sum(x * np.roll(y, -1) - np.roll(x, -1) * y))
    return loop if (area_down < 0) == up else loop[::-1]


def refuse_unless_separated(separation: float) -> None:
    """Raise Refusal when face and background are too alike for a threshold to part them."""
    if separation < MIN_SEPARATION:
        raise Refusal(
            "low-contrast",
            f"The face hardly differs from its background ({separation:.1f} standard deviations of it; "
            f"{MIN_SEPARATION:.0f} are needed).",
            "Lay the face on a background of another brightness or colour, or chalk the face's surroundings.",
        )
