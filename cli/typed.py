"""What a person types about axes, forces, losses, sizes and materials, as the values that `props` works with.

Knows the form of the texts and the units people type; what a value may be is checked where it is used.
"""

from __future__ import annotations

import math
import re
from collections.abc import Iterable, Mapping
from dataclasses import dataclass, field, replace

from ..props.calliper import CALLIPER_STD, SIZES
from ..props.errors import UsageError
from ..props.loss import FaceLoss, RoundHole, face_loss, uniform_loss, with_holes
from ..props.oblique import ANGLE_STD, DEPTH_STD, Cut
from ..props.section import Material, Section
from ..props.stress import Forces
from ..vision.callipered import Stated

_NUMBER = r"[+-]?(?:\d+\.?\d*|\.\d+)(?:[eE][+-]?\d+)?"
_WITH_UNIT = re.compile(rf"\s*({_NUMBER})\s*([a-zA-Z]*)\s*")

# Exact by definition: 1 lbf = 4.4482216152605 N (9.80665 m/s^2 on 0.45359237 kg).
_POUND_FORCE = 4.4482216152605
_FORCES = {"": 1e3, "n": 1.0, "kn": 1e3, "mn": 1e6, "lbf": _POUND_FORCE, "kip": 1e3 * _POUND_FORCE}
_MOMENTS = {
    "": 1e6,
    "nmm": 1.0,
    "nm": 1e3,
    "knmm": 1e3,
    "knm": 1e6,
    "mnm": 1e9,
    "lbfin": 25.4 * _POUND_FORCE,
    "lbfft": 304.8 * _POUND_FORCE,
    "kipin": 25.4e3 * _POUND_FORCE,
    "kipft": 304.8e3 * _POUND_FORCE,
}
_FORCE_NAMES = {
    "n": ("axial", _FORCES),
    "vx": ("shear_x", _FORCES),
    "vy": ("shear_y", _FORCES),
    "mx": ("moment_x", _MOMENTS),
    "my": ("moment_y", _MOMENTS),
    "t": ("torque", _MOMENTS),
}
_LENGTHS = {"": 1.0, "mm": 1.0, "cm": 10.0, "in": 25.4}
_DIRECTIONS = {"right": 0.0, "up": 90.0, "left": 180.0, "down": 270.0}
_CALLIPER = re.compile(
    rf"\s*(?:(\d+)\s*:)?\s*(?:([a-z]+)|({_NUMBER}\s*,\s*{_NUMBER}\s+{_NUMBER}\s*,\s*{_NUMBER}))"
    rf"\s*=\s*({_NUMBER})\s*(mm|cm|in|)(?:\s+u\s*=\s*({_NUMBER})\s*(mm|cm|in|))?\s*",
    re.IGNORECASE,
)
# No length in mm, modulus or strength in MPa, density or force typed for a member is larger.
_LARGEST = 1e9
_SIDES = ("top", "bottom", "left", "right")


@dataclass(frozen=True)
class Axis:
    """Axes of a person's own.

    origin : (x, y) in section coordinates, mm; None for the centroid
    angle : from x to u, rad
    """

    origin: tuple[float, float] | None
    angle: float


@dataclass(frozen=True)
class Loss:
    """A stated loss of section, mm: of one depth all round, or by sides, and holes.

    depth : None where it is stated by sides
    inside : whether a loss all round takes from the faces of holes too
    holes : drilled into what a loss of layers leaves
    """

    depth: float | None = None
    inside: bool = True
    faces: FaceLoss = field(default_factory=FaceLoss)
    holes: tuple[RoundHole, ...] = ()

    def of(self, section: Section, angle: float = 0.0) -> Section:
        """What is left of a section; raises OutlineError if nothing is.

        angle : of the axes whose sides are meant, rad from x
        """
        if self.depth is not None:
            left = uniform_loss(section, self.depth, self.inside)
        else:
            left = face_loss(section, self.faces, angle)
        return with_holes(left, self.holes)

    @property
    def words(self) -> str:
        """The loss as a part of a sentence."""
        if self.depth is None:
            stated = [f"{depth:g} mm at the {side}" for side, depth in vars(self.faces).items() if depth]
        else:
            stated = [f"{self.depth:g} mm on all " + ("faces" if self.inside else "outer faces")]
        stated += [f"a hole of {hole.diameter:g} mm at ({hole.x:g}, {hole.y:g})" for hole in self.holes]
        return " and ".join(stated)

    @property
    def by_sides(self) -> bool:
        """Whether it takes layers off by the side that faces look to."""
        return self.depth is None and any(vars(self.faces).values())


