"""Stresses of a linear elastic member from given forces: figures to see where the section works, no check to a code.

Normal stress is linear over the section (plane sections stay plane). Shear from a shear force is the mean over
straight cuts, from the first moment beyond the cut; shear from torsion is that of Saint-Venant along the outline.
Warping, buckling, stress raised by holes and fillets, residual stress and several materials are not looked at.
"""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import ArrayLike, NDArray

from .derived import quantify_figures
from .errors import UsageError
from .integrals import Boundary
from .properties import analyse
from .result import Quantity
from .section import Section
from .uncertainty import OutlineUncertainty

if TYPE_CHECKING:
    from .field import FieldProperties

Floats = NDArray[np.float64]

# Cuts between two levels of vertices, where the shear varies smoothly, and the most levels looked at.
_CUTS_BETWEEN = 5
_MOST_LEVELS = 400
# The stretch about a known cut, in parts of the depth, in which it may shift as the outline moves.
_NEAR = 0.02
# Edges times cuts at a time: the arrays stay in the processor's cache.
_AT_ONCE = 100_000


@dataclass(frozen=True)
class Forces:
    """Forces on a section: N and N mm.

    axial : tension positive, through the centroid
    shear_x, shear_y : along x and y, through the shear centre
    moment_x : integral of stress times y: positive pulls at the top
    moment_y : integral of stress times x: positive pulls at the right
    torque : about the shear centre
    """

    axial: float = 0.0
    shear_x: float = 0.0
    shear_y: float = 0.0
    moment_x: float = 0.0
    moment_y: float = 0.0
    torque: float = 0.0

    def __post_init__(self) -> None:
        if not all(math.isfinite(value) for value in vars(self).values()):
            raise UsageError("bad-force", "A force is not a finite number.", "Give forces in N and moments in N mm.")


@dataclass(frozen=True)
class Stress:
    """A stress, MPa, and where it acts, (x, y) in section coordinates, mm."""

    value: float
    place: tuple[float, float]


@dataclass(frozen=True)
class NeutralAxis:
    """The line without normal stress: its point next to the centroid, mm, and its angle from x, rad, in (-pi/2, pi/2].

    crosses : whether it crosses the section
    """

    point: tuple[float, float]
    angle: float
    crosses: bool


@dataclass(frozen=True)
class NormalStress:
    """Normal stress at_centroid + slope . (place - centroid): MPa, MPa/mm, mm.

    largest, smallest : with their places on the outline (tension positive)
    neutral_axis : None where the stress is the same everywhere
    """

    at_centroid: float
    slope: tuple[float, float]
    centroid: tuple[float, float]
    largest: Stress
    smallest: Stress
    neutral_axis: NeutralAxis | None

    def at(self, points: ArrayLike) -> Floats:
        """Stress, MPa, at points (n, 2) in section coordinates."""
        return self.at_centroid + (np.asarray(points, float) - self.centroid) @ np.array(self.slope)


def normal_stress(section: Section, forces: Forces) -> NormalStress:
    """Linear elastic normal stress from axial force and both moments, MPa.

    Raises OutlineError if the section's area is not positive.
    """
    analysis = analyse(section)
    area, _, _, second_x, second_y, product = analysis.moments
    base = forces.axial / area
    slope = np.linalg.solve(
        [[second_y, product], [product, second_x]], np.array([forces.moment_y, forces.moment_x], float)
    )
    centroid = analysis.edges.origin
    vertices = section.vertices
    stress = base + slope @ analysis.edges.start
    high, low = int(np.argmax(stress)), int(np.argmin(stress))
    steepness = float(np.hypot(*slope))
    axis = None
    if steepness > 0.0:
        point = centroid - base * slope / steepness**2
        angle = math.atan2(slope[0], -slope[1])
        angle -= math.pi * math.ceil(angle / math.pi - 0.5)
        axis = NeutralAxis((float(point[0]), float(point[1])), angle, bool(stress[low] < 0.0 < stress[high]))
    return NormalStress(
        base,
        (float(slope[0]), float(slope[1])),
        (float(centroid[0]), float(centroid[1])),
        Stress(float(stress[high]), _place(vertices[high])),
        Stress(float(stress[low]), _place(vertices[low])),
        axis,
    )


