"""One outline from several pictures of the same face: registered, weighted, compared.

Knows outlines, what moves them, and which causes several pictures have in common; nothing of pictures themselves.
Turned and shifted onto the first, the outlines are averaged with the weights of least squares. A cause that all
pictures have in common stays as it is, one that each has anew averages out, and one that turns with the reference
while the face stays, as a scanner's scale does, is averaged over its directions. How far the pictures scatter beside
what was expected of them corrects what was expected (type A against type B, JCGM 100, 4.2 and 4.3; the ratio is
Birge's, "The calculation of errors by the method of least squares", 1932, from memory).
"""

from __future__ import annotations

import math
from collections.abc import Collection, Mapping, Sequence
from dataclasses import dataclass, field, replace

import numpy as np
from numpy.typing import NDArray

from .axes import PrincipalAxes, principal_axes
from .chance import chance_of_more
from .errors import Refusal, UsageError
from .integrals import centroidal, following, moments
from .offset import mitre
from .result import Notice
from .section import Section
from .uncertainty import EdgeNoise, Mode, OutlineUncertainty, covariance

Floats = NDArray[np.float64]

# Edges of the common outline are no longer than this share of its length, so that it can follow every picture.
_FINEST = 1.0 / 240.0
# Outlines further apart than this share of their size are not of one face.
_FARTHEST = 0.04
_LEAST_SEEN = 0.9
_SHARP = math.radians(20.0)
# Traced points scatter along the outline; over this share of its length to either side its course is taken smooth.
_SMOOTH = 1.0 / 500.0
# Neighbours whose median an edge of a traced stretch takes for its offset: a spike in one picture is not the face's.
_NEIGHBOURS = 3
_STEPS = 12
# Two ways to lay one outline on another that differ by less are the same; the smaller turn is taken.
_AS_GOOD = 1.3
# Judged uncertainties are good to a quarter: as much as eight observations tell (JCGM 100, G.4.2).
_JUDGEMENT = 8
_STRAINED, _IMPOSSIBLE = 0.05, 1e-3
# Share of a figure that laying outlines on each other and carrying values between them may cost.
_ROUNDING = 2e-5
# Figures in which pictures are compared: free of how a face lies. Of nearly equal principal moments only the sum is.
COMPARED = ("area", "second_moment_major", "second_moment_minor")
_COMPARED_ROUND = ("area", "polar_second_moment")
_ROUND = 0.05


@dataclass(frozen=True, eq=False)
class Pictured:
    """The outline that one picture gives, and what is uncertain about it."""

    section: Section
    uncertainty: OutlineUncertainty


@dataclass(frozen=True, eq=False)
class Laid:
    """How one picture's outline lies to the common one.

    weight : its share in the common outline
    turn : rad, the turn that laid it on the first
    apart : mm, mean distance from the common outline along its normal
    figures : of this outline alone, those that were compared
    """

    weight: float
    turn: float
    apart: float
    figures: Mapping[str, float]


@dataclass(frozen=True, eq=False)
class Combined:
    """The common outline of several pictures.

    chi_square, degrees, probability : of the pictures' figures against each other
    narrowed, widened : factors by which the pictures' agreement changed what each has by itself, and what else may
        differ between them
    """

    section: Section
    uncertainty: OutlineUncertainty
    laid: tuple[Laid, ...]
    chi_square: float
    degrees: int
    probability: float
    narrowed: float
    widened: float
    notices: tuple[Notice, ...] = field(default=())

    def scatter(self, name: str) -> float:
        """Standard deviation of a compared figure between the pictures; one degree of freedom less than pictures."""
        return float(np.std([one.figures[name] for one in self.laid], ddof=1))


