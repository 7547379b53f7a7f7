"""Sections of several materials: the transformed section, stresses in it, its mass and its plastic moments.

Elastic: plane sections stay plane and the materials do not slip; every area counts n = E / E_ref times. Plastic:
every material yields alike in tension and compression at its strength, with unlimited strain. Creep, cracking and
slip are left to the person's moduli.
"""

from __future__ import annotations

import itertools
import math
from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass, replace
from functools import cached_property

import numpy as np
from numpy.typing import NDArray

from .axes import PrincipalAxes, principal_axes
from .derived import Figures, quantify_figures
from .errors import UsageError
from .integrals import Boundary, boundary, moments
from .result import Quantity
from .section import Material, Part, Section
from .stress import Forces, Stress, beyond_cut
from .uncertainty import OutlineUncertainty

Floats = NDArray[np.float64]


@dataclass(frozen=True)
class Region:
    """One part of a composite section.

    ratio : n = E / E_ref
    area, centroid : of the part itself, mm^2, (x, y) mm
    first_moment_x, first_moment_y : n times the first moment of the part about the composite's x and y axes, mm^3.
        Shear flow between this part and all it is joined to is V_y first_moment_x / second_moment_x (about principal
        axes).
    """

    material: Material
    ratio: float
    area: float
    centroid: tuple[float, float]
    first_moment_x: float
    first_moment_y: float


@dataclass(frozen=True)
class Interface:
    """The common boundary of two regions, a joint that connectors bridge.

    regions : their numbers, from 0; length : mm
    beyond : numbers of the regions on the first one's side, if the joint alone parts the section in two; else none
    first_moment_x, first_moment_y : of all beyond it, n times the first moment about the composite's x and y axes,
        mm^3; the shear flow over the joint is V_y first_moment_x / second_moment_x (about principal axes)
    """

    regions: tuple[int, int]
    length: float
    beyond: tuple[int, ...]
    first_moment_x: float
    first_moment_y: float


@dataclass(frozen=True)
class Transformed:
    """A composite section as one of the reference material.

    reference_modulus : E_ref, MPa
    area, second_moment_x, second_moment_y, product_moment : of the transformed section, about its centroid, mm
    centroid : (x, y), mm
    principal : principal axes of the transformed section
    mass_per_metre : kg/m; None if a material has no density
    """

    section: Section
    reference_modulus: float
    area: float
    centroid: tuple[float, float]
    second_moment_x: float
    second_moment_y: float
    product_moment: float
    principal: PrincipalAxes
    regions: tuple[Region, ...]
    mass_per_metre: float | None

    @cached_property
    def interfaces(self) -> tuple[Interface, ...]:
        """Where two regions touch."""
        return _interfaces(self.section, self.regions)

    @property
    def axial_stiffness(self) -> float:
        """E A, N."""
        return self.reference_modulus * self.area

    @property
    def bending_stiffness_x(self) -> float:
        """E I about x, N mm^2."""
        return self.reference_modulus * self.second_moment_x

    @property
    def bending_stiffness_y(self) -> float:
        """E I about y, N mm^2."""
        return self.reference_modulus * self.second_moment_y

    @property
    def bending_stiffness_major(self) -> float:
        """E I about the major axis, N mm^2."""
        return self.reference_modulus * self.principal.major

    @property
    def bending_stiffness_minor(self) -> float:
        """E I about the minor axis, N mm^2."""
        return self.reference_modulus * self.principal.minor


