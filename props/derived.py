"""Uncertainty of any figure that an outline decides: the movements of the outline carried through a function of it.

For figures whose sensitivities are not known in closed form (about other axes, stresses, losses, ratios). Knows no
figure itself. First order by central differences at one standard uncertainty of every cause (JCGM 100, 5.1.3 note 2),
so what is common to two figures cancels where they are divided. Random error along the outline is carried
stretch by stretch.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Mapping, Sequence

import numpy as np
from numpy.typing import NDArray

from .effects import RANDOM
from .errors import UsageError
from .integrals import boundary, following
from .offset import edge_normals, mitre
from .result import Contribution, Quantity
from .section import Part, Section
from .uncertainty import EdgeNoise, OutlineUncertainty, coverage_half_width

Floats = NDArray[np.float64]
Figures = Callable[[Section], Mapping[str, float]]

# Stretches of the outline whose random errors count as independent: enough for second moments of any shape.
_STRETCHES = 48


def quantify_figures(
    section: Section,
    uncertainty: OutlineUncertainty,
    figures: Figures,
    units: Mapping[str, str],
    inputs: Mapping[str, tuple[Figures, Figures]] | None = None,
) -> dict[str, Quantity]:
    """Figures of a section with their uncertainty.

    figures : section -> name -> value; the same names for every section near this one
    units : name -> unit
    inputs : further independent normal causes, source -> the figures with that input one standard uncertainty lower
        and higher (a modulus of elasticity, a strength, a hole's diameter)
    Raises UsageError where the uncertainty is not that of this outline, and what `figures` raises.
    """
    vertices = section.vertices
    if any(np.shape(mode.displacement) != vertices.shape for mode in uncertainty.modes):
        raise UsageError(
            "uncertainty-of-another-outline",
            f"The uncertainty is not given for the {len(vertices)} vertices of this outline.",
            "Give one movement for each vertex.",
        )
    values = dict(figures(section))
    causes = [
        (mode.source, mode.shape == "rectangular", _half_change(section, mode.displacement, figures))
        for mode in uncertainty.modes
    ]
    if uncertainty.noise is not None:
        fine, movements = _random_movements(section, uncertainty.noise)
        causes += [(RANDOM, False, _half_change(fine, movement, figures)) for movement in movements]
    for source, (lower, higher) in (inputs or {}).items():
        low, high = lower(section), higher(section)
        causes.append((source, False, {name: 0.5 * (high[name] - low[name]) for name in values}))
    sources = [source for source, _, _ in causes]
    rectangular = np.array([is_rectangular for _, is_rectangular, _ in causes], dtype=bool)
    return {
        name: combined(
            value, units[name], sources, rectangular, np.array([change[name] for _, _, change in causes], dtype=float)
        )
        for name, value in values.items()
    }


def _half_change(section: Section, displacement: Floats, figures: Figures) -> dict[str, float]:
    vertices = section.vertices
    higher = figures(section.with_vertices(vertices + displacement))
    lower = figures(section.with_vertices(vertices - displacement))
    return {name: 0.5 * (higher[name] - lower[name]) for name in higher}


def combined(value: float, unit: str, sources: Sequence[str], rectangular: NDArray[np.bool_], row: Floats) -> Quantity:
    """A figure from the changes (c,) that its independent causes make in it at one standard uncertainty of each."""
    largest = float(np.abs(row[rectangular]).max(initial=0.0))
    total = float(row @ row)
    half = coverage_half_width(math.sqrt(max(total - largest**2, 0.0)), largest) if total > 0.0 else 0.0
    variances: dict[str, float] = {}
    for source, effect in zip(sources, row.tolist(), strict=True):
        variances[source] = variances.get(source, 0.0) + effect * effect
    budget = tuple(
        Contribution(source, math.sqrt(variance), variance / total)
        for source, variance in sorted(variances.items(), key=lambda item: -item[1])
        if variance > 0.0
    )
    return Quantity(value, unit, math.sqrt(total), (value - half, value + half), None, budget)


def _random_movements(section: Section, noise: EdgeNoise) -> tuple[Section, list[Floats]]:
    """The section with stations along its edges, and independent movements of the stations.

    A stretch of length l moved by e standard deviations changes a figure by e f l, f its mean sensitivity there; its
    share of the variance is f^2 std^2 L l, L the correlation length, so the stretch moves by std sqrt(L / l). Joints
    that two parts share stay where they are, or the parts would come apart; what is uncertain about them is in modes.
    """
    std, correlation = np.asarray(noise.std, float), np.asarray(noise.correlation_length, float)
    fine, std, correlation = _with_stations(section, std, correlation)
    lengths, normals = edge_normals(boundary(fine))
    after = following(fine)
    before = np.empty_like(after)
    before[after] = np.arange(len(after))
    ones = np.ones(len(after))
    outward = mitre(normals[:, before], normals, ones, ones).T
    reach = 0.5 * (lengths + lengths[before])
    movements: list[Floats] = []
    target = float(lengths.sum()) / _STRETCHES
    first = 0
    for loop in fine.loops:
        stretch = np.minimum((np.cumsum(reach[first : first + len(loop)]) / target).astype(int), _STRETCHES)
        for number in np.unique(stretch):
            members = first + np.flatnonzero(stretch == number)
            length = float(reach[members].sum())
            size = np.sqrt(np.mean(std[members] ** 2 * correlation[members]) / length)
            movement = np.zeros_like(outward)
            # What has no random error, such as a joint, stays where it is.
            movement[members] = size * outward[members] * (std[members] > 0.0)[:, None]
            movements.append(movement)
        first += len(loop)
    return fine, movements


def _with_stations(section: Section, std: Floats, correlation: Floats) -> tuple[Section, Floats, Floats]:
    """The same region with vertices added on long edges, and the noise at all its vertices."""
    lengths, _ = edge_normals(boundary(section))
    longest = float(lengths.sum()) / (2.0 * _STRETCHES)
    columns = np.column_stack([section.vertices, std, correlation])
    after = following(section)
    joint = boundary(section).shared
    at_joint = joint.copy()
    at_joint[after] |= joint
    runs: list[Floats] = []
    for i, length in enumerate(lengths):
        # Worked out from either side, stations on a joint would differ by rounding, and the joint would gape.
        count = 1 if joint[i] else max(1, math.ceil(length / longest))
        share = np.arange(count)[:, None] / count
        run = columns[i] + share * (columns[after[i]] - columns[i])
        run[0, 2] *= not at_joint[i]
        runs.append(run)
    counts = np.array([len(run) for run in runs])
    table = np.concatenate(runs)
    ends = np.cumsum(counts)[np.cumsum([len(loop) for loop in section.loops]) - 1]
    pieces = iter(np.split(table[:, :2], ends[:-1]))
    parts = tuple(Part(next(pieces), tuple(next(pieces) for _ in part.holes), part.material) for part in section.parts)
    return Section(parts), table[:, 2], table[:, 3]
