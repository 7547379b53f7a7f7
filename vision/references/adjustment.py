"""References of known size in one picture, adjusted: the camera, the plane of the face and all that is unsure of them.

Knows edges that lie on known lines or circles, points of known position, and tolerances. Does not know how they
were found, nor what the references are called.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass, field, replace
from typing import Literal

import numpy as np
from numpy.typing import NDArray

from ...props.errors import Refusal
from ...props.uncertainty import Mode
from ..camera import PARAMETERS, Camera, directions_of
from ..plane import Correspondences, rigid_motion
from ..posed_plane import PosedPlane, first_pose, project_points, small_turn
from .setting import Setting

Array = NDArray[np.float64]
Distribution = Literal["normal", "rectangular"]

# A cause that data did not teach keeps the shape of its distribution.
_UNTAUGHT = 0.9
# What is held is held to this angle, rad, and length, mm: small beside everything that is measured.
_HELD, _FIXED_MM = 1e-5, 1e-5


@dataclass(frozen=True)
class Known:
    """How well a size is known: its standard uncertainty, mm, and the shape of its distribution."""

    std: float
    shape: Distribution = "normal"

    @classmethod
    def within(cls, limit: float) -> Known:
        """Off by `limit` mm at most, anything within being equally likely (JCGM 100, 4.3.7)."""
        return cls(limit / np.sqrt(3), "rectangular")


@dataclass(frozen=True)
class Unknown:
    """Something of a reference that is known within bounds only.

    source : its line in a budget
    std : standard uncertainty, in the unit its target's `misses` or `shift` takes
    what : in words, for messages
    shared : unknowns of several targets that have this name in common are one and the same
    """

    source: str
    std: float
    shape: Distribution = "normal"
    what: str = ""
    shared: str = ""


@dataclass(frozen=True, eq=False)
class Target:
    """One reference as seen in a photo: pixels that are known to lie on something.

    label : "the A4 sheet"
    pixels : (n, 2) px; std : (n,) px
    misses : (n, 2) mm in the reference's own axes, (u,) unknowns -> (n, k) mm by which each misses what it lies on,
        (n, k, 2) gradients and (n, k, u) derivatives by the unknowns; k is 1 for a line or circle, 2 for a point
    unknowns : of the reference's size, or of its edges
    shift : (n, u) px by which an unknown displaces what is seen of an edge, along the gradient
    noise : line of a budget for the scatter of the pixels
    bow_std : mm, how far its rim may be off its own plane in each of the ways that a sheet bows; 0 for what is flat
    start : four or more points of it and where they are seen, good to a few pixels
    setting : how the face lies to it
    turns : whether it looks the same however it is turned in its plane
    outline : (m, 2) mm around it
    """

    label: str
    pixels: Array
    std: Array
    misses: Callable[[Array, Array], tuple[Array, Array, Array]]
    start: Correspondences
    outline: Array
    setting: Setting = field(default_factory=Setting)
    unknowns: tuple[Unknown, ...] = ()
    shift: Array | None = None
    noise: str = "reference edges"
    turns: bool = False
    bow_std: float = 0.0

    @property
    def middle(self) -> Array:
        """(2,) mm, its middle, about which it lies flush or leans."""
        return self.outline.mean(axis=0)

    def bows(self, points: Array) -> Array:
        """(n, 3 or 0) heights of (n, 2) points for a unit of each bow: hollow along x, along y, and twisted."""
        if self.bow_std == 0:
            return np.zeros((len(points), 0))
        x, y = ((points - self.middle) / (0.5 * np.ptp(self.outline, axis=0))).T
        # Free of the mean and of the slope, which are its own.
        return np.column_stack([x * x - 1 / 3, y * y - 1 / 3, x * y])


@dataclass(frozen=True)
class HeldTilt:
    """A component of the face's normal that a hypothesis holds: its part along a direction of the camera's frame.

    direction : x to the right, y down, z away from the lens; square to the axis it is the sine of the tilt towards it
    std : how closely, None for a hypothesis that holds it fast
    """

    direction: tuple[float, float, float]
    sine: float = 0.0
    std: float | None = None


@dataclass(frozen=True, eq=False)
class Adjusted:
    """What an adjustment found.

    plane : of the face, with the camera as this picture amends it
    factor : (p, m) columns are independent changes of (camera, turn, translation) at one standard uncertainty
    causes : (m,) (source, shape) of the columns
    misses : per target (rows,) px
    cost : sum of squares of everything over its standard uncertainty; `scatter` is the pixels' share of it
    strain : by how many standard uncertainties the worst unknown, focal length or height had to give; `strained`
        says which
    """

    plane: PosedPlane
    factor: Array
    causes: tuple[tuple[str, Distribution], ...]
    misses: tuple[Array, ...]
    places: tuple[tuple[float, float, float], ...]
    cost: float
    scatter: float
    strain: float
    strained: str

    @property
    def residual_px(self) -> float:
        """Root mean square of all misses, px."""
        return float(np.sqrt(np.mean(np.concatenate(self.misses) ** 2)))

    def modes(self, points: Array) -> tuple[Mode, ...]:
        """What every cause does to (n, 2) points of the face, mm."""
        pixels = self.plane.to_pixels(points)
        found = []
        for change, (source, shape) in zip(self.factor.T, self.causes, strict=True):
            moved = 0.5 * (changed(self.plane, change).to_mm(pixels) - changed(self.plane, -change).to_mm(pixels))
            found.append(Mode(source, moved, shape))
        return tuple(found)

    def on_face(self, index: int, points: Array) -> Array:
        """(n, 2) mm in the axes of target `index` to mm on the face (seen from above: heights do not matter)."""
        a, b, turn = self.places[index]
        c, s = np.cos(turn), np.sin(turn)
        return points @ np.array([[c, s], [-s, c]]) + (a, b)


def capitalised(words: str) -> str:
    """Words as they begin a sentence; names keep their own capitals."""
    return words[:1].upper() + words[1:]


def changed(plane: PosedPlane, change: Array) -> PosedPlane:
    """The plane with its camera's parameters, its turn and its translation changed a little."""
    own = len(plane.camera.parameters)
    return replace(
        plane,
        camera=replace(plane.camera, parameters=plane.camera.parameters + change[:own]),
        rotation=small_turn(change[own : own + 3]) @ plane.rotation,
        translation=plane.translation + change[own + 3 : own + 6],
    )


