"""Closed strokes and stated regions turned into a section, or refused with the place of the fault.

Knows nesting, crossing and copies of outlines; a loop inside another is a hole, a loop inside a hole is a part again.
"""

from __future__ import annotations

import itertools
import re
from collections.abc import Sequence
from typing import TYPE_CHECKING, Any

import numpy as np

from ..errors import OutlineError
from ..result import Notice
from ..section import Part, Section
from .joining import place
from .reading import Region, Stroke

if TYPE_CHECKING:
    from shapely import Polygon

SAME = 1e-6
"""Two outlines are copies of each other if they differ by less than this share of their area."""

# A contact that rounding turns into an overlap: this share of the perimeter, in mm2 per mm.
SLIVER = 1e-6


def section_from_strokes(strokes: Sequence[Stroke], repair: bool) -> tuple[Section, tuple[Notice, ...]]:
    """The section whose outlines are the closed strokes, and what was repaired.

    Raises OutlineError if an outline crosses itself or another one, or is drawn twice.
    """
    import shapely

    notices: list[Notice] = []
    loops: list[tuple[Polygon, str]] = []
    for stroke in strokes:
        where = stroke.where + (f" on layer {stroke.layer!r}" if stroke.layer else "")
        if len(stroke.points) < 3 or shapely.Polygon(stroke.points).length == 0.0:
            _fault("no-area", f"The outline of {where} at {place(stroke.points[0])} encloses no area.", repair, notices)
            continue
        loops += [(polygon, where) for polygon in _valid(shapely.Polygon(stroke.points), where, repair, notices)]
    loops = _without_copies(loops, repair, notices)
    if not loops:
        raise OutlineError(
            "no-outline", "No outline encloses an area.", "Check the layer and that outlines are closed."
        )
    # A loop found inside repaired pieces keeps its own holes; nesting is by outer outlines.
    loops.sort(key=lambda item: -item[0].area)
    shells = [shapely.Polygon(polygon.exterior) for polygon, _ in loops]
    _require_no_crossing(shells, [where for _, where in loops])
    depth = _depths(shells)
    polygons: list[Polygon] = []
    for i, (polygon, where) in enumerate(loops):
        if depth[i] % 2:
            continue
        inside = [
            loops[j][0] for j in range(i + 1, len(loops)) if depth[j] == depth[i] + 1 and _holds(shells[i], shells[j])
        ]
        cut = shapely.Polygon(polygon.exterior, [*polygon.interiors, *(hole.exterior for hole in inside)])
        polygons += _valid(cut, where, repair, notices)
    if not polygons:
        raise OutlineError(
            "no-outline", "No outline encloses an area.", "Check the layer and that outlines are closed."
        )
    return Section.from_polygons(polygons), tuple(notices)


def section_from_regions(regions: Sequence[Region], repair: bool) -> tuple[Section, tuple[Notice, ...]]:
    """The section of the stated regions, and what was repaired.

    Raises OutlineError if a region's outline crosses itself, or two regions overlap.
    """
    notices: list[Notice] = []
    found: list[Region] = []
    for region in regions:
        found += [
            Region(polygon, region.where, region.material)
            for polygon in _valid(region.polygon, region.where, repair, notices)
        ]
    kept = _without_copies([(region.polygon, region.where) for region in found], repair, notices)
    polygons = {id(polygon) for polygon, _ in kept}
    found = [region for region in found if id(region.polygon) in polygons]
    for first, second in itertools.combinations(found, 2):
        common = first.polygon.intersection(second.polygon)
        if common.area > SLIVER * min(first.polygon.length, second.polygon.length):
            at = np.array(common.representative_point().coords[0])
            raise OutlineError(
                "regions-overlap",
                f"{first.where} and {second.where} overlap by {common.area:.4g} mm2 near {place(at)}.",
                "Cut one of them back, or draw the inner one as a hole.",
            )
    if not found:
        raise OutlineError("no-outline", "No region encloses an area.", "Check the file.")
    return (
        Section(
            tuple(
                Part(
                    np.asarray(region.polygon.exterior.coords)[:-1, :2],
                    tuple(np.asarray(hole.coords)[:-1, :2] for hole in region.polygon.interiors),
                    region.material,
                )
                for region in found
            )
        ),
        tuple(notices),
    )


