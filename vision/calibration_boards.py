"""Boards that a camera can be calibrated with, and where their corners are in a photo.

Knows our own printed sheets and cards, and ChArUco boards of others; a plain chessboard is in
`references.chessboard`. Does not know what is made of the corners.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass
from functools import partial
from typing import Protocol

import numpy as np
from numpy.typing import NDArray

from ..props.errors import UsageError
from .photo import Photo
from .references.reference import Mapper, PrintEdges

Array = NDArray[np.float64]

# Below this share of a board's corners what is seen is a corner of it, which tells little of the lens.
LEAST_SHARE = 0.5


@dataclass(frozen=True)
class BoardSighting:
    """One rigid board in one photo.

    target : (k, 2) mm on it; pixels : (k, 2) of the upright photo
    edges : (the photo again, the board's fitted plane) -> edges between its black and white; None where it has none to
        ask. The photo is handed over anew, so that a sighting does not keep its pixels.
    """

    target: Array
    pixels: Array
    edges: Callable[[Photo, Mapper], PrintEdges] | None = None


class CalibrationBoard(Protocol):
    """Something flat with corners at known places."""

    @property
    def label(self) -> str:
        """What it is, in words."""
        ...

    def sightings(self, photo: Photo) -> Sequence[BoardSighting]:
        """The boards seen well enough in a photo; empty where there is none."""
        ...


@dataclass(frozen=True)
class PrintedBoards:
    """Our own sheets or cards: whatever of them lies in the photo, each board for itself."""

    @property
    def label(self) -> str:
        """What it is, in words."""
        return "a printed sheet or card"

    def sightings(self, photo: Photo) -> list[BoardSighting]:
        """Sheets and cards of which at least half of the corners are seen."""
        from .measure import grey
        from .references.coded import Sighting, find_boards
        from .references.printed import PrintCheck, square_edges

        def edges(sighting: Sighting, photo: Photo, plane: Mapper) -> PrintEdges:
            return square_edges([(sighting, plane.to_pixels)], PrintCheck())

        return [
            BoardSighting(s.target, s.pixels, partial(edges, s))
            for s in find_boards(grey(photo))
            if s.share >= LEAST_SHARE
        ]


@dataclass(frozen=True)
class CharucoBoard:
    """A ChArUco board: a chessboard whose white squares carry ArUco markers.

    columns, rows : squares
    square_mm, marker_mm : sides of a square and of a marker
    dictionary : name of OpenCV's predefined dictionary, e.g. "DICT_5X5_100"
    """

    columns: int
    rows: int
    square_mm: float
    marker_mm: float
    dictionary: str = "DICT_5X5_100"

    def __post_init__(self) -> None:
        import cv2

        if not (0 < self.marker_mm < self.square_mm and self.columns >= 3 and self.rows >= 3):
            raise UsageError(
                "charuco-size",
                f"A ChArUco board of {self.columns} x {self.rows} squares of {self.square_mm:g} mm with markers of "
                f"{self.marker_mm:g} mm cannot be.",
                "State squares across and up (3 at least), and a marker smaller than a square.",
            )
        if not self.dictionary.startswith("DICT_") or not hasattr(cv2.aruco, self.dictionary):
            raise UsageError(
                "charuco-dictionary",
                f"There is no marker dictionary {self.dictionary!r}.",
                "State the one the board was made with, for example DICT_4X4_50 or DICT_5X5_100.",
            )

    @property
    def label(self) -> str:
        """What it is, in words."""
        return f"a ChArUco board of {self.columns} x {self.rows} squares"

    def sightings(self, photo: Photo) -> list[BoardSighting]:
        """The board where at least half of its corners are seen, refined at full size clear of the markers."""
        import cv2

        from .measure import grey

        picture = grey(photo)
        dictionary = cv2.aruco.getPredefinedDictionary(getattr(cv2.aruco, self.dictionary))
        board = cv2.aruco.CharucoBoard((self.columns, self.rows), self.square_mm, self.marker_mm, dictionary)
        corners, numbers, _, _ = cv2.aruco.CharucoDetector(board).detectBoard(picture)
        total = (self.columns - 1) * (self.rows - 1)
        if numbers is None or len(numbers) < max(6, LEAST_SHARE * total):
            return []
        pixels = corners.reshape(-1, 2).astype(float)
        places: Array = np.array(board.getChessboardCorners(), dtype=float).reshape(-1, 3)[:, :2] * (1.0, -1.0)
        target = places[np.asarray(numbers, int).ravel()]
        step = np.linalg.norm(pixels[:, None] - pixels[None], axis=2)
        step[step == 0] = np.inf
        margin = 0.5 * (1 - self.marker_mm / self.square_mm) * float(np.median(step.min(axis=1)))
        window = int(np.clip(np.floor(0.9 * margin - 1.0), 2, 9))
        criteria = (cv2.TERM_CRITERIA_EPS + cv2.TERM_CRITERIA_MAX_ITER, 40, 1e-3)
        refined = cv2.cornerSubPix(
            picture, pixels.astype(np.float32).reshape(-1, 1, 2), (window, window), (-1, -1), criteria
        )
        return [BoardSighting(target, refined.reshape(-1, 2).astype(float))]
