"""How an integral over a triangulated region changes, to first order, as the boundary moves.

Knows integrands that depend on place and on potentials at whose solution the integral is stationary; it
does not know what the integral means.
"""

from __future__ import annotations

from collections.abc import Iterable

import numpy as np

from .mesh import Indices, Points
from .potential import Floats, Potentials, factor


class ShapeGradient:
    """Forces on the boundary nodes of a mesh: change of an integral = sum of force . movement.

    nodes : (k,), mesh points on the boundary, along each loop in turn; edge : (k,), outline edge that starts at or
        holds the node; normals : (k,2), outward, at corners the mean of both sides; weights : (k,), half of the sides
        at the node; reach : (k,), length of the sum of both half sides' normals
    side_ends : (k, 2), positions in `nodes` of the ends of every boundary side; side_edge : (k,)

    The boundary takes the inner nodes along smoothly (as a potential), and the change is that of the
    integral over the moved triangles. Stresses that grow without bound at re-entrant corners spoil values on
    the boundary but not this form, which converges as fast as the integral itself: Hiptmair, Paganini and
    Sargheini, "Comparison of approximate shape gradients" (2015).
    """

    def __init__(self, potentials: Potentials) -> None:
        from skfem import Basis, ElementTriP1
        from skfem.models.poisson import laplace

        self._potentials = potentials
        mesh = potentials.mesh
        self.nodes: Indices = mesh.sides[:, 0]
        position = np.full(len(mesh.points), -1)
        position[self.nodes] = np.arange(len(self.nodes))
        self.side_ends: Indices = position[mesh.sides]
        self.side_edge: Indices = mesh.side_edge
        along = mesh.points[mesh.sides[:, 1]] - mesh.points[mesh.sides[:, 0]]
        half = 0.5 * np.stack([along[:, 1], -along[:, 0]], axis=1)
        normals = half.copy()
        np.add.at(normals, self.side_ends[:, 1], half)
        self.reach: Floats = np.hypot(*normals.T)
        self.normals: Points = normals / self.reach[:, None]
        self.weights: Floats = 0.5 * np.hypot(*along.T)
        np.add.at(self.weights, self.side_ends[:, 1], 0.5 * np.hypot(*along.T))

        self._linear = Basis(potentials.grid, ElementTriP1(), intorder=potentials.degree)
        stiffness = laplace.assemble(self._linear).tocsc()
        self._inner = np.flatnonzero(position < 0)
        self._follow = stiffness[self.nodes][:, self._inner]
        self._factors = factor(stiffness[self._inner][:, self._inner]) if len(self._inner) else None

    def carried(self, movement: Points) -> Points:
        """Movements (p, 2) of all mesh points when the boundary nodes move by movement (k, 2)."""
        moved = np.zeros_like(self._potentials.mesh.points)
        moved[self.nodes] = movement
        if self._factors is not None:
            moved[self._inner] = -self._factors.solve(np.ascontiguousarray(self._follow.T @ movement))
        return moved

    def of(
        self, integrand: Floats, slopes: Iterable[tuple[Floats, Floats]] = (), explicit: Floats | None = None
    ) -> Floats:
        """Forces (k, 2) of an integral over the region.

        integrand : (m, q), at the quadrature points of the potentials
        slopes : for each potential, its gradient and the integrand's derivative with respect to it, (2, m, q) each
        explicit : (2, m, q), the integrand's derivative with respect to place, potentials held
        """
        tensor = np.zeros((2, 2, *integrand.shape))
        tensor[0, 0] = tensor[1, 1] = integrand
        for gradient, derivative in slopes:
            tensor -= gradient[:, None] * derivative[None, :]
        tensor *= self._potentials.basis.dx
        numbers = np.asarray(self._linear.element_dofs)
        forces = np.zeros((len(self._potentials.mesh.points), 2))
        for corner, (shape,) in zip(numbers, self._linear.basis, strict=True):
            local = np.einsum("klmq,lmq->km", tensor, np.asarray(shape.grad))
            if explicit is not None:
                local += np.sum(explicit * np.asarray(shape) * self._potentials.basis.dx, axis=2)
            np.add.at(forces, corner, local.T)
        if self._factors is None:
            return forces[self.nodes]
        return forces[self.nodes] - self._follow @ self._factors.solve(np.ascontiguousarray(forces[self._inner]))
