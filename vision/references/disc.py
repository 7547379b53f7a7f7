"""A disc of known diameter: a coin, a washer, a drilled hole.

Knows how its rim is found around a picked point and how the ellipse that it looks like tells the plane: in two ways,
of which nothing in the ellipse prefers one. The rim is mapped, never the ellipse's centre, which is not the disc's.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from typing import Any

import numpy as np
from numpy.typing import NDArray

from ...props.errors import Refusal, UsageError
from ...props.result import Notice
from ..camera import Camera, directions_of
from ..edges import approach, locate
from ..light import Light
from ..photo import Photo
from ..plane import Correspondences
from ..posed_plane import PosedPlane
from .adjustment import Adjusted, HeldTilt, Known, Target, Unknown, adjust, capitalised, changed, tilt_modes
from .points import TILT_BOUND_DEG
from .reference import Reference
from .setting import AssumedCamera, Setting, assumed_camera
from .shapes_seen import LEAST_PX, shapes_seen
from .sides import EDGE_BIAS_PX, EDGE_BIAS_TONE, SIDE_BIAS_PX, edge_blur, grouping
from .stated import Key, Kind, known_size
from .surveyed import (
    Sighting,
    View,
    adjusted_to_scatter,
    frontal_view,
    reference_of,
    scatter_notices,
    tilt_notice,
)

Array = NDArray[np.float64]

# Rim of a coin in circulation, most by which its diameter may be off, mm (stated assumption: wear and striking); a
# diameter by a calliper of 0.05 mm (DIN 862, from memory: permitted error up to 200 mm).
COIN_LIMIT_MM, CALLIPER_LIMIT_MM = 0.1, 0.05
# Diameters, mm. Euro: Council Regulation (EU) No 729/2014, Annex I; the 20 cent coin, which is not round, is left out.
# US: 31 U.S.C. 5112 and the Mint's specifications, from memory.
COINS: dict[str, float] = {
    "1 euro cent": 16.25,
    "2 euro cent": 18.75,
    "5 euro cent": 21.25,
    "10 euro cent": 19.75,
    "50 euro cent": 24.25,
    "1 euro": 23.25,
    "2 euro": 25.75,
    "US cent": 19.05,
    "US nickel": 21.21,
    "US dime": 17.91,
    "US quarter": 24.26,
    "US half dollar": 30.61,
    "US dollar": 26.49,
}
# How far off square people hold a camera (standard deviation; stated assumption), to weigh the two ways a disc may lie.
USUAL_TILT_STD_DEG = 15.0
# A tilt is told by an ellipse when it is this many of its standard uncertainties.
_TOLD = 3.0
# Share of the rim that must be seen.
_LEAST_RIM = 0.5
_SPACING = 3.0
# A rough outline may miss an ellipse by this part of its radius.
_ROUGH = 0.03


@dataclass(frozen=True)
class Disc:
    """A disc of known diameter in the picture.

    diameter : mm; known : how well
    near : a photo pixel on it
    tilt_deg : the most the camera may be off square either way, where that is known; else it is taken from the ellipse
    setting : how the face lies to it, and the camera
    """

    diameter: float
    known: Known
    near: tuple[float, float]
    tilt_deg: float | None = None
    name: str = ""
    setting: Setting = field(default_factory=Setting)

    def __post_init__(self) -> None:
        if not (self.diameter > 0 and 0 < self.known.std < 0.1 * self.diameter):
            raise UsageError(
                "disc-diameter",
                f"A disc of {self.diameter:g} mm, u = {self.known.std:.2g} mm, cannot be used.",
                "State its diameter and how well it is known, in mm, both above nought.",
            )
        if self.tilt_deg is not None and not 0 < self.tilt_deg < 45:
            raise UsageError(
                "tilt-bound",
                f"A tilt within {self.tilt_deg:g} degrees is no bound.",
                "State it between 0 and 45 degrees.",
            )

    @property
    def label(self) -> str:
        """What it is, in words."""
        return f"the {self.name or f'{self.diameter:g} mm disc'}"

    def sight(self, photo: Photo) -> Sighting:
        """Find its rim; raises Refusal."""
        rim = find_rim(Light.of(photo), self._rough(photo))
        camera = assumed_camera(photo, self.setting)
        targets = disc_targets(self.label, rim, self.diameter, self.known, self.setting, camera.camera)
        return Sighting("disc", targets)

    def locate(self, photo: Photo) -> Reference:
        """The Reference that the disc gives in a photo. Raises Refusal when it is not found or no ellipse."""
        seen = self.sight(photo)
        camera = assumed_camera(photo, self.setting)
        view, notices = self._view(camera, seen)
        notices = [*notices, *scatter_notices(view.found, self.label)]
        return reference_of(
            photo,
            [seen],
            view.found,
            camera,
            kind="disc",
            label=self.label.removeprefix("the "),
            extra_modes=view.further,
            upright=True,
            notices=notices,
            details={"diameter_mm": self.diameter, "diameter_std_mm": self.known.std},
        )

    def _view(self, camera: AssumedCamera, seen: Sighting) -> tuple[View, list[Notice]]:
        """The view, with what the ellipse leaves open of it."""
        try:
            ways = [adjusted_to_scatter(camera, [target]) for target in seen.targets]
        except Refusal:
            # The tilt of a disc that looks round may run away.
            ways = []
        if not ways or any(_aslant(way.plane) < _TOLD * _aslant_std(way) for way in ways):
            ray = _ray(camera.camera, seen.target)
            across = np.cross(ray, (0.0, 1.0, 0.0))
            across /= np.linalg.norm(across)
            x, y = (tuple(v.tolist()) for v in (across, np.cross(across, ray)))
            bound = self._unseen_tilt(camera, seen.target, (x, y))
            view = frontal_view(camera, [seen.target], (x, y), bound)
            return view, [tilt_notice(self.label, round(np.rad2deg(np.arcsin(bound)), 1), view, seen.target.outline)]
        tilts = np.array([_tilt(way) for way in ways])
        weights = np.exp(-0.5 * (np.rad2deg(np.arcsin(tilts)) / USUAL_TILT_STD_DEG) ** 2)
        if self.tilt_deg is not None:
            stds = np.array([_aslant_std(way) for way in ways])
            weights = weights * (tilts - 2 * stds < np.sin(np.deg2rad(self.tilt_deg)))
            if not weights.any():
                raise Refusal(
                    "disc-tilted",
                    f"{capitalised(self.label)} looks tilted by {np.rad2deg(np.arcsin(tilts.min())):.0f} "
                    f"degrees, more than the stated {self.tilt_deg:g}.",
                    "Check that it is round and lies flat on the face, or take the photo more squarely.",
                )
        weights = weights / weights.sum()
        order = np.argsort(-weights)
        best, other = ways[order[0]], ways[order[1]]
        if weights[order[1]] < 0.01:
            return View(best), []
        further = tilt_modes(best, [other], weights[order[1:]])
        sides = [_leaning(way) for way in (best, other)]
        notice = Notice(
            "disc-two-ways",
            f"A disc looks the same from two sides: {sides[0]} or {sides[1]}. The first is the likelier one; the "
            "interval holds both.",
            "Put a second reference into the picture, or take the photo square to the face.",
        )
        return View(best, further), [notice]

    def _unseen_tilt(
        self, camera: AssumedCamera, target: Target, across: tuple[tuple[float, float, float], ...]
    ) -> float:
        """Sine of the most by which the normal may lie off the line of sight unseen, or of the stated bound if less.

        across : two directions square to the line of sight and to each other
        """
        stated = float(np.sin(np.deg2rad(self.tilt_deg if self.tilt_deg is not None else 2 * TILT_BOUND_DEG)))

        def cost(sine: float) -> float:
            values = []
            for turn in np.linspace(0, 2 * np.pi, 4, endpoint=False):
                held = [HeldTilt(d, sine * part) for d, part in zip(across, (np.cos(turn), np.sin(turn)), strict=True)]
                values.append(adjust(camera.camera, [target], held).cost)
            return min(values)

        least = min(cost(share * stated) for share in (0.0, 0.15, 0.3, 0.6))
        low, high = 0.0, stated
        if cost(high) - least < _TOLD**2:
            return high
        for _ in range(4):
            middle = 0.5 * (low + high)
            low, high = (middle, high) if cost(middle) - least < _TOLD**2 else (low, middle)
        return high

    def _rough(self, photo: Photo) -> Array:
        shapes = shapes_seen(photo, self.near)
        ellipses = [e for c in shapes.contours if (e := rough_ellipse(c)) is not None]
        if not ellipses:
            frame = " What was found there is cut by the frame." if shapes.cut else ""
            raise Refusal(
                "no-disc",
                f"No disc is found around the picked point for {self.label}.{frame}",
                "Point at the disc itself; keep it whole in the frame, evenly lit, on a ground of another brightness.",
            )
        # The same rim is met at many levels, each a little off the next; the one met most often is it.
        groups: list[list[Array]] = []
        for ellipse in ellipses:
            joined = [group for group in groups if any(_alike(ellipse, member) for member in group)]
            groups = [group for group in groups if not any(group is other for other in joined)]
            groups.append([ellipse, *(member for group in joined for member in group)])
        groups.sort(key=lambda group: -len(group))
        if len(groups) > 1 and len(groups[1]) > 0.5 * len(groups[0]):
            raise Refusal(
                "several-discs",
                f"Several rims lie around the picked point for {self.label}.",
                "Point between the outer rim and whatever is printed or cut inside it.",
            )
        by_size = sorted(groups[0], key=lambda ellipse: float(ellipse[2] * ellipse[3]))
        return by_size[len(by_size) // 2]


@dataclass(frozen=True, eq=False)
class Rim:
    """Points of a disc's rim.

    points, normals : (n, 2) px, outward; scatter, grouping as of an `Edge`; blur : px
    """

    points: Array
    normals: Array
    scatter: float
    grouping: float
    blur: float


def rough_ellipse(contour: Array) -> Array | None:
    """(5,) centre x, y, semi-axes a, b and angle, rad, of the ellipse that a contour's hull follows, px, or None."""
    import cv2

    hull = cv2.convexHull(contour.astype(np.float32))
    if len(hull) < 8:
        return None
    area = float(cv2.contourArea(contour.astype(np.float32)))
    whole = float(cv2.contourArea(hull))
    (x, y), (width, depth), angle = cv2.fitEllipseDirect(hull)
    a, b = width / 2, depth / 2
    if min(a, b) < LEAST_PX / 4 or not np.isfinite([x, y, a, b]).all():
        return None
    ellipse = np.array([x, y, a, b, np.deg2rad(angle)])
    off = np.linalg.norm(_on_unit(hull.reshape(-1, 2).astype(float), ellipse), axis=1) - 1
    if abs(whole / (np.pi * a * b) - 1) > 2 * _ROUGH or float(np.sqrt(np.mean(off**2))) > _ROUGH or area < 0.8 * whole:
        return None
    return ellipse


