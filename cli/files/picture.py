"""The annotated picture: what was measured, drawn over the photo for a person to check.

Knows drawing only. Every mark is told apart by its form, not by colour alone, and carries a light
halo, so that the picture still reads when printed in grey.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Sequence
from dataclasses import dataclass
from functools import lru_cache
from itertools import zip_longest
from pathlib import Path
from typing import TYPE_CHECKING, Any, Literal

import numpy as np

from .geometry import nice_length
from .marks import line_within

if TYPE_CHECKING:
    from PIL.Image import Image
    from PIL.ImageDraw import ImageDraw

    from ...props.section import Points
    from ...vision.measure import Measurement, Member
    from ...vision.photo import Photo
    from ..appraisal import Appraisal

Colour = tuple[int, int, int]

# Long side of the finished picture. Small photos are enlarged, though not beyond what shows their pixels.
_LONG_SIDE = 1800
_LARGEST_ENLARGEMENT = 3.0
# Drawn at twice the size and reduced: smooth lines at sub-pixel places.
_OVERSAMPLING = 2

# All dark enough to stand on their white halo in grey.
_OUTLINE: Colour = (178, 0, 64)
_HOLE: Colour = (0, 56, 150)
_AXIS: Colour = (20, 20, 20)
_PRINCIPAL: Colour = (0, 92, 62)
_DOUBT: Colour = (110, 50, 0)
_HALO: Colour = (255, 255, 255)

# Dash patterns as parts of the line's unit length: drawn, gap, drawn, gap.
_HOLE_DASH = (9.0, 5.0)
_AXIS_DASH = (22.0, 5.0, 3.0, 5.0)
_PRINCIPAL_DASH = (22.0, 5.0, 3.0, 5.0, 3.0, 5.0)
_NEUTRAL_DASH = (8.0, 4.0)
_AXIS_STYLES = {
    "centroidal": (_AXIS, _AXIS_DASH),
    "principal": (_PRINCIPAL, _PRINCIPAL_DASH),
    "neutral": (_HOLE, _NEUTRAL_DASH),
}

# Principal axes nearer than this to the section's own axes would only blot them; and where the two
# principal moments differ by less than their uncertainty, there is no direction to draw.
_DISTINCT_AXES = math.radians(3.0)


def write_picture(measurement: Measurement, path: Path, appraisals: Sequence[Appraisal] = ()) -> None:
    """Write the annotated picture as a JPEG file; see `draw_picture`."""
    draw_picture(measurement, appraisals).save(path, format="JPEG", quality=90, subsampling=0, dpi=(200, 200))


def draw_picture(measurement: Measurement, appraisals: Sequence[Appraisal] = ()) -> Image:
    """The photo around the members and the reference, with all that was measured drawn over it.

    Outlines solid, holes dashed and hatched, triangles where the outline is poorly located, centroid,
    axes, principal axes, a scale bar that lies in the plane of the face, and members' numbers; neutral axes where
    the members' appraisals have them.
    """
    from PIL import Image, ImageDraw

    photo = measurement.photo
    axes = {
        member.number: [*_axes_of(member), *_neutral_axis_of(member, appraisal)]
        for member, appraisal in zip_longest(measurement.members, appraisals)
    }
    marks = np.concatenate(
        [member.section.vertices for member in measurement.members]
        + [axis.ends for member_axes in axes.values() for axis in member_axes]
    )
    bar = _place_scale_bar(measurement.to_pixels, marks)
    seen = np.concatenate([trace for m in measurement.members for trace in m.trace_px] + [measurement.corners_px])
    x0, y0, x1, y1 = _window(photo, seen, np.concatenate([measurement.to_pixels(marks), bar.points]))
    size = min(_LONG_SIDE / max(x1 - x0, y1 - y0), _LARGEST_ENLARGEMENT)
    width, height = round((x1 - x0) * size), round((y1 - y0) * size)
    canvas = Image.fromarray(_cut_out(photo.pixels, (x0, y0, x1, y1))).resize(
        (width * _OVERSAMPLING, height * _OVERSAMPLING), Image.Resampling.BICUBIC, reducing_gap=2.0
    )
    unit = _OVERSAMPLING * max(width, height) / 1000.0
    enlargement = size * _OVERSAMPLING
    pen = _Pen(ImageDraw.Draw(canvas), unit, unit / enlargement, lambda p: (p - (x0 - 0.5, y0 - 0.5)) * enlargement)

    for member in measurement.members:
        _draw_holes(canvas, pen, member)
    for member in measurement.members:
        _draw_axes(pen, axes[member.number], measurement.to_pixels)
        pen.centroid(measurement.to_pixels(_centroid_mm(member)[None])[0])
    for member in measurement.members:
        _draw_outline(pen, member)
    if len(measurement.members) > 1:
        for member in measurement.members:
            _draw_number(pen, member)
    _draw_scale_bar(pen, bar)
    picture = canvas.reduce(_OVERSAMPLING)
    neutral = any(axis.kind == "neutral" for member_axes in axes.values() for axis in member_axes)
    return _with_key(picture, measurement.members, neutral)


def _cut_out(pixels: np.ndarray, window: tuple[int, int, int, int]) -> np.ndarray:
    """(h, w, 3) uint8, the window (x0, y0, x1, y1) of a photo; white where it reaches beyond the photo."""
    x0, y0, x1, y1 = window
    inside = pixels[max(y0, 0) : max(y1, 0), max(x0, 0) : max(x1, 0)]
    if inside.dtype == np.uint16:
        inside = (inside >> 8).astype(np.uint8)
    page = np.full((y1 - y0, x1 - x0, 3), 255, np.uint8)
    top, left = max(-y0, 0), max(-x0, 0)
    page[top : top + inside.shape[0], left : left + inside.shape[1]] = np.atleast_3d(inside)
    return page


def _window(photo: Photo, seen: Points, drawn: Points) -> tuple[int, int, int, int]:
    """(x0, y0, x1, y1) in whole photo pixels of what the picture shows.

    seen : (n, 2) what must be in view of the photo: outlines and reference
    drawn : (m, 2) where marks end, with room for their words even beyond the photo
    """
    everything = np.concatenate([seen, drawn])
    low, high = everything.min(axis=0), everything.max(axis=0)
    size = float(max(high - low))
    x0, y0 = np.minimum(np.maximum(low - 0.06 * size, -0.5), drawn.min(axis=0) - 0.04 * size)
    x1, y1 = np.maximum(
        np.minimum(high + 0.06 * size, (photo.width - 0.5, photo.height - 0.5)), drawn.max(axis=0) + 0.04 * size
    )
    return math.floor(x0 + 0.5), math.floor(y0 + 0.5), math.ceil(x1 + 0.5), math.ceil(y1 + 0.5)


class _Pen:
    """Draws in photo pixels on an enlarged canvas, every dark mark on a light halo.

    unit, photo_unit : canvas pixels and photo pixels that make a thousandth of the picture's long side
    place : photo pixels to canvas pixels
    """

    def __init__(self, draw: ImageDraw, unit: float, photo_unit: float, place: Callable[[Points], Points]) -> None:
        self.draw = draw
        self.unit = unit
        self.photo_unit = photo_unit
        self.place = place

    def line(
        self, points: Points, colour: Colour, width: float, dash: Sequence[float] = (), closed: bool = False
    ) -> None:
        """A line through (n, 2) photo pixels; width and dashes in units."""
        path = self.place(np.concatenate([points, points[:1]]) if closed else points)
        pieces = _dashes(path, [length * self.unit for length in dash]) if dash else [path]
        for stroke, extra in ((_HALO, 1.6), (colour, 0.0)):
            for piece in pieces:
                self.draw.line(
                    [tuple(p) for p in piece.tolist()],
                    fill=stroke,
                    width=round((width + extra) * self.unit),
                    joint="curve",
                )

    def text(self, at: Points, words: str, size: float = 15.0, colour: Colour = _AXIS) -> None:
        """Words centred at one photo pixel."""
        x, y = self.place(at).tolist()
        self.words((x, y), words, size, colour)

    def words(self, centre: tuple[float, float], words: str, size: float, colour: Colour) -> None:
        """Words centred at a place on the canvas."""
        self.draw.text(
            centre,
            words,
            fill=colour,
            font=_font(size * self.unit),
            anchor="mm",
            stroke_width=round(2.0 * self.unit),
            stroke_fill=_HALO,
        )

    def triangle(self, at: Points) -> None:
        """A hollow triangle around one photo pixel: here the outline is poorly located."""
        _triangle(self.draw, self.place(at), self.unit)

    def centroid(self, at: Points) -> None:
        """The sign for a centre of mass at one photo pixel."""
        _centroid(self.draw, self.place(at), self.unit)


def _triangle(draw: ImageDraw, centre: Points, unit: float) -> None:
    angles = np.radians([-90.0, 30.0, 150.0])
    corners = centre + 7.0 * unit * np.stack([np.cos(angles), np.sin(angles)], axis=-1)
    path = [tuple(p) for p in np.concatenate([corners, corners[:2]]).tolist()]
    for colour, width in ((_HALO, 3.6), (_DOUBT, 1.7)):
        draw.line(path, fill=colour, width=round(width * unit), joint="curve")


def _centroid(draw: ImageDraw, centre: Points, unit: float) -> None:
    x, y = centre.tolist()
    radius = 7.0 * unit
    rim = radius + 1.6 * unit
    draw.ellipse((x - rim, y - rim, x + rim, y + rim), fill=_HALO)
    box = (x - radius, y - radius, x + radius, y + radius)
    draw.pieslice(box, 0, 90, fill=_AXIS)
    draw.pieslice(box, 180, 270, fill=_AXIS)
    draw.ellipse(box, outline=_AXIS, width=max(1, round(1.4 * unit)))


def _dashes(path: Points, pattern: Sequence[float]) -> list[Points]:
    """The drawn pieces of a path under a dash pattern of drawn and blank lengths, in the path's own unit."""
    along = np.concatenate([[0.0], np.cumsum(np.hypot(*np.diff(path, axis=0).T))])
    pieces, start, step = [], 0.0, 0
    while start < along[-1]:
        length = pattern[step % len(pattern)]
        if step % 2 == 0:
            end = min(start + length, along[-1])
            inner = path[(along > start) & (along < end)]
            ends = [[np.interp(s, along, path[:, 0]), np.interp(s, along, path[:, 1])] for s in (start, end)]
            pieces.append(np.concatenate([ends[:1], inner, ends[1:]]))
        start, step = start + length, step + 1
    return pieces


