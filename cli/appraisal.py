"""What a person asks of a section beyond its properties: torsion, own axes, stresses, loss, several materials.

Knows which functions of `props` answer which question, and how an outline's uncertainty goes along. Shows and writes
nothing. A section from a drawing has no uncertainty of its outline; what is solved numerically has that of the
solution.
"""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import dataclass, field, replace
from typing import TYPE_CHECKING, Any

import numpy as np

from ..props.about import quantify_about
from ..props.composite import (
    PlasticMoment,
    RegionStress,
    Transformed,
    plastic_moments,
    quantify_joints,
    quantify_regions,
    quantify_transformed,
    region_stresses,
    transformed_section,
)
from ..props.derived import quantify_figures
from ..props.enclosing import enclosing_angle
from ..props.errors import UsageError
from ..props.loss import Comparison, compare, quantify_loss
from ..props.properties import PROPERTIES, section_properties
from ..props.result import Contribution, Notice, Quantity
from ..props.section import Material, Section
from ..props.stress import (
    CutShear,
    Forces,
    NeutralAxis,
    NormalStress,
    Stress,
    cut_shear,
    normal_stress,
    quantify_cut_shear,
    quantify_normal_stress,
    torsional_shear,
)
from ..props.uncertainty import OutlineUncertainty, coverage_half_width, quantify
from .typed import Axis, Loss, typed_axis, typed_forces, typed_holes, typed_loss, typed_materials, with_materials

if TYPE_CHECKING:
    from ..props.field import FieldProperties

# Share of a figure's variance from which on its numerical error is worth a word.
_NUMERICAL = "numerical solution"
_NUMERICAL_SHARE = 0.1
# A face this far askew, rad, loses unevenly by a fiftieth of its length.
_ASKEW = 0.02


@dataclass(frozen=True)
class Questions:
    """What is asked of every section of a run.

    torsion : torsion, warping, shear centre, shear areas and monosymmetry too
    diaphragms : whether separate parts are held to one shape
    reference_material : name of the one in which a transformed section is expressed; None for that of the first part
    stated : the questions as they were typed, for the document
    """

    torsion: bool = False
    poisson_ratio: float = 0.0
    tolerance: float = 1e-3
    diaphragms: bool = False
    axis: Axis | None = None
    forces: Forces | None = None
    loss: Loss | None = None
    materials: Mapping[int, Material] = field(default_factory=dict)
    reference_material: str | None = None
    stated: Mapping[str, Any] = field(default_factory=dict)

    @classmethod
    def typed(cls, stated: Mapping[str, Any]) -> Questions:
        """The questions from what was typed, by the names of the fields.

        Raises UsageError for a text that does not say what it must.
        """
        tolerance = stated.get("tolerance", 1e-3)
        if not 1e-6 <= tolerance <= 0.05:
            raise UsageError(
                "bad-tolerance",
                f"The numerical error to reach is {100 * tolerance:g} %.",
                "Give one from 0.0001 to 5 %, for instance --tolerance 0.1.",
            )
        return cls(
            torsion=stated.get("torsion", False),
            poisson_ratio=stated.get("poisson_ratio", 0.0),
            tolerance=tolerance,
            diaphragms=stated.get("diaphragms", False),
            axis=typed_axis(stated["axis"]) if "axis" in stated else None,
            forces=typed_forces(stated["forces"]) if "forces" in stated else None,
            loss=_typed_loss(stated),
            materials=typed_materials(stated.get("material", ())),
            reference_material=stated.get("reference_material"),
            stated=stated,
        )


@dataclass(frozen=True)
class AboutAxis:
    """Properties about axes of a person's own; names of `props.about.UNITS`."""

    axis: Axis
    origin: tuple[float, float]
    quantities: Mapping[str, Quantity]


