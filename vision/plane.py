"""The plane of a face: pixel <-> millimetre, fitted to reference corners, with its covariance.

Knows a homography, a radial and decentring lens distortion estimated from the same picture, and
how the plane moves when it is raised towards the camera. Knows nothing of what the corners
belong to or of what is measured with them.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

Array = NDArray[np.float64]

# Distortion before the picture says anything, as the displacement at the corner of the frame over
# the half diagonal: lenses of phones and cameras stay within a few percent (common practice).
PRIOR_RADIAL = (0.05, 0.03)
PRIOR_DECENTRING = 0.0005
# Principal point off the centre of the frame, over the half diagonal (common practice: tens of pixels of 4000).
PRINCIPAL_POINT_STD = 0.01
_LENS = 4


@dataclass(frozen=True)
class Correspondences:
    """Corners of one rigid target: where they are on it and where they are seen.

    target : (k, 2) mm on the target
    pixels : (k, 2) photo pixels
    """

    target: Array
    pixels: Array


@dataclass(frozen=True)
class Plane:
    """A plane in space as one picture sees it.

    Parameters are (k1, k2, p1, p2, h1 .. h8): Brown's lens terms and a homography, both in
    normalised coordinates: pixels about `centre` over `radius` (the half diagonal), plane
    millimetres about `origin` over `extent`.

    covariance : (12, 12) of the parameters
    residual_px : rms distance per axis of the corners from the fit
    poses : per target (a, b, turn): its place in the plane, mm and rad; the first is (0, 0, 0)
    """

    parameters: Array
    covariance: Array
    centre: Array
    radius: float
    origin: Array
    extent: float
    residual_px: float
    poses: tuple[tuple[float, float, float], ...] = ((0.0, 0.0, 0.0),)

    @property
    def homography(self) -> Array:
        """(3, 3) plane mm to undistorted normalised pixels."""
        h = np.append(self.parameters[_LENS:], 1.0).reshape(3, 3)
        x, y = self.origin
        return h @ np.array([[1, 0, -x], [0, 1, -y], [0, 0, self.extent]]) / self.extent

    def to_pixels(self, points: Array) -> Array:
        """(n, 2) plane mm to (n, 2) photo pixels."""
        return _project(self.parameters, (points - self.origin) / self.extent) * self.radius + self.centre

    def to_mm(self, pixels: Array) -> Array:
        """(n, 2) photo pixels to (n, 2) plane mm."""
        return _unproject(self.parameters, (pixels - self.centre) / self.radius) * self.extent + self.origin

    def mm_per_px(self, pixels: Array) -> Array:
        """(n, 2, 2) Jacobian of `to_mm` at (n, 2) pixels."""
        columns = [(self.to_mm(pixels + step) - self.to_mm(pixels - step)) for step in 0.5 * np.eye(2)]
        return np.stack(columns, axis=-1)

    def displacements(self, points: Array) -> list[tuple[str, Array]]:
        """What the uncertain parameters do to (n, 2) plane points: independent fields at one standard uncertainty.

        The lens comes first in a Cholesky factor of the covariance, so that its share holds
        what the homography does in its company; the rest is the corners' own.
        """
        pixels = self.to_pixels(points)
        factor = np.linalg.cholesky(self.covariance + 1e-30 * np.eye(len(self.covariance)))
        fields = []
        for index, column in enumerate(factor.T):
            up = replace(self, parameters=self.parameters + column).to_mm(pixels)
            down = replace(self, parameters=self.parameters - column).to_mm(pixels)
            fields.append(("distortion" if index < _LENS else "reference corners", 0.5 * (up - down)))
        return fields

    def raised(self, height: float, focal_px: float) -> Plane:
        """The parallel plane `height` mm nearer to the camera, for a focal length in pixels.

        H = K [r1 r2 t] becomes K [r1 r2 t + height n], n the unit normal towards the camera. The
        covariance is kept: what is uncertain about the reference is uncertain about the face.
        """
        if height == 0.0:
            return self
        h = self.homography
        k = np.diag([focal_px / self.radius, focal_px / self.radius, 1.0])
        m = np.linalg.solve(k, h)
        # With an imperfect focal length the two columns differ in length; the geometric mean keeps the scale.
        length = np.sqrt(np.linalg.norm(m[:, 0]) * np.linalg.norm(m[:, 1]))
        normal = np.cross(m[:, 0], m[:, 1])
        normal /= np.linalg.norm(normal)
        h[:, 2] += height * length * (k @ normal)
        x, y = self.origin
        h = h @ np.array([[self.extent, 0, x], [0, self.extent, y], [0, 0, 1]])
        parameters = self.parameters.copy()
        parameters[_LENS:] = (h / h[2, 2]).ravel()[:8]
        return replace(self, parameters=parameters)

    def turned(self, angle: float) -> Plane:
        """The same plane with its axes turned by -angle (rad) about the origin: a point at a comes to a + angle."""
        c, s = np.cos(angle), np.sin(angle)
        turn = np.array([[c, -s], [s, c]])
        # New homography = old times the inverse turn; linear in its entries, so the covariance follows exactly.
        change = np.eye(_LENS + 8)
        for row in range(2):
            at = _LENS + 3 * row
            change[at : at + 2, at : at + 2] = turn
        change[_LENS + 6 :, _LENS + 6 :] = turn
        poses = tuple(
            (*(turn @ (np.array([a, b]) - self.origin) + self.origin).tolist(), phi + angle) for a, b, phi in self.poses
        )
        return replace(
            self,
            parameters=change @ self.parameters,
            covariance=change @ self.covariance @ change.T,
            poses=poses,
        )

    def camera_height(self, focal_px: float) -> float:
        """Perpendicular distance of the lens from the plane, mm."""
        m = np.linalg.solve(np.diag([focal_px / self.radius, focal_px / self.radius, 1.0]), self.homography)
        length = np.sqrt(np.linalg.norm(m[:, 0]) * np.linalg.norm(m[:, 1]))
        normal = np.cross(m[:, 0], m[:, 1])
        return float(-(normal / np.linalg.norm(normal)) @ m[:, 2] / length)

    def tilt(self, focal_px: float) -> float:
        """Angle between the plane's normal and the camera's axis, rad."""
        m = np.linalg.solve(np.diag([focal_px / self.radius, focal_px / self.radius, 1.0]), self.homography)
        normal = np.cross(m[:, 0], m[:, 1])
        return float(np.arccos(min(1.0, abs(normal[2]) / np.linalg.norm(normal))))

    def focal_px(self, aspect_std: float = 0.0) -> tuple[float, float] | None:
        """(focal length, its standard uncertainty) in pixels from the perspective alone, or None.

        aspect_std : relative standard uncertainty of the target's width over its height

        Square pixels and a principal point at the centre of the frame leave two conditions on the
        homography's first two columns (Zhang 2000); their weighted mean is taken. The uncertainty
        holds the target's aspect and a principal point PRINCIPAL_POINT_STD off the centre, whose effects grow
        as the view gets more frontal. None where the perspective says less than a stated focal length would.
        """

        def estimate(parameters: Array, x: float = 0.0, y: float = 0.0, aspect: float = 0.0) -> float:
            h = np.array([[1, 0, -x], [0, 1, -y], [0, 0, 1]]) @ np.append(parameters[_LENS:], 1.0).reshape(3, 3)
            h[:, 0] *= 1.0 + aspect
            (a1, b1, c1), (a2, b2, c2) = h[:, 0], h[:, 1]
            # c1 c2 f^2 = -(a1 a2 + b1 b2) and (c1^2 - c2^2) f^2 = (a2^2 + b2^2) - (a1^2 + b1^2)
            left = np.array([c1 * c2, c1**2 - c2**2])
            right = np.array([-(a1 * a2 + b1 * b2), a2**2 + b2**2 - a1**2 - b1**2])
            norm = left @ left
            return float(left @ right / norm) if norm > 0 else np.nan

        square = estimate(self.parameters)
        if not square > 0:
            return None
        factor = np.linalg.cholesky(self.covariance + 1e-30 * np.eye(len(self.covariance)))
        changes = [(estimate(self.parameters + c) - estimate(self.parameters - c)) / 2 for c in factor.T]
        off = PRINCIPAL_POINT_STD
        changes += [
            (estimate(self.parameters, *(off * e)) - estimate(self.parameters, *(-off * e))) / 2 for e in np.eye(2)
        ]
        changes.append(
            (estimate(self.parameters, aspect=aspect_std) - estimate(self.parameters, aspect=-aspect_std)) / 2
        )
        # Second order counts where the perspective is weak: a shift either way then lengthens the focal length.
        changes += [
            (estimate(self.parameters, *(off * e)) + estimate(self.parameters, *(-off * e))) / 2 - square
            for e in np.eye(2)
        ]
        relative = 0.5 * float(np.linalg.norm(changes)) / square
        if not relative < 0.1:
            return None
        focal = float(np.sqrt(square)) * self.radius
        return focal, relative * focal


def _distort(lens: Array, u: Array) -> tuple[Array, Array]:
    """Brown's model on (n, 2) normalised points; returns the points and the (n, 2, 2) Jacobian."""
    k1, k2, p1, p2 = lens
    x, y = u.T
    r2 = x * x + y * y
    g = 1 + r2 * (k1 + r2 * k2)
    dg = 2 * k1 + 4 * k2 * r2
    distorted = np.stack(
        [x * g + 2 * p1 * x * y + p2 * (r2 + 2 * x * x), y * g + p1 * (r2 + 2 * y * y) + 2 * p2 * x * y]
    )
    cross = x * y * dg + 2 * p1 * x + 2 * p2 * y
    jacobian = np.empty((len(u), 2, 2))
    jacobian[:, 0, 0] = g + x * x * dg + 2 * p1 * y + 6 * p2 * x
    jacobian[:, 0, 1] = jacobian[:, 1, 0] = cross
    jacobian[:, 1, 1] = g + y * y * dg + 6 * p1 * y + 2 * p2 * x
    return distorted.T, jacobian


