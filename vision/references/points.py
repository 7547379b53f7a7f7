"""Points that a person picks in the picture and knows the true positions of, or the distance of two.

Knows how many points tell what: two the scale of a frontal picture, four the plane, more also whether one is wrong.
Looks at no pixel: the picks are as good as the person's eye.
"""

from __future__ import annotations

import csv
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from ...props.errors import FileError, Refusal, UsageError
from ...props.result import Notice
from ..photo import Photo
from ..plane import Correspondences
from .adjustment import Adjusted, Target, Unknown, adjust, capitalised
from .reference import Reference
from .setting import AssumedCamera, Setting
from .stated import TILT, Key, Kind
from .surveyed import Sighting, View, camera_for, frontal_view, reference_of, tilt_notice

Array = NDArray[np.float64]

# A careful pick on a magnified picture, px; a distance or position taken with a steel rule, mm (stated assumptions).
PICK_STD_PX, RULE_STD_MM = 1.0, 0.3
# A photo taken square by eye (stated assumption).
TILT_BOUND_DEG = 5.0
# Picks that miss by so much happen once in a thousand times by chance.
_CHANCE = 0.001
# Points this near to one line, as a share of their spread along it, do not tell a plane.
_COLLINEAR = 0.05


@dataclass(frozen=True)
class Points:
    """Picked points of known position.

    pixels : two or more photo pixels
    positions : their true positions, mm, x to the right and y upwards, in the same order
    position_std : mm, per coordinate
    pick_std : px, per coordinate
    tilt_deg : with two or three points, the most the camera may be off square either way
    setting : how the face lies to them, and the camera
    """

    pixels: Sequence[tuple[float, float]]
    positions: Sequence[tuple[float, float]]
    position_std: float = RULE_STD_MM
    pick_std: float = PICK_STD_PX
    tilt_deg: float = TILT_BOUND_DEG
    setting: Setting = field(default_factory=lambda: Setting(role="on face"))

    def __post_init__(self) -> None:
        if len(self.pixels) != len(self.positions) or len(self.pixels) < 2:
            raise UsageError(
                "points-count",
                f"{len(self.pixels)} picked points and {len(self.positions)} positions do not belong together.",
                "Give two points or more, each with its position in mm.",
            )
        if not (self.position_std >= 0 and self.pick_std > 0 and 0 < self.tilt_deg < 45):
            raise UsageError(
                "points-uncertainty",
                "The uncertainty of points must be positive and the tilt's bound below 45 degrees.",
                "State the picks' uncertainty in px, the positions' in mm, and the tilt's bound in degrees.",
            )
        for places, what in ((self.pixels, "picked"), (self.positions, "stated")):
            apart = np.linalg.norm(np.diff(np.array(places, float), axis=0), axis=1)
            if not np.all(np.isfinite(np.array(places, float))) or np.any(apart == 0):
                raise UsageError(
                    "points-same",
                    f"Two neighbouring {what} points are the same, or one is no number.",
                    "Give each point once.",
                )

    @property
    def label(self) -> str:
        """What they are, in words."""
        return "the two picked points" if len(self.pixels) == 2 else f"the {len(self.pixels)} picked points"

    def sight(self, photo: Photo) -> Sighting:
        """The points as something to adjust. Raises UsageError where they lie outside the picture or on one line."""
        pixels, positions = np.array(self.pixels, float), np.array(self.positions, float)
        inside = (pixels >= -0.5) & (pixels <= np.array([photo.width, photo.height]) - 0.5)
        if not inside.all():
            raise UsageError(
                "point-outside",
                f"A picked point is not in the picture of {photo.width} x {photo.height} pixels.",
                "Give points in pixels of the upright picture, from its upper left corner.",
            )
        count = len(pixels)
        if count > 2:
            spread = np.linalg.svd(positions - positions.mean(axis=0), compute_uv=False)
            if spread[1] < _COLLINEAR * spread[0]:
                raise UsageError(
                    "points-in-line",
                    "The stated positions lie next to a line and do not tell how the plane lies.",
                    "Add a point well off the line, or give only the two that are furthest apart.",
                )
        target = _target(self.label, pixels, positions, self.position_std, self.pick_std, self.setting)
        frontal = ((1.0, 0.0, 0.0), (0.0, 1.0, 0.0)) if count < 4 else ()
        notices = ()
        if count < 4:
            notices = (
                Notice(
                    "points-unchecked",
                    f"Nothing checks {self.label}: a wrong pick or a wrong length goes unseen into every figure.",
                    "Pick five points or more of known position, or put a second reference into the picture.",
                ),
            )
        bound = float(np.sin(np.deg2rad(self.tilt_deg)))
        return Sighting("points", (target,), frontal=frontal, tilt_bound=bound, notices=notices)

    def locate(self, photo: Photo) -> Reference:
        """The Reference that the points give. Raises Refusal when they contradict each other."""
        seen = self.sight(photo)
        start = seen.target.start if len(self.pixels) >= 4 else None
        camera = camera_for(photo, self.setting, start)
        notices: list[Notice] = []
        if seen.frontal:
            view = frontal_view(camera, [seen.target], seen.frontal, seen.tilt_bound)
            notices.append(tilt_notice(self.label, self.tilt_deg, view, seen.target.outline))
            if len(self.pixels) == 3:
                _refuse_scatter(view.found, self.label, 2)
        else:
            view = View(self._checked(camera, seen))
        return reference_of(
            photo,
            [seen],
            view.found,
            camera,
            kind="points",
            label=self.label.removeprefix("the "),
            extra_modes=view.further,
            upright=len(self.pixels) == 2,
            notices=notices,
            details={"points": len(self.pixels), "pick_std_px": self.pick_std, "position_std_mm": self.position_std},
        )

    def _checked(self, camera: AssumedCamera, seen: Sighting) -> Adjusted:
        """The adjustment of four points or more; Refusal that names the one that does not belong."""
        count = len(self.pixels)
        try:
            found = adjust(camera.camera, [seen.target])
        except Refusal:
            # Where a wrong one spoils the whole, leaving it out still tells which it is.
            self._name_wrong(camera, seen, np.inf)
            raise
        if _chance(found.cost, 2 * count - 6) < _CHANCE:
            self._name_wrong(camera, seen, found.cost)
            _refuse_scatter(found, self.label, 2 * count - 6)
        return found

    def _name_wrong(self, camera: AssumedCamera, seen: Sighting, cost: float) -> None:
        count = len(self.pixels)
        if count < 5:
            return
        costs = []
        for left_out in range(count):
            keep = [i for i in range(count) if i != left_out]
            pixels, positions = np.array(self.pixels, float)[keep], np.array(self.positions, float)[keep]
            rest = _target(self.label, pixels, positions, self.position_std, self.pick_std, self.setting)
            try:
                costs.append(adjust(camera.camera, [rest]).cost)
            except Refusal:
                costs.append(np.inf)
        order = np.argsort(costs)
        best, second = costs[order[0]], costs[order[1]]
        clear = _chance(best, 2 * count - 8) >= _CHANCE and second - best > 9.0
        if clear:
            x, y = self.pixels[order[0]]
            raise Refusal(
                "point-wrong",
                f"Point {order[0] + 1}, picked at ({x:.0f}, {y:.0f}), does not fit the others, which fit each other.",
                "Look at that pick and at its stated position, and correct or leave it out.",
            )


