"""The reference sheets and cards as printed pages: where everything stands on the paper.

Knows paper, printers' margins and what people need to read on the page. What a board looks like is the
board's own business, how a page becomes a file that of the drawing.
"""

from __future__ import annotations

import re
from collections.abc import Iterator, Sequence
from pathlib import Path
from typing import Literal

import numpy as np
from numpy.typing import NDArray

from ..props.errors import UsageError
from ..vision.references.board import CARD_SETS, DICTIONARY, MODULES, SHEETS, Board
from .capture_guide import guide_page
from .drawing import Boxes, Drawing, Item, Polygon, Text, line, pdf, png, svg
from .output_folder import output_folder

Kind = Literal["sheet", "small cards", "large cards"]
KINDS: tuple[Kind, ...] = ("sheet", "small cards", "large cards")
FORMATS = ("pdf", "svg", "png")
PAPERS_MM = {name: board.paper_mm for name, board in SHEETS.items() if board.paper_mm is not None}
CARD_PAPERS = ("A4", "Letter")

# Common practice: laser and ink-jet printers reach to within 5 mm of the paper's edge.
PRINTER_MARGIN = 5.0
# White kept round the checker, so that nothing beside it can be taken for a part of it.
QUIET_ZONE = 4.0
CHECK_LENGTH = 140.0

_SIZE, _SMALL, _TITLE = 2.5, 2.2, 3.2
_STRIP = 4.6
_CUT_GREY = 0.6
_TEXT_WIDTH = 164.0

_PRINTING = "Print at 100 % (actual size), never 'fit to page'."
_CAPTURE = (
    "Lay flat and level with the cut face. Camera square on, far back; all black squares in the picture, "
    "soft light, no glare."
)


def write_reference(
    kind: Kind,
    paper: str,
    folder: Path,
    formats: Sequence[str] = ("pdf",),
    *,
    dpi: float = 600,
    replace: bool = False,
) -> list[Path]:
    """Write a sheet, or a set of cards, at true size.

    paper : A4, A3, Letter, Tabloid for a sheet; A4 or Letter for cards
    formats : any of "pdf" (all pages and the guide), "svg", "png" (one file a page)
    dpi : of the PNG
    replace : write over files of the same names
    Returns the files written. Raises UsageError for a kind, paper, format or resolution there is not, or if files
    are in the way; FileError if they cannot be written.
    """
    unknown = [name for name in formats if name not in FORMATS]
    if unknown or not formats:
        raise UsageError(
            "unknown-format",
            f"There is no format {', '.join(unknown) or '(none)'}.",
            f"Choose of {', '.join(FORMATS)}.",
        )
    if not 100 <= dpi <= 2400:
        raise UsageError("resolution", f"{dpi:g} dots per inch is out of range.", "Choose 100 to 2400.")
    pages = reference_pages(kind, paper)
    name = f"reference_{kind.replace(' ', '_')}_{paper}"
    title = pages[0].title if kind == "sheet" else f"Reference cards, {kind.split()[0]} set, on {paper}"
    with output_folder(folder, re.compile(rf"{name}(_page_\d+)?\.({'|'.join(formats)})"), replace=replace) as draft:
        if "pdf" in formats:
            (draft / f"{name}.pdf").write_bytes(pdf([*pages, guide_page(*PAPERS_MM[paper])], title))
        for number, page in enumerate(pages, 1):
            stem = name if len(pages) == 1 else f"{name}_page_{number}"
            if "svg" in formats:
                (draft / f"{stem}.svg").write_bytes(svg(page))
            if "png" in formats:
                (draft / f"{stem}.png").write_bytes(png(page, dpi))
        written = sorted(file.name for file in draft.iterdir())
    return [folder / file for file in written]


def reference_pages(kind: Kind, paper: str) -> tuple[Drawing, ...]:
    """The pages of a sheet or of a set of cards. Raises UsageError for a kind or paper there is not."""
    if kind not in KINDS:
        raise UsageError("unknown-reference", f"There is no reference '{kind}'.", f"Choose of: {', '.join(KINDS)}.")
    papers = tuple(SHEETS) if kind == "sheet" else CARD_PAPERS
    if paper not in papers:
        raise UsageError("unknown-paper", f"There is no {kind} for {paper}.", f"Choose of: {', '.join(papers)}.")
    if kind == "sheet":
        return (sheet_drawing(SHEETS[paper]),)
    return card_page_drawings(kind.split()[0], paper)


