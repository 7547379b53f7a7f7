"""How a reference that a surveyor has at hand lies to the face, and what is known of the camera.

Knows what to assume where nothing is stated. Does not know the references, nor how they are found.
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import Literal

import numpy as np
from numpy.typing import NDArray

from ...props.errors import Refusal
from ..camera import REFOCUS_STD, Camera
from ..photo import Photo
from ..plane import PRINCIPAL_POINT_STD
from .printed import EXIF_FOCAL_STD, FULL_FRAME_DIAGONAL_MM, OFFSET_STD_MM, PARALLEL_STD_RAD, USUAL_FOCAL_35MM

Array = NDArray[np.float64]
Role = Literal["beside", "on face", "itself"]

# Distortion of a lens nobody calibrated, as the displacement at the corner of the frame over the half diagonal:
# one value for the cubic and one for the fifth-order term, and for decentring (stated assumption).
LENS_STD, LENS_STD_FIFTH, DECENTRING_STD = 0.02, 0.01, 0.0005
# A focal length of which nothing is known: wide-angle to short telephoto, as a share of the usual one.
UNKNOWN_FOCAL_STD = 0.4
# Pixels are square to this part (common practice: sensors are made so).
SQUARE_PIXELS_STD = 1e-4


@dataclass(frozen=True)
class Setting:
    """What a person states of the face and the camera beside the reference itself.

    face_height : of the face above the reference's plane towards the camera, mm, negative where the reference stands
        above the face; None takes both to be flush
    face_height_std : mm; None takes 0.5 mm
    role : "beside" the face, "on face" (stuck flat to the face that is measured), or "itself" (is measured)
    camera : a calibration of the camera
    focal_35mm : 35 mm equivalent focal length; goes before the file's own
    """

    face_height: float | None = None
    face_height_std: float | None = None
    role: Role = "beside"
    camera: Camera | None = None
    focal_35mm: float | None = None

    @property
    def height(self) -> float:
        """Of the face above the reference, mm."""
        return self.face_height or 0.0

    @property
    def height_std(self) -> float:
        """Standard uncertainty of the height, mm."""
        if self.face_height_std is not None:
            return self.face_height_std
        return OFFSET_STD_MM if self.role == "beside" else 0.0

    @property
    def parallel_std(self) -> float:
        """Standard uncertainty of either tilt between the face and the reference, rad."""
        return PARALLEL_STD_RAD if self.height_std > 0 else 0.0


@dataclass(frozen=True, eq=False)
class AssumedCamera:
    """The camera of a photo before the picture says anything.

    camera : with the covariance of what is not known about it
    focal_from : "calibration", "stated", "EXIF", "perspective" or "usual"
    """

    camera: Camera
    focal_from: str

    @property
    def focal_known(self) -> bool:
        """Whether the focal length comes from outside the picture."""
        return self.focal_from in ("calibration", "stated", "EXIF")


def assumed_camera(photo: Photo, setting: Setting, seen_focal_px: float | None = None) -> AssumedCamera:
    """The camera to start from: calibrated, else a plain lens of the stated, filed, seen or usual focal length.

    seen_focal_px : from the perspective of the reference; a mere start, of wide uncertainty
    Raises Refusal when the calibration is for pictures of another size.
    """
    radius = float(np.hypot(photo.width, photo.height) / 2)
    if setting.camera is not None:
        camera = setting.camera.upright(photo.orientation)
        if (camera.width, camera.height) != (photo.width, photo.height):
            raise Refusal(
                "camera-size",
                f"The camera was calibrated for pictures of {camera.width} x {camera.height} px; this one has "
                f"{photo.width} x {photo.height} px.",
                "Use the camera's original file at the setting it was calibrated with.",
            )
        # Focused anew since.
        anew = np.zeros(len(camera.parameters))
        anew[:2] = REFOCUS_STD * camera.parameters[:2]
        return AssumedCamera(replace(camera, covariance=camera.covariance + np.outer(anew, anew)), "calibration")
    filed = setting.focal_35mm or photo.focal_length_35mm
    if filed:
        focal, share = filed / FULL_FRAME_DIAGONAL_MM * 2 * radius, EXIF_FOCAL_STD
        source = "stated" if setting.focal_35mm else "EXIF"
    elif seen_focal_px is not None:
        focal, share, source = seen_focal_px, UNKNOWN_FOCAL_STD, "perspective"
    else:
        focal, share = USUAL_FOCAL_35MM / FULL_FRAME_DIAGONAL_MM * 2 * radius, UNKNOWN_FOCAL_STD
        source = "usual"
    corner = radius / focal
    parameters = np.array([focal, focal, (photo.width - 1) / 2, (photo.height - 1) / 2, 0.0, 0.0, 0.0, 0.0, 0.0])
    stds = np.array(
        [
            SQUARE_PIXELS_STD * focal,
            SQUARE_PIXELS_STD * focal,
            PRINCIPAL_POINT_STD * radius,
            PRINCIPAL_POINT_STD * radius,
            LENS_STD / corner**2,
            LENS_STD_FIFTH / corner**4,
            DECENTRING_STD / corner,
            DECENTRING_STD / corner,
            1e-6 / corner**6,
        ]
    )
    covariance = np.diag(stds**2)
    covariance[:2, :2] += (share * focal) ** 2
    return AssumedCamera(Camera(photo.width, photo.height, parameters, covariance, 0.0, radius), source)