def distance(
    pixels: Sequence[tuple[float, float]],
    length_mm: float,
    *,
    length_std: float = RULE_STD_MM,
    pick_std: float = PICK_STD_PX,
    tilt_deg: float = TILT_BOUND_DEG,
    setting: Setting | None = None,
) -> Points:
    """Two picked points and their distance, mm: the scale of a picture taken square to the face.

    Raises UsageError for a length that is none.
    """
    if not length_mm > 0:
        raise UsageError("points-length", f"A distance of {length_mm:g} mm is none.", "State it in mm, above nought.")
    return Points(
        tuple(pixels),
        ((0.0, 0.0), (length_mm, 0.0)),
        length_std / np.sqrt(2),
        pick_std,
        tilt_deg,
        setting or Setting(role="on face"),
    )


def _target(
    label: str, pixels: Array, positions: Array, position_std: float, pick_std: float, setting: Setting
) -> Target:
    count = len(pixels)
    start, px_per_mm = _start(pixels, positions)
    # An error of a position looks like one of its pick; of two points it is the length's, and has a line of its own.
    std = np.full(count, pick_std if count == 2 else float(np.hypot(pick_std, position_std * px_per_mm)))
    length = float(np.linalg.norm(positions[-1] - positions[0]))

    def misses(points: Array, unknowns: Array) -> tuple[Array, Array, Array]:
        stretched = positions
        by = np.zeros((count, 2, len(unknowns)))
        if count == 2:
            stretched = positions[0] + (positions - positions[0]) * (1 + unknowns[0] / length)
            by[:, :, 0] = -(positions - positions[0]) / length
        return points - stretched, np.broadcast_to(np.eye(2), (count, 2, 2)), by

    unknowns = ()
    if count == 2 and position_std > 0:
        unknowns = (Unknown("reference size", position_std * np.sqrt(2), "normal", "the stated distance"),)
    elif count == 2:
        unknowns = (Unknown("reference size", 1e-6 * length, "normal", "the stated distance"),)
    half = 0.5 * np.ptp(positions, axis=0).max()
    middle = 0.5 * (positions.min(axis=0) + positions.max(axis=0))
    outline = middle + half * np.array([[-1.0, -1.0], [1.0, -1.0], [1.0, 1.0], [-1.0, 1.0]])
    return Target(label, pixels, std, misses, start, outline, setting, unknowns, noise="picked points")