@dataclass(frozen=True, eq=False)
class _State:
    parameters: Array
    rotation: Array
    translation: Array
    places: tuple[Array, ...]
    lifts: tuple[Array, ...]
    unknowns: tuple[Array, ...]

    def moved(self, step: Array, layout: _Layout) -> _State:
        own = layout.own
        return _State(
            self.parameters + step[:own],
            small_turn(step[own : own + 3]) @ self.rotation,
            self.translation + step[own + 3 : own + 6],
            tuple(
                p + step[at] if index else p
                for index, (p, at) in enumerate(zip(self.places, layout.places, strict=True))
            ),
            tuple(lift + step[at] for lift, at in zip(self.lifts, layout.lifts, strict=True)),
            tuple(u + step[at] for u, at in zip(self.unknowns, layout.unknowns, strict=True)),
        )


@dataclass(frozen=True, eq=False)
class _Layout:
    """Where each target's parameters are: camera, pose, then per target its place (not the first), lift, unknowns."""

    own: int
    places: tuple[slice, ...]
    lifts: tuple[slice, ...]
    unknowns: tuple[NDArray[np.intp], ...]
    size: int

    @classmethod
    def of(cls, camera: Camera, targets: Sequence[Target]) -> _Layout:
        own = len(camera.parameters)
        at = own + 6
        places, lifts, unknowns = [], [], []
        shared: dict[str, int] = {}
        for index, target in enumerate(targets):
            places.append(slice(at, at + (3 if index else 0)))
            at = places[-1].stop
            lifts.append(slice(at, at + (6 if target.bow_std > 0 else 3)))
            at = lifts[-1].stop
            where = []
            for unknown in target.unknowns:
                if unknown.shared in shared:
                    where.append(shared[unknown.shared])
                    continue
                if unknown.shared:
                    shared[unknown.shared] = at
                where.append(at)
                at += 1
            unknowns.append(np.array(where, np.intp))
        return cls(own, tuple(places), tuple(lifts), tuple(unknowns), at)