def _is_hole(member: Member) -> list[bool]:
    return [kind for part in member.section.parts for kind in (False, *(True for _ in part.holes))]


def _draw_holes(canvas: Image, pen: _Pen, member: Member) -> None:
    """Hatch the holes, so that a hole is not taken for a part within a part."""
    from PIL import Image, ImageChops, ImageDraw

    for trace, hole in zip(member.trace_px, _is_hole(member), strict=True):
        if not hole:
            continue
        path = pen.place(trace)
        low = np.floor(path.min(axis=0)).astype(int)
        w, h = (np.ceil(path.max(axis=0)).astype(int) - low + 1).tolist()
        mask, hatch = Image.new("L", (w, h)), Image.new("RGB", (w, h))
        ImageDraw.Draw(mask).polygon([tuple(p) for p in (path - low).tolist()], fill=255)
        lines, drawn = Image.new("L", (w, h)), ImageDraw.Draw(hatch)
        stencil = ImageDraw.Draw(lines)
        for colour, width in ((_HALO, 2.4), (_HOLE, 1.0)):
            for offset in np.arange(0.0, w + h, 16.0 * pen.unit):
                ends = ((offset, 0), (offset - h, h))
                drawn.line(ends, fill=colour, width=round(width * pen.unit))
                stencil.line(ends, fill=255, width=round(width * pen.unit))
        box = tuple(low.tolist())
        canvas.paste(hatch, box, ImageChops.multiply(mask, lines))