def combined(pictured: Sequence[Pictured], fixed: Collection[str], loose: Collection[str]) -> Combined:
    """The outline that agrees best with all pictures of one face.

    fixed : sources that are one cause for all pictures and keep their direction in the reference (its scale)
    loose : sources that are new in every picture
    All others count as one cause for all, in whatever sense adds up, but may make pictures differ.
    Raises Refusal where the outlines cannot be of one face, UsageError for less than two.
    """
    if len(pictured) < 2:
        raise UsageError("one-picture", "There is only one picture to combine.", "Give two or more of the same face.")
    template = _refined(pictured[0].section)
    motions = [(0.0, np.zeros(2))] + [_registered(template, p.section, n) for n, p in enumerate(pictured[1:], start=2)]
    turned = [p.section.with_vertices(_moved(p.section.vertices, m)) for p, m in zip(pictured, motions, strict=True)]
    offsets = [np.zeros(len(template.vertices))]
    offsets += [_offsets(template, other, n) for n, other in enumerate(turned[1:], start=2)]
    causes = [_causes(template, t, p.uncertainty, m[0]) for t, p, m in zip(turned, pictured, motions, strict=True)]
    groups = _grouped(template, causes, fixed, loose)
    noises = [_noise(template, t, p.uncertainty) for t, p in zip(turned, pictured, strict=True)]
    weights = _weights(template, groups, noises, len(pictured))
    section = _averaged(template, np.tensordot(weights, np.array(offsets), axes=1))
    names = _compared_names(section)
    figures = np.array([_figures(t, names) for t in turned])
    strict = _compared(section, figures, groups, noises, ("loose",))
    whole = _compared(section, figures, groups, noises, ("loose", "steady"))
    degrees = len(names) * (len(pictured) - 1)
    narrowed = math.sqrt((_JUDGEMENT + min(strict, degrees)) / (_JUDGEMENT + degrees))
    widened = math.sqrt((_JUDGEMENT + max(whole, degrees)) / (_JUDGEMENT + degrees))
    probability = chance_of_more(whole, degrees)
    factors = {"loose": max(narrowed, widened) if widened > 1.0 else narrowed, "steady": widened, "fixed": 1.0}
    uncertainty = OutlineUncertainty(
        tuple(_joint(group, weights, factors[group.kind]) for group in groups),
        _joint_noise(noises, weights, factors["loose"]),
        np.sum(
            [
                w * _carried(template, t, p.uncertainty.edge_bound)
                for w, t, p in zip(weights, turned, pictured, strict=True)
                if p.uncertainty.edge_bound is not None
            ],
            axis=0,
        )
        if all(p.uncertainty.edge_bound is not None for p in pictured)
        else None,
        _simplification(pictured, weights),
    )
    apart = [
        float(np.mean(np.abs(o - np.sum([w * q for w, q in zip(weights, offsets, strict=True)], axis=0))))
        for o in offsets
    ]
    laid = tuple(
        Laid(float(w), m[0], a, dict(zip(names, f.tolist(), strict=True)))
        for w, m, a, f in zip(weights, motions, apart, figures, strict=True)
    )
    return Combined(
        section,
        uncertainty,
        laid,
        whole,
        degrees,
        probability,
        narrowed,
        widened,
        _judged(laid, probability),
    )


def _averaged(template: Section, distance: Floats) -> Section:
    """The template with every edge moved out by its distance (n,), the more smoothly the more it takes."""
    for wide in (1.0, 2.0, 4.0, 8.0):
        section = template.with_vertices(template.vertices + _displacement(template, distance, wide))
        if section.to_polygon().is_valid:
            return section
    raise _differ("The outlines cannot be averaged; they are too far apart in places.")


def _judged(laid: Sequence[Laid], probability: float) -> tuple[Notice, ...]:
    if probability >= _STRAINED:
        return ()
    areas = ", ".join(f"{one.figures['area']:.0f}" for one in laid)
    odd = int(np.argmax([one.apart for one in laid])) + 1
    which = f"; photo {odd} is farthest from the others" if len(laid) > 2 else ""
    if probability < _IMPOSSIBLE:
        raise _differ(f"The photos contradict each other: areas of {areas} mm²{which}.")
    return (
        Notice(
            "photos-strained",
            f"The photos agree less than their intervals promise (areas of {areas} mm²{which}; a chance of "
            f"{100 * probability:.1f} %); the intervals are widened for it.",
            "Look at the outline on each picture; leave out the one whose outline is not that of the face.",
        ),
    )


