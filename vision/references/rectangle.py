"""A blank rectangle of known size: a sheet of paper, a card, a tile, a plate.

Knows standard sizes with their tolerances, how to find a rectangle around a picked point or by its proportions, and
how its four edges give the plane. Corners may be rounded or hidden: only the edges count. What is printed on it is
not looked at.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field, replace
from math import ceil
from typing import Any

import numpy as np
from numpy.typing import NDArray

from ...props.errors import CutfaceError, Refusal, UsageError
from ..light import Light
from ..photo import Photo
from ..plane import Correspondences
from .adjustment import Adjusted, Known, Target, Unknown
from .printed import FLATNESS_STD_MM
from .reference import Reference
from .setting import AssumedCamera, Setting
from .shapes_seen import quadrilateral, shapes_seen, upright_order
from .sides import SIDE_BIAS_PX, Sides, find_sides
from .stated import Key, Kind, known_size, stated_sides
from .surveyed import (
    MOST_STRAIN,
    Sighting,
    adjusted_to_scatter,
    camera_for,
    reference_of,
    refuse_strained,
    scatter_notices,
)

Array = NDArray[np.float64]

# Corners of cut paper, cards and tiles off a right angle, rad (stated assumption: 0.3 mm over 300 mm).
SQUARENESS_STD_RAD = 0.001
# Of two ways to lie, the worse is ruled out when its cost is higher by this (three standard deviations and more).
_RULED_OUT = 12.0
# Candidates that are looked at more closely; those of one shape differ by less than this part of their size.
_MOST_CANDIDATES, _SAME = 40, 0.02
# Proportions further off than this from every view up to 60 degrees off square cannot be the stated ones.
_MOST_FORESHORTENING = 2.2


@dataclass(frozen=True)
class Size:
    """Size of a rectangle, mm, how well either side is known, and its corner radius.

    sides : the two sides, in any order; known : of each
    """

    name: str
    sides: tuple[float, float]
    known: tuple[Known, Known]
    radius: float = 0.0
    paper: bool = False


def _iso_216(side: float) -> Known:
    """Permitted deviation of a side of trimmed paper, mm (ISO 216:2007; quoted on several pages)."""
    return Known.within(1.5 if side <= 150 else 2.0 if side <= 600 else 3.0)


def _paper(name: str, sides: tuple[float, float]) -> Size:
    return Size(name, sides, (_iso_216(sides[0]), _iso_216(sides[1])), paper=True)


# A series: ISO 216:2007. US sizes: ANSI/ASME Y14.1, from memory; no tolerance was recalled, that of ISO 216 is assumed.
# ID-1: ISO/IEC 7810, unused cards 85.47 to 85.72 by 53.92 to 54.03 mm, corner radius 2.88 to 3.48 (limits of the size
# from memory).
SIZES: dict[str, Size] = {
    size.name: size
    for size in (
        _paper("A0", (841.0, 1189.0)),
        _paper("A1", (594.0, 841.0)),
        _paper("A2", (420.0, 594.0)),
        _paper("A3", (297.0, 420.0)),
        _paper("A4", (210.0, 297.0)),
        _paper("A5", (148.0, 210.0)),
        _paper("A6", (105.0, 148.0)),
        _paper("A7", (74.0, 105.0)),
        _paper("A8", (52.0, 74.0)),
        _paper("Letter", (215.9, 279.4)),
        _paper("Legal", (215.9, 355.6)),
        _paper("Tabloid", (279.4, 431.8)),
        Size("ID-1", (85.595, 53.975), (Known.within(0.125), Known.within(0.055)), radius=3.48),
    )
}


@dataclass(frozen=True)
class Rectangle:
    """A rectangle of known size in the picture.

    size : its sides with tolerance; `SIZES` has standard ones, `stated_size` makes others
    near : a photo pixel on it; None looks for the one rectangle of its proportions
    corners : four photo pixels, good to a percent of its size, instead of looking for it; in any order
    setting : how the face lies to it, and the camera
    """

    size: Size
    near: tuple[float, float] | None = None
    corners: Sequence[tuple[float, float]] | None = None
    setting: Setting = field(default_factory=Setting)

    def __post_init__(self) -> None:
        if self.corners is not None and len(self.corners) != 4:
            raise UsageError(
                "rectangle-corners",
                f"A rectangle has four corners; {len(self.corners)} were given.",
                "Pick its four corners, or one point on it.",
            )

    @property
    def label(self) -> str:
        """What it is, in words."""
        return f"the {self.size.name} rectangle"

    def sight(self, photo: Photo) -> Sighting:
        """Find it and its four edges; raises Refusal."""
        light = Light.of(photo)
        seen = self._found(photo, light)
        white = None
        if self.size.paper:
            middle = seen.target.start.pixels.mean(axis=0)
            white = middle + 0.9 * (seen.target.start.pixels - middle)
        return replace(seen, white=white)

    def locate(self, photo: Photo) -> Reference:
        """The Reference that the rectangle gives in a photo.

        Raises Refusal when it is not found, is not unique, or does not look like a rectangle of the stated size.
        """
        seen = self.sight(photo)
        camera = camera_for(photo, self.setting, seen.target.start)
        found = adjusted_to_scatter(camera, [seen.target])
        notices = scatter_notices(found, self.label)
        along = found.on_face(0, np.array([[0.0, 0.0], [1.0, 0.0]]))
        sides = seen.target.start.target
        return reference_of(
            photo,
            [seen],
            found,
            camera,
            kind="rectangle",
            label=self.size.name,
            notices=notices,
            details={
                "width_mm": float(np.ptp(sides[:, 0])),
                "depth_mm": float(np.ptp(sides[:, 1])),
                "size_std_mm": [known.std for known in self.size.known],
                "axis_rad": float(np.arctan2(*(along[1] - along[0])[::-1])),
            },
        )

    def _found(self, photo: Photo, light: Light) -> Sighting:
        if self.corners is not None:
            quads = [upright_order(np.array(self.corners, float))]
            cut = False
        else:
            shapes = shapes_seen(photo, self.near)
            quads = _distinct([q for c in shapes.contours if (q := quadrilateral(c)) is not None])
            cut = shapes.cut
        fits: list[tuple[float, Target, Adjusted]] = []
        refusals: list[CutfaceError] = []
        for quad in quads[:_MOST_CANDIDATES]:
            try:
                fits.append(self._fitted(photo, light, quad))
            except Refusal as refusal:
                refusals.append(refusal)
        if not fits:
            raise self._not_found(quads, refusals, cut)
        fits = _distinct_fits(fits)
        if len(fits) > 1:
            places = ", ".join("({:.0f}, {:.0f})".format(*t.start.pixels.mean(axis=0)) for _, t, _ in fits[:6])
            raise Refusal(
                "several-rectangles",
                f"{len(fits)} rectangles of the proportions of {self.label} are in the picture, about {places}.",
                "Point at the one that is the reference, or pick its four corners.",
            )
        return Sighting("rectangle", (fits[0][1],))

    def _not_found(self, quads: Sequence[Array], refusals: Sequence[CutfaceError], cut: bool) -> Refusal:
        if len(quads) == 1 and refusals:
            return Refusal(refusals[0].code, refusals[0].message, refusals[0].remedy)
        contradicting = [r for r in refusals if r.code != "reference-edge-lost"]
        bent = [r for r in refusals if "flatness" in r.message]
        if bent:
            return Refusal(bent[0].code, bent[0].message, bent[0].remedy)
        if self.near is not None and contradicting:
            return Refusal(contradicting[0].code, contradicting[0].message, contradicting[0].remedy)
        where = "around the picked point" if self.near is not None else "in the picture"
        frame = " What was found there is cut by the frame." if cut and self.near is not None else ""
        return Refusal(
            "no-rectangle",
            f"No rectangle of the proportions of {self.label} is found {where}.{frame}",
            "Keep it whole in the frame on a ground of another brightness, check the stated size, and point at it or "
            "pick its four corners.",
        )

    def _fitted(self, photo: Photo, light: Light, quad: Array) -> tuple[float, Target, Adjusted]:
        """The way a quadrilateral can be this rectangle; raises Refusal."""
        if not self._possible(quad):
            raise _contradicting(self.label)
        short = min(self.size.sides)
        sides = find_sides(light, quad, self.size.radius / short if self.size.radius else 0.0)
        ways = []
        a, b = self.size.sides
        turns = [(a, b), (b, a)] if a != b else [(a, b)]
        for number, (width, depth) in enumerate(turns):
            known = self.size.known if number == 0 else (self.size.known[1], self.size.known[0])
            target = rectangle_target(self.label, sides, (width, depth), known, self.setting)
            if self.size.paper:
                target = replace(target, bow_std=FLATNESS_STD_MM)
            camera = camera_for(photo, self.setting, target.start)
            try:
                found = adjusted_to_scatter(camera, [target])
            except Refusal:
                continue
            ways.append((found.cost, target, found, camera))
        if not ways:
            raise _contradicting(self.label)
        ways.sort(key=lambda way: way[0])
        cost, target, found, camera = ways[0]
        refuse_strained(found, self.label, _remedy(camera))
        scatter_notices(found, self.label)
        if len(ways) > 1 and ways[1][2].strain < MOST_STRAIN and ways[1][0] - cost < _RULED_OUT:
            raise Refusal(
                "rectangle-sides",
                f"The picture does not tell which side of {self.label} is the longer one.",
                "Take the photo more squarely, or use a rectangle whose sides differ more.",
            )
        return cost, target, found

    def _possible(self, quad: Array) -> bool:
        """Whether the sides' lengths in the picture leave room for the stated proportions at all."""
        length = np.linalg.norm(np.roll(quad, -1, axis=0) - quad, axis=1)
        seen = float((length[0] + length[2]) / (length[1] + length[3]))
        stated = max(self.size.sides) / min(self.size.sides)
        return 1 / (stated * _MOST_FORESHORTENING) < seen < stated * _MOST_FORESHORTENING


