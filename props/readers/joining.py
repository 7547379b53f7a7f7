"""Loose strokes joined end to end into closed loops.

Knows ends and gaps; which loop is a hole is for `regions`.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import replace

import numpy as np

from ..errors import OutlineError
from ..result import Notice
from ..section import Points
from .reading import Stroke

REPAIRABLE_GAP = 0.05
"""Repair bridges gaps up to this share of the drawing's size."""


def place(point: Points) -> str:
    """A point in words, mm."""
    return f"({point[0]:.6g}, {point[1]:.6g}) mm"


def join_strokes(
    strokes: Sequence[Stroke], tolerance: float, repair: bool
) -> tuple[tuple[Stroke, ...], tuple[Notice, ...]]:
    """Closed strokes from closed and open ones, and what was bridged or dropped.

    tolerance : ends no farther apart than this meet, mm
    repair : drop repeated strokes and bridge larger gaps, up to REPAIRABLE_GAP of the drawing's size
    Raises OutlineError with the place of the fault if an outline stays open, more than two ends meet, or a stroke is
    drawn twice.
    """
    closed = [stroke for stroke in strokes if stroke.closed]
    pieces = [s for s in strokes if not s.closed and _length(s.points) > tolerance]
    if not pieces:
        return tuple(closed), ()
    pieces, notices = _without_repeats(pieces, tolerance, repair)
    nodes = _meeting_ends(pieces, tolerance)
    _require_no_branch(pieces, nodes)
    chains = _chains(pieces, nodes)
    gap = _widest_meeting(pieces, nodes)
    loops = [chain for chain in chains if chain.closed]
    still_open = [chain for chain in chains if not chain.closed]
    if still_open and not repair:
        chain = min(still_open, key=_gap)
        raise OutlineError(
            "open-outline",
            f"The outline of {chain.where}{_on(chain)} is open: its ends at {place(chain.points[0])} and "
            f"{place(chain.points[-1])} lie {_gap(chain):.4g} mm apart (joined up to {tolerance:g} mm).",
            f"Close it in the drawing, {_choose_layer(strokes)}, or ask for repair.",
        )
    if still_open:
        bridged, bridges = _bridged(still_open, strokes)
        loops += bridged
        notices += bridges
    if gap > 1e-3 * tolerance:
        notices.append(
            Notice(
                "ends-joined", f"Ends up to {gap:.2g} mm apart were joined.", "Check the drawing if that is not meant."
            )
        )
    return tuple(closed + loops), tuple(notices)


def _length(points: Points) -> float:
    return float(np.hypot(*np.diff(points, axis=0).T).sum())


def _gap(chain: Stroke) -> float:
    return float(np.hypot(*(chain.points[0] - chain.points[-1])))


def _on(stroke: Stroke) -> str:
    return f" on layer {stroke.layer!r}" if stroke.layer else ""


def _choose_layer(strokes: Sequence[Stroke]) -> str:
    names = sorted({stroke.layer for stroke in strokes if stroke.layer})
    if len(names) < 2:
        return "check its lines"
    return f"choose the layer that holds the outline alone ({', '.join(names)})"


def _middle(points: Points) -> Points:
    """The point half-way along a stroke."""
    along = np.concatenate([[0.0], np.cumsum(np.hypot(*np.diff(points, axis=0).T))])
    return np.array([np.interp(0.5 * along[-1], along, points[:, k]) for k in (0, 1)])


def _without_repeats(pieces: list[Stroke], tolerance: float, repair: bool) -> tuple[list[Stroke], list[Notice]]:
    """Strokes with the same ends and the same middle are one stroke drawn twice."""
    from scipy.spatial import KDTree

    ends = np.array([sorted([tuple(s.points[0]), tuple(s.points[-1])]) for s in pieces]).reshape(-1, 4)
    signature = np.column_stack([ends, [_middle(s.points) for s in pieces]])
    swapped = np.column_stack([signature[:, 2:4], signature[:, :2], signature[:, 4:]])
    pairs = KDTree(signature).sparse_distance_matrix(
        KDTree(np.concatenate([signature, swapped])), 2.0 * tolerance, output_type="coo_matrix"
    )
    count = len(pieces)
    repeated = sorted({max(i, j % count) for i, j in zip(pairs.row, pairs.col, strict=True) if i != j % count})
    if not repeated:
        return pieces, []
    places = ", ".join(f"{pieces[i].where}{_on(pieces[i])} at {place(_middle(pieces[i].points))}" for i in repeated[:3])
    if not repair:
        raise OutlineError(
            "drawn-twice",
            f"{len(repeated)} stroke(s) are drawn twice: {places}.",
            "Delete the copies, choose one layer, or ask for repair.",
        )
    drop = set(repeated)
    kept = [piece for i, piece in enumerate(pieces) if i not in drop]
    return kept, [Notice("copies-dropped", f"Dropped {len(repeated)} stroke(s) drawn twice: {places}.", "")]