def _draw_outline(pen: _Pen, member: Member) -> None:
    for trace, hole in zip(member.trace_px, _is_hole(member), strict=True):
        pen.line(trace, _HOLE if hole else _OUTLINE, 2.0, _HOLE_DASH if hole else (), closed=True)
    for trace, poor in zip(member.trace_px, member.poorly_located, strict=True):
        for spot in _spots(pen.place(trace), np.asarray(poor, bool), 22.0 * pen.unit):
            pen.triangle(trace[spot])


def _spots(path: Points, poor: np.ndarray, spacing: float) -> list[int]:
    """Indices along a closed path for marks on the poor points, at least `spacing` apart."""
    chosen: list[int] = []
    for index in np.flatnonzero(poor).tolist():
        if not chosen or float(np.hypot(*(path[index] - path[chosen[-1]]))) >= spacing:
            chosen.append(index)
    return chosen


def _centroid_mm(member: Member) -> Points:
    return np.array([member.quantities["centroid_x"].value, member.quantities["centroid_y"].value])


@dataclass(frozen=True)
class _Axis:
    """An axis through the centroid. ends : (2, 2) section coordinates, mm, the named end last."""

    name: str
    ends: Points
    kind: Literal["centroidal", "principal", "neutral"]


def _axes_of(member: Member) -> list[_Axis]:
    centre = _centroid_mm(member)
    vertices = member.section.vertices - centre
    overhang = 0.06 * float(np.ptp(vertices, axis=0).max())

    def through_centroid(name: str, angle: float, kind: Literal["centroidal", "principal"]) -> _Axis:
        direction = np.array([math.cos(angle), math.sin(angle)])
        if kind == "principal" and direction.sum() > 0:
            # Named at the end away from the names of x and y.
            direction = -direction
        reach = vertices @ direction
        return _Axis(name, centre + np.outer([reach.min() - overhang, reach.max() + overhang], direction), kind)

    found = [through_centroid("x", 0.0, "centroidal"), through_centroid("y", math.pi / 2, "centroidal")]
    if _has_own_principal_axes(member):
        angle = member.quantities["principal_angle"].value
        found.append(through_centroid("major", angle, "principal"))
        found.append(through_centroid("minor", angle + math.pi / 2, "principal"))
    return found


