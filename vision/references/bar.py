"""A graduated bar: a steel rule, a tape, a survey rod in two tones.

Knows how to count and place the graduations between two picked ones, and what a class of rule is allowed to be off.
It shows the scale and how it changes along the bar; of the tilt across it a bar knows nothing.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass, field
from math import ceil
from typing import Any, Literal

import numpy as np
from numpy.typing import NDArray

from ...props.errors import Refusal, UsageError
from ...props.result import Notice
from ..edges import normal_profiles
from ..light import Light
from ..photo import Photo
from ..plane import Correspondences
from .adjustment import Target, Unknown
from .comb import Comb, Marks, find_comb
from .points import PICK_STD_PX, TILT_BOUND_DEG
from .reference import Reference
from .setting import Setting, assumed_camera
from .sides import EDGE_BIAS_PX
from .stated import TILT, Key, Kind
from .surveyed import Sighting, frontal_view, reference_of, refuse_strained, scatter_notices, tilt_notice

Array = NDArray[np.float64]
RuleClass = Literal["I", "II", "III"]

# Maximum permissible error between any two marks, mm: a + b L, L in metres rounded up to a whole one
# (OIML R 35-1; Directive 2014/32/EU, Annex X).
RULE_CLASSES: dict[RuleClass, tuple[float, float]] = {"I": (0.1, 0.1), "II": (0.3, 0.2), "III": (0.6, 0.4)}
# A pick further than this part of a division from a graduation was not meant for it.
_OFF_MARK = 0.35


@dataclass(frozen=True)
class Bar:
    """A graduated bar in the picture.

    ends : two photo pixels, each on a graduation, where the lines reach the bar's graduated edge (for blocks: along the
        middle of the bar)
    division : mm from one graduation to the next of those that are seen
    length : mm between the picked graduations by their numbers; None counts the divisions and checks nothing
    marks : "lines", or "blocks" of two tones in turn
    accuracy : class of the rule
    width : of the bar, mm; that much beside the graduated edge is no face
    pick_std : px
    tilt_deg : the most the camera may be off square across the bar, either way
    """

    ends: tuple[tuple[float, float], tuple[float, float]]
    division: float
    length: float | None = None
    marks: Marks = "lines"
    accuracy: RuleClass = "II"
    width: float = 30.0
    pick_std: float = PICK_STD_PX
    tilt_deg: float = TILT_BOUND_DEG
    setting: Setting = field(default_factory=Setting)

    def __post_init__(self) -> None:
        if not (self.division > 0 and (self.length is None or self.length >= 3 * self.division) and self.width > 0):
            raise UsageError(
                "bar-division",
                f"A division of {self.division:g} mm over {self.length or 0:g} mm cannot be used.",
                "State the division in mm, and pick ends at least three divisions apart.",
            )
        if self.accuracy not in RULE_CLASSES:
            raise UsageError(
                "bar-class", f"'{self.accuracy}' is no class of rule.", f"State one of {', '.join(RULE_CLASSES)}."
            )
        if not (0 < self.tilt_deg < 45 and self.pick_std > 0):
            raise UsageError(
                "tilt-bound",
                f"A tilt within {self.tilt_deg:g} degrees is no bound.",
                "State it between 0 and 45 degrees.",
            )
        if self.length is not None and abs(self.length / self.division - round(self.length / self.division)) > 1e-6:
            raise UsageError(
                "bar-length",
                f"{self.length:g} mm is no whole number of divisions of {self.division:g} mm.",
                "State the difference of the readings at the two picked graduations.",
            )

    @property
    def label(self) -> str:
        """What it is, in words."""
        return "the rule" if self.marks == "lines" else "the rod"

    def sight(self, photo: Photo) -> Sighting:
        """Find its graduations; raises Refusal when they contradict what is stated."""
        light = Light.of(photo)
        start, end = np.array(self.ends, float)
        self._refuse_outside(photo, start, end)
        expected = None if self.length is None else round(self.length / self.division)
        comb = find_comb(light, start, end, self.marks, expected)
        self._check(comb)
        target = self._target(light, start, end, comb)
        across = (end - start) / np.linalg.norm(end - start)
        notices: tuple[Notice, ...] = ()
        if self.length is None:
            notices = (
                Notice(
                    "bar-unchecked",
                    f"{comb.count} divisions were counted between the picked ends, {comb.count * self.division:g} mm; "
                    "nothing checks the division.",
                    "State the difference of the readings at both ends.",
                ),
            )
        return Sighting(
            "bar",
            (target,),
            frontal=((float(-across[1]), float(across[0]), 0.0),),
            tilt_bound=float(np.sin(np.deg2rad(self.tilt_deg))),
            notices=notices,
        )

    def locate(self, photo: Photo) -> Reference:
        """The Reference that the bar gives. Raises Refusal when picks, count and division do not belong together."""
        seen = self.sight(photo)
        camera = assumed_camera(photo, self.setting)
        view = frontal_view(camera, [seen.target], seen.frontal, seen.tilt_bound)
        refuse_strained(view.found, self.label, "Check the picked ends, the division and the length.")
        notices = [
            tilt_notice(self.label, self.tilt_deg, view, _square_about(seen.target.outline)),
            *scatter_notices(view.found, self.label),
        ]
        return reference_of(
            photo,
            [seen],
            view.found,
            camera,
            kind="bar",
            label=f"{self.division:g} mm divisions",
            extra_modes=view.further,
            upright=True,
            notices=notices,
            details={
                "division_mm": self.division,
                "graduations": len(seen.target.pixels) - 2,
                "counted_mm": float(np.ptp(seen.target.start.target[:, 0])),
                "limit_mm": self._limit(float(np.ptp(seen.target.start.target[:, 0]))),
            },
        )

    def _limit(self, length: float) -> float:
        a, b = RULE_CLASSES[self.accuracy]
        return a + b * ceil(length / 1000)

    def _refuse_outside(self, photo: Photo, start: Array, end: Array) -> None:
        for x, y in (start, end):
            if not (0 <= x <= photo.width - 1 and 0 <= y <= photo.height - 1):
                raise UsageError(
                    "point-outside",
                    f"The point ({x:g}, {y:g}) is not in the picture of {photo.width} x {photo.height} pixels.",
                    "Give points in pixels of the upright picture, from its upper left corner.",
                )
        if np.linalg.norm(end - start) < 20:
            raise UsageError("bar-short", "The two ends of the bar are the same.", "Pick two graduations far apart.")

    def _check(self, comb: Comb) -> None:
        limit = max(_OFF_MARK, 3.5 * self.pick_std / comb.pitch_px)
        for number, which in zip(comb.ends, ("first", "second"), strict=True):
            if abs(number - round(number)) > _OFF_MARK and limit < 0.5:
                raise Refusal(
                    "pick-off-mark",
                    f"The {which} picked end lies {abs(number - round(number)):.2f} of a division beside the nearest "
                    "graduation.",
                    "Pick the graduation itself.",
                )
        if self.length is not None and comb.count != round(self.length / self.division):
            raise Refusal(
                "graduations-count",
                f"{comb.count} divisions are counted between the picked ends; {self.length:g} mm would be "
                f"{round(self.length / self.division)} of {self.division:g} mm.",
                "Check both picks, the readings there and the division, and whether the finest graduations are seen.",
            )

    def _target(self, light: Light, start: Array, end: Array, comb: Comb) -> Target:
        direction = (end - start) / np.linalg.norm(end - start)
        graduations = start + comb.distances[:, None] * direction
        pixels = np.concatenate([graduations, [start, end]])
        count, size = len(graduations), len(pixels)
        true = comb.numbers * self.division
        length = comb.count * self.division
        along = np.arange(size) < count

        def misses(points: Array, unknowns: Array) -> tuple[Array, Array, Array]:
            # Graduations tell the place along the bar, the picked ends its direction.
            stretched = np.append(true * (1 + unknowns[0] / length), [0.0, 0.0])
            miss = np.where(along, points[:, 0] - stretched, points[:, 1])
            slope = np.where(along[:, None], [1.0, 0.0], [0.0, 1.0])
            by = np.zeros((size, 1, len(unknowns)))
            by[:count, 0, 0] = -true / length
            return miss[:, None], slope[:, None, :], by

        unknowns = [Unknown("reference size", self._limit(length) / np.sqrt(3), "rectangular", "the length of the bar")]
        shift = np.zeros((size, 1))
        if self.marks == "blocks":
            unknowns.append(Unknown("reference edges (common)", 2 * EDGE_BIAS_PX, "rectangular", "the bar's edges"))
            shift = np.column_stack([shift, np.append(comb.parity, [0.0, 0.0])])
        std = np.append(np.full(count, comb.scatter), [self.pick_std, self.pick_std])
        first, last = np.interp([round(comb.ends[0]), round(comb.ends[1])], comb.numbers, comb.distances)
        corners, seen = _square_start(start + first * direction, start + last * direction, length)
        below, above = self._body(light, start, end, comb)
        outline = np.array([[0.0, -below], [length, -below], [length, above], [0.0, above]])
        return Target(
            self.label,
            pixels,
            std,
            misses,
            Correspondences(corners, seen),
            outline,
            self.setting,
            tuple(unknowns),
            shift,
            noise="graduations",
        )

    def _body(self, light: Light, start: Array, end: Array, comb: Comb) -> tuple[float, float]:
        """How far the bar reaches below and above the line of the picks, mm (above: left of it, as seen)."""
        if self.marks == "blocks":
            return 0.5 * self.width, 0.5 * self.width
        direction = (end - start) / np.linalg.norm(end - start)
        # Pixels have y down: turned so, the second side of the line is the left as seen.
        left = np.array([direction[1], -direction[0]])
        t = np.linspace(comb.distances.min(), comb.distances.max(), 2000)
        points = start + t[:, None] * direction
        reach = np.arange(4.0, 4.0 + max(3.0, comb.pitch_px), 1.0)
        strength = []
        for side in (-left, left):
            profile = normal_profiles(light, points, np.broadcast_to(side, points.shape), reach)
            strength.append(float(np.median(np.std(profile - profile.mean(axis=0), axis=0))))
        return (self.width, 0.0) if strength[0] > strength[1] else (0.0, self.width)


def _square_start(first: Array, last: Array, length: float) -> tuple[Array, Array]:
    """Four corners of a square on the bar, mm, and where they would be seen from the front, px."""
    along = last - first
    # Left as seen, with y down.
    left = np.array([along[1], -along[0]])
    corners = length * np.array([[0.0, 0.0], [1.0, 0.0], [1.0, 1.0], [0.0, 1.0]])
    return corners, np.array([first, last, last + left, first + left])


def _square_about(outline: Array) -> Array:
    """The corners of a square as large as an outline is long."""
    middle = 0.5 * (outline.min(axis=0) + outline.max(axis=0))
    half = 0.5 * float(np.ptp(outline, axis=0).max())
    return middle + half * np.array([[-1.0, -1.0], [1.0, -1.0], [1.0, 1.0], [-1.0, 1.0]])


def _stated(marks: Marks, accuracy: RuleClass) -> Callable[[Mapping[str, Any], Setting], Bar]:
    def make(values: Mapping[str, Any], setting: Setting) -> Bar:
        return Bar(
            (values["from"], values["to"]),
            values["division"],
            values.get("length"),
            marks,
            values.get("class", accuracy),
            values.get("width", Bar.width),
            values.get("pick_u", PICK_STD_PX),
            values.get("tilt", TILT_BOUND_DEG),
            setting,
        )

    return make


def _keys(division: str, end: str, accuracy: RuleClass) -> tuple[Key, ...]:
    return (
        Key("from", "point", f"a pixel on one {end}", required=True),
        Key("to", "point", f"a pixel on another {end}, far from the first", required=True),
        Key("division", "length", division, required=True),
        Key("length", "length", "from one picked end to the other by the readings there; it checks the count"),
        Key("class", "word", f"accuracy class; default {accuracy}", words=tuple(RULE_CLASSES)),
        Key("width", "length", f"of the body, which is no face; default {Bar.width:g}"),
        Key("pick-u", "pixels", f"standard uncertainty of a pick; default {PICK_STD_PX:g}"),
        TILT,
    )


_LIMITS = ", ".join(f"{name}: {a:g} mm + {b:g} mm a started metre" for name, (a, b) in RULE_CLASSES.items())

KINDS = (
    Kind(
        "rule",
        "a graduated rule or tape; the graduations between two picked ones are found and fitted",
        _keys("from one graduation to the next of those that are seen", "graduation, at the graduated edge", "II"),
        f"Limits between any two graduations by class (OIML R 35-1): {_LIMITS}.",
        "rule from=120,340 to=2210,355 division=1 class=II",
        _stated("lines", "II"),
    ),
    Kind(
        "rod",
        "a survey rod in two tones; the edges of its blocks are found and fitted",
        _keys("length of one block of one tone", "edge of a block, in the middle of the rod", "III"),
        f"Limits between any two graduations by class (OIML R 35-1): {_LIMITS}.",
        "rod from=120,340 to=2210,355 division=100 length=1000",
        _stated("blocks", "III"),
    ),
)

__all__ = ["KINDS", "RULE_CLASSES", "Bar"]