def _project(parameters: Array, points: Array) -> Array:
    h = np.append(parameters[_LENS:], 1.0).reshape(3, 3)
    w = points @ h[2, :2] + 1.0
    return _distort(parameters[:_LENS], (points @ h[:2, :2].T + h[:2, 2]) / w[:, None])[0]


def _unproject(parameters: Array, seen: Array) -> Array:
    u = seen.copy()
    for _ in range(20):
        distorted, jacobian = _distort(parameters[:_LENS], u)
        (a, b), (c, d) = jacobian[:, 0].T, jacobian[:, 1].T
        x, y = (seen - distorted).T
        step = np.column_stack([d * x - b * y, a * y - c * x]) / (a * d - b * c)[:, None]
        u = u + step
        if np.abs(step).max(initial=0.0) < 1e-12:
            break
    h = np.linalg.inv(np.append(parameters[_LENS:], 1.0).reshape(3, 3))
    w = u @ h[2, :2] + h[2, 2]
    return (u @ h[:2, :2].T + h[:2, 2]) / w[:, None]


def direct_homography(source: Array, image: Array) -> Array:
    """(3, 3) homography taking (k, 2) points to (k, 2) points, k >= 4, by the normalised direct linear transform.

    Hartley's normalisation; the last entry is 1.
    """

    def normaliser(points: Array) -> Array:
        mean = points.mean(axis=0)
        scale = np.sqrt(2) / np.mean(np.linalg.norm(points - mean, axis=1))
        return np.array([[scale, 0, -scale * mean[0]], [0, scale, -scale * mean[1]], [0, 0, 1]])

    ts, ti = normaliser(source), normaliser(image)
    s = np.c_[source, np.ones(len(source))] @ ts.T
    p = np.c_[image, np.ones(len(image))] @ ti.T
    zero = np.zeros_like(s)
    # A row of nothing makes room for the ninth singular vector when four points give only eight rows.
    rows = np.concatenate([np.c_[s, zero, -p[:, :1] * s], np.c_[zero, s, -p[:, 1:2] * s], np.zeros((1, 9))])
    h = np.linalg.svd(rows, full_matrices=False)[2][-1].reshape(3, 3)
    h = np.linalg.solve(ti, h @ ts)
    return h / h[2, 2]