def _neutral_axis_of(member: Member, appraisal: Appraisal | None) -> list[_Axis]:
    """The neutral axis of the stated forces over the member, if it crosses it."""
    axis = None if appraisal is None or appraisal.stresses is None else appraisal.stresses.neutral_axis
    if axis is None or not axis.crosses:
        return []
    vertices = member.section.vertices
    overhang = 0.12 * float(np.ptp(vertices, axis=0).max())
    frame = (vertices.min(axis=0) - overhang, vertices.max(axis=0) + overhang)
    ends = line_within(axis.point, axis.angle + math.pi, frame)
    return [] if ends is None else [_Axis("n", ends, "neutral")]


def _draw_axes(pen: _Pen, axes: Sequence[_Axis], to_pixels: Callable[[Points], Points]) -> None:
    for axis in axes:
        colour, dash = _AXIS_STYLES[axis.kind]
        # Followed through the plane, so that the line bends as the lens bends it.
        path = to_pixels(axis.ends[0] + np.linspace(0.0, 1.0, 33)[:, None] * (axis.ends[1] - axis.ends[0]))
        pen.line(path, colour, 1.1, dash)
        pen.text(path[-1] + 14.0 * pen.photo_unit * _unit_vector(path[-1] - path[-2]), axis.name, colour=colour)


def _unit_vector(vector: Points) -> Points:
    return vector / np.hypot(*vector)


def _has_own_principal_axes(member: Member) -> bool:
    angle, major, minor = (
        member.quantities[name] for name in ("principal_angle", "second_moment_major", "second_moment_minor")
    )
    away = abs((angle.value + math.pi / 4) % (math.pi / 2) - math.pi / 4)
    return away > _DISTINCT_AXES and major.value - minor.value > 2.0 * math.hypot(major.std or 0.0, minor.std or 0.0)


def _draw_number(pen: _Pen, member: Member) -> None:
    # Off the corner it is nearest to, which a person may want to check.
    shell = member.trace_px[0]
    corner = shell[np.argmin(shell.sum(axis=1))]
    x, y = (pen.place(corner) - 18.0 * pen.unit).tolist()
    radius = 14.0 * pen.unit
    rim = (x - radius, y - radius, x + radius, y + radius)
    pen.draw.ellipse(rim, fill=_HALO, outline=_AXIS, width=round(2.0 * pen.unit))
    pen.draw.text((x, y), str(member.number), fill=_AXIS, font=_font(19.0 * pen.unit), anchor="mm")


@dataclass(frozen=True)
class _ScaleBar:
    """points : (5, 2) photo pixels of the bar's quarter points; length : mm between the first and the last."""

    points: Points
    length: float


def _place_scale_bar(to_pixels: Callable[[Points], Points], marks: Points) -> _ScaleBar:
    """A bar in the plane of the face, below all marks (mm)."""
    (left, bottom), (right, top) = marks.min(axis=0), marks.max(axis=0)
    length = nice_length(0.4 * (right - left))
    height = bottom - 0.08 * max(right - left, top - bottom)
    quarters = (left + right) / 2 + length * np.linspace(-0.5, 0.5, 5)
    return _ScaleBar(to_pixels(np.stack([quarters, np.full(5, height)], axis=-1)), length)