def _on_unit(points: Array, ellipse: Array) -> Array:
    """(n, 2) points in the axes of an ellipse, over its semi-axes: its rim is the unit circle."""
    x, y, a, b, angle = ellipse
    c, s = np.cos(angle), np.sin(angle)
    return (points - (x, y)) @ np.array([[c, -s], [s, c]]) / (a, b)


def _alike(one: Array, other: Array) -> bool:
    size = float(np.sqrt(one[2] * one[3]))
    return bool(
        np.hypot(*(one[:2] - other[:2])) < 0.03 * size + 1 and abs(one[2] * one[3] / (other[2] * other[3]) - 1) < 0.06
    )


def find_rim(light: Light, ellipse: Array) -> Rim:
    """Sub-pixel points of a rim that is known roughly as an ellipse (5,). Raises Refusal when too little is seen."""
    x, y, a, b, angle = ellipse
    around = np.pi * (a + b)
    count = int(np.clip(around / _SPACING, 24, 400))
    t = np.linspace(0, 2 * np.pi, count, endpoint=False)
    c, s = np.cos(angle), np.sin(angle)
    turn = np.array([[c, s], [-s, c]])
    points = (np.column_stack([np.cos(t), np.sin(t)]) * (a, b)) @ turn + (x, y)
    normals = (np.column_stack([np.cos(t), np.sin(t)]) / (a, b)) @ turn
    normals /= np.linalg.norm(normals, axis=1, keepdims=True)
    reach = float(np.clip(0.04 * min(a, b), 3.0, 15.0))
    for limit in (reach, 3.0):
        shift, found = approach(light, points, normals, limit, 5.0)
        smooth = _smooth_round(t, shift, found, 1.0)
        if smooth is None:
            raise _rim_lost()
        points = points + smooth[0][:, None] * normals
    blur = edge_blur(light, points, normals)
    edge = locate(light, points, normals, blur)
    along = np.sum((edge.points - points) * normals, axis=1)
    step = edge.outer - edge.inner
    good = edge.located
    if good.sum() < 12:
        raise _rim_lost()
    typical = float(np.median(step[good]))
    good = good & (step * np.sign(typical) > 0.3 * abs(typical))
    smooth = _smooth_round(t, along, good, 0.1)
    if smooth is None:
        raise _rim_lost()
    curve, near = smooth
    residual = (along - curve)[near]
    scatter = float(np.sqrt(np.sum(residual**2) / max(1, len(residual) - 7)))
    return Rim(edge.points[near], normals[near], max(scatter, 0.005), grouping(residual), blur)