def typed_axis(text: str) -> Axis:
    """Axes from "X,Y", "X,Y,ANGLE" or "centroid,ANGLE": mm, and degrees counter-clockwise from x.

    Raises UsageError for a text of another form.
    """
    words = [word.strip() for word in text.split(",")]
    if words[0].lower() == "centroid" and len(words) <= 2:
        numbers = _numbers(words[1:])
        if numbers is not None:
            return Axis(None, math.radians(sum(numbers)))
    elif len(words) in (2, 3):
        numbers = _numbers(words)
        if numbers is not None:
            return Axis((numbers[0], numbers[1]), math.radians(sum(numbers[2:])))
    raise UsageError(
        "bad-axis",
        f"{text!r} does not give axes.",
        "Write X,Y,ANGLE in mm and degrees, for instance 0,0,30, or centroid,30.",
    )


def _numbers(words: Iterable[str]) -> list[float] | None:
    try:
        numbers = [float(word) for word in words]
    except ValueError:
        return None
    return numbers if all(abs(number) <= _LARGEST for number in numbers) else None


def typed_forces(text: str) -> Forces:
    """Forces from "N=120,Mx=15kNm,...": kN and kN m where no unit is typed.

    Raises UsageError for an unknown name or unit, or a force given twice.
    """
    values: dict[str, float] = {}
    for name, value in _pairs(text, "forces", "N=120,Mx=15 or Vy=8kN,T=0.5kNm"):
        if name not in _FORCE_NAMES:
            raise UsageError("unknown-force", f"There is no force {name!r}.", "Give any of N, Vx, Vy, Mx, My, T.")
        force, units = _FORCE_NAMES[name]
        found = _WITH_UNIT.fullmatch(value)
        if found is None or found[2].lower() not in units:
            raise UsageError(
                "bad-force",
                f"The value of {name} is {value!r}.",
                f"Give a number in {'kN' if units is _FORCES else 'kN m'}, or with one of the units "
                f"{', '.join(filter(None, units))}.",
            )
        if abs(float(found[1])) > _LARGEST:
            raise UsageError("bad-force", f"The value of {name} is {value!r}.", "Give a force that a member can feel.")
        if force in values:
            raise UsageError("bad-force", f"{name} is given twice.", "Give it once.")
        values[force] = float(found[1]) * units[found[2].lower()]
    return Forces(**values)


def typed_loss(text: str) -> Loss:
    """A loss from "2" (mm, all faces), "outer=2" (faces of holes keep) or "top=2,left=1".

    Raises UsageError for a text of another form.
    """
    whole = _numbers([text])
    if whole is not None:
        return _positive_loss(Loss(depth=whole[0]))
    depths: dict[str, float] = {}
    for side, value in _pairs(text, "loss", "2, outer=2 or top=2,left=1"):
        depth = _numbers([value.strip().removesuffix("mm")])
        if depth is None or side not in (*_SIDES, "outer"):
            raise UsageError(
                "bad-loss",
                f"{side}={value} is no loss of section.",
                f"Give a depth in mm for any of {', '.join(_SIDES)}, or outer=DEPTH.",
            )
        if side in depths:
            raise UsageError("bad-loss", f"The loss at {side} is given twice.", "Give it once.")
        depths[side] = depth[0]
    if "outer" in depths:
        if len(depths) > 1:
            raise UsageError("bad-loss", "A loss is given both all round and by sides.", "Give one of the two.")
        return _positive_loss(Loss(depth=depths["outer"], inside=False))
    return Loss(faces=FaceLoss(**depths))


def typed_holes(texts: Iterable[str]) -> tuple[RoundHole, ...]:
    """Round holes from texts "X,Y,DIAMETER", mm in section coordinates.

    Raises UsageError for a text of another form.
    """
    holes: list[RoundHole] = []
    for text in texts:
        numbers = _numbers(text.split(","))
        if numbers is None or len(numbers) != 3:
            raise UsageError(
                "bad-hole", f"{text!r} is no hole.", "Write X,Y,DIAMETER in mm, for instance --hole 40,25,18."
            )
        holes.append(RoundHole(*numbers))
    return tuple(holes)


def _positive_loss(loss: Loss) -> Loss:
    if loss.depth is None or loss.depth < 0.0:
        raise UsageError("bad-loss", f"The loss is {loss.depth:g} mm.", "Give a depth of 0 mm or more.")
    return loss