@dataclass(frozen=True)
class CutShear:
    """Mean shear stress over a straight cut right across the section.

    value : MPa, largest of all cuts square to the force
    level : mm, y of the cut (for a force along y), or x (for one along x), section coordinates
    width : mm, material on the cut
    """

    value: float
    level: float
    width: float


def cut_shear(section: Section, forces: Forces, near: tuple[float, float] | None = None) -> tuple[CutShear, CutShear]:
    """Largest mean shear over cuts across the section: for cuts along y (from shear_x) and along x (from shear_y).

    Shear force V over a cut of width b is V S / (I b), S the first moment beyond the cut, generalised to axes that
    are not principal. Both shear forces count on both families of cuts.
    near : look only about these places (x of a cut along y, y of one along x), mm
    Raises OutlineError if the section's area is not positive.
    """
    analysis = analyse(section)
    _, _, _, second_x, second_y, product = analysis.moments
    # How fast the stress plane tilts along the member.
    moments_growth = np.array([forces.shear_x, forces.shear_y])
    tilt = np.asarray(np.linalg.solve([[second_y, product], [product, second_x]], moments_growth), dtype=np.float64)
    centroid = analysis.edges.origin
    x, y = (None, None) if near is None else near
    upright = _largest_cut(analysis.edges.swapped(), tilt[::-1], float(centroid[0]), x)
    level = _largest_cut(analysis.edges, tilt, float(centroid[1]), y)
    return upright, level


def _largest_cut(edges: Boundary, tilt: Floats, shift: float, near: float | None) -> CutShear:
    ys = np.unique(edges.start[1])
    depth = float(ys[-1] - ys[0])
    if near is not None:
        # With the levels next to the stretch looked at, so that it is never empty.
        inside = np.abs(ys - (near - shift)) <= _NEAR * depth
        ys = ys[inside | np.roll(inside, 1) | np.roll(inside, -1)] if inside.any() else ys
    if len(ys) > _MOST_LEVELS:
        ys = ys[np.linspace(0, len(ys) - 1, _MOST_LEVELS).astype(int)]
    inner = (np.arange(_CUTS_BETWEEN) + 0.5) / _CUTS_BETWEEN
    # Next to a level, where a width jumps, and in between; and at the centroid.
    beside = np.concatenate([[1e-6], inner, [1.0 - 1e-6]])
    levels = np.concatenate([(ys[:-1, None] + beside * np.diff(ys)[:, None]).ravel(), [1e-9 * depth]])
    _, widths, first_x, first_y = beyond_cuts(edges, levels)
    flow = np.abs(tilt[0] * first_y + tilt[1] * first_x)
    # A cut at the very rim of a curved outline is of no width and carries nothing.
    shear = np.divide(flow, widths, out=np.zeros_like(flow), where=widths > 1e-9 * depth)
    worst = int(np.argmax(shear))
    return CutShear(float(shear[worst]), float(levels[worst]) + shift, float(widths[worst]))


def quantify_cut_shear(section: Section, forces: Forces, uncertainty: OutlineUncertainty) -> dict[str, Quantity]:
    """`upright_cut_shear` and `level_cut_shear`, MPa, as `cut_shear` has them, with the uncertainty of the outline.

    The cut may shift a little as the outline moves. The forces are exact.
    Raises UsageError where the uncertainty is not that of this outline.
    """
    upright, level = cut_shear(section, forces)

    def figures(moved: Section) -> dict[str, float]:
        found = cut_shear(moved, forces, (upright.level, level.level))
        return {"upright_cut_shear": found[0].value, "level_cut_shear": found[1].value}

    units = {"upright_cut_shear": "MPa", "level_cut_shear": "MPa"}
    return quantify_figures(section, uncertainty, figures, units)