def stated_size(
    width: float, depth: float, known: Known | None = None, name: str | None = None, radius: float = 0.0
) -> Size:
    """The size of a tile, plate or card that a person states, mm; None takes it as read from a rule of class II.

    Raises UsageError for what is no size.
    """
    sides = (width, depth)
    each = (known, known) if known else (_by_rule(width), _by_rule(depth))
    worst = max(k.std for k in each)
    if not (min(sides) > 0 and 0 < worst < 0.1 * min(sides) and 0 <= radius < 0.4 * min(sides)):
        raise UsageError(
            "rectangle-size",
            f"A rectangle of {width:g} x {depth:g} mm, u = {worst:.2g} mm, cannot be used.",
            "State both sides and how well they are known, in mm, all greater than nought.",
        )
    return Size(name or f"{width:g} x {depth:g} mm", sides, each, radius)


def _by_rule(side: float) -> Known:
    """A side measured with a rule of class II (OIML R 35-1: 0.3 mm + 0.2 mm a started metre)."""
    return Known.within(0.3 + 0.2 * max(1, ceil(side / 1000)))


def named_size(name: str) -> Size:
    """A standard size by its name, whatever its case. Raises UsageError for a name that is none."""
    by_lower = {known.lower(): size for known, size in SIZES.items()}
    if name.lower() not in by_lower:
        raise UsageError(
            "rectangle-name",
            f"'{name}' is no standard size that is known here.",
            f"Name one of {', '.join(SIZES)}, or state the sides in mm.",
        )
    return by_lower[name.lower()]


