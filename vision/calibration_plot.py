"""A picture of what a calibration leaves at every corner: arrows over the frame or the bed, as SVG or PNG.

Draws; judges nothing.
"""

from __future__ import annotations

from dataclasses import dataclass
from pathlib import Path
from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import NDArray

from ..props.errors import FileError
from .camera import Camera

if TYPE_CHECKING:
    from .references.scanner import Scanner

Array = NDArray[np.float64]

_WIDTH = 900.0
_MARGIN, _CAPTION = 12.0, 44.0
# The usual miss is drawn this long, of the drawing's width.
_USUAL_LENGTH = 0.015


@dataclass(frozen=True, eq=False)
class Misses:
    """By how much a fit misses corners, and where.

    width, height : of the frame or bed; places, misses : (n, 2) in it, y down, seen and seen minus fitted
    unit : of all of them; rms : of the misses
    caption : a line about them
    circle : (x, y, radius) as far as corners were seen
    """

    width: float
    height: float
    places: Array
    misses: Array
    unit: str
    rms: float
    caption: str
    circle: tuple[float, float, float] | None = None


def camera_misses(camera: Camera) -> Misses:
    """What a camera's calibration leaves, px of the frame."""
    empty = [np.empty((0, 2))]
    places = np.concatenate([r.pixels for r in camera.residuals] or empty)
    x, y = camera.parameters[2:4]
    return Misses(
        width=camera.width,
        height=camera.height,
        places=places,
        misses=np.concatenate([r.misses for r in camera.residuals] or empty),
        unit="px",
        rms=camera.residual_px,
        caption=f"Seen minus fitted: {len(places)} corners, {len(camera.residuals)} views, rms "
        f"{camera.residual_px:.3f} px; circle: as far as corners were seen",
        circle=(float(x), float(y), camera.reach_px),
    )


def scanner_misses(scanner: Scanner) -> Misses:
    """What a scanner's calibration leaves, mm of the bed."""
    down = np.array([1.0, -1.0])
    return Misses(
        width=scanner.bed_mm[0],
        height=scanner.bed_mm[1],
        places=(scanner.places + scanner.half * down) * down,
        misses=scanner.misses * down,
        unit="mm",
        rms=scanner.residual_mm,
        caption=f"On the sheet minus fitted: {len(scanner.places)} corners, rms {scanner.residual_mm:.3f} mm per axis",
    )


def write_residual_plot(shown: Misses, path: str | Path) -> Path:
    """Write the misses of all corners as arrows, SVG or PNG by the name's ending.

    Raises FileError for another ending or a file that cannot be written.
    """
    path = Path(path)
    ending = path.suffix.lower()
    if ending not in (".svg", ".png"):
        raise FileError("plot-format", f"{path.name} is neither SVG nor PNG.", "Name the file .svg or .png.")
    data = residual_svg(shown).encode() if ending == ".svg" else _png(shown)
    try:
        path.parent.mkdir(parents=True, exist_ok=True)
        path.write_bytes(data)
    except OSError as error:
        raise FileError(
            "plot-unwritable", f"{path.name} cannot be written: {error.strerror}.", "Check the folder."
        ) from None
    return path