def beyond_cut(edges: Boundary, level: float) -> tuple[float, float, float, float]:
    """What lies above y = level; see `beyond_cuts`."""
    area, width, of_y, of_x = (float(values[0]) for values in beyond_cuts(edges, np.array([level])))
    return area, width, of_y, of_x


def beyond_cuts(edges: Boundary, levels: Floats) -> tuple[Floats, Floats, Floats, Floats]:
    """What lies above each y of levels (m,), about the edges' origin, all (m,).

    Returns the area above, mm^2, the width of the cut, mm, and the integrals of y and of x over the area above, mm^3.
    Every integral is a sum over edges of an integral of dy along the piece above; along the cut itself dy = 0.
    """
    rows = max(1, _AT_ONCE // edges.start.shape[1])
    pieces = [_beyond(edges, levels[i : i + rows, None]) for i in range(0, len(levels), rows)]
    area, width, of_y, of_x = (np.concatenate(column) for column in zip(*pieces, strict=True))
    return area, width, of_y, of_x


def _beyond(edges: Boundary, level: Floats) -> tuple[Floats, Floats, Floats, Floats]:
    (x0, y0), (x1, y1) = edges.start, edges.end
    above0, above1 = y0 > level, y1 > level
    crossing = above0 != above1
    with np.errstate(divide="ignore", invalid="ignore"):
        x_cut = x0 + (x1 - x0) * ((level - y0) / (y1 - y0))
    width = np.sum(np.where(crossing, np.where(above1, x_cut, -x_cut), 0.0), axis=1)
    ax, ay = np.where(above0, x0, x_cut), np.where(above0, y0, level)
    bx, by = np.where(above1, x1, x_cut), np.where(above1, y1, level)
    kept = above0 | above1
    ax, ay, bx, by = (np.where(kept, values, 0.0) for values in (ax, ay, bx, by))
    rise = by - ay
    area = np.sum(rise * (ax + bx), axis=1) / 2.0
    of_y = np.sum(rise * (ay * (2.0 * ax + bx) + by * (ax + 2.0 * bx)), axis=1) / 6.0
    of_x = np.sum(rise * (ax * ax + ax * bx + bx * bx), axis=1) / 6.0
    return area, width, of_y, of_x


def torsional_shear(field: FieldProperties, torque: float) -> Stress:
    """Largest Saint-Venant shear stress along the outline from a torque in N mm, MPa.

    field : torsion properties of the section. The slope of the stress function at the outline is the square root of
    what a mm of outward movement there adds to the torsion constant, mm of outline by mm.
    At sharp re-entrant corners the elastic stress has no limit; there the figure depends on how fine the solution is.
    """
    density = np.maximum(field.sensitivity.density("torsion_constant"), 0.0)
    worst = int(np.argmax(density))
    value = abs(torque) / field.values["torsion_constant"] * math.sqrt(float(density[worst]))
    return Stress(value, _place(field.sensitivity.points[worst]))


_UNITS: Mapping[str, str] = {"stress_at_centroid": "MPa", "largest_stress": "MPa", "smallest_stress": "MPa"}


def quantify_normal_stress(section: Section, forces: Forces, uncertainty: OutlineUncertainty) -> dict[str, Quantity]:
    """`stress_at_centroid`, `largest_stress` and `smallest_stress`, MPa, with the uncertainty of the outline.

    The forces are exact. Raises UsageError where the uncertainty is not that of this outline.
    """

    def figures(moved: Section) -> dict[str, float]:
        found = normal_stress(moved, forces)
        return {
            "stress_at_centroid": found.at_centroid,
            "largest_stress": found.largest.value,
            "smallest_stress": found.smallest.value,
        }

    return quantify_figures(section, uncertainty, figures, _UNITS)


def _place(point: Floats) -> tuple[float, float]:
    return float(point[0]), float(point[1])