@dataclass(frozen=True)
class Stresses:
    """Linear elastic stresses from stated forces.

    quantities : `largest_stress`, `smallest_stress`, `stress_at_centroid` (one material alone)
    regions : of a section of several materials, by part
    region_quantities : part by part, `largest_stress` and `smallest_stress`
    cuts : mean shear over upright and over level cuts
    torsional : largest shear from torsion along the outline
    shear : `upright_cut_shear`, `level_cut_shear`, `torsional_shear`, those that are asked for
    """

    forces: Forces
    normal: NormalStress | None
    neutral_axis: NeutralAxis | None
    quantities: Mapping[str, Quantity]
    regions: tuple[RegionStress, ...] = ()
    region_quantities: tuple[Mapping[str, Quantity], ...] = ()
    cuts: tuple[CutShear, CutShear] | None = None
    torsional: Stress | None = None
    shear: Mapping[str, Quantity] = field(default_factory=dict)


@dataclass(frozen=True)
class AfterLoss:
    """The section before and after a loss, and the ratios with their uncertainty.

    angle : from x to the right side that a loss by sides means, rad
    """

    loss: Loss
    angle: float
    remaining: Section
    comparison: Mapping[str, Comparison]
    ratios: Mapping[str, Quantity]


@dataclass(frozen=True)
class SeveralMaterials:
    """The transformed section; plastic moments about x and y where every part has a strength.

    regions : area and first moments of each of `transformed.regions`
    joints : for each of `transformed.interfaces`, first moments of what lies beyond it; empty where it parts nothing
    """

    transformed: Transformed
    quantities: Mapping[str, Quantity]
    regions: tuple[Mapping[str, Quantity], ...]
    joints: tuple[Mapping[str, Quantity], ...]
    plastic: tuple[PlasticMoment, PlasticMoment] | None


@dataclass(frozen=True)
class Appraisal:
    """Everything found out about one section.

    quantities : all properties, those of torsion and shear included where asked for
    field : the numerical solution behind them
    """

    section: Section
    quantities: Mapping[str, Quantity]
    field: FieldProperties | None = None
    about: AboutAxis | None = None
    stresses: Stresses | None = None
    after_loss: AfterLoss | None = None
    materials: SeveralMaterials | None = None
    notices: tuple[Notice, ...] = ()


def drawn_quantities(section: Section, density: float | None = None) -> dict[str, Quantity]:
    """The properties of an outline that is taken as drawn: without uncertainty (std is not a number)."""
    values = section_properties(section, density)
    return {name: _as_drawn(Quantity(value, PROPERTIES[name].unit, 0.0, (0.0, 0.0))) for name, value in values.items()}


def appraise(
    section: Section,
    questions: Questions,
    quantities: Mapping[str, Quantity],
    uncertainty: OutlineUncertainty | None = None,
) -> Appraisal:
    """Answer the questions about a section.

    quantities : its properties
    uncertainty : of its outline; None for an outline taken as drawn
    Raises UsageError for a question that cannot be put to this section, OutlineError where nothing of it is left or
    it cannot be solved.
    """
    section = with_materials(section, questions.materials)
    outline = uncertainty or OutlineUncertainty()

    def known(found: Mapping[str, Quantity]) -> Mapping[str, Quantity]:
        return found if uncertainty is not None else {name: _as_drawn(q) for name, q in found.items()}

    notices: list[Notice] = []
    solution = None
    if questions.torsion or (questions.forces is not None and questions.forces.torque):
        from ..props.field import field_properties

        solution = field_properties(
            section,
            poisson_ratio=questions.poisson_ratio,
            tolerance=questions.tolerance,
            connected=questions.diaphragms,
        )
        values = {**section_properties(section), **solution.values}
        solved = known({n: q for n, q in quantify(section, values, outline, solution).items() if n in solution.values})
        quantities = {**quantities, **{n: _with_numerical_error(q, solution.error[n]) for n, q in solved.items()}}
        notices += _notices_of(solution, quantities)
    about = None
    if questions.axis is not None:
        axis = questions.axis
        centroid = (quantities["centroid_x"].value, quantities["centroid_y"].value)
        found = known(quantify_about(section, outline, axis.origin, axis.angle))
        about = AboutAxis(axis, axis.origin or centroid, found)
    materials = None
    if any(part.material is not None and part.material.elastic_modulus is not None for part in section.parts):
        modulus = _modulus_of(section, questions.reference_material)
        transformed = transformed_section(section, modulus)
        strengths = [part.material is not None and part.material.yield_strength is not None for part in section.parts]
        materials = SeveralMaterials(
            transformed,
            known(quantify_transformed(section, outline, reference_modulus=modulus)),
            tuple(known(region) for region in quantify_regions(section, outline, modulus)),
            tuple(known(joint) for joint in quantify_joints(section, outline, modulus)),
            plastic_moments(section) if all(strengths) else None,
        )
    stresses = None
    if questions.forces is not None:
        stresses = _stresses(section, questions.forces, outline, materials, solution)
        stresses = replace(
            stresses,
            quantities=known(stresses.quantities),
            region_quantities=tuple(known(region) for region in stresses.region_quantities),
            shear=known(stresses.shear),
        )
    after_loss = None
    if questions.loss is not None:
        loss = questions.loss
        angle = questions.axis.angle if questions.axis is not None and loss.by_sides else 0.0
        remaining = loss.of(section, angle)
        ratios = quantify_loss(section, lambda moved: loss.of(moved, angle), outline)
        after_loss = AfterLoss(loss, angle, remaining, compare(section, remaining), known(ratios))
        if uncertainty is not None and loss.by_sides:
            notices += _lying_askew(section, angle)
        if len(remaining.parts) > len(section.parts):
            notices.append(
                Notice(
                    "in-pieces",
                    f"The loss leaves {len(remaining.parts)} separate parts; the figures count them as one section.",
                    "Look at the drawing, whether what is left still holds together.",
                )
            )
    return Appraisal(section, quantities, solution, about, stresses, after_loss, materials, tuple(notices))


