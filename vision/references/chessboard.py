"""A plain chessboard of stated squares as scale reference, or as board to calibrate a camera with.

Its inner corners are saddle points, free of edge bias. Knows how to find them all, in any quarter turn; does not
read boards of which a corner is missing.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from functools import partial
from typing import Any

import numpy as np
from numpy.typing import NDArray

from ...props.errors import Refusal, UsageError
from ..calibration_boards import BoardSighting
from ..photo import Photo
from .pattern import Found, Pattern, edges_seen
from .printed import UNCHECKED_PRINT_SCALE
from .setting import Setting
from .stated import Key, Kind, pattern_fields, stated_pitch

Array = NDArray[np.float64]

# Boards are looked for on a picture of this size first: all that a search needs, at a fraction of the cost.
_SEARCH_SIZES = (1300, 2600, 5200)
# The refining window must not reach the neighbouring corner's edges.
_WINDOW_SHARE, _WINDOW_LIMIT = 0.45, 9
# The limit is for pictures of 12 megapixels; the finer pixels of larger ones share one blur.
_WINDOW_PICTURE = 4000
# A corner further than this part of a square from where its neighbours put it is a wrong one.
STRAY_SHARE = 0.35
_NEAR_PX = 5.0


@dataclass(frozen=True)
class Chessboard(Pattern):
    """A plain chessboard, seen wholly.

    columns, rows : inner corners (where four squares meet) along x and up
    square_mm : side of a square, or (along x, up)
    Other fields as in Pattern.
    """

    columns: int
    rows: int
    square_mm: float | tuple[float, float]

    def __post_init__(self) -> None:
        if not (self.columns >= 3 and self.rows >= 3 and min(self.sides) > 0 and self.scale_std >= 0):
            raise UsageError(
                "chessboard-size",
                f"A chessboard of {self.columns} x {self.rows} inner corners with squares of {self.square_mm} mm "
                "cannot be used.",
                "State inner corners (where four squares meet), three at least each way, and the side of a square, mm.",
            )

    @property
    def sides(self) -> tuple[float, float]:
        """Sides of a square along x and up, mm."""
        return self.square_mm if isinstance(self.square_mm, tuple) else (self.square_mm, self.square_mm)

    @property
    def label(self) -> str:
        """What it is, in words."""
        return f"a chessboard of {self.columns} x {self.rows} inner corners"

    @property
    def corners(self) -> Array:
        """(k, 2) mm, inner corners row by row from the top left; the origin is the lower left one."""
        row, column = np.divmod(np.arange(self.columns * self.rows), self.columns)
        return np.column_stack([column, self.rows - 1 - row]) * self.sides

    def sightings(self, photo: Photo) -> list[BoardSighting]:
        """The board where all its corners are seen."""
        from ..measure import grey

        pixels = find_chessboard(grey(photo), self.columns, self.rows)
        if pixels is None:
            return []
        return [BoardSighting(self.corners, pixels, partial(edges_seen, self._found(pixels)))]

    def find(self, photo: Photo) -> Found:
        """Where its corners are; raises Refusal when not all are seen."""
        seen = self.sightings(photo)
        if not seen:
            raise Refusal(
                "no-chessboard",
                f"The picture does not show {self.label} as a whole.",
                "Check the counts (corners where four squares meet, not squares); keep the whole board in the frame, "
                "in focus and free of glare.",
            )
        return self._found(seen[0].pixels)

    def _found(self, pixels: Array) -> Found:
        # The outer squares, and as much again of paper as half a square.
        half = 1.5 * np.array(self.sides)
        low, high = -half, half + np.array([self.columns - 1, self.rows - 1]) * self.sides
        return Found(
            kind="chessboard",
            label=self.label,
            target=self.corners,
            pixels=pixels,
            outline=np.array([low, (high[0], low[1]), high, (low[0], high[1])]),
            places=self._tones(),
            edges=self._edges(),
            clear=0.4 * min(self.sides),
        )

    def _tones(self) -> tuple[Array, Array]:
        """(k, 2) mm on squares of the colour of the lower left one within the corners, and of the other."""
        row, column = np.divmod(np.arange((self.columns - 1) * (self.rows - 1)), self.columns - 1)
        middle = np.column_stack([column + 0.5, row + 0.5])
        about = 0.25 * np.array([[1, 1], [-1, 1], [-1, -1], [1, -1]])
        places = (middle[:, None] + about[None]) * self.sides
        even = (row + column) % 2 == 0
        return places[even].reshape(-1, 2), places[~even].reshape(-1, 2)

    def _edges(self) -> tuple[Array, Array]:
        """(n, 2) mm on the edges between neighbouring corners, (n, 2) normals from the lower left square's colour."""
        points, normals = [], []
        for turned in (False, True):
            # Squares across and up of the board, or of the board laid on its side.
            columns, rows = (self.rows, self.columns) if turned else (self.columns, self.rows)
            column, row = (g.ravel() for g in np.meshgrid(np.arange(1, columns - 1), np.arange(rows - 1)))
            for along in (0.35, 0.5, 0.65):
                place = np.column_stack([column, row + along])
                # The square to the left of an edge has the first colour where its column and row add up evenly.
                outward = np.where((column - 1 + row) % 2 == 0, 1.0, -1.0)
                normal = np.column_stack([outward, np.zeros_like(outward)])
                points.append(place[:, ::-1] if turned else place)
                normals.append(normal[:, ::-1] if turned else normal)
        return np.concatenate(points) * self.sides, np.concatenate(normals)