def typed_calliper(text: str) -> Stated:
    """A size from "depth=203.2 u=0.1", "2:width=80", or "X,Y X,Y=12.3 u=0.05" with two pixels on the outline.

    Lengths in mm, or with a unit behind. Raises UsageError for a text of another form.
    """
    found = _CALLIPER.fullmatch(text)
    if found is None:
        raise UsageError(
            "bad-calliper",
            f"{text!r} is no size taken by calliper.",
            'Write for instance "depth=203.2 u=0.1", or "X,Y X,Y=12.3 u=0.05" with two pixels on the outline.',
        )
    member, size, points, value, unit, std, std_unit = found.groups()
    picked = None
    if points is not None:
        x0, y0, x1, y1 = (float(number) for number in re.findall(_NUMBER, points))
        picked = (x0, y0), (x1, y1)
    elif size.lower() not in SIZES:
        raise UsageError(
            "calliper-size",
            f"A calliper does not know the size {size!r}.",
            f"Give one of {', '.join(SIZES)}, or two points on the outline.",
        )
    return Stated(
        float(value) * _LENGTHS[unit.lower()],
        CALLIPER_STD if std is None else float(std) * _LENGTHS[std_unit.lower() or unit.lower()],
        None if size is None else size.lower(),
        picked,
        None if member is None else int(member),
    )


def typed_cut(text: str) -> Cut:
    """A cut from "angle=3 direction=90 u=0.5" (degrees) or "depths=2,11.5 direction=up u=0.5" (mm).

    Raises UsageError for a text of another form.
    """
    values: dict[str, str] = {}
    for pair in text.split():
        name, equals, value = pair.partition("=")
        if not equals or name.lower() in values:
            break
        values[name.lower()] = value
    else:
        direction = _direction(values.pop("direction", ""))
        std, known = _numbers([values.pop("u")]) if "u" in values else [], len(values)
        angle = _numbers([values.pop("angle", "")])
        depths = _numbers(values.pop("depths", "").split(","))
        if direction is not None and std is not None and min(std, default=1.0) > 0.0 and known == 1 and not values:
            if angle is not None:
                return Cut(direction, math.radians(angle[0]), math.radians(std[0]) if std else ANGLE_STD)
            if depths is not None and len(depths) == 2:
                return Cut(direction, depths=(depths[0], depths[1]), depth_std=std[0] if std else DEPTH_STD)
    raise UsageError(
        "bad-cut",
        f"{text!r} does not tell how a cut lies.",
        'Write for instance "angle=3 direction=90", in degrees off square and from x on the face, or '
        '"depths=2,11.5 direction=up", in mm from a square line to the cut at both ends of the face; u=... behind it.',
    )


def _direction(text: str) -> float | None:
    found = _numbers([text])
    degrees = _DIRECTIONS.get(text.lower()) if found is None else found[0]
    return None if degrees is None else math.radians(degrees)


def typed_materials(texts: Iterable[str]) -> Mapping[int, Material]:
    """Materials by the number of their part, from texts "PART=NAME:E[:DENSITY[:STRENGTH]]" (MPa, kg/m^3, MPa).

    Raises UsageError for a text of another form, or a part given twice.
    """
    found: dict[int, Material] = {}
    for text in texts:
        number, _, rest = text.partition("=")
        name, *words = rest.split(":")
        values = _numbers(words)
        if not number.strip().isdigit() or not name.strip() or values is None or not 1 <= len(values) <= 3:
            raise UsageError(
                "bad-material",
                f"{text!r} is no material.",
                "Write PART=NAME:E, PART=NAME:E:DENSITY or PART=NAME:E:DENSITY:STRENGTH in MPa, kg/m3 and MPa, for "
                "instance 1=oak:11000:700.",
            )
        if min(values) <= 0.0:
            raise UsageError("bad-material", f"A value of {name} is not above zero.", "Give values above zero.")
        if int(number) in found:
            raise UsageError("bad-material", f"Part {int(number)} is given two materials.", "Give it one.")
        found[int(number)] = Material(name.strip(), *values)
    return found


def with_materials(section: Section, materials: Mapping[int, Material]) -> Section:
    """The section with the materials of its parts, counted from 1.

    Raises UsageError for a part that is not there.
    """
    beyond = [number for number in materials if not 1 <= number <= len(section.parts)]
    if beyond:
        parts = "1 part" if len(section.parts) == 1 else f"{len(section.parts)} parts"
        raise UsageError(
            "no-such-part",
            f"The section has {parts}; there is no part {beyond[0]}.",
            "Count the parts as the table and the drawing number them, from 1.",
        )
    return Section(
        tuple(replace(p, material=materials.get(n, p.material)) for n, p in enumerate(section.parts, start=1))
    )


def _pairs(text: str, what: str, example: str) -> list[tuple[str, str]]:
    pairs = [entry.partition("=") for entry in text.split(",")]
    if any(not equals or not name.strip() or not value.strip() for name, equals, value in pairs):
        raise UsageError(f"bad-{what}", f"{text!r} does not state {what}.", f"Write for instance {example}.")
    return [(name.strip().lower(), value.strip()) for name, _, value in pairs]
