"""Well-known text: polygons, multipolygons, rings and closed lines; in millimetres unless a unit is named."""

from __future__ import annotations

from pathlib import Path
from typing import Any

from ..errors import FileError
from .reading import Reading, Region, Request, Stroke
from .units import unit_assumed


def read_wkt(path: Path, request: Request) -> Reading:
    """The regions and lines of a file of well-known text, one geometry or one a line, mm.

    Raises FileError if it is no well-known text.
    """
    import shapely

    text = path.read_text(encoding="utf-8-sig").strip()
    try:
        geometries = [shapely.from_wkt(text)]
    except shapely.errors.GEOSException:
        try:
            geometries = [shapely.from_wkt(line) for line in text.splitlines() if line.strip()]
        except shapely.errors.GEOSException as error:
            raise FileError(
                "not-wkt",
                f"{path.name} is no well-known text ({str(error).splitlines()[0]}).",
                "Write for instance POLYGON ((0 0, 50 0, 50 100, 0 100, 0 0)).",
            ) from None
    reading = reading_of(geometries, request.unit or 1.0)
    if request.unit is None:
        reading = Reading(reading.strokes, reading.regions, (*reading.notices, unit_assumed()))
    return reading


def reading_of(geometries: list[Any], scale: float) -> Reading:
    """Polygons among shapely geometries as regions and lines as strokes, scaled to mm; points are passed over."""
    import shapely

    regions: list[Region] = []
    strokes: list[Stroke] = []
    for number, geometry in enumerate(_simple(geometries), start=1):
        where = f"{geometry.geom_type} {number}"
        flat = shapely.transform(shapely.force_2d(geometry), lambda points: points * scale)
        if geometry.geom_type == "Polygon" and not geometry.is_empty:
            regions.append(Region(flat, where))
        elif geometry.geom_type in ("LineString", "LinearRing") and not geometry.is_empty:
            points = shapely.get_coordinates(flat)
            closed = bool((points[0] == points[-1]).all())
            strokes.append(Stroke(points[:-1] if closed else points, closed, "", where))
    return Reading(strokes=tuple(strokes), regions=tuple(regions))


def _simple(geometries: list[Any]) -> list[Any]:
    """Collections, however nested, taken apart."""
    simple: list[Any] = []
    for geometry in geometries:
        simple += _simple(list(geometry.geoms)) if hasattr(geometry, "geoms") else [geometry]
    return simple
