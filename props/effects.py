"""What independent causes that move the outline do to every property, to first order.

A property is a row over the causes: its change at one standard uncertainty of each. Rows add and scale like the
differentials they are, so the chain rule reads as in a book, and variances, covariances and budgets all follow from
the same rows. Intervals and budgets are made elsewhere.

An integral of f over the region changes by the integral of f times the outward movement along the boundary. Three
things are not smooth and are handled by their own causes, added in quadrature: the smaller of two section moduli,
the farther of two fibres, and principal axes that are nearly undetermined.
"""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import dataclass
from statistics import NormalDist
from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import NDArray

from .axes import turned_moments
from .integrals import Boundary, following
from .offset import MITRE_LIMIT, edge_normals
from .plastic import PlasticAxis, cut_offset, plastic_axis
from .properties import Analysis
from .section import Section

if TYPE_CHECKING:
    from .field import FieldProperties
    from .uncertainty import EdgeNoise, OutlineUncertainty

Floats = NDArray[np.float64]

RANDOM = "edge location (random)"
SIMPLIFICATION = "simplification of the outline"
RIVAL_FIBRES = "fibres nearly as far out"
LOOSE_AXES = "principal axes nearly undetermined"
NUMERICAL = "numerical solution"

# An angle of which nothing is known is uniform over half a turn.
UNDETERMINED_ANGLE_STD = math.pi / math.sqrt(12.0)

# Turns up to here, rad, move points in proportion.
_SMALL_TURN = 0.05

# Correlation lengths over which noise on traced points is averaged to see the outline behind it.
_SMOOTHING = 25.0

_STANDARD_NORMAL = NormalDist()
_GAUSS_PLACE = 0.5 + 0.5 * math.sqrt(0.6) * np.array([-1.0, 0.0, 1.0])
_GAUSS_WEIGHT = np.array([5.0, 8.0, 5.0]) / 18.0
# Room for the causes that only some properties have: eight fibres, two each, four larger ones of two, and the rest.
_OWN_CAUSES = 48


@dataclass(frozen=True)
class Effects:
    """Changes of properties at one standard uncertainty of each independent cause.

    rows : property name -> (c,), in the property's unit
    sources : (c,) name of the cause in a budget
    rectangular : (c,) whether the cause is uniform within its bounds, else normal
    """

    rows: Mapping[str, Floats]
    sources: tuple[str, ...]
    rectangular: NDArray[np.bool_]

    def std(self, name: str) -> float:
        """Standard uncertainty of a property from all causes."""
        return _std(self.rows[name])


class _Causes:
    """The list of causes, growing as the chain rule meets new ones."""

    def __init__(self, sources: list[str], rectangular: list[bool]) -> None:
        self.sources, self.rectangular = sources, rectangular
        self.room = len(sources) + _OWN_CAUSES
        # One unit of outward bias of farthest points: all of them err the same way.
        self.bias = self.own(RANDOM, 1.0)
        self._folds: list[int] = []
        self._differences: list[Floats] = []

    def own(self, source: str, std: float) -> Floats:
        """The row of a further cause, independent of all others."""
        row = np.zeros(self.room)
        row[len(self.sources)] = std
        self.sources.append(source)
        self.rectangular.append(False)
        return row

    def fold(self, std: float, difference: Floats) -> Floats:
        """The row of what folding a difference at zero adds; kept apart until `join_folds`."""
        self._folds.append(len(self.sources))
        self._differences.append(difference / _std(difference))
        return self.own(RIVAL_FIBRES, std)

    def std(self, row: Floats) -> float:
        """Standard uncertainty that a row amounts to, folds joined."""
        return _std(self.join_folds(row[None])[0])

    def join_folds(self, matrix: Floats) -> Floats:
        """A matrix of rows in which folds of related differences are no longer independent.

        The mean product of the sizes of two unit normal deviates of correlation r, signs dropped, is
        2 (r arcsin r + sqrt(1 - r^2)) / pi.
        """
        if not self._folds:
            return matrix
        unit = np.array(self._differences)
        r = np.clip(unit @ unit.T, -1.0, 1.0)
        joint = _columns_of(2.0 / math.pi * (r * np.arcsin(r) + np.sqrt(1.0 - r * r)))
        joined = matrix.copy()
        joined[:, self._folds] = matrix[:, self._folds] @ joint
        return joined


