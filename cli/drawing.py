"""A printed page at true size: vector shapes in mm, and the files it is written to.

Knows paper, shapes and text; does not know what is drawn. All three kinds of file come from the same
shapes, and the same drawing gives the same bytes every time.
"""

from __future__ import annotations

import io
import math
from collections.abc import Sequence
from dataclasses import dataclass
from functools import lru_cache
from pathlib import Path
from typing import Any, Literal
from xml.sax.saxutils import escape

import numpy as np
from numpy.typing import NDArray

Anchor = Literal["left", "centre", "right"]

_MM_PER_POINT = 25.4 / 72
# A polygon's pixels are cut this many times each way to find how much of them it covers.
_CUTS = 16


@dataclass(frozen=True, eq=False)
class Boxes:
    """Upright rectangles painted as one shape, so that neighbours leave no seam.

    boxes : (n, 4) x0, y0, x1, y1 in mm
    grey : 0 black to 1 white
    """

    boxes: NDArray[np.float64]
    grey: float = 0.0


@dataclass(frozen=True, eq=False)
class Polygon:
    """A filled polygon; points (n, 2) in mm."""

    points: NDArray[np.float64]
    grey: float = 0.0


@dataclass(frozen=True)
class Text:
    """One line of text.

    x, y : place of its anchor on the baseline, mm
    size : of the type, mm from line to line
    turned : reads from bottom to top
    """

    x: float
    y: float
    text: str
    size: float
    anchor: Anchor = "left"
    bold: bool = False
    turned: bool = False

    @property
    def width(self) -> float:
        """Length of the line, mm."""
        return text_width(self.text, self.size, self.bold)

    @property
    def start(self) -> float:
        """Where the line begins along its reading direction, mm."""
        along = self.y if self.turned else self.x
        return along - {"left": 0.0, "centre": 0.5, "right": 1.0}[self.anchor] * self.width

    @property
    def bounds(self) -> tuple[float, float, float, float]:
        """x0, y0, x1, y1 that ascenders and descenders stay within, mm."""
        above, below = 0.78 * self.size, 0.24 * self.size
        if self.turned:
            return self.x - above, self.start, self.x + below, self.start + self.width
        return self.start, self.y - below, self.start + self.width, self.y + above


Item = Boxes | Polygon | Text


@dataclass(frozen=True)
class Drawing:
    """One page. Origin at its lower left corner, x right, y up, mm."""

    title: str
    width: float
    height: float
    items: tuple[Item, ...]


def line(x0: float, y0: float, x1: float, y1: float, thickness: float = 0.2, grey: float = 0.0) -> Boxes:
    """A level or upright line about its middle."""
    half = thickness / 2
    if y0 == y1:
        return Boxes(np.array([[min(x0, x1), y0 - half, max(x0, x1), y0 + half]]), grey)
    if x0 == x1:
        return Boxes(np.array([[x0 - half, min(y0, y1), x0 + half, max(y0, y1)]]), grey)
    raise ValueError("only level and upright lines")


def text_width(text: str, size: float, bold: bool = False) -> float:
    """Length of a line of text, mm."""
    from reportlab.pdfbase.pdfmetrics import stringWidth

    return stringWidth(text, _font_name(bold), size)


def wrapped(text: str, size: float, width: float) -> list[str]:
    """Text broken between words into lines no longer than `width` mm."""
    lines = [""]
    for word in text.split():
        longer = f"{lines[-1]} {word}".strip()
        if lines[-1] and text_width(longer, size) > width:
            lines.append(word)
        else:
            lines[-1] = longer
    return lines


def pdf(pages: Sequence[Drawing], title: str) -> bytes:
    """The pages as one PDF document that asks to be printed without scaling."""
    from reportlab.pdfgen.canvas import Canvas

    buffer = io.BytesIO()
    canvas = Canvas(buffer, invariant=1, pageCompression=1)
    canvas.setTitle(title)
    canvas.setCreator("cutface")
    canvas.setViewerPreference("PrintScaling", "None")
    for page in pages:
        canvas.setPageSize((page.width / _MM_PER_POINT, page.height / _MM_PER_POINT))
        canvas.scale(1 / _MM_PER_POINT, 1 / _MM_PER_POINT)
        for item in page.items:
            _paint_pdf(canvas, item)
        canvas.showPage()
    canvas.save()
    return buffer.getvalue()


