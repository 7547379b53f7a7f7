"""Where the faces are in a photo: between the reference and the background, or where a person points.

Knows how each kind of reference shows its background; labels only, see `face`.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass, replace
from typing import Any

import numpy as np
from numpy.typing import NDArray

from ..props.errors import Refusal, UsageError
from ..props.result import Notice
from .face import (
    CLEAR_SEPARATION,
    Region,
    components,
    eroded,
    opened_background,
    otsu,
    refuse_unless_separated,
    sharp_level,
    smooth_background,
    traced,
    without_false_holes,
    without_gap,
    without_specks,
)
from .light import Light
from .photo import Photo
from .references.reference import Reference
from .shade import SHADOW_REACH, flooded, is_cast_shadow, settled, shaded_ground
from .walls import sharp_patches, without_hidden_foot, without_seen_walls, without_walls

# Pictures come as float32, places as float64.
Array = NDArray[Any]
Mask = NDArray[np.bool_]

# Graph cuts cost as the pixels to the power of one and a half; they decide on a still smaller picture.
_CUT_SIZE = 360
# Labels are made on about this many pixels along the longer side of the searched window.
_WORKING_SIZE = 900
# Before an unknown background the outermost part of the frame, of its shorter side, is taken for background.
RIM_SHARE = 0.008
# Beside a lone reference, what is seen this near to the frame, of its shorter side, is background: a finger's width of
# it is asked of the picture (stated assumption).
FRAME_SHARE = 0.04
# A hole, part or gap narrower than this many px cannot be located: three spreads of blur to either side (blur of 1 px).
_LEAST_WIDTH_PX = 6.0
# A second region this large beside the largest is another candidate for the face, not a speck.
_RIVAL_SHARE = 0.33


@dataclass(frozen=True)
class Regions:
    """The faces found.

    groups : per member its connected regions, photo pixels; members in reading order
    factor : photo pixels to a pixel of the labels, which is how far a rough loop may be off
    """

    groups: tuple[tuple[Region, ...], ...]
    factor: int
    notices: tuple[Notice, ...] = ()


@dataclass(frozen=True)
class _Window:
    """A reduced part of the photo: light (h, w, c), where a face may be, and how to come back."""

    tone: NDArray[np.float32]
    searched: Mask
    left: int
    top: int
    factor: int

    def inside(self, pixels: Array) -> Array:
        """Photo pixels to pixels of the window."""
        return (pixels - (self.left, self.top) + 0.5) / self.factor - 0.5

    def outside(self, loop: Array) -> Array:
        """Pixels of the window, already times the factor, to photo pixels."""
        return loop + np.array([self.left, self.top])


def find_regions(
    photo: Photo,
    light: Light,
    reference: Reference,
    seeds: Sequence[tuple[float, float]] = (),
    within: Sequence[tuple[float, float]] = (),
    *,
    one_member: bool = False,
    excluded: Sequence[Array] = (),
) -> Regions:
    """The faces in a photo.

    seeds : photo pixels on the faces wanted; none takes what the reference makes unique (the one face inside the
        window or between the cards; all slices of a scan)
    within : corners of a region in photo pixels outside which no face is looked for; none for the whole picture
    one_member : all regions that the seeds hit make one face
    excluded : outlines in photo pixels of what says nothing of the face
    Raises Refusal when there is none, when several are equally likely, or one touches the frame.
    """
    import cv2

    for x, y in seeds:
        if not (0 <= x < photo.width and 0 <= y < photo.height):
            raise UsageError(
                "seed-outside",
                f"The point ({x:g}, {y:g}) is not in the picture of {photo.width} x {photo.height} pixels.",
                "Give the point in pixels of the upright picture, from its upper left corner.",
            )
    if within and len(within) < 3:
        raise UsageError(
            "region-corners",
            f"A region to look in has at least three corners, not {len(within)}.",
            "Give the corners in order, in pixels of the upright picture.",
        )
    if within and (np.max(within, axis=0).min() < 0 or np.any(np.min(within, axis=0) > (photo.width, photo.height))):
        raise UsageError(
            "region-outside",
            f"The region to look in lies outside the picture of {photo.width} x {photo.height} pixels.",
            "Give its corners in pixels of the upright picture, from its upper left corner.",
        )
    window = _window(photo, light, reference, within)
    if within:
        window = replace(window, searched=window.searched & _polygon_mask(window, [np.array(within, float)]))
        if not window.searched.any():
            raise Refusal(
                "no-face",
                "No face can lie in the region to look in: the reference covers it.",
                "Give the corners of a region around the face.",
            )
    hidden = _polygon_mask(window, excluded)
    least = max(4, int((_LEAST_WIDTH_PX / window.factor) ** 2))
    notices: tuple[Notice, ...] = ()
    feet = None if reference.foot is None else _foot_shift(window, reference.foot)
    if reference.background == "any":
        distance = _off_background_colours(replace(window, searched=window.searched & ~hidden), reference, seeds)
        level = 0.0
    else:
        relative, distance = _off_smooth_background(photo, light, window, reference)
        relative[hidden], distance[hidden] = 1.0, 0.0
        level, separation = 0.0, 0.0
        if reference.foot is None:
            level, separation = sharp_level(distance, window.searched, least)
        if separation == 0.0:
            # What stands above its ground throws a shadow on it.
            level = 0.0
            mask, separation = flooded(relative, distance, window.searched)
            if feet is not None:
                furthest = SHADOW_REACH * reference.plane_offset_mm / _mm_per_pixel(window, reference)
                mask, separation = _without_cast_shadow(
                    mask, separation, relative, distance, window.searched, least, feet, furthest
                )
            mask &= ~shaded_ground(mask, relative, least)
            distance = np.where(mask, np.maximum(distance, 1e-6), 0.0)
        refuse_unless_separated(separation)
        if separation < CLEAR_SEPARATION:
            notices = (
                Notice(
                    "low-contrast",
                    f"In places the face is almost as light as its background ({separation:.1f} standard deviations "
                    "apart); parts of it may have been taken for background.",
                    "Compare the outline on the picture with the face; choose a background of another brightness.",
                ),
            )
    own = _polygon_mask(window, reference.on_face)
    face = (distance > level) & window.searched | own
    brightness = cv2.transform(window.tone, np.full((1, window.tone.shape[2]), 1 / window.tone.shape[2]))
    if feet is not None:
        # Walls within a hole do not show the ground; told by what shows of it, before they are taken off.
        solid = without_false_holes(without_specks(face, least), brightness, distance)
        shift, most = feet
        face = without_seen_walls(without_hidden_foot(solid, shift, most), solid, brightness, most)
    elif reference.background == "any":
        white = float(np.median(light.at(reference.white))) if len(reference.white) else float(brightness.max())
        face, doubtful = without_gap(face, brightness, white)
        if doubtful:
            notices += (
                Notice(
                    "joint-left-out",
                    "A black strip along a side of the member was taken for a joint, and left out.",
                    "Look at the outline on the picture; if the strip belongs to the member (bitumen, black paint), "
                    "chalk it and take the photo again.",
                ),
            )
    elif reference.background == "paper":
        face = without_walls(face, window.searched & ~face, brightness)
    face = opened_background(without_specks(face, least), _LEAST_WIDTH_PX / window.factor)
    if reference.background != "any" and reference.foot is None:
        face = without_false_holes(face, brightness, distance)
    if reference.foot is not None:
        patches = sharp_patches(face, brightness, 2.0 * _LEAST_WIDTH_PX / window.factor)
        if patches:
            x, y = window.outside((patches[0] + 0.5) * window.factor - 0.5)
            notices += (
                Notice(
                    "dark-patch",
                    f"{len(patches)} sharply bounded dark patch{'es' * (len(patches) > 1)} within the face (one at "
                    f"pixel {x:.0f}, {y:.0f}) counted as part of it; if it is a hole, the area is too large by it.",
                    "Look at the picture; light the ground of the hole (white paper under it, lamp from above) and "
                    "take the photo again.",
                ),
            )
    if hidden.any():
        face &= ~hidden
        _refuse_severed(face, hidden)
    # A pixel that the face covers by less than half still has its edge inside the picture.
    full = face & (distance > 0.5 * np.median(distance[face])) if face.any() and reference.background != "any" else face
    groups = _chosen(window, face, full, seeds, several=reference.background == "lid", joined=one_member)
    moved = tuple(tuple(_moved(window, region) for region in group) for group in groups)
    return Regions(moved, window.factor, notices)


def _without_cast_shadow(
    mask: Mask,
    separation: float,
    relative: NDArray[np.float32],
    distance: NDArray[np.float32],
    searched: Mask,
    least: int,
    feet: tuple[NDArray[np.float32], float],
    furthest: float,
) -> tuple[Mask, float]:
    """(mask, separation) without the shadow of a lamp as hard as an edge, where the face is darker than that.

    mask, separation : as `flooded` found them
    relative : (h, w, c) light over that of the background; distance : (h, w) from it
    feet : as `_foot_shift` gives them; furthest : pixels that a shadow may reach
    """
    if separation == 0.0:
        level, separation = sharp_level(distance, searched, least)
        return (distance > level) & searched & (separation > 0.0), separation
    level, _ = otsu(distance[mask])
    dark = without_specks(mask & (distance > level), least)
    shadow = without_specks(mask & ~dark, least)
    areas = components(dark)[1][1:]
    # One piece, unlike rings of timber; broader than a wall is wide, unlike the walls of a face brighter than they.
    whole = len(areas) > 0 and areas.max() > 0.9 * areas.sum() > 0.9 * shadow.sum()
    if not whole or without_hidden_foot(dark, 1.5 * feet[0], 1.5 * feet[1]).sum() < 0.5 * dark.sum():
        return mask, separation
    if is_cast_shadow(dark, shadow, relative, furthest):
        # Darker than the shadow's darkest is face for sure; what the level left of the edges is settled on their crest.
        core = dark & (distance > 0.5 * (np.median(distance[dark]) + np.percentile(distance[shadow], 95)))
        return settled(relative, core, ~mask | eroded(shadow)) & searched, separation
    return mask, separation


def _refuse_severed(face: Mask, hidden: Mask) -> None:
    """Refusal when what is left out parts a face in two."""
    import cv2

    labels, areas = components(face)
    beside = np.unique(labels[cv2.dilate(hidden.astype(np.uint8), np.ones((5, 5), np.uint8)).astype(bool)])
    large = [label for label in beside.tolist() if label and areas[label] > 0.05 * areas[1:].max()]
    if len(large) > 1:
        raise Refusal(
            "excluded-too-much",
            "The region to leave out runs right across the face, or joins two of them.",
            "Draw it around what hides the edge, not across the face; look at one face alone with --within.",
        )


def _moved(window: _Window, region: Region) -> Region:
    return Region(window.outside(region.shell), tuple(window.outside(hole) for hole in region.holes))


def _window(photo: Photo, light: Light, reference: Reference, within: Sequence[tuple[float, float]] = ()) -> _Window:
    """The part of the photo in which faces are looked for, reduced."""
    # Paper is judged near the face; an unknown background is learnt from the whole picture.
    near = [np.array(within, float)] if within and reference.background == "paper" else list(reference.region)
    if near:
        corners = np.concatenate(near)
        low = np.maximum(np.floor(corners.min(axis=0)).astype(int) - 2, 0)
        high = np.minimum(np.ceil(corners.max(axis=0)).astype(int) + 3, (photo.width, photo.height))
    else:
        low, high = np.array([0, 0]), np.array([photo.width, photo.height])
    factor = max(1, round(float((high - low).max()) / _WORKING_SIZE))
    part = Light(photo.pixels[low[1] : high[1], low[0] : high[0]], light.curve, light.weights)
    tone = part.reduced(factor)
    window = _Window(tone, np.ones(tone.shape[:2], bool), int(low[0]), int(low[1]), factor)
    searched = window.searched
    if reference.region:
        searched = _polygon_mask(window, reference.region)
    if reference.excluded:
        searched = searched & ~_polygon_mask(window, reference.excluded)
    if reference.background == "any":
        # What lies at the frame is taken for background below; a face that comes so near is cut.
        rim = max(1, round(RIM_SHARE * min(searched.shape)))
        searched = searched.copy()
        searched[:rim] = searched[-rim:] = False
        searched[:, :rim] = searched[:, -rim:] = False
    return _Window(tone, searched, window.left, window.top, factor)


def _polygon_mask(window: _Window, outlines: Sequence[Array]) -> Mask:
    import cv2

    mask = np.zeros(window.searched.shape, np.uint8)
    for outline in outlines:
        cv2.fillPoly(mask, [np.rint(window.inside(outline)).astype(np.int32)], 1)
    return mask.astype(bool)


def _mm_per_pixel(window: _Window, reference: Reference) -> float:
    """Millimetres to a pixel of the window, in its middle."""
    height, width = window.searched.shape
    middle = window.outside(np.array([[0.5 * width, 0.5 * height]]))
    return window.factor * float(np.sqrt(np.abs(np.linalg.det(reference.face.mm_per_px(middle)[0]))))


def _foot_shift(window: _Window, foot: Callable[[Array], Array]) -> tuple[NDArray[np.float32], float]:
    """(h, w, 2) pixels of the window from face points to their feet, and the longest."""
    import cv2

    height, width = window.searched.shape
    # The shift is as smooth as the perspective: a coarse grid tells it.
    x, y = np.meshgrid(np.linspace(0, width - 1, 12), np.linspace(0, height - 1, 12))
    pixels = window.outside((np.column_stack([x.ravel(), y.ravel()]) + 0.5) * window.factor - 0.5)
    shift = ((foot(pixels) - pixels) / window.factor).reshape(12, 12, 2).astype(np.float32)
    rows, columns = np.mgrid[0:height, 0:width].astype(np.float32)
    full = cv2.remap(
        shift, columns * np.float32(11 / (width - 1)), rows * np.float32(11 / (height - 1)), cv2.INTER_LINEAR
    )
    return np.asarray(full, np.float32), float(np.linalg.norm(shift, axis=2).max())


def _channels(photo: Photo, light: Light, places: Array) -> Array:
    """(k, c) unweighted linear light of the photo at (k, 2) places."""
    count = 1 if photo.pixels.ndim == 2 else 3
    return np.column_stack([Light(light.pixels, light.curve, tuple(np.eye(3)[c])).at(places) for c in range(count)])


def _off_smooth_background(
    photo: Photo, light: Light, window: _Window, reference: Reference
) -> tuple[NDArray[np.float32], NDArray[np.float32]]:
    """(h, w, c) light over that of a smooth background (a sheet's paper, a lid) and (h, w) its distance from it."""
    tone = window.tone
    height, width = tone.shape[:2]
    if reference.background == "paper":
        # The squares' own white lies all round the window: what is seen between is paper or not paper.
        places, values = window.inside(reference.white), _channels(photo, light, reference.white)
        close = np.all((places >= 0) & (places < (width, height)), axis=1)
        # A sheet's squares lie around its window; those of a pattern within which one looks lie in it.
        if reference.kind != "sheet" and close.sum() >= 4:
            places, values = places[close], values[close]
    else:
        places, values = _border_samples(tone)
    background = smooth_background(places, values, (height, width))
    # A dark lid has no tone to divide by.
    scale = np.maximum(background, np.float32(0.2 * np.percentile(tone[::4, ::4], 99.5)))
    relative = ((tone - background) / scale).astype(np.float32)
    off = np.abs(relative)
    return relative + 1.0, np.maximum.reduce([off[..., c] for c in range(off.shape[2])])


def _border_samples(tone: Array) -> tuple[Array, Array]:
    """(places, values) along the border of a scan, where the lid shows."""
    height, width = tone.shape[:2]
    rim = max(2, min(height, width) // 100)
    mask = np.zeros((height, width), bool)
    mask[rim : 2 * rim] = mask[-2 * rim : -rim] = True
    mask[:, rim : 2 * rim] = mask[:, -2 * rim : -rim] = True
    y, x = np.nonzero(mask)
    thin = slice(None, None, max(1, len(x) // 1000))
    y, x = y[thin], x[thin]
    return np.column_stack([x, y]).astype(float), tone[y, x]


def _off_background_colours(window: _Window, reference: Reference, seeds: Sequence[tuple[float, float]]) -> Array:
    """(h, w) positive on the face, negative on whatever the member stands before.

    Iterated graph cuts (GrabCut; Rother, Kolmogorov, Blake 2004): the border of the frame and the reference itself
    are background, the seeds are face, and what lies between the parts of the reference is probably face; colours
    of both are learnt anew after each cut.
    """
    import cv2

    height, width = window.searched.shape
    factor = max(1, round(max(height, width) / _CUT_SIZE))
    size = (width // factor, height // factor)
    small = cv2.resize(window.tone, size, interpolation=cv2.INTER_AREA)
    # Colours in steps that are even to the eye: dark tones differ by ratios, not by amounts.
    encoded = np.clip(small / np.percentile(small, 99.5), 0, 1) ** (1 / 2.2) * 255
    picture = encoded.astype(np.uint8).reshape(size[1], size[0], -1)
    picture = np.ascontiguousarray(np.broadcast_to(picture, (*picture.shape[:2], 3)))
    searched = cv2.resize(window.searched.astype(np.uint8), size, interpolation=cv2.INTER_NEAREST).astype(bool)
    rows, columns = np.mgrid[0 : size[1], 0 : size[0]]

    def near(place: Array, reach: float) -> Mask:
        x, y = (place + 0.5) / factor - 0.5
        return np.hypot(columns - x, rows - y) <= max(1.0, reach / factor)

    points = window.inside(np.array(seeds, float)) if seeds else np.empty((0, 2))
    corners = window.inside(reference.corners_px) if len(reference.corners_px) else points
    middle = corners.mean(axis=0)
    spread = float(np.linalg.norm(corners - middle, axis=1).mean()) if len(corners) > 1 else 0.25 * min(height, width)
    labels = np.full(searched.shape, cv2.GC_PR_BGD, np.uint8)
    for place in points if len(points) else middle[None]:
        labels[near(place, 0.75 * spread)] = cv2.GC_PR_FGD
    own = _polygon_mask(window, reference.on_face)
    labels[cv2.resize(own.astype(np.uint8), size, interpolation=cv2.INTER_NEAREST).astype(bool)] = cv2.GC_FGD

    def at(places: Array) -> tuple[NDArray[np.intp], NDArray[np.intp]]:
        x, y = np.clip(np.rint((places + 0.5) / factor - 0.5), 0, (size[0] - 1, size[1] - 1)).astype(np.intp).T
        return y, x

    if not own.any() and (not reference.excluded or not searched[at(middle[None])].all()):
        # A lone reference lies beside the face, picked points anywhere: what is unlike the frame's rim may be it.
        unlike = _unlike_the_rim(picture)
        if unlike[at(points)].all():
            labels[:] = np.where(unlike, cv2.GC_PR_FGD, cv2.GC_PR_BGD)
    for place in points:
        labels[near(place, 0.03 * spread)] = cv2.GC_FGD
    labels[~searched] = cv2.GC_BGD
    if not np.isin(labels, (cv2.GC_FGD, cv2.GC_PR_FGD)).any():
        raise Refusal(
            "no-face",
            "Nothing is left of the picture where a face could be.",
            "Point at the face with --seed, and keep the reference beside it.",
        )
    cv2.setRNGSeed(1)
    models = np.zeros((1, 65)), np.zeros((1, 65))
    cv2.grabCut(picture, labels, (0, 0, 1, 1), *models, 4, cv2.GC_INIT_WITH_MASK)
    face = np.isin(labels, (cv2.GC_FGD, cv2.GC_PR_FGD)).astype(np.float32) - 0.5
    return cv2.resize(face, (width, height), interpolation=cv2.INTER_LINEAR)


def _unlike_the_rim(picture: NDArray[np.uint8]) -> Mask:
    """(h, w) where a picture of (h, w, 3) is unlike everything along its frame.

    Colours of the rim are gathered into eight; distances from the nearest are split where their spread within both
    parts is least (Otsu 1979).
    """
    import cv2

    height, width = picture.shape[:2]
    rim = max(1, round(FRAME_SHARE * min(height, width)))
    inner = np.zeros((height, width), bool)
    inner[rim:-rim, rim:-rim] = True
    colours = picture[~inner].astype(np.float32)
    cv2.setRNGSeed(1)
    criteria = (cv2.TERM_CRITERIA_EPS + cv2.TERM_CRITERIA_MAX_ITER, 20, 0.5)
    start = np.zeros((len(colours), 1), np.int32)
    centres = cv2.kmeans(colours, min(8, len(colours)), start, criteria, 1, cv2.KMEANS_PP_CENTERS)[2]
    off = np.min([np.linalg.norm(picture - c, axis=2) for c in centres.astype(np.float32)], axis=0)
    level, _ = cv2.threshold(np.clip(off, 0, 255).astype(np.uint8), 0, 255, cv2.THRESH_BINARY + cv2.THRESH_OTSU)
    return inner & (off > level)


def _chosen(
    window: _Window,
    face: Mask,
    full: Mask,
    seeds: Sequence[tuple[float, float]],
    *,
    several: bool,
    joined: bool = False,
) -> list[list[Region]]:
    """The members among the connected regions of a mask; `full` are its pixels that count at the picture's border."""
    labels, areas = components(face)
    areas = areas.copy()
    areas[0] = 0
    if len(areas) < 2:
        raise Refusal(
            "no-face",
            "No face is found in the picture.",
            "Lay the face inside the sheet's window or between the cards, or point at it with --seed.",
        )
    if seeds:
        picked = {}
        for seed in seeds:
            x, y = np.rint(window.inside(np.array([seed], float))[0]).astype(int)
            inside = 0 <= y < labels.shape[0] and 0 <= x < labels.shape[1]
            label = int(labels[y, x]) if inside else 0
            if label == 0:
                raise Refusal(
                    "seed-off-face",
                    f"The point ({seed[0]:g}, {seed[1]:g}) does not lie on a region that differs from the background.",
                    "Point at the face itself, away from its edges.",
                )
            picked[label] = None
        chosen = [list(picked)] if joined else [[label] for label in picked]
    else:
        # Dirt and lettering are far smaller than any face worth measuring.
        large = [int(i) for i in np.flatnonzero(areas >= 0.05 * areas.max())]
        if several:
            chosen = [[label] for label in large]
        else:
            order = sorted(large, key=lambda label: -areas[label])
            if len(order) > 1 and areas[order[1]] > _RIVAL_SHARE * areas[order[0]]:
                raise Refusal(
                    "several-faces",
                    f"{len(order)} regions are equally likely to be the face.",
                    "Point at the one to measure with --seed, or take the others out of the picture.",
                )
            chosen = [[order[0]]]
    groups = []
    for group in chosen:
        mask = np.isin(labels, group)
        _refuse_touching(window, mask & full)
        groups.append(traced(mask, window.factor))
    return sorted(groups, key=_reading_order)


def _refuse_touching(window: _Window, mask: Mask) -> None:
    """Refusal when a region reaches the end of what was searched: its outline is cut there."""
    import cv2

    beyond = cv2.dilate((~window.searched).astype(np.uint8), np.ones((3, 3), np.uint8)).astype(bool)
    beyond[[0, -1]] = True
    beyond[:, [0, -1]] = True
    if np.any(mask & beyond):
        raise Refusal(
            "face-cut",
            "The face reaches the edge of the picture, or the printed ring or a card covers or touches it.",
            "Leave a finger's width of background visible all round the face; use a larger sheet or the cards.",
        )


def _reading_order(group: Sequence[Region]) -> tuple[float, float]:
    shell = group[0].shell
    return (round(float(shell[:, 1].min()) / 200.0), float(shell[:, 0].min()))
