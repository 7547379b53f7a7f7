"""A calibrated camera: directions to pixels and back, and how well that is known.

Knows a pinhole with Brown's lens terms, with or without the rational denominator. Does not know how it was
calibrated (`calibration`), how it is kept in a file (`camera_file`), or what it looks at (`posed_plane`).
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field, replace

import numpy as np
from numpy.typing import NDArray

from ..props.result import Notice
from .colour_profile import Tone

Array = NDArray[np.float64]

# Order of the parameters, that of OpenCV; the last three only where the rational model is used.
PARAMETERS = ("fx", "fy", "cx", "cy", "k1", "k2", "p1", "p2", "k3", "k4", "k5", "k6")
FIVE, RATIONAL = 9, 12
# What focusing anew does to the focal length between calibration and use (common practice).
REFOCUS_STD = 0.002
_BEAR_ON_USE = {"lens-model", "lens-turns-back", "calibration-coverage", "calibration-few"}


@dataclass(frozen=True, eq=False)
class CornerResiduals:
    """Corners of one calibration photo: where they are seen and by how much the fit misses them.

    photo : name of its file
    pixels, misses : (k, 2) px, seen, and seen minus fitted
    """

    photo: str
    pixels: Array
    misses: Array

    @property
    def rms(self) -> float:
        """Root mean square of the distance, px (both axes together, as calibrations are usually quoted)."""
        return float(np.sqrt(np.mean(np.sum(self.misses**2, axis=1))))


@dataclass(frozen=True, eq=False)
class Camera:
    """A camera's lens and sensor at one focal length, in the frame in which it stores its pictures.

    width, height : of its pictures, px
    parameters : (9,) or (12,) in the order of PARAMETERS; px, and lens terms on tangents
    covariance : of the parameters
    residual_px : root mean square distance of the calibration's corners from the fit
    reach_px : how far from the principal point corners were seen; beyond it the lens is extrapolated
    tone : the curve its values follow, as the board's black and white edges showed it; None where they left it open
    residuals : per photo of the calibration
    raw : whether its photos were raw files; a camera bends its own developed pictures straight in part
    digital_zoom : at which the photos were taken; None counts as 1
    details : about the calibration, in plain types
    notices : what is weak about it
    file, sha256 : the file it was read from, by name and hash
    """

    width: int
    height: int
    parameters: Array
    covariance: Array
    residual_px: float
    reach_px: float
    make: str | None = None
    model: str | None = None
    focal_length_mm: float | None = None
    focal_length_35mm: float | None = None
    digital_zoom: float | None = None
    raw: bool = False
    tone: Tone | None = None
    residuals: tuple[CornerResiduals, ...] = ()
    details: Mapping[str, object] = field(default_factory=dict)
    notices: tuple[Notice, ...] = ()
    file: str | None = None
    sha256: str | None = None

    @property
    def summary(self) -> dict[str, object]:
        """Which calibration this is, for a result that rests on it."""
        return {
            "file": self.file,
            "sha256": self.sha256,
            "make": self.make,
            "model": self.model,
            "residual_px": self.residual_px,
            "photos": self.details.get("photos"),
        }

    @property
    def weaknesses(self) -> tuple[Notice, ...]:
        """Those notices that bear on every photo measured with it; photos left out of the calibration do not."""
        return tuple(n for n in self.notices if n.code in _BEAR_ON_USE)

    @property
    def matrix(self) -> Array:
        """(3, 3) pinhole matrix."""
        fx, fy, cx, cy = self.parameters[:4]
        return np.array([[fx, 0, cx], [0, fy, cy], [0, 0, 1.0]])

    @property
    def focal_px(self) -> float:
        """Mean focal length, px."""
        return float(np.sqrt(self.parameters[0] * self.parameters[1]))

    @property
    def focal_std(self) -> float:
        """Standard uncertainty of the focal length in another photo, focused anew, px."""
        mean = np.zeros(len(self.parameters))
        mean[:2] = 0.5
        return float(np.hypot(np.sqrt(mean @ self.covariance @ mean), REFOCUS_STD * self.focal_px))

    def refocus_std(self, distance_mm: float) -> float:
        """What focusing at another distance than in calibration adds to the focal length's uncertainty, relative.

        A lens that moves as a whole to focus, as a telephone's does, has a principal distance of f (1 + f / (D - f));
        one that focuses within keeps it. Which it is no file says: anything between nothing and all of the difference.
        """
        f, calibrated = self.focal_length_mm, self.details.get("distance_mm")
        if f is None or not isinstance(calibrated, (int, float)) or min(calibrated, distance_mm) <= 2 * f:
            return REFOCUS_STD
        shift = (1 + f / (distance_mm - f)) / (1 + f / (calibrated - f)) - 1
        return float(np.hypot(REFOCUS_STD, shift / np.sqrt(3)))

    def to_pixels(self, directions: Array) -> Array:
        """(n, 2) tangents x/z, y/z to (n, 2) pixels."""
        return project_directions(self.parameters, directions)[0]

    def to_directions(self, pixels: Array) -> Array:
        """(n, 2) pixels to (n, 2) tangents x/z, y/z."""
        return directions_of(self.parameters, pixels)

    def upright(self, orientation: int) -> Camera:
        """This camera in the frame of upright pictures that the file stores under an EXIF orientation 1 to 8.

        A calibration with the camera held level serves pictures held upright: only the sensor turns.
        """
        if orientation == 1:
            return self
        flip_x, flip_y = orientation in (2, 3, 6, 7), orientation in (3, 4, 7, 8)
        turned = orientation >= 5
        turn = np.array([[0.0, 1.0], [1.0, 0.0]]) if turned else np.eye(2)
        size = (self.height, self.width) if turned else (self.width, self.height)
        sign = np.array([-1.0 if flip_x else 1.0, -1.0 if flip_y else 1.0])
        turn = sign[:, None] * turn
        change = np.eye(len(self.parameters))
        change[0:2, 0:2] = np.abs(turn)
        change[2:4, 2:4] = turn
        # The decentring terms form the vector (p2, p1), which turns with the picture.
        change[6:8, 6:8] = turn[::-1, ::-1]
        parameters = change @ self.parameters
        parameters[2:4] += np.where(sign < 0, np.array(size) - 1.0, 0.0)
        return replace(
            self,
            width=size[0],
            height=size[1],
            parameters=parameters,
            covariance=change @ self.covariance @ change.T,
            residuals=(),
        )


def distort(lens: Array, u: Array) -> tuple[Array, Array, Array]:
    """Lens terms (k1, k2, p1, p2, k3[, k4, k5, k6]) on (n, 2) tangents.

    Returns the (n, 2) points, their (n, 2, 2) Jacobian and the (n, 2, len(lens)) derivatives by the lens terms.
    """
    k1, k2, p1, p2, k3 = lens[:5]
    x, y = u.T
    r2 = x * x + y * y
    above = 1 + r2 * (k1 + r2 * (k2 + r2 * k3))
    above_slope = k1 + r2 * (2 * k2 + 3 * k3 * r2)
    powers = np.stack([r2, r2**2, r2**3], axis=1)
    if len(lens) > 5:
        k4, k5, k6 = lens[5:8]
        below = 1 + r2 * (k4 + r2 * (k5 + r2 * k6))
        below_slope = k4 + r2 * (2 * k5 + 3 * k6 * r2)
    else:
        below, below_slope = np.ones_like(r2), np.zeros_like(r2)
    g = above / below
    slope = (above_slope - g * below_slope) / below
    distorted = np.stack(
        [x * g + 2 * p1 * x * y + p2 * (r2 + 2 * x * x), y * g + p1 * (r2 + 2 * y * y) + 2 * p2 * x * y], axis=1
    )
    jacobian = np.empty((len(u), 2, 2))
    jacobian[:, 0, 0] = g + 2 * x * x * slope + 2 * p1 * y + 6 * p2 * x
    jacobian[:, 0, 1] = jacobian[:, 1, 0] = 2 * x * y * slope + 2 * p1 * x + 2 * p2 * y
    jacobian[:, 1, 1] = g + 2 * y * y * slope + 6 * p1 * y + 2 * p2 * x
    by_lens = np.empty((len(u), 2, len(lens)))
    radial = u[:, :, None] * (powers / below[:, None])[:, None, :]
    by_lens[:, :, [0, 1, 4]] = radial
    by_lens[:, 0, 2] = by_lens[:, 1, 3] = 2 * x * y
    by_lens[:, 1, 2] = r2 + 2 * y * y
    by_lens[:, 0, 3] = r2 + 2 * x * x
    if len(lens) > 5:
        by_lens[:, :, 5:8] = -g[:, None, None] * radial
    return distorted, jacobian, by_lens


def project_directions(parameters: Array, u: Array) -> tuple[Array, Array, Array]:
    """(n, 2) tangents to pixels of a camera with `parameters`.

    Returns (n, 2) pixels, their (n, 2, 2) Jacobian by the tangents and (n, 2, p) derivatives by the parameters.
    """
    focal, centre = parameters[:2], parameters[2:4]
    distorted, jacobian, by_lens = distort(parameters[4:], u)
    by_parameters = np.zeros((len(u), 2, len(parameters)))
    by_parameters[:, 0, 0], by_parameters[:, 1, 1] = distorted.T
    by_parameters[:, 0, 2] = by_parameters[:, 1, 3] = 1.0
    by_parameters[:, :, 4:] = focal[None, :, None] * by_lens
    return distorted * focal + centre, focal[None, :, None] * jacobian, by_parameters


def directions_of(parameters: Array, pixels: Array) -> Array:
    """(n, 2) pixels to the (n, 2) tangents that a camera with `parameters` shows there.

    Newton's method with the step limited to a quarter, which keeps it on the branch through the axis.
    """
    seen = (pixels - parameters[2:4]) / parameters[:2]
    lens = parameters[4:]
    u = seen.copy()
    for _ in range(50):
        distorted, jacobian, _ = distort(lens, u)
        (a, b), (c, d) = jacobian[:, 0].T, jacobian[:, 1].T
        x, y = (seen - distorted).T
        determinant = a * d - b * c
        step = np.column_stack([d * x - b * y, a * y - c * x]) / np.where(determinant == 0, 1e-12, determinant)[:, None]
        length = np.linalg.norm(step, axis=1)
        u = u + step * np.minimum(1.0, 0.25 / np.maximum(length, 1e-300))[:, None]
        if length.max(initial=0.0) < 1e-12:
            break
    return u


def lens_turns_back(parameters: Array, width: int, height: int) -> bool:
    """Whether the lens model ceases to move outwards before the corners of the frame, where it then shows nothing."""
    corners = np.array([[0, 0], [width - 1, 0], [0, height - 1], [width - 1, height - 1]], float)
    far = float(np.max(np.linalg.norm((corners - parameters[2:4]) / parameters[:2], axis=1)))
    lens = parameters[4:].copy()
    lens[2:4] = 0.0
    # Up to 87 degrees off the axis; no pinhole sees further.
    r = np.tan(np.linspace(0.0, np.deg2rad(87.0), 1000))
    radius = distort(lens, np.column_stack([r, np.zeros_like(r)]))[0][:, 0]
    falling = np.diff(radius) <= 0
    peak = int(np.argmax(falling)) if falling.any() else len(r) - 1
    return bool(radius[peak] < far)
