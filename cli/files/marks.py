"""What is drawn over a section: centres, axes, the neutral axis, places of stress, and what a loss leaves.

Knows signs and line patterns of a drawing in SVG; every one is told apart by its form, not by colour alone.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING
from xml.sax.saxutils import escape

import numpy as np

from ...props.section import Points, Section

if TYPE_CHECKING:
    from ..appraisal import Appraisal

Place = tuple[float, float]
ToPage = Callable[[Points], Points]
Frame = tuple[Points, Points]

# Principal axes nearer than this to x and y would only blot them.
_DISTINCT_AXES = math.radians(3.0)
# Principal moments that differ by less than this share have no direction to draw.
_DISTINCT_MOMENTS = 1e-6

# Colour and dashes (in text heights) of every kind of line.
_AXIS = ("#141414", (1.4, 0.3, 0.2, 0.3))
_PRINCIPAL = ("#005c3e", (1.4, 0.3, 0.2, 0.3, 0.2, 0.3))
_OWN = ("#5a2d00", (0.8, 0.4))
_NEUTRAL = ("#003896", (0.5, 0.25))
_REMAINING = ("#b20040", (0.15, 0.2))


@dataclass(frozen=True)
class Marks:
    """What is drawn over a section, in section coordinates, mm.

    centroid, shear_centre : points
    transformed : whether the centroid is that of the transformed section
    principal_angle : from x to the major axis, rad; None where the principal axes are not drawn
    own_axes : (origin, angle) of a person's own axes u and v
    neutral_axis : (point, angle)
    stresses : places with what is written beside them
    remaining : what is left after a loss
    """

    centroid: Place
    transformed: bool = False
    shear_centre: Place | None = None
    principal_angle: float | None = None
    own_axes: tuple[Place, float] | None = None
    neutral_axis: tuple[Place, float] | None = None
    stresses: tuple[tuple[Place, str], ...] = ()
    remaining: Section | None = None

    @classmethod
    def of(cls, appraisal: Appraisal) -> Marks:
        """The marks that belong to what was found out about a section."""
        value = {name: q.value for name, q in appraisal.quantities.items()}
        shear_centre = None
        if "shear_centre_x" in value:
            shear_centre = (value["shear_centre_x"], value["shear_centre_y"])
        angle = value["principal_angle"]
        away = abs((angle + math.pi / 4) % (math.pi / 2) - math.pi / 4)
        spread = value["second_moment_major"] - value["second_moment_minor"]
        turned = away > _DISTINCT_AXES and spread > _DISTINCT_MOMENTS * value["second_moment_major"]
        about, stresses, loss = appraisal.about, appraisal.stresses, appraisal.after_loss
        axis = None if stresses is None else stresses.neutral_axis
        places: list[tuple[Place, str]] = []
        if stresses is not None and stresses.normal is not None and axis is not None:
            ends = (stresses.normal.largest, stresses.normal.smallest)
            places = [(end.place, f"{end.value:+.4g} MPa") for end in ends]
        materials = appraisal.materials
        centroid = (value["centroid_x"], value["centroid_y"])
        return cls(
            centroid if materials is None else materials.transformed.centroid,
            materials is not None,
            shear_centre,
            # The principal axes are those of one material.
            angle if turned and materials is None else None,
            None if about is None else (about.origin, about.axis.angle),
            None if axis is None else (axis.point, axis.angle),
            tuple(places),
            None if loss is None else loss.remaining,
        )

    def frame(self, low: Points, high: Points, text: float) -> Frame:
        """Corners of what is shown: the section's box and, unless far away, the marked centres."""
        size = float(np.max(high - low))
        points = [self.centroid, self.shear_centre, self.own_axes and self.own_axes[0]]
        near = [p for p in points if p is not None and np.all(p > low - size) and np.all(p < high + size)]
        corners = np.array([low - text, high + text, *(np.add(p, d) for p in near for d in (-text, text))])
        return corners.min(axis=0), corners.max(axis=0)

    def key(self) -> list[tuple[str, str]]:
        """Kind and words of every sign that occurs."""
        of = " of the transformed section" if self.transformed else ""
        entries = [("centroid", f"centroid{of}, with axes x and y")]
        if self.shear_centre is not None:
            entries.append(("shear centre", "shear centre"))
        if self.principal_angle is not None:
            entries.append(("principal", "principal axes"))
        if self.own_axes is not None:
            entries.append(("own", "axes u and v, as stated"))
        if self.neutral_axis is not None:
            entries.append(("neutral", "neutral axis"))
        if self.stresses:
            entries.append(("stress", "largest and smallest normal stress, linear elastic"))
        if self.remaining is not None:
            entries.append(("remaining", "section left after the loss"))
        return entries