def _residuals(parameters: Array, targets: Sequence[tuple[Array, Array]], lens_fixed: bool) -> tuple[Array, Array]:
    """Residuals (2k,) and Jacobian (2k, p) of all targets; parameters are lens, homography, then 3 a further target."""
    h = np.append(parameters[_LENS : _LENS + 8], 1.0).reshape(3, 3)
    lens = parameters[:_LENS]
    residuals, jacobians = [], []
    for index, (target, seen) in enumerate(targets):
        points, at = target, _LENS + 8 + 3 * (index - 1)
        if index:
            a, b, turn = parameters[at : at + 3]
            c, s = np.cos(turn), np.sin(turn)
            points = target @ np.array([[c, s], [-s, c]]) + (a, b)
        x, y = points.T
        w = points @ h[2, :2] + 1.0
        u = (points @ h[:2, :2].T + h[:2, 2]) / w[:, None]
        distorted, d_u = _distort(lens, u)
        n = len(points)
        jacobian = np.zeros((n, 2, len(parameters)))
        if not lens_fixed:
            ux, uy = u.T
            r2 = ux * ux + uy * uy
            jacobian[:, :, 0] = u * r2[:, None]
            jacobian[:, :, 1] = u * (r2 * r2)[:, None]
            jacobian[:, :, 2] = np.stack([2 * ux * uy, r2 + 2 * uy * uy], axis=1)
            jacobian[:, :, 3] = np.stack([r2 + 2 * ux * ux, 2 * ux * uy], axis=1)
        du_dh = np.zeros((n, 2, 8))
        ones = np.ones(n)
        du_dh[:, 0, 0:3] = du_dh[:, 1, 3:6] = np.stack([x, y, ones], axis=1) / w[:, None]
        du_dh[:, :, 6] = -u * (x / w)[:, None]
        du_dh[:, :, 7] = -u * (y / w)[:, None]
        jacobian[:, :, _LENS : _LENS + 8] = d_u @ du_dh
        if index:
            du_dp = (h[:2, :2] - u[:, :, None] * h[2, :2]) / w[:, None, None]
            dp = np.zeros((n, 2, 3))
            dp[:, 0, 0] = dp[:, 1, 1] = 1.0
            dp[:, :, 2] = np.stack([-(y - b), x - a], axis=1)
            jacobian[:, :, at : at + 3] = d_u @ du_dp @ dp
        residuals.append((seen - distorted).ravel())
        jacobians.append(jacobian.reshape(2 * n, -1))
    return np.concatenate(residuals), np.concatenate(jacobians)