def transformed_section(section: Section, reference_modulus: float | None = None) -> Transformed:
    """The transformed section of parts with moduli of elasticity.

    reference_modulus : E_ref, MPa; that of the first part if not given
    Raises UsageError if a part has no positive modulus.
    """
    materials = [_material(part, number) for number, part in enumerate(section.parts, start=1)]
    moduli = [_required(material.elastic_modulus, material, "modulus of elasticity") for material in materials]
    reference = moduli[0] if reference_modulus is None else reference_modulus
    if not (math.isfinite(reference) and reference > 0.0):
        raise UsageError("bad-modulus", f"The reference modulus is {reference:g} MPa.", "Give one above 0 MPa.")
    ratios = np.array(moduli) / reference
    origin = section.vertices.mean(axis=0)
    own = [moments(_about(part, origin)) for part in section.parts]
    areas = np.array([m.area for m in own])
    firsts = np.array([[m.first_y, m.first_x] for m in own])
    area = float(ratios @ areas)
    centre = ratios @ firsts / area
    # Parallel axes back to the centroid from an origin inside the section: little is lost.
    second_x = float(sum(n * m.second_x for n, m in zip(ratios, own, strict=True)) - area * centre[1] ** 2)
    second_y = float(sum(n * m.second_y for n, m in zip(ratios, own, strict=True)) - area * centre[0] ** 2)
    product = float(sum(n * m.product for n, m in zip(ratios, own, strict=True)) - area * centre[0] * centre[1])
    about_centroid = ratios[:, None] * (firsts - areas[:, None] * centre)
    regions = tuple(
        Region(
            material,
            float(ratio),
            float(part_area),
            _pair(first / part_area + origin),
            float(transformed[1]),
            float(transformed[0]),
        )
        for material, ratio, part_area, first, transformed in zip(
            materials, ratios, areas, firsts, about_centroid, strict=True
        )
    )
    densities = [material.density for material in materials]
    mass = None
    if all(density is not None for density in densities):
        mass = float(sum(d * a for d, a in zip(densities, areas, strict=True) if d is not None)) * 1e-6
    return Transformed(
        section,
        reference,
        area,
        _pair(centre + origin),
        second_x,
        second_y,
        product,
        principal_axes(second_x, second_y, product),
        regions,
        mass,
    )


@dataclass(frozen=True)
class RegionStress:
    """Largest and smallest normal stress in one region, with their places on its outline (tension positive)."""

    material: Material
    largest: Stress
    smallest: Stress


def region_stresses(transformed: Transformed, forces: Forces) -> tuple[RegionStress, ...]:
    """Normal stresses in every region from axial force (through the transformed centroid) and moments, MPa.

    forces : see `stress.Forces`; shear and torque are not used
    """
    slope = np.linalg.solve(
        [
            [transformed.second_moment_y, transformed.product_moment],
            [transformed.product_moment, transformed.second_moment_x],
        ],
        np.array([forces.moment_y, forces.moment_x], float),
    )
    found: list[RegionStress] = []
    for part, region in zip(transformed.section.parts, transformed.regions, strict=True):
        points = np.concatenate(part.loops)
        stress = region.ratio * (forces.axial / transformed.area + (points - transformed.centroid) @ slope)
        high, low = int(np.argmax(stress)), int(np.argmin(stress))
        found.append(
            RegionStress(
                region.material,
                Stress(float(stress[high]), _pair(points[high])),
                Stress(float(stress[low]), _pair(points[low])),
            )
        )
    return tuple(found)


@dataclass(frozen=True)
class PlasticMoment:
    """Full plastic moment for bending about one axis without axial force.

    value : N mm
    axis : mm, section coordinate of the plastic axis: y for bending about x, x for bending about y
    """

    value: float
    axis: float


def plastic_moments(section: Section) -> tuple[PlasticMoment, PlasticMoment]:
    """Full plastic moments about x and about y of parts with yield strengths.

    Raises UsageError if a part has no positive yield strength.
    """
    materials = [_material(part, number) for number, part in enumerate(section.parts, start=1)]
    strengths = [_required(material.yield_strength, material, "yield strength") for material in materials]
    origin = section.vertices.mean(axis=0)
    edges = [_about(part, origin) for part in section.parts]
    about_x = _plastic_moment(edges, strengths, float(origin[1]))
    about_y = _plastic_moment([edge.swapped() for edge in edges], strengths, float(origin[0]))
    return about_x, about_y


