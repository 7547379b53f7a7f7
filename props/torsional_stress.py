"""Uncertainty of the largest shear stress from torsion: how the slope of the stress function follows the outline.

Knows one connected part at a time and the place of the largest stress, which stays where it is. First order: the mesh
is carried along with the outline, so that what the mesh itself errs by cancels.
"""

from __future__ import annotations

import math
from dataclasses import replace
from typing import TYPE_CHECKING

import numpy as np

from .derived import combined
from .effects import NUMERICAL, RANDOM
from .integrals import centroidal
from .part_field import SHARES_OF_THINNING, mean_thickness, start_mesh, thinned_outline
from .potential import Floats, Potentials
from .result import Quantity
from .section import Part, Section, signed_area
from .shape_gradient import ShapeGradient
from .torsion import unit_rotation
from .uncertainty import OutlineUncertainty, quantify

if TYPE_CHECKING:
    from .field import FieldProperties
    from .stress import Stress

# Directions in which the outline moves that are followed, the largest first; the rest of the modes' movement is less
# than this share of their squares.
_MOST_DIRECTIONS, _REST = 10, 1e-4
# Pieces of outline about the place whose random errors are followed, out to this many wall thicknesses.
_MOST_PIECES, _REACH = 6, 2.0


def quantify_torsional_shear(
    section: Section, field: FieldProperties, worst: Stress, uncertainty: OutlineUncertainty
) -> Quantity:
    """The largest Saint-Venant shear stress along the outline, MPa, with the uncertainty of outline and solution.

    field : torsion properties of the section; worst : as `stress.torsional_shear` finds it
    The torque is exact. Stress goes with the slope of the stress function there over the torsion constant; at a sharp
    re-entrant corner both have no limit, and the interval is that of the figure as solved.
    """
    constant = field.values["torsion_constant"]
    row: list[float] = []
    sources = [mode.source for mode in uncertainty.modes]
    rectangular = [mode.shape == "rectangular" for mode in uncertainty.modes]
    part, vertices = _part_at(section, worst.place)
    certain = not uncertainty.modes and uncertainty.noise is None
    slope = None if certain else _Slope(part, np.array(worst.place))
    if slope is not None and uncertainty.modes:
        moved = np.array([np.asarray(mode.displacement, float) for mode in uncertainty.modes])
        of_constant = np.array([field.sensitivity.change(d)["torsion_constant"] for d in moved]) / constant
        row += (slope.changes(moved[:, vertices]) - of_constant).tolist()
    if slope is not None and uncertainty.noise is not None:
        std = np.asarray(uncertainty.noise.std, float)[vertices]
        length = np.asarray(uncertainty.noise.correlation_length, float)[vertices]
        random = slope.random_changes(std, length)
        alone = quantify(section, {"torsion_constant": constant}, replace(uncertainty, modes=()), field)
        row += [*random, alone["torsion_constant"].std / constant]
        sources += [RANDOM] * (len(random) + 1)
        rectangular += [False] * (len(random) + 1)
    row.append(field.relative_error["torsion_constant"] / math.sqrt(3.0))
    sources.append(NUMERICAL)
    rectangular.append(True)
    return combined(worst.value, "MPa", sources, np.array(rectangular), worst.value * np.array(row))


def _part_at(section: Section, place: tuple[float, float]) -> tuple[Part, slice]:
    """The part whose outline comes nearest to a place, and its vertices among those of the section."""
    import shapely

    distances = [shapely.Polygon(p.shell, p.holes).boundary.distance(shapely.Point(place)) for p in section.parts]
    nearest = int(np.argmin(distances))
    sizes = [sum(len(loop) for loop in part.loops) for part in section.parts]
    first = sum(sizes[:nearest])
    return section.parts[nearest], slice(first, first + sizes[nearest])


