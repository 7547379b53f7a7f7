"""DXF drawings: lines, arcs, circles, ellipses, polylines with bulges, splines, also inside blocks.

Reads model space, layers that are switched on, seen from above. Text, dimensions, hatches and solids are passed over.
"""

from __future__ import annotations

import itertools
import logging
import math
from collections import Counter
from collections.abc import Iterable, Iterator
from dataclasses import dataclass, field
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np

from ..errors import FileError, UsageError
from ..result import Notice
from ..section import Points
from .curves import FULL_TURN, bulged, elliptical_arc, full_ellipse
from .reading import Reading, Request, Stroke
from .units import unit_assumed

if TYPE_CHECKING:
    from ezdxf.document import Drawing

# $INSUNITS of the DXF reference: code -> mm.
INSERT_UNITS = {
    1: 25.4,
    2: 304.8,
    4: 1.0,
    5: 10.0,
    6: 1000.0,
    8: 25.4e-6,
    9: 0.0254,
    10: 914.4,
    13: 0.001,
    14: 100.0,
}


def read_dxf(path: Path, request: Request) -> Reading:
    """The strokes of a DXF drawing, mm.

    Raises FileError if the file is no DXF or states a unit that no section is drawn in, UsageError for a layer that
    is not there.
    """
    import ezdxf

    document = _open(path)
    stated = None if request.unit else _stated_scale(document)
    scale = request.unit or stated or 1.0
    try:
        found = _drawn(document, request, scale)
    # Entities that lack what they need, or hold numbers without bound.
    except (ValueError, ArithmeticError, LookupError, ezdxf.DXFError) as error:  # pyright: ignore[reportPrivateImportUsage]
        raise FileError(
            "not-a-drawing",
            f"{path.name} has an entity that cannot be drawn ({type(error).__name__}: {error}).",
            "Delete or redraw it, or save the drawing again as DXF.",
        ) from None
    if request.layer is not None and request.layer.casefold() not in {layer.casefold() for layer in found.layers}:
        raise UsageError(
            "no-such-layer",
            f"{path.name} has nothing on a layer {request.layer!r}.",
            f"Choose one of {', '.join(sorted(found.layers)) or 'none: the drawing is empty'}.",
        )
    notices = [] if request.unit or stated else [unit_assumed()]
    if found.hidden:
        notices.append(
            Notice(
                "hidden-layers",
                f"Layers that are off or frozen were passed over: {', '.join(sorted(found.hidden))}.",
                "Name the layer to read it all the same.",
            )
        )
    if found.passed_over:
        kinds = ", ".join(f"{count} {kind}" for kind, count in sorted(found.passed_over.items()))
        notices.append(Notice("entities-passed-over", f"Passed over, being no outline: {kinds}.", ""))
    return Reading(strokes=tuple(found.strokes), notices=tuple(notices))


def _stated_scale(document: Drawing) -> float | None:
    """mm per unit of the drawing, None if it is unitless."""
    code = int(document.header.get("$INSUNITS", 0))
    if code not in (0, *INSERT_UNITS):
        raise FileError(
            "unit-suspected",
            f"The drawing states $INSUNITS {code}, a unit no section is drawn in.",
            "Set the drawing's unit, or name the unit when reading.",
        )
    return INSERT_UNITS.get(code)


@dataclass
class _Found:
    """What a drawing holds: strokes, mm; layers by name; layers and kinds of entities passed over."""

    strokes: list[Stroke] = field(default_factory=list)
    layers: set[str] = field(default_factory=set)
    hidden: set[str] = field(default_factory=set)
    passed_over: Counter[str] = field(default_factory=Counter)


def _drawn(document: Drawing, request: Request, scale: float) -> _Found:
    found = _Found()
    wanted = None if request.layer is None else request.layer.casefold()
    for entity in _plain(document.modelspace()):
        layer = str(entity.dxf.get("layer", "0"))
        found.layers.add(layer)
        if wanted is not None and layer.casefold() != wanted:
            continue
        if wanted is None and _is_hidden(document, layer):
            found.hidden.add(layer)
            continue
        drawn = _points(entity, request.chord_tolerance / scale)
        if drawn is None:
            found.passed_over[entity.dxftype()] += 1
            continue
        points, closed = drawn
        handle = entity.dxf.handle or (entity.source_of_copy.dxf.handle if entity.source_of_copy else None)
        where = f"{entity.dxftype()} #{handle}" if handle else f"{entity.dxftype()} in a block"
        found.strokes.append(Stroke(points * scale, closed, layer, where))
    return found


def _open(path: Path) -> Drawing:
    import ezdxf
    from ezdxf import recover

    # What it mends in a damaged file is of no use to the person who drew it.
    logging.getLogger("ezdxf").setLevel(logging.CRITICAL)

    try:
        try:
            return ezdxf.readfile(path)  # pyright: ignore[reportPrivateImportUsage]
        except ezdxf.DXFStructureError:  # pyright: ignore[reportPrivateImportUsage]
            return recover.readfile(path)[0]
    # The recovering reader fails in many ways on files that are no DXF at all.
    except Exception as error:
        raise FileError(
            "not-a-drawing",
            f"{path.name} cannot be read as DXF ({type(error).__name__}).",
            "Save it again as DXF (R2000 or later), not as DWG.",
        ) from None


