"""The section: a plane region of one or more parts with holes, in millimetres.

Knows geometry and material only; properties are computed in the modules beside it.
"""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass, field
from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import ArrayLike, NDArray

from .errors import OutlineError

if TYPE_CHECKING:
    from shapely import MultiPolygon, Polygon

Points = NDArray[np.float64]


def signed_area(loop: Points) -> float:
    """Area enclosed by a loop of (n, 2) points; positive when counter-clockwise."""
    # Taken about the first vertex, so that a loop far from the origin loses no digits.
    x, y = (loop - loop[0]).T
    return 0.5 * float(np.sum(x * np.roll(y, -1) - np.roll(x, -1) * y))


def oriented(loop: ArrayLike, *, counter_clockwise: bool) -> Points:
    """The loop as an open (n, 2) float64 array running the stated way round.

    Raises OutlineError if it has fewer than three distinct points, a coordinate that is not
    finite, or encloses no area.
    """
    points = np.array(loop, dtype=np.float64)
    if points.ndim != 2 or points.shape[1] != 2:
        raise OutlineError("bad-outline", "An outline must be a list of (x, y) points.", "Give two numbers per point.")
    if not np.isfinite(points).all():
        raise OutlineError(
            "bad-outline", "An outline has a coordinate that is not a number.", "Correct or remove that point."
        )
    distinct = np.any(points != np.roll(points, 1, axis=0), axis=1)
    points = points[distinct]
    if len(points) < 3:
        raise OutlineError(
            "bad-outline", "An outline has fewer than three distinct points.", "Give a closed outline of an area."
        )
    area = signed_area(points)
    if area == 0.0:
        raise OutlineError("bad-outline", "An outline encloses no area.", "Give a closed outline of an area.")
    if (area > 0.0) != counter_clockwise:
        points = points[::-1]
    points = np.ascontiguousarray(points)
    points.setflags(write=False)
    return points


@dataclass(frozen=True)
class Material:
    """A region's material. Moduli and strengths in MPa (N/mm^2), density in kg/m^3."""

    name: str
    elastic_modulus: float | None = None
    density: float | None = None
    yield_strength: float | None = None


@dataclass(frozen=True)
class Part:
    """One connected region: a shell with holes, mm.

    shell : (n, 2), counter-clockwise, not closed
    holes : each (n, 2), clockwise, not closed
    Loops given the other way round are turned.
    """

    shell: Points
    holes: tuple[Points, ...] = ()
    material: Material | None = None

    def __post_init__(self) -> None:
        object.__setattr__(self, "shell", oriented(self.shell, counter_clockwise=True))
        object.__setattr__(self, "holes", tuple(oriented(h, counter_clockwise=False) for h in self.holes))

    @property
    def loops(self) -> tuple[Points, ...]:
        """The shell, then the holes."""
        return (self.shell, *self.holes)


@dataclass(frozen=True)
class Section:
    """A plane section, x right and y up seen looking at the face, mm."""

    parts: tuple[Part, ...]
    _loops: tuple[Points, ...] = field(init=False, repr=False, compare=False, default=())

    def __post_init__(self) -> None:
        object.__setattr__(self, "parts", tuple(self.parts))
        if not self.parts:
            raise OutlineError("bad-outline", "A section has no part.", "Give at least one closed outline.")
        object.__setattr__(self, "_loops", tuple(loop for part in self.parts for loop in part.loops))

    @property
    def loops(self) -> tuple[Points, ...]:
        """All loops, part by part, each part's shell before its holes."""
        return self._loops

    @property
    def vertices(self) -> Points:
        """All vertices (n, 2) in the order of `loops`."""
        return np.concatenate(self._loops)

    def with_vertices(self, vertices: Points) -> Section:
        """The same section with its vertices moved to (n, 2) new places, in the order of `vertices`."""
        pieces = iter(np.split(np.asarray(vertices, float), np.cumsum([len(loop) for loop in self._loops])[:-1]))
        return Section(
            tuple(Part(next(pieces), tuple(next(pieces) for _ in part.holes), part.material) for part in self.parts)
        )

    @classmethod
    def from_polygons(cls, polygons: Polygon | MultiPolygon | Iterable[Polygon]) -> Section:
        """A section from a shapely polygon, multipolygon or several polygons."""
        from shapely import MultiPolygon, Polygon

        if isinstance(polygons, Polygon):
            polygons = [polygons]
        elif isinstance(polygons, MultiPolygon):
            polygons = list(polygons.geoms)
        return cls(
            tuple(
                Part(np.asarray(p.exterior.coords)[:-1, :2], tuple(np.asarray(h.coords)[:-1, :2] for h in p.interiors))
                for p in polygons
            )
        )

    def to_polygon(self) -> MultiPolygon:
        """The section as a shapely multipolygon, mm."""
        from shapely import MultiPolygon, Polygon

        return MultiPolygon([Polygon(part.shell, part.holes) for part in self.parts])

    def joined(self) -> MultiPolygon:
        """The region of all parts as a shapely multipolygon, mm: parts that touch are one polygon."""
        from shapely import MultiPolygon, Polygon, get_parts, unary_union

        if len(self.parts) == 1:
            return self.to_polygon()
        union = unary_union(list(self.to_polygon().geoms))
        return MultiPolygon([p for p in get_parts(union) if isinstance(p, Polygon)])