def _start(pixels: Array, positions: Array) -> tuple[Correspondences, float]:
    """Four or more points to start from, and px to a mm.

    Fewer are made up to four by the similarity that fits them, seen from the front.
    """
    flipped = pixels * (1.0, -1.0)
    # A similarity as a complex factor.
    z, w = positions @ (1, 1j), flipped @ (1, 1j)
    factor = np.vdot(z - z.mean(), w - w.mean()) / np.vdot(z - z.mean(), z - z.mean())
    scale = float(np.abs(factor))
    if len(pixels) >= 4:
        return Correspondences(positions, pixels), max(scale, 1e-9)
    half = 0.5 * np.ptp(positions, axis=0).max()
    square = positions.mean(axis=0) + half * np.array([[-1.0, -1.0], [1.0, -1.0], [1.0, 1.0], [-1.0, 1.0]])
    seen = w.mean() + factor * (square @ (1, 1j) - z.mean())
    return Correspondences(square, np.column_stack([seen.real, -seen.imag])), scale


def _chance(cost: float, degrees: int) -> float:
    """Probability of at least this cost from picks as good as stated."""
    from scipy.special import chdtrc

    return float(chdtrc(degrees, cost)) if np.isfinite(cost) else 0.0


def _refuse_scatter(found: Adjusted, label: str, degrees: int) -> None:
    if _chance(found.cost, degrees) < _CHANCE:
        raise Refusal(
            "points-contradict",
            f"{capitalised(label)} miss their stated positions by {found.residual_px:.1f} px, far more than a pick is "
            "off: one is wrong, or they do not lie in one plane.",
            "Check every pick and its position; five points or more tell which one is wrong.",
        )


