"""A flatbed scan: the scanner's own resolution is the scale.

Knows when a stated resolution can be believed and how true a scanner runs. Does not look at pixels.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from ...props.errors import Refusal, UsageError
from ...props.result import Notice
from ...props.uncertainty import Mode
from ..metadata import HIGHEST_DPI, LOWEST_DPI, is_default
from ..photo import Photo
from .reference import Reference

Array = NDArray[np.float64]

_MM_PER_INCH = 25.4
# Resolutions are stored as whole pixels per metre or as short decimals; more than this apart is another value.
SAME_RESOLUTION = 0.005
# An office scanner nobody calibrated: scale of each axis, and how far it wanders over 100 mm of bed
# (measured on office scanners: halves of one bed differed by 0.6 % at worst; stated assumption).
SCALE_STD = 0.002
WANDER_STD = 0.15 / 100.0
# Travel not square to the line of sensors.
SKEW_STD_RAD = np.deg2rad(0.1)

_STATE_IT = "State the resolution the scanner was set to, or scan with a reference sheet or card beside the face."


@dataclass(frozen=True)
class ScanGrid:
    """Pixel <-> mm of a scan: origin at the lower left pixel, x right, y up.

    pitch : (x, y) mm to a pixel
    height : pixel rows
    """

    pitch: tuple[float, float]
    height: int

    def to_mm(self, pixels: Array) -> Array:
        """(n, 2) pixels to (n, 2) mm."""
        return np.column_stack([pixels[:, 0], self.height - 1 - pixels[:, 1]]) * self.pitch

    def to_pixels(self, points: Array) -> Array:
        """(n, 2) mm to (n, 2) pixels."""
        x, y = (points / self.pitch).T
        return np.column_stack([x, self.height - 1 - y])

    def mm_per_px(self, pixels: Array) -> Array:
        """(n, 2, 2) Jacobian of `to_mm`."""
        return np.broadcast_to(np.diag([self.pitch[0], -self.pitch[1]]), (len(pixels), 2, 2))


def scan_resolution(
    photo: Photo, stated_dpi: float | tuple[float, float] | None = None
) -> tuple[float, float, tuple[Notice, ...]]:
    """Size of a scan's pixels.

    stated_dpi : dots per inch that the person states, for both axes or (x, y); goes before the file's own
    Returns (mm per pixel along x, along y, notices). Raises UsageError for a stated value out of range, Refusal if
    nothing is stated and the file's own resolution is missing, senseless, a program's default, or a camera's.
    """
    if stated_dpi is not None:
        x, y = stated_dpi if isinstance(stated_dpi, tuple) else (stated_dpi, stated_dpi)
        if not all(LOWEST_DPI <= value <= HIGHEST_DPI for value in (x, y)):
            raise UsageError(
                "resolution-out-of-range",
                f"A resolution of {_text((x, y))} dots per inch is out of range.",
                f"State the scanner's setting, between {LOWEST_DPI:g} and {HIGHEST_DPI:g}.",
            )
        return _MM_PER_INCH / x, _MM_PER_INCH / y, _contradiction(photo, (x, y))
    dpi = photo.resolution_dpi
    if dpi is None:
        why = photo.resolution_problem or "the file states no resolution"
        raise Refusal("no-resolution", f"The scale of the scan is not known: {why}.", _STATE_IT)
    if photo.focal_length_mm is not None or photo.focal_length_35mm is not None:
        raise Refusal(
            "camera-resolution",
            f"The picture was taken through a camera's lens; its {_text(dpi)} dots per inch say nothing of its scale.",
            "Photograph the face with a reference sheet or cards, or scan it on a flatbed.",
        )
    if is_default(dpi):
        raise Refusal(
            "default-resolution",
            f"The file states {_text(dpi)} dots per inch, which programs write when they do not know the resolution.",
            _STATE_IT,
        )
    return _MM_PER_INCH / dpi[0], _MM_PER_INCH / dpi[1], ()


def scan_reference(photo: Photo, stated_dpi: float | tuple[float, float] | None, scale_std: float | None) -> Reference:
    """The Reference that a scan's resolution gives.

    stated_dpi : dots per inch that the person states; goes before the file's own
    scale_std : relative standard uncertainty of the scanner's scale per axis; None takes that of an uncalibrated one
    Raises as `scan_resolution`.
    """
    x_pitch, y_pitch, notices = scan_resolution(photo, stated_dpi)
    grid = ScanGrid((x_pitch, y_pitch), photo.height)
    known = scale_std is not None
    scale = SCALE_STD if scale_std is None else scale_std

    def modes(points: Array) -> tuple[Mode, ...]:
        about = points - points.mean(axis=0)
        found = []
        for axis in (np.array([1.0, 0.0]), np.array([0.0, 1.0])):
            if scale > 0:
                found.append(Mode("scanner scale", about * axis * scale, "normal"))
            if not known:
                found.append(Mode("scanner travel", about * axis * WANDER_STD, "normal"))
        if not known:
            found.append(Mode("scanner skew", np.column_stack([about[:, 1] * SKEW_STD_RAD, 0 * about[:, 1]]), "normal"))
        return tuple(found)

    dpi = (_MM_PER_INCH / x_pitch, _MM_PER_INCH / y_pitch)
    return Reference(
        kind="scan",
        label=f"{_text(dpi)} dpi",
        face=grid,
        modes=modes,
        background="lid",
        details={
            "resolution_dpi": list(dpi),
            "resolution_from": "stated" if stated_dpi is not None else "file",
            "scanner_scale_std": scale,
        },
        notices=notices,
    )


def _contradiction(photo: Photo, stated: tuple[float, float]) -> tuple[Notice, ...]:
    own = photo.resolution_dpi
    if own is None or is_default(own) or photo.focal_length_mm is not None:
        return ()
    if all(abs(a - b) <= SAME_RESOLUTION * b for a, b in zip(stated, own, strict=True)):
        return ()
    notice = Notice(
        "resolution-overridden",
        f"The scale follows the stated {_text(stated)} dots per inch; the file itself says {_text(own)}.",
        "Check that the picture was not resized after scanning, and which of the two the scanner was set to.",
    )
    return (notice,)


def _text(dpi: tuple[float, float]) -> str:
    x, y = (f"{value:.5g}" for value in dpi)
    return x if x == y else f"{x} x {y}"