def svg(page: Drawing) -> bytes:
    """The page as an SVG document in mm."""
    size = f'width="{page.width:g}mm" height="{page.height:g}mm" viewBox="0 0 {page.width:g} {page.height:g}"'
    parts = [
        '<?xml version="1.0" encoding="UTF-8"?>',
        f'<svg xmlns="http://www.w3.org/2000/svg" {size}>',
        f"<title>{escape(page.title)}</title>",
        f'<rect width="{page.width:g}" height="{page.height:g}" fill="#ffffff"/>',
    ]
    parts += [_svg_item(item, page.height) for item in page.items]
    parts.append("</svg>")
    return ("\n".join(parts) + "\n").encode()


def png(page: Drawing, dpi: float = 600) -> bytes:
    """The page as a grey picture whose pixels hold the share of their area left white.

    The file can state whole pixels per metre only, so the scale is rounded to that.
    """
    from PIL import Image

    per_metre = round(dpi / 0.0254)
    scale = per_metre / 1000
    width, height = math.ceil(page.width * scale - 1e-6), math.ceil(page.height * scale - 1e-6)
    canvas = np.full((height, width), 255, np.uint8)
    for item in page.items:
        if isinstance(item, Text):
            _paint_text(canvas, item, scale, page.height)
        elif isinstance(item, Polygon):
            _paint_polygon(canvas, item, scale, page.height)
        else:
            _paint_boxes(canvas, item, scale, page.height)
    buffer = io.BytesIO()
    Image.fromarray(canvas).save(buffer, "PNG", dpi=(per_metre * 0.0254, per_metre * 0.0254), compress_level=9)
    return buffer.getvalue()


# --- PDF ---


def _paint_pdf(canvas: Any, item: Item) -> None:
    if isinstance(item, Text):
        canvas.setFillGray(0)
        canvas.saveState()
        canvas.translate(item.x, item.y)
        if item.turned:
            canvas.rotate(90)
        canvas.setFont(_font_name(item.bold), item.size)
        canvas.drawString(item.start - (item.y if item.turned else item.x), 0, item.text)
        canvas.restoreState()
        return
    canvas.setFillGray(item.grey)
    path = canvas.beginPath()
    if isinstance(item, Polygon):
        path.moveTo(*item.points[0])
        for point in item.points[1:]:
            path.lineTo(*point)
        path.close()
    else:
        for x0, y0, x1, y1 in item.boxes:
            path.rect(x0, y0, x1 - x0, y1 - y0)
    canvas.drawPath(path, stroke=0, fill=1)


@lru_cache(maxsize=2)
def _font_name(bold: bool) -> str:
    """The type, registered with the PDF writer: it comes with that writer, so every page looks alike."""
    from reportlab.pdfbase.pdfmetrics import registerFont
    from reportlab.pdfbase.ttfonts import TTFont

    name = "Vera-Bold" if bold else "Vera"
    registerFont(TTFont(name, str(_font_file(bold))))
    return name


def _font_file(bold: bool) -> Path:
    import reportlab

    return Path(reportlab.__file__).parent / "fonts" / ("VeraBd.ttf" if bold else "Vera.ttf")


# --- SVG ---


def _svg_item(item: Item, height: float) -> str:
    if isinstance(item, Text):
        weight = ' font-weight="bold"' if item.bold else ""
        x, y = (item.x, height - item.start) if item.turned else (item.start, height - item.y)
        turn = f' transform="rotate(-90 {x:.4f} {y:.4f})"' if item.turned else ""
        return (
            f'<text x="{x:.4f}" y="{y:.4f}"{turn} font-size="{item.size:g}"{weight} '
            f'font-family="Bitstream Vera Sans, DejaVu Sans, Verdana, sans-serif" '
            f'textLength="{item.width:.3f}" lengthAdjust="spacingAndGlyphs">{escape(item.text)}</text>'
        )
    if isinstance(item, Polygon):
        path = "M" + "L".join(f"{x:.4f} {height - y:.4f}" for x, y in item.points) + "z"
    else:
        path = "".join(
            f"M{x0:.4f} {height - y1:.4f}H{x1:.4f}V{height - y0:.4f}H{x0:.4f}z" for x0, y0, x1, y1 in item.boxes
        )
    tone = round(255 * item.grey)
    return f'<path d="{path}" fill="#{tone:02x}{tone:02x}{tone:02x}"/>'


