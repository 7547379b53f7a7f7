"""Integrals over a polygonal region, exactly, as sums over its edges (Green's theorem).

Knows nothing of principal axes, plastic axes or materials. Coordinates are always taken about a local
origin, since a second moment about a distant one loses (distance/size)^2 in digits.

Sums for polygons: Steger, "On the calculation of arbitrary moments of polygons" (1996; from memory).
"""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass, replace
from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from .errors import OutlineError
from .section import Section

Floats = NDArray[np.float64]

# Edges handled at a time: the arrays of one block stay in the processor's cache, and adding up block sums after
# numpy's pairwise sums inside a block keeps the rounding of a million terms near that of twenty.
_BLOCK = 16384


@dataclass(frozen=True)
class Boundary:
    """The edges of a region about a local origin; shells run counter-clockwise, holes clockwise.

    origin : (2,) in section coordinates, mm
    start, end : (2, n) rows x and y of the edges' ends from that origin, mm; edge i starts at vertex i of the section
    part_starts, shell_ends : (p,) index of the first edge of each part, which is of its shell, and of the one after
        the shell's last
    shared : (n,) whether another part has the same edge the other way round: a joint within the section
    """

    origin: Floats
    start: Floats
    end: Floats
    part_starts: NDArray[np.intp]
    shell_ends: NDArray[np.intp]
    shared: NDArray[np.bool_]

    @property
    def exposed(self) -> NDArray[np.bool_]:
        """Which edges are of shells and no joints, (n,): those that the perimeter counts."""
        found = np.zeros(self.start.shape[1], dtype=bool)
        for first, end in zip(self.part_starts.tolist(), self.shell_ends.tolist(), strict=True):
            found[first:end] = True
        return found & ~self.shared

    def swapped(self) -> Boundary:
        """The edges with x and y exchanged and run backwards, so that shells still run counter-clockwise."""
        return replace(self, origin=self.origin[::-1], start=self.end[::-1], end=self.start[::-1])

    def turned(self, cosine: float, sine: float) -> Boundary:
        """The same edges along axes turned counter-clockwise by the angle; origin and numbering stay."""
        if cosine == 1.0 and sine == 0.0:
            return self
        turn = np.array([[cosine, sine], [-sine, cosine]])
        return replace(self, start=turn @ self.start, end=turn @ self.end)


class Moments(NamedTuple):
    """Area, mm^2, first moments, mm^3, and second moments, mm^4, of a region about given axes.

    first_x is the integral of y (about the x axis), first_y that of x; second_x that of y^2, second_y that of x^2.
    """

    area: float
    first_x: float
    first_y: float
    second_x: float
    second_y: float
    product: float


def following(section: Section) -> NDArray[np.intp]:
    """Index (n,) of the vertex after each vertex, round each loop, in the order of `section.vertices`."""
    counts = [len(loop) for loop in section.loops]
    after = np.arange(1, sum(counts) + 1)
    ends = np.cumsum(counts)
    after[ends - 1] = ends - counts
    return after


def boundary(section: Section) -> Boundary:
    """The edges of a section about the middle of its bounding box."""
    counts = np.array([len(loop) for loop in section.loops])
    ends = np.cumsum(counts)
    start = np.empty((2, ends[-1]))
    for loop, first, last in zip(section.loops, (ends - counts).tolist(), ends.tolist(), strict=True):
        start[:, first:last] = loop.T
    origin = 0.5 * (start.min(axis=1) + start.max(axis=1))
    start -= origin[:, None]
    end = np.empty_like(start)
    end[:, :-1] = start[:, 1:]
    end[:, ends - 1] = start[:, ends - counts]
    part_sizes = [sum(len(loop) for loop in part.loops) for part in section.parts]
    part_starts = np.cumsum([0, *part_sizes[:-1]])
    shell_ends = part_starts + np.array([len(part.shell) for part in section.parts], np.intp)
    shared = _shared(start, end) if len(section.parts) > 1 else np.zeros(start.shape[1], dtype=bool)
    return Boundary(origin, start, end, part_starts, shell_ends, shared)


def _shared(start: Floats, end: Floats) -> NDArray[np.bool_]:
    """(n,) whether each edge is there the other way round too."""
    # Adding zero makes -0.0 and 0.0 the same bytes.
    edges = np.ascontiguousarray(np.concatenate([start, end]).T + 0.0)
    turned = np.ascontiguousarray(np.concatenate([end, start]).T + 0.0)
    row = np.dtype((np.void, edges.dtype.itemsize * 4))
    return np.isin(edges.view(row)[:, 0], turned.view(row)[:, 0])


def centroidal(section: Section) -> Boundary:
    """The edges of a section about its centroid.

    Raises OutlineError if the enclosed area, shells less holes, is not positive.
    """
    edges = boundary(section)
    area, first_x, first_y = _sum(edges, _first_terms)
    if not area > 0.0:
        raise OutlineError(
            "no-area", "The outline encloses no area once its holes are taken off.", "Check which loops are holes."
        )
    shift = np.array([first_y / area, first_x / area])
    for places in (edges.start, edges.end):
        places -= shift[:, None]
    return replace(edges, origin=edges.origin + shift)


def moments(edges: Boundary) -> Moments:
    """Area and moments of the region about the origin of `edges`."""
    return Moments(*_sum(edges, _second_terms))


def perimeter(edges: Boundary) -> float:
    """Length of the shells without joints, mm: what can be painted, as tables of hollow sections count it."""
    spans = zip(edges.part_starts.tolist(), edges.shell_ends.tolist(), strict=True)
    lengths = np.hypot(*(edges.end - edges.start)) * ~edges.shared
    return math.fsum(float(lengths[i:j].sum()) for i, j in spans)


def _sum(edges: Boundary, terms: Callable[[Floats, Floats, Floats, Floats], list[float]]) -> list[float]:
    (x0, y0), (x1, y1) = edges.start, edges.end
    blocks = [slice(i, i + _BLOCK) for i in range(0, len(x0), _BLOCK)]
    sums = [terms(x0[block], y0[block], x1[block], y1[block]) for block in blocks]
    return [math.fsum(column) for column in zip(*sums, strict=True)]


def _first_terms(x0: Floats, y0: Floats, x1: Floats, y1: Floats) -> list[float]:
    cross = x0 * y1 - x1 * y0
    return [float(cross.sum()) / 2, float((cross * (y0 + y1)).sum()) / 6, float((cross * (x0 + x1)).sum()) / 6]


def _second_terms(x0: Floats, y0: Floats, x1: Floats, y1: Floats) -> list[float]:
    cross = x0 * y1 - x1 * y0
    x, y = x0 + x1, y0 + y1
    return [
        float(cross.sum()) / 2,
        float((cross * y).sum()) / 6,
        float((cross * x).sum()) / 6,
        float((cross * (y * y - y0 * y1)).sum()) / 12,
        float((cross * (x * x - x0 * x1)).sum()) / 12,
        # x0 y1 + 2 x0 y0 + 2 x1 y1 + x1 y0
        float((cross * (x * y + x0 * y0 + x1 * y1)).sum()) / 24,
    ]