def _differ(message: str) -> Refusal:
    return Refusal(
        "photos-disagree",
        message,
        "Check that all photos show the same face of the same member, none of them mirrored, and that what is stated "
        "of the reference and of the face's height holds for all of them; look at each photo's own outline.",
    )


# Outlines laid on each other


def _refined(section: Section) -> Section:
    """The same region with vertices added on long edges."""
    longest = _FINEST * sum(float(np.hypot(*(np.roll(p, -1, axis=0) - p).T).sum()) for p in section.loops)

    def finer(loop: Floats) -> Floats:
        along = np.roll(loop, -1, axis=0) - loop
        counts = np.maximum(np.ceil(np.hypot(*along.T) / longest).astype(int), 1)
        share = np.concatenate([np.arange(count) / count for count in counts])
        return np.repeat(loop, counts, axis=0) + share[:, None] * np.repeat(along, counts, axis=0)

    return Section(
        tuple(replace(p, shell=finer(p.shell), holes=tuple(finer(h) for h in p.holes)) for p in section.parts)
    )


def _moved(points: Floats, motion: tuple[float, Floats]) -> Floats:
    c, s = math.cos(motion[0]), math.sin(motion[0])
    return points @ np.array([[c, s], [-s, c]]) + motion[1]


def _registered(template: Section, other: Section, number: int) -> tuple[float, Floats]:
    """The turn and shift that lays one outline on another, least squares of the distances along its normals."""
    if _shape_of(template) != _shape_of(other):
        raise _differ(f"Photo {number} shows {_words_of(other)}, the first {_words_of(template)}.")
    here, there = centroidal(template), centroidal(other)
    lean = _principal(template).angle - _principal(other).angle
    base = template.to_polygon()
    tried = []
    for turn in (0.0, 0.5 * math.pi, math.pi, -0.5 * math.pi, lean, lean + math.pi):
        turn = math.remainder(turn, 2.0 * math.pi)
        motion = (turn, here.origin - _moved(there.origin[None], (turn, np.zeros(2)))[0])
        laid = other.with_vertices(_moved(other.vertices, motion)).to_polygon()
        tried.append((base.symmetric_difference(laid).area, motion))
    least = min(area for area, _ in tried)
    motion = min((m for area, m in tried if area <= _AS_GOOD * least), key=lambda m: abs(m[0]))
    points, normals, lengths = _stations(template)
    for _ in range(_STEPS):
        laid = other.with_vertices(_moved(other.vertices, motion))
        distance = _distances(points, normals, laid, _FARTHEST * _size(template))
        seen = np.isfinite(distance)
        if np.sum(lengths[seen]) < 0.5 * np.sum(lengths):
            break
        centre = points[seen].mean(axis=0)
        about = points[seen] - centre
        lever = normals[seen, 1] * about[:, 0] - normals[seen, 0] * about[:, 1]
        rows = np.column_stack([normals[seen], lever]) * np.sqrt(lengths[seen])[:, None]
        step = np.linalg.lstsq(rows, -distance[seen] * np.sqrt(lengths[seen]), rcond=None)[0]
        c, s = math.cos(step[2]), math.sin(step[2])
        spin = np.array([[c, s], [-s, c]])
        motion = (motion[0] + float(step[2]), (motion[1] - centre) @ spin + centre + step[:2])
        if np.hypot(step[0], step[1]) < 1e-7 and abs(step[2]) < 1e-9:
            break
    return math.remainder(motion[0], 2.0 * math.pi), motion[1]


