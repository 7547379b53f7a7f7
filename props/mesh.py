"""Triangles over one connected region, refined where a field solution asks for it.

Knows points, triangles and which outline edge every boundary side lies on; it knows nothing of the
fields solved on them. Sides are straight: an arc is whatever chords the outline gives.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from .errors import OutlineError

Points = NDArray[np.float64]
Indices = NDArray[np.int64]
Flags = NDArray[np.bool_]


# How fast triangles may grow away from short edges, 0 to 1. Higher than the mesher's own 0.3, since refining follows.
_GRADING = 0.6


@dataclass(frozen=True)
class Mesh:
    """Triangles over a polygon with holes.

    points : (p, 2)
    triangles : (m, 3), counter-clockwise
    sides : (k, 2), boundary sides with the region on their left
    side_edge : (k,), the outline edge each side lies on; edges are numbered loop after loop
    """

    points: Points
    triangles: Indices
    sides: Indices
    side_edge: Indices


def mesh_region(loops: Sequence[Points], size: float) -> Mesh:
    """Triangles over the region inside the first loop and outside the others.

    loops : (n, 2) arrays with the region on their left: the shell counter-clockwise, holes clockwise
    size : longest side wanted, unit of the loops; thin walls get flat triangles of that length
    Raises OutlineError where the outline cannot be meshed.

    Netgen's advancing front can fail on very flat fronts; a finer size then helps, so a few are tried.
    """
    from netgen.geom2d import SplineGeometry
    from netgen.libngpy._meshing import NgException

    for attempt in range(6):
        geometry = SplineGeometry()
        edge = 1
        for loop in loops:
            numbers = [geometry.AppendPoint(float(x), float(y)) for x, y in loop]
            for start, end in zip(numbers, numbers[1:] + numbers[:1], strict=True):
                geometry.Append(["line", start, end], leftdomain=1, rightdomain=0, bc=edge)
                edge += 1
        try:
            mesh = geometry.GenerateMesh(maxh=size / 2.0**attempt, grading=_GRADING)
        except NgException:
            continue
        surface, border = mesh.Elements2D().NumPy(), mesh.Elements1D().NumPy()
        return Mesh(
            np.array(mesh.Coordinates()[:, :2]),
            surface["nodes"][:, :3].astype(np.int64) - 1,
            border["nodes"][:, :2].astype(np.int64) - 1,
            border["index"].astype(np.int64) - 1,
        )
    raise OutlineError(
        "cannot-mesh",
        "The outline cannot be divided into triangles.",
        "Look for walls or slits far thinner than the rest of the section and for edges that almost touch.",
    )


def _sides_of(mesh: Mesh) -> tuple[Indices, Indices, Indices]:
    """Unique sides (s, 2), the side numbers (m, 3) of every triangle, those of the boundary sides (k,).

    Side j of a triangle runs from its corner j to corner j + 1.
    """
    pairs = np.stack([mesh.triangles, np.roll(mesh.triangles, -1, axis=1)], axis=2).reshape(-1, 2)
    every = np.sort(np.concatenate([pairs, mesh.sides]), axis=1)
    count = len(mesh.points)
    keys, numbers = np.unique(every[:, 0] * count + every[:, 1], return_inverse=True)
    ends = np.stack([keys // count, keys % count], axis=1)
    inner = 3 * len(mesh.triangles)
    return ends, numbers[:inner].reshape(-1, 3), numbers[inner:]


def refine(mesh: Mesh, chosen: Flags) -> Mesh:
    """The mesh with every chosen triangle (m,) cut in four and its neighbours cut to fit.

    Longest sides are halved first, so that no angle falls below half the smallest one of the first
    mesh; Rivara, "Mesh refinement processes based on the generalized bisection of simplices" (1984).
    """
    ends, of_triangle, of_boundary = _sides_of(mesh)
    length = np.hypot(*(mesh.points[ends[:, 1]] - mesh.points[ends[:, 0]]).T)
    longest = np.argmax(length[of_triangle], axis=1)
    longest_side = np.take_along_axis(of_triangle, longest[:, None], axis=1)[:, 0]
    cut = np.zeros(len(ends), dtype=bool)
    cut[of_triangle[chosen]] = True
    # A triangle with any side cut has its longest side cut too; this spreads until nothing changes.
    while True:
        missing = cut[of_triangle].any(axis=1) & ~cut[longest_side]
        if not missing.any():
            break
        cut[longest_side[missing]] = True
    middle = np.full(len(ends), -1)
    middle[cut] = len(mesh.points) + np.arange(np.count_nonzero(cut))
    points = np.concatenate([mesh.points, mesh.points[ends[cut]].mean(axis=1)])

    turn = (longest[:, None] + np.arange(3)) % 3
    a, b, c = np.take_along_axis(mesh.triangles, turn, axis=1).T
    ab, bc, ca = middle[np.take_along_axis(of_triangle, turn, axis=1)].T
    first, second, third = ab >= 0, bc >= 0, ca >= 0
    pieces = [mesh.triangles[~first]]
    for half, corners, extra in (
        (first & ~third, (a, ab, c), None),
        (first & third, (a, ab, ca), (ca, ab, c)),
        (first & ~second, (ab, b, c), None),
        (first & second, (ab, b, bc), (ab, bc, c)),
    ):
        pieces.append(np.stack(corners, axis=1)[half])
        if extra is not None:
            pieces.append(np.stack(extra, axis=1)[half])

    border = middle[of_boundary]
    keep, halved = border < 0, border >= 0
    start, end = mesh.sides.T
    sides = np.concatenate(
        [
            mesh.sides[keep],
            np.stack([start[halved], border[halved]], axis=1),
            np.stack([border[halved], end[halved]], axis=1),
        ]
    )
    side_edge = np.concatenate([mesh.side_edge[keep], mesh.side_edge[halved], mesh.side_edge[halved]])
    return Mesh(points, np.concatenate(pieces), sides, side_edge)
