"""Uncertainty of section properties: from what moves the outline to intervals, budgets and covariances.

Knows movements of an outline in mm and their probability, not where they come from. First order, after JCGM 100
(GUM) and, for covariances between outputs, JCGM 102; `monte_carlo` checks it by simulation.
"""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field
from statistics import NormalDist
from typing import TYPE_CHECKING, Literal

import numpy as np
from numpy.typing import NDArray

from .effects import UNDETERMINED_ANGLE_STD, effects
from .errors import UsageError
from .offset import pixel_bracket
from .properties import PROPERTIES, Analysis, analyse, properties_of
from .result import Contribution, Quantity
from .section import Section

if TYPE_CHECKING:
    from .field import FieldProperties

Floats = NDArray[np.float64]

__all__ = [
    "Contribution",
    "EdgeNoise",
    "Mode",
    "OutlineUncertainty",
    "Quantity",
    "covariance",
    "quantify",
    "standard_uncertainties",
]

_STANDARD_NORMAL = NormalDist()

# What grows with the region and is therefore bracketed by the outline moved inward and outward.
_BRACKETED = frozenset(
    name for name in PROPERTIES if name.startswith(("second_moment", "section_modulus", "plastic_modulus"))
) | {"area", "width", "depth", "polar_second_moment", "mass_per_metre"}


@dataclass(frozen=True)
class Mode:
    """One independent cause, as the movement of the outline at one standard uncertainty of it.

    source : its line in a budget; modes of the same source share the line
    displacement : (n, 2) mm, movement of every vertex, in the order of `Section.vertices`; edges stay straight
    shape : "normal", or "rectangular" for a cause only known to lie within bounds
    """

    source: str
    displacement: Floats
    shape: Literal["normal", "rectangular"] = "normal"


@dataclass(frozen=True)
class EdgeNoise:
    """Random error along the outline.

    std : (n,) mm, along the normal, at every vertex
    correlation_length : (n,) mm, integral of the correlation over both sides along the edge
    """

    std: Floats
    correlation_length: Floats


@dataclass(frozen=True)
class OutlineUncertainty:
    """Everything that makes an outline uncertain.

    modes : independent causes; noise : random error along it
    edge_bound : (n,) mm, largest error of the edge's position at every vertex (half a pixel), for the bracket
    simplification : property -> absolute change that simplifying the outline caused
    """

    modes: tuple[Mode, ...] = ()
    noise: EdgeNoise | None = None
    edge_bound: Floats | None = None
    simplification: Mapping[str, float] = field(default_factory=dict)


def quantify(
    section: Section,
    properties: Mapping[str, float],
    uncertainty: OutlineUncertainty,
    field: FieldProperties | None = None,
) -> dict[str, Quantity]:
    """Properties with their uncertainty.

    properties : values of `section`, name -> value; names without a known sensitivity are left out
    uncertainty : of its outline
    field : torsion and shear properties of the same section, whose values in `properties` are to be quantified too
    Raises UsageError where the uncertainty is not that of this outline.

    Intervals are those of a normal deviate plus the largest rectangular cause of the property; the smaller
    rectangular causes count as normal. A principal angle that is next to unknown has the whole half turn.
    """
    analysis = _checked_analysis(section, uncertainty)
    found = effects(section, analysis, uncertainty, properties, field)
    brackets = _brackets(section, properties, uncertainty)
    quantities = {}
    for name in properties:
        if name not in found.rows:
            continue
        value, row = properties[name], found.rows[name]
        std = found.std(name)
        half = _half_width95(row, found.rectangular)
        if name == "principal_angle" and std > 0.5 * UNDETERMINED_ANGLE_STD:
            half = 0.5 * math.pi
        quantities[name] = Quantity(
            value,
            PROPERTIES[name].unit,
            std,
            (value - half, value + half),
            brackets.get(name),
            _budget(row, found.sources),
        )
    return quantities


def standard_uncertainties(section: Section, uncertainty: OutlineUncertainty) -> dict[str, float]:
    """Standard uncertainty of every elastic and plastic property, without intervals and budgets."""
    analysis = _checked_analysis(section, uncertainty)
    found = effects(section, analysis, uncertainty, properties_of(analysis))
    return {name: found.std(name) for name in found.rows}


