"""The plane of a face as a calibrated camera sees it: six numbers of a pose instead of a free homography.

Interchangeable with `plane.Plane`. Knows how the camera's own uncertainty and that of the pose move
points of the plane; knows nothing of what the corners belong to.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from .camera import Camera, directions_of, project_directions
from .plane import Correspondences, direct_homography, moved, rigid_motion

Array = NDArray[np.float64]


@dataclass(frozen=True, eq=False)
class PosedPlane:
    """A plane in front of a camera.

    A plane point (x, y) at `height` above the reference lies at rotation (x - x0, y - y0, height) + translation in
    the camera's frame (x right, y down, z away from the lens), (x0, y0) being `origin`.

    camera : with its parameters as this picture amends them
    covariance : (p + 6, p + 6) of the camera's parameters and of the pose (a small turn in the camera's frame, rad, and
        the translation, mm)
    stretch : half of what the print is too long along x and too short along y, relative, and its standard uncertainty
    residual_px : rms distance per axis of the corners from the fit
    poses : per target (a, b, turn): its place in the plane, mm and rad; the first is (0, 0, 0)
    """

    camera: Camera
    rotation: Array
    translation: Array
    covariance: Array
    origin: Array
    residual_px: float
    stretch: tuple[float, float] = (0.0, 0.0)
    poses: tuple[tuple[float, float, float], ...] = ((0.0, 0.0, 0.0),)
    height: float = 0.0

    @property
    def radius(self) -> float:
        """Half the diagonal of the frame, px."""
        return float(np.hypot(self.camera.width, self.camera.height) / 2)

    @property
    def homography(self) -> Array:
        """(3, 3) plane mm to tangents."""
        m = self.rotation.copy()
        m[:, 2] = self.translation + self.height * self.rotation[:, 2] - self.rotation[:, :2] @ self.origin
        return m

    def to_pixels(self, points: Array) -> Array:
        """(n, 2) plane mm to (n, 2) photo pixels."""
        seen = np.c_[points, np.ones(len(points))] @ self.homography.T
        return self.camera.to_pixels(seen[:, :2] / seen[:, 2:])

    def corner_residuals(self, targets: Sequence[Correspondences]) -> list[Array]:
        """Per target of the fit (k, 2) seen minus predicted pixels, the print stretched as it was found to be."""
        factor = np.array([1 + self.stretch[0], 1 - self.stretch[0]])
        residuals = []
        for index, (target, pose) in enumerate(zip(targets, self.poses, strict=True)):
            # The first target is stretched about its middle, the others about their own origins.
            about = targets[0].target.mean(axis=0) if index == 0 else np.zeros(2)
            residuals.append(target.pixels - self.to_pixels(moved((target.target - about) * factor + about, pose)))
        return residuals

    def to_mm(self, pixels: Array) -> Array:
        """(n, 2) photo pixels to (n, 2) plane mm."""
        u = self.camera.to_directions(pixels)
        points = np.c_[u, np.ones(len(u))] @ np.linalg.inv(self.homography).T
        return points[:, :2] / points[:, 2:]

    def mm_per_px(self, pixels: Array) -> Array:
        """(n, 2, 2) Jacobian of `to_mm` at (n, 2) pixels."""
        columns = [(self.to_mm(pixels + step) - self.to_mm(pixels - step)) for step in 0.5 * np.eye(2)]
        return np.stack(columns, axis=-1)

    def displacements(self, points: Array) -> list[tuple[str, Array]]:
        """What the uncertain parameters do to (n, 2) plane points: independent fields at one standard uncertainty.

        The camera comes first in a Cholesky factor of the covariance, so that its share holds what the pose does in
        its company; the rest is the corners' own.
        """
        pixels = self.to_pixels(points)
        scale = np.sqrt(np.maximum(np.diag(self.covariance), 1e-300))
        correlation = self.covariance / np.outer(scale, scale)
        factor = scale[:, None] * np.linalg.cholesky(correlation + 1e-9 * np.eye(len(scale)))
        own = len(self.camera.parameters)
        fields = []
        for index, column in enumerate(factor.T):
            moved = 0.5 * (self._changed(column).to_mm(pixels) - self._changed(-column).to_mm(pixels))
            fields.append(("camera calibration" if index < own else "reference corners", moved))
        return fields

    def _changed(self, change: Array) -> PosedPlane:
        own = len(self.camera.parameters)
        return replace(
            self,
            camera=replace(self.camera, parameters=self.camera.parameters + change[:own]),
            rotation=small_turn(change[own : own + 3]) @ self.rotation,
            translation=self.translation + change[own + 3 :],
        )

    def raised(self, height: float, focal_px: float | None = None) -> PosedPlane:
        """The parallel plane `height` mm nearer to the camera; the camera knows its own focal length."""
        return replace(self, height=self.height + height)

    def turned(self, angle: float) -> PosedPlane:
        """The same plane with its axes turned by -angle about the origin: a point at angle a comes to a + angle."""
        c, s = np.cos(angle), np.sin(angle)
        turn = np.array([[c, -s], [s, c]])
        whole = np.eye(3)
        whole[:2, :2] = turn
        poses = tuple(
            (*(turn @ (np.array([a, b]) - self.origin) + self.origin).tolist(), phi + angle) for a, b, phi in self.poses
        )
        # The pose's uncertainty is stated in the camera's frame, which does not turn.
        return replace(self, rotation=self.rotation @ whole.T, poses=poses)

    def camera_height(self, focal_px: float | None = None) -> float:
        """Perpendicular distance of the lens from the plane, mm."""
        return float(-self.rotation[:, 2] @ (self.translation + self.height * self.rotation[:, 2]))

    def tilt(self, focal_px: float | None = None) -> float:
        """Angle between the plane's normal and the camera's axis, rad."""
        return float(np.arccos(min(1.0, abs(self.rotation[2, 2]))))

    def focal_px(self, aspect_std: float = 0.0) -> tuple[float, float]:
        """(focal length, its standard uncertainty) in pixels, as this picture amends the calibration's."""
        mean = np.zeros(len(self.covariance))
        mean[:2] = 0.5
        return self.camera.focal_px, float(np.sqrt(mean @ self.covariance @ mean))