def _shape_of(section: Section) -> list[int]:
    return sorted(len(part.holes) for part in section.parts)


def _words_of(section: Section) -> str:
    holes = sum(_shape_of(section))
    parts = len(section.parts)
    return f"{parts} part{'s' * (parts > 1)} with {holes or 'no'} hole{'s' * (holes != 1)}"


def _size(section: Section) -> float:
    return float(np.hypot(*np.ptp(section.vertices, axis=0)))


def _stations(section: Section) -> tuple[Floats, Floats, Floats]:
    """Middles of the edges (n, 2), their normals out of the material (n, 2), their lengths (n,)."""
    start = section.vertices
    along = start[following(section)] - start
    lengths = np.hypot(*along.T)
    return start + 0.5 * along, np.stack([along[:, 1], -along[:, 0]], axis=1) / lengths[:, None], lengths


def _around(section: Section, values: Floats, lengths: Floats, *, at_middles: bool, wide: float = 1.0) -> Floats:
    """Means (n, k) of values of the edges over a stretch around every vertex, or around the middle of every edge.

    wide : factor of the usual stretch
    """
    half = wide * _SMOOTH * float(lengths.sum())
    means, first = [], 0
    for loop in section.loops:
        own = slice(first, first + len(loop))
        first += len(loop)
        place = np.concatenate([[0.0], np.cumsum(lengths[own])])
        whole = np.concatenate([place - place[-1], place[1:], place[1:] + place[-1]])
        centre = 0.5 * (place[:-1] + place[1:]) if at_middles else place[:-1]
        columns = []
        for column in values[own].T:
            sums = np.concatenate([[0.0], np.cumsum(column * lengths[own])])
            total = np.concatenate([sums - sums[-1], sums[1:], sums[1:] + sums[-1]])
            columns.append(np.interp(centre + half, whole, total) - np.interp(centre - half, whole, total))
        means.append(np.column_stack(columns) / (2.0 * half))
    return np.concatenate(means)


def _distances(points: Floats, normals: Floats, other: Section, reach: float) -> Floats:
    """(n,) how far an outline lies beyond points along their normals; nan where it does not cross them within reach."""
    _, facing, _ = _stations(other)
    start = other.vertices
    end = start[following(other)]
    found = np.full(len(points), np.nan)
    for first in range(0, len(points), 256):
        block = slice(first, first + 256)
        n = normals[block, None]
        to_start, to_end = start - points[block, None], end - points[block, None]
        side_start = n[..., 0] * to_start[..., 1] - n[..., 1] * to_start[..., 0]
        side_end = n[..., 0] * to_end[..., 1] - n[..., 1] * to_end[..., 0]
        crosses = (side_start * side_end <= 0.0) & (side_start != side_end)
        share = np.where(crosses, side_start / np.where(crosses, side_start - side_end, 1.0), 0.0)
        height = np.sum(n * (to_start + share[..., None] * (to_end - to_start)), axis=-1)
        # The far face of a thin wall faces the other way.
        usable = crosses & (np.sum(n * facing, axis=-1) > 0.3) & (np.abs(height) <= reach)
        height = np.where(usable, height, np.inf)
        nearest = np.argmin(np.abs(height), axis=1)
        value = height[np.arange(len(nearest)), nearest]
        found[block] = np.where(np.isfinite(value), value, np.nan)
    return found