def _stresses(
    section: Section,
    forces: Forces,
    outline: OutlineUncertainty,
    materials: SeveralMaterials | None,
    solution: FieldProperties | None,
) -> Stresses:
    if materials is None:
        normal = normal_stress(section, forces)
        found = quantify_normal_stress(section, forces, outline)
        cuts, torsional = None, None
        shear: dict[str, Quantity] = {}
        if forces.shear_x or forces.shear_y:
            cuts = cut_shear(section, forces)
            shear |= quantify_cut_shear(section, forces, outline)
        if solution is not None and forces.torque:
            from ..props.torsional_stress import quantify_torsional_shear

            torsional = torsional_shear(solution, forces.torque)
            shear["torsional_shear"] = quantify_torsional_shear(section, solution, torsional, outline)
        return Stresses(forces, normal, normal.neutral_axis, found, cuts=cuts, torsional=torsional, shear=shear)
    if forces.shear_x or forces.shear_y or forces.torque:
        raise UsageError(
            "shear-of-several-materials",
            "Shear and torsion of a section of several materials are not worked out.",
            "Give N, Mx and My alone, or leave the materials out.",
        )

    def figures(moved: Section) -> dict[str, float]:
        found = region_stresses(transformed_section(moved, materials.transformed.reference_modulus), forces)
        return {f"{end} {n}": getattr(region, end).value for n, region in enumerate(found) for end in ends}

    ends = ("largest", "smallest")
    regions = region_stresses(materials.transformed, forces)
    units = {f"{end} {n}": "MPa" for n in range(len(regions)) for end in ends}
    found = quantify_figures(section, outline, figures, units)
    by_region = tuple({f"{end}_stress": found[f"{end} {n}"] for end in ends} for n in range(len(regions)))
    axis = _neutral_axis(materials.transformed, forces, regions)
    return Stresses(forces, None, axis, {}, regions, by_region)


def _neutral_axis(transformed: Transformed, forces: Forces, regions: tuple[RegionStress, ...]) -> NeutralAxis | None:
    """Where the strain is zero: stress of the reference material zero."""
    t = transformed
    slope = np.linalg.solve(
        [[t.second_moment_y, t.product_moment], [t.product_moment, t.second_moment_x]],
        np.array([forces.moment_y, forces.moment_x]),
    )
    steepness = float(slope @ slope)
    if steepness == 0.0:
        return None
    point = np.array(t.centroid) - forces.axial / t.area * slope / steepness
    angle = math.atan2(slope[0], -slope[1])
    angle -= math.pi * math.ceil(angle / math.pi - 0.5)
    crosses = min(r.smallest.value for r in regions) < 0.0 < max(r.largest.value for r in regions)
    return NeutralAxis((float(point[0]), float(point[1])), angle, crosses)