def rectangle_target(
    label: str, sides: Sides, size: tuple[float, float], known: tuple[Known, Known], setting: Setting
) -> Target:
    """A rectangle's four located edges as something to adjust.

    size, known : (across, up) mm; the origin is its centre
    """
    half = 0.5 * np.array(size)
    outward = np.array([[0.0, -1.0], [1.0, 0.0], [0.0, 1.0], [-1.0, 0.0]])
    counts = [len(edge.points) for edge in sides.edges]
    which = np.repeat(np.arange(4), counts)
    normal = outward[which]
    upright = which % 2

    def misses(points: Array, unknowns: Array) -> tuple[Array, Array, Array]:
        width, depth, lean = unknowns[:3]
        extent = np.where(upright == 1, half[0] + 0.5 * width, half[1] + 0.5 * depth)
        # The upright sides lean by the error of the right angle.
        slope = normal - np.column_stack([np.zeros(len(normal)), lean * normal[:, 0]])
        distance = np.sum(slope * points, axis=1) - extent
        by = np.zeros((len(points), 1, len(unknowns)))
        by[:, 0, 0] = np.where(upright == 1, -0.5, 0.0)
        by[:, 0, 1] = np.where(upright == 1, 0.0, -0.5)
        by[:, 0, 2] = -normal[:, 0] * points[:, 1]
        return distance[:, None], slope[:, None, :], by

    shift = np.zeros((len(which), 8))
    shift[:, 3] = 1.0
    shift[np.arange(len(which)), 4 + which] = 1.0
    unknowns = (
        Unknown("reference size", known[0].std, known[0].shape, f"the width of {label}"),
        Unknown("reference size", known[1].std, known[1].shape, f"the height of {label}"),
        Unknown("reference squareness", SQUARENESS_STD_RAD, "normal", f"the right angle of {label}"),
        Unknown("reference edges (common)", sides.common_bias, "rectangular", f"the edges of {label}"),
        *(Unknown("reference edges (by side)", SIDE_BIAS_PX, "rectangular", f"an edge of {label}") for _ in range(4)),
    )
    corners = half * np.array([[-1.0, -1.0], [1.0, -1.0], [1.0, 1.0], [-1.0, 1.0]])
    return Target(
        label=label,
        pixels=np.concatenate([edge.points for edge in sides.edges]),
        std=np.concatenate([edge.std for edge in sides.edges]),
        misses=misses,
        start=Correspondences(corners, sides.corners),
        outline=corners,
        setting=setting,
        unknowns=unknowns,
        shift=shift,
    )