def effects(
    section: Section,
    analysis: Analysis,
    uncertainty: OutlineUncertainty,
    properties: Mapping[str, float],
    field: FieldProperties | None = None,
) -> Effects:
    """Rows of all properties in `properties` that the outline decides, and of those of `field` if given.

    analysis : of the same section; field : its torsion and shear properties
    """
    outline = _Outline(section, analysis, uncertainty)
    sources = [mode.source for mode in uncertainty.modes]
    rectangular = [mode.shape == "rectangular" for mode in uncertainty.modes]
    integrals = _integral_columns(outline, analysis)
    noise_count = integrals.shape[1] - len(sources)
    causes = _Causes(sources + [RANDOM] * noise_count, rectangular + [False] * noise_count)
    padded = np.zeros((len(integrals), causes.room))
    padded[:, : integrals.shape[1]] = integrals
    rows = _chain_rule(outline, analysis, dict(zip(_INTEGRALS, padded, strict=True)), causes)
    if "mass_per_metre" in properties:
        rows["mass_per_metre"] = rows["area"] * (properties["mass_per_metre"] / properties["area"])
    rows = {name: row for name, row in rows.items() if name in properties}
    names = list(rows)
    matrix = causes.join_folds(np.array([rows[name] for name in names]).reshape(len(names), causes.room))
    matrix = matrix[:, : len(causes.sources)]
    sources, rectangular = list(causes.sources), list(causes.rectangular)

    if field is not None:
        found, by_mode, by_noise = _field_columns(outline, field)
        matrix = np.block(
            [
                [matrix, np.zeros((len(names), by_noise.shape[1]))],
                [by_mode, np.zeros((len(found), len(sources) - by_mode.shape[1])), by_noise],
            ]
        )
        names += found
        # The estimated largest error of the solution bounds it.
        numerical = np.diag([field.error.get(name, 0.0) / math.sqrt(3.0) for name in names])
        matrix = np.hstack([matrix, numerical])
        sources += [RANDOM] * by_noise.shape[1] + [NUMERICAL] * len(names)
        rectangular += [False] * by_noise.shape[1] + [True] * len(names)

    simplified = np.diag([abs(uncertainty.simplification.get(name, 0.0)) for name in names])
    matrix = np.hstack([matrix, simplified])
    sources += [SIMPLIFICATION] * len(names)
    rectangular += [False] * len(names)
    return Effects(dict(zip(names, matrix, strict=True)), tuple(sources), np.array(rectangular))


class _Outline:
    """Edges about the centroid with the movements of their ends and the noise along them.

    before, after : (n,) the vertex before and after each; lengths (n,); normals (2, n), outward
    exposed : (n,) whether the perimeter counts an edge: those of shells that are no joints
    loop_starts, loop_ends : (n,) first edge of each edge's loop, and the one after its last
    modes : (k, n, 2) movements of the vertices
    noise_std, noise_length : (n,) at the vertices, or None
    """

    def __init__(self, section: Section, analysis: Analysis, uncertainty: OutlineUncertainty) -> None:
        self.edges: Boundary = analysis.edges
        self.after = following(section)
        self.before = np.empty_like(self.after)
        self.before[self.after] = np.arange(len(self.after))
        self.lengths, self.normals = edge_normals(self.edges)
        self.exposed = self.edges.exposed
        count = len(self.after)
        sizes = np.array([len(loop) for loop in section.loops])
        self.loop_ends = np.repeat(np.cumsum(sizes), sizes)
        self.loop_starts = self.loop_ends - np.repeat(sizes, sizes)
        self.modes = np.array([mode.displacement for mode in uncertainty.modes]).reshape(-1, count, 2)
        noise = uncertainty.noise
        self.noise: EdgeNoise | None = noise if noise is not None and np.any(np.asarray(noise.std) > 0.0) else None
        if self.noise is not None:
            std, length = np.asarray(self.noise.std, float), np.asarray(self.noise.correlation_length, float)
            self.edge_noise_std = 0.5 * (std + std[self.after])
            self.edge_noise_length = 0.5 * (length + length[self.after])
            # The end of a straight line fitted to many points has twice the std of their mean.
            fitted = np.minimum(1.0, 4.0 * self.edge_noise_length / self.lengths)
            self.edge_end_std = self.edge_noise_std * np.sqrt(fitted)
        self.reach = float(np.sqrt(np.sum(self.modes**2, axis=(0, 2)).max())) if len(self.modes) else 0.0