def sheet_drawing(board: Board) -> Drawing:
    """The page of a reference sheet."""
    if board.paper_mm is None:
        raise ValueError(f"{board.name} is not a sheet")
    width, height = board.paper_mm
    x, y = sheet_origin(board)
    columns, rows = board.size_mm
    items: list[Item] = [Boxes(black_boxes(board) + np.array([x, y, x, y]))]

    # Under the checker: check length, title, one line of guidance.
    hint, title = PRINTER_MARGIN + 0.25 * _SIZE, PRINTER_MARGIN + 0.25 * _SIZE + 1.5 * _SIZE
    items.append(Text(x, hint, _CAPTURE, _fitting(_CAPTURE, _SIZE, columns)))
    items.append(Text(x, title, f"Reference sheet {board.name}", _TITLE, bold=True))
    about = f"{board.square_mm:g} mm squares, markers {board.ids[0]} to {board.ids[-1]}"
    items.append(Text(x + columns, title, f"{about}. {_PRINTING}", _SIZE, "right"))
    items += _check_level(x + (columns - CHECK_LENGTH) / 2, (title + 0.8 * _TITLE + y - QUIET_ZONE) / 2)

    # Left of the checker: the other check length, and which way is up.
    middle = (PRINTER_MARGIN + x - QUIET_ZONE) / 2
    items += _check_upright(middle, y + (rows - CHECK_LENGTH) / 2)
    items += _up_arrow(middle, y + rows - 9)
    return Drawing(f"Reference sheet {board.name}", width, height, tuple(items))


def sheet_origin(board: Board) -> tuple[float, float]:
    """Where the lower left corner of a sheet's checker stands on its paper, mm."""
    assert board.paper_mm is not None
    (width, height), (columns, rows) = board.paper_mm, board.size_mm
    beside = PRINTER_MARGIN + _STRIP + QUIET_ZONE
    left = max(beside, (width - columns) / 2)
    below = min(20.0, height - rows - PRINTER_MARGIN - 1)
    return left, below


