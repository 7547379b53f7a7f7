"""The section's geometry for other programs: WKT, GeoJSON and a drawing in SVG, all in millimetres.

Knows polygons and drawing conventions. Adds no figure of its own: coordinates leave unrounded,
except in the drawing, where 0.1 micrometre is finer than any print.
"""

from __future__ import annotations

import json
from collections.abc import Mapping
from typing import Any
from xml.sax.saxutils import escape

import numpy as np

from ...props.section import Part, Points, Section
from .marks import Marks, key_svg, key_width, marks_svg


def to_wkt(section: Section) -> str:
    """The section as well-known text (OGC 06-103r4): POLYGON, or MULTIPOLYGON for several parts; mm."""
    bodies = [_wkt_rings(part) for part in section.parts]
    if len(bodies) == 1:
        return f"POLYGON {bodies[0]}\n"
    return f"MULTIPOLYGON ({', '.join(bodies)})\n"


def _wkt_rings(part: Part) -> str:
    return "(" + ", ".join("(" + ", ".join(f"{x!r} {y!r}" for x, y in _ring(loop)) + ")" for loop in part.loops) + ")"


def to_geojson(section: Section, properties: Mapping[str, Any] | None = None) -> str:
    """The section as a GeoJSON feature (RFC 7946) in plane coordinates, mm.

    properties : plain values carried along with the feature
    GeoJSON has no plane coordinates of its own, so the feature says that its unit is the millimetre.
    """
    polygons = [[_ring(loop) for loop in part.loops] for part in section.parts]
    several = len(polygons) > 1
    feature = {
        "type": "Feature",
        "properties": {"coordinates": "plane, x right, y up", "unit": "mm", **(properties or {})},
        "geometry": {
            "type": "MultiPolygon" if several else "Polygon",
            "coordinates": polygons if several else polygons[0],
        },
    }
    return json.dumps(feature, allow_nan=False) + "\n"


def _ring(loop: Points) -> list[list[float]]:
    return [*loop.tolist(), loop[0].tolist()]


def to_svg(section: Section, title: str = "Section", marks: Marks | None = None) -> str:
    """The section drawn at true size (1 user unit = 1 mm) with its overall dimensions and a scale bar.

    marks : centres, axes and places drawn over it, with a key
    """
    low, high = section.vertices.min(axis=0), section.vertices.max(axis=0)
    width, depth = high - low
    text = float(np.clip(0.045 * max(width, depth), 2.2, 16.0))
    pen = text / 16
    # What is marked may lie beside the section.
    frame = (low, high) if marks is None else marks.frame(low, high, text)
    beside = np.maximum([low[0] - frame[0][0], low[1] - frame[0][1], *(frame[1] - high)], 0.0)
    # Room for a dimension line on the left, another and the scale bar below.
    left, right, top, bottom = 3.2 * text, 1.4 * text, 1.4 * text, 6.4 * text
    left, bottom, right, top = np.array([left, bottom, right, top]) + beside
    entries = [] if marks is None else marks.key()
    bar = nice_length(0.4 * width)
    page_w = max(width + left + right, bar + 2 * right + 4 * text, key_width(entries, text))
    page_h = depth + top + bottom + 1.5 * text * len(entries)

    def to_page(points: Points) -> Points:
        return (points - (low[0], high[1])) * (1.0, -1.0) + (left, top)

    outlines = [
        "".join("M" + " L".join(f"{_n(x)} {_n(y)}" for x, y in to_page(loop)) + " Z" for loop in part.loops)
        for part in section.parts
    ]
    x0, y0, x1, y1 = left, top, left + width, top + depth
    down, across = y1 + 2.0 * text + beside[1], x0 - 1.6 * text - beside[0]
    lines = [
        '<?xml version="1.0" encoding="UTF-8"?>',
        f'<svg xmlns="http://www.w3.org/2000/svg" width="{_n(page_w)}mm" height="{_n(page_h)}mm" '
        f'viewBox="0 0 {_n(page_w)} {_n(page_h)}">',
        f"<title>{escape(title)}</title>",
        '<rect width="100%" height="100%" fill="white"/>',
        f'<g id="section" fill="#d8d8d8" fill-rule="evenodd" stroke="black" stroke-width="{_n(1.5 * pen)}" '
        'stroke-linejoin="miter">',
        *(f'<path d="{path}"/>' for path in outlines),
        "</g>",
        f'<g id="dimensions" stroke="black" stroke-width="{_n(pen)}" fill="black">',
        *_dimension((x0, down), (x1, down), (x0, y1), (x1, y1), text),
        *_dimension((across, y0), (across, y1), (x0, y0), (x0, y1), text),
        "</g>",
        f'<g id="dimension-figures" font-family="sans-serif" font-size="{_n(text)}" text-anchor="middle">',
        f'<text x="{_n((x0 + x1) / 2)}" y="{_n(down - 0.35 * text)}">{width:.1f}</text>',
        f'<text transform="translate({_n(across - 0.35 * text)} {_n((y0 + y1) / 2)}) rotate(-90)">{depth:.1f}</text>',
        "</g>",
        *_scale_bar(x0, down + 2.2 * text, bar, text),
        *([] if marks is None else marks_svg(marks, section, to_page, frame, text)),
        *key_svg(entries, 1.4 * text, page_h - 1.5 * text * len(entries), text),
        "</svg>",
    ]
    return "\n".join(lines) + "\n"


def nice_length(limit: float) -> float:
    """The longest of 1, 2, 5, 10, 20, 50, ... that does not exceed `limit` (> 0)."""
    decade = 10.0 ** np.floor(np.log10(limit))
    return float(next(step * decade for step in (5.0, 2.0, 1.0) if step * decade <= limit * (1 + 1e-9)))


def _dimension(
    start: tuple[float, float],
    end: tuple[float, float],
    start_edge: tuple[float, float],
    end_edge: tuple[float, float],
    text: float,
) -> list[str]:
    """A dimension line with extension lines from the edges and oblique strokes at its ends."""
    lines = [_line(start, end)]
    for tip, edge in ((start, start_edge), (end, end_edge)):
        away = np.sign(np.subtract(tip, edge)) * (abs(np.subtract(tip, edge)) > 0)
        lines.append(_line(np.add(edge, 0.3 * text * away), np.add(tip, 0.4 * text * away)))
        stroke = 0.28 * text
        lines.append(_line((tip[0] - stroke, tip[1] + stroke), (tip[0] + stroke, tip[1] - stroke)))
    return lines


def _scale_bar(x: float, y: float, length: float, text: float) -> list[str]:
    block, height = length / 4, 0.45 * text
    blocks = [
        f'<rect x="{_n(x + i * block)}" y="{_n(y)}" width="{_n(block)}" height="{_n(height)}" '
        f'fill="{"black" if i % 2 == 0 else "white"}"/>'
        for i in range(4)
    ]
    return [
        f'<g id="scale-bar" stroke="black" stroke-width="{_n(text / 16)}">',
        *blocks,
        "</g>",
        f'<text font-family="sans-serif" font-size="{_n(text)}" x="{_n(x + length + 0.5 * text)}" '
        f'y="{_n(y + 0.6 * text)}">{length:g} mm</text>',
    ]


def _line(start: Any, end: Any) -> str:
    return f'<line x1="{_n(start[0])}" y1="{_n(start[1])}" x2="{_n(end[0])}" y2="{_n(end[1])}"/>'


def _n(value: float) -> str:
    return f"{value:.4f}".rstrip("0").rstrip(".")