def _contradicting(label: str) -> Refusal:
    return Refusal(
        "reference-contradicts",
        f"What is seen does not have the proportions of {label} from any side.",
        "Check the stated size and that the point lies on the reference itself.",
    )


def _remedy(camera: AssumedCamera) -> str:
    cropped = " If the picture is cropped or zoomed, state its own 35 mm equivalent focal length."
    return "Check the stated size, and that what was pointed at is the reference and lies flat." + (
        cropped if camera.focal_known else ""
    )


def _distinct(quads: Sequence[Array]) -> list[Array]:
    """The quadrilaterals that differ, each the median of its like, those met most often first."""
    groups: list[list[Array]] = []
    for quad in quads:
        size = float(np.linalg.norm(quad[2] - quad[0]))
        for group in groups:
            if np.linalg.norm(group[0] - quad, axis=1).max() < max(_SAME * size, 3.0):
                group.append(quad)
                break
        else:
            groups.append([quad])
    groups.sort(key=lambda group: -len(group))
    return [np.median(np.stack(group), axis=0) for group in groups]


def _distinct_fits(fits: Sequence[tuple[float, Target, Adjusted]]) -> list[tuple[float, Target, Adjusted]]:
    """One of all fits whose edges came to lie on the same lines: the best."""
    distinct: list[tuple[float, Target, Adjusted]] = []
    for fit in sorted(fits, key=lambda fit: fit[0]):
        corners = fit[1].start.pixels
        if all(np.linalg.norm(corners - other.start.pixels, axis=1).max() > 3.0 for _, other, _ in distinct):
            distinct.append(fit)
    return distinct


def _stated(values: Mapping[str, Any], setting: Setting) -> Rectangle:
    sides = stated_sides(values["size"])
    known = known_size(values)
    radius = values.get("radius", 0.0)
    if sides is not None:
        size = stated_size(*sides, known, radius=radius)
    else:
        size = named_size(values["size"])
        if known is not None or "radius" in values:
            size = replace(stated_size(*size.sides, known or size.known[0], size.name, radius), paper=size.paper)
    return Rectangle(size, values.get("at"), values.get("corner"), setting)


KINDS = (
    Kind(
        "rectangle",
        "a blank rectangle of known size: a sheet of paper, a card, a tile, a plate; its four edges are fitted",
        (
            Key("size", "size", f"a standard size ({', '.join(SIZES)}), or both sides", required=True),
            Key("at", "point", "a pixel on it; else the one rectangle of its proportions is looked for"),
            Key("corner", "point", "its four corners roughly, instead of looking for it; four times", repeated=True),
            Key("u", "length", "standard uncertainty of either side"),
            Key("tolerance", "length", "instead of u: the most that either side may be off"),
            Key("radius", "length", "of rounded corners"),
        ),
        "Paper: the permitted deviations of ISO 216, 1.5 mm up to 150 mm, 2 mm up to 600 mm, 3 mm beyond. ID-1 cards: "
        "the limits of ISO/IEC 7810. Stated sides: as read from a rule of class II (OIML R 35-1), 0.5 mm at most up to "
        "1 m.",
        "rectangle size=150x100 u=0.05 at=1200,800",
        _stated,
    ),
)

__all__ = ["KINDS", "SIZES", "Rectangle", "Size", "named_size", "rectangle_target", "stated_size"]