# The integrals whose rows all others follow from. Imbalance: half the area gained above the plastic axis less half of
# that gained below.
_INTEGRALS = (
    "area",
    "first_x",
    "first_y",
    "second_x",
    "second_y",
    "product",
    "imbalance_x",
    "imbalance_y",
    "plastic_x",
    "plastic_y",
    "plastic_major",
    "plastic_minor",
    "perimeter",
)


def _integral_columns(outline: _Outline, analysis: Analysis) -> Floats:
    """Changes (integrals, modes + noise columns) of the integrals."""
    by_mode = _vertex_forces(outline, analysis).reshape(len(_INTEGRALS), -1)
    by_mode = by_mode @ outline.modes.reshape(len(outline.modes), 2 * len(outline.after)).T
    if outline.noise is None:
        return by_mode
    density = _densities(outline, analysis)
    weight = (outline.edge_noise_std**2 * outline.edge_noise_length * outline.lengths)[:, None] * _GAUSS_WEIGHT
    return np.hstack([by_mode, _columns_of((density * weight.ravel()) @ density.T)])


def _columns_of(covariance: Floats) -> Floats:
    """Independent causes with the given joint covariance: a square root of the matrix."""
    scale = np.sqrt(np.maximum(np.diag(covariance), 0.0))
    scale[scale == 0.0] = 1.0
    values, vectors = np.linalg.eigh(covariance / np.outer(scale, scale))
    return scale[:, None] * vectors * np.sqrt(np.maximum(values, 0.0))


def _across(analysis: Analysis) -> list[tuple[Floats, float]]:
    """Direction (2,) across each plastic axis, and its position: about x, y, major, minor."""
    cosine, sine = analysis.principal.major_direction
    return [
        (np.array([0.0, 1.0]), analysis.plastic_x.offset),
        (np.array([1.0, 0.0]), analysis.plastic_y.offset),
        (np.array([-sine, cosine]), analysis.plastic_major.offset),
        (np.array([cosine, sine]), analysis.plastic_minor.offset),
    ]


def _densities(outline: _Outline, analysis: Analysis) -> Floats:
    """Change of each integral per mm^2 of material added, (integrals, 3 n), at three Gauss points of every edge."""
    start, end = outline.edges.start[:, :, None], outline.edges.end[:, :, None]
    x, y = (start + (end - start) * _GAUSS_PLACE).reshape(2, -1)
    distances = [direction @ np.stack([x, y]) - offset for direction, offset in _across(analysis)]
    return np.stack(
        [
            np.ones_like(x),
            y,
            x,
            y * y,
            x * x,
            x * y,
            0.5 * np.sign(distances[0]),
            0.5 * np.sign(distances[1]),
            *(np.abs(distance) for distance in distances),
            np.repeat(_perimeter_density(outline), 3),
        ]
    )