def _rim_lost() -> Refusal:
    return Refusal(
        "reference-edge-lost",
        "The rim of the disc cannot be located over enough of its length.",
        "Light it evenly and without glare, on a ground of another brightness, and leave most of the rim uncovered.",
    )


def _smooth_round(
    t: Array, shift: Array, good: NDArray[np.bool_], floor: float
) -> tuple[Array, NDArray[np.bool_]] | None:
    """The smooth closed curve (to the third harmonic) that most of the shifts follow, and which ones do."""
    design = np.column_stack([np.ones_like(t)] + [f(k * t) for k in (1, 2, 3) for f in (np.cos, np.sin)])
    near = good.copy()
    curve = np.full(len(t), np.median(shift[good]) if good.any() else 0.0)
    for _ in range(8):
        residual = shift - curve
        if near.sum() < 12:
            return None
        spread = 1.4826 * float(np.median(np.abs(residual[near])))
        near = good & (np.abs(residual) < max(floor, 3.5 * spread))
        if near.sum() < max(12, _LEAST_RIM * len(t)):
            return None
        curve = design @ np.linalg.lstsq(design[near], shift[near], rcond=None)[0]
    return curve, near


def disc_targets(
    label: str, rim: Rim, diameter: float, known: Known, setting: Setting, camera: Camera
) -> tuple[Target, ...]:
    """A disc's rim as something to adjust, once for each of the two ways it can lie.

    The origin is its centre, y up in the picture.
    """
    count = len(rim.points)
    radius = 0.5 * diameter
    facing = [np.maximum(rim.normals @ np.array(side), 0.0) ** 2 for side in ((1, 0), (-1, 0), (0, 1), (0, -1))]
    shift = np.column_stack([np.zeros(count), np.ones(count), *facing])

    def misses(points: Array, unknowns: Array) -> tuple[Array, Array, Array]:
        length = np.maximum(np.linalg.norm(points, axis=1), 1e-9)
        by = np.zeros((count, 1, len(unknowns)))
        by[:, 0, 0] = -0.5
        return (length - radius - 0.5 * unknowns[0])[:, None], (points / length[:, None])[:, None, :], by

    unknowns = (
        Unknown("reference size", known.std, known.shape, f"the diameter of {label}"),
        Unknown(
            "reference edges (common)", EDGE_BIAS_PX + EDGE_BIAS_TONE * rim.blur, "rectangular", f"the rim of {label}"
        ),
        *(Unknown("reference edges (by side)", SIDE_BIAS_PX, "rectangular", f"the rim of {label}") for _ in range(4)),
    )
    t = np.linspace(0, 2 * np.pi, 32, endpoint=False)
    outline = radius * np.column_stack([np.cos(t), np.sin(t)])
    quarters = radius * np.array([[-1.0, 0.0], [0.0, -1.0], [1.0, 0.0], [0.0, 1.0]])
    targets = []
    for plane in disc_poses(rim.points, radius, camera):
        targets.append(
            Target(
                label,
                rim.points,
                np.full(count, rim.scatter * np.sqrt(rim.grouping)),
                misses,
                Correspondences(quarters, plane.to_pixels(quarters)),
                outline,
                setting,
                unknowns,
                shift,
                turns=True,
            )
        )
    return tuple(targets)