def small_turn(vector: Array) -> Array:
    """(3, 3) rotation about `vector` by its length, rad (Rodrigues' formula)."""
    angle = float(np.linalg.norm(vector))
    x, y, z = vector
    cross = np.array([[0, -z, y], [z, 0, -x], [-y, x, 0]])
    first, second = np.sinc(angle / np.pi), 0.5 * np.sinc(angle / (2 * np.pi)) ** 2
    return np.eye(3) + first * cross + second * cross @ cross


def project_points(
    parameters: Array, rotation: Array, translation: Array, points: Array
) -> tuple[Array, Array, Array, Array]:
    """(n, 3) mm to pixels of a camera at a pose.

    Returns (n, 2) pixels, and their derivatives: (n, 2, p) by the camera's parameters, (n, 2, 6) by a small turn in
    the camera's frame and the translation, (n, 2, 3) by the points.
    """
    turned = points @ rotation.T
    seen = turned + translation
    depth = seen[:, 2:]
    u = seen[:, :2] / depth
    pixels, by_direction, by_camera = project_directions(parameters, u)
    by_place = np.empty((len(points), 2, 3))
    by_place[:, :, :2] = by_direction / depth[:, :, None]
    by_place[:, :, 2] = -np.einsum("nij,nj->ni", by_direction, u) / depth
    by_pose = np.empty((len(points), 2, 6))
    by_pose[:, :, 3:] = by_place
    # A small turn w moves a turned point q by w x q.
    x, y, z = turned.T
    zero = np.zeros_like(x)
    cross = np.stack([zero, z, -y, -z, zero, x, y, -x, zero], axis=1).reshape(-1, 3, 3)
    by_pose[:, :, :3] = by_place @ cross
    return pixels, by_camera, by_pose, by_place @ rotation


