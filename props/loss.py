"""Loss of section: what is left after holes, corrosion or charring, beside the full section.

Knows depths that a person states (mm); what rate and time lead to them, and whether the rest is sound, it does not.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np

from .derived import quantify_figures
from .errors import OutlineError, UsageError
from .properties import section_properties
from .result import Quantity
from .section import Part, Points, Section
from .uncertainty import OutlineUncertainty

if TYPE_CHECKING:
    from shapely import Polygon

# Where the loss runs round a re-entrant corner it leaves an arc; chords a quarter turn, area kept to 2e-4 of it.
_CHORDS_A_QUARTER = 16
# Faces turned from a side by more than the angle of this cosine do not look that way.
_LOOKS_THAT_WAY = 1e-6

COMPARED = (
    "area",
    "perimeter",
    "width",
    "depth",
    "second_moment_x",
    "second_moment_y",
    "second_moment_major",
    "second_moment_minor",
    "radius_of_gyration_x",
    "radius_of_gyration_y",
    "section_modulus_top",
    "section_modulus_bottom",
    "section_modulus_left",
    "section_modulus_right",
    "plastic_modulus_x",
    "plastic_modulus_y",
)


@dataclass(frozen=True)
class RoundHole:
    """A drilled or punched hole: centre in section coordinates and diameter, mm."""

    x: float
    y: float
    diameter: float

    def __post_init__(self) -> None:
        if not (math.isfinite(self.x) and math.isfinite(self.y) and 0.0 < self.diameter < math.inf):
            raise UsageError(
                "bad-hole",
                f"A hole has its centre at ({self.x:g}, {self.y:g}) and the diameter {self.diameter:g} mm.",
                "Give a centre and a diameter above 0 mm.",
            )


def with_holes(section: Section, holes: Sequence[RoundHole]) -> Section:
    """The section less round holes.

    Raises OutlineError for a hole that takes nothing away, or if nothing is left.
    """
    from .shapes.circle import circle
    from .shapes.placing import placed

    for hole in holes:
        disc = placed(circle(hole.diameter), hole.x, hole.y)
        section = without(section, disc, f"The hole of {hole.diameter:g} mm at ({hole.x:g}, {hole.y:g})")
    return section


def without(section: Section, removed: Section, what: str = "What is to be removed") -> Section:
    """The section less the region of another one.

    what : how a message begins
    Raises OutlineError if the two have nothing in common, or if nothing is left.
    """
    cut = removed.joined()
    if section.joined().intersection(cut).area <= 0.0:
        raise OutlineError("nothing-removed", f"{what} lies outside the section.", "Check its place.")
    return _each_part(section, lambda polygon: polygon.difference(cut))


def _each_part(section: Section, change: Callable[[Polygon], Any]) -> Section:
    """Every part's polygon changed on its own, materials kept; parts may fall in pieces or vanish."""
    import shapely

    parts: list[Part] = []
    for part in section.parts:
        changed = change(shapely.Polygon(part.shell, part.holes))
        parts += [
            Part(_ring(p.exterior), tuple(_ring(hole) for hole in p.interiors), part.material)
            for p in shapely.get_parts(changed)
            if p.geom_type == "Polygon" and p.area > 0.0
        ]
    if not parts:
        raise OutlineError("nothing-left", "Nothing is left of the section.", "Check the depth of the loss.")
    return Section(tuple(parts))


def _ring(ring: Any) -> Points:
    return np.asarray(ring.coords)[:-1, :2]


@dataclass(frozen=True)
class FaceLoss:
    """Loss by the side that faces look to, mm; measured along the axes, not square to a sloping face."""

    top: float = 0.0
    bottom: float = 0.0
    left: float = 0.0
    right: float = 0.0

    def __post_init__(self) -> None:
        for side, depth in vars(self).items():
            _require_depth(depth, f"loss at the {side}")


