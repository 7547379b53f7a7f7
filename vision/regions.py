"""Where the faces are in a photo: between the reference and the background, or where a person points.

Knows how each kind of reference shows its background; labels only, see `face`.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from ..props.errors import Refusal, UsageError
from ..props.result import Notice
from .face import (
    Region,
    components,
    opened_background,
    refuse_unless_separated,
    sharp_level,
    smooth_background,
    traced,
    without_false_holes,
    without_hidden_foot,
    without_specks,
    without_walls,
)
from .light import Light
from .photo import Photo
from .references.reference import Reference

Array = NDArray[np.float64]
Mask = NDArray[np.bool_]

# Labels are made on about this many pixels along the longer side of the searched window.
_WORKING_SIZE = 1100
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
        return loop + (self.left, self.top)


def find_regions(photo: Photo, light: Light, reference: Reference, seeds: Sequence[tuple[float, float]]) -> Regions:
    """The faces in a photo.

    seeds : photo pixels on the faces wanted; none takes what the reference makes unique (the one face inside the
        window or between the cards; all slices of a scan)
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
    window = _window(photo, light, reference)
    least = max(4, int((_LEAST_WIDTH_PX / window.factor) ** 2))
    if reference.background == "any":
        distance = _off_background_colours(window, reference, seeds)
        level = 0.0
    else:
        distance = _off_smooth_background(photo, light, window, reference)
        level, separation = sharp_level(distance, window.searched, least)
        refuse_unless_separated(separation)
    face = (distance > level) & window.searched
    brightness = cv2.transform(window.tone, np.full((1, window.tone.shape[2]), 1 / window.tone.shape[2]))
    if reference.foot is not None:
        face = without_hidden_foot(without_specks(face, least), *_foot_shift(window, reference.foot))
    else:
        face = without_walls(face, window.searched & ~face, brightness)
    face = opened_background(without_specks(face, least), _LEAST_WIDTH_PX / window.factor)
    if level > 0:
        face = without_false_holes(face, brightness, distance, level)
    # A pixel that the face covers by less than half still has its edge inside the picture.
    full = face & (distance > 0.5 * np.median(distance[face])) if face.any() and level > 0 else face
    groups = _chosen(window, face, full, seeds, several=reference.background == "lid")
    moved = tuple(tuple(_moved(window, region) for region in group) for group in groups)
    return Regions(moved, window.factor)


def _moved(window: _Window, region: Region) -> Region:
    return Region(window.outside(region.shell), tuple(window.outside(hole) for hole in region.holes))


def _window(photo: Photo, light: Light, reference: Reference) -> _Window:
    """The part of the photo in which faces are looked for, reduced."""
    if reference.region:
        corners = np.concatenate(reference.region)
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
    return _Window(tone, searched, window.left, window.top, factor)


def _polygon_mask(window: _Window, outlines: Sequence[Array]) -> Mask:
    import cv2

    mask = np.zeros(window.searched.shape, np.uint8)
    for outline in outlines:
        cv2.fillPoly(mask, [np.rint(window.inside(outline)).astype(np.int32)], 1)
    return mask.astype(bool)


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
    return full, float(np.linalg.norm(shift, axis=2).max())


def _channels(photo: Photo, light: Light, places: Array) -> Array:
    """(k, c) unweighted linear light of the photo at (k, 2) places."""
    count = 1 if photo.pixels.ndim == 2 else 3
    return np.column_stack([Light(light.pixels, light.curve, tuple(np.eye(3)[c])).at(places) for c in range(count)])


def _off_smooth_background(photo: Photo, light: Light, window: _Window, reference: Reference) -> Array:
    """(h, w) relative distance from a background that is one smooth surface: a sheet's paper, a scanner's lid."""
    tone = window.tone
    height, width = tone.shape[:2]
    if reference.background == "paper":
        # The squares' own white lies all round the window: what is seen between is paper or not paper.
        places, values = window.inside(reference.white), _channels(photo, light, reference.white)
    else:
        places, values = _border_samples(tone)
    background = smooth_background(places, values, (height, width))
    # A dark lid has no tone to divide by.
    scale = np.maximum(background, np.float32(0.2 * np.percentile(tone[::4, ::4], 99.5)))
    off = np.abs(tone - background) / scale
    return np.maximum.reduce([off[..., c] for c in range(off.shape[2])])


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
    """(h, w) log ratio of face to background, where the background is whatever the member stands before.

    What lies at the frame's border is background, what lies in the middle of the cards (or at the seeds) is face;
    colour frequencies of both decide the rest, learnt anew from each decision until it stands.
    """
    import cv2

    height, width = window.tone.shape[:2]
    yy, xx = np.mgrid[0:height, 0:width]
    corners = window.inside(reference.corners_px)
    middle = np.array([window.inside(np.array([s], float))[0] for s in seeds]) if seeds else corners.mean(axis=0)[None]
    spread = float(np.linalg.norm(corners - corners.mean(axis=0), axis=1).mean())
    rim = max(2, min(height, width) // 40)
    border = np.ones((height, width), bool)
    border[rim:-rim, rim:-rim] = False
    near = np.zeros((height, width), bool)
    for x, y in middle:
        near |= np.hypot(xx - x, yy - y) < (0.05 if seeds else 0.15) * spread
    near &= window.searched
    border &= window.searched
    # Colours in steps of equal ratio: what matters is reflectance, and light falls off across a wall.
    code = np.log(np.maximum(cv2.GaussianBlur(window.tone, (0, 0), 1.0), 0.003))
    code = code.reshape(height, width, -1)
    low, high = code.min(axis=(0, 1)), code.max(axis=(0, 1))
    steps = 24 if code.shape[2] == 3 else 128
    cell = np.minimum(((code - low) / np.maximum(high - low, 1e-6) * steps).astype(int), steps - 1)
    index = np.ravel_multi_index(tuple(np.moveaxis(cell, -1, 0)), (steps,) * code.shape[2])
    face, background = near, border
    smooth = np.zeros((height, width), np.float32)
    for _ in range(6):
        ratio = _log_frequency(index, face, steps, code.shape[2]) - _log_frequency(
            index, background, steps, code.shape[2]
        )
        smooth = cv2.GaussianBlur(ratio.astype(np.float32), (0, 0), 1.5)
        decided = (smooth > 0) & window.searched
        labels, _ = components(decided)
        hit = np.unique(labels[near & decided])
        new = np.isin(labels, hit[hit > 0])
        if not new.any() or np.array_equal(new, face):
            break
        face, background = new, window.searched & ~decided
    return np.where(face, smooth, np.minimum(smooth, 0.0))


def _log_frequency(index: NDArray[np.intp], mask: Mask, steps: int, channels: int) -> Array:
    """(h, w) logarithm of how frequent each pixel's colour is within a mask, smoothed over neighbouring colours."""
    from scipy.ndimage import gaussian_filter

    counts = np.bincount(index[mask], minlength=steps**channels).reshape((steps,) * channels).astype(float)
    smooth = gaussian_filter(counts, 1.0 if channels == 3 else 2.0).ravel() + 1e-3
    return np.log(smooth / smooth.sum())[index]


def _chosen(
    window: _Window, face: Mask, full: Mask, seeds: Sequence[tuple[float, float]], *, several: bool
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
        chosen = [[label] for label in picked]
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