def find_chessboard(picture: NDArray[np.uint8], columns: int, rows: int) -> Array | None:
    """(rows * columns, 2) px of all inner corners, row by row; None unless every one is found.

    picture : (h, w) grey as stored
    The first row is the upper one and each runs to the right as seen on the board, in that half turn (for a square
    board that quarter turn) in which the rows run down the picture.
    """
    import cv2

    longest = max(picture.shape)
    for size in _SEARCH_SIZES:
        scale = min(1.0, size / longest)
        small = picture
        if scale < 1.0:
            shape = (round(picture.shape[1] * scale), round(picture.shape[0] * scale))
            small = cv2.resize(picture, shape, interpolation=cv2.INTER_AREA)
        flags = cv2.CALIB_CB_EXHAUSTIVE | cv2.CALIB_CB_ACCURACY | cv2.CALIB_CB_NORMALIZE_IMAGE
        found, corners = cv2.findChessboardCornersSB(small, (columns, rows), flags=flags)
        if not found:
            flags = cv2.CALIB_CB_ADAPTIVE_THRESH | cv2.CALIB_CB_NORMALIZE_IMAGE | cv2.CALIB_CB_FAST_CHECK
            found, corners = cv2.findChessboardCorners(small, (columns, rows), flags=flags)
        if found:
            ratio = np.array([picture.shape[1] / small.shape[1], picture.shape[0] / small.shape[0]])
            rough = (corners.reshape(-1, 2).astype(float) + 0.5) * ratio - 0.5
            refined = _refined(picture, rough.reshape(rows, columns, 2))
            return None if refined is None else _upright(refined).reshape(-1, 2)
        if scale == 1.0:
            return None
    return None


def _refined(picture: NDArray[np.uint8], rough: Array) -> Array | None:
    """(rows, columns, 2) saddle points at full size; None where one cannot be found.

    A corner that is no saddle is looked for again, more widely, from where its neighbours say it is.
    """
    nearest = _nearest(rough)
    refined = _saddles(picture, rough, nearest, _WINDOW_LIMIT)
    for _ in range(2):
        expected = _expected(refined)
        stray = np.linalg.norm(refined - expected, axis=2) > STRAY_SHARE * nearest
        stray |= ~_alternating(picture, refined, nearest)
        if not stray.any():
            return refined
        near = _saddles(picture, np.where(stray[..., None], expected, refined), nearest, 3 * _WINDOW_LIMIT)
        again = _saddles(picture, near, nearest, _WINDOW_LIMIT)
        refined = np.where(stray[..., None], again, refined)
    return None


def _nearest(corners: Array) -> Array:
    """(rows, columns) px from each corner to the nearest along its row and column."""
    nearest = np.full(corners.shape[:2], np.inf)
    for axis in (0, 1):
        step = np.swapaxes(np.linalg.norm(np.diff(corners, axis=axis), axis=2), 0, axis)
        along = np.swapaxes(nearest, 0, axis)
        np.minimum(along[1:], step, out=along[1:])
        np.minimum(along[:-1], step, out=along[:-1])
    return nearest


def _saddles(picture: NDArray[np.uint8], start: Array, nearest: Array, limit: int) -> Array:
    """(rows, columns, 2) saddle points nearest to `start`, in windows of at most `limit` px clear of the neighbours."""
    import cv2

    most = limit * max(1.0, max(picture.shape) / _WINDOW_PICTURE)
    window = np.clip(np.floor(_WINDOW_SHARE * nearest - 1.0), 2, most).astype(int)
    refined = start.copy()
    criteria = (cv2.TERM_CRITERIA_EPS + cv2.TERM_CRITERIA_MAX_ITER, 60, 1e-3)
    for size in np.unique(window):
        chosen = window == size
        begin = start[chosen].astype(np.float32).reshape(-1, 1, 2)
        half = (int(size), int(size))
        refined[chosen] = cv2.cornerSubPix(picture, begin, half, (-1, -1), criteria).reshape(-1, 2)
    return refined