def _plain(entities: Iterable[Any]) -> Iterator[Any]:
    """Entities with block references taken apart; what lies on layer 0 of a block belongs to the reference's layer."""
    for entity in entities:
        if entity.dxftype() != "INSERT":
            yield entity
            continue
        inserts = entity.multi_insert() if entity.mcount > 1 else [entity]
        for insert in inserts:
            for inner in _plain(insert.virtual_entities()):
                if inner.dxf.get("layer", "0") == "0":
                    inner.dxf.layer = entity.dxf.get("layer", "0")
                yield inner


def _is_hidden(document: Drawing, name: str) -> bool:
    if name not in document.layers:
        return False
    layer = document.layers.get(name)
    return layer.is_off() or layer.is_frozen()


def _points(entity: Any, tolerance: float) -> tuple[Points, bool] | None:
    """Points (n, 2) in the drawing's unit and whether they close; None for an entity that draws no outline."""
    dxf = entity.dxf
    match entity.dxftype():
        case "LINE":
            return _flat([dxf.start, dxf.end]), False
        case "CIRCLE":
            centre, radius = dxf.center, abs(dxf.radius)
            loop = full_ellipse((centre.x, centre.y), (radius, 0.0), (0.0, radius), tolerance)
            return _to_world(entity, loop, centre.z), True
        case "ARC":
            centre, radius = dxf.center, abs(dxf.radius)
            start = math.radians(dxf.start_angle)
            sweep = math.radians(dxf.end_angle - dxf.start_angle) % FULL_TURN or FULL_TURN
            points = elliptical_arc((centre.x, centre.y), (radius, 0.0), (0.0, radius), start, sweep, tolerance)
            return _to_world(entity, points, centre.z), False
        case "ELLIPSE":
            major, minor, centre = dxf.major_axis, entity.minor_axis, dxf.center
            sweep = (dxf.end_param - dxf.start_param) % FULL_TURN
            axes = (centre.x, centre.y), (major.x, major.y), (minor.x, minor.y)
            if math.isclose(sweep, 0.0, abs_tol=1e-9) or math.isclose(sweep, FULL_TURN, abs_tol=1e-9):
                return full_ellipse(*axes, tolerance), True
            return elliptical_arc(*axes, dxf.start_param, sweep, tolerance), False
        case "SPLINE":
            points = _spline(entity.construction_tool(), tolerance)
            closed = float(np.hypot(*(points[-1] - points[0]))) <= tolerance
            return (points[:-1] if closed else points), closed
        case "LWPOLYLINE":
            vertices = np.array(entity.get_points("xyb"), float)
            if len(vertices) < 2:
                return None
            points, closed = _with_bulges(vertices, bool(entity.closed), tolerance)
            return _to_world(entity, points, float(dxf.get("elevation", 0.0))), closed
        case "POLYLINE" if entity.is_2d_polyline or entity.is_3d_polyline:
            vertices = np.array(
                [(v.dxf.location.x, v.dxf.location.y, v.dxf.get("bulge", 0.0)) for v in entity.vertices], float
            )
            if len(vertices) < 2:
                return None
            if entity.is_3d_polyline:
                return vertices[:, :2], bool(entity.is_closed)
            points, closed = _with_bulges(vertices, bool(entity.is_closed), tolerance)
            return _to_world(entity, points, 0.0), closed
    return None


def _spline(tool: Any, tolerance: float) -> Points:
    """Points along a B-spline over the knots where it is defined, chords no farther from it than the tolerance."""
    # A periodic spline has knots before and after its domain, where it must not be evaluated.
    knots = np.array(tool.knots(), float)
    domain = np.unique(knots[tool.order - 1 : tool.count + 1])
    runs: list[Points] = []
    for begin, end in itertools.pairwise(domain):
        segments = 4
        while True:
            points = _flat(tool.points(np.linspace(begin, end, 2 * segments + 1)))
            strayed = np.hypot(*(points[1::2] - 0.5 * (points[:-1:2] + points[2::2])).T).max()
            # Halving the segments brings the chords four times nearer; the finer points are at hand already.
            if strayed <= 4.0 * tolerance or segments > 4096:
                break
            segments *= 2
        runs.append(points[:-1])
    return np.concatenate([*runs, points[-1:]])


def _with_bulges(vertices: Points, closed: bool, tolerance: float) -> tuple[Points, bool]:
    """Points of a polyline given as (x, y, bulge to the next vertex); closed also if it ends where it began."""
    if not closed and np.array_equal(vertices[0, :2], vertices[-1, :2]):
        closed, vertices = True, vertices[:-1]
    following = np.roll(vertices, -1, axis=0) if closed else vertices[1:]
    runs = [
        bulged(a[:2], b[:2], float(a[2]), tolerance)[:-1]
        for a, b in zip(vertices if closed else vertices[:-1], following, strict=True)
    ]
    return np.concatenate(runs if closed else [*runs, vertices[-1:, :2]]), closed


def _flat(points: Iterable[Any]) -> Points:
    return np.array([(p.x, p.y) for p in points], float)


def _to_world(entity: Any, points: Points, elevation: float) -> Points:
    """Plane points of an entity's own coordinate system, which is mirrored if it was drawn seen from below."""
    system = entity.ocs()
    if not system.transform:
        return points
    return _flat(system.points_to_wcs([(x, y, elevation) for x, y in points]))
