"""The plane of a print in a photo: as a calibrated camera sees it, or with the lens fitted from the print alone.

Knows when a calibration does not belong to a photo. Does not know what the print is, nor what lies above it.
"""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np

from ...props.errors import Refusal
from ...props.result import Notice
from ..camera import Camera
from ..photo import Photo
from ..plane import Correspondences, Plane, fit_plane
from ..posed_plane import PosedPlane, fit_posed_plane

# Under the right calibration corners miss by their own noise and by what the calibration left; three times both
# together is another lens.
CONTRADICTION = 3.0
# Corners this much further from the lens's middle than any in calibration are beyond it.
_REACH_MARGIN = 1.05


def fit_print(
    photo: Photo, targets: Sequence[Correspondences], camera: Camera | None, scale_std: float, label: str
) -> tuple[Plane | PosedPlane, list[Notice]]:
    """The plane of the targets' corners, and what is to be said of the camera.

    camera : a calibration, in the frame in which the camera stores its pictures; None fits the lens from the corners
    scale_std : relative standard uncertainty of the print's scale, per axis and independent
    label : of the print, "the A4 sheet"
    A calibration that the corners contradict is left aside with a notice. Raises Refusal for one of pictures of
    another size.
    """
    free = fit_plane(targets, (photo.width, photo.height))
    if camera is None:
        return free, []
    upright = camera.upright(photo.orientation)
    if (upright.width, upright.height) != (photo.width, photo.height):
        raise Refusal(
            "camera-size",
            f"The camera was calibrated for pictures of {upright.width} x {upright.height} px; this one has "
            f"{photo.width} x {photo.height} px.",
            "Use the camera's original file at the setting it was calibrated with.",
        )
    posed = fit_posed_plane(targets, upright, print_scale_std=scale_std)
    # The calibration's residual is a distance, those of the planes are per axis.
    usual = float(np.hypot(free.residual_px, camera.residual_px / np.sqrt(2)))
    if posed.residual_px > CONTRADICTION * usual:
        notice = Notice(
            "camera-contradicted",
            f"The camera's calibration does not belong to this photo: with it the corners of {label} miss by "
            f"{posed.residual_px:.2f} px, without it by {free.residual_px:.2f} px. It was not used.",
            "Use the camera's original file, taken with the lens and zoom of the calibration; else calibrate again.",
        )
        return free, [notice]
    return posed, [*camera.weaknesses, *_beyond_reach(upright, targets, label)]


def _beyond_reach(camera: Camera, targets: Sequence[Correspondences], label: str) -> list[Notice]:
    pixels = np.concatenate([t.pixels for t in targets])
    far = float(np.linalg.norm(pixels - camera.parameters[2:4], axis=1).max())
    if far <= _REACH_MARGIN * camera.reach_px:
        return []
    return [
        Notice(
            "beyond-calibration",
            f"{label[:1].upper()}{label[1:]} lies up to {far:.0f} px from the middle of the lens; the calibration saw "
            f"{camera.reach_px:.0f} px.",
            "Keep the reference and the face nearer to the middle, or calibrate with the board in the corners.",
        )
    ]