def fit_plane(targets: Sequence[Correspondences], frame: tuple[int, int], *, lens_fixed: bool = False) -> Plane:
    """The plane in which all targets lie, each at an unknown place but the first.

    targets : rigid targets; the first defines the plane's axes
    frame : (width, height) of the photo, px
    lens_fixed : leave the distortion at zero (a scan, or a first look at few corners)
    Returns a Plane whose covariance is a posteriori, s0^2 (J'WJ)^-1.

    Gauss-Newton with Levenberg's damping on the reprojection error of all corners, started from
    direct linear transforms. Lens terms carry weak priors (PRIOR_RADIAL, PRIOR_DECENTRING) as
    pseudo-observations, so that a reference too small to show a term leaves it uncertain.
    See Criminisi, Reid, Zisserman, "A plane measuring device" (1999), for first-order propagation.
    """
    width, height = frame
    centre = np.array([(width - 1) / 2, (height - 1) / 2])
    radius = float(np.hypot(width, height) / 2)
    first = targets[0]
    origin = first.target.mean(axis=0)
    extent = float(np.abs(first.target - origin).max())
    scaled = [
        ((t.target - origin) / extent if i == 0 else t.target / extent, (t.pixels - centre) / radius)
        for i, t in enumerate(targets)
    ]
    h = direct_homography(*scaled[0])
    parameters = np.concatenate([np.zeros(_LENS), h.ravel()[:8]])
    inverse = np.linalg.inv(h)
    for target, seen in scaled[1:]:
        p = np.c_[seen, np.ones(len(seen))] @ inverse.T
        parameters = np.concatenate([parameters, rigid_motion(target, p[:, :2] / p[:, 2:])])

    prior = np.array([*PRIOR_RADIAL, PRIOR_DECENTRING, PRIOR_DECENTRING])
    free = np.arange(len(parameters)) >= (_LENS if lens_fixed else 0)
    noise = 0.1 / radius
    damping = 1e-6
    scale = None
    residual, jacobian = _residuals(parameters, scaled, lens_fixed)
    for _ in range(60):
        weight = 1 / noise**2
        normal = weight * jacobian.T @ jacobian
        gradient = weight * jacobian.T @ residual
        if not lens_fixed:
            normal[range(_LENS), range(_LENS)] += 1 / prior**2
            gradient[:_LENS] -= parameters[:_LENS] / prior**2
        normal, gradient = normal[np.ix_(free, free)], gradient[free]
        scale = np.sqrt(np.diag(normal))
        step = np.zeros(len(parameters))
        step[free] = (
            np.linalg.solve(normal / np.outer(scale, scale) + damping * np.eye(len(scale)), gradient / scale) / scale
        )
        trial = parameters + step
        trial_residual, trial_jacobian = _residuals(trial, scaled, lens_fixed)
        cost = weight * residual @ residual + _prior_cost(parameters, prior, lens_fixed)
        trial_cost = weight * trial_residual @ trial_residual + _prior_cost(trial, prior, lens_fixed)
        if np.isfinite(trial_cost) and trial_cost <= cost * (1 + 1e-12):
            parameters, residual, jacobian = trial, trial_residual, trial_jacobian
            damping = max(damping / 10, 1e-12)
            degrees = max(1, len(residual) - int(free.sum()))
            # The a posteriori noise weighs the corners against the priors; it settles within a few steps.
            noise = max(float(np.sqrt(residual @ residual / degrees)), 1e-4 / radius)
            if np.abs(step[free] * scale).max() < 1e-6:
                break
        else:
            damping *= 10
            if damping > 1e6:
                break
    normal = jacobian.T @ jacobian / noise**2
    if not lens_fixed:
        normal[range(_LENS), range(_LENS)] += 1 / prior**2
    covariance = np.zeros_like(normal)
    normal = normal[np.ix_(free, free)]
    scale = np.sqrt(np.diag(normal))
    covariance[np.ix_(free, free)] = np.linalg.inv(normal / np.outer(scale, scale)) / np.outer(scale, scale)
    poses = tuple(
        (float(a * extent), float(b * extent), float(c)) for a, b, c in parameters[_LENS + 8 :].reshape(-1, 3)
    )
    return Plane(
        parameters=parameters[: _LENS + 8],
        covariance=covariance[: _LENS + 8, : _LENS + 8],
        centre=centre,
        radius=radius,
        origin=origin,
        extent=extent,
        residual_px=float(np.sqrt(np.mean(residual**2))) * radius,
        poses=((0.0, 0.0, 0.0), *((a + origin[0], b + origin[1], c) for a, b, c in poses)),
    )