def _meeting_ends(pieces: list[Stroke], tolerance: float) -> np.ndarray:
    """Number of the node at the start and at the end of every piece, (m, 2) int."""
    from scipy.sparse import coo_array
    from scipy.sparse.csgraph import connected_components
    from scipy.spatial import KDTree

    ends = np.array([[s.points[0], s.points[-1]] for s in pieces]).reshape(-1, 2)
    near = KDTree(ends).query_pairs(tolerance, output_type="ndarray")
    graph = coo_array((np.ones(len(near)), (near[:, 0], near[:, 1])), shape=(len(ends), len(ends)))
    return connected_components(graph, directed=False)[1].reshape(-1, 2)


def _widest_meeting(pieces: list[Stroke], nodes: np.ndarray) -> float:
    """Largest distance between two ends that meet, mm."""
    ends = np.array([[s.points[0], s.points[-1]] for s in pieces]).reshape(-1, 2)
    order = np.argsort(nodes.ravel(), kind="stable")
    same = np.diff(nodes.ravel()[order]) == 0
    return float(np.hypot(*np.diff(ends[order], axis=0)[same].T).max(initial=0.0))


def _require_no_branch(pieces: list[Stroke], nodes: np.ndarray) -> None:
    counts = np.bincount(nodes.ravel())
    crowded = np.flatnonzero(counts > 2)
    if len(crowded):
        piece, side = np.argwhere(nodes == crowded[0])[0]
        at = pieces[piece].points[0 if side == 0 else -1]
        raise OutlineError(
            "branching-outline",
            f"{counts[crowded[0]]} strokes end at {place(at)}, so it is not clear how the outline runs on.",
            f"Draw every region as a closed line of its own, or {_choose_layer(pieces)}.",
        )


def _chains(pieces: list[Stroke], nodes: np.ndarray) -> list[Stroke]:
    """Pieces walked from node to node; a chain that returns to its start is closed."""
    at: dict[int, list[int]] = {}
    for i, pair in enumerate(nodes):
        for node in pair:
            at.setdefault(int(node), []).append(i)
    unused = set(range(len(pieces)))
    chains: list[Stroke] = []
    # Chains with a loose end first, from that end, so that none is begun in its middle.
    loose = [i for i, pair in enumerate(nodes) if any(len(at[int(n)]) == 1 for n in pair)]
    for first in [*loose, *range(len(pieces))]:
        if first not in unused:
            continue
        start, end = (int(n) for n in nodes[first])
        flip = len(at[end]) == 1 and len(at[start]) > 1
        if flip:
            start, end = end, start
        points = [pieces[first].points[::-1] if flip else pieces[first].points]
        unused.remove(first)
        while end != start:
            following = next((i for i in at[end] if i in unused), None)
            if following is None:
                break
            unused.remove(following)
            a, b = (int(n) for n in nodes[following])
            points.append(pieces[following].points if a == end else pieces[following].points[::-1])
            end = b if a == end else a
        chains.append(_chain(pieces[first], points, closed=end == start))
    return chains


def _chain(first: Stroke, runs: list[Points], closed: bool) -> Stroke:
    """Runs of points end to end; where two meet, the middle between their ends."""
    merged = [np.array(runs[0])]
    for run in runs[1:]:
        merged[-1][-1] = 0.5 * (merged[-1][-1] + run[0])
        merged.append(np.array(run[1:]))
    points = np.concatenate(merged)
    if closed:
        points[0] = 0.5 * (points[0] + points[-1])
        points = points[:-1]
    return replace(first, points=points, closed=closed)


def _bridged(chains: list[Stroke], strokes: Sequence[Stroke]) -> tuple[list[Stroke], list[Notice]]:
    """Open chains closed by straight lines between their nearest ends."""
    everything = np.concatenate([s.points for s in strokes])
    limit = REPAIRABLE_GAP * float(np.ptp(everything, axis=0).max())
    loops: list[Stroke] = []
    notices: list[Notice] = []
    chains = list(chains)
    while chains:
        ends = np.array([[c.points[0], c.points[-1]] for c in chains]).reshape(-1, 2)
        apart = np.hypot(*(ends[:, None] - ends[None]).transpose(2, 0, 1))
        np.fill_diagonal(apart, np.inf)
        i, j = np.unravel_index(np.argmin(apart), apart.shape)
        gap = float(apart[i, j])
        if gap > limit:
            raise OutlineError(
                "open-outline",
                f"The outline is open: the ends at {place(ends[i])} and {place(ends[j])} lie {gap:.4g} mm apart, too "
                f"far to bridge (limit {limit:.4g} mm).",
                f"Close it in the drawing, or {_choose_layer(strokes)}.",
            )
        notices.append(
            Notice(
                "gap-bridged",
                f"Bridged a gap of {gap:.4g} mm between {place(ends[i])} and {place(ends[j])} by a straight line.",
                "Check the drawing there.",
            )
        )
        first, second = int(i) // 2, int(j) // 2
        if first == second:
            loops.append(replace(chains.pop(first), closed=True))
            continue
        head = chains[first].points if i % 2 == 1 else chains[first].points[::-1]
        tail = chains[second].points if j % 2 == 0 else chains[second].points[::-1]
        joined = replace(chains[first], points=np.concatenate([head, tail]))
        chains = [c for k, c in enumerate(chains) if k not in (first, second)] + [joined]
    return loops, notices