def _offsets(template: Section, other: Section, number: int) -> Floats:
    """(n,) how far an outline that lies on the template is beyond every edge of it."""
    points, normals, lengths = _stations(template)
    smooth = _around(template, normals, lengths, at_middles=True)
    smooth /= np.maximum(np.linalg.norm(smooth, axis=1, keepdims=True), 1e-12)
    edges = lengths > _SMOOTH * float(lengths.sum())
    found = _distances(points, np.where(edges[:, None], normals, smooth), other, _FARTHEST * _size(template))
    seen = np.isfinite(found)
    if np.sum(lengths[seen]) < _LEAST_SEEN * np.sum(lengths):
        raise _differ(f"The outline of photo {number} is not that of the first.")
    filled, first = found.copy(), 0
    for loop in template.loops:
        own = slice(first, first + len(loop))
        first += len(loop)
        known = np.flatnonzero(seen[own])
        if len(known) == 0:
            raise _differ(f"The outline of photo {number} is not that of the first.")
        of_loop = np.interp(np.arange(len(loop)), known, found[own][known], period=len(loop))
        near = [np.roll(of_loop, step) for step in range(-_NEIGHBOURS, _NEIGHBOURS + 1)]
        filled[own] = np.where(edges[own], of_loop, np.median(near, axis=0))
    return filled


def _displacement(section: Section, distance: Floats, wide: float) -> Floats:
    """(n, 2) movement of the vertices that moves every edge out by its distance (n,), smooth along traced stretches."""
    _, normals, lengths = _stations(section)
    after = following(section)
    before = np.empty_like(after)
    before[after] = np.arange(len(after))
    long = lengths > _SMOOTH * float(lengths.sum())
    corners = long & long[before] & (np.sum(normals[before] * normals, axis=1) < math.cos(_SHARP))
    mitred = mitre(normals[before].T, normals.T, distance[before], distance).T
    mean = _around(section, np.column_stack([normals, distance]), lengths, at_middles=False, wide=wide)
    level = mean[:, 2:] * mean[:, :2] / np.maximum(np.linalg.norm(mean[:, :2], axis=1, keepdims=True), 1e-12)
    return np.where(corners[:, None], mitred, level)


# Causes


@dataclass(frozen=True, eq=False)
class _Cause:
    """One cause in one picture: what it does to the common outline's vertices (n, 2); the index among its source's."""

    source: str
    shape: str
    ordinal: int
    field: Floats


@dataclass(frozen=True, eq=False)
class _Group:
    """One independent cause.

    fields : per picture (n, 2) how it bends the outline there, beside moving it as a body
    body : (n, 2) how it moves the first outline as a body
    """

    source: str
    shape: str
    kind: str
    fields: tuple[Floats, ...]
    body: Floats


def _place_on(template: Section, other: Section) -> tuple[NDArray[np.intp], NDArray[np.intp], Floats]:
    """For every vertex of the template the nearest place on another outline: edge's ends, share of the way."""
    start, after = other.vertices, following(other)
    along = start[after] - start
    square = np.sum(along**2, axis=1)
    edges, shares = [], []
    for first in range(0, len(template.vertices), 256):
        to = template.vertices[first : first + 256, None] - start
        share = np.clip(np.sum(to * along, axis=-1) / square, 0.0, 1.0)
        distance = np.sum((to - share[..., None] * along) ** 2, axis=-1)
        nearest = np.argmin(distance, axis=1)
        edges.append(nearest)
        shares.append(share[np.arange(len(nearest)), nearest])
    edge = np.concatenate(edges)
    return edge, after[edge], np.concatenate(shares)


def _carried(template: Section, other: Section, values: Floats | None) -> Floats:
    """Values at the vertices of an outline, taken over to those of the template that it lies on."""
    start, end, share = _place_on(template, other)
    found = np.asarray(values, float)
    share = share[:, None] if found.ndim > 1 else share
    return (1.0 - share) * found[start] + share * found[end]


def _causes(template: Section, other: Section, uncertainty: OutlineUncertainty, turn: float) -> list[_Cause]:
    start, end, share = _place_on(template, other)
    c, s = math.cos(turn), math.sin(turn)
    spin = np.array([[c, s], [-s, c]])
    counts: dict[str, int] = {}
    found = []
    for mode in uncertainty.modes:
        ordinal = counts.get(mode.source, 0)
        counts[mode.source] = ordinal + 1
        moved = (1.0 - share)[:, None] * mode.displacement[start] + share[:, None] * mode.displacement[end]
        found.append(_Cause(mode.source, mode.shape, ordinal, moved @ spin))
    return found