def _plastic_moment(edges: Sequence[Boundary], strengths: Sequence[float], shift: float) -> PlasticMoment:
    whole = [moments(edge) for edge in edges]
    force = sum(f * m.area for f, m in zip(strengths, whole, strict=True))
    low = min(float(edge.start[1].min()) for edge in edges)
    high = max(float(edge.start[1].max()) for edge in edges)

    def force_above(level: float) -> float:
        return sum(f * beyond_cut(edge, level)[0] for f, edge in zip(strengths, edges, strict=True))

    # Half the force lies above the axis; in a gap any level balances, and the middle of the gap is taken.
    lower = _level(lambda y: force_above(y) > (0.5 + 1e-12) * force, low, high)
    upper = _level(lambda y: force_above(y) >= (0.5 - 1e-12) * force, low, high)
    axis = 0.5 * (lower + upper)
    moment = 0.0
    for f, edge, m in zip(strengths, edges, whole, strict=True):
        area, _, first, _ = beyond_cut(edge, axis)
        moment += f * (2.0 * (first - axis * area) - (m.first_x - axis * m.area))
    return PlasticMoment(moment, axis + shift)


def _level(is_below: Callable[[float], bool], low: float, high: float) -> float:
    """The highest level for which the condition holds, which it does from `low` up to there."""
    for _ in range(200):
        middle = 0.5 * (low + high)
        if middle in (low, high):
            break
        low, high = (middle, high) if is_below(middle) else (low, middle)
    return 0.5 * (low + high)


UNITS: Mapping[str, str] = {
    "area": "mm^2",
    "centroid_x": "mm",
    "centroid_y": "mm",
    "second_moment_x": "mm^4",
    "second_moment_y": "mm^4",
    "product_moment": "mm^4",
    "axial_stiffness": "N",
    "bending_stiffness_x": "N mm^2",
    "bending_stiffness_y": "N mm^2",
}


def quantify_transformed(
    section: Section,
    uncertainty: OutlineUncertainty,
    modulus_std: Mapping[str, float] | None = None,
    reference_modulus: float | None = None,
) -> dict[str, Quantity]:
    """Figures of the transformed section (names of UNITS) with the uncertainty of the outline and of the moduli.

    modulus_std : material name -> relative standard uncertainty of its modulus; independent of one another
    reference_modulus : E_ref, MPa, taken as exact; the stated modulus of the first part if not given
    Raises UsageError as `transformed_section`, and where the uncertainty is not that of this outline.
    """
    reference = transformed_section(section, reference_modulus).reference_modulus

    def figures(moved: Section) -> dict[str, float]:
        t = transformed_section(moved, reference)
        return {
            "area": t.area,
            "centroid_x": t.centroid[0],
            "centroid_y": t.centroid[1],
            "second_moment_x": t.second_moment_x,
            "second_moment_y": t.second_moment_y,
            "product_moment": t.product_moment,
            "axial_stiffness": t.axial_stiffness,
            "bending_stiffness_x": t.bending_stiffness_x,
            "bending_stiffness_y": t.bending_stiffness_y,
        }

    def with_modulus(name: str, factor: float) -> Figures:
        return lambda moved: figures(_scaled_modulus(moved, name, factor))

    inputs = {
        f"modulus of elasticity of {name}": (with_modulus(name, 1.0 - std), with_modulus(name, 1.0 + std))
        for name, std in (modulus_std or {}).items()
    }
    return quantify_figures(section, uncertainty, figures, UNITS, inputs)


def _scaled_modulus(section: Section, name: str, factor: float) -> Section:
    parts: list[Part] = []
    for part in section.parts:
        material = part.material
        if material is not None and material.name == name and material.elastic_modulus is not None:
            material = replace(material, elastic_modulus=factor * material.elastic_modulus)
        parts.append(replace(part, material=material))
    return Section(tuple(parts))


def quantify_regions(
    section: Section, uncertainty: OutlineUncertainty, reference_modulus: float | None = None
) -> tuple[dict[str, Quantity], ...]:
    """`area`, mm^2, `first_moment_x` and `first_moment_y`, mm^3, of every region, as in `Region`. The moduli are exact.

    Raises UsageError as `transformed_section`, and where the uncertainty is not that of this outline.
    """
    reference = transformed_section(section, reference_modulus).reference_modulus
    units = {"area": "mm^2", **dict.fromkeys(_FIRST_MOMENTS, "mm^3")}

    def figures(moved: Section) -> dict[str, float]:
        regions = transformed_section(moved, reference).regions
        return {f"{name} {n}": getattr(region, name) for n, region in enumerate(regions) for name in units}

    count = len(section.parts)
    numbered = {f"{name} {n}": unit for n in range(count) for name, unit in units.items()}
    found = quantify_figures(section, uncertainty, figures, numbered)
    return tuple({name: found[f"{name} {n}"] for name in units} for n in range(count))


