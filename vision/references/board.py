"""The coded boards that `cutface` prints: which squares and markers they have, and where.

Sheets (a ring of checker squares around a blank window) and cards (a full small board) are the
same thing. Everything about a board follows from the numbers of its markers, so a picture needs
no option to say what is in it. Knows nothing of pictures or of printing.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property

import numpy as np
from numpy.typing import NDArray

# OpenCV's predefined dictionary of 5 x 5 bit markers; 7 modules a side with the black border.
DICTIONARY = "DICT_5X5_1000"
MODULES = 7


@dataclass(frozen=True)
class Board:
    """A printed checker board whose white squares carry markers.

    Board coordinates are mm, origin at the lower left corner of the checker, x right, y up.
    Rows are counted from the top, columns from the left; the square (0, 0) is black.

    name : "A4", "card 3", ...
    columns, rows : squares
    square_mm, marker_mm : side of a square and of a marker
    first_id : marker number of the first white square, row by row from the top left
    window : (first column, first row, columns, rows) of the blank inside, or None
    paper_mm : (width, height) of the paper the sheet is printed on, or None for a card
    """

    name: str
    columns: int
    rows: int
    square_mm: float
    marker_mm: float
    first_id: int
    window: tuple[int, int, int, int] | None = None
    paper_mm: tuple[float, float] | None = None

    @property
    def size_mm(self) -> tuple[float, float]:
        """Width and height of the checker, mm."""
        return self.columns * self.square_mm, self.rows * self.square_mm

    @cached_property
    def squares(self) -> NDArray[np.bool_]:
        """(rows, columns) True where a checker square is printed (black or white with marker)."""
        printed = np.ones((self.rows, self.columns), bool)
        if self.window is not None:
            column, row, columns, rows = self.window
            printed[row : row + rows, column : column + columns] = False
        return printed

    @cached_property
    def black(self) -> NDArray[np.bool_]:
        """(rows, columns) True where a square is printed black."""
        row, column = np.indices((self.rows, self.columns))
        return self.squares & ((row + column) % 2 == 0)

    @cached_property
    def marker_squares(self) -> NDArray[np.intp]:
        """(m, 2) row and column of each marker's square, in the order of their numbers."""
        return np.argwhere(self.squares & ~self.black)

    @property
    def ids(self) -> range:
        """The numbers of the board's markers."""
        return range(self.first_id, self.first_id + len(self.marker_squares))

    @cached_property
    def marker_corners(self) -> NDArray[np.float64]:
        """(m, 4, 2) corners of each marker, mm, clockwise on paper from its top left."""
        margin = (self.square_mm - self.marker_mm) / 2
        row, column = self.marker_squares.T
        left = column * self.square_mm + margin
        top = (self.rows - row) * self.square_mm - margin
        right, bottom = left + self.marker_mm, top - self.marker_mm
        return np.stack([left, top, right, top, right, bottom, left, bottom], axis=-1).reshape(-1, 4, 2)

    @cached_property
    def saddles(self) -> NDArray[np.float64]:
        """(k, 2) inner checker corners that touch four printed squares, mm.

        Where two black and two white squares meet point to point, the place does not depend on
        where between black and white the edge is read: corners are free of edge bias.
        """
        s = self.squares
        complete = s[:-1, :-1] & s[:-1, 1:] & s[1:, :-1] & s[1:, 1:]
        row, column = np.argwhere(complete).T
        return np.stack([(column + 1) * self.square_mm, (self.rows - 1 - row) * self.square_mm], axis=-1).astype(float)

    @property
    def window_mm(self) -> tuple[float, float, float, float] | None:
        """(x0, y0, x1, y1) of the blank window, mm, or None."""
        if self.window is None:
            return None
        column, row, columns, rows = self.window
        s = self.square_mm
        return column * s, (self.rows - row - rows) * s, (column + columns) * s, (self.rows - row) * s


def _ring(name: str, columns: int, rows: int, square: float, first_id: int, paper: tuple[float, float]) -> Board:
    # Three squares wide: two rows of corners all round fix the plane and the lens.
    window = (3, 3, columns - 6, rows - 6)
    return Board(name, columns, rows, square, 0.7 * square, first_id, window, paper)


SHEETS: dict[str, Board] = {
    "A4": _ring("A4", 19, 27, 10.0, 0, (210.0, 297.0)),
    "A3": _ring("A3", 19, 28, 14.0, 130, (297.0, 420.0)),
    "Letter": _ring("Letter", 19, 25, 10.0, 260, (215.9, 279.4)),
    "Tabloid": _ring("Tabloid", 18, 29, 14.0, 390, (279.4, 431.8)),
}

# Two sets of loose cards: a small one for joists and rolled sections, a large one for deep members.
CARD_SETS: dict[str, tuple[Board, ...]] = {
    "small": tuple(Board(f"card {n + 1}", 6, 5, 12.0, 8.4, 520 + 15 * n) for n in range(12)),
    "large": tuple(Board(f"card {n + 21}", 6, 5, 20.0, 14.0, 700 + 15 * n) for n in range(12)),
}

BOARDS: tuple[Board, ...] = (*SHEETS.values(), *CARD_SETS["small"], *CARD_SETS["large"])