def _draw_scale_bar(pen: _Pen, bar: _ScaleBar) -> None:
    path = pen.place(bar.points)
    along = path[-1] - path[0]
    across = _unit_vector(np.array([-along[1], along[0]]))
    half = 4.5 * pen.unit * across
    for colour, extra in ((_HALO, 2.0), (_AXIS, 0.0)):
        pen.draw.line([tuple(p) for p in path.tolist()], fill=colour, width=round((11.0 + 2.0 * extra) * pen.unit))
    inset = 1.4 * pen.unit * across
    end_inset = 1.4 * pen.unit * _unit_vector(along)
    for start, end in ((path[1], path[2]), (path[3], path[4] - end_inset)):
        corners = np.stack([start - half + inset, end - half + inset, end + half - inset, start + half - inset])
        pen.draw.polygon([tuple(p) for p in corners.tolist()], fill=_HALO)
    # On the side that is lower in the picture, whichever way the face lies in it.
    side = across if across[1] > 0 or (across[1] == 0 and across[0] > 0) else -across
    x, y = ((path[0] + path[-1]) / 2 + 18.0 * pen.unit * side).tolist()
    pen.words((x, y), f"{bar.length:g} mm", 16.0, _AXIS)


def _with_key(picture: Image, members: Sequence[Member], neutral: bool) -> Image:
    """The picture on a page with a key to the marks that occur in it."""
    from PIL import Image, ImageDraw

    unit = _OVERSAMPLING * max(picture.size) / 1000.0
    width = picture.width * _OVERSAMPLING
    entries = _key_entries(members, neutral)
    font = _font(15.0 * unit)
    pitch, sign, gap = 30.0 * unit, 46.0 * unit, 26.0 * unit
    places: list[tuple[float, float]] = []
    x, row = gap, 0
    for words, _ in entries:
        length = sign + 10.0 * unit + font.getlength(words)
        if places and x + length + gap > width:
            x, row = gap, row + 1
        places.append((x, (row + 0.5) * pitch + 5.0 * unit))
        x += length + gap
    key = Image.new("RGB", (width, round((row + 1) * pitch + 10.0 * unit)), _HALO)
    pen = _Pen(ImageDraw.Draw(key), unit, unit, lambda p: p)
    for (words, draw_sign), (left, middle) in zip(entries, places, strict=True):
        draw_sign(pen, np.array([[left, middle], [left + sign, middle]]))
        pen.draw.text((left + sign + 10.0 * unit, middle), words, fill=_AXIS, font=font, anchor="lm")
    reduced = key.reduce(_OVERSAMPLING)
    page = Image.new("RGB", (picture.width, picture.height + reduced.height), _HALO)
    page.paste(picture, (0, 0))
    page.paste(reduced, (0, picture.height))
    return page


def _key_entries(members: Sequence[Member], neutral: bool) -> list[tuple[str, Callable[[_Pen, Points], None]]]:
    entries: list[tuple[str, Callable[[_Pen, Points], None]]] = [
        ("measured outline", lambda pen, ends: pen.line(ends, _OUTLINE, 2.0))
    ]
    if any(any(_is_hole(member)) for member in members):
        entries.append(("hole", lambda pen, ends: pen.line(ends, _HOLE, 2.0, _HOLE_DASH)))
    if any(np.any(poor) for member in members for poor in member.poorly_located):
        entries.append(("outline poorly located", lambda pen, ends: pen.triangle(ends.mean(axis=0))))
    entries.append(("centroid", lambda pen, ends: pen.centroid(ends.mean(axis=0))))
    entries.append(("axes", lambda pen, ends: pen.line(ends, _AXIS, 1.1, _AXIS_DASH)))
    if any(_has_own_principal_axes(member) for member in members):
        entries.append(("principal axes", lambda pen, ends: pen.line(ends, _PRINCIPAL, 1.1, _PRINCIPAL_DASH)))
    if neutral:
        entries.append(("neutral axis", lambda pen, ends: pen.line(ends, _HOLE, 1.1, _NEUTRAL_DASH)))
    return entries


@lru_cache(maxsize=16)
def _font(size: float) -> Any:
    from PIL import ImageFont

    return ImageFont.load_default(round(size))
