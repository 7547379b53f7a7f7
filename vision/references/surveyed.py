"""From adjusted references that a surveyor has at hand to a Reference for the face.

Knows what every such kind has in common: how the camera is assumed, when the fit is not to be trusted, what is said
about it. Each kind knows for itself how it is found.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass, replace
from typing import Protocol

import numpy as np
from numpy.typing import NDArray

from ...props.errors import Refusal
from ...props.result import Notice
from ...props.uncertainty import Mode
from ..camera import PARAMETERS, Camera
from ..photo import Photo
from ..plane import Correspondences, direct_homography
from ..posed_plane import PosedPlane
from .adjustment import Adjusted, HeldTilt, Target, adjust, capitalised, likelihoods, tilt_modes
from .printed import FULL_FRAME_DIAGONAL_MM
from .reference import Reference
from .setting import AssumedCamera, Setting, assumed_camera

Array = NDArray[np.float64]

# What is stated gives by more than this many standard uncertainties once in thousands of pictures: then it is not so.
MOST_STRAIN = 4.0
# Lens terms found at more than so many of their assumed standard deviations belong to another sort of lens.
_UNLIKE = 2.0
# Mean square of the misses over what their own scatter lets expect, beyond which the pixels count as less certain.
_WIDE_SCATTER = 1.2
# Corners that start a fit are good to this, px; a focal length from them is a start where its square is good to this
# share and it is one that cameras have, mm (35 mm equivalent).
_START_STD_PX, _CLEAR_PERSPECTIVE = 0.3, 0.2
_USUAL_FOCALS_35MM = (12.0, 130.0)
# Edges of a flat reference fit to 0.02 to 0.2 px; beyond these it is bent, or the lens is a fisheye.
_WARN_RESIDUAL_PX, _MOST_RESIDUAL_PX = 0.5, 1.5


@dataclass(frozen=True, eq=False)
class Sighting:
    """One reference found in a photo.

    targets : what is seen of it; several where it may lie in more than one way, the likeliest first
    kind : "rectangle", "disc", "bar", "points"
    frontal : what of the tilt it cannot tell, each a direction of the camera's frame; the bound on its sine is
        `tilt_bound`
    white : (k, 2) px on a white ground of its own
    """

    kind: str
    targets: tuple[Target, ...]
    frontal: tuple[tuple[float, float, float], ...] = ()
    tilt_bound: float = 0.0
    white: Array | None = None
    notices: tuple[Notice, ...] = ()

    @property
    def target(self) -> Target:
        """The likeliest way it lies."""
        return self.targets[0]


class SurveyedKind(Protocol):
    """A kind of reference that can be adjusted together with others."""

    @property
    def setting(self) -> Setting:
        """How the face lies to it, and the camera."""
        ...

    def sight(self, photo: Photo) -> Sighting:
        """Find it; raises Refusal when it cannot be found or trusted."""
        ...


def camera_for(photo: Photo, setting: Setting, start: Correspondences | None = None) -> AssumedCamera:
    """The camera to start from; of unknown focal length, what the perspective of a start says of it."""
    if setting.camera is None and not (setting.focal_35mm or photo.focal_length_35mm) and start is not None:
        return assumed_camera(photo, setting, _seen_focal(photo, start))
    return assumed_camera(photo, setting)


def _seen_focal(photo: Photo, start: Correspondences) -> float | None:
    """Focal length, px, that the perspective of four points or more shows; None where it shows next to nothing.

    Square pixels and a principal point at the centre of the frame leave two conditions on the homography's first two
    columns (Zhang 2000); their least-squares solution is taken.
    """
    centre = np.array([(photo.width - 1) / 2, (photo.height - 1) / 2])

    def square(pixels: Array) -> float:
        (a1, a2, _), (b1, b2, _), (c1, c2, _) = direct_homography(
            np.tile(start.target, (2, 1)), np.tile(pixels - centre, (2, 1))
        )
        left = np.array([c1 * c2, c1**2 - c2**2])
        right = np.array([-(a1 * a2 + b1 * b2), a2**2 + b2**2 - a1**2 - b1**2])
        return float(left @ right / max(float(left @ left), 1e-300))

    middle = square(start.pixels)
    if not middle > 0:
        return None
    moved = []
    for index in range(start.pixels.size):
        step = np.zeros(start.pixels.size)
        step[index] = _START_STD_PX
        step = step.reshape(start.pixels.shape)
        moved.append(0.5 * (square(start.pixels + step) - square(start.pixels - step)))
    focal = float(np.sqrt(middle))
    least, most = np.array(_USUAL_FOCALS_35MM) / FULL_FRAME_DIAGONAL_MM * np.hypot(photo.width, photo.height)
    clear = np.linalg.norm(moved) < _CLEAR_PERSPECTIVE * middle
    return focal if clear and least < focal < most else None


def adjusted_to_scatter(
    camera: AssumedCamera, targets: Sequence[Target], held: Sequence[HeldTilt] = (), start: PosedPlane | None = None
) -> Adjusted:
    """The adjustment, again with wider pixels where they miss by more than their own scatter explains."""
    found = adjust(camera.camera, targets, held, start)
    rows = sum(len(m) for m in found.misses)
    excess = found.scatter / max(1, rows - 6)
    if excess <= _WIDE_SCATTER:
        return found
    wider = [replace(t, std=t.std * np.sqrt(excess)) for t in targets]
    return adjust(camera.camera, wider, held, found.plane)


def lens_as_seen(camera: AssumedCamera, targets: Sequence[Target]) -> AssumedCamera:
    """The camera with its lens terms as uncertain as a print of many points shows that they must be.

    A lens that bends far more than was assumed of it would else be pulled towards what was assumed.
    """
    if camera.focal_from == "calibration":
        return camera
    for _ in range(3):
        wider = _unlike_assumed(camera.camera, adjust(camera.camera, targets))
        if wider is None:
            break
        camera = replace(camera, camera=wider)
    return camera


def _unlike_assumed(camera: Camera, found: Adjusted) -> Camera | None:
    """The camera with wider radial terms where a picture contradicts those assumed; None where it does not."""
    radial = [PARAMETERS.index(name) for name in ("k1", "k2")]
    stds = np.sqrt(np.diag(camera.covariance)[radial])
    amounts = np.abs(found.plane.camera.parameters[radial])
    if np.all(amounts < _UNLIKE * stds):
        return None
    covariance = camera.covariance.copy()
    covariance[radial, radial] = np.maximum(stds, amounts) ** 2
    return replace(camera, covariance=covariance)


@dataclass(frozen=True, eq=False)
class View:
    """An adjusted view and what its modes do not hold.

    further : points of the face -> modes of a tilt that nothing tells
    """

    found: Adjusted
    further: Callable[[Array], list[Mode]] | None = None


def frontal_view(
    camera: AssumedCamera, targets: Sequence[Target], directions: Sequence[tuple[float, float, float]], bound: float
) -> View:
    """The view in which the components of the tilt towards `directions` are nought, as good as unknown within `bound`.

    bound : sine of the most the camera may be off square towards each direction, either way
    Hypotheses at the nodes of Gauss and Legendre are adjusted each for itself, so that foreshortening counts too.
    """
    nodes, weights = np.polynomial.legendre.leggauss(3)
    grid = np.array(np.meshgrid(*[nodes] * len(directions))).reshape(len(directions), -1).T
    prior = np.prod(np.array(np.meshgrid(*[0.5 * weights] * len(directions))).reshape(len(directions), -1), axis=0)

    def held(sines: Array) -> list[HeldTilt]:
        return [HeldTilt(d, float(sine)) for d, sine in zip(directions, sines, strict=True)]

    nominal = adjusted_to_scatter(camera, targets, held(np.zeros(len(directions))))
    others = [adjust(camera.camera, targets, held(bound * node), nominal.plane) for node in grid]
    weighed = likelihoods(others, prior)
    better = min(others, key=lambda other: other.cost)
    if better.cost < nominal.cost - 1.0:
        nominal = better
    return View(nominal, tilt_modes(nominal, others, weighed))


def tilt_notice(label: str, bound_deg: float, view: View, points: Array) -> Notice:
    """A word about a tilt that was not measured but assumed."""
    return Notice(
        "tilt-assumed",
        f"{capitalised(label)} does not tell how squarely the photo was taken; it is assumed to be square within "
        f"{bound_deg:g} degrees, which alone makes {_stretch(view, points):.1f} % of a length of that size uncertain.",
        "Use a reference that shows the plane (a sheet, cards, a rectangle, four points), or state a closer bound if "
        "the camera was set up square.",
    )


def _stretch(view: View, points: Array) -> float:
    """Standard uncertainty in percent of the span of points from the unknown tilt alone."""
    if view.further is None:
        return 0.0
    centre = points.mean(axis=0)
    span = float(np.mean(np.sum((points - centre) ** 2, axis=1)))
    moved = [float(np.mean(np.sum(m.displacement * (points - centre), axis=1))) for m in view.further(points)]
    return 100 * float(np.linalg.norm(moved)) / span


def refuse_strained(found: Adjusted, label: str, remedy: str) -> None:
    """Refusal when what is stated can only be had by giving much more than its uncertainty."""
    if found.strain > MOST_STRAIN:
        raise Refusal(
            "reference-contradicts",
            f"What is seen of {label} contradicts what is stated: {found.strained} would have to be off by "
            f"{found.strain:.0f} times its standard uncertainty.",
            remedy,
        )


def scatter_notices(found: Adjusted, label: str) -> list[Notice]:
    """A word about edges that miss their lines; Refusal when they cannot carry a measurement."""
    if found.residual_px > _MOST_RESIDUAL_PX:
        raise Refusal(
            "reference-bent",
            f"The edges of {label} miss their places on a flat reference by {found.residual_px:.1f} px.",
            "Lay it flat, keep it in focus, and calibrate the camera if its lens bends straight lines strongly.",
        )
    if found.residual_px > _WARN_RESIDUAL_PX:
        return [
            Notice(
                "reference-uneven",
                f"The edges of {label} miss their places on a flat reference by {found.residual_px:.2f} px (usual: "
                "below 0.2 px); the interval is widened accordingly.",
                "Lay it flat, clean its edges, light it evenly and take the photo again.",
            )
        ]
    return []


def reference_of(
    photo: Photo,
    sightings: Sequence[Sighting],
    found: Adjusted,
    camera: AssumedCamera,
    *,
    kind: str,
    label: str,
    extra_modes: Callable[[Array], Sequence[Mode]] | None = None,
    upright: bool = False,
    notices: Sequence[Notice] = (),
    details: dict[str, object] | None = None,
) -> Reference:
    """The Reference of adjusted sightings.

    extra_modes : points of the face before it is turned upright -> further causes
    upright : turn the axes so that y is up in the picture; else they are the first target's
    """
    plane = found.plane
    angle = _angle_of_up(plane, found, sightings[0].target) if upright else 0.0
    face = plane.turned(angle)
    c, s = np.cos(angle), np.sin(angle)
    turn = np.array([[c, s], [-s, c]])

    def modes(points: Array) -> tuple[Mode, ...]:
        before = points @ turn.T
        own = [*found.modes(before), *(extra_modes(before) if extra_modes else ())]
        own = [m for m in own if np.abs(m.displacement).max(initial=0.0) > 1e-9]
        return tuple(replace(m, displacement=m.displacement @ turn) for m in own)

    excluded, corners, white = [], [], []
    for index, sighting in enumerate(sightings):
        target = sighting.target
        if target.setting.role == "beside" and len(target.outline):
            excluded.append(_outline_px(found, index, target))
        corners.append(target.start.pixels)
        if sighting.white is not None:
            white.append(sighting.white)
    focal = float(np.sqrt(plane.camera.parameters[0] * plane.camera.parameters[1]))
    first = sightings[0].target.setting
    return Reference(
        kind=kind,
        label=label,
        face=face,
        modes=modes,
        background="any",
        excluded=tuple(excluded),
        white=np.concatenate(white) if white else np.empty((0, 2)),
        residual_px=found.residual_px,
        corners_px=np.concatenate(corners),
        plane_offset_mm=first.height,
        details={
            "edge_points": int(sum(len(s.target.pixels) for s in sightings)),
            "camera_height_mm": plane.camera_height(),
            "tilt_deg": float(np.rad2deg(plane.tilt())),
            "focal_px": focal,
            "focal_from": camera.focal_from,
            "role": first.role,
            **(details or {}),
        },
        notices=(*(n for s in sightings for n in s.notices), *notices),
    )


def _angle_of_up(plane: PosedPlane, found: Adjusted, target: Target) -> float:
    middle = target.start.pixels.mean(axis=0)
    here, above = plane.to_mm(np.array([middle, middle - (0.0, 10.0)]))
    x, y = above - here
    return float(np.arctan2(x, y))


def _outline_px(found: Adjusted, index: int, target: Target) -> Array:
    """The outline of a reference in the photo, its sides cut into sixteen so that the lens may bend them."""
    t = np.linspace(0, 1, 16, endpoint=False)[:, None]
    corners = target.outline
    dense = np.concatenate([a + t * (b - a) for a, b in zip(corners, np.roll(corners, -1, axis=0), strict=True)])
    level = found.plane.raised(-target.setting.height)
    return level.to_pixels(found.on_face(index, dense))