def uniform_loss(section: Section, depth: float, inside: bool = True) -> Section:
    """The section less a layer of one depth all round, mm, measured square to its faces.

    inside : whether the faces of holes lose as well (open to the air)
    Convex corners stay sharp, re-entrant ones become round, as a layer of one depth leaves them. Joints between parts
    that touch lose nothing.
    Raises UsageError for a negative depth, OutlineError if nothing is left.
    """
    import shapely

    _require_depth(depth, "loss")
    if depth == 0.0:
        return section

    def change(polygon: Polygon) -> Any:
        if inside:
            return polygon.buffer(-depth, quad_segs=_CHORDS_A_QUARTER)
        shell = shapely.Polygon(polygon.exterior).buffer(-depth, quad_segs=_CHORDS_A_QUARTER)
        return shell.difference(shapely.union_all([shapely.Polygon(hole) for hole in polygon.interiors]))

    joined = section.joined()
    if len(joined.geoms) == len(section.parts):
        return _each_part(section, change)
    left = shapely.union_all([change(polygon) for polygon in joined.geoms])
    return _each_part(section, lambda polygon: polygon.intersection(left))


def face_loss(section: Section, loss: FaceLoss, angle: float = 0.0) -> Section:
    """The section less a layer on all outer faces that look to a side, its own depth a side.

    angle : from x to the direction that counts as right, rad, counter-clockwise; the other sides turn with it
    Faces look up, down, left or right by the direction of their outward normal; a sloping face looks two ways. Holes
    keep their faces; those that the loss reaches open.
    Raises OutlineError if nothing is left.
    """
    import shapely

    right, top = np.array([math.cos(angle), math.sin(angle)]), np.array([-math.sin(angle), math.cos(angle)])
    directions = {"top": top, "bottom": -top, "left": -right, "right": right}
    swept: list[Polygon] = []
    for polygon in section.joined().geoms:
        start = Part(_ring(polygon.exterior)).shell
        end = np.roll(start, -1, axis=0)
        along = end - start
        normal = np.column_stack([along[:, 1], -along[:, 0]]) / np.hypot(*along.T)[:, None]
        for side, direction in directions.items():
            depth = getattr(loss, side)
            if depth == 0.0:
                continue
            step = -depth * direction
            for i in np.flatnonzero(normal @ direction > _LOOKS_THAT_WAY):
                swept.append(shapely.Polygon([start[i], end[i], end[i] + step, start[i] + step]))
    if not swept:
        return section
    lost = shapely.union_all(swept)
    return _each_part(section, lambda polygon: polygon.difference(lost))


def _require_depth(depth: float, what: str) -> None:
    if not 0.0 <= depth < math.inf:
        raise UsageError("bad-loss", f"The {what} is {depth:g} mm.", "Give a depth of 0 mm or more.")


@dataclass(frozen=True)
class Comparison:
    """A property of the full and of the remaining section, and remaining over full."""

    full: float
    remaining: float
    ratio: float


def compare(full: Section, remaining: Section) -> dict[str, Comparison]:
    """Properties of COMPARED of both sections side by side; moments about each section's own centroid."""
    before, after = section_properties(full), section_properties(remaining)
    return {name: Comparison(before[name], after[name], after[name] / before[name]) for name in COMPARED}


def quantify_remaining(full: Section, remaining: Section, uncertainty: OutlineUncertainty) -> dict[str, Quantity]:
    """Ratios remaining over full, the remaining section measured, the full one a nominal drawing taken as exact.

    uncertainty : of the outline of `remaining`
    Raises UsageError where the uncertainty is not that of that outline.
    """
    before = section_properties(full)

    def figures(moved: Section) -> Mapping[str, float]:
        after = section_properties(moved)
        return {name: after[name] / before[name] for name in COMPARED}

    return quantify_figures(remaining, uncertainty, figures, dict.fromkeys(COMPARED, "1"))


def quantify_loss(
    full: Section, lose: Callable[[Section], Section], uncertainty: OutlineUncertainty
) -> dict[str, Quantity]:
    """Ratios remaining over full, the full section measured and the loss stated.

    lose : function from the full section to the remaining one, for instance `lambda s: uniform_loss(s, 2.0)`
    uncertainty : of the outline of `full`; what is common to both sections, such as a wrong scale, cancels as far as
        it does
    Raises UsageError where the uncertainty is not that of that outline, and what `lose` raises.
    """

    def figures(moved: Section) -> Mapping[str, float]:
        return {name: pair.ratio for name, pair in compare(moved, lose(moved)).items()}

    return quantify_figures(full, uncertainty, figures, dict.fromkeys(COMPARED, "1"))
