"""Places of a photo that a person rules out: a clamp, a hand, a chain lies over the edge of the face there.

Knows which stretches of an outline lie in such places and how the outline goes on over them: straight, or round the
corner in which the sides to either side of it meet. Does not look at pixels.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from ..props.errors import Refusal, UsageError
from .face import Region
from .outline import gaps

Array = NDArray[np.float64]
Mask = NDArray[np.bool_]

# Sides that turn by more over a hidden stretch meet in a corner; beyond the second they turn back.
_CORNER, _END = np.deg2rad(25.0), np.deg2rad(120.0)
# px of outline to either side from which a side's direction is taken.
_SIDE_PX = 30.0


@dataclass(frozen=True, eq=False)
class Hidden:
    """Outlines (k, 2) in photo pixels of what is ruled out; `margin` px around them count as ruled out too."""

    outlines: tuple[Array, ...]
    margin: float

    @classmethod
    def stated(cls, outlines: Sequence[Sequence[tuple[float, float]]], margin: float) -> Hidden | None:
        """What a person states, None for nothing.

        Raises UsageError for an outline that encloses nothing.
        """
        from shapely import Polygon

        if not outlines:
            return None
        loops = tuple(np.array(outline, float).reshape(-1, 2) for outline in outlines)
        for loop in loops:
            if len(loop) < 3 or not Polygon(loop).is_valid or Polygon(loop).area == 0.0:
                raise UsageError(
                    "excluded-corners",
                    "A region to leave out has three corners or more, in order round it.",
                    "Give its corners in pixels of the upright picture.",
                )
        return cls(loops, margin)

    def covers(self, points: Array, wider: float = 0.0) -> Mask:
        """(n,) which photo pixels (n, 2) are ruled out, or lie so many px beside it."""
        from shapely import Polygon, contains_xy

        return np.any([contains_xy(Polygon(o).buffer(self.margin + wider), *points.T) for o in self.outlines], axis=0)

    def uncovered(self, groups: Sequence[Sequence[Region]]) -> tuple[tuple[Region, ...], ...]:
        """Rough regions with their loops straight over what is ruled out; holes that lie within it are none.

        Raises Refusal when nothing of a shell is left.
        """
        return tuple(tuple(self._region(region) for region in group) for group in groups)

    def _region(self, region: Region) -> Region:
        shell = self._seen(region.shell)
        if shell is None:
            raise Refusal(
                "excluded-too-much",
                "The region to leave out covers the whole outline of a face.",
                "Draw it tightly around what hides the edge.",
            )
        holes = [self._seen(hole) for hole in region.holes]
        return Region(shell, tuple(hole for hole in holes if hole is not None))

    def _seen(self, loop: Array) -> Array | None:
        seen = loop[~self.covers(loop)]
        return seen if len(seen) > 8 else None


def round_corners(points: Array, located: Mask, hidden: Mask, spacing: float) -> Array:
    """(n, 2) points around a loop whose hidden stretches go on as their sides do.

    points : straight over the stretches that were not located; spacing : px between them
    Raises Refusal where the sides turn back on each other: how far they reach is not seen.
    """
    n, moved = len(points), points.copy()
    count = max(4, round(_SIDE_PX / spacing))
    for gap in gaps(located):
        if not hidden[gap].any() or len(gap) >= n:
            continue
        before = points[(gap[0] - 1 - np.arange(count)) % n][::-1]
        after = points[(gap[-1] + 1 + np.arange(count)) % n]
        (start, first), (end, second) = _side(before), _side(after)
        cross = float(first[0] * second[1] - first[1] * second[0])
        turn = abs(float(np.arctan2(cross, first @ second)))
        if turn > _END:
            raise Refusal(
                "excluded-end",
                "The region to leave out hides where the two sides of a wall end; how far they reach is not seen.",
                "Move what hides it and take the photo again.",
            )
        if turn < _CORNER:
            continue
        ahead = np.linalg.solve(np.column_stack([first, -second]), end - start)
        corner = start + ahead[0] * first
        a, b = before[-1], after[0]
        # The corner lies ahead of the one side and behind the other, within the hidden stretch.
        if (corner - a) @ first < 0.0 or (corner - b) @ second > 0.0:
            continue
        lengths = np.array([0.0, np.linalg.norm(corner - a), np.linalg.norm(b - corner)]).cumsum()
        at = (np.arange(len(gap)) + 1.0) / (len(gap) + 1.0) * lengths[-1]
        nearest = int(np.argmin(np.abs(at - lengths[1])))
        path = np.stack([a, corner, b])
        moved[gap] = np.column_stack([np.interp(at, lengths, path[:, axis]) for axis in (0, 1)])
        moved[gap[nearest]] = corner
    return moved


def _side(points: Array) -> tuple[Array, Array]:
    """A point on the line through (k, 2) points and its direction, the way they run."""
    middle = points.mean(axis=0)
    direction = np.linalg.svd(points - middle)[2][0]
    return middle, direction if direction @ (points[-1] - points[0]) > 0.0 else -direction
