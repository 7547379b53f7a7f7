"""A section from a measurement's result.json, with the uncertainty of its outline.

Knows the entries "section" and "uncertainty" of the document, mm; the figures in it are worked out again from these.
"""

from __future__ import annotations

import json
import math
from collections.abc import Mapping
from dataclasses import dataclass
from pathlib import Path
from typing import Any, Literal

import numpy as np

from ..errors import FileError
from ..result import Notice
from ..section import Material, Section
from ..uncertainty import EdgeNoise, Mode, OutlineUncertainty
from .reading import Region
from .regions import section_from_regions

SCHEMA = "cutface/measurement/"
# mm; beyond it a coordinate is damage.
FARTHEST = 1e6
_MATERIAL = ("elastic_modulus", "density", "yield_strength")
# JSON allows an empty document to be nested without end; a result is not.
_DAMAGE = (TypeError, ValueError, KeyError, IndexError, AttributeError, OverflowError)


@dataclass(frozen=True)
class Recorded:
    """What a result.json says of its outline.

    uncertainty : None for an outline taken as drawn, and for results that do not hold it
    photo : name of the picture, "" for a section that was not measured
    """

    section: Section
    uncertainty: OutlineUncertainty | None
    photo: str
    notices: tuple[Notice, ...] = ()


def parsed(path: Path) -> Any:
    """The content of a JSON file.

    Raises FileError if it is no JSON.
    """
    try:
        return json.loads(path.read_text(encoding="utf-8-sig"))
    except (ValueError, RecursionError) as error:
        reason = "too deeply nested" if isinstance(error, RecursionError) else str(error)
        raise FileError("not-json", f"{path.name} is no JSON ({reason}).", "Export it again as GeoJSON.") from None


def is_result(document: Any) -> bool:
    """Whether a JSON document is a result of ours."""
    return isinstance(document, dict) and str(document.get("schema", "")).startswith(SCHEMA)


def recorded(document: Mapping[str, Any], name: str) -> Recorded:
    """The section of a result document, and the uncertainty of its outline if it holds it.

    name : of the file, for messages
    Raises FileError for a refused or damaged result, OutlineError for outlines that enclose no clear region.
    """
    regions = regions_of(document, name)
    section, notices = section_from_regions(regions, repair=False)
    entry = document.get("uncertainty")
    uncertainty = None
    if entry is not None:
        try:
            uncertainty = _uncertainty(entry, len(section.vertices))
        except _DAMAGE:
            raise _damaged(name, "the uncertainty of its outline") from None
    elif document.get("status") == "measured":
        notices = (
            *notices,
            Notice(
                "uncertainty-not-recorded",
                f"{name} was measured but does not hold the uncertainty of its outline; the figures are without it.",
                "Measure the photo again with this version.",
            ),
        )
    photo = document.get("photo")
    source = document.get("source")
    if not isinstance(photo, Mapping) and isinstance(source, Mapping):
        photo = source.get("photo")
    file = photo.get("file") if isinstance(photo, Mapping) else None
    return Recorded(section, uncertainty, file if isinstance(file, str) else "", notices)


def regions_of(document: Mapping[str, Any], name: str) -> tuple[Region, ...]:
    """The parts of a result's section as regions, mm.

    Raises FileError for a refused or damaged result.
    """
    if document.get("status") == "refused":
        refusal = document.get("refusal")
        refusal = refusal if isinstance(refusal, Mapping) else {}
        raise FileError(
            "refused-result",
            f"{name} tells of a refusal and holds no section: {refusal.get('message', 'no reason is given')}",
            str(refusal.get("remedy") or "Measure again."),
        )
    try:
        section = document["section"]
        if section.get("unit", "mm") != "mm":
            raise ValueError
        regions = tuple(_region(part, number) for number, part in enumerate(section["parts"], start=1))
    except _DAMAGE:
        raise _damaged(name, "its section") from None
    if not regions:
        raise _damaged(name, "its section")
    return regions


def _damaged(name: str, what: str) -> FileError:
    return FileError(
        "damaged-result",
        f"{what[:1].upper()}{what[1:]} cannot be read from {name}.",
        "Measure again, or give a drawing.",
    )


def _region(part: Mapping[str, Any], number: int) -> Region:
    import shapely

    loops = [_points(loop) for loop in (part["shell"], *part.get("holes", ()))]
    if any(len(loop) < 3 for loop in loops):
        raise ValueError
    stated = part.get("material")
    material = None
    if stated is not None:
        values = {key: _finite(stated[key]) for key in _MATERIAL if stated.get(key) is not None}
        material = Material(str(stated["name"]), **values)
    return Region(shapely.Polygon(loops[0], loops[1:]), f"part {number}", material)


def _uncertainty(entry: Mapping[str, Any], count: int) -> OutlineUncertainty:
    def per_vertex(values: Any, least: float = -math.inf) -> np.ndarray:
        found = np.array([_finite(value) for value in values], dtype=float) * scale
        if len(found) != count or (found < least).any():
            raise ValueError
        return found

    scale = {"nm": 1e-6}[entry["unit"]]
    modes = tuple(
        Mode(
            str(mode["source"]),
            np.column_stack([per_vertex(mode["x"]), per_vertex(mode["y"])]),
            _shape(mode["shape"]),
        )
        for mode in entry["modes"]
    )
    noise = entry["noise"]
    if noise is not None:
        noise = EdgeNoise(per_vertex(noise["std"], 0.0), per_vertex(noise["correlation_length"], scale))
    bound = None if entry["edge_bound"] is None else per_vertex(entry["edge_bound"], 0.0)
    simplification = {str(name): _finite(change) for name, change in entry["simplification"].items()}
    return OutlineUncertainty(modes, noise, bound, simplification)


def _shape(word: Any) -> Literal["normal", "rectangular"]:
    if word not in ("normal", "rectangular"):
        raise ValueError
    return "normal" if word == "normal" else "rectangular"


def _points(rows: Any) -> np.ndarray:
    points = np.array([[_finite(value) for value in row] for row in rows], dtype=float)
    if points.ndim != 2 or points.shape[1] != 2 or not (np.abs(points) < FARTHEST).all():
        raise ValueError
    return points


def _finite(value: Any) -> float:
    if isinstance(value, bool) or not isinstance(value, int | float) or not math.isfinite(value):
        raise ValueError
    return float(value)
