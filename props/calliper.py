"""Sizes measured on the member itself, and the outline adjusted to them.

A calliper reads a distance across the member with far less doubt than a picture: one figure tells the scale, one
thickness of a wall tells where the edge is. Knows outlines and what moves them; nothing of pictures.

Least squares: the causes that move the outline are the unknowns, each known beforehand to its standard uncertainty,
the readings are observations of them (JCGM 102; the test of a single reading is Baarda's, "A testing procedure for
use in geodetic networks", 1968, from memory). What is left of a cause after the adjustment is again one independent
movement of the outline with the cause's own name and shape, so budgets and intervals are made as for any outline.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from .chance import chance_of_more
from .effects import RANDOM
from .enclosing import enclosing_angle
from .errors import Refusal, UsageError
from .integrals import following
from .result import Notice
from .section import Section
from .uncertainty import EdgeNoise, Mode, OutlineUncertainty

Floats = NDArray[np.float64]
Place = tuple[int, float]

# A calliper in a careful hand on clean faces, mm (common practice).
CALLIPER_STD = 0.05
# Sizes that a calliper takes with its jaws flat against the sides, by the name a person types.
SIZES = ("width", "depth", "length", "breadth")
# The budget's line for what the readings leave.
CALLIPER = "calliper"

# A stretch of outline within this angle of a jaw lies against it, if it is longer than this share of the jaw's reach.
_FLUSH, _LEAST_CONTACT = math.radians(2.0), 0.05
# Between these angles from upright nobody can say which side is the width.
_ASKEW = math.radians(35.0)
# Faces that are further from parallel are no two faces of a wall.
_NOT_OPPOSITE = math.radians(20.0)
# Where on a wall a calliper sat is known to this, mm (stated assumption); matters where its faces are not parallel.
_PLACE_STD = 1.0
# Chances below which a contradiction is told, and refused.
_STRAINED, _IMPOSSIBLE = 0.05, 1e-3
_STEPS = 4
# A jaw touches this share of its distance from the other one, to either side of a place, seen at so many stations.
_JAW, _STATIONS = 0.03, 9
# Traced points within so many standard deviations of the farthest ones belong to the side a jaw lies against.
_SCATTER = 6.0
# Corners of the hull that turn by more are edges of the member, not stretches of a curve.
_SHARP = math.radians(20.0)


@dataclass(frozen=True)
class Reading:
    """A distance measured across the member.

    name : what was measured, in words; one of SIZES where `places` is None
    value, std : mm
    places : two places on the outline, each (vertex, share of the way to the one after it), where a wall was measured
    """

    name: str
    value: float
    std: float = CALLIPER_STD
    places: tuple[Place, Place] | None = None


@dataclass(frozen=True)
class Compared:
    """A reading beside what the outline gave before and gives after the adjustment, mm.

    score : how far the reading is from what everything else says of it, in standard uncertainties
    """

    reading: Reading
    before: float
    before_std: float
    after: float
    after_std: float
    score: float


@dataclass(frozen=True, eq=False)
class Adjusted:
    """An outline adjusted to readings.

    chi_square, probability : of all readings against the outline as it was; the chance of a larger contradiction
    """

    section: Section
    uncertainty: OutlineUncertainty
    compared: tuple[Compared, ...]
    chi_square: float
    probability: float
    notices: tuple[Notice, ...] = ()


def adjusted(section: Section, uncertainty: OutlineUncertainty, readings: Sequence[Reading]) -> Adjusted:
    """The outline that agrees best with all readings and with the picture, and what is still uncertain about it.

    Raises UsageError for a size nobody can take or a reading that cannot be, Refusal where readings and outline
    cannot both be right.
    """
    for reading in readings:
        if not (math.isfinite(reading.value) and reading.value > 0.0 and reading.std > 0.0):
            raise UsageError(
                "calliper-figure",
                f"A {reading.name} of {reading.value:g} mm, known to {reading.std:g} mm, cannot be.",
                "State a size and its standard uncertainty above zero, in mm.",
            )
    modes = np.array([mode.displacement for mode in uncertainty.modes]).reshape(-1, *section.vertices.shape)
    stated = np.array([reading.value for reading in readings])
    own = np.array([reading.std for reading in readings])
    spans = [_span(section, reading, uncertainty.noise) for reading in readings]
    before = np.array([span.distance for span in spans])
    before_columns = _columns(spans, modes)
    place = np.array([span.place_std for span in spans])
    noise = np.array([span.noise for span in spans])

    def predicted(columns: Floats) -> Floats:
        """(r, r) covariance of the readings as the outline foretells them."""
        return columns @ columns.T + np.diag(own**2 + place**2 + noise**2)

    inverse = np.linalg.inv(predicted(before_columns))
    miss = stated - before
    chi_square = float(miss @ inverse @ miss)
    probability = chance_of_more(chi_square, len(readings))
    scores = (inverse @ miss) / np.sqrt(np.diag(inverse))

    sizes = np.zeros(len(modes))
    columns, moved = before_columns, section
    for _ in range(_STEPS):
        gain = columns.T @ np.linalg.inv(predicted(columns))
        sizes = gain @ (stated - np.array([s.distance for s in spans]) + columns @ sizes)
        moved = section.with_vertices(section.vertices + np.tensordot(sizes, modes, axes=1))
        spans = [_span(moved, reading, uncertainty.noise) for reading in readings]
        columns = _columns(spans, modes)
    gain = columns.T @ np.linalg.inv(predicted(columns))
    # Movement of the outline for one mm of each reading.
    followed = np.tensordot(gain.T, modes, axes=1)
    left = [
        replace(mode, displacement=mode.displacement - np.tensordot(column, followed, axes=1))
        for mode, column in zip(uncertainty.modes, columns.T, strict=True)
    ]
    for field, mine, sat, random in zip(followed, own, place, noise, strict=True):
        left.append(Mode(CALLIPER, field * math.hypot(mine, sat)))
        left.append(Mode(RANDOM, field * random))
    # The same readings of the adjusted outline: its causes as they are left.
    leftover = np.array([mode.displacement for mode in left])
    after_std = np.linalg.norm(_columns(spans, leftover), axis=1)
    compared = tuple(
        Compared(reading, float(b), float(u), span.distance, float(v), float(score))
        for reading, b, u, span, v, score in zip(
            readings,
            before,
            np.sqrt(np.sum(before_columns**2, axis=1) + noise**2),
            spans,
            after_std,
            scores,
            strict=True,
        )
    )
    notices = _judged(compared, probability)
    return Adjusted(moved, replace(uncertainty, modes=tuple(left)), compared, chi_square, probability, notices)


def _judged(compared: Sequence[Compared], probability: float) -> tuple[Notice, ...]:
    """Words about readings that the outline hardly bears; Refusal where both cannot be right."""
    if probability >= _STRAINED:
        return ()
    odd = max(compared, key=lambda c: abs(c.score))
    reading = odd.reading
    figures = (
        f"The calliper's {reading.name} of {reading.value:g} mm and the picture's {odd.before:.2f} ± "
        f"{odd.before_std:.2f} mm"
    )
    if probability < _IMPOSSIBLE:
        raise Refusal(
            "calliper-contradicts",
            f"{figures} cannot both be right.",
            "Check that this size was measured where it is stated, on this face and in mm, and that the reference, "
            "its check lengths and the height of the face are as stated.",
        )
    return (
        Notice(
            "calliper-strained",
            f"{figures} agree badly (a chance of {100 * probability:.1f} %); the adjusted figures take both for right.",
            "Measure that size once more, and check the reference and the height of the face.",
        ),
    )


def _columns(spans: Sequence[_Span], modes: Floats) -> Floats:
    """(r, k) change of every span at one standard uncertainty of every cause."""
    return np.array([np.tensordot(modes, span.gradient, axes=((1, 2), (0, 1))) for span in spans]).reshape(
        len(spans), len(modes)
    )


@dataclass(frozen=True, eq=False)
class _Span:
    """A distance across a section.

    gradient : (n, 2) its change for a movement of every vertex
    place_std : mm, what it changes by as the jaws sit here or there
    noise : mm, its standard deviation from random error along the outline
    """

    distance: float
    gradient: Floats
    place_std: float
    noise: float


@dataclass(frozen=True, eq=False)
class _Contact:
    """What one jaw touches: a mean of vertices by weights (n,).

    spread : mm, range of the heights that the jaw might touch
    noise : mm, standard deviation of the mean from random error
    """

    weights: Floats
    spread: float
    noise: float


@dataclass(frozen=True, eq=False)
class _Face:
    """A smoothed point of an outline: a mean of vertices by weights (n,); its normal (2,) out of the material.

    noise, turn_noise : standard deviations of the point along the normal, mm, and of the normal, rad, from random error
    """

    weights: Floats
    normal: Floats
    noise: float
    turn_noise: float


def _span(section: Section, reading: Reading, noise: EdgeNoise | None) -> _Span:
    if reading.places is not None:
        return _wall(section, reading.places, reading.name, noise)
    return _size(section, reading.name, noise)


def _size(section: Section, name: str, noise: EdgeNoise | None) -> _Span:
    """One of SIZES: the distance of two jaws square to the section's own sides, each flat against what it meets."""
    if name not in SIZES:
        raise UsageError(
            "calliper-size",
            f"A calliper does not know the size {name!r}.",
            f"Give one of {', '.join(SIZES)}, or two points on the outline.",
        )
    angle = enclosing_angle(section)
    upright = abs(angle) > 0.25 * math.pi
    askew = abs((angle + 0.25 * math.pi) % (0.5 * math.pi) - 0.25 * math.pi)
    if name in ("width", "depth") and askew > _ASKEW:
        raise UsageError(
            "calliper-askew",
            f"The face lies {math.degrees(askew):.0f}° askew, so which of its sides is the {name} is not plain.",
            "State the longer size as length, the shorter one as breadth.",
        )
    along = name == "length" or (name == "depth" and upright) or (name == "width" and not upright)
    direction = np.array([math.cos(angle), math.sin(angle)])
    if not along:
        direction = np.array([-direction[1], direction[0]])
    hull = _hull(section.vertices)
    jaws = (direction, -direction)
    contacts = [_contact(section, hull, jaw, noise) for jaw in jaws]
    gradient = sum((c.weights[:, None] * jaw for c, jaw in zip(contacts, jaws, strict=True)), np.zeros(2))
    # Anywhere on a stretch that is not quite parallel to the jaw.
    spread = math.sqrt(sum(c.spread**2 for c in contacts) / 12.0)
    distance = float(np.sum(gradient * section.vertices))
    return _Span(distance, gradient, spread, math.hypot(*(c.noise for c in contacts)))


