"""A flatbed scan: millimetres from the scanner's resolution."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from ...props.errors import Refusal, UsageError
from ...props.uncertainty import Mode
from ..photo import Photo
from .reference import Reference

Array = NDArray[np.float64]

MM_PER_INCH = 25.4
# An office scanner nobody calibrated: scale of each axis, and how far it wanders over half a bed of 150 mm
# (measured on office scanners: halves of one bed differed by 0.6 % at worst; stated assumption).
SCALE_STD = 0.002
WANDER_STD = 0.15 / 150.0
# Travel not square to the line of sensors.
SKEW_STD_RAD = np.deg2rad(0.1)
RESOLUTIONS = (50.0, 12800.0)


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


def scan_reference(photo: Photo, stated_dpi: tuple[float, float] | None, scale_std: float | None) -> Reference:
    """The Reference that a scan's resolution gives.

    stated_dpi : (x, y) dots per inch, overrides the file's
    scale_std : relative standard uncertainty of the scanner's scale per axis; None takes that of an uncalibrated one
    Raises Refusal when nothing states a usable resolution, UsageError for a stated one that no scanner has.
    """
    if stated_dpi is not None:
        if not all(RESOLUTIONS[0] <= dpi <= RESOLUTIONS[1] for dpi in stated_dpi):
            raise UsageError(
                "resolution-range",
                f"A scan of {stated_dpi[0]:g} x {stated_dpi[1]:g} dots per inch is outside what scanners have.",
                f"State the resolution of the scan in dots per inch, {RESOLUTIONS[0]:g} to {RESOLUTIONS[1]:g}.",
            )
        dpi = stated_dpi
    elif photo.resolution_dpi is not None:
        dpi = photo.resolution_dpi
    else:
        raise Refusal(
            "no-resolution",
            "The file does not say its resolution, so nothing gives the scale.",
            "State the scanner's resolution with --resolution, or scan again and save with the resolution in the file.",
        )
    grid = ScanGrid((MM_PER_INCH / dpi[0], MM_PER_INCH / dpi[1]), photo.height)
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

    return Reference(
        kind="scan",
        label=f"{dpi[0]:.0f} dpi",
        face=grid,
        modes=modes,
        details={
            "resolution_dpi": list(dpi),
            "resolution_from": "stated" if stated_dpi is not None else "file",
            "scanner_scale_std": scale,
        },
    )
