"""Sections from files: drawings (DXF, SVG), geometry (WKT, GeoJSON, a measurement's JSON) and tables of points.

One file a format; `read_section` chooses by the file's ending.
"""

from __future__ import annotations

from collections.abc import Callable, Iterator, Mapping
from contextlib import contextmanager
from pathlib import Path

import numpy as np

from ..errors import FileError, OutlineError, UsageError
from ..result import Notice
from ..section import Section
from .csv import read_csv
from .dxf import read_dxf
from .geojson import read_geojson
from .joining import join_strokes
from .reading import Reading, Request
from .recorded import Recorded, is_result, parsed, recorded
from .regions import section_from_regions, section_from_strokes
from .svg import read_svg
from .units import MILLIMETRES, millimetres, require_plausible_size
from .wkt import read_wkt

__all__ = ["MILLIMETRES", "READERS", "Recorded", "read_recorded", "read_section"]

READERS: Mapping[str, Callable[[Path, Request], Reading]] = {
    ".dxf": read_dxf,
    ".svg": read_svg,
    ".wkt": read_wkt,
    ".geojson": read_geojson,
    ".json": read_geojson,
    ".csv": read_csv,
    ".txt": read_csv,
    ".tsv": read_csv,
}

FARTHEST = 1e9
"""mm from the origin; beyond it coordinates keep less than a thousandth of a millimetre."""

_LAYERED = (".dxf", ".svg", ".geojson", ".json")


def read_section(
    path: str | Path,
    *,
    layer: str | None = None,
    unit: str | None = None,
    repair: bool = False,
    chord_tolerance: float = 0.002,
    join_tolerance: float = 0.01,
) -> tuple[Section, tuple[Notice, ...]]:
    """The section drawn in a file, and what should be known about how it was read.

    layer : read this layer (DXF, GeoJSON) or named group or element (SVG) alone
    unit : unit of the file's coordinates, one of MILLIMETRES, overriding what the file states; it also accepts a size
        that no structural member has
    repair : mend what can be mended (crossing, open or repeated outlines); every change is told in a notice
    chord_tolerance : curves are replaced by chords that stray no farther than this, mm
    join_tolerance : ends of loose lines no farther apart than this meet, mm
    Loops inside loops are holes; loops beside each other are parts.
    Raises FileError for a file that cannot be read or whose unit is unknown or unlikely, OutlineError with the place
    of the fault for outlines that enclose no clear region, UsageError for a layer or unit that does not exist.
    """
    path = Path(path)
    for name, value in (("chord", chord_tolerance), ("join", join_tolerance)):
        if not 0.0 < value <= 10.0:
            raise UsageError(
                "bad-tolerance",
                f"The {name} tolerance is {value:g} mm.",
                "Give one above 0 and no more than 10 mm, well below the thinnest wall.",
            )
    reader = READERS.get(path.suffix.lower())
    if reader is None:
        raise FileError(
            "unknown-format",
            f"{path.name} is in a format that holds no section to read.",
            f"Give one of {', '.join(READERS)}.",
        )
    if layer is not None and path.suffix.lower() not in _LAYERED:
        raise UsageError("no-layers", f"{path.name} is in a format without layers.", "Leave the layer out.")
    request = Request(layer, None if unit is None else millimetres(unit), chord_tolerance)
    # Numbers without bound are told below, in words.
    with _readable(path), np.errstate(all="ignore"):
        reading = reader(path, request)
    _require_finite(reading, path.name)
    if reading.strokes and reading.regions:
        raise FileError(
            "mixed-content",
            f"{path.name} holds both polygons and lines, so it is not clear which of them are the section.",
            "Keep polygons alone, or choose one layer.",
        )
    if reading.regions:
        section, notices = section_from_regions(reading.regions, repair)
    elif reading.strokes:
        strokes, joined = join_strokes(reading.strokes, join_tolerance, repair)
        section, repaired = section_from_strokes(strokes, repair)
        notices = (*joined, *repaired)
    else:
        raise OutlineError("no-outline", f"{path.name} holds no outline.", "Check the file and the layer.")
    if unit is None:
        require_plausible_size(section)
    return section, (*reading.notices, *notices)


def read_recorded(path: str | Path) -> Recorded | None:
    """The section of a measurement's result.json with the uncertainty of its outline; None for any other file.

    Raises FileError for a refused or damaged result, OutlineError for outlines that enclose no clear region.
    """
    path = Path(path)
    if path.suffix.lower() != ".json":
        return None
    with _readable(path):
        document = parsed(path)
    return recorded(document, path.name) if is_result(document) else None


@contextmanager
def _readable(path: Path) -> Iterator[None]:
    """Turn what the system says of a file into a FileError."""
    try:
        yield
    except OSError as error:
        raise FileError(
            "unreadable-file",
            f"{path} cannot be read ({error.strerror or type(error).__name__}).",
            "Check the path and your right to read it.",
        ) from None
    except UnicodeDecodeError:
        raise FileError("not-text", f"{path.name} is not UTF-8 text.", "Save or export it again as UTF-8.") from None


def _require_finite(reading: Reading, name: str) -> None:
    """Raise FileError for a coordinate that is no number or beyond any drawing."""
    from shapely import get_coordinates

    runs = [(stroke.where, stroke.points) for stroke in reading.strokes]
    runs += [(region.where, get_coordinates(region.polygon)) for region in reading.regions]
    for where, points in runs:
        if not (np.abs(points) < FARTHEST).all():  # not a number compares false
            raise FileError(
                "bad-coordinate",
                f"{where} of {name} has a coordinate that is no number or farther than {FARTHEST:g} mm.",
                "Correct or delete it.",
            )
