"""A picture of what a calibration leaves at every corner: arrows over the frame, as SVG or PNG.

Draws; judges nothing.
"""

from __future__ import annotations

from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from ..props.errors import FileError
from .camera import Camera

Array = NDArray[np.float64]

_WIDTH = 900.0
_MARGIN, _CAPTION = 12.0, 44.0
# The usual miss is drawn this long, of the drawing's width.
_USUAL_LENGTH = 0.015


def write_residual_plot(camera: Camera, path: str | Path) -> Path:
    """Write the misses of all corners as arrows over the frame, SVG or PNG by the name's ending.

    Raises FileError for another ending or a file that cannot be written.
    """
    path = Path(path)
    ending = path.suffix.lower()
    if ending not in (".svg", ".png"):
        raise FileError("plot-format", f"{path.name} is neither SVG nor PNG.", "Name the file .svg or .png.")
    data = residual_svg(camera).encode() if ending == ".svg" else _png(camera)
    try:
        path.parent.mkdir(parents=True, exist_ok=True)
        path.write_bytes(data)
    except OSError as error:
        raise FileError(
            "plot-unwritable", f"{path.name} cannot be written: {error.strerror}.", "Check the folder."
        ) from None
    return path


def residual_svg(camera: Camera) -> str:
    """The drawing as SVG text: one colour for all, dots at the corners, a circle as far as corners were seen."""
    scale, arrows, length = _arrows(camera)
    width, height = camera.width * scale + 2 * _MARGIN, camera.height * scale + 2 * _MARGIN + _CAPTION
    cx, cy = camera.parameters[2:4] * scale + _MARGIN
    lines = [
        f'<svg xmlns="http://www.w3.org/2000/svg" viewBox="0 0 {width:.0f} {height:.0f}" font-family="sans-serif" '
        'font-size="13">',
        f'<rect width="{width:.0f}" height="{height:.0f}" fill="white"/>',
        f'<rect x="{_MARGIN}" y="{_MARGIN}" width="{camera.width * scale:.1f}" height="{camera.height * scale:.1f}" '
        'fill="none" stroke="#555"/>',
        f'<clipPath id="frame"><rect x="{_MARGIN}" y="{_MARGIN}" width="{camera.width * scale:.1f}" '
        f'height="{camera.height * scale:.1f}"/></clipPath>',
        f'<circle cx="{cx:.1f}" cy="{cy:.1f}" r="{camera.reach_px * scale:.1f}" fill="none" stroke="#bbb" '
        'clip-path="url(#frame)"/>',
        f'<path d="M{cx - 6:.1f} {cy:.1f}h12M{cx:.1f} {cy - 6:.1f}v12" stroke="#555"/>',
        '<path fill="none" stroke="#0b5cad" d="'
        + "".join(f"M{x0:.1f} {y0:.1f}L{x1:.1f} {y1:.1f}" for x0, y0, x1, y1 in arrows)
        + '"/>',
        '<g fill="#c0392b">' + "".join(f'<circle cx="{x:.1f}" cy="{y:.1f}" r="1.2"/>' for x, y, *_ in arrows) + "</g>",
        f'<text x="{_MARGIN}" y="{height - 26:.0f}">{_caption(camera)}</text>',
        f'<path d="M{_MARGIN} {height - 10:.0f}h{length:.1f}" stroke="#0b5cad" stroke-width="2"/>',
        f'<text x="{_MARGIN + length + 6:.1f}" y="{height - 6:.0f}">{_unit(camera):g} px</text>',
        "</svg>",
    ]
    return "\n".join(lines) + "\n"


def _caption(camera: Camera) -> str:
    corners = sum(len(r.pixels) for r in camera.residuals)
    return (
        f"Seen minus fitted: {corners} corners, {len(camera.residuals)} views, rms {camera.residual_px:.3f} px; "
        "circle: as far as corners were seen"
    )


def _unit(camera: Camera) -> float:
    """The length that the legend shows, px: the rms to one figure."""
    exponent = np.floor(np.log10(max(camera.residual_px, 1e-6)))
    return float(np.round(camera.residual_px / 10**exponent) * 10**exponent)


def _arrows(camera: Camera) -> tuple[float, Array, float]:
    """(drawing units to a px of the frame, (n, 4) arrows, length of the legend's arrow), in drawing units."""
    scale = _WIDTH / camera.width
    stretch = _USUAL_LENGTH * _WIDTH / max(camera.residual_px, 1e-9)
    if not camera.residuals:
        return scale, np.empty((0, 4)), stretch * _unit(camera)
    pixels = np.concatenate([r.pixels for r in camera.residuals]) * scale + _MARGIN
    misses = np.concatenate([r.misses for r in camera.residuals]) * stretch
    return scale, np.hstack([pixels, pixels + misses]), stretch * _unit(camera)


def _png(camera: Camera) -> bytes:
    """The same drawing as PNG."""
    import cv2

    scale, arrows, length = _arrows(camera)
    width, height = camera.width * scale + 2 * _MARGIN, camera.height * scale + 2 * _MARGIN + _CAPTION
    canvas = np.full((round(height), round(width), 3), 255, np.uint8)

    def at(x: float, y: float) -> tuple[int, int]:
        return round(float(x)), round(float(y))

    end = at(_MARGIN + camera.width * scale, _MARGIN + camera.height * scale)
    (left, top), (right, bottom) = at(_MARGIN, _MARGIN), end
    centre = at(*(camera.parameters[2:4] * scale + _MARGIN))
    whole = np.full_like(canvas, 255)
    cv2.circle(whole, centre, round(camera.reach_px * scale), (187, 187, 187), 1, cv2.LINE_AA)
    canvas[top:bottom, left:right] = whole[top:bottom, left:right]
    cv2.rectangle(canvas, (left, top), end, (85, 85, 85), 1, cv2.LINE_AA)
    for x0, y0, x1, y1 in arrows:
        cv2.line(canvas, at(x0, y0), at(x1, y1), (173, 92, 11), 1, cv2.LINE_AA)
        cv2.circle(canvas, at(x0, y0), 1, (43, 57, 192), -1, cv2.LINE_AA)
    font, ink = cv2.FONT_HERSHEY_SIMPLEX, (0, 0, 0)
    cv2.putText(canvas, _caption(camera), at(_MARGIN, height - 26), font, 0.42, ink, 1, cv2.LINE_AA)
    cv2.line(canvas, at(_MARGIN, height - 10), at(_MARGIN + length, height - 10), (173, 92, 11), 2, cv2.LINE_AA)
    cv2.putText(canvas, f"{_unit(camera):g} px", at(_MARGIN + length + 6, height - 6), font, 0.42, ink, 1, cv2.LINE_AA)
    return cv2.imencode(".png", canvas)[1].tobytes()
