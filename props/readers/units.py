"""Units of length a drawing may be in, and whether a size is that of a structural member.

Knows factors to millimetres; a number's meaning in a format is its reader's affair.
"""

from __future__ import annotations

from ..errors import FileError, UsageError
from ..result import Notice
from ..section import Section

MILLIMETRES: dict[str, float] = {
    "um": 0.001,
    "mm": 1.0,
    "cm": 10.0,
    "dm": 100.0,
    "m": 1000.0,
    "mil": 0.0254,
    "in": 25.4,
    "ft": 304.8,
    "yd": 914.4,
}

SMALLEST_MEMBER = 3.0
"""mm; a section that fits into less is not taken for a structural member without a stated unit."""
LARGEST_MEMBER = 5000.0
"""mm; a section wider or deeper than this is not taken for a structural member without a stated unit."""


def millimetres(unit: str) -> float:
    """Length of the unit in mm.

    Raises UsageError for a unit that is not listed in MILLIMETRES.
    """
    factor = MILLIMETRES.get(unit.strip().lower())
    if factor is None:
        raise UsageError("unknown-unit", f"There is no unit {unit!r}.", f"Choose one of {', '.join(MILLIMETRES)}.")
    return factor


def unit_assumed() -> Notice:
    """The notice that a file states no unit and millimetres were taken."""
    return Notice(
        "unit-assumed",
        "The file states no unit; its numbers were taken as millimetres.",
        "Name the unit if they are not.",
    )


def require_plausible_size(section: Section) -> None:
    """Raise FileError if the section is too small or too large to be a structural member."""
    low, high = section.vertices.min(axis=0), section.vertices.max(axis=0)
    width, depth = high - low
    size = max(width, depth)
    if not SMALLEST_MEMBER <= size <= LARGEST_MEMBER:
        raise FileError(
            "unit-suspected",
            f"The outline measures {width:.4g} x {depth:.4g} mm, from ({low[0]:.6g}, {low[1]:.6g}) to "
            f"({high[0]:.6g}, {high[1]:.6g}) mm, which is no size of a structural member.",
            "Check the unit of the drawing and name it (mm, cm, m, in, ...); naming it also accepts this size.",
        )
