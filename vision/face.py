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
# Mixed pixels at an outline are less of a face than this.
JOINT_SHARE = 0.01
# How much lighter than its median a joint may be in places (stated assumption).
GAP_SPREAD = 2.5
# An edge rises from its background within this many pixels of the labels; a shadow takes many more. A part of
# the outline may run along a shadow or a texture all the same.
SHARP_PX, SHARP_SHARE = 3.0, 0.85
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
    inside = eroded(searched, 2)[::2, ::2]
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
        border = rim(mask) & inside
        shares.append(float(np.mean(slope[border] * SHARP_PX > level)) if border.sum() >= 20 else 0.0)
    if max(shares) < SHARP_SHARE:
        return high, 0.0
    level = float(levels[int(np.argmax(np.array(shares) >= 0.95 * max(shares)))])
    below = thin[thin <= level]
    core = eroded((small > level) & inside)
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


def eroded(mask: Mask, by: int = 1) -> Mask:
    """The mask without its outermost `by` pixels, neighbours by sides and corners."""
    import cv2

    return cv2.erode(mask.astype(np.uint8), np.ones((2 * by + 1, 2 * by + 1), np.uint8)).astype(bool)


def rim(mask: Mask) -> Mask:
    """The outermost pixels of a mask."""
    return mask & ~eroded(mask)


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


def without_gap(face: Mask, tone: Array, white: float) -> tuple[Mask, bool]:
    """The face without the dark joint around a member that stands in a wall or before an opening.

    tone : (h, w) light; white : light of white paper in the same picture
    Returns the face and whether what was left out lies along some of its sides only, so that it may be part of it.

    A joint shows almost no light and lies all round, so that the face within hardly touches the background; or it was
    taken for face along some sides only.
    Dark heartwood within pale sapwood is laid out alike, but wood is no black hole: what is taken
    away has less than BLACK_GAP of white paper's light and less than half of the face's.
    """
    import cv2

    solid = filled(face)
    if face.sum() < 100:
        return face, False
    level, separation = otsu(np.log(np.maximum(tone[face], 1e-4)))
    # The joint's own tone, from what of it lies at the outside, and what is not much lighter.
    margin = cv2.distanceTransform(solid.astype(np.uint8), cv2.DIST_L2, 3) < 4.0
    shade = face & margin & (tone <= np.exp(level))
    if not shade.any():
        return face, False
    dark = face & (tone <= min(np.exp(level), GAP_SPREAD * float(np.median(tone[shade]))))
    # Dark patches that the face encloses are its own; a joint comes to the outside.
    labels, areas = components(dark)
    outer = np.zeros(len(areas), bool)
    outer[np.unique(labels[dark & margin])] = True
    outer[0] = False
    dark = outer[labels]
    lit = face & ~dark
    if separation < 2.0 or not dark.any() or not lit.any():
        return face, False
    if np.median(tone[dark]) > BLACK_GAP * white or np.median(tone[dark]) > 0.5 * np.median(tone[lit]):
        return face, False
    ring = np.ones((3, 3), np.uint8)
    # The outermost pixels are mixed with the background; what lies two pixels within tells joint from face.
    within = cv2.distanceTransform(solid.astype(np.uint8), cv2.DIST_L2, 3)
    band = face & (within > 1.5) & (within < 3.5)
    if np.sum(band & lit) > 0.25 * np.sum(band):
        left = _without_strips(face, dark, within)
        return left, bool(np.sum(face & ~left) > JOINT_SHARE * np.sum(face))
    # The lit pixels outside the joint are the same mixed ones.
    lit &= within > 1.5
    # Specks go; a thin web stays with the flanges that it joins.
    labels, areas = components(lit)
    kept = np.zeros(len(areas), bool)
    kept[np.unique(labels[cv2.morphologyEx(lit.astype(np.uint8), cv2.MORPH_OPEN, ring) > 0])] = True
    kept[0] = False
    lit = kept[labels]
    if not lit.any():
        return face, False
    # A joint is about as wide all round, and what stands in it is lit all over; patches of a black face are not.
    deep = solid & (within > float(np.median(within[rim(lit)])) + 1.5)
    return (lit if np.mean(lit[deep]) > 0.8 else face), False


def _without_strips(face: Mask, dark: Mask, within: Array) -> Mask:
    """The face without those of its dark regions at the outside that run along it, far longer than broad.

    within : (h, w) pixels to the outside. Less than a tenth of the face's size deep and six times as long as that
    (stated assumption): a joint that was taken for face along some sides, and no dark end or patch of it.
    """
    import cv2

    ring = np.ones((3, 3), np.uint8)
    labels, areas = components(cv2.morphologyEx(dark.astype(np.uint8), cv2.MORPH_OPEN, ring) > 0)
    strips = np.zeros(len(areas), bool)
    for index in range(1, len(areas)):
        depth = float(np.percentile(within[labels == index], 95))
        strips[index] = depth < 0.1 * np.sqrt(face.sum()) and areas[index] > 6.0 * depth**2
    if not strips.any():
        return face
    # What is left outside a strip is mixed of it and the background, a pixel or two wide.
    return cv2.morphologyEx((face & ~strips[labels]).astype(np.uint8), cv2.MORPH_OPEN, np.ones((5, 5), np.uint8)) > 0
