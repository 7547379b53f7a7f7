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

from .effects import RANDOM
from .enclosing import enclosing_angle
from .errors import Refusal, UsageError
from .integrals import boundary, following
from .offset import edge_normals
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
    spans = [_span(section, reading) for reading in readings]
    before = np.array([span.distance for span in spans])
    before_columns = _columns(spans, modes)
    place = np.array([span.place_std for span in spans])
    noise = np.array([_span_noise(section, span, uncertainty.noise) for span in spans])

    def predicted(columns: Floats) -> Floats:
        """(r, r) covariance of the readings as the outline foretells them."""
        return columns @ columns.T + np.diag(own**2 + place**2 + noise**2)

    inverse = np.linalg.inv(predicted(before_columns))
    miss = stated - before
    chi_square = float(miss @ inverse @ miss)
    probability = _chance_of_more(chi_square, len(readings))
    scores = (inverse @ miss) / np.sqrt(np.diag(inverse))

    sizes = np.zeros(len(modes))
    columns, moved = before_columns, section
    for _ in range(_STEPS):
        gain = columns.T @ np.linalg.inv(predicted(columns))
        sizes = gain @ (stated - np.array([s.distance for s in spans]) + columns @ sizes)
        moved = section.with_vertices(section.vertices + np.tensordot(sizes, modes, axes=1))
        spans = [_span(moved, reading) for reading in readings]
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


def _chance_of_more(chi_square: float, degrees: int) -> float:
    from scipy.special import gammaincc

    return float(gammaincc(0.5 * degrees, 0.5 * chi_square)) if degrees else 1.0


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
    contacts : for either jaw the vertex where the stretch against it begins, and its length, mm (0 for a point)
    """

    distance: float
    gradient: Floats
    place_std: float
    contacts: tuple[tuple[int, float], ...]


def _span(section: Section, reading: Reading) -> _Span:
    if reading.places is not None:
        return _wall(section, reading.places, reading.name)
    return _size(section, reading.name)


def _size(section: Section, name: str) -> _Span:
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
    gradient = np.zeros_like(section.vertices)
    distance, spread, contacts = 0.0, 0.0, []
    for jaw in (direction, -direction):
        weights, range_, contact = _contact(section.vertices, hull, jaw)
        gradient += weights[:, None] * jaw
        distance += float(weights @ (section.vertices @ jaw))
        # Anywhere on a stretch that is not quite parallel to the jaw.
        spread += range_**2 / 12.0
        contacts.append(contact)
    return _Span(distance, gradient, math.sqrt(spread), tuple(contacts))


def _contact(vertices: Floats, hull: NDArray[np.intp], jaw: Floats) -> tuple[Floats, float, tuple[int, float]]:
    """Where a flat jaw meets a hull from the side of `jaw` (2,).

    Returns the weights (n,) of the vertices in what the jaw reads, the range of their heights, mm, and the contact.
    """
    corners = vertices[hull]
    sides = np.roll(corners, -1, axis=0) - corners
    lengths = np.hypot(*sides.T)
    turned = (sides[:, 1] * jaw[0] - sides[:, 0] * jaw[1]) / lengths
    flush = turned > math.cos(_FLUSH)
    weights = np.zeros(len(vertices))
    reach = float(np.ptp(corners @ np.array([-jaw[1], jaw[0]])))
    if lengths[flush].sum() > _LEAST_CONTACT * reach:
        np.add.at(weights, hull[flush], 0.5 * lengths[flush])
        np.add.at(weights, np.roll(hull, -1)[flush], 0.5 * lengths[flush])
        touched = np.flatnonzero(weights)
        longest = int(np.flatnonzero(flush)[np.argmax(lengths[flush])])
        return (
            weights / weights.sum(),
            float(np.ptp(vertices[touched] @ jaw)),
            (int(hull[longest]), float(lengths[flush].sum())),
        )
    highest = int(hull[np.argmax(corners @ jaw)])
    weights[highest] = 1.0
    return weights, 0.0, (highest, 0.0)


def _wall(section: Section, places: tuple[Place, Place], name: str) -> _Span:
    """The thickness between two faces, each given by a place on it, square to both."""
    vertices, after = section.vertices, following(section)
    lengths, normals = edge_normals(boundary(section))
    edges = [int(edge) for edge, _ in places]
    points = [vertices[e] + t * (vertices[after[e]] - vertices[e]) for e, t in places]
    facing = normals[:, edges[1]] - normals[:, edges[0]]
    opening = float(np.hypot(*facing))
    apart = points[1] - points[0]
    if opening < 2.0 * math.cos(0.5 * _NOT_OPPOSITE) or abs(float(facing @ apart)) < 0.8 * opening * np.hypot(*apart):
        raise UsageError(
            "calliper-faces",
            f"The two points of the {name} do not lie on faces opposite to each other.",
            "Give two points on the outline, straight across a wall or a bar.",
        )
    jaw = facing / opening
    gradient = np.zeros_like(vertices)
    for (edge, t), sign in zip(places, (-1.0, 1.0), strict=True):
        gradient[edge] += sign * (1.0 - t) * jaw
        gradient[after[edge]] += sign * t * jaw
    distance = float(jaw @ apart)
    # From outside the normals point away from each other, across a gap or a hole towards each other.
    gradient, distance = (gradient, distance) if distance > 0.0 else (-gradient, -distance)
    taper = abs(float(normals[0, edges[0]] * normals[1, edges[1]] - normals[1, edges[0]] * normals[0, edges[1]]))
    return _Span(distance, gradient, taper * _PLACE_STD, tuple((edge, float(lengths[edge])) for edge in edges))


def _span_noise(section: Section, span: _Span, noise: EdgeNoise | None) -> float:
    """Standard deviation of a span from random error along the outline: its mean over either contact."""
    if noise is None:
        return 0.0
    variance = 0.0
    for vertex, length in span.contacts:
        correlation = float(noise.correlation_length[vertex])
        variance += float(noise.std[vertex]) ** 2 * min(1.0, correlation / length if length > 0.0 else 1.0)
    return math.sqrt(variance)


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
