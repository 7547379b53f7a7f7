"""A calibration as a person reads it in the terminal: what came out, how well it is known, and what it is worth.

Knows wording and rounding on the screen; every figure is also in the calibration's file.
"""

from __future__ import annotations

import math
from typing import TYPE_CHECKING

from rich.console import Group, RenderableType
from rich.table import Table
from rich.text import Text

from .show import notice_lines

if TYPE_CHECKING:
    from ..vision.camera import Camera
    from ..vision.references.scanner import Scanner

# What the usual photo of a slice looks like, to say what a calibration is worth: a face this high, this far away, mm.
_HEIGHT_MM, _DISTANCE_MM = 20.0, 600.0
# Diagonal and long side of the 35 mm film's frame, mm.
_FULL_FRAME_DIAGONAL_MM = 43.27

_TONES = {
    "file": "values encoded for the eye, as its files say",
    "srgb": "values encoded for the eye (sRGB)",
    "linear": "light as it fell, not encoded for the eye",
}

_Row = tuple[str, str, str, str]


def camera_view(camera: Camera, exif_focal_std: float) -> RenderableType:
    """Everything about a camera's calibration that a person wants to know before using it.

    exif_focal_std : relative standard uncertainty of the focal length that a photo's own data give
    """
    focal, centre = camera.focal_px, camera.parameters[2:4]
    diagonal = math.hypot(camera.width, camera.height)
    off = centre - ((camera.width - 1) / 2, (camera.height - 1) / 2)
    off_std = float(max(camera.covariance[2, 2], camera.covariance[3, 3])) ** 0.5
    details = camera.details
    fit_std = (camera.focal_std**2 - _refocus(camera) ** 2) ** 0.5
    rows: list[_Row] = [
        ("Focal length", *_rounded(focal, fit_std), "px"),
        ("The same as 35 mm equivalent", f"{focal / diagonal * _FULL_FRAME_DIAGONAL_MM:.1f}", "", "mm"),
        ("Angle of view along the longer side", f"{_view_angle(camera):.0f}", "", "°"),
        ("Lens centre right of the middle of the picture", *_rounded(float(off[0]), off_std), "px"),
        ("Lens centre below the middle of the picture", *_rounded(float(off[1]), off_std), "px"),
        ("Distortion at the corners of the frame", f"{100 * _distortion(camera):+.2f}", "", "%"),
        ("Corners of the board miss the lens model by", f"{camera.residual_px:.2f}", "", "px"),
        ("Corners reach towards those of the frame", f"{100 * 2 * camera.reach_px / diagonal:.0f}", "", "%"),
        ("Board tilted by up to", f"{details.get('largest_tilt_deg', 0):.0f}", "", "°"),
    ]
    name = " ".join(filter(None, (camera.make, camera.model))) or "Camera that the photos do not name"
    at = f" at {camera.focal_length_mm:g} mm" if camera.focal_length_mm else ""
    tone = _TONES.get(str(camera.tone), f"light to the power of 1/{camera.tone}") if camera.tone else None
    left = _area_error(camera.focal_std / focal)
    return Group(
        Text(f"{name}{at}, pictures of {camera.width} x {camera.height} px", style="bold"),
        Text(f"{details.get('photos')} photos with {details.get('corners')} corners of {details.get('board')}."),
        "",
        _table(rows),
        "",
        Text(
            f"With it, the height of a face {_HEIGHT_MM:g} mm above a sheet, seen from {_DISTANCE_MM:g} mm, leaves "
            f"{left:.2f} % in the area; the focal length in a photo's own data leaves "
            f"{_area_error(exif_focal_std):.2f} %."
        ),
        Text(
            f"The edges of the board show that the camera stores {tone}."
            if tone
            else "The edges of the board leave open how the camera stores light."
        ),
        *notice_lines(camera.notices),
    )


def scanner_view(scanner: Scanner) -> RenderableType:
    """Everything about a scanner's calibration that a person wants to know before using it."""
    import numpy as np

    (x, y), std = scanner.scale, np.sqrt(np.diag(scanner.covariance))
    u_x, u_y = (float(np.hypot(s, scanner.print_scale_std)) for s in std[:2])
    rows: list[_Row] = [
        ("True length over nominal length across the bed", *_rounded(x, u_x), ""),
        ("True length over nominal length along the bed", *_rounded(y, u_y), ""),
        ("Angle between the axes beyond a right one", *_rounded(scanner.skew_deg, float(np.rad2deg(std[2]))), "°"),
        ("Places wander beyond that by up to", f"{scanner.wander_mm:.3f}", "", "mm"),
        ("Corners of the sheet miss the fit by", f"{scanner.residual_mm:.3f}", "", "mm"),
    ]
    name = " ".join(filter(None, (scanner.make, scanner.model))) or "Scanner that the scans do not name"
    bed, dpi = scanner.bed_mm, scanner.dpi
    return Group(
        Text(f"{name}, bed of {bed[0]:.0f} x {bed[1]:.0f} mm at {dpi[0]:.4g} x {dpi[1]:.4g} dpi", style="bold"),
        Text(f"{scanner.details.get('scans')} scans with {scanner.details.get('corners')} corners of the sheet."),
        "",
        _table(rows),
        "",
        Text(f"With it, the scale of a scan is known to {100 * max(u_x, u_y):.2f} % per axis; without, to 0.25 %."),
        *notice_lines(scanner.notices),
    )


def _table(rows: list[_Row]) -> Table:
    table = Table(box=None, header_style="bold", pad_edge=False, collapse_padding=True)
    table.add_column("What came out")
    table.add_column("Value", justify="right", no_wrap=True)
    table.add_column("± u", justify="right", no_wrap=True)
    table.add_column("Unit", no_wrap=True)
    for row in rows:
        table.add_row(*row)
    return table


def _rounded(value: float, std: float) -> tuple[str, str]:
    """Value and standard uncertainty to two digits of the latter."""
    decimals = max(0, 1 - math.floor(math.log10(std))) if std > 0 else 3
    return f"{value:.{decimals}f}", f"{std:.{decimals}f}"


def _refocus(camera: Camera) -> float:
    from ..vision.camera import REFOCUS_STD

    return REFOCUS_STD * camera.focal_px


def _area_error(focal_std: float) -> float:
    """Per cent of area that an uncertain focal length leaves of the usual face's height."""
    return 100 * 2 * _HEIGHT_MM / (_DISTANCE_MM - _HEIGHT_MM) * focal_std


def _view_angle(camera: Camera) -> float:
    """Between the middles of the shorter sides of the frame, degrees."""
    import numpy as np

    middle = np.array([(camera.width - 1) / 2, (camera.height - 1) / 2])
    ends = np.array([middle, middle])
    ends[:, int(camera.height > camera.width)] = 0.0, max(camera.width, camera.height) - 1.0
    first, second = np.c_[camera.to_directions(ends), np.ones(2)]
    return math.degrees(math.acos(first @ second / np.linalg.norm(first) / np.linalg.norm(second)))


def _distortion(camera: Camera) -> float:
    """By how much the lens moves the corners of the frame outwards, mean of the four, relative."""
    import numpy as np

    width, height = camera.width - 1, camera.height - 1
    corners = np.array([[0, 0], [width, 0], [0, height], [width, height]], float)
    seen = np.linalg.norm((corners - camera.parameters[2:4]) / camera.parameters[:2], axis=1)
    return float(np.mean(seen / np.linalg.norm(camera.to_directions(corners), axis=1)) - 1)