def quantify_joints(
    section: Section, uncertainty: OutlineUncertainty, reference_modulus: float | None = None
) -> tuple[dict[str, Quantity], ...]:
    """`first_moment_x` and `first_moment_y`, mm^3, for every interface of the transformed section, in its order.

    Empty for an interface that does not part the section in two. The moduli are exact.
    Raises UsageError as `transformed_section`, and where the uncertainty is not that of this outline.
    """
    transformed = transformed_section(section, reference_modulus)
    beyond = [joint.beyond for joint in transformed.interfaces]

    def figures(moved: Section) -> dict[str, float]:
        regions = transformed_section(moved, transformed.reference_modulus).regions
        return {
            f"{name} {n}": sum(getattr(regions[r], name) for r in members)
            for n, members in enumerate(beyond)
            for name in _FIRST_MOMENTS
        }

    units = {f"{name} {n}": "mm^3" for n in range(len(beyond)) for name in _FIRST_MOMENTS}
    found = quantify_figures(section, uncertainty, figures, units) if any(beyond) else {}
    return tuple(
        {name: found[f"{name} {n}"] for name in _FIRST_MOMENTS} if members else {} for n, members in enumerate(beyond)
    )


_FIRST_MOMENTS = ("first_moment_x", "first_moment_y")


def _interfaces(section: Section, regions: Sequence[Region]) -> tuple[Interface, ...]:
    """Boundaries that two parts have in common, within 0.001 mm."""
    import shapely

    polygons = [shapely.Polygon(part.shell, part.holes) for part in section.parts]
    common: dict[tuple[int, int], float] = {}
    for (i, first), (j, second) in itertools.combinations(enumerate(polygons), 2):
        if first.distance(second) > 1e-3:
            continue
        # Both sides of a strip about the second outline: the part of the first outline within it, ends left out.
        length = float(first.boundary.intersection(second.boundary.buffer(1e-3)).length)
        if length > 0.01:
            common[i, j] = length
    found: list[Interface] = []
    for (i, j), length in common.items():
        beyond = _hanging_together(i, [pair for pair in common if pair != (i, j)])
        beyond = () if j in beyond else beyond
        moments_of = [sum(getattr(regions[r], name) for r in beyond) for name in _FIRST_MOMENTS]
        found.append(Interface((i, j), length, beyond, float(moments_of[0]), float(moments_of[1])))
    return tuple(found)


def _hanging_together(first: int, pairs: Sequence[tuple[int, int]]) -> tuple[int, ...]:
    """The numbers that pairs connect with the first, itself included."""
    found, waiting = {first}, [first]
    while waiting:
        here = waiting.pop()
        for pair in pairs:
            if here in pair:
                other = pair[1] if pair[0] == here else pair[0]
                if other not in found:
                    found.add(other)
                    waiting.append(other)
    return tuple(sorted(found))


def _material(part: Part, number: int) -> Material:
    if part.material is None:
        raise UsageError("no-material", f"Part {number} of the section has no material.", "Give every part a material.")
    return part.material


def _required(value: float | None, material: Material, what: str) -> float:
    if value is None or not (math.isfinite(value) and value > 0.0):
        raise UsageError(
            "no-material-value",
            f"The {what} of {material.name!r} is {'not given' if value is None else f'{value:g} MPa'}.",
            "Give one above 0 MPa.",
        )
    return value


def _about(part: Part, origin: Floats) -> Boundary:
    """The edges of one part about an origin in section coordinates."""
    edges = boundary(Section((part,)))
    shift = (edges.origin - origin)[:, None]
    return replace(edges, origin=origin, start=edges.start + shift, end=edges.end + shift)


def _pair(point: Floats) -> tuple[float, float]:
    return float(point[0]), float(point[1])