def _contact(section: Section, hull: NDArray[np.intp], jaw: Floats, noise: EdgeNoise | None) -> _Contact:
    """What a flat jaw meets that comes against the outline from the side of `jaw` (2,)."""
    vertices, after = section.vertices, following(section)
    corners = vertices[hull]
    sides = np.roll(corners, -1, axis=0) - corners
    lengths = np.hypot(*sides.T)
    directions = (sides[:, 1] * jaw[0] - sides[:, 0] * jaw[1]) / lengths
    flush = directions > math.cos(_FLUSH)
    beside = np.array([-jaw[1], jaw[0]])
    reach = float(np.ptp(corners @ beside))
    if lengths[flush].sum() > _LEAST_CONTACT * reach:
        ends = np.unique(np.concatenate([hull[flush], np.roll(hull, -1)[flush]]))
        ends = ends[np.argsort(vertices[ends] @ beside)]
        # Traced points scatter about the side that the jaw lies against; the hull holds the farthest of them alone.
        depth = 0.0 if noise is None else _SCATTER * float(np.median(noise.std))
        lateral, height = vertices @ beside, vertices @ jaw
        below = np.interp(lateral, lateral[ends], height[ends]) - height
        near = (below <= depth + 1e-9) & (lateral >= lateral[ends[0]]) & (lateral <= lateral[ends[-1]])
        edges = np.flatnonzero(near & near[after])
        long = np.hypot(*(vertices[after[edges]] - vertices[edges]).T)
        weights = np.zeros(len(vertices))
        # A jaw over two tips rests on either.
        bridged = float(lengths[flush].sum()) - float(long.sum())
        if bridged > 0.5 * float(lengths[flush].sum()):
            np.add.at(weights, hull[flush], 0.5 * lengths[flush])
            np.add.at(weights, np.roll(hull, -1)[flush], 0.5 * lengths[flush])
        else:
            np.add.at(weights, edges, 0.5 * long)
            np.add.at(weights, after[edges], 0.5 * long)
        return _Contact(
            weights / weights.sum(), float(np.ptp(height[ends])), _mean_noise(noise, int(ends[0]), float(long.sum()))
        )
    crown = int(np.argmax(corners @ jaw))
    vertex = int(hull[crown])
    turn = math.acos(float(np.clip(sides[crown] @ sides[crown - 1] / (lengths[crown] * lengths[crown - 1]), -1.0, 1.0)))
    if turn > _SHARP:
        weights = np.zeros(len(vertices))
        weights[vertex] = 1.0
        return _Contact(weights, 0.0, _mean_noise(noise, vertex, 0.0))
    rounded = _face(section, (vertex, 0.0), float(np.ptp(corners @ jaw)), noise)
    return _Contact(rounded.weights, 0.0, rounded.noise)


