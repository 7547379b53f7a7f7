"""What a picture says about itself: resolution, orientation, camera, lens, date.

Every value comes from a stranger's file, so each is checked and dropped when it makes no sense. Knows
nothing of pixels; what the scan reference makes of a resolution is its own business.
"""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any

# EXIF 2.32 and TIFF 6.0 tag numbers.
_MAKE, _MODEL, _ORIENTATION = 271, 272, 274
_X_RESOLUTION, _Y_RESOLUTION, _RESOLUTION_UNIT = 282, 283, 296
_TAKEN, _FOCAL_LENGTH, _DIGITAL_ZOOM, _FOCAL_LENGTH_35MM = 36867, 37386, 41988, 41989

# No picture of a cut face is scanned more coarsely or finely (a scanner's optics end near 6400 dpi).
LOWEST_DPI, HIGHEST_DPI = 30.0, 12800.0


@dataclass(frozen=True)
class Camera:
    """What the file says of the camera; None where it says nothing credible."""

    make: str | None = None
    model: str | None = None
    focal_length_mm: float | None = None
    focal_length_35mm: float | None = None
    digital_zoom: float | None = None
    taken: str | None = None


@dataclass(frozen=True)
class Resolution:
    """Dots per inch (x, y) as stored, or None and the reason why the file's own tag is not used."""

    dpi: tuple[float, float] | None
    problem: str | None = None


def camera(tags: Mapping[int, Any]) -> Camera:
    """Camera and lens out of EXIF tags."""
    return Camera(
        make=_text(tags.get(_MAKE)),
        model=_text(tags.get(_MODEL)),
        focal_length_mm=_number(tags.get(_FOCAL_LENGTH), 0.5, 3000),
        focal_length_35mm=_number(tags.get(_FOCAL_LENGTH_35MM), 4, 6000),
        digital_zoom=_number(tags.get(_DIGITAL_ZOOM), 1, 200),
        taken=_text(tags.get(_TAKEN)),
    )


def orientation(tags: Mapping[int, Any]) -> int:
    """EXIF orientation 1 to 8; 1 where it is missing or makes no sense."""
    value = _number(tags.get(_ORIENTATION), 1, 8)
    return int(value) if value is not None and value == int(value) else 1


def resolution(file_format: str, info: Mapping[str, Any], tags: Mapping[int, Any]) -> Resolution:
    """The resolution a file states, from its own header and its EXIF or TIFF tags.

    Two statements that differ by more than 1 % contradict each other unless one is a default that
    programs write when they know nothing; then neither is used.
    """
    stated = [pair for pair in (_from_header(file_format, info), _from_tags(tags)) if pair is not None]
    if not stated:
        return Resolution(None, "the file states no resolution")
    sensible = [pair for pair in stated if all(LOWEST_DPI <= value <= HIGHEST_DPI for value in pair)]
    if not sensible:
        x, y = stated[0]
        return Resolution(None, f"the file states {x:.4g} x {y:.4g} dots per inch, which makes no sense")
    known = [pair for pair in sensible if not is_default(pair)] or sensible[:1]
    first = known[0]
    for other in known[1:]:
        if any(abs(a - b) > 0.01 * a for a, b in zip(first, other, strict=True)):
            both = " and ".join(f"{x:.4g} x {y:.4g}" for x, y in (first, other))
            return Resolution(None, f"the file states two resolutions, {both} dots per inch")
    return Resolution(first)


def is_default(dpi: tuple[float, float]) -> bool:
    """True for 72 and 96 dpi (also as whole pixels per metre): the screens' values, written by programs that
    do not know the resolution."""
    return any(all(abs(value - screen) < 0.05 for value in dpi) for screen in (72, 96))


def _from_header(file_format: str, info: Mapping[str, Any]) -> tuple[float, float] | None:
    if file_format == "JPEG":
        per_inch = {1: 1.0, 2: 2.54}.get(info.get("jfif_unit", 0))
        pair = info.get("jfif_density")
    elif file_format in ("PNG", "BMP", "JPEG 2000", "PDF"):
        per_inch, pair = 1.0, info.get("dpi")
    else:
        return None
    if per_inch is None or not isinstance(pair, tuple) or len(pair) != 2:
        return None
    return _float(pair[0]) * per_inch, _float(pair[1]) * per_inch


def _from_tags(tags: Mapping[int, Any]) -> tuple[float, float] | None:
    if _X_RESOLUTION not in tags and _Y_RESOLUTION not in tags:
        return None
    # Without a unit the tags mean inches (TIFF 6.0); unit 1 gives the shape of the pixels only.
    unit = _number(tags.get(_RESOLUTION_UNIT, 2), 0, 10)
    per_inch = {2.0: 1.0, 3.0: 2.54}.get(unit if unit is not None else 2.0)
    if per_inch is None:
        return None
    return _float(tags.get(_X_RESOLUTION)) * per_inch, _float(tags.get(_Y_RESOLUTION)) * per_inch


def _float(value: Any) -> float:
    """The number in a tag, 0 where there is none."""
    if isinstance(value, tuple) and len(value) == 1:
        value = value[0]
    if isinstance(value, (bytes, str, tuple)):
        return 0.0
    try:
        number = float(value)
    except (TypeError, ValueError, ZeroDivisionError, OverflowError):
        return 0.0
    return number if math.isfinite(number) else 0.0


def _number(value: Any, lowest: float, highest: float) -> float | None:
    number = _float(value)
    return number if lowest <= number <= highest else None


def _text(value: Any) -> str | None:
    if isinstance(value, bytes):
        value = value.decode("latin-1")
    if not isinstance(value, str):
        return None
    return "".join(c for c in value.split("\0")[0] if c.isprintable()).strip()[:100] or None