class _Slope:
    """The slope of a part's stress function at one place of its outline, and its change as the outline moves."""

    def __init__(self, part: Part, place: Floats) -> None:
        self._unit = float(np.sqrt(sum(signed_area(loop) for loop in part.loops)))
        loops = [loop / self._unit for loop in part.loops]
        outline = thinned_outline(loops, 1e-3, SHARES_OF_THINNING)
        kept = outline.kept_loops
        centroid = centroidal(Section((Part(kept[0], kept[1:]),))).origin
        self._mesh = start_mesh([loop - centroid for loop in kept])
        self._shape = ShapeGradient(Potentials(self._mesh))
        self._points = self._mesh.points[self._shape.nodes] + centroid
        self._before, self._after, self._fraction = outline.follow(self._points, self._shape.side_edge)[:3]
        self._thickness = mean_thickness(loops)
        density = self._density(self._mesh.points)
        near = np.hypot(*(self._points - place / self._unit).T)
        # The steepest node about the place; another mesh has its nodes elsewhere.
        about = near <= max(float(near.min()), 0.5 * self._thickness)
        self._node = int(np.flatnonzero(about)[np.argmax(density[about])])
        self._base = float(density[self._node])

    def _density(self, points: Floats) -> Floats:
        """Square of the slope at every boundary node (k,) with the mesh's points moved to (p, 2) new places."""
        potentials = Potentials(replace(self._mesh, points=points))
        rotation = unit_rotation(potentials.x, potentials.y)
        warping = potentials.free(potentials.flux_load(rotation)[:, None])[:, 0]
        gradient = potentials.gradient(warping)
        stress = gradient - rotation
        slopes = -2.0 * np.stack([-stress[1], stress[0]])
        shape = ShapeGradient(potentials)
        force = shape.of(np.sum(stress**2, axis=0), [(gradient, 2.0 * stress)], slopes)
        return np.sum(force * shape.normals, axis=1) / shape.reach

    def _change(self, movement: Floats) -> float:
        """Relative change of the slope when the boundary nodes move by (k, 2)."""
        moved = self._density(self._mesh.points + self._shape.carried(movement))
        return 0.5 * math.log(max(float(moved[self._node]), 1e-12 * self._base) / self._base)

    def changes(self, displacements: Floats) -> Floats:
        """Relative change of the slope for each movement of the part's vertices, (m, n, 2) mm.

        The movements are combinations of few directions, along which alone the part is solved again.
        """
        if len(displacements) == 0:
            return np.zeros(0)
        moved = displacements[:, self._before] / self._unit
        moved = moved + self._fraction[:, None] * (displacements[:, self._after] / self._unit - moved)
        outward = np.sum(moved * self._shape.normals, axis=2) * np.sqrt(self._shape.weights)
        sizes_squared, shares = np.linalg.eigh(outward @ outward.T)
        total = np.cumsum(np.maximum(sizes_squared[::-1], 0.0))
        count = min(_MOST_DIRECTIONS, int(np.searchsorted(total, (1.0 - _REST) * total[-1])) + 1)
        found = np.zeros(len(displacements))
        for direction in shares.T[::-1][:count]:
            found += direction * self._change(np.einsum("m,mkd->kd", direction, moved))
        return found

    def random_changes(self, std: Floats, length: Floats) -> Floats:
        """Relative changes of the slope by random error on pieces of outline about the place, (pieces,).

        std, length : (n,) mm, at the part's vertices. Farther off, random error acts on the torsion constant alone.
        """
        distance = np.hypot(*(self._points - self._points[self._node]).T)
        near = np.flatnonzero(distance <= _REACH * self._thickness)
        # Nodes follow one another along a loop; a piece ends where they skip, or is about a thickness long.
        skip = np.concatenate([[0], np.cumsum(np.diff(near) > 1)])
        piece = np.floor(np.cumsum(self._shape.weights[near]) / self._thickness)
        keys = np.unique(np.column_stack([skip, piece]), axis=0, return_inverse=True)[1].ravel()
        order = sorted(np.unique(keys), key=lambda key: float(distance[near[keys == key]].min()))[:_MOST_PIECES]
        found = []
        for key in order:
            nodes = near[keys == key]
            own = float(self._shape.weights[nodes].sum()) * self._unit
            at = self._before[nodes]
            size = np.sqrt(np.mean(std[at] ** 2 * np.minimum(length[at] / own, 1.0))) / self._unit
            movement = np.zeros_like(self._points)
            movement[nodes] = size * self._shape.normals[nodes]
            found.append(self._change(movement))
        return np.array(found)
