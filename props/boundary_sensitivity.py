"""How properties change, to first order, as the outline moves: forces and densities along it.

Knows places on the outline and what a movement there does to each property; it does not know where the
properties or the movements come from.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike, NDArray

Floats = NDArray[np.float64]
Indices = NDArray[np.int64]
Points = NDArray[np.float64]


@dataclass(frozen=True)
class BoundarySensitivity:
    """First-order effect of a moving boundary on the field quantities, at points along all loops.

    points, normals : (k, 2), mm; places on the boundary, loop after loop, and the normals out of the material
    weights : (k,), mm of boundary each point stands for
    before, after : (k,), vertices of the section (order of `Section.vertices`) either side of the point
    fraction : (k,), way from `before` to `after`, 0 up to 1
    loop_sizes : vertices of every loop
    force : change of each quantity per mm each point moves, (k, 2) each
    reach : (k,), mm, the force of a density of one a mm: `weights` where the boundary is straight, less at a corner
    """

    points: Points
    normals: Points
    weights: Floats
    before: Indices
    after: Indices
    fraction: Floats
    loop_sizes: tuple[int, ...]
    force: Mapping[str, Points]
    reach: Floats

    def movement(self, displacement: ArrayLike) -> Points:
        """Movement (k, 2) of the points when the vertices move by displacement (n, 2), edges staying straight."""
        moved = np.asarray(displacement, dtype=float)
        return moved[self.before] + self.fraction[:, None] * (moved[self.after] - moved[self.before])

    def change(self, displacement: ArrayLike) -> dict[str, float]:
        """Change of every quantity, to first order, when the vertices move by displacement (n, 2), mm."""
        movement = self.movement(displacement)
        return {name: float(np.sum(force * movement)) for name, force in self.force.items()}

    def density(self, name: str) -> Floats:
        """Change of a quantity per mm^2 of material added at each point, (k,)."""
        return np.sum(self.force[name] * self.normals, axis=1) / self.reach

    def density_at(self, name: str, vertex: ArrayLike, fraction: ArrayLike) -> Floats:
        """Density of a quantity at places on the outline: edges named by their first vertex, and the way along them.

        vertex : (q,) int, number of the vertex an edge starts from; fraction : (q,), 0 to 1
        """
        wanted = np.asarray(vertex, dtype=np.int64) + np.asarray(fraction, dtype=float)
        place, density = self.before + self.fraction, self.density(name)
        found = np.zeros(np.shape(wanted))
        first = 0
        for count in self.loop_sizes:
            here = (self.before >= first) & (self.before < first + count)
            asked = (np.asarray(vertex) >= first) & (np.asarray(vertex) < first + count)
            found[asked] = np.interp(wanted[asked] - first, place[here] - first, density[here], period=count)
            first += count
        return found


def chain(pieces: Sequence[BoundarySensitivity], force: Mapping[str, Points]) -> BoundarySensitivity:
    """The sensitivities of separate parts one after another, with the forces (k, 2) on all their points."""
    offsets = np.cumsum([0, *(sum(piece.loop_sizes) for piece in pieces)])[:-1]
    return BoundarySensitivity(
        np.concatenate([piece.points for piece in pieces]),
        np.concatenate([piece.normals for piece in pieces]),
        np.concatenate([piece.weights for piece in pieces]),
        np.concatenate([piece.before + offset for piece, offset in zip(pieces, offsets, strict=True)]),
        np.concatenate([piece.after + offset for piece, offset in zip(pieces, offsets, strict=True)]),
        np.concatenate([piece.fraction for piece in pieces]),
        tuple(size for piece in pieces for size in piece.loop_sizes),
        force,
        np.concatenate([piece.reach for piece in pieces]),
    )
