"""What patterns of stated size have in common, be they chessboards, squares or discs: from found points to a Reference.

Knows the plane, what is uncertain about it, and where the face lies to the pattern. Does not know how the
points were found.
"""

from __future__ import annotations

from abc import ABC, abstractmethod
from dataclasses import dataclass, replace
from functools import partial

import numpy as np
from numpy.typing import NDArray

from ...props.errors import Refusal
from ...props.result import Notice
from ..calibration_boards import BoardSighting
from ..camera import Camera
from ..light import Light
from ..photo import Photo
from ..plane import Correspondences, Plane
from ..posed_plane import PosedPlane
from .adjustment import Adjusted, capitalised
from .print_plane import fit_print
from .print_target import print_target
from .printed import (
    PARALLEL_STD_RAD,
    UNCHECKED_PRINT_SCALE,
    Focal,
    Placement,
    face_modes,
    flatness_std,
    focal_for,
    middle_of,
)
from .reference import Mapper, PrintEdges, Reference
from .setting import Role, Setting
from .surveyed import Sighting, adjusted_to_scatter, camera_for, lens_as_seen

Array = NDArray[np.float64]

# A print that bows by more than so many times the usual is bent; up to there the adjustment follows it (simulated).
MOST_BOW_STRAIN = 10.0
# Points of a flat pattern fit to 0.02 to 0.2 px; beyond these it is bent, or the lens is unusual.
WARN_RESIDUAL_PX, REFUSE_RESIDUAL_PX = 0.5, 1.0


@dataclass(frozen=True, kw_only=True)
class Pattern(ABC):
    """What a person says of a pattern and of the face, whatever the pattern is.

    scale_std : relative standard uncertainty of the stated sizes, per axis; the default is a print nobody measured
    role : "beside" the face, "on face" (printed on or stuck flat to the face that is measured), or "itself" (the
        pattern's own marks are measured)
    face_height, face_height_std : of the face above the pattern's plane towards the camera, mm
    camera : a calibration of the camera; None fits the lens from the pattern alone
    focal_35mm : 35 mm equivalent focal length, for a face above the pattern without a calibration
    """

    scale_std: float = UNCHECKED_PRINT_SCALE
    role: Role = "beside"
    face_height: float | None = None
    face_height_std: float | None = None
    camera: Camera | None = None
    focal_35mm: float | None = None

    @property
    def setting(self) -> Setting:
        """How the face lies to it, and the camera."""
        return Setting(self.face_height, self.face_height_std, self.role, self.camera, self.focal_35mm)

    @property
    @abstractmethod
    def label(self) -> str:
        """What it is, in words."""

    @abstractmethod
    def find(self, photo: Photo) -> Found:
        """Where it is in a photo; raises Refusal where it is not seen."""

    def sightings(self, photo: Photo) -> list[BoardSighting]:
        """It as a board to calibrate a camera with; empty where it is not seen."""
        try:
            found = self.find(photo)
        except Refusal:
            return []
        return [BoardSighting(found.target, found.pixels, partial(edges_seen, found))]

    def locate(self, photo: Photo) -> Reference:
        """The Reference that it gives in a photo; Refusal where it is not found or does not lie flat."""
        return pattern_reference(photo, self.find(photo), self)


@dataclass(frozen=True, eq=False)
class Found:
    """A pattern in a photo.

    target : (k, 2) mm on the pattern; pixels : (k, 2) photo pixels
    outline : (m, 2) mm around the pattern
    places : two lots of (j, 2) mm, each on areas of one colour; which is the dark one is seen in the photo
    edges : (n, 2) mm on edges between areas of both colours, and (n, 2) unit normals from the first lot's colour to the
        second's
    clear : mm to either side of such an edge that hold nothing else
    """

    kind: str
    label: str
    target: Array
    pixels: Array
    outline: Array
    places: tuple[Array, Array]
    edges: tuple[Array, Array]
    clear: float


def pattern_reference(photo: Photo, found: Found, stated: Pattern) -> Reference:
    """The Reference that a pattern found in a photo gives.

    Raises Refusal when its points do not lie as on a flat print, when the camera is calibrated for pictures of another
    size, or when a height is stated and nothing tells the focal length.
    """
    plane, notices = fit_pattern(photo, found, stated)
    notices += _check_fit(plane, found.label)
    if stated.scale_std >= UNCHECKED_PRINT_SCALE:
        notices.append(
            Notice(
                "pattern-unchecked",
                f"Each axis of {found.label} may be off by {100 * stated.scale_std:.1f} % (one standard deviation); "
                "this widens every figure.",
                "Measure the pattern over its whole length in both directions and state the pitch and its uncertainty.",
            )
        )
    height = stated.face_height or 0.0
    focal, contradiction = focal_for(
        photo,
        plane,
        height,
        stated.focal_35mm,
        stated.scale_std,
        face="A face above the pattern",
        remedy="Calibrate the camera, or state its 35 mm equivalent focal length.",
    )
    notices += contradiction
    apart = stated.role == "beside"
    if apart:
        # Carried beyond the pattern, a free homography takes any bow of the print for perspective; a camera does not.
        adjusted, focal = _carried(photo, found, stated, plane)
        face, modes = adjusted.plane, adjusted.modes
        plane = adjusted.plane.raised(-height)
    else:
        flat = flatness_std(plane, found.pixels)
        placed = stated.face_height_std or 0.0
        lean = PARALLEL_STD_RAD if placed > 0 else 0.0
        placement = Placement(height, float(np.hypot(flat, placed)), lean, middle_of(plane, found.pixels))
        face, modes = face_modes(plane, placement, focal, stated.scale_std)
    first, second = (plane.to_pixels(p) for p in found.places)
    white, black = (second, first) if _dark_first(photo, plane, found) else (first, second)
    outline = plane.to_pixels(_dense(found.outline))
    return Reference(
        kind=found.kind,
        label=found.label,
        face=face,
        modes=modes,
        # Marks that are measured themselves lie on the pattern's own paper.
        background="paper" if stated.role == "itself" else "any",
        region=(outline,) if stated.role == "itself" else (),
        excluded=(outline,) if apart else (),
        on_face=(outline,) if stated.role == "on face" else (),
        white=white,
        black=black,
        print_edges=print_edges(photo, found, plane),
        tone=plane.camera.tone if isinstance(plane, PosedPlane) else None,
        residual_px=plane.residual_px,
        corners_px=found.pixels,
        plane_offset_mm=height,
        details={
            "corners": len(found.pixels),
            "camera_height_mm": plane.camera_height(focal.px),
            "tilt_deg": float(np.rad2deg(plane.tilt(focal.px))),
            "focal_px": focal.px,
            "focal_from": focal.source,
            "print_scale_std": stated.scale_std,
            "role": stated.role,
        },
        notices=tuple(notices),
    )


