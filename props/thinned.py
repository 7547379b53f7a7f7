"""An outline with no more edges than its field solution needs.

Knows which vertices may be left out and where every kept edge runs along the full outline; it knows
nothing of fields. The kept vertices are a choice of the full outline's own.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

Points = NDArray[np.float64]
Floats = NDArray[np.float64]
Indices = NDArray[np.int64]


# Share of the loop's size below which two vertices are one: coordinates are written with some ten figures.
_ROUNDING = 1e-10


@dataclass(frozen=True)
class ThinnedOutline:
    """Loops of an outline and the chords that replace runs of their edges.

    loops : full loops, (n, 2) each; kept : indices into each full loop, ascending
    roughness : (edges,), for each kept edge, loop after loop, how far a rough edge of the full outline seems
        to lie from its own mean line (deviation times slope, root mean squares), unit of the loops
    """

    loops: tuple[Points, ...]
    kept: tuple[Indices, ...]
    roughness: Floats

    @classmethod
    def full(cls, loops: Sequence[Points]) -> ThinnedOutline:
        """The outline with every vertex kept."""
        return cls(
            tuple(loops),
            tuple(np.arange(len(loop)) for loop in loops),
            np.zeros(sum(len(loop) for loop in loops)),
        )

    @property
    def kept_loops(self) -> tuple[Points, ...]:
        """The loops of the kept vertices."""
        return tuple(loop[kept] for loop, kept in zip(self.loops, self.kept, strict=True))

    @property
    def is_full(self) -> bool:
        """Whether no vertex was left out."""
        return all(len(loop) == len(kept) for loop, kept in zip(self.loops, self.kept, strict=True))

    def follow(self, points: Points, edge: Indices) -> tuple[Indices, Indices, Floats, Points]:
        """Where points (q, 2) on kept edges (q,) lie on the full outline, measured along the chord.

        Returns the full outline's vertices before and after (q,), numbered loop after loop, the fraction
        of the way between them (q,), and the places (q, 2) on the full outline.
        """
        before, after = np.zeros(len(points), np.int64), np.zeros(len(points), np.int64)
        fraction = np.zeros(len(points))
        order = np.argsort(edge, kind="stable")
        groups = iter(np.split(order, np.searchsorted(edge[order], np.arange(1, len(self.roughness)))))
        first_vertex = 0
        for loop, kept in zip(self.loops, self.kept, strict=True):
            for start, end in zip(kept, np.roll(kept, -1), strict=True):
                chosen = next(groups)
                run = _run(start, end, len(loop))
                chord = loop[run[-1]] - loop[start]
                along = (loop[run] - loop[start]) @ chord
                way = (points[chosen] - loop[start]) @ chord
                place = np.clip(np.searchsorted(along, way, side="right"), 1, len(run) - 1)
                step = along[place] - along[place - 1]
                # Steps across the chord, as in a staircase, have no length along it.
                share = np.divide(way - along[place - 1], step, out=np.zeros(len(way)), where=step > 0.0)
                fraction[chosen] = np.clip(share, 0.0, 1.0)
                before[chosen], after[chosen] = first_vertex + run[place - 1], first_vertex + run[place]
            first_vertex += len(loop)
        every = np.concatenate(self.loops)
        places = every[before] + fraction[:, None] * (every[after] - every[before])
        return before, after, fraction, places


def _run(start: int, end: int, count: int) -> Indices:
    """Vertex numbers from start to end round a loop of `count`."""
    return np.arange(start, end + 1 if end > start else end + count + 1) % count


def thin(loops: Sequence[Points], allowed: float) -> ThinnedOutline:
    """Leave out vertices where the chord is within `allowed` of the outline, in the sense of roughness.

    A boundary that wavers by d with slope s acts on a field like a straight one moved by d s beyond what
    its mean line says, and the mean line is put right afterwards to first order. So d s may reach
    `allowed`, and d itself the square of that order: sqrt(allowed x length of the chord).
    Runs are split at the farthest vertex, as in Ramer's polygon splitting (1972), until this holds.
    """
    kept, roughness = [], []
    for loop in loops:
        chosen, rough = _thin_loop(loop, allowed)
        if len(chosen) < 3:
            chosen, rough = np.arange(len(loop)), np.zeros(len(loop))
        kept.append(chosen)
        roughness.append(rough)
    return ThinnedOutline(tuple(loops), tuple(kept), np.concatenate(roughness))


def _thin_loop(loop: Points, allowed: float) -> tuple[Indices, Floats]:
    far = int(np.argmax(np.sum((loop - loop[0]) ** 2, axis=1)))
    waiting, found = [(0, far), (far, 0)], {}
    while waiting:
        start, end = waiting.pop()
        run = _run(start, end, len(loop))
        if len(run) == 2:
            found[start] = 0.0
            continue
        chain = loop[run]
        chord = chain[-1] - chain[0]
        length = float(np.hypot(*chord))
        step = np.diff(chain, axis=0)
        offset = np.abs((chain[1:-1] - chain[0]) @ np.array([-chord[1], chord[0]])) / length
        slope = math.sqrt(2.0 * max(float(np.hypot(*step.T).sum()) / length - 1.0, 0.0))
        rough = float(np.sqrt(np.mean(offset**2))) * slope
        if rough <= allowed and np.all(step @ chord >= 0.0):
            found[start] = rough
        else:
            middle = int(run[1 + np.argmax(offset)])
            waiting += [(start, middle), (middle, end)]
    chosen = np.array(sorted(found), np.int64)
    # Of two vertices that differ by rounding the later one goes, but never the first of the loop.
    points = loop[chosen]
    gap = np.hypot(*(np.roll(points, -1, axis=0) - points).T)
    same = np.flatnonzero(gap <= _ROUNDING * float(np.max(np.ptp(loop, axis=0))))
    chosen = np.delete(chosen, np.where(same + 1 < len(chosen), same + 1, same))
    return chosen, np.array([found[start] for start in chosen])