def _grouped(
    section: Section, causes: Sequence[Sequence[_Cause]], fixed: Collection[str], loose: Collection[str]
) -> list[_Group]:
    """Causes of all pictures as independent ones."""
    bodily = _Bodily(section)
    nothing = np.zeros_like(section.vertices)
    fields: dict[tuple[str, int, int], list[Floats]] = {}
    bodies: dict[tuple[str, int, int], Floats] = {}
    shapes: dict[tuple[str, int, int], str] = {}
    for number, own in enumerate(causes):
        for cause in own:
            key = (cause.source, cause.ordinal, number if cause.source in loose else -1)
            rigid = bodily.of(cause.field)
            bent = cause.field - rigid
            of_all = fields.setdefault(key, [nothing] * len(causes))
            known = next((f for f in of_all if f is not nothing), nothing)
            # Without a direction of its own in the reference a cause may act either way; the same way is the worst.
            against = cause.source not in fixed and float(np.sum(known * bent)) < 0.0
            of_all[number] = -bent if against else bent
            bodies.setdefault(key, rigid if number == 0 else nothing)
            shapes[key] = cause.shape

    def kind(source: str) -> str:
        return "loose" if source in loose else "fixed" if source in fixed else "steady"

    return [_Group(key[0], shapes[key], kind(key[0]), tuple(own), bodies[key]) for key, own in fields.items()]


def _noise(template: Section, other: Section, uncertainty: OutlineUncertainty) -> EdgeNoise | None:
    if uncertainty.noise is None:
        return None
    return EdgeNoise(
        _carried(template, other, uncertainty.noise.std),
        _carried(template, other, uncertainty.noise.correlation_length),
    )


class _Bodily:
    """The part of a movement of the vertices that laying outlines on each other takes out: shifts and a turn."""

    def __init__(self, section: Section) -> None:
        points, normals, lengths = _stations(section)
        self._after = following(section)
        self._centre = points.mean(axis=0)
        about = points - self._centre
        self._about = section.vertices - self._centre
        self._normals = normals * np.sqrt(lengths)[:, None]
        lever = self._normals[:, 1] * about[:, 0] - self._normals[:, 0] * about[:, 1]
        self._solver = np.linalg.pinv(np.column_stack([self._normals, lever]))

    def of(self, found: Floats) -> Floats:
        """(n, 2) movement as a body, least squares along the normals, of a movement (n, 2)."""
        middle = 0.5 * (found + found[self._after])
        x, y, turn = self._solver @ np.sum(self._normals * middle, axis=1)
        return np.array([x, y]) + turn * np.stack([-self._about[:, 1], self._about[:, 0]], axis=1)


def _weights(section: Section, groups: Sequence[_Group], noises: Sequence[EdgeNoise | None], count: int) -> Floats:
    """Weights of least squares, (count,): the least mean square movement of the common outline; none is negative."""
    matrix = np.zeros((count, count))
    for group in groups:
        fields = np.array(group.fields).reshape(count, -1)
        together = fields @ fields.T / len(section.vertices)
        # What may be the same or not is weighed as if it were not, so that no picture stands for all.
        matrix += np.diag(np.diag(together)) if group.kind == "steady" else together
    _, _, lengths = _stations(section)
    for number, noise in enumerate(noises):
        if noise is not None:
            matrix[number, number] += float(np.mean(noise.std**2 * noise.correlation_length)) / float(lengths.sum())
    left = list(range(count))
    while True:
        part = matrix[np.ix_(left, left)]
        part = part + 1e-9 * np.trace(part) * np.eye(len(left))
        if not np.trace(part) > 0.0:
            return np.full(count, 1.0 / count)
        weights = np.linalg.solve(part, np.ones(len(left)))
        weights /= weights.sum()
        if weights.min() >= 0.0:
            break
        left.pop(int(np.argmin(weights)))
    found = np.zeros(count)
    found[left] = weights
    return found