def disc_poses(points: Array, radius: float, camera: Camera) -> list[PosedPlane]:
    """The two planes in which a circle of `radius` mm, centred at the origin, looks like an ellipse through points.

    points : (n, 2) px on its rim
    The rim's cone of rays, in its own axes with eigenvalues l1 >= l2 > 0 > l3, is cut in circles by the planes whose
    normal has the components sqrt((l1 - l2) / (l1 - l3)) and sqrt((l2 - l3) / (l1 - l3)) along the first and third;
    the centre of the circle lies along the pole of the normal.
    """
    rays = directions_of(camera.parameters, points)
    middle, scale = rays.mean(axis=0), float(rays.std())
    x, y = ((rays - middle) / scale).T
    design = np.column_stack([x * x, x * y, y * y, x, y, np.ones_like(x)])
    a, b, c, d, e, f = np.linalg.svd(design, full_matrices=False)[2][-1]
    conic = np.array([[a, b / 2, d / 2], [b / 2, c, e / 2], [d / 2, e / 2, f]])
    back = np.array([[1, 0, -middle[0]], [0, 1, -middle[1]], [0, 0, scale]]) / scale
    cone = back.T @ conic @ back
    values, axes = np.linalg.eigh(cone)
    if np.sum(values > 0) == 1:
        values, axes = np.linalg.eigh(-cone)
    if np.sum(values > 0) != 2:
        raise Refusal("no-disc", "The rim is no ellipse.", "Point at a round disc that lies flat.")
    l3, l2, l1 = values
    third, _, first = axes.T
    distance = l2 * radius / np.sqrt(-l1 * l3)
    across, along = np.sqrt(max(l1 - l2, 0.0) / (l1 - l3)), np.sqrt((l2 - l3) / (l1 - l3))
    planes = []
    for sign in (1.0, -1.0):
        normal = sign * across * first + along * third
        centre = distance * (l3 / l2 * sign * across * first + l1 / l2 * along * third)
        if centre[2] < 0:
            centre = -centre
        # Towards the camera.
        normal = normal if normal @ centre < 0 else -normal
        upward = np.array([0.0, -1.0, 0.0])
        up = upward - (upward @ normal) * normal
        up /= np.linalg.norm(up)
        rotation = np.column_stack([np.cross(up, normal), up, normal])
        size = len(camera.parameters) + 6
        planes.append(PosedPlane(camera, rotation, centre, np.zeros((size, size)), np.zeros(2), 0.0))
    return planes