def _wall(section: Section, places: tuple[Place, Place], name: str, noise: EdgeNoise | None) -> _Span:
    """The thickness between two faces, each given by a place on it, square to both."""
    vertices, after = section.vertices, following(section)
    picked = [vertices[e] + t * (vertices[after[e]] - vertices[e]) for e, t in places]
    first, second = (_face(section, place, float(np.hypot(*(picked[1] - picked[0]))), noise) for place in places)
    facing = second.normal - first.normal
    opening = float(np.hypot(*facing))
    apart = picked[1] - picked[0]
    if opening < 2.0 * math.cos(0.5 * _NOT_OPPOSITE) or abs(float(facing @ apart)) < 0.8 * opening * np.hypot(*apart):
        raise UsageError(
            "calliper-faces",
            f"The two points of the {name} do not lie on faces opposite to each other.",
            "Give two points on the outline, straight across a wall or a bar, away from corners.",
        )
    jaw = facing / opening
    # From outside the normals point away from each other, across a gap or a hole towards each other.
    jaw = jaw * math.copysign(1.0, float(jaw @ apart))
    gradient = (second.weights - first.weights)[:, None] * jaw
    # What is seen of a taper beyond what scatter makes.
    taper = float(first.normal[0] * second.normal[1] - first.normal[1] * second.normal[0])
    taper = math.sqrt(max(taper**2 - first.turn_noise**2 - second.turn_noise**2, 0.0))
    return _Span(
        float(np.sum(gradient * vertices)), gradient, taper * _PLACE_STD, math.hypot(first.noise, second.noise)
    )