def _perimeter_density(outline: _Outline) -> Floats:
    """Change of perimeter per mm^2 added, (n,): the curvature, of a polygon that of its corners spread over the edges.

    Where edges are shorter than the noise is long, the corners of a correlation length are taken together, since one
    swing of the noise moves them all.
    """
    normals = outline.normals[:, outline.before], outline.normals
    sine = normals[0][0] * normals[1][1] - normals[0][1] * normals[1][0]
    cosine = np.sum(normals[0] * normals[1], axis=0)
    # An edge moved out by d lengthens each neighbour by d tan(half the turn) at a mitred corner.
    half_turn = sine / np.maximum(1.0 + cosine, 2.0 / MITRE_LIMIT**2)
    growth = half_turn + half_turn[outline.after]
    places = np.concatenate([[0.0], np.cumsum(outline.lengths)])
    total = np.concatenate([[0.0], np.cumsum(growth)])
    window = 0.5 * np.maximum(outline.edge_noise_length - outline.lengths, 0.0)
    # A stretch ends where its loop does.
    low = np.maximum(places[:-1] - window, places[outline.loop_starts])
    high = np.minimum(places[1:] + window, places[outline.loop_ends])
    curvature = (np.interp(high, places, total) - np.interp(low, places, total)) / (high - low)
    return np.where(outline.exposed, curvature, 0.0)


def _vertex_forces(outline: _Outline, analysis: Analysis) -> Floats:
    """Change of each integral per mm of movement of each vertex, (integrals, n, 2), edges staying straight."""
    (x0, y0), (x1, y1) = outline.edges.start, outline.edges.end
    one = np.ones_like(x0)
    weights = [
        _weighted(one, one, one, one),
        _weighted(y0, y1, one, one),
        _weighted(x0, x1, one, one),
        _weighted(y0, y1, y0, y1),
        _weighted(x0, x1, x0, x1),
        _weighted(x0, x1, y0, y1),
    ]
    kinks = []
    for direction, offset in _across(analysis):
        v0, v1 = direction @ outline.edges.start - offset, direction @ outline.edges.end - offset
        kinks.append(_kinked(v0, v1))
    weights += [kinks[0][0], kinks[1][0], *(kink[1] for kink in kinks)]
    at_start, at_end = np.array([w[0] for w in weights]), np.array([w[1] for w in weights])
    normals = (outline.normals * outline.lengths).T
    forces = np.empty((len(_INTEGRALS), len(x0), 2))
    forces[:-1] = at_start[:, :, None] * normals
    forces[:-1] += (at_end[:, :, None] * normals)[:, outline.before]
    tangents = (np.stack([-outline.normals[1], outline.normals[0]]) * outline.exposed).T
    forces[-1] = tangents[outline.before] - tangents
    return forces


def _weighted(f0: Floats, f1: Floats, g0: Floats, g1: Floats) -> tuple[Floats, Floats]:
    """Integrals over 0..1 of f g (1 - t) and of f g t for f and g linear in t."""
    ends = f0 * g1 + f1 * g0
    return (3.0 * f0 * g0 + ends + f1 * g1) / 12.0, (f0 * g0 + ends + 3.0 * f1 * g1) / 12.0


def _kinked(v0: Floats, v1: Floats) -> tuple[tuple[Floats, Floats], tuple[Floats, Floats]]:
    """As `_weighted`, of sign(v) / 2 and of |v|, for v linear from v0 to v1; exact where v changes sign."""
    rise = v1 - v0
    crossing = v0 * v1 < 0.0
    t = np.divide(v0, -rise, out=np.ones_like(v0), where=crossing)
    sign = np.where(v0 != 0.0, np.sign(v0), np.sign(v1))
    falling, rising = t - t * t / 2.0, t * t / 2.0
    signs = sign * (falling - 0.25), sign * (rising - 0.25)
    falling = v0 * t + (rise - v0) * t**2 / 2.0 - rise * t**3 / 3.0
    rising = v0 * t**2 / 2.0 + rise * t**3 / 3.0
    return signs, (sign * (2.0 * falling - v0 / 3.0 - v1 / 6.0), sign * (2.0 * rising - v0 / 6.0 - v1 / 3.0))