def _tilt(found: Adjusted) -> float:
    """Sine of the tilt."""
    return float(np.linalg.norm(found.plane.rotation[:2, 2]))


def _ray(camera: Camera, target: Target) -> Array:
    """(3,) unit vector from the lens towards the middle of the disc."""
    ray = np.append(directions_of(camera.parameters, target.start.pixels).mean(axis=0), 1.0)
    return ray / np.linalg.norm(ray)


def _aslant(plane: PosedPlane) -> float:
    """Sine of the angle between the normal and the line of sight to the disc: all that an ellipse tells."""
    centre = plane.translation / np.linalg.norm(plane.translation)
    return float(np.linalg.norm(np.cross(plane.rotation[:, 2], centre)))


def _aslant_std(found: Adjusted) -> float:
    """Standard uncertainty of that sine; the focal length moves the line of sight too, but hides no ellipse."""
    moved = [
        _aslant(changed(found.plane, column)) - _aslant(changed(found.plane, -column))
        for column, (source, _) in zip(found.factor.T, found.causes, strict=True)
        if source != "focal length"
    ]
    return 0.5 * float(np.linalg.norm(moved))


def _leaning(found: Adjusted) -> str:
    """Which side of the disc is further from the camera, in words, and by how many degrees."""
    x, y = found.plane.rotation[:2, 2]
    # The side towards which the normal points in the picture is the further one.
    side = ("right" if x > 0 else "left") if abs(x) > abs(y) else ("lower" if y > 0 else "upper")
    return f"its {side} side {np.rad2deg(np.arcsin(min(1.0, _tilt(found)))):.0f} degrees further away"