def read_points(path: Path) -> tuple[list[tuple[float, float]], list[tuple[float, float]]]:
    """Picks, px, and positions, mm, from a table with four columns: x and y of the pick, x and y of the position.

    Lines that begin with # and a first line of headings are passed over.
    Raises FileError for a file that cannot be read, UsageError for one of another form.
    """
    try:
        text = path.read_text(encoding="utf-8-sig")
    except (OSError, UnicodeDecodeError) as error:
        raise FileError(
            "points-file", f"The points in {path} cannot be read: {error}.", "Name a text file with four columns."
        ) from None
    lines = [line for line in text.splitlines() if line.strip() and not line.lstrip().startswith("#")]
    separator = next((s for s in (";", "\t", ",") if lines and s in lines[0]), ",")
    rows: list[tuple[float, float, float, float]] = []
    for number, cells in enumerate(csv.reader(lines, delimiter=separator)):
        try:
            a, b, c, d = (float(cell.replace(",", ".")) for cell in cells)
        except ValueError:
            if number == 0:
                continue
            raise UsageError(
                "points-file",
                f"Row {number + 1} of {path.name} does not hold four numbers.",
                "Write a row for each point: x and y of the pick in pixels, x and y of its position in mm.",
            ) from None
        rows.append((a, b, c, d))
    return [row[:2] for row in rows], [row[2:] for row in rows]


def _stated_points(values: Mapping[str, Any], setting: Setting) -> Points:
    picks = [point[:2] for point in values.get("point", ())]
    positions = [point[2:] for point in values.get("point", ())]
    if "file" in values:
        more, where = read_points(Path(values["file"]))
        picks, positions = [*picks, *more], [*positions, *where]
    return Points(
        tuple(picks),
        tuple(positions),
        values.get("u", RULE_STD_MM),
        values.get("pick_u", PICK_STD_PX),
        values.get("tilt", TILT_BOUND_DEG),
        setting,
    )


def _stated_distance(values: Mapping[str, Any], setting: Setting) -> Points:
    return distance(
        (values["from"], values["to"]),
        values["length"],
        length_std=values.get("u", RULE_STD_MM),
        pick_std=values.get("pick_u", PICK_STD_PX),
        tilt_deg=values.get("tilt", TILT_BOUND_DEG),
        setting=setting,
    )


_PICK_U = Key("pick-u", "pixels", f"standard uncertainty of a pick, per coordinate; default {PICK_STD_PX:g}")

KINDS = (
    Kind(
        "distance",
        "two picked points and their distance, in a photo taken square to the face",
        (
            Key("from", "point", "one point", required=True),
            Key("to", "point", "the other point", required=True),
            Key("length", "length", "their distance", required=True),
            Key("u", "length", f"standard uncertainty of the distance; default {RULE_STD_MM:g}"),
            _PICK_U,
            TILT,
        ),
        f"The distance: {RULE_STD_MM:g} mm, by a steel rule; a pick: {PICK_STD_PX:g} px; square within "
        f"{TILT_BOUND_DEG:g} degrees (all assumed).",
        "distance from=310,420 to=1890,455 length=500 u=0.5",
        _stated_distance,
        role="on face",
    ),
    Kind(
        "points",
        "picked points of known position; four tell the plane, more tell which one is wrong",
        (
            Key("file", "word", "a table with a row a point: x and y of the pick, px; x and y of the position, mm"),
            Key("point", "four numbers", "instead: a pick and its position; repeated", repeated=True),
            Key("u", "length", f"standard uncertainty of a coordinate; default {RULE_STD_MM:g}"),
            _PICK_U,
            Key("tilt", TILT.form, f"with two or three points: {TILT.about}"),
        ),
        f"A coordinate: {RULE_STD_MM:g} mm, by a steel rule; a pick: {PICK_STD_PX:g} px (both assumed).",
        "points file=points.csv u=0.2",
        _stated_points,
        role="on face",
    ),
)

__all__ = ["KINDS", "PICK_STD_PX", "TILT_BOUND_DEG", "Points", "distance", "read_points"]
