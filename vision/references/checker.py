"""A plain checker of stated pitch, of which nobody counted the squares.

Finds the largest lattice of corners there is and takes it as a chessboard of so many.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from ...props.errors import Refusal, UsageError
from ..photo import Photo
from .chessboard import Chessboard, find_chessboard
from .pattern import Found, Pattern
from .printed import UNCHECKED_PRINT_SCALE
from .reference import Reference
from .setting import Setting
from .stated import Key, Kind, pattern_fields

# Fewer corners each way do not show a plane and whether it is flat.
_LEAST_CORNERS = 3
_FEWER = ((0, 0), (1, 0), (0, 1), (1, 1), (2, 0), (0, 2))
# A lattice is grown from a part of it of this size; a large one tells best which part is whole.
_STARTS = ((5, 4), (4, 3), (3, 3))
_SEARCH_SIZES = (1300, 2600)


@dataclass(frozen=True)
class Checker(Pattern):
    """A plain checker with at least 3 x 3 corners where four squares meet.

    pitch_mm : side of a square; u_mm : of the shorter way from first to last corner found, None as `scale_std`
    Other fields as in Pattern.
    """

    pitch_mm: float
    u_mm: float | None = None

    def __post_init__(self) -> None:
        if not self.pitch_mm > 0:
            raise UsageError(
                "checker-pitch", f"A pitch of {self.pitch_mm:g} mm is none.", "State the side of a square in mm."
            )

    @property
    def label(self) -> str:
        """What it is, in words."""
        return f"a checker of {self.pitch_mm:g} mm squares"

    def find(self, photo: Photo) -> Found:
        """Where its corners are; raises Refusal where none is seen."""
        return self.counted(photo).find(photo)

    def locate(self, photo: Photo) -> Reference:
        """The Reference that the checker gives. Raises Refusal where none is seen or it does not lie flat."""
        return self.counted(photo).locate(photo)

    def counted(self, photo: Photo) -> Chessboard:
        """The same as a chessboard of so many corners; Refusal where none is seen."""
        from ..measure import grey

        picture = grey(photo)
        most = count_corners(picture)
        # Where paper or ground continue the pattern by chance, a row or column less is the board.
        fewer = [(most[0] - i, most[1] - j) for i, j in _FEWER] if most else []
        counts = next((n for n in fewer if min(n) >= _LEAST_CORNERS and find_chessboard(picture, *n) is not None), None)
        if counts is None:
            raise Refusal(
                "no-checker",
                f"No checker of {_LEAST_CORNERS} x {_LEAST_CORNERS} corners or more is seen in the picture.",
                "Keep it in focus and free of glare, go nearer, or state its counts as a chessboard.",
            )
        columns, rows = counts
        scale_std = self.scale_std
        if self.u_mm is not None:
            scale_std = self.u_mm / ((min(columns, rows) - 1) * self.pitch_mm)
        return Chessboard(
            columns=columns,
            rows=rows,
            square_mm=self.pitch_mm,
            scale_std=scale_std,
            role=self.role,
            face_height=self.face_height,
            face_height_std=self.face_height_std,
            camera=self.camera,
            focal_35mm=self.focal_35mm,
        )


def count_corners(picture: NDArray[np.uint8]) -> tuple[int, int] | None:
    """(columns, rows) of the largest lattice of corners in a grey picture (h, w); None without one."""
    import cv2

    longest = max(picture.shape)
    best: tuple[int, int] | None = None
    flags = cv2.CALIB_CB_EXHAUSTIVE | cv2.CALIB_CB_NORMALIZE_IMAGE | cv2.CALIB_CB_LARGER
    for size in _SEARCH_SIZES:
        scale = min(1.0, size / longest)
        shape = (round(picture.shape[1] * scale), round(picture.shape[0] * scale))
        small = picture if scale == 1.0 else cv2.resize(picture, shape, interpolation=cv2.INTER_AREA)
        for start in _STARTS:
            found, _, meta = cv2.findChessboardCornersSBWithMeta(small, start, flags)
            if not found:
                continue
            rows, columns = (int(n) for n in meta.shape[:2])
            if best is None or rows * columns > best[0] * best[1]:
                best = columns, rows
        if best is not None or scale == 1.0:
            break
    return best


def _stated(values: Mapping[str, Any], setting: Setting) -> Checker:
    fields = pattern_fields({}, setting, 1.0)
    return Checker(pitch_mm=values["pitch"], u_mm=values.get("u"), **fields)


KINDS = (
    Kind(
        "checker",
        "a plain checker of which nobody counted the squares; as many corners as are seen are used",
        (
            Key("pitch", "length", "side of a square", required=True),
            Key("u", "length", "standard uncertainty of the shorter way over all corners seen, as measured"),
        ),
        f"The print: {100 * UNCHECKED_PRINT_SCALE:g} % in either direction (assumed: a print nobody measured).",
        "checker pitch=20",
        _stated,
    ),
)