def adjust(
    camera: Camera, targets: Sequence[Target], held: Sequence[HeldTilt] = (), start: PosedPlane | None = None
) -> Adjusted:
    """Adjust the camera, the plane of the face and the references to what is seen, everything by its uncertainty.

    camera : of the upright picture, with its covariance
    targets : the first defines the axes of the plane
    held : components of the tilt to hold
    start : a plane to start from; else the first target's own start
    Raises Refusal when the first target is seen from behind or nothing fits.

    Gauss-Newton with Levenberg's damping on the distances in px (edges: along the edge's normal). Whatever is stated
    within bounds is an observation with the standard uncertainty of its distribution (JCGM 100, 4.3).
    """
    layout = _Layout.of(camera, targets)
    state = _started(camera, targets, start)
    information = _prior_information(camera, targets, layout)
    cost_of = _Cost(camera, tuple(targets), tuple(held), layout, information)
    cost, normal, gradient, misses = cost_of(state)
    # Focal lengths along both axes are all but one: steps are taken in independent changes of the camera.
    basis = np.eye(layout.size)
    basis[: layout.own, : layout.own] = _root(camera.covariance)
    damping = 1e-4
    for _ in range(80):
        own_normal = basis.T @ normal @ basis
        scale = np.sqrt(np.diag(own_normal))
        damped = own_normal / np.outer(scale, scale) + damping * np.eye(len(scale))
        change = np.linalg.solve(damped, basis.T @ gradient / scale)
        trial = state.moved(basis @ (change / scale), layout)
        trial_cost, trial_normal, trial_gradient, trial_misses = cost_of(trial)
        if np.isfinite(trial_cost) and trial_cost <= cost * (1 + 1e-12):
            settled = damping < 1e-6 and np.abs(change).max() < 1e-2
            state, cost, normal, gradient, misses = trial, trial_cost, trial_normal, trial_gradient, trial_misses
            damping = max(damping / 10, 1e-12)
            if settled:
                break
        else:
            damping *= 10
            if damping > 1e8:
                break
    if not np.isfinite(cost):
        raise Refusal(
            "reference-unfit",
            f"No view of a flat face fits {targets[0].label}.",
            "Check what was picked and stated; take the photo more squarely.",
        )
    factor, causes = _factor(normal, targets, layout, camera)
    own = layout.own
    plane = PosedPlane(
        camera=replace(camera, parameters=state.parameters),
        rotation=state.rotation,
        translation=state.translation,
        covariance=factor @ factor.T,
        origin=np.zeros(2),
        residual_px=float(np.sqrt(np.mean(np.concatenate(misses) ** 2))),
    )
    if plane.camera_height() <= 0 or state.rotation[2, 2] >= 0:
        raise Refusal(
            "reference-mirrored",
            f"{capitalised(targets[0].label)} is seen from behind: the order of its points is mirrored.",
            "State points and positions in the same order, positions with x to the right and y upwards.",
        )
    strain, strained = _strain(state, camera, targets, information, own)
    scatter = sum(float(np.sum((m / _row_std(t, len(m))) ** 2)) for m, t in zip(misses, targets, strict=True))
    places = tuple((float(a), float(b), float(turn)) for a, b, turn in state.places)
    return Adjusted(plane, factor, causes, misses, places, float(cost), scatter, strain, strained)