def _expected(corners: Array) -> Array:
    """(rows, columns, 2) where each corner lies by a quadratic through its neighbours, itself left out.

    Up to two corners away each way; perspective and lens leave less than a fifth of a square, a wrong corner more.
    """
    rows, columns = corners.shape[:2]
    expected = np.empty_like(corners)
    for row in range(rows):
        for column in range(columns):
            top, left = min(max(row - 2, 0), max(rows - 5, 0)), min(max(column - 2, 0), max(columns - 5, 0))
            part = corners[top : top + 5, left : left + 5]
            v, u = (g.ravel() for g in np.indices(part.shape[:2], dtype=float))
            u, v = u - (column - left), v - (row - top)
            own = (u == 0) & (v == 0)
            design = np.stack([np.ones_like(u), u, v, u * u, u * v, v * v], axis=1)
            # Near ones say more; the distance of one square keeps far ones from deciding.
            weight = np.where(own, 0.0, 1 / (u * u + v * v + 1e-9))[:, None]
            seen = part.reshape(-1, 2)
            expected[row, column] = np.linalg.lstsq(weight * design, weight * seen, rcond=None)[0][0]
    return expected


def _alternating(picture: NDArray[np.uint8], corners: Array, nearest: Array) -> NDArray[np.bool_]:
    """(rows, columns) whether the squares just about each corner are dark and light in turn, as on a chessboard."""
    right, down = np.gradient(corners, axis=1), np.gradient(corners, axis=0)
    height, width = picture.shape
    # Close by, so that only a point within a few pixels of the saddle passes.
    share = np.minimum(0.3, _NEAR_PX / nearest)[..., None]

    def tone(place: Array) -> Array:
        x, y = np.rint(place).astype(int).reshape(-1, 2).T
        values = picture[np.clip(y, 0, height - 1), np.clip(x, 0, width - 1)]
        return values.reshape(corners.shape[:2]).astype(float)

    one = np.stack([tone(corners + sign * share * (right + down)) for sign in (1, -1)])
    other = np.stack([tone(corners + sign * share * (right - down)) for sign in (1, -1)])
    even = np.indices(corners.shape[:2]).sum(axis=0) % 2 == 0
    first, second = np.where(even, one, other), np.where(even, other, one)
    gap = first.min(axis=0) - second.max(axis=0)
    if np.median(gap) < 0:
        gap = second.min(axis=0) - first.max(axis=0)
    return gap > 0.3 * np.median(gap)


def _upright(corners: Array) -> Array:
    """The (rows, columns, 2) corners seen from the front, rows running down the picture."""
    rows, columns = corners.shape[:2]
    right = (corners[:, -1] - corners[:, 0]).mean(axis=0)
    down = (corners[-1] - corners[0]).mean(axis=0)
    # Pixels have y down: seen from the front, a quarter turn with the clock leads from right to down.
    if right[0] * down[1] - right[1] * down[0] < 0:
        corners = corners[::-1]
    turns = range(4) if rows == columns else (0, 2)
    return max((np.rot90(corners, k) for k in turns), key=lambda c: float((c[-1] - c[0])[:, 1].mean()))


def _stated(values: Mapping[str, Any], setting: Setting) -> Chessboard:
    columns, rows = values["columns"], values["rows"]
    pitch = stated_pitch(values)
    whole = min((max(columns, 2) - 1) * pitch[0], (max(rows, 2) - 1) * pitch[1])
    return Chessboard(columns=columns, rows=rows, square_mm=pitch, **pattern_fields(values, setting, whole))


KINDS = (
    Kind(
        "chessboard",
        "a plain chessboard, wholly seen; its inner corners are found",
        (
            Key("columns", "count", "inner corners (where four squares meet) along a row", required=True),
            Key("rows", "count", "inner corners along a column", required=True),
            Key("pitch", "length", "side of a square", required=True),
            Key("pitch-up", "length", "the same up the board, where it differs"),
            Key("u", "length", "standard uncertainty of the shorter way from first to last corner, as measured"),
        ),
        f"The print: {100 * UNCHECKED_PRINT_SCALE:g} % in either direction (assumed: a print nobody measured).",
        "chessboard columns=9 rows=6 pitch=25",
        _stated,
    ),
)