def residual_svg(shown: Misses) -> str:
    """The drawing as SVG text: one colour for all, dots at the corners, a circle as far as corners were seen."""
    scale, arrows, length = _arrows(shown)
    wide, high = shown.width * scale, shown.height * scale
    width, height = wide + 2 * _MARGIN, high + 2 * _MARGIN + _CAPTION
    frame = f'x="{_MARGIN}" y="{_MARGIN}" width="{wide:.1f}" height="{high:.1f}"'
    lines = [
        f'<svg xmlns="http://www.w3.org/2000/svg" viewBox="0 0 {width:.0f} {height:.0f}" font-family="sans-serif" '
        'font-size="13">',
        f'<rect width="{width:.0f}" height="{height:.0f}" fill="white"/>',
        f'<rect {frame} fill="none" stroke="#555"/>',
    ]
    if shown.circle is not None:
        cx, cy, reach = (value * scale for value in shown.circle)
        cx, cy = cx + _MARGIN, cy + _MARGIN
        lines += [
            f'<clipPath id="frame"><rect {frame}/></clipPath>',
            f'<circle cx="{cx:.1f}" cy="{cy:.1f}" r="{reach:.1f}" fill="none" stroke="#bbb" clip-path="url(#frame)"/>',
            f'<path d="M{cx - 6:.1f} {cy:.1f}h12M{cx:.1f} {cy - 6:.1f}v12" stroke="#555"/>',
        ]
    lines += [
        '<path fill="none" stroke="#0b5cad" d="'
        + "".join(f"M{x0:.1f} {y0:.1f}L{x1:.1f} {y1:.1f}" for x0, y0, x1, y1 in arrows)
        + '"/>',
        '<g fill="#c0392b">' + "".join(f'<circle cx="{x:.1f}" cy="{y:.1f}" r="1.2"/>' for x, y, *_ in arrows) + "</g>",
        f'<text x="{_MARGIN}" y="{height - 26:.0f}">{shown.caption}</text>',
        f'<path d="M{_MARGIN} {height - 10:.0f}h{length:.1f}" stroke="#0b5cad" stroke-width="2"/>',
        f'<text x="{_MARGIN + length + 6:.1f}" y="{height - 6:.0f}">{_unit(shown):g} {shown.unit}</text>',
        "</svg>",
    ]
    return "\n".join(lines) + "\n"


def _unit(shown: Misses) -> float:
    """The length that the legend shows: the rms to one figure."""
    exponent = np.floor(np.log10(max(shown.rms, 1e-6)))
    return float(np.round(shown.rms / 10**exponent) * 10**exponent)


def _arrows(shown: Misses) -> tuple[float, Array, float]:
    """(drawing units to a unit of the frame, (n, 4) arrows, length of the legend's arrow), in drawing units."""
    scale = _WIDTH / max(shown.width, 0.75 * shown.height)
    stretch = _USUAL_LENGTH * _WIDTH / max(shown.rms, 1e-9)
    places = shown.places * scale + _MARGIN
    return scale, np.hstack([places, places + shown.misses * stretch]), stretch * _unit(shown)


def _png(shown: Misses) -> bytes:
    """The same drawing as PNG."""
    import cv2

    scale, arrows, length = _arrows(shown)
    wide, high = shown.width * scale, shown.height * scale
    width, height = wide + 2 * _MARGIN, high + 2 * _MARGIN + _CAPTION
    canvas = np.full((round(height), round(width), 3), 255, np.uint8)

    def at(x: float, y: float) -> tuple[int, int]:
        return round(float(x)), round(float(y))

    (left, top), (right, bottom) = at(_MARGIN, _MARGIN), at(_MARGIN + wide, _MARGIN + high)
    if shown.circle is not None:
        cx, cy, reach = (value * scale for value in shown.circle)
        whole = np.full_like(canvas, 255)
        cv2.circle(whole, at(cx + _MARGIN, cy + _MARGIN), round(reach), (187, 187, 187), 1, cv2.LINE_AA)
        canvas[top:bottom, left:right] = whole[top:bottom, left:right]
    cv2.rectangle(canvas, (left, top), (right, bottom), (85, 85, 85), 1, cv2.LINE_AA)
    for x0, y0, x1, y1 in arrows:
        cv2.line(canvas, at(x0, y0), at(x1, y1), (173, 92, 11), 1, cv2.LINE_AA)
        cv2.circle(canvas, at(x0, y0), 1, (43, 57, 192), -1, cv2.LINE_AA)
    font, ink = cv2.FONT_HERSHEY_SIMPLEX, (0, 0, 0)
    cv2.putText(canvas, shown.caption, at(_MARGIN, height - 26), font, 0.42, ink, 1, cv2.LINE_AA)
    cv2.line(canvas, at(_MARGIN, height - 10), at(_MARGIN + length, height - 10), (173, 92, 11), 2, cv2.LINE_AA)
    legend = f"{_unit(shown):g} {shown.unit}"
    cv2.putText(canvas, legend, at(_MARGIN + length + 6, height - 6), font, 0.42, ink, 1, cv2.LINE_AA)
    return cv2.imencode(".png", canvas)[1].tobytes()