def _row_std(target: Target, rows: int) -> Array:
    return np.repeat(target.std, rows // len(target.std))


def _started(camera: Camera, targets: Sequence[Target], start: PosedPlane | None) -> _State:
    if start is None:
        # Twice over: four points alone leave the transform's null vector out of a thin decomposition.
        begin = targets[0].start
        rotation, translation = first_pose(
            camera.parameters, np.tile(begin.target, (2, 1)), np.tile(begin.pixels, (2, 1))
        )
        # The start is that of the reference's plane; the face lies `height` nearer to the camera.
        translation = translation + targets[0].setting.height * rotation[:, 2]
    else:
        rotation, translation = start.rotation, start.translation
    places = [np.zeros(3)]
    for target in targets[1:]:
        m = np.column_stack([rotation[:, :2], translation - target.setting.height * rotation[:, 2]])
        u = directions_of(camera.parameters, target.start.pixels)
        seen = np.c_[u, np.ones(len(u))] @ np.linalg.inv(m).T
        places.append(rigid_motion(target.start.target, seen[:, :2] / seen[:, 2:]))
    return _State(
        camera.parameters.copy(),
        rotation,
        translation,
        tuple(places),
        tuple(np.zeros(6 if target.bow_std > 0 else 3) for target in targets),
        tuple(np.zeros(len(t.unknowns)) for t in targets),
    )


def _prior_information(camera: Camera, targets: Sequence[Target], layout: _Layout) -> Array:
    information = np.zeros((layout.size, layout.size))
    scale = np.sqrt(np.diag(camera.covariance))
    correlation = camera.covariance / np.outer(scale, scale) + 1e-9 * np.eye(layout.own)
    information[: layout.own, : layout.own] = np.linalg.inv(correlation) / np.outer(scale, scale)
    for index, target in enumerate(targets):
        stds = [target.setting.height_std, target.setting.parallel_std, target.setting.parallel_std]
        at = layout.lifts[index]
        least = [max(std, _FIXED_MM if i == 0 else _HELD) for i, std in enumerate(stds)]
        bows = [target.bow_std] * (at.stop - at.start - 3)
        information[at, at] = np.diag(1 / np.array([*least, *bows]) ** 2)
        at = layout.unknowns[index]
        information[at, at] = [1 / u.std**2 for u in target.unknowns]
        if target.turns and index:
            last = layout.places[index].stop - 1
            information[last, last] = 1 / _HELD**2
    return information


@dataclass(frozen=True, eq=False)
class _Cost:
    camera: Camera
    targets: tuple[Target, ...]
    held: tuple[HeldTilt, ...]
    layout: _Layout
    information: Array

    def __call__(self, state: _State) -> tuple[float, Array, Array, tuple[Array, ...]]:
        layout = self.layout
        off = _off(state, self.camera, layout)
        normal = self.information.copy()
        gradient = -self.information @ off
        cost = float(off @ self.information @ off)
        misses = []
        for index, target in enumerate(self.targets):
            rows, jacobian = _rows(state, target, index, layout)
            weight = 1 / _row_std(target, len(rows)) ** 2
            normal += jacobian.T @ (weight[:, None] * jacobian)
            gradient -= jacobian.T @ (weight * rows)
            cost += float(weight @ rows**2)
            misses.append(rows)
        for jacobian, miss, std in self._holds(state):
            normal += np.outer(jacobian, jacobian) / std**2
            gradient -= jacobian * miss / std**2
            cost += (miss / std) ** 2
        return cost, normal, gradient, tuple(misses)

    def _holds(self, state: _State) -> list[tuple[Array, float, float]]:
        own, rows = self.layout.own, []
        upward = state.rotation[:, 2]
        for hold in self.held:
            direction = np.array(hold.direction)
            row = np.zeros(self.layout.size)
            # A small turn w moves the normal n by w x n, and d . (w x n) = w . (n x d).
            row[own : own + 3] = np.cross(upward, direction)
            rows.append((row, float(direction @ upward) - hold.sine, hold.std or _HELD))
        if self.targets[0].turns:
            # Which way round it lies is no matter; the start's is kept by not turning about the normal.
            row = np.zeros(self.layout.size)
            row[own : own + 3] = upward
            rows.append((row, 0.0, _HELD))
        return rows


def _off(state: _State, camera: Camera, layout: _Layout) -> Array:
    """What the state has moved from what is stated; zero where nothing is."""
    off = np.zeros(layout.size)
    off[: layout.own] = state.parameters - camera.parameters
    for index, (place, lift, unknown) in enumerate(zip(state.places, state.lifts, state.unknowns, strict=True)):
        off[layout.lifts[index]] = lift
        off[layout.unknowns[index]] = unknown
        if index:
            # Only the turn of a disc is held, at nought.
            off[layout.places[index].stop - 1] = place[2]
    return off


def _rows(state: _State, target: Target, index: int, layout: _Layout) -> tuple[Array, Array]:
    """(m,) px by which what is seen misses, and its (m, p) derivatives.

    Derivatives are taken at the foot of each pixel on what it should lie on. Taken at the pixel itself they would hold
    a part of its scatter, which looks like knowledge of whatever is next to unknown, as a focal length in a frontal
    view.
    """
    a, b, turn = state.places[index]
    rise, lean_x, lean_y = state.lifts[index][:3]
    bow = state.lifts[index][3:]
    c, s = np.cos(turn), np.sin(turn)
    axes = np.array([[c, -s], [s, c], [lean_x, lean_y]])
    # It lies flush, or leans, about its own middle.
    middle_x, middle_y = target.middle
    origin = np.array([a, b, rise - lean_x * middle_x - lean_y * middle_y - target.setting.height])
    view = np.column_stack([state.rotation @ axes, state.rotation @ origin + state.translation])
    u = directions_of(state.parameters, target.pixels)
    seen = np.c_[u, np.ones(len(u))] @ np.linalg.inv(view).T
    points = seen[:, :2] / seen[:, 2:]
    # First at the pixel, which tells its foot, then at the foot.
    met = _meeting(state, target, index, axes, origin, bow, points)
    met = _meeting(state, target, index, axes, origin, bow, met.foot)
    rows, by_unknown, normal = met.rows, met.by_unknown, met.normal
    if target.shift is not None:
        rows = rows - (target.shift @ state.unknowns[index])[:, None]
        by_unknown = by_unknown - target.shift[:, None, :]
    n, k = rows.shape
    jacobian = np.zeros((n, k, layout.size))
    own = layout.own
    jacobian[:, :, :own] = -normal @ met.by_camera
    jacobian[:, :, own : own + 6] = -normal @ met.by_pose
    x, y = met.points.T
    up = -normal @ met.by_place[:, :, 2:]
    heights = np.column_stack([np.ones(n), x - middle_x, y - middle_y, target.bows(met.points)])
    jacobian[:, :, layout.lifts[index]] = up * heights[:, None, :]
    if index:
        at = layout.places[index].start
        aside = -normal @ met.by_place[:, :, :2]
        jacobian[:, :, at : at + 2] = aside
        across = np.column_stack([-s * x - c * y, c * x - s * y])
        jacobian[:, :, at + 2] = np.einsum("nki,ni->nk", aside, across)
    jacobian[:, :, layout.unknowns[index]] = by_unknown
    return rows.ravel(), jacobian.reshape(n * k, -1)


@dataclass(frozen=True, eq=False)
class _Meeting:
    """Points of a target beside what they should lie on.

    points : (n, 2) mm on the target; foot : (n, 2) mm, the nearest that fulfils it
    rows : (n, k) px by which each misses; normal : (n, k, 2) directions in the picture along which; by_unknown :
        (n, k, u) its derivatives
    by_camera, by_pose, by_place : derivatives of the pixels where the points are seen
    """

    points: Array
    foot: Array
    rows: Array
    normal: Array
    by_unknown: Array
    by_camera: Array
    by_pose: Array
    by_place: Array


def _meeting(
    state: _State, target: Target, index: int, axes: Array, origin: Array, bow: Array, points: Array
) -> _Meeting:
    solid = points @ axes.T + origin
    solid[:, 2] += target.bows(points) @ bow
    pixels, by_camera, by_pose, by_place = project_points(state.parameters, state.rotation, state.translation, solid)
    to_mm = np.linalg.inv(by_place @ axes)
    miss, slope, by_unknown = target.misses(points, state.unknowns[index])
    slope = slope @ to_mm
    if miss.shape[1] == 1:
        length = np.linalg.norm(slope[:, 0], axis=1)
        normal = slope / length[:, None, None]
        away = normal[:, 0] * (miss / length[:, None])
        by_unknown = by_unknown / length[:, None, None]
    else:
        back = np.linalg.inv(slope)
        normal = np.broadcast_to(np.eye(2), back.shape)
        away = np.einsum("nij,nj->ni", back, miss)
        by_unknown = back @ by_unknown
    foot = points - np.einsum("nij,nj->ni", to_mm, away)
    rows = np.einsum("nkj,nj->nk", normal, target.pixels - pixels + away)
    return _Meeting(points, foot, rows, normal, by_unknown, by_camera, by_pose, by_place)


def _factor(
    normal: Array, targets: Sequence[Target], layout: _Layout, camera: Camera
) -> tuple[Array, tuple[tuple[str, Distribution], ...]]:
    """Independent changes of camera and pose, and their causes.

    What is stated comes first in a Cholesky factor of the covariance, so that its share holds what everything else
    does in its company; what is left to the end is the pixels' own scatter.
    """
    order: list[int] = []
    causes: list[tuple[str, Distribution]] = []
    priors: list[float] = []
    for index, target in enumerate(targets):
        own = [(u, int(at)) for u, at in zip(target.unknowns, layout.unknowns[index], strict=True) if at not in order]
        order += [at for _, at in own]
        causes.extend((u.source, u.shape) for u, _ in own)
        priors += [u.std for u, _ in own]
        order += range(layout.lifts[index].start, layout.lifts[index].stop)
        causes.extend([("plane offset", "normal"), ("tilt", "normal"), ("tilt", "normal")])
        bows = layout.lifts[index].stop - layout.lifts[index].start - 3
        causes.extend([("reference flatness", "normal")] * bows)
        priors += [1.0] * (3 + bows)
    order += range(layout.own)
    names = PARAMETERS[: layout.own]
    plain = len(camera.residuals) == 0 and camera.residual_px == 0.0
    for name in names:
        source = ("focal length" if name[0] in "fc" else "distortion") if plain else "camera calibration"
        causes.append((source, "normal"))
    rest = [i for i in range(layout.size) if i not in set(order)]
    order += rest
    causes.extend((targets[0].noise, "normal") for _ in rest)
    priors += [1.0] * (len(order) - len(priors))
    lower: Array = _inverse_factor(normal[np.ix_(order, order)])
    stds = np.linalg.norm(lower, axis=1)
    back = np.argsort(order)
    taught: list[tuple[str, Distribution]] = []
    for (source, shape), std, prior in zip(causes, stds, priors, strict=True):
        taught.append((source, shape if std >= _UNTAUGHT * prior else "normal"))
    return np.array(lower[back][: layout.own + 6]), tuple(taught)


def _root(covariance: Array) -> Array:
    """L with L L' a covariance, from its correlations."""
    stds = np.sqrt(np.diag(covariance))
    return np.asarray(
        stds[:, None] * np.linalg.cholesky(covariance / np.outer(stds, stds) + 1e-9 * np.eye(len(stds))), np.float64
    )


def _inverse_factor(normal: Array) -> Array:
    """Lower triangular L with L L' the inverse of a positive definite matrix, from the factor of the matrix itself."""
    scale = np.sqrt(np.diag(normal))
    backwards = (normal / np.outer(scale, scale))[::-1, ::-1] + 1e-13 * np.eye(len(scale))
    upper = np.linalg.cholesky(backwards)[::-1, ::-1]
    return np.array(np.linalg.inv(upper).T / scale[:, None], np.float64)


def _strain(
    state: _State, camera: Camera, targets: Sequence[Target], information: Array, own: int
) -> tuple[float, str]:
    worst, what = 0.0, ""
    focal_std = float(np.sqrt(camera.covariance[:2, :2].mean()))
    pulled = abs(float(np.mean(state.parameters[:2] - camera.parameters[:2]))) / focal_std
    worst, what = pulled, "the focal length"
    for target, lift, unknown in zip(targets, state.lifts, state.unknowns, strict=True):
        for value, known in zip(unknown, target.unknowns, strict=True):
            if abs(value) / known.std > worst:
                worst, what = abs(value) / known.std, known.what or known.source
        if target.bow_std > 0 and np.abs(lift[3:]).max() / target.bow_std > worst:
            worst, what = float(np.abs(lift[3:]).max()) / target.bow_std, f"the flatness of {target.label}"
        if target.setting.height_std > 0 and abs(lift[0]) / target.setting.height_std > worst:
            worst, what = abs(lift[0]) / target.setting.height_std, f"the height of {target.label}"
    return worst, what


def tilt_modes(nominal: Adjusted, others: Sequence[Adjusted], weights: Array) -> Callable[[Array], list[Mode]]:
    """What a tilt that nothing tells does to points of the face: hypotheses of it, adjusted anew, against the nominal.

    weights : of the hypotheses, of sum one at most; what is missing is the nominal's own
    Returns points -> independent modes whose second moments are those of the hypotheses, foreshortening (which is of
    second order in the tilt) included.
    """

    def modes(points: Array) -> list[Mode]:
        pixels = nominal.plane.to_pixels(points)
        # Where the axes lie is no matter: only what a rigid motion leaves counts.
        fields = [_moved_onto(other.plane.to_mm(pixels), points) - points for other in others]
        stacked = np.sqrt(weights)[:, None] * np.stack(fields).reshape(len(fields), -1)
        _, sizes, shapes = np.linalg.svd(stacked, full_matrices=False)
        return [
            Mode("camera tilt", (size * shape).reshape(-1, 2), "rectangular")
            for size, shape in zip(sizes, shapes, strict=True)
            if size > 1e-6 * max(float(sizes[0]), 1e-12)
        ]

    return modes


def _moved_onto(points: Array, others: Array) -> Array:
    """(n, 2) points after the rigid motion that takes them nearest to others."""
    a, b, turn = rigid_motion(points, others)
    c, s = np.cos(turn), np.sin(turn)
    return points @ np.array([[c, s], [-s, c]]) + (a, b)


def likelihoods(others: Sequence[Adjusted], prior: Array) -> Array:
    """Weights of hypotheses by how well each fits, times their prior weights; of sum one."""
    costs = np.array([o.cost for o in others])
    weights = prior * np.exp(-0.5 * (costs - costs.min()))
    return weights / weights.sum()