def _typed_loss(stated: Mapping[str, Any]) -> Loss | None:
    """The loss of layers and holes that is stated, None for neither."""
    if "loss" not in stated and "hole" not in stated:
        return None
    loss = typed_loss(stated["loss"]) if "loss" in stated else Loss()
    return replace(loss, holes=typed_holes(stated.get("hole", ())))


def _modulus_of(section: Section, name: str | None) -> float | None:
    """The modulus of the named material, None for no name; raises UsageError where no part is of it."""
    moduli = {p.material.name: p.material.elastic_modulus for p in section.parts if p.material is not None}
    if name is not None and moduli.get(name) is None:
        raise UsageError(
            "no-such-material",
            f"No part is of {name!r}.",
            f"Name one of {', '.join(moduli) or 'the materials stated with --material'}.",
        )
    return None if name is None else moduli[name]


def _lying_askew(section: Section, angle: float) -> list[Notice]:
    """A word where the sides of a measured member are not those that a loss by sides was taken from."""
    own = enclosing_angle(section)
    off = math.remainder(own - angle, 0.5 * math.pi)
    if abs(off) < _ASKEW:
        return []
    # Adding zero spares a minus sign before zero.
    turn = round(math.degrees(angle + off), 2) + 0.0
    return [
        Notice(
            "loss-askew",
            f"The loss by sides is taken along axes that lie {abs(math.degrees(off)):.1f}° askew to the member's own "
            "sides, so it is uneven over them.",
            f"State the member's own axes, --axis centroid,{turn:g}; its sides are then meant.",
        )
    ]


def _as_drawn(quantity: Quantity) -> Quantity:
    return replace(quantity, std=math.nan, interval95=(math.nan, math.nan), pixel_bounds=None, budget=())


def _with_numerical_error(quantity: Quantity, error: float) -> Quantity:
    """The quantity with the largest error of its solution as one more, rectangular cause (JCGM 100, 4.3.7)."""
    if error <= 0.0:
        return quantity
    numerical = error / math.sqrt(3.0)
    half = coverage_half_width(0.0, numerical)
    std = numerical
    if math.isfinite(quantity.std):
        std = math.hypot(quantity.std, numerical)
        half = math.hypot(half, 0.5 * (quantity.interval95[1] - quantity.interval95[0]))
    lines = [replace(line, share=(line.std / std) ** 2) for line in quantity.budget]
    lines.append(Contribution(_NUMERICAL, numerical, (numerical / std) ** 2))
    return replace(
        quantity,
        std=std,
        interval95=(quantity.value - half, quantity.value + half),
        budget=tuple(sorted(lines, key=lambda line: -line.std)),
    )


def _numerical_share(quantity: Quantity) -> float:
    return sum(line.share for line in quantity.budget if line.source == _NUMERICAL)


def _notices_of(solution: FieldProperties, quantities: Mapping[str, Quantity]) -> list[Notice]:
    notices = [Notice("assumption", sentence, "") for sentence in solution.assumptions]
    notices += [Notice("not-defined", sentence, "") for sentence in dict.fromkeys(solution.missing.values())]
    # Beside a larger uncertainty of the outline, the numerical error does not matter.
    missed = {
        name: error
        for name, error in solution.relative_error.items()
        if error > solution.tolerance and _numerical_share(quantities[name]) > _NUMERICAL_SHARE
    }
    if missed:
        worst = max(missed, key=lambda name: missed[name])
        notices.append(
            Notice(
                "tolerance-not-reached",
                f"The {PROPERTIES[worst].label.lower()} is solved to {100 * solution.relative_error[worst]:.2g} %, "
                f"not to the {100 * solution.tolerance:g} % asked for; the interval holds that.",
                "Simplify the outline, or take the interval as it is.",
            )
        )
    return notices