def _joint(group: _Group, weights: Floats, factor: float) -> Mode:
    """What a cause does to the common outline, which lies as the first picture's does."""
    total = np.tensordot(weights, np.array(group.fields), axes=1) + group.body
    return Mode(group.source, factor * total, "rectangular" if group.shape == "rectangular" else "normal")


def _joint_noise(noises: Sequence[EdgeNoise | None], weights: Floats, factor: float) -> EdgeNoise | None:
    known = [(w, n) for w, n in zip(weights, noises, strict=True) if n is not None]
    if not known:
        return None
    variance = np.sum([w**2 * n.std**2 for w, n in known], axis=0)
    spread = np.sum([w**2 * n.std**2 * n.correlation_length for w, n in known], axis=0)
    length = spread / np.maximum(variance, 1e-30)
    return EdgeNoise(factor * np.sqrt(variance), np.maximum(length, 1e-9))


def _simplification(pictured: Sequence[Pictured], weights: Floats) -> dict[str, float]:
    names = set().union(*(p.uncertainty.simplification for p in pictured))
    return {
        name: float(
            sum(w * p.uncertainty.simplification.get(name, 0.0) for w, p in zip(weights, pictured, strict=True))
        )
        for name in sorted(names)
    }


# Figures beside each other


def _compared_names(section: Section) -> tuple[str, ...]:
    found = _principal(section)
    return _COMPARED_ROUND if found.major - found.minor < _ROUND * (found.major + found.minor) else COMPARED


def _principal(section: Section) -> PrincipalAxes:
    found = moments(centroidal(section))
    return principal_axes(found.second_x, found.second_y, found.product)


def _figures(section: Section, names: Sequence[str]) -> Floats:
    found = moments(centroidal(section))
    principal = principal_axes(found.second_x, found.second_y, found.product)
    known = {
        "area": found.area,
        "second_moment_major": principal.major,
        "second_moment_minor": principal.minor,
        "polar_second_moment": found.second_x + found.second_y,
    }
    return np.array([known[name] for name in names])


def _compared(
    section: Section,
    figures: Floats,
    groups: Sequence[_Group],
    noises: Sequence[EdgeNoise | None],
    own: tuple[str, ...],
) -> float:
    """Chi-square of the pictures' figures (m, k) about each other.

    own : kinds of causes that each picture has for itself; the others count by how their effects differ
    """
    count, size = figures.shape
    names = _compared_names(section)
    vertices = section.vertices

    def effect(found: Floats) -> Floats:
        if not found.any():
            return np.zeros(size)
        higher = _figures(section.with_vertices(vertices + found), names)
        return 0.5 * (higher - _figures(section.with_vertices(vertices - found), names))

    spread = np.zeros((count * size, count * size))
    for group in groups:
        effects = np.array([effect(found) for found in group.fields])
        if group.kind in own:
            for n, row in enumerate(effects):
                at = slice(n * size, (n + 1) * size)
                spread[at, at] += np.outer(row, row)
        else:
            spread += np.outer(effects.ravel(), effects.ravel())
    for n, noise in enumerate(noises):
        if noise is not None:
            at = slice(n * size, (n + 1) * size)
            spread[at, at] += covariance(section, OutlineUncertainty(noise=noise), names)[1]
    # Differences from the first: whatever the common figures are, they drop out.
    against = np.kron(np.column_stack([-np.ones(count - 1), np.eye(count - 1)]), np.eye(size))
    miss = against @ figures.ravel()
    matrix = against @ spread @ against.T
    matrix += np.diag(np.tile((_ROUNDING * figures[0]) ** 2, count - 1))
    scale = np.sqrt(np.diag(matrix))
    ratio = miss / scale
    return float(ratio @ np.linalg.pinv(matrix / np.outer(scale, scale), rcond=1e-6, hermitian=True) @ ratio)
