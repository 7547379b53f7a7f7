"""GeoJSON (RFC 7946) with plane coordinates, and the section of a measurement's JSON result.

Coordinates are millimetres unless a member "unit" of the file, a property "unit" of its first feature or the person
says otherwise; longitudes and latitudes are not projected. A feature's properties may name its layer and material:
"layer", "material", "elastic_modulus" and "yield_strength" (MPa), "density" (kg/m3).
"""

from __future__ import annotations

import json
from dataclasses import replace
from pathlib import Path
from typing import Any

from ..errors import FileError, UsageError
from ..section import Material
from .reading import Reading, Region, Request, Stroke
from .recorded import is_result, parsed, regions_of
from .units import millimetres, unit_assumed
from .wkt import reading_of


def read_geojson(path: Path, request: Request) -> Reading:
    """The regions and lines of a GeoJSON file or of a measurement's result, mm.

    Raises FileError if the file is neither, UsageError for a layer that is not there.
    """
    document = parsed(path)
    if not isinstance(document, dict):
        raise FileError("not-geojson", f"{path.name} holds no GeoJSON object.", "Export it again as GeoJSON.")
    if is_result(document):
        return _of_result(document, path.name, request)
    stated = document.get("unit")
    if document.get("type") == "FeatureCollection":
        features = document.get("features")
        features = features if isinstance(features, list) else []
    else:
        features = [document]
    if stated is None and features and isinstance(features[0], dict):
        properties = features[0].get("properties")
        stated = properties.get("unit") if isinstance(properties, dict) else None
    scale = request.unit
    if scale is None and stated is not None:
        scale = millimetres(str(stated))
    strokes: list[Stroke] = []
    regions: list[Region] = []
    layers: set[str] = set()
    for number, feature in enumerate(features, start=1):
        properties = feature.get("properties") if isinstance(feature, dict) else None
        properties = properties if isinstance(properties, dict) else {}
        layer = str(properties.get("layer", ""))
        layers.add(layer)
        if request.layer is not None and layer.casefold() != request.layer.casefold():
            continue
        read = reading_of([_geometry(feature, number, path.name)], scale or 1.0)
        strokes += [replace(s, layer=layer, where=f"feature {number}, {s.where}") for s in read.strokes]
        material = _material(properties, number)
        regions += [Region(r.polygon, f"feature {number}, {r.where}", material) for r in read.regions]
    if request.layer is not None and not strokes and not regions:
        raise UsageError(
            "no-such-layer",
            f"{path.name} has nothing on a layer {request.layer!r}.",
            f"Choose one of {', '.join(sorted(name for name in layers if name)) or 'none: no feature names a layer'}.",
        )
    notices = () if scale is not None else (unit_assumed(),)
    return Reading(tuple(strokes), tuple(regions), notices)


def _geometry(feature: Any, number: int, name: str) -> Any:
    import shapely

    geometry = feature
    if isinstance(feature, dict) and feature.get("type") == "Feature":
        geometry = feature.get("geometry")
    try:
        return shapely.from_geojson(json.dumps(geometry))
    except shapely.errors.GEOSException as error:
        raise FileError(
            "not-geojson",
            f"Feature {number} of {name} has no geometry that can be read ({str(error).splitlines()[0]}).",
            "Give a Polygon or MultiPolygon, every ring closed.",
        ) from None


def _of_result(document: dict[str, Any], name: str, request: Request) -> Reading:
    """The section of a measurement's result, whose unit is known."""
    if request.layer is not None:
        raise UsageError("no-layers", f"{name} is a result, which has no layers.", "Leave the layer out.")
    if request.unit not in (None, 1.0):
        raise UsageError("unit-of-a-result", f"{name} is a result, which is in mm.", "Leave the unit out.")
    return Reading(regions=regions_of(document, name))


def _material(properties: dict[str, Any], number: int) -> Material | None:
    keys = ("elastic_modulus", "density", "yield_strength")
    if not any(key in properties for key in ("material", *keys)):
        return None
    try:
        values = {key: float(properties[key]) for key in keys if properties.get(key) is not None}
    except (TypeError, ValueError):
        raise FileError(
            "bad-material",
            f"The material of feature {number} has a value that is no number.",
            f"Give numbers for {', '.join(keys)} (MPa, kg/m3, MPa).",
        ) from None
    return Material(str(properties.get("material", f"material {number}")), **values)