def _chain_rule(
    outline: _Outline, analysis: Analysis, change: Mapping[str, Floats], causes: _Causes
) -> dict[str, Floats]:
    """Rows of all properties, from those of the integrals."""
    area, _, _, second_x, second_y, _ = analysis.moments
    principal = analysis.principal
    cosine, sine = principal.major_direction
    d_area, d_x, d_y = change["area"], change["second_x"], change["second_y"]
    centre_x, centre_y = change["first_y"] / area, change["first_x"] / area

    d_major, d_minor, d_mixed = turned_moments(d_x, d_y, change["product"], cosine, sine)
    half_difference, mixed_std = 0.5 * (principal.major - principal.minor), _std(d_mixed)
    turn, known = _axes_turn(half_difference, 0.5 * (d_major - d_minor), d_mixed)
    # The half difference of the principal moments is the length of a vector; its cross component only lengthens it.
    loose = causes.own(LOOSE_AXES, math.hypot(half_difference, mixed_std) - half_difference)
    d_major, d_minor = d_major + loose, d_minor - loose

    right, left, top, bottom = (_fibre(outline, np.array(d), causes) for d in ((1, 0), (-1, 0), (0, 1), (0, -1)))
    sides, turned_sides = analysis.sides, analysis.turned_sides
    to_top, to_bottom = top - centre_y, bottom + centre_y
    to_right, to_left = right - centre_x, left + centre_x
    farther_x, d_farther_x = _larger(sides.top, to_top, -sides.bottom, to_bottom, causes)
    farther_y, d_farther_y = _larger(sides.right, to_right, -sides.left, to_left, causes)

    along, across = np.array([cosine, sine]), np.array([-sine, cosine])
    swings = _swings(outline.edges, analysis, turn)
    swing = causes.own(LOOSE_AXES, 1.0)
    fibres = []
    for direction, scatter in zip((across, -across, along, -along), swings.fibres, strict=True):
        # While the turn is small, it moves the points of the outline like any mode, and together with it.
        row = (
            _fibre(outline, direction, causes, turn) if known else _fibre(outline, direction, causes) + scatter * swing
        )
        fibres.append(row - (direction[0] * centre_x + direction[1] * centre_y))
    farther_major, d_farther_major = _larger(turned_sides.top, fibres[0], -turned_sides.bottom, fibres[1], causes)
    farther_minor, d_farther_minor = _larger(turned_sides.right, fibres[2], -turned_sides.left, fibres[3], causes)
    plastic_turned = [
        change[name] + slope * turn + scatter * swing
        for name, slope, scatter in zip(
            ("plastic_major", "plastic_minor"), swings.plastic_slopes, swings.plastic_scatter, strict=True
        )
    ]

    plastic_x, plastic_y = analysis.plastic_x, analysis.plastic_y
    cut_x = _axis_shift(outline.edges, area, plastic_x, change["imbalance_x"])
    cut_y = _axis_shift(outline.edges.swapped(), area, plastic_y, change["imbalance_y"])

    def radius(second: float, d_second: Floats) -> Floats:
        return 0.5 * math.sqrt(second / area) * (d_second / second - d_area / area)

    def modulus(second: float, d_second: Floats, fibre: float, d_fibre: Floats) -> Floats:
        return second / fibre * (d_second / second - d_fibre / fibre)

    def shape_factor(
        plastic: float, d_plastic: Floats, second: float, d_second: Floats, c: float, dc: Floats
    ) -> Floats:
        return plastic * c / second * (d_plastic / plastic + dc / c - d_second / second)

    return {
        "area": d_area,
        "perimeter": change["perimeter"] + causes.own(RANDOM, _roughness(outline)),
        "width": right + left,
        "depth": top + bottom,
        "centroid_x": centre_x,
        "centroid_y": centre_y,
        "second_moment_x": d_x,
        "second_moment_y": d_y,
        "product_moment": change["product"],
        "polar_second_moment": d_x + d_y,
        "second_moment_major": d_major,
        "second_moment_minor": d_minor,
        "principal_angle": turn,
        "radius_of_gyration_x": radius(second_x, d_x),
        "radius_of_gyration_y": radius(second_y, d_y),
        "radius_of_gyration_major": radius(principal.major, d_major),
        "radius_of_gyration_minor": radius(principal.minor, d_minor),
        "section_modulus_top": modulus(second_x, d_x, sides.top, to_top),
        "section_modulus_bottom": modulus(second_x, d_x, -sides.bottom, to_bottom),
        "section_modulus_left": modulus(second_y, d_y, -sides.left, to_left),
        "section_modulus_right": modulus(second_y, d_y, sides.right, to_right),
        "section_modulus_major": modulus(principal.major, d_major, farther_major, d_farther_major),
        "section_modulus_minor": modulus(principal.minor, d_minor, farther_minor, d_farther_minor),
        "plastic_axis_x": cut_y,
        "plastic_axis_y": cut_x,
        "plastic_modulus_x": change["plastic_x"],
        "plastic_modulus_y": change["plastic_y"],
        "plastic_modulus_major": plastic_turned[0],
        "plastic_modulus_minor": plastic_turned[1],
        "shape_factor_x": shape_factor(plastic_x.modulus, change["plastic_x"], second_x, d_x, farther_x, d_farther_x),
        "shape_factor_y": shape_factor(plastic_y.modulus, change["plastic_y"], second_y, d_y, farther_y, d_farther_y),
    }


