"""Sections moved, turned or mirrored, and pieces put together into one section.

Knows rigid motions and unions. Pieces that touch count as fully connected; what connects them is not looked at.
"""

from __future__ import annotations

import itertools
import math
from collections.abc import Sequence
from typing import TYPE_CHECKING, Any

import numpy as np

from ..errors import OutlineError, UsageError
from ..section import Material, Part, Section

if TYPE_CHECKING:
    from shapely import Polygon

CONTACT_GRID = 1e-6
"""Faces closer than this, mm, count as touching: far below any length that is measured, far above rounding."""


def placed(section: Section, x: float = 0.0, y: float = 0.0, turn: float = 0.0, mirrored: bool = False) -> Section:
    """The section mirrored about its y axis (if asked), then turned about the origin, then moved.

    x, y : movement, mm
    turn : rad, counter-clockwise; quarter turns are exact
    """
    cosine, sine = math.cos(turn), math.sin(turn)
    if math.isclose(turn % (0.5 * math.pi), 0.0, abs_tol=1e-12) or math.isclose(
        turn % (0.5 * math.pi), 0.5 * math.pi, abs_tol=1e-12
    ):
        cosine, sine = float(round(cosine)), float(round(sine))
    matrix = np.array([[cosine, sine], [-sine, cosine]])
    if mirrored:
        matrix = np.array([[-1.0, 0.0], [0.0, 1.0]]) @ matrix
    return section.with_vertices(section.vertices @ matrix + [x, y])


def assemble(pieces: Sequence[Section]) -> Section:
    """One section from pieces in place; pieces of one material that touch become one part, mm.

    Raises UsageError without a piece, OutlineError if two pieces overlap (their common area would count twice).
    """
    import shapely

    if not pieces:
        raise UsageError("no-pieces", "There is nothing to assemble.", "Give at least one plate or profile.")
    polygons = [piece.to_polygon() for piece in pieces]
    for (i, first), (j, second) in itertools.combinations(enumerate(polygons), 2):
        common = first.intersection(second)
        if common.area > CONTACT_GRID * max(first.length, second.length):
            at = common.representative_point()
            raise OutlineError(
                "pieces-overlap",
                f"Pieces {i + 1} and {j + 1} overlap by {common.area:.4g} mm2 near ({at.x:.4g}, {at.y:.4g}).",
                "Move one of them or trim it, so that they touch or leave a gap.",
            )
    parts = [part for piece in pieces for part in piece.parts]
    materials: dict[Material | None, list[Polygon]] = {}
    for part in parts:
        materials.setdefault(part.material, []).append(shapely.Polygon(part.shell, part.holes))
    merged: list[Part] = []
    for material, members in materials.items():
        union = shapely.union_all(members, grid_size=CONTACT_GRID)
        merged += [Part(part.shell, part.holes, material) for part in polygonal_section(union).parts]
    return Section(tuple(merged))


def polygonal_section(geometry: Any) -> Section:
    """The areas among a shapely geometry as a Section; vertices in the middle of straight sides are dropped.

    Raises OutlineError if nothing is left.
    """
    import shapely

    polygons = [p for p in shapely.get_parts(geometry) if p.geom_type == "Polygon" and p.area > 0.0]
    if not polygons:
        raise OutlineError("nothing-left", "No area is left.", "Check the sizes of what is taken away.")
    return Section.from_polygons([shapely.simplify(p, 0.0) for p in polygons])