def _carried(photo: Photo, found: Found, stated: Pattern, fitted: Plane | PosedPlane) -> tuple[Adjusted, Focal]:
    """The plane of a face beside a pattern, and the focal length, of an adjustment that lets the print bow."""
    setting = stated.setting
    if isinstance(fitted, Plane):
        # A calibration that the corners contradict was left aside.
        setting = replace(setting, camera=None)
    sighting = pattern_sighting(photo, found, stated, fitted, setting)
    camera = lens_as_seen(camera_for(photo, setting, sighting.target.start), [sighting.target])
    adjusted = adjusted_to_scatter(camera, [sighting.target])
    if adjusted.strained.startswith("the flatness") and adjusted.strain > MOST_BOW_STRAIN:
        raise Refusal(
            "reference-bent",
            f"{capitalised(found.label)} bows by some {adjusted.strain * sighting.target.bow_std:.0f} mm; a face "
            "beside it cannot be measured by it.",
            "Tape it to a flat plate and take the photo again.",
        )
    own = adjusted.plane.camera
    std = float(np.linalg.norm(0.5 * adjusted.factor[:2].sum(axis=0)))
    return adjusted, Focal(own.focal_px, std, camera.focal_from)


def pattern_sighting(
    photo: Photo,
    found: Found,
    stated: Pattern,
    fitted: Plane | PosedPlane | None = None,
    setting: Setting | None = None,
) -> Sighting:
    """A pattern found in a photo as something to adjust.

    fitted : the plane of its points where it is known already; setting : in place of the stated one
    """
    plane = fitted or fit_pattern(photo, found, stated)[0]
    points = Correspondences(found.target, found.pixels)
    target = print_target(found.label, points, plane, stated.scale_std, found.outline, setting or stated.setting)
    return Sighting(found.kind, (target,))


def fit_pattern(photo: Photo, found: Found, stated: Pattern) -> tuple[Plane | PosedPlane, list[Notice]]:
    """The plane of a pattern and what is to be said of the camera; as `print_plane.fit_print`."""
    targets = [Correspondences(found.target, found.pixels)]
    return fit_print(photo, targets, stated.camera, stated.scale_std, found.label)


def _check_fit(plane: Plane | PosedPlane, label: str) -> list[Notice]:
    residual = plane.residual_px
    if residual > REFUSE_RESIDUAL_PX:
        raise Refusal(
            "reference-bent",
            f"The points of {label} miss a flat print by {residual:.2f} px: it is bent, or the lens is unusual.",
            "Flatten it, or calibrate the camera and state the calibration; pictures of a fisheye cannot be used.",
        )
    if residual > WARN_RESIDUAL_PX:
        return [
            Notice(
                "reference-uneven",
                f"The points of {label} miss a flat print by {residual:.2f} px (usual: below 0.2 px); the interval is "
                "widened accordingly.",
                "Flatten it, hold the camera still, and calibrate the camera if its lens bends straight lines.",
            )
        ]
    return []


def _dark_first(photo: Photo, plane: Mapper, found: Found) -> bool:
    """Whether the first lot of places is the dark one."""
    light = Light.of(photo)
    first, second = (light.at(plane.to_pixels(p)) for p in found.places)
    return bool(np.median(first) <= np.median(second))


def edges_seen(found: Found, photo: Photo, plane: Mapper) -> PrintEdges:
    """`print_edges` in the order in which a calibration asks for them."""
    return print_edges(photo, found, plane)


def print_edges(photo: Photo, found: Found, plane: Mapper) -> PrintEdges:
    """Where a pattern's black and white meet in a photo, for a plane fitted to its points."""
    points, normals = found.edges
    pixels = plane.to_pixels(points)
    jacobian = plane.mm_per_px(pixels)
    # A normal in the picture is the one in mm through the transposed Jacobian; its length is 1 / (px to a mm).
    across = np.einsum("nij,ni->nj", jacobian, normals)
    scale = np.linalg.norm(across, axis=1, keepdims=True)
    sign = 1.0 if _dark_first(photo, plane, found) else -1.0
    return PrintEdges(pixels, sign * across / scale, found.clear / float(np.median(scale)))


def _dense(outline: Array) -> Array:
    """The outline with its sides cut into sixteen, so that the lens may bend them."""
    t = np.linspace(0, 1, 16, endpoint=False)[:, None]
    return np.concatenate([a + t * (b - a) for a, b in zip(outline, np.roll(outline, -1, axis=0), strict=True)])