def covariance(
    section: Section,
    uncertainty: OutlineUncertainty,
    names: Sequence[str] | None = None,
    field: FieldProperties | None = None,
) -> tuple[tuple[str, ...], Floats]:
    """Covariance matrix of properties (JCGM 102).

    names : properties wanted, all elastic and plastic ones (and those of `field`) if None
    Returns the names and the matrix, (m, m), in the products of their units.
    Raises UsageError for a name that has no sensitivity.
    """
    analysis = _checked_analysis(section, uncertainty)
    values = properties_of(analysis) | (dict(field.values) if field is not None else {})
    found = effects(section, analysis, uncertainty, values, field)
    wanted = tuple(found.rows) if names is None else tuple(names)
    for name in wanted:
        if name not in found.rows:
            raise UsageError("unknown-property", f"There is no uncertainty for '{name}'.", "Ask for a listed property.")
    matrix = np.array([found.rows[name] for name in wanted])
    return wanted, matrix @ matrix.T


def _checked_analysis(section: Section, uncertainty: OutlineUncertainty) -> Analysis:
    count = sum(len(loop) for loop in section.loops)
    sizes = [np.shape(mode.displacement) == (count, 2) for mode in uncertainty.modes]
    along = [] if uncertainty.noise is None else [uncertainty.noise.std, uncertainty.noise.correlation_length]
    along += [] if uncertainty.edge_bound is None else [uncertainty.edge_bound]
    if not all(sizes) or any(np.shape(values) != (count,) for values in along):
        raise UsageError(
            "uncertainty-of-another-outline",
            f"The uncertainty is not given for the {count} vertices of this outline.",
            "Give one movement, std or bound for each vertex.",
        )
    return analyse(section)


def _brackets(
    section: Section, properties: Mapping[str, float], uncertainty: OutlineUncertainty
) -> dict[str, tuple[float, float]]:
    names = [name for name in properties if name in _BRACKETED]
    if uncertainty.edge_bound is None or not names:
        return {}
    density = properties["mass_per_metre"] / properties["area"] * 1e6 if "mass_per_metre" in properties else None
    inner, outer = pixel_bracket(section, uncertainty.edge_bound)
    low = dict.fromkeys(names, 0.0) if inner is None else properties_of(analyse(inner), density)
    high = properties_of(analyse(outer), density)
    return {
        name: (min(low[name], high[name], properties[name]), max(low[name], high[name], properties[name]))
        for name in names
    }


def _half_width95(row: Floats, rectangular: NDArray[np.bool_]) -> float:
    """Half the width of the 95 % interval of the sum of a row's causes."""
    largest = float(np.abs(row[rectangular]).max(initial=0.0))
    rest = math.sqrt(max(float(row @ row) - largest * largest, 0.0))
    return coverage_half_width(rest, largest)


def coverage_half_width(normal_std: float, rectangular_std: float, probability: float = 0.95) -> float:
    """Half the width of the symmetric interval that holds the sum of a normal and a rectangular deviate."""
    edge = math.sqrt(3.0) * rectangular_std
    if rectangular_std <= 1e-3 * normal_std:
        return _STANDARD_NORMAL.inv_cdf(0.5 + 0.5 * probability) * math.hypot(normal_std, rectangular_std)
    if normal_std <= 1e-3 * rectangular_std:
        return probability * edge
    cdf, pdf = _STANDARD_NORMAL.cdf, _STANDARD_NORMAL.pdf
    low, high = -edge / normal_std, edge / normal_std

    def integral_of_cdf(z: float) -> float:
        return z * cdf(z) + pdf(z)

    # The distribution is concave on this side, so Newton's method from the left does not overshoot.
    half = 0.5 * probability * math.hypot(normal_std, rectangular_std) / normal_std
    for _ in range(60):
        above, below = half + high, half + low
        one_sided = (integral_of_cdf(above) - integral_of_cdf(below)) / (high - low)
        step = (0.5 + 0.5 * probability - one_sided) * (high - low) / (cdf(above) - cdf(below))
        half += step
        if abs(step) <= 1e-9 * half:
            break
    return half * normal_std


def _budget(row: Floats, sources: Sequence[str]) -> tuple[Contribution, ...]:
    variances: dict[str, float] = {}
    for source, effect in zip(sources, row.tolist(), strict=True):
        variances[source] = variances.get(source, 0.0) + effect * effect
    total = sum(variances.values())
    lines = [Contribution(source, math.sqrt(v), v / total) for source, v in variances.items() if v > 0.0]
    return tuple(sorted(lines, key=lambda line: -line.std))
