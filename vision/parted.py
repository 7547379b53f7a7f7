"""A face of several materials told apart: where one part ends and the next begins.

Knows points that a person picks, one on each part. The outline all round comes from `trace`; a joint between two
parts is one line that both share, so that they neither gape nor overlap, and what moves it takes from one part what
it gives to the other. Does not know what the parts are made of.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

from ..props.errors import Refusal, UsageError
from ..props.result import Notice
from ..props.section import Part, Section
from ..props.uncertainty import EdgeNoise, Mode, OutlineUncertainty
from .joints import SPACING, Joint, line_normals, located, resampled_line, rough_joints, runs, unseen
from .light import Light
from .part_labels import LabelMap, label_parts
from .references.reference import Reference
from .regions import Regions

if TYPE_CHECKING:
    from shapely import Polygon

Array = NDArray[np.float64]

# Where the edge between two materials lies, which glue, shadow and rust along it blur; px, and px per px of blur
# (stated assumption).
JOINT_BIAS_PX, JOINT_BIAS_BLUR = 0.25, 0.1
# Share of a joint that may be lost before a person is told.
_WARN_LOST = 0.25


@dataclass(frozen=True)
class PartedFace:
    """A face cut along its joints.

    section : one part for each picked point, in their order; neighbours share their vertices
    uncertainty : of its vertices
    trace_px : its loops in photo pixels; poorly_located : where they were not seen
    """

    section: Section
    uncertainty: OutlineUncertainty
    trace_px: tuple[Array, ...]
    poorly_located: tuple[NDArray[np.bool_], ...]
    notices: tuple[Notice, ...]


def part_face(
    whole: Section,
    uncertainty: OutlineUncertainty,
    outline: tuple[Sequence[Array], Sequence[NDArray[np.bool_]]],
    light: Light,
    regions: Regions,
    blur: float,
    reference: Reference,
    picked: Sequence[tuple[float, float]],
) -> PartedFace:
    """The face cut into the parts that a person picked.

    whole, uncertainty : the face as one, mm
    outline : its dense loops in photo pixels, and where they are bridged
    picked : photo pixels, one on each part
    Raises Refusal where no joint is seen between two picked points, or a part was left out.
    """
    from scipy.spatial import KDTree

    labels = label_parts(light, regions, picked)
    scale = float(np.median(np.sqrt(np.abs(np.linalg.det(reference.face.mm_per_px(outline[0][0]))))))
    reach = 2.0 * labels.factor + 3.0
    rough = rough_joints(labels, len(picked))
    near_outline = KDTree(np.concatenate(list(outline[0])))
    joints = []
    for parts, line, closed in rough:
        line = resampled_line(line, SPACING, closed)
        # Next to the outline a profile across the joint meets other edges too.
        clear = near_outline.query(line)[0] > reach + 3.0 * blur + 3.0
        joints += [
            located(line[run], parts, closed and bool(clear.all()), light, blur, reach, reference)
            for run in runs(clear, closed)
            if len(run) >= 8
        ]
    joints = _ended(joints, whole, 2.0 * (reach + 3.0 * blur + 3.0) * scale, (2.0 * blur + 1.5) * scale)
    section = _cut(whole, joints, labels, reference, picked)
    moved = _uncertainty(section, whole, uncertainty, joints, blur * JOINT_BIAS_BLUR + JOINT_BIAS_PX, scale, reference)
    trace, poor = _trace(section, outline, joints, reference)
    return PartedFace(section, moved, trace, poor, _notices(joints))


def _ended(joints: Sequence[Joint], whole: Section, guard: float, snap: float) -> list[Joint]:
    """The joints with their ends drawn on to the outline, or to where they meet each other.

    guard : mm, how far from the outline a joint's last seen points may be
    snap : mm, a corner of the outline as near as this to a joint's course is its end
    """
    import shapely

    boundary = shapely.MultiLineString([np.vstack([loop, loop[:1]]) for loop in whole.loops])
    lines = [joint.line.copy() for joint in joints]
    free: list[tuple[int, int]] = []
    for k, joint in enumerate(joints):
        if joint.closed:
            continue
        for end in (0, -1):
            before = joint.line[1 if end == 0 else -2]
            place = _end_on(boundary, whole.vertices, joint.line[end], before, guard, snap)
            if place is None:
                free.append((k, end))
            else:
                lines[k][end] = place
    while free:
        k, end = free.pop()
        here = lines[k][end]
        # Three joints that meet each end short of the place where they do.
        together = [other for other in free if np.hypot(*(lines[other[0]][other[1]] - here)) < 3.0 * guard]
        if not together:
            raise unseen(joints[k].parts)
        free = [other for other in free if other not in together]
        ends = [(k, end), *together]
        middle = np.mean([lines[n][e] for n, e in ends], axis=0)
        for n, e in ends:
            lines[n][e] = middle
    return [replace(joint, line=line) for joint, line in zip(joints, lines, strict=True)]


def _end_on(boundary: Any, corners: Array, last: Array, before: Array, guard: float, snap: float) -> Array | None:
    """Where a line that runs from `before` to `last` comes to the outline; None if that is farther than `guard`."""
    import shapely

    way = (last - before) / np.hypot(*(last - before))
    ahead = (corners - last) @ way
    aside = np.abs((corners - last) @ np.array([-way[1], way[0]]))
    near = np.flatnonzero((ahead > -snap) & (ahead < guard) & (aside < snap))
    if len(near):
        # The first on the way: a joint that goes on as a side of a recess ends where the recess begins.
        return corners[near[np.argmin(ahead[near])]]
    # The last seen point may lie beyond the outline by its own error.
    start = last - min(snap, 0.5 * float(np.hypot(*(last - before)))) * way
    crossing = boundary.intersection(shapely.LineString([start, last + guard * way]))
    places = shapely.get_coordinates(crossing)
    if len(places) == 0:
        return None
    return places[np.argmin(np.hypot(*(places - start).T))]


def _cut(
    whole: Section, joints: Sequence[Joint], labels: LabelMap, reference: Reference, picked: Sequence[Any]
) -> Section:
    """The face cut along its joints, one part for each picked point."""
    import shapely

    ends = np.array([joint.line[end] for joint in joints if not joint.closed for end in (0, -1)]).reshape(-1, 2)
    rings = [_with_points(loop, ends) for loop in whole.loops]
    lines = [shapely.LinearRing(ring) for ring in rings]
    lines += [shapely.LinearRing(j.line) if j.closed else shapely.LineString(j.line) for j in joints]
    face = whole.to_polygon()
    pieces: list[list[Polygon]] = [[] for _ in picked]
    for piece in shapely.get_parts(shapely.polygonize(shapely.get_parts(shapely.unary_union(lines)))):
        inner = piece.representative_point()
        if face.contains(inner):
            place = reference.face.to_pixels(np.array(inner.coords))
            pieces[int(labels.at(place)[0]) - 1].append(piece)
    parts: list[Part] = []
    for number, of_part in enumerate(pieces, start=1):
        joined = shapely.unary_union(of_part)
        if not isinstance(joined, shapely.Polygon) or joined.is_empty:
            raise Refusal(
                "joint-lost",
                f"The joints do not bound part {number} on all sides.",
                "Clean the joints and light the face evenly, or pick other points.",
            )
        # Joining drops no vertex that a neighbour has: these are on the outlines of both.
        parts.append(
            Part(np.asarray(joined.exterior.coords)[:-1], tuple(np.asarray(h.coords)[:-1] for h in joined.interiors))
        )
    return Section(tuple(parts))


def _with_points(loop: Array, points: Array) -> Array:
    """A closed loop with those of the points put in that lie on one of its edges."""
    after = np.roll(loop, -1, axis=0)
    along = after - loop
    length = np.hypot(*along.T)
    places: list[tuple[float, Array]] = [(float(i), vertex) for i, vertex in enumerate(loop)]
    for point in points:
        t = np.sum((point - loop) * along, axis=1) / length**2
        aside = np.abs((point - loop)[:, 0] * along[:, 1] - (point - loop)[:, 1] * along[:, 0]) / length
        on = np.flatnonzero((t > 0.0) & (t < 1.0) & (aside < 1e-9 * (1.0 + length)))
        if len(on) and not (loop == point).all(axis=1).any():
            places.append((float(on[0] + t[on[0]]), point))
    return np.array([vertex for _, vertex in sorted(places, key=lambda item: item[0])])


def _uncertainty(
    section: Section,
    whole: Section,
    uncertainty: OutlineUncertainty,
    joints: Sequence[Joint],
    bias_px: float,
    scale: float,
    reference: Reference,
) -> OutlineUncertainty:
    """What moves the vertices of the parts.

    What the reference does, it does everywhere; what moves the outline moves the vertices on it; what moves a joint
    moves the vertices of both its sides alike. The random error of a joint is carried by its shift and its tilt.
    """
    vertices = section.vertices
    before, after, share, outside = _on_outline(whole, vertices)

    def from_outline(values: Array) -> Array:
        values = np.asarray(values, float).reshape(len(whole.vertices), -1)
        found = values[before] + share[:, None] * (values[after] - values[before])
        return np.where(outside[:, None], found, 0.0)

    common = reference.modes(vertices)
    modes = list(common)
    for mode in uncertainty.modes[len(common) :]:
        modes.append(Mode(mode.source, from_outline(mode.displacement), mode.shape))
    edges = whole.vertices[after] - whole.vertices[before]
    corner = (share == 0.0) | (share == 1.0)
    for joint in joints:
        across, place = _across(joint, vertices)
        # On a straight piece of outline the end of a joint slides along it.
        slides = outside & ~corner & (across != 0.0).any(axis=1)
        way = edges[slides] / np.hypot(*edges[slides].T)[:, None]
        facing = np.sum(way * across[slides], axis=1)
        across[slides] = way * (np.sign(facing) / np.maximum(np.abs(facing), 0.5))[:, None]
        length = float(np.hypot(*np.diff(joint.line, axis=0).T).sum())
        random = joint.scatter * np.sqrt(min(1.0, joint.correlation / length))
        modes.append(Mode("joint location (common)", bias_px * scale * across, "rectangular"))
        modes.append(Mode("joint location (random)", random * across))
        if not joint.closed:
            tilt = np.sqrt(3.0) * (2.0 * place - 1.0)
            modes.append(Mode("joint location (random)", random * tilt[:, None] * across))
    noise, bound = uncertainty.noise, uncertainty.edge_bound
    if noise is not None:
        length = from_outline(noise.correlation_length)[:, 0]
        usual = float(np.median(noise.correlation_length))
        noise = EdgeNoise(from_outline(noise.std)[:, 0], np.where(outside, length, usual))
    return OutlineUncertainty(
        tuple(modes),
        noise,
        None if bound is None else from_outline(bound)[:, 0],
        uncertainty.simplification,
    )


def _on_outline(whole: Section, points: Array) -> tuple[NDArray[np.intp], NDArray[np.intp], Array, NDArray[np.bool_]]:
    """Where points lie on the outline: vertex before and after, share of the way between, and whether on it at all."""
    start = whole.vertices
    sizes = [len(loop) for loop in whole.loops]
    following = np.concatenate(
        [np.roll(np.arange(n), -1) + first for n, first in zip(sizes, np.cumsum([0, *sizes[:-1]]), strict=True)]
    )
    along = start[following] - start
    square = np.sum(along**2, axis=1)
    before = np.empty(len(points), np.intp)
    share, distance = np.empty(len(points)), np.empty(len(points))
    for k, point in enumerate(points):
        t = np.clip(np.sum((point - start) * along, axis=1) / square, 0.0, 1.0)
        off = np.hypot(*(start + t[:, None] * along - point).T)
        before[k] = int(np.argmin(off))
        share[k], distance[k] = t[before[k]], off[before[k]]
    return before, following[before], share, distance < 1e-6


def _across(joint: Joint, vertices: Array) -> tuple[Array, Array]:
    """(n, 2) unit normal of the joint at the vertices that are its own, zero at others; (n,) place along it, 0 to 1."""
    line = joint.line
    normal = line_normals(line, 1, joint.closed)
    closed = np.vstack([line, line[:1]]) if joint.closed else line
    along = np.concatenate([[0.0], np.cumsum(np.hypot(*np.diff(closed, axis=0).T))])
    found, place = np.zeros_like(vertices), np.zeros(len(vertices))
    for k, vertex in enumerate(line):
        own = np.hypot(*(vertices - vertex).T) < 1e-6
        found[own], place[own] = normal[k], along[k] / along[-1]
    return found, place


def _trace(
    section: Section,
    outline: tuple[Sequence[Array], Sequence[NDArray[np.bool_]]],
    joints: Sequence[Joint],
    reference: Reference,
) -> tuple[tuple[Array, ...], tuple[NDArray[np.bool_], ...]]:
    """The loops of the parts in photo pixels, and where the outline next to them is bridged."""
    from scipy.spatial import KDTree

    seen = KDTree(np.concatenate(list(outline[0])))
    poor = np.concatenate(list(outline[1]))
    traces, flags = [], []
    for loop in section.loops:
        dense = resampled_line(reference.face.to_pixels(loop), 2.0 * SPACING, True)
        distance, nearest = seen.query(dense)
        traces.append(dense)
        flags.append(poor[nearest] & (distance < 3.0 * SPACING))
    return tuple(traces), tuple(flags)


def _notices(joints: Sequence[Joint]) -> tuple[Notice, ...]:
    return tuple(
        Notice(
            "joint-poorly-located",
            f"{100 * joint.lost:.0f} % of the joint between parts {joint.parts[0] + 1} and {joint.parts[1] + 1} could "
            "not be located; it was taken as straight there.",
            "Look at the joint on the picture; clean it and light the face evenly.",
        )
        for joint in joints
        if joint.lost > _WARN_LOST
    )


def require_parts(picked: Sequence[tuple[float, float]], seeds: Sequence[tuple[float, float]]) -> None:
    """Raise UsageError where points on parts cannot be: fewer than two, or beside points on whole faces."""
    if len(picked) == 1:
        raise UsageError("one-part", "One part alone is picked.", "Pick a point on every part, or use --seed.")
    if picked and seeds:
        raise UsageError(
            "parts-and-seeds", "Both --part and --seed are given.", "Give --part for the parts of one member alone."
        )