def _axes_turn(half_difference: float, d_half: Floats, d_mixed: Floats) -> tuple[Floats, bool]:
    """Row of the principal angle, and whether the angle is known well enough for its turn to count as small.

    The angle is half that of a vector of length `half_difference` whose cross component is uncertain; where its own
    component may change sign, the axes may swap. At worst nothing is known of it.
    """
    mixed_std, half_std = _std(d_mixed), _std(d_half)
    if mixed_std == 0.0:
        return d_mixed * 0.0, True
    swapped = _STANDARD_NORMAL.cdf(-half_difference / half_std) if half_std > 0.0 else 0.0
    small = 0.5 * mixed_std / half_difference if half_difference > 0.0 else math.inf
    std = min(math.hypot(small, 0.5 * math.pi * math.sqrt(swapped)), UNDETERMINED_ANGLE_STD)
    return -d_mixed * (std / mixed_std), std < _SMALL_TURN


@dataclass(frozen=True)
class _Swings:
    """How values scatter as the principal axes turn within their uncertainty.

    fibres : scatter of the distances of the fibres, mm (across the major axis, opposite, along it, opposite)
    plastic_slopes, plastic_scatter : change of the plastic moduli (major, minor) per rad, and scatter besides, mm^3
    """

    fibres: tuple[float, ...]
    plastic_slopes: tuple[float, ...]
    plastic_scatter: tuple[float, ...]


def _swings(edges: Boundary, analysis: Analysis, turn: Floats) -> _Swings:
    angle_std = _std(turn)
    # Six evenly spread turns with that std; for axes known better than this, a fixed small spread serves as well.
    spread = max(angle_std, 1e-5)
    turns = spread * math.sqrt(15.0 / 7.0) * np.array([-1.0, -0.6, -0.2, 0.2, 0.6, 1.0])
    cosine, sine = analysis.principal.major_direction

    def at(angle: float) -> list[float]:
        c, s = math.cos(angle), math.sin(angle)
        turned = edges.turned(cosine * c - sine * s, sine * c + cosine * s)
        u, v = turned.start
        moduli = [plastic_axis(w, analysis.moments.area).modulus for w in (turned, turned.swapped())]
        return [float(v.max()), -float(v.min()), float(u.max()), -float(u.min()), *moduli]

    rises = np.array([at(angle) for angle in turns]) - np.array(at(0.0))
    slopes = turns @ rises / (turns @ turns)
    slopes[:4] = 0.0
    rest = rises - turns[:, None] * slopes
    scatter = np.sqrt(np.mean(rest**2, axis=0)) * (angle_std / spread)
    return _Swings(tuple(scatter[:4].tolist()), tuple(slopes[4:].tolist()), tuple(scatter[4:].tolist()))