def coin(name: str, near: tuple[float, float], tilt_deg: float | None = None, setting: Setting | None = None) -> Disc:
    """A coin as a disc. Raises UsageError for a name that is none of COINS; hyphens count as spaces."""
    by_lower = {known.lower(): (known, diameter) for known, diameter in COINS.items()}
    wanted = name.lower().replace("-", " ")
    if wanted not in by_lower:
        raise UsageError(
            "coin-name",
            f"'{name}' is no coin that is known here.",
            f"Name one of {', '.join(known.replace(' ', '-') for known in COINS)}.",
        )
    known, diameter = by_lower[wanted]
    return Disc(diameter, Known.within(COIN_LIMIT_MM), near, tilt_deg, f"{known} coin", setting or Setting())


def _stated_disc(values: Mapping[str, Any], setting: Setting) -> Disc:
    known = known_size(values) or Known.within(CALLIPER_LIMIT_MM)
    return Disc(values["diameter"], known, values["at"], values.get("tilt"), setting=setting)


def _stated_coin(values: Mapping[str, Any], setting: Setting) -> Disc:
    return coin(values["name"], values["at"], values.get("tilt"), setting)


_AT = Key("at", "point", "a pixel on it, between its rim and whatever is printed or cut inside", required=True)
_TILT = Key("tilt", "degrees", "most that the camera is off square, either way; else it is taken from the ellipse")

KINDS = (
    Kind(
        "disc",
        "a disc of known diameter: a washer, a plate, a drilled hole; its rim is fitted",
        (
            Key("diameter", "length", "of its rim", required=True),
            _AT,
            Key("u", "length", "standard uncertainty of the diameter"),
            Key("tolerance", "length", "instead of u: the most that the diameter may be off"),
            _TILT,
        ),
        f"The diameter: by a calliper, {CALLIPER_LIMIT_MM:g} mm at most (DIN 862, from memory).",
        "disc diameter=24 at=1200,800",
        _stated_disc,
    ),
    Kind(
        "coin",
        "a coin whose diameter the law fixes",
        (Key("name", "word", ", ".join(name.replace(" ", "-") for name in COINS), required=True), _AT, _TILT),
        "Diameters: Council Regulation (EU) No 729/2014, Annex I; 31 U.S.C. 5112. Wear and striking: "
        f"{COIN_LIMIT_MM:g} mm at most (assumed).",
        "coin name=2-euro at=1200,800",
        _stated_coin,
    ),
)

__all__ = ["COINS", "KINDS", "Disc", "coin"]
