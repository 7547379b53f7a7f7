"""Pages of PDF documents as pictures, by a reader that is an extra (pypdfium2, which is PDFium).

A page that is one scan gives the scan's own pixels and resolution; any other page is drawn. Does not know what a page
shows, nor to what scale its drawing is.
"""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from ..props.errors import FileError

# A scan that covers this part of the page is the page.
_WHOLE_PAGE = 0.85
# A page that is no scan is drawn so finely: a line of 0.25 mm is three pixels wide.
DRAWN_DPI = 300.0
_POINTS_PER_INCH = 72.0
# Bytes for each pixel of a decoded page: the reader's, and ours.
BYTES_PER_PIXEL = 4 + 3


@dataclass(frozen=True, eq=False)
class PdfPage:
    """A page as a picture.

    resolution_dpi : (x, y)
    drawn : whether it was drawn rather than a scan taken out
    coverage : whether its values are shares of white area, as where lines were drawn, and not encoded light
    """

    pixels: NDArray[np.uint8]
    resolution_dpi: tuple[float, float]
    pages: int
    drawn: bool
    coverage: bool = False


def read_page(
    data: bytes, name: str, page: int, dpi: float | None, check_size: Callable[[tuple[int, int]], None]
) -> PdfPage:
    """Page number `page` (from 1) of a PDF document.

    dpi : at which a page that is no scan is drawn; None takes DRAWN_DPI
    check_size : called with (width, height) before anything is decoded; raises where that is too much
    Raises FileError: no reader, no such page, damaged or protected.
    """
    try:
        import pypdfium2  # pyright: ignore[reportMissingImports]
    except ImportError:
        raise FileError(
            "reader-missing",
            f"{name} is a PDF document, and its reader is not installed.",
            "Install it with: pip install 'cutface[pdf]'. Or save the scanned page as PNG or TIFF at the scanner's "
            "resolution.",
        ) from None
    try:
        document = pypdfium2.PdfDocument(data)
    except pypdfium2.PdfiumError as error:
        protected = "password" in str(error).lower()
        why = "is protected by a password" if protected else "is damaged"
        raise FileError(
            "file-damaged", f"{name} is a PDF document that {why}.", "Save or export the page again."
        ) from None
    try:
        count = len(document)
        if not 1 <= page <= count:
            raise no_such_page(name, page, count)
        return _page(document[page - 1], count, dpi, check_size)
    finally:
        document.close()


def no_such_page(name: str, page: int, count: int) -> FileError:
    """The error for a page that a file does not have."""
    has = f"has {count} pages" if count > 1 else "has one page only"
    return FileError("file-page", f"There is no page {page}: {name} {has}.", "State one of its pages with --page.")


def _page(page: Any, count: int, dpi: float | None, check_size: Callable[[tuple[int, int]], None]) -> PdfPage:
    import pypdfium2.raw as pdfium  # pyright: ignore[reportMissingImports]

    width, height = page.get_size()
    things = [thing for thing in page.get_objects() if not _is_unseen(thing)]
    images = [thing for thing in things if thing.type == pdfium.FPDF_PAGEOBJ_IMAGE]
    placed = [_placed(image) for image in images]
    whole = max(range(len(images)), key=lambda i: placed[i].area, default=None)
    if whole is not None and placed[whole].area >= _WHOLE_PAGE * width * height:
        image, place = images[whole], placed[whole]
        columns, rows = image.get_px_size()
        own = columns / place.width * _POINTS_PER_INCH, rows / place.height * _POINTS_PER_INCH
        if place.upright and page.get_rotation() == 0 and len(things) == 1:
            check_size((columns, rows))
            return PdfPage(_samples(image.get_bitmap(render=False)), own, count, False)
        # Turned, or with something over it: drawn at its own resolution.
        dpi = dpi or max(own)
    dpi = dpi or DRAWN_DPI
    scale = dpi / _POINTS_PER_INCH
    check_size((math.ceil(width * scale), math.ceil(height * scale)))
    bitmap = page.render(scale=scale, rev_byteorder=True)
    return PdfPage(_samples(bitmap, drawn=True), (dpi, dpi), count, True, coverage=not images)


def _is_unseen(thing: Any) -> bool:
    """Whether it is text that only searching finds, as text recognition lays over scans."""
    import pypdfium2.raw as pdfium  # pyright: ignore[reportMissingImports]

    if thing.type != pdfium.FPDF_PAGEOBJ_TEXT:
        return False
    return pdfium.FPDFTextObj_GetTextRenderMode(thing.raw) == pdfium.FPDF_TEXTRENDERMODE_INVISIBLE


@dataclass(frozen=True)
class _Place:
    """Where an image lies: its sides, points, and whether it lies upright and unmirrored."""

    width: float
    height: float
    upright: bool

    @property
    def area(self) -> float:
        return self.width * self.height


def _placed(image: Any) -> _Place:
    a, b, c, d, _, _ = image.get_matrix().get()
    width, height = math.hypot(a, b), math.hypot(c, d)
    straight = abs(b) < 1e-3 * width and abs(c) < 1e-3 * height
    return _Place(width, height, straight and a > 0 and d > 0)


def _samples(bitmap: Any, drawn: bool = False) -> NDArray[np.uint8]:
    """(h, w) grey or (h, w, 3) RGB of the reader's bitmap."""
    pixels = np.asarray(bitmap.to_numpy())
    if pixels.ndim == 3 and pixels.shape[2] == 1:
        pixels = pixels[..., 0]
    if pixels.ndim == 3:
        # The reader stores blue first unless it was asked not to.
        pixels = pixels[..., :3] if drawn else pixels[..., 2::-1]
    return np.ascontiguousarray(pixels)