def _fibre(outline: _Outline, direction: Floats, causes: _Causes, turn: Floats | None = None) -> Floats:
    """Row of the extent of the outline in a direction (2,): how far its farthest point moves that way.

    turn : row of the angle by which the direction itself turns

    Of all points that may come to be the farthest, the one likeliest to rise above the present one counts as its
    rival. Noise moves the edges that support the point, and lifts the farthest of many points by its bias.
    """
    points = outline.edges.start
    levels = direction @ points
    first = int(np.argmax(levels))
    reach = outline.reach + (float(np.hypot(*points).max()) * _std(turn) if turn is not None else 0.0)
    near = np.flatnonzero(levels >= levels[first] - 12.0 * reach)
    position = int(np.searchsorted(near, first))
    moved = np.zeros((len(near), causes.room))
    moved[:, : len(outline.modes)] = (outline.modes[:, near] @ direction).T
    if turn is not None:
        sideways = np.array([-direction[1], direction[0]]) @ points[:, near]
        moved += sideways[:, None] * turn
    gaps = levels[first] - levels[near]
    apart = np.sqrt(np.sum((moved - moved[position]) ** 2, axis=1))
    rises = [_mean_excess(gap, std) for gap, std in zip(gaps.tolist(), apart.tolist(), strict=True)]
    rival = int(np.argmax(rises))
    row = _larger(0.0, moved[position], -float(gaps[rival]), moved[rival], causes)[1]
    scatter, bias = _fibre_noise(outline, direction, levels, first)
    return row + causes.own(RANDOM, scatter) + bias * causes.bias


def _fibre_noise(outline: _Outline, direction: Floats, levels: Floats, first: int) -> tuple[float, float]:
    """Scatter of the farthest point under noise, and its outward bias, mm."""
    if outline.noise is None:
        return 0.0, 0.0
    edges = np.array([outline.before[first], first])
    supports = outline.normals[:, edges]
    determinant = supports[0, 0] * supports[1, 1] - supports[0, 1] * supports[1, 0]
    if abs(determinant) < 1e-3:
        shares = np.array([0.5, 0.5])
    else:
        # The direction lies between both normals: shares are not negative but for rounding.
        shares = np.clip(np.linalg.solve(supports, direction), 0.0, MITRE_LIMIT)
    stds = shares * outline.edge_end_std[edges]
    # Ends of long fitted edges err independently, those of short ones are one and the same traced point.
    together = min(1.0, 4.0 * float(outline.edge_noise_length[edges].sum() / outline.lengths[edges].sum()))
    std = math.sqrt(float(stds @ stds) + 2.0 * together * float(stds[0] * stds[1]))
    # Pieces of outline that noise may have made the farthest, counted in independent ones. On an arc those within
    # 0.3 std of its crown count as much as all its pieces do (found by simulation); the rest allows for what noise is
    # left in the smoothed levels.
    loop = slice(int(outline.loop_starts[first]), int(outline.loop_ends[first]))
    lengths, correlation = outline.lengths[loop], outline.edge_noise_length[loop]
    smooth = _smoothed(levels[loop], lengths, _SMOOTHING * correlation)
    threshold = smooth.max() - std * (0.3 + 2.0 / math.sqrt(_SMOOTHING))
    high, low = np.maximum(smooth, np.roll(smooth, -1)), np.minimum(smooth, np.roll(smooth, -1))
    share = np.where(low >= threshold, 1.0, np.clip((high - threshold) / np.maximum(high - low, 1e-300), 0.0, 1.0))
    pieces = 1.0 + float(np.sum(share * lengths / np.maximum(lengths, correlation)))
    # Mean of the largest of so many normal deviates: Blom, "Statistical estimates and transformed beta-variables"
    # (1958; from memory); its own scatter shrinks about like this.
    mean = _STANDARD_NORMAL.inv_cdf((pieces - 0.375) / (pieces + 0.25))
    return std / math.sqrt(1.0 + mean), std * mean