def _fault(code: str, message: str, repair: bool, notices: list[Notice]) -> None:
    """Refuse, or when repairing note that the outline was left out."""
    if not repair:
        raise OutlineError(code, message, "Correct the drawing, or ask for repair.")
    notices.append(Notice(code, f"{message} It was left out.", "Check the drawing there."))


def _valid(polygon: Polygon, where: str, repair: bool, notices: list[Notice]) -> list[Polygon]:
    """The polygon if it is valid, else its repaired pieces."""
    import shapely

    reason = shapely.is_valid_reason(polygon)
    if reason == "Valid Geometry":
        if polygon.area > 0.0:
            return [polygon]
        _fault("no-area", f"The outline of {where} encloses no area.", repair, notices)
        return []
    numbers = re.search(r"\[(\S+) ([^\s\]]+)", reason)
    at = f" at {place(np.array([float(n) for n in numbers.groups()]))}" if numbers else ""
    what = {
        "Self-intersection": "crosses itself",
        "Ring Self-intersection": "touches itself",
        "Hole lies outside shell": "has a hole outside it",
        "Interior is disconnected": "is cut in two by its holes",
        "Nested holes": "has a hole inside a hole",
    }.get(reason.split("[")[0], f"is not valid ({reason.split('[')[0].lower()})")
    if not repair:
        raise OutlineError(
            "crossing-outline", f"The outline of {where} {what}{at}.", "Correct it in the drawing, or ask for repair."
        )
    repaired: Any = shapely.make_valid(polygon, method="structure", keep_collapsed=False)
    pieces = [p for p in shapely.get_parts(repaired) if p.geom_type == "Polygon" and p.area > 0.0]
    notices.append(
        Notice(
            "outline-repaired",
            f"The outline of {where} {what}{at}; it was taken as {len(pieces)} region(s) of "
            f"{sum(p.area for p in pieces):.6g} mm2 in all.",
            "Check the drawing there.",
        )
    )
    return pieces


def _without_copies(loops: list[tuple[Polygon, str]], repair: bool, notices: list[Notice]) -> list[tuple[Polygon, str]]:
    kept: list[tuple[Polygon, str]] = []
    for polygon, where in loops:
        original = next((w for other, w in kept if _same(polygon, other)), None)
        if original is None:
            kept.append((polygon, where))
            continue
        at = place(np.array(polygon.representative_point().coords[0]))
        message = f"The outline of {where} around {at} is a copy of that of {original}."
        if not repair:
            raise OutlineError("drawn-twice", message, "Delete one of them, choose one layer, or ask for repair.")
        notices.append(Notice("copies-dropped", f"{message} The copy was dropped.", ""))
    return kept


def _same(first: Polygon, second: Polygon) -> bool:
    if abs(first.area - second.area) > SAME * first.area:
        return False
    if np.abs(np.subtract(first.bounds, second.bounds)).max() > SAME * first.length:
        return False
    return first.symmetric_difference(second).area <= SAME * first.area


def _require_no_crossing(shells: list[Polygon], where: list[str]) -> None:
    """Two outlines must lie one inside the other or beside each other."""
    import shapely

    tree = shapely.STRtree(shells)
    for i, j in sorted(zip(*tree.query(shells, predicate="intersects"), strict=True)):
        if i >= j:
            continue
        common = shells[i].intersection(shells[j])
        smallest = min(shells[i].area, shells[j].area)
        sliver = SLIVER * min(shells[i].length, shells[j].length)
        if sliver < common.area < smallest - sliver:
            crossing = shells[i].exterior.intersection(shells[j].exterior)
            at = np.array(shapely.get_coordinates(crossing)[0])
            raise OutlineError(
                "crossing-outlines",
                f"The outlines of {where[i]} and {where[j]} cross at {place(at)}.",
                "Draw them apart, one inside the other, or as one outline; or choose one layer.",
            )


def _holds(outer: Polygon, inner: Polygon) -> bool:
    return outer.contains(inner.representative_point())


def _depths(shells: list[Polygon]) -> list[int]:
    """How many outlines enclose each one; the shells come largest first."""
    return [sum(_holds(shells[j], shells[i]) for j in range(i)) for i in range(len(shells))]