# --- PNG ---


def _darken(canvas: NDArray[np.uint8], left: int, top: int, covered: NDArray[np.floating], grey: float) -> None:
    """Take the covered share of every pixel of a patch away from what is still white."""
    x0, y0 = max(left, 0), max(top, 0)
    covered = covered[y0 - top : canvas.shape[0] - top, x0 - left : canvas.shape[1] - left]
    patch = canvas[y0 : y0 + covered.shape[0], x0 : x0 + covered.shape[1]]
    loss = np.rint(covered * (255 * (1 - grey))).astype(np.uint8)
    patch -= np.minimum(loss, patch)


def _paint_boxes(canvas: NDArray[np.uint8], item: Boxes, scale: float, height: float) -> None:
    for x0, y0, x1, y1 in item.boxes:
        left, columns = _covered(x0 * scale, x1 * scale)
        top, rows = _covered((height - y1) * scale, (height - y0) * scale)
        _darken(canvas, left, top, np.outer(rows, columns), item.grey)


def _covered(start: float, end: float) -> tuple[int, NDArray[np.float64]]:
    """(first pixel, covered share of each pixel) of a stretch; pixel k reaches from k to k + 1."""
    first, last = math.floor(start + 1e-9), math.ceil(end - 1e-9)
    edges = np.arange(first, last + 1, dtype=float)
    return first, np.minimum(edges[1:], end) - np.maximum(edges[:-1], start)


def _paint_polygon(canvas: NDArray[np.uint8], item: Polygon, scale: float, height: float) -> None:
    from PIL import Image, ImageDraw

    points = np.column_stack([item.points[:, 0], height - item.points[:, 1]]) * scale
    left, top = np.floor(points.min(axis=0)).astype(int)
    right, bottom = np.ceil(points.max(axis=0)).astype(int)
    fine = Image.new("1", ((right - left) * _CUTS, (bottom - top) * _CUTS))
    # The middle of the first cut lies half a cut inside.
    cut_points = (points - (left, top)) * _CUTS - 0.5
    ImageDraw.Draw(fine).polygon([tuple(p) for p in cut_points], fill=1)
    covered = np.asarray(fine, float).reshape(bottom - top, _CUTS, right - left, _CUTS).mean(axis=(1, 3))
    _darken(canvas, left, top, covered, item.grey)


def _paint_text(canvas: NDArray[np.uint8], item: Text, scale: float, height: float) -> None:
    from PIL import Image, ImageDraw, ImageFont

    font = ImageFont.truetype(str(_font_file(item.bold)), item.size * scale, layout_engine=ImageFont.Layout.BASIC)
    margin = math.ceil(item.size * scale)
    # The baseline's start at a whole pixel of the patch plus its fraction on the page.
    along, across = item.start * scale, (height - item.y) * scale
    if item.turned:
        along, across = height * scale - item.start * scale, item.x * scale
    first, base = math.floor(along), math.floor(across)
    patch = Image.new("L", (math.ceil(item.width * scale) + 2 * margin, 3 * margin))
    at = (margin + along - first, 2 * margin + across - base)
    if item.turned:
        at = (margin + first + 1 - along, at[1])
    ImageDraw.Draw(patch).text(at, item.text, fill=255, font=font, anchor="ls")
    if item.turned:
        covered = np.rot90(np.asarray(patch, float) / 255)
        _darken(canvas, base - 2 * margin, first + 1 + margin - covered.shape[0], covered, 0.0)
    else:
        _darken(canvas, first - margin, base - 2 * margin, np.asarray(patch, float) / 255, 0.0)