def _smoothed(levels: Floats, lengths: Floats, window: Floats) -> Floats:
    """Levels (n,) of the vertices of a loop averaged over windows along it; unchanged between long edges.

    Edges longer than a sixth of the window have been fitted to many points already.
    """
    perimeter = float(lengths.sum())
    window = np.minimum(window, 0.25 * perimeter)
    traced = np.maximum(lengths, np.roll(lengths, 1)) < window / 6.0
    if not traced.any():
        return levels
    place = np.concatenate([[0.0], np.cumsum(lengths)])
    area = np.concatenate([[0.0], np.cumsum(0.5 * (levels + np.roll(levels, -1)) * lengths)])
    here, half = place[:-1][traced], 0.5 * window[traced]
    # Three times round, so that no window runs past an end.
    places = np.concatenate([place[:-1] - perimeter, place[:-1], place + perimeter])
    areas = np.concatenate([area[:-1] - area[-1], area[:-1], area + area[-1]])
    smooth = levels.copy()
    smooth[traced] = (np.interp(here + half, places, areas) - np.interp(here - half, places, areas)) / (2.0 * half)
    return smooth


def _larger(a: float, d_a: Floats, b: float, d_b: Floats, causes: _Causes) -> tuple[float, Floats]:
    """The larger of two uncertain values, and its row.

    The row is that of the one or the other by the chance that it is the larger; what a normal difference folded at
    zero adds to that is a cause of its own.
    """
    if b > a:
        a, d_a, b, d_b = b, d_b, a, d_a
    std = 0.5 * causes.std(d_a - d_b)
    half = 0.5 * (a - b)
    if std <= 1e-6 * half or std == 0.0:
        return a, d_a
    chance = _STANDARD_NORMAL.cdf(half / std)
    folded = 2.0 * std * _STANDARD_NORMAL.pdf(half / std) + half * (2.0 * chance - 1.0)
    square = 2.0 * half * half + std * std - 2.0 * half * folded
    rest = square - ((2.0 * chance - 1.0) * std) ** 2
    row = chance * d_a + (1.0 - chance) * d_b
    return a, row + causes.fold(math.sqrt(max(rest, 0.0)), d_a - d_b)


def _mean_excess(gap: float, std: float) -> float:
    """Mean of the part of a normal deviate beyond a gap."""
    if std <= 0.0:
        return 0.0
    z = gap / std
    return std * _STANDARD_NORMAL.pdf(z) - gap * _STANDARD_NORMAL.cdf(-z)


def _axis_shift(edges: Boundary, area: float, axis: PlasticAxis, imbalance: Floats) -> Floats:
    """Row of the position of a plastic axis along y of `edges`.

    The axis moves by the imbalance over the width of the region there. The width is taken over the stretch that one
    standard uncertainty of the imbalance moves it, which stays right in narrow places and in gaps.
    """
    std = min(_std(imbalance), 0.49 * area)
    if std <= 1e-9 * area:
        return imbalance / axis.width if axis.width > 0.0 else imbalance * 0.0
    stretch = cut_offset(edges, 0.5 * area - std) - cut_offset(edges, 0.5 * area + std)
    return imbalance * (stretch / (2.0 * std))


def _roughness(outline: _Outline) -> float:
    """Length, mm, that noise on its vertices adds to the perimeter of an outline."""
    if outline.noise is None:
        return 0.0
    apart = 1.0 - np.exp(-2.0 * outline.lengths / outline.edge_noise_length)
    return float(np.sum(outline.exposed * outline.edge_end_std**2 * apart / outline.lengths))


def _field_columns(outline: _Outline, field: FieldProperties) -> tuple[list[str], Floats, Floats]:
    """Names (f) of torsion and shear properties, and their changes by mode (f, k) and by noise (f, some)."""
    sensitivity = field.sensitivity
    names = list(sensitivity.force)
    before = outline.modes[:, sensitivity.before]
    movement = before + sensitivity.fraction[:, None] * (outline.modes[:, sensitivity.after] - before)
    forces = np.array([sensitivity.force[name] for name in names])
    by_mode = forces.reshape(len(names), -1) @ movement.reshape(len(movement), forces[0].size).T
    if outline.noise is None:
        return names, by_mode, np.zeros((len(names), 0))
    std = outline.edge_noise_std[sensitivity.before]
    length = outline.edge_noise_length[sensitivity.before]
    density = np.array([sensitivity.density(name) for name in names])
    return names, by_mode, _columns_of((density * (std**2 * length * sensitivity.weights)) @ density.T)


def _std(row: Floats) -> float:
    return math.sqrt(float(row @ row))
