"""Tables of points as text: two columns x and y, loops parted by a blank line or by a column that numbers them.

Columns are parted by comma, semicolon, tab or blanks; a comma is a decimal mark where semicolons, tabs or blanks part
the columns. A header is optional; it may carry the unit, as in "x_mm" or "x [in]". Every loop is closed.
"""

from __future__ import annotations

import re
from dataclasses import dataclass
from pathlib import Path

import numpy as np

from ..errors import FileError
from .reading import Reading, Request, Stroke
from .units import MILLIMETRES, unit_assumed

_LOOP_NAMES = ("loop", "outline", "ring", "part", "polygon", "hole")


@dataclass(frozen=True)
class _Columns:
    """Where x, y and (if any) the loop's name stand, and mm per unit if the header states it."""

    x: int
    y: int
    loop: int | None = None
    unit: float | None = None


def read_csv(path: Path, request: Request) -> Reading:
    """The loops of a table of points, mm.

    Raises FileError with the line number for a value that is no number, or columns that are not clear.
    """
    try:
        lines = path.read_text(encoding="utf-8-sig").splitlines()
    except UnicodeDecodeError:
        raise FileError("not-text", f"{path.name} is not a text file.", "Save the points as UTF-8 text.") from None
    separator = _separator(lines)
    columns: _Columns | None = None
    loops: list[tuple[int, list[tuple[float, float]]]] = []
    current: str | None = None
    for number, line in enumerate(lines, start=1):
        text = line.split("#", 1)[0].strip()
        if not text.strip(",; \t"):
            if not line.strip().startswith("#"):  # a comment does not part two loops
                current = None
            continue
        cells = [c.strip().strip('"') for c in (text.split() if separator == " " else text.split(separator))]
        if columns is None:
            columns = _columns(cells, separator, number, path.name)
            if _number(cells[0], separator) is None:
                continue
        cell = cells[columns.loop] if columns.loop is not None and columns.loop < len(cells) else ""
        if cell != current:
            loops.append((number, []))
            current = cell
        loops[-1][1].append(_point(cells, columns, separator, f"Line {number} of {path.name}"))
    if columns is None or not loops:
        raise FileError("no-points", f"{path.name} holds no point.", "Give one point x, y a line.")
    unit = request.unit or columns.unit
    strokes = [
        Stroke(_open(np.array(points)) * (unit or 1.0), True, "", f"the loop from line {number}")
        for number, points in loops
    ]
    return Reading(strokes=tuple(strokes), notices=() if unit else (unit_assumed(),))


def _separator(lines: list[str]) -> str:
    """What parts the columns, judged by the first line that is no comment."""
    first = next((text for line in lines if (text := line.split("#", 1)[0].strip())), "")
    return next((mark for mark in (";", "\t", ",") if mark in first), " ")


def _columns(cells: list[str], separator: str, number: int, name: str) -> _Columns:
    """The columns from the first line: a header, or two numbers."""
    if _number(cells[0], separator) is not None:
        if len(cells) != 2:
            raise FileError(
                "no-columns",
                f"Line {number} of {name} has {len(cells)} columns and no header says which are x and y.",
                "Begin with a line that names the columns, for instance loop,x,y.",
            )
        return _Columns(0, 1)
    found: dict[str, int] = {}
    unit = None
    for i, cell in enumerate(cells):
        words = [word for word in re.split(r"[^a-z]+", cell.lower()) if word]
        if words[:1] in (["x"], ["y"]):
            found[words[0]] = i
            unit = next((MILLIMETRES[word] for word in words[1:] if word in MILLIMETRES), unit)
        elif words and words[0] in _LOOP_NAMES:
            found["loop"] = i
    if not {"x", "y"} <= set(found):
        raise FileError(
            "no-columns",
            f"Line {number} of {name} names no columns x and y: {', '.join(cells)[:60]!r}.",
            "Name the columns x and y (and loop), or leave the header out.",
        )
    return _Columns(found["x"], found["y"], found.get("loop"), unit)


def _point(cells: list[str], columns: _Columns, separator: str, where: str) -> tuple[float, float]:
    values = [_number(cells[i], separator) if i < len(cells) else None for i in (columns.x, columns.y)]
    if values[0] is None or values[1] is None:
        raise FileError(
            "not-a-number",
            f"{where} holds no point: {separator.join(cells)[:60]!r}.",
            "Give two numbers, x and y; part the columns by a semicolon if the decimal mark is a comma.",
        )
    return values[0], values[1]


def _number(cell: str, separator: str) -> float | None:
    try:
        value = float(cell if separator == "," else cell.replace(",", "."))
    except ValueError:
        return None
    return value if np.isfinite(value) else None


def _open(points: np.ndarray) -> np.ndarray:
    """The loop without its repeated first point."""
    return points[:-1] if len(points) > 1 and np.array_equal(points[0], points[-1]) else points