def first_pose(camera_parameters: Array, points: Array, pixels: Array) -> tuple[Array, Array]:
    """(rotation, translation) of (k, 2) plane points seen at (k, 2) pixels, from a direct homography (Zhang 2000)."""
    u = directions_of(camera_parameters, pixels)
    h = direct_homography(points, u)
    if h[2] @ np.append(points.mean(axis=0), 1.0) < 0:
        h = -h
    h = h / np.sqrt(np.linalg.norm(h[:, 0]) * np.linalg.norm(h[:, 1]))
    left, _, right = np.linalg.svd(np.column_stack([h[:, 0], h[:, 1], np.cross(h[:, 0], h[:, 1])]))
    rotation = left @ np.diag([1.0, 1.0, np.linalg.det(left @ right)]) @ right
    return rotation, h[:, 2]


def fit_posed_plane(targets: Sequence[Correspondences], camera: Camera, *, print_scale_std: float = 0.0) -> PosedPlane:
    """The plane in which all targets lie before a calibrated camera, each at an unknown place but the first.

    targets : rigid targets; the first defines the plane's axes
    camera : of the upright picture
    print_scale_std : how well the print's scale is known, per axis and independent; a difference of the axes is then
        fitted too, since square pixels show it. The mean scale stays unknown; it is the caller's to count
    Returns a PosedPlane with an a posteriori covariance.

    Gauss-Newton with Levenberg's damping on the reprojection error. The camera's parameters are observations
    with the calibration's covariance, widened by what focusing anew may do; so the picture may amend them.
    """
    origin = targets[0].target.mean(axis=0)
    plane_points = [targets[0].target - origin, *(t.target for t in targets[1:])]
    rotation, translation = first_pose(camera.parameters, plane_points[0], targets[0].pixels)
    inverse = np.linalg.inv(np.column_stack([rotation[:, :2], translation]))
    places = []
    for points, target in zip(plane_points[1:], targets[1:], strict=True):
        u = directions_of(camera.parameters, target.pixels)
        seen = np.c_[u, np.ones(len(u))] @ inverse.T
        places.append(rigid_motion(points, seen[:, :2] / seen[:, 2:]))
    own = len(camera.parameters)
    prior = camera.covariance.copy()
    focal = np.zeros(own)
    focal[:2] = camera.refocus_std(float(translation[2])) * camera.parameters[:2]
    prior += np.outer(focal, focal)
    stretch_std = max(print_scale_std / np.sqrt(2), 1e-9)
    information = np.zeros((own + 7 + 3 * len(places),) * 2)
    scale = np.sqrt(np.diag(prior))
    correlation = prior / np.outer(scale, scale) + 1e-9 * np.eye(own)
    information[:own, :own] = np.linalg.inv(correlation) / np.outer(scale, scale)
    information[own + 6, own + 6] = 1 / stretch_std**2

    state = _State(camera.parameters.copy(), rotation, translation, 0.0, tuple(places))
    noise, damping = 0.1, 1e-6
    residual, jacobian = _residuals(state, plane_points, targets)
    for _ in range(60):
        off = np.zeros(len(information))
        off[:own] = camera.parameters - state.parameters
        off[own + 6] = -state.stretch
        normal = jacobian.T @ jacobian / noise**2 + information
        gradient = jacobian.T @ residual / noise**2 + information @ off
        scale = np.sqrt(np.diag(normal))
        step = np.linalg.solve(normal / np.outer(scale, scale) + damping * np.eye(len(scale)), gradient / scale) / scale
        trial = state.moved(step)
        trial_residual, trial_jacobian = _residuals(trial, plane_points, targets)
        after = off - step
        after[own : own + 6] = after[own + 7 :] = 0.0
        cost = residual @ residual / noise**2 + off @ information @ off
        trial_cost = trial_residual @ trial_residual / noise**2 + after @ information @ after
        if np.isfinite(trial_cost) and trial_cost <= cost * (1 + 1e-12):
            state, residual, jacobian = trial, trial_residual, trial_jacobian
            damping = max(damping / 10, 1e-12)
            # The a posteriori noise weighs the corners against the calibration; it settles within a few steps.
            degrees = max(1, len(residual) - 6 - 3 * len(places))
            noise = max(float(np.sqrt(residual @ residual / degrees)), 1e-3)
            if np.abs(step * scale).max() < 1e-6:
                break
        else:
            damping *= 10
            if damping > 1e6:
                break
    normal = jacobian.T @ jacobian / noise**2 + information
    scale = np.sqrt(np.diag(normal))
    covariance = np.linalg.inv(normal / np.outer(scale, scale)) / np.outer(scale, scale)
    covariance = 0.5 * (covariance + covariance.T)
    return PosedPlane(
        camera=replace(camera, parameters=state.parameters),
        rotation=state.rotation,
        translation=state.translation,
        covariance=covariance[: own + 6, : own + 6],
        origin=origin,
        residual_px=float(np.sqrt(np.mean(residual**2))),
        stretch=(state.stretch, float(np.sqrt(covariance[own + 6, own + 6]))),
        poses=((0.0, 0.0, 0.0), *((a + origin[0], b + origin[1], turn) for a, b, turn in state.places)),
    )