def _prior_cost(parameters: Array, prior: Array, lens_fixed: bool) -> float:
    return 0.0 if lens_fixed else float(np.sum((parameters[:_LENS] / prior) ** 2))


def rigid_motion(source: Array, image: Array) -> Array:
    """(a, b, turn) of the rigid motion that best takes (k, 2) points to (k, 2) points, least squares."""
    ms, mi = source.mean(axis=0), image.mean(axis=0)
    (x, y), (u, v) = (source - ms).T, (image - mi).T
    turn = np.arctan2(np.sum(x * v - y * u), np.sum(x * u + y * v))
    c, s = np.cos(turn), np.sin(turn)
    return np.array([*(mi - np.array([[c, -s], [s, c]]) @ ms), turn])


def corner_residuals(plane: Plane, targets: Sequence[Correspondences]) -> list[Array]:
    """Per target (k, 2) seen minus predicted pixels."""
    places = zip(targets, plane.poses, strict=True)
    return [target.pixels - plane.to_pixels(moved(target.target, pose)) for target, pose in places]


def moved(points: Array, pose: tuple[float, float, float]) -> Array:
    """(k, 2) points of a target that lies at (a, b, turn), mm and rad, as (k, 2) points of the plane."""
    a, b, turn = pose
    c, s = np.cos(turn), np.sin(turn)
    return points @ np.array([[c, s], [-s, c]]) + (a, b)