def _face(section: Section, place: Place, distance: float, noise: EdgeNoise | None) -> _Face:
    """The outline around a place on it, smoothed by a parabola over what a jaw touches.

    distance : mm, to the other jaw
    """
    vertices = section.vertices
    sizes = np.array([len(loop) for loop in section.loops])
    last = np.cumsum(sizes)
    loop = int(np.searchsorted(last, place[0], side="right"))
    own = np.arange(last[loop] - sizes[loop], last[loop])
    nexts = np.roll(own, -1)
    lengths = np.hypot(*(vertices[nexts] - vertices[own]).T)
    along = np.concatenate([[0.0], np.cumsum(lengths)])
    here = along[place[0] - own[0]] + place[1] * lengths[place[0] - own[0]]
    half = min(max(_JAW * distance, min(2.0, 0.25 * distance)), 0.1 * along[-1])
    steps = np.linspace(-half, half, _STATIONS)
    at = (here + steps) % along[-1]
    edge = np.clip(np.searchsorted(along, at, side="right") - 1, 0, len(own) - 1)
    share = (at - along[edge]) / lengths[edge]
    stations = np.zeros((_STATIONS, len(vertices)))
    np.add.at(stations, (np.arange(_STATIONS), own[edge]), 1.0 - share)
    np.add.at(stations, (np.arange(_STATIONS), nexts[edge]), share)
    fit = np.linalg.pinv(np.stack([np.ones(_STATIONS), steps, steps**2], axis=1))
    tangent = fit[1] @ stations @ vertices
    normal = np.array([tangent[1], -tangent[0]]) / np.hypot(*tangent)
    scatter = _mean_noise(noise, place[0], 2.0 * half)
    # Variances of the middle of a parabola, and of the slope there, against that of the mean.
    return _Face(fit[0] @ stations, normal, 1.5 * scatter, math.sqrt(3.0) * scatter / half)


def _mean_noise(noise: EdgeNoise | None, vertex: int, length: float) -> float:
    """Standard deviation of the mean of the outline over a length, mm; of a single point for none."""
    if noise is None:
        return 0.0
    correlation = float(noise.correlation_length[vertex])
    return float(noise.std[vertex]) * math.sqrt(min(1.0, correlation / length) if length > 0.0 else 1.0)


def _hull(points: Floats) -> NDArray[np.intp]:
    """Indices of the corners of the convex hull, counter-clockwise (monotone chain; Andrew 1979)."""
    order = np.lexsort((points[:, 1], points[:, 0]))

    def half(indices: Sequence[int]) -> list[int]:
        chain: list[int] = []
        for i in indices:
            while len(chain) > 1:
                (ax, ay), (bx, by) = points[chain[-1]] - points[chain[-2]], points[i] - points[chain[-1]]
                if ax * by - ay * bx > 0.0:
                    break
                chain.pop()
            chain.append(i)
        return chain[:-1]

    return np.array(half(order.tolist()) + half(order[::-1].tolist()), dtype=np.intp)