@dataclass(frozen=True)
class _State:
    """What a fit moves: camera, pose, stretch of the print, places of further targets."""

    parameters: Array
    rotation: Array
    translation: Array
    stretch: float
    places: tuple[Array, ...]

    def moved(self, step: Array) -> _State:
        own = len(self.parameters)
        return _State(
            self.parameters + step[:own],
            small_turn(step[own : own + 3]) @ self.rotation,
            self.translation + step[own + 3 : own + 6],
            self.stretch + float(step[own + 6]),
            tuple(p + step[own + 7 + 3 * i : own + 10 + 3 * i] for i, p in enumerate(self.places)),
        )


def _residuals(state: _State, plane_points: Sequence[Array], targets: Sequence[Correspondences]) -> tuple[Array, Array]:
    """(2k,) seen minus fitted pixels and (2k, p + 7 + 3 further targets) derivatives of the fitted ones."""
    own = len(state.parameters)
    residuals, jacobians = [], []
    for index, (nominal, target) in enumerate(zip(plane_points, targets, strict=True)):
        stretched = nominal * (1 + state.stretch, 1 - state.stretch)
        by_stretch = nominal * (1.0, -1.0)
        points = stretched
        if index:
            a, b, turn = state.places[index - 1]
            c, s = np.cos(turn), np.sin(turn)
            turned = np.array([[c, s], [-s, c]])
            points, by_stretch = stretched @ turned + (a, b), by_stretch @ turned
        solid = np.c_[points, np.zeros(len(points))]
        pixels, by_camera, by_pose, by_point = project_points(
            state.parameters, state.rotation, state.translation, solid
        )
        jacobian = np.zeros((len(points), 2, own + 7 + 3 * len(state.places)))
        jacobian[:, :, :own] = by_camera
        jacobian[:, :, own : own + 6] = by_pose
        jacobian[:, :, own + 6] = np.einsum("nij,nj->ni", by_point[:, :, :2], by_stretch)
        if index:
            at = own + 7 + 3 * (index - 1)
            jacobian[:, :, at : at + 2] = by_point[:, :, :2]
            x, y = (points - state.places[index - 1][:2]).T
            jacobian[:, :, at + 2] = np.einsum("nij,nj->ni", by_point[:, :, :2], np.column_stack([-y, x]))
        residuals.append((target.pixels - pixels).ravel())
        jacobians.append(jacobian.reshape(2 * len(points), -1))
    return np.concatenate(residuals), np.concatenate(jacobians)