def card_page_drawings(card_set: str, paper: str) -> tuple[Drawing, ...]:
    """The pages of a set of cards ("small" or "large")."""
    cards = CARD_SETS[card_set]
    per_page = len(card_origins(cards[0], paper))
    count = -(-len(cards) // per_page)
    return tuple(
        _card_page(cards[per_page * i : per_page * (i + 1)], card_set, paper, i + 1, count) for i in range(count)
    )


def card_origins(card: Board, paper: str) -> list[tuple[float, float]]:
    """Lower left corners of the checkers of one page of cards, mm, row by row from the top."""
    width, height = PAPERS_MM[paper]
    cell_x, cell_y = _cell(card)
    columns = int((min(PAPERS_MM[name][0] for name in CARD_PAPERS) - 2 * PRINTER_MARGIN - 10) // cell_x)
    rows = int((min(PAPERS_MM[name][1] for name in CARD_PAPERS) - 2 * PRINTER_MARGIN - 20) // cell_y)
    # Left of the block stands the upright check length, below it the level one and the title.
    left = (width - columns * cell_x + 10) / 2
    below = (height - rows * cell_y + 16) / 2
    return [
        (left + column * cell_x + _CARD_SIDE, below + (rows - 1 - row) * cell_y + _CARD_BELOW)
        for row in range(rows)
        for column in range(columns)
    ]


# White between the checker of a card and the cut; below it stands the label.
_CARD_SIDE, _CARD_BELOW = 5.0, 9.0


def _cell(card: Board) -> tuple[float, float]:
    return card.size_mm[0] + 2 * _CARD_SIDE, card.size_mm[1] + _CARD_SIDE + _CARD_BELOW


def _card_page(cards: Sequence[Board], card_set: str, paper: str, number: int, count: int) -> Drawing:
    width, height = PAPERS_MM[paper]
    origins = card_origins(cards[0], paper)
    cell_x, cell_y = _cell(cards[0])
    items: list[Item] = []
    for card, (x, y) in zip(cards, origins, strict=False):
        items += _cut_lines(x - _CARD_SIDE, y - _CARD_BELOW, cell_x, cell_y)
        items.append(Boxes(black_boxes(card) + np.array([x, y, x, y])))
        label = y - QUIET_ZONE - 0.8 * _TITLE
        items.append(Text(x, label, card.name.capitalize(), _TITLE, bold=True))
        about = f"{card_set} set, {card.square_mm:g} mm squares, markers {card.ids[0]} to {card.ids[-1]}"
        items.append(
            Text(x + card.size_mm[0] - 5, label, about, _fitting(about, _SMALL, card.size_mm[0] - 28), "right")
        )
        items.append(_arrow_head(x + card.size_mm[0] - 1.5, label - 0.2, 3.0, 2.6))
    left, below = origins[0][0] - _CARD_SIDE, origins[-1][1] - _CARD_BELOW
    right, upright = origins[-1][0] + cards[0].size_mm[0] + _CARD_SIDE, left - 6.5
    items += _check_upright(upright, below + (cell_y * len({y for _, y in origins}) - CHECK_LENGTH) / 2)
    items += _up_arrow(upright, origins[0][1] + cards[0].size_mm[1] - 4)

    # A single column of cards is narrower than what is to be read under it.
    left, right = min(left, (left + right - _TEXT_WIDTH) / 2), max(right, (left + right + _TEXT_WIDTH) / 2)
    hint, title = below - 16 + 0.25 * _SIZE, below - 16 + 1.75 * _SIZE
    page = f"Reference cards, {card_set} set, page {number} of {count}"
    items.append(Text(left, title, page, _TITLE, bold=True))
    items.append(Text(right, title, f"{paper}. {_PRINTING}", _SIZE, "right"))
    advice = (
        "Check both lengths, then cut along the grey lines. Glue each card to a flat stiff plate; "
        "two or more, on opposite sides of the face."
    )
    items.append(Text(left, hint, advice, _fitting(advice, _SIZE, right - left)))
    items += _check_level((left + right - CHECK_LENGTH) / 2, below - 5.5)
    return Drawing(page, width, height, tuple(items))


def black_boxes(board: Board) -> NDArray[np.float64]:
    """(n, 4) black rectangles of a board in its own coordinates, mm: squares and the markers' modules."""
    side = board.square_mm
    row, column = np.argwhere(board.black).T
    left, bottom = column * side, (board.rows - 1 - row) * side
    squares = np.stack([left, bottom, left + side, bottom + side], axis=-1)
    module = board.marker_mm / MODULES
    boxes = [squares]
    for number, corners in zip(board.ids, board.marker_corners, strict=True):
        runs = np.array(list(_runs(marker_modules(number))), float)
        boxes.append(np.tile(corners[0], 2) + runs * np.array([1, -1, 1, -1]) * module)
    return np.concatenate(boxes).astype(np.float64)


def marker_modules(number: int) -> NDArray[np.bool_]:
    """(MODULES, MODULES) True where a module of a marker is black, border included."""
    import cv2

    dictionary = cv2.aruco.getPredefinedDictionary(getattr(cv2.aruco, DICTIONARY))
    return np.asarray(cv2.aruco.generateImageMarker(dictionary, number, MODULES)) == 0


def _runs(black: NDArray[np.bool_]) -> Iterator[tuple[int, int, int, int]]:
    """(left, bottom, right, top) of level runs of black modules, in modules right and down from the top left."""
    for row, modules in enumerate(black):
        steps = np.flatnonzero(np.diff(np.concatenate([[0], modules.astype(int), [0]])))
        for start, end in steps.reshape(-1, 2):
            yield int(start), row + 1, int(end), row


def _check_level(x: float, y: float) -> list[Item]:
    label = f"{CHECK_LENGTH:g} mm from left edge to left edge"
    room = Text(0, 0, label, _SIZE).width / 2 + 1.5
    middle = x + CHECK_LENGTH / 2
    return [
        line(x, y - 1.5, x, y + 1.5),
        line(x + CHECK_LENGTH, y - 1.5, x + CHECK_LENGTH, y + 1.5),
        line(x, y, middle - room, y, 0.12),
        line(middle + room, y, x + CHECK_LENGTH, y, 0.12),
        Text(middle, y - 0.35 * _SIZE, label, _SIZE, "centre"),
    ]


def _check_upright(x: float, y: float) -> list[Item]:
    label = f"{CHECK_LENGTH:g} mm from upper edge to upper edge"
    room = Text(0, 0, label, _SIZE).width / 2 + 1.5
    middle = y + CHECK_LENGTH / 2
    return [
        line(x - 1.5, y, x + 1.5, y),
        line(x - 1.5, y + CHECK_LENGTH, x + 1.5, y + CHECK_LENGTH),
        line(x, y, x, middle - room, 0.12),
        line(x, middle + room, x, y + CHECK_LENGTH, 0.12),
        Text(x + 0.35 * _SIZE, middle, label, _SIZE, "centre", turned=True),
    ]


def _up_arrow(x: float, y: float) -> list[Item]:
    """An arrow whose point is at (x, y + 8) and the word beside its shaft's foot."""
    return [
        line(x, y, x, y + 6, 0.5),
        _arrow_head(x, y + 5, 3.0, 3.0),
        Text(x, y - 1 - 0.8 * _SMALL, "up", _SMALL, "centre"),
    ]


def _arrow_head(x: float, y: float, width: float, height: float) -> Polygon:
    return Polygon(np.array([[x - width / 2, y], [x + width / 2, y], [x, y + height]]))


def _cut_lines(x: float, y: float, width: float, height: float) -> list[Item]:
    corners = ((x, y, x + width, y), (x, y + height, x + width, y + height), (x, y, x, y + height))
    sides = (*corners, (x + width, y, x + width, y + height))
    return [line(*side, 0.1, _CUT_GREY) for side in sides]


def _fitting(text: str, size: float, width: float) -> float:
    """The size of type, at most `size`, at which a line is no longer than `width`."""
    return min(size, size * width / Text(0, 0, text, size).width)