def marks_svg(marks: Marks, section: Section, to_page: ToPage, frame: Frame, text: float) -> list[str]:
    """The marks over a section; lines end at the frame."""
    lines = [f'<g id="marks" fill="none" font-family="sans-serif" font-size="{_n(0.8 * text)}">']
    if marks.remaining is not None:
        for loop in marks.remaining.loops:
            path = " L".join(f"{_n(x)} {_n(y)}" for x, y in to_page(loop))
            lines.append(f'<path d="M{path} Z" {_stroke(_REMAINING, text, 1.5)}/>')
    axes: list[tuple[str, Place, float, tuple[str, tuple[float, ...]]]] = [
        ("x", marks.centroid, 0.0, _AXIS),
        ("y", marks.centroid, math.pi / 2, _AXIS),
    ]
    if marks.principal_angle is not None:
        # Named at the ends away from the names of x and y.
        major = marks.principal_angle + (math.pi if marks.principal_angle < math.pi / 4 else 0.0)
        axes.append(("major", marks.centroid, major, _PRINCIPAL))
        axes.append(("minor", marks.centroid, major + math.pi / 2, _PRINCIPAL))
    if marks.own_axes is not None:
        origin, angle = marks.own_axes
        axes += [("u", origin, angle, _OWN), ("v", origin, angle + math.pi / 2, _OWN)]
    if marks.neutral_axis is not None:
        point, angle = marks.neutral_axis
        axes.append(("n", point, angle + math.pi, _NEUTRAL))
    for name, point, angle, style in axes:
        ends = line_within(point, angle, frame)
        if ends is None:
            continue
        (ax, ay), (bx, by) = to_page(ends)
        lines.append(f'<path d="M{_n(ax)} {_n(ay)} L{_n(bx)} {_n(by)}" {_stroke(style, text)}/>')
        leftwards = bx < ax - 0.1 * text
        beside = (bx - 0.15 * text if leftwards else bx + 0.15 * text, by - 0.15 * text)
        lines.append(_words(beside, name, style[0], text, "end" if leftwards else "start"))
    if len(section.parts) > 1:
        for number, part in enumerate(section.parts, start=1):
            lines.append(_words(to_page(_inner_point(part.loops)[None])[0], str(number), "#141414", text))
    lines.append(_sign("centroid", to_page(np.array([marks.centroid]))[0], text))
    if marks.shear_centre is not None:
        lines.append(_sign("shear centre", to_page(np.array([marks.shear_centre]))[0], text))
    low, high = (to_page(corner[None])[0] for corner in frame)
    for place, words in marks.stresses:
        x, y = to_page(np.array([place]))[0]
        lines.append(_sign("stress", (x, y), text))
        inward = "start" if x < 0.5 * (low[0] + high[0]) else "end"
        dx = 0.5 * text if inward == "start" else -0.5 * text
        dy = 1.1 * text if y < 0.5 * (low[1] + high[1]) else -0.5 * text
        lines.append(_words((x + dx, y + dy), words, _NEUTRAL[0], text, inward))
    lines.append("</g>")
    return lines


def _inner_point(loops: Sequence[Points]) -> Points:
    """A place for words on a part, in its upper half and so off the axis x of most sections."""
    from shapely import Polygon, box

    polygon = Polygon(loops[0], loops[1:])
    x0, y0, x1, y1 = polygon.bounds
    point = polygon.intersection(box(x0, 0.5 * (y0 + y1), x1, y1)).representative_point()
    return np.array([point.x, point.y])


def key_width(entries: Sequence[tuple[str, str]], text: float) -> float:
    """Width that the key needs, mm."""
    return max((1.4 + 3.0 + 0.5 * len(words) for _, words in entries), default=0.0) * text


