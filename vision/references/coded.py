"""Coded boards in a picture: which sheets and cards are seen, and where their corners are.

Markers only say which board is where; the geometry comes from the saddle points between the
checker squares, which are free of edge bias.
"""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass
from functools import cache

import cv2
import numpy as np
from numpy.typing import NDArray

from ..plane import Correspondences, Plane, fit_plane
from .board import BOARDS, DICTIONARY, MODULES, SHEETS, Board

Array = NDArray[np.float64]

# Three pixels a module let the marker detector read a 7-module marker; searched on ever larger pictures.
_SEARCH_SIZES = (1400, 2400, 4800)
# Half the window in which a corner is refined, px, for pictures of 12 megapixels; the finer pixels of larger ones
# share one blur, and the window grows with it.
_SUBPIX_LIMIT, _SUBPIX_PICTURE = 9, 4000
# Least share of a board's markers that must be read for it to be there.
LEAST_READ = 0.2


@dataclass(frozen=True)
class Sighting:
    """One board as a picture shows it.

    target : (k, 2) mm on the board of the corners seen
    pixels : (k, 2) where they are
    share : part of the board's corners that were found, 0..1
    """

    board: Board
    target: Array
    pixels: Array
    share: float

    @property
    def correspondences(self) -> Correspondences:
        """The corners as the plane's fit takes them."""
        return Correspondences(self.target, self.pixels)


def find_boards(grey: NDArray[np.uint8]) -> list[Sighting]:
    """All boards of ours in a picture, in the order of `BOARDS`.

    grey : (h, w) the upright photo as stored
    Returns one Sighting a board with at least six sub-pixel corners; an empty list if there is none.

    Markers are read on a reduced picture, which costs a fraction of reading the full one; the
    corners are then refined at full size from where the markers say that they are.
    """
    longest = max(grey.shape)
    found: dict[int, Array] = {}
    for size in _SEARCH_SIZES:
        scale = min(1.0, size / longest)
        # The larger picture places its markers better.
        found |= _read_markers(grey, scale)
        # A whole sheet leaves nothing to look for; beside a card there may be others that are smaller in the picture.
        if scale == 1.0 or _read_share_of_best(np.array(list(found), int), SHEETS.values()) > 0.6:
            break
    sightings = []
    for board in BOARDS:
        markers = {i: found[i] for i in board.ids if i in found}
        # A few markers that look like others by chance, in a mirror say, are no board.
        if (
            len(markers) >= max(2, LEAST_READ * len(board.ids))
            and (sighting := _locate(grey, board, markers)) is not None
        ):
            sightings.append(sighting)
    return sightings


def _read_markers(grey: NDArray[np.uint8], scale: float) -> dict[int, Array]:
    """Marker number to (4, 2) corners in full-size pixels; numbers read twice are left out.

    OpenCV finds the four-sided candidates; their bits are matched here, all at once, which is
    several times faster than its search through a dictionary of a thousand.
    """
    small = grey
    if scale < 1.0:
        size = (round(grey.shape[1] * scale), round(grey.shape[0] * scale))
        small = np.asarray(cv2.resize(grey, size, interpolation=cv2.INTER_AREA), np.uint8)
    ratio = np.array([grey.shape[1] / small.shape[1], grey.shape[0] / small.shape[0]])
    parameters = cv2.aruco.DetectorParameters()
    parameters.minMarkerPerimeterRate = 0.02
    candidates: list[Array] = []
    numbers, turns = np.empty(0, int), np.empty(0, int)
    # The threshold's window must exceed a module and not reach far beyond a marker.
    for window in (13, 23, 7):
        parameters.adaptiveThreshWinSizeMin = parameters.adaptiveThreshWinSizeMax = window
        detector = cv2.aruco.ArucoDetector(cv2.aruco.Dictionary(_dictionary().bytesList[:1], 5, 0), parameters)
        accepted, _, rejected = detector.detectMarkers(small)
        quads = np.array([c.reshape(4, 2) for c in (*accepted, *rejected)], float)
        if not len(quads):
            continue
        ids, turned = _identified(small, quads)
        known = ids >= 0
        if known.sum() > len(numbers):
            numbers, turns = ids[known], turned[known]
            candidates = list(quads[known])
        if len(numbers) and _read_share_of_best(numbers) > 0.6:
            break
    found = {}
    for number, turn, quad in zip(numbers, turns, candidates, strict=True):
        if np.sum(numbers == number) == 1:
            found[int(number)] = np.roll(quad, turn, axis=0)
    if not found:
        return {}
    corners = np.concatenate(list(found.values())).astype(np.float32).reshape(-1, 1, 2)
    criteria = (cv2.TERM_CRITERIA_EPS + cv2.TERM_CRITERIA_MAX_ITER, 10, 0.05)
    corners = cv2.cornerSubPix(small, corners, (3, 3), (-1, -1), criteria).reshape(-1, 4, 2).astype(float)
    return dict(zip(found, (corners + 0.5) * ratio - 0.5, strict=True))