def key_svg(entries: Sequence[tuple[str, str]], x: float, y: float, text: float) -> list[str]:
    """A row for every sign, from (x, y) down."""
    if not entries:
        return []
    styles = {"principal": _PRINCIPAL, "own": _OWN, "neutral": _NEUTRAL, "remaining": _REMAINING}
    lines = [f'<g id="key" fill="none" font-family="sans-serif" font-size="{_n(0.8 * text)}">']
    for row, (kind, words) in enumerate(entries):
        middle = y + (1.5 * row + 0.3) * text
        style = styles.get(kind, _AXIS if kind == "centroid" else None)
        if style is not None:
            width = 1.5 if kind == "remaining" else 1.0
            path = f"M{_n(x)} {_n(middle)} L{_n(x + 2.2 * text)} {_n(middle)}"
            lines.append(f'<path d="{path}" {_stroke(style, text, width)}/>')
        lines.append(_sign(kind, (x + 1.1 * text, middle), text))
        lines.append(_words((x + 2.8 * text, middle + 0.28 * text), words, "#141414", text))
    return [*filter(None, lines), "</g>"]


def line_within(point: Place, angle: float, frame: Frame) -> Points | None:
    """(2, 2) ends of a line within the frame, the end it is named at last; None if it passes beside."""
    direction = np.array([math.cos(angle), math.sin(angle)])
    start, end = -math.inf, math.inf
    for along, at, low, high in zip(direction, point, *frame, strict=True):
        if abs(along) < 1e-12:
            if not low <= at <= high:
                return None
            continue
        first, last = sorted(((low - at) / along, (high - at) / along))
        start, end = max(start, first), min(end, last)
    if start >= end:
        return None
    return np.array(point) + np.outer([start, end], direction)


def _stroke(style: tuple[str, tuple[float, ...]], text: float, width: float = 1.0) -> str:
    colour, dashes = style
    pattern = " ".join(_n(length * text) for length in dashes)
    return f'stroke="{colour}" stroke-width="{_n(width * text / 14)}" stroke-dasharray="{pattern}"'


def _words(at: Points | Place, words: str, colour: str, text: float, anchor: str = "start") -> str:
    # A white rim keeps words readable over lines.
    return (
        f'<text x="{_n(at[0])}" y="{_n(at[1])}" text-anchor="{anchor}" fill="{colour}" stroke="white" '
        f'stroke-width="{_n(0.15 * text)}" paint-order="stroke">{escape(words)}</text>'
    )


def _sign(kind: str, at: Points | Place, text: float) -> str:
    x, y, r = float(at[0]), float(at[1]), 0.35 * text
    pen = f'stroke-width="{_n(text / 12)}"'
    if kind == "centroid":
        quarter = f"A{_n(r)} {_n(r)} 0 0 1"
        return (
            f'<circle cx="{_n(x)}" cy="{_n(y)}" r="{_n(r)}" fill="white" stroke="#141414" {pen}/>'
            f'<path fill="#141414" d="M{_n(x)} {_n(y)} L{_n(x)} {_n(y - r)} {quarter} {_n(x + r)} {_n(y)} Z '
            f'M{_n(x)} {_n(y)} L{_n(x)} {_n(y + r)} {quarter} {_n(x - r)} {_n(y)} Z"/>'
        )
    if kind == "shear centre":
        return (
            f'<path stroke="#7a0078" {pen} d="M{_n(x - r)} {_n(y - r)} L{_n(x + r)} {_n(y + r)} '
            f'M{_n(x - r)} {_n(y + r)} L{_n(x + r)} {_n(y - r)}"/>'
        )
    if kind == "stress":
        r *= 0.7
        corners = f"M{_n(x)} {_n(y - r)} L{_n(x + r)} {_n(y)} L{_n(x)} {_n(y + r)} L{_n(x - r)} {_n(y)} Z"
        return f'<path d="{corners}" fill="white" stroke="{_NEUTRAL[0]}" {pen}/>'
    return ""


def _n(value: float) -> str:
    return f"{value:.4f}".rstrip("0").rstrip(".")