def _read_share_of_best(numbers: NDArray[np.intp], boards: Iterable[Board] = BOARDS) -> float:
    found = set(numbers.tolist())
    return max(sum(i in found for i in board.ids) / len(board.ids) for board in boards)


@cache
def _dictionary() -> cv2.aruco.Dictionary:
    return cv2.aruco.getPredefinedDictionary(getattr(cv2.aruco, DICTIONARY))


@cache
def _codes() -> NDArray[np.float32]:
    """(25, 4 n) signs of the inner bits of every marker of ours, in its four turns; and their numbers."""
    last = max(board.ids[-1] for board in BOARDS) + 1
    upright = np.array([_dictionary().generateImageMarker(i, MODULES)[1:-1, 1:-1] for i in range(last)]) > 127
    # A picture whose corner list starts k corners late shows the bits turned k times against the clock.
    turned = np.stack([np.rot90(upright, k, axes=(1, 2)) for k in range(4)], axis=1)
    return np.where(turned, 1.0, -1.0).astype(np.float32).reshape(4 * last, -1).T


def _identified(small: NDArray[np.uint8], quads: Array) -> tuple[NDArray[np.intp], NDArray[np.intp]]:
    """Marker number (-1: none) and the index of its printed top left corner, for (q, 4, 2) candidates."""
    at = (np.arange(MODULES) + 0.5) / MODULES
    u, v = np.meshgrid(at, at)
    # The projective map from the unit square to a four-sided figure, closed form (Heckbert 1989).
    p0, p1, p2, p3 = np.moveaxis(quads, 1, 0)
    d1, d2, s = p1 - p2, p3 - p2, p0 - p1 + p2 - p3
    determinant = d1[:, 0] * d2[:, 1] - d1[:, 1] * d2[:, 0]
    determinant = np.where(np.abs(determinant) < 1e-9, 1e-9, determinant)
    g = (s[:, 0] * d2[:, 1] - s[:, 1] * d2[:, 0]) / determinant
    h = (d1[:, 0] * s[:, 1] - d1[:, 1] * s[:, 0]) / determinant
    a = p1 - p0 + g[:, None] * p1
    b = p3 - p0 + h[:, None] * p3
    w = g[:, None, None] * u + h[:, None, None] * v + 1
    xy = (a[:, None, None] * u[..., None] + b[:, None, None] * v[..., None] + p0[:, None, None]) / w[..., None]
    x = np.clip(np.rint(xy[..., 0]).astype(int), 1, small.shape[1] - 2)
    y = np.clip(np.rint(xy[..., 1]).astype(int), 1, small.shape[0] - 2)
    cells = small[y, x].astype(np.float32)
    border = np.ones((MODULES, MODULES), bool)
    border[1:-1, 1:-1] = False
    dark = np.median(cells[:, border], axis=1)
    inner = cells[:, 1:-1, 1:-1].reshape(len(cells), -1)
    level = 0.5 * (dark + inner.max(axis=1))
    clear = (inner.max(axis=1) - dark > 25) & (np.mean(cells[:, border] < level[:, None], axis=1) > 0.9)
    agreement = np.where(inner > level[:, None], 1.0, -1.0).astype(np.float32) @ _codes()
    best = agreement.argmax(axis=1)
    # Two wrong bits of 25 are still nearer to one marker than to any other of the dictionary.
    clear &= agreement.max(axis=1) >= inner.shape[1] - 4
    return np.where(clear, best // 4, -1), best % 4


def _locate(grey: NDArray[np.uint8], board: Board, markers: dict[int, Array]) -> Sighting | None:
    """Sub-pixel saddles of a board from its markers; None when too few stand the checks."""
    target = np.concatenate([board.marker_corners[i - board.first_id] for i in markers])
    pixels = np.concatenate(list(markers.values()))
    frame = (grey.shape[1], grey.shape[0])
    rough = _consistent_plane(target, pixels, frame)
    if rough is None:
        return None
    predicted = rough.to_pixels(board.saddles)
    pixel_mm = 1.0 / np.sqrt(np.abs(np.linalg.det(rough.mm_per_px(predicted))))
    margin = (board.square_mm - board.marker_mm) / 2
    # The window must stay clear of the markers, whose edges would pull the corner.
    limit = _SUBPIX_LIMIT * max(1.0, max(frame) / _SUBPIX_PICTURE)
    window = int(np.clip(np.floor(margin * np.median(pixel_mm) * 0.9 - 1.0), 2, limit))
    reach = 2.0 * window + 2
    inside = np.all((predicted > reach) & (predicted < np.array(frame) - 1 - reach), axis=1)
    target, predicted = board.saddles[inside], predicted[inside]
    if len(predicted) < 6:
        return None
    criteria = (cv2.TERM_CRITERIA_EPS + cv2.TERM_CRITERIA_MAX_ITER, 40, 1e-3)
    refined = cv2.cornerSubPix(
        grey, predicted.astype(np.float32).reshape(-1, 1, 2).copy(), (window, window), (-1, -1), criteria
    )
    refined = refined.reshape(-1, 2).astype(float)
    kept = (np.linalg.norm(refined - predicted, axis=1) < window) & _looks_like_saddle(
        grey, rough, board, target, refined
    )
    target, refined = target[kept], refined[kept]
    kept = _inliers(target, refined, frame)
    if kept.sum() < 6:
        return None
    return Sighting(board, target[kept], refined[kept], float(kept.sum() / len(board.saddles)))


def _consistent_plane(target: Array, pixels: Array, frame: tuple[int, int]) -> Plane | None:
    """The plane of the marker corners after dropping misread markers."""
    # A tolerance that lets lens distortion through but no misread marker.
    tolerance = 0.01 * max(frame)
    _, mask = cv2.findHomography(target, pixels, cv2.RANSAC, tolerance)
    if mask is None:
        return None
    good = mask.ravel().astype(bool)
    if good.sum() < 6:
        return None
    plane = fit_plane([Correspondences(target[good], pixels[good])], frame)
    off = np.linalg.norm(plane.to_pixels(target[good]) - pixels[good], axis=1)
    close = off < max(3.0, 4 * float(np.median(off)))
    return fit_plane([Correspondences(target[good][close], pixels[good][close])], frame)


def _looks_like_saddle(
    grey: NDArray[np.uint8], rough: Plane, board: Board, target: Array, refined: Array
) -> NDArray[np.bool_]:
    """Whether the four squares around each corner alternate dark and light as printed."""
    reach = (board.square_mm - board.marker_mm) / 2 * 0.6
    signs = np.array([[1, 1], [-1, 1], [-1, -1], [1, -1]])
    expected = rough.to_pixels(target)
    tones = []
    for sign in signs:
        place = rough.to_pixels(target + reach * sign) - expected + refined
        x, y = np.rint(place).astype(int).T
        tones.append(grey[np.clip(y, 0, grey.shape[0] - 1), np.clip(x, 0, grey.shape[1] - 1)].astype(float))
    tone = np.array(tones)
    column = np.rint(target[:, 0] / board.square_mm).astype(int)
    row = board.rows - np.rint(target[:, 1] / board.square_mm).astype(int)
    upper_right_black = board.black[row - 1, column]
    dark = np.where(upper_right_black, tone[[0, 2]].max(axis=0), tone[[1, 3]].max(axis=0))
    light = np.where(upper_right_black, tone[[1, 3]].min(axis=0), tone[[0, 2]].min(axis=0))
    contrast = light - dark
    return contrast > 0.4 * np.median(contrast)


def _inliers(target: Array, refined: Array, frame: tuple[int, int]) -> NDArray[np.bool_]:
    """Corners in family with a smooth plane; a hidden or soiled corner stands out by far."""
    kept = np.ones(len(target), bool)
    for _ in range(4):
        if kept.sum() < 6:
            return np.zeros(len(target), bool)
        plane = fit_plane([Correspondences(target[kept], refined[kept])], frame)
        off = np.linalg.norm(plane.to_pixels(target) - refined, axis=1)
        # 1.18 makes the median of a Rayleigh distance a standard deviation; four of them lose nothing by chance.
        limit = max(4.0 * float(np.median(off[kept])) / 1.18, 0.15)
        new = off < limit
        if np.array_equal(new, kept):
            break
        kept = new
    return kept
