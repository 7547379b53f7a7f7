"""Laplace's equation over a triangulated region: solutions and their estimated error.

Knows cubic triangles and two kinds of boundary: free flux (warping, shear) and constant value on every
loop (stress function). It does not know which section property a solution belongs to.
"""

from __future__ import annotations

from functools import cached_property
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

from .mesh import Indices, Mesh

if TYPE_CHECKING:
    from scipy.sparse import csc_array, csr_array

Floats = NDArray[np.float64]

# Energy error of the cubic solution, as a multiple of its distance from the quadratic one. A solution
# that goes with r^a at a corner loses energy with degree p as p^(-4 a) (Babuska and Suri, "The h-p version
# of the finite element method with quasiuniform meshes", 1987); the worst corner, a slit, has a = 1/2, so cubic
# over quadratic is q = (2/3)^2, and by orthogonality the cubic error is q/(1 - q) times the distance.
# Smoother solutions are better than that: the estimate stays on the safe side.
_CUBIC_OVER_DISTANCE = (2.0 / 3.0) ** 2 / (1.0 - (2.0 / 3.0) ** 2)


def factor(matrix: csc_array) -> Any:
    """Sparse factors of a symmetric positive definite matrix."""
    from scipy.sparse.linalg import splu

    # The symmetric ordering halves the fill of the default one, which is made for general matrices.
    return splu(matrix, permc_spec="MMD_AT_PLUS_A", diag_pivot_thresh=0.0, options={"SymmetricMode": True})


class Potentials:
    """Cubic potentials over one mesh.

    A potential is a vector of coefficients, one an unknown. Loads are vectors of the same length.
    """

    degree = 6  # of the quadrature: exact for products of two cubics

    def __init__(self, mesh: Mesh) -> None:
        from scipy.sparse import csr_array
        from skfem import Basis, ElementTriP3, MeshTri
        from skfem.models.poisson import laplace, mass

        self.mesh = mesh
        self.grid = MeshTri(np.ascontiguousarray(mesh.points.T), np.ascontiguousarray(mesh.triangles.T))
        self.basis = Basis(self.grid, ElementTriP3(), intorder=self.degree)
        self.stiffness = csr_array(laplace.assemble(self.basis))
        self.mass = csr_array(mass.assemble(self.basis))
        self.x, self.y = np.asarray(self.basis.global_coordinates())
        self.unit_load: Floats = self.mass @ np.ones(self.basis.N)

    @property
    def unknowns(self) -> int:
        """Number of coefficients of a potential."""
        return len(self.unit_load)

    @cached_property
    def _values(self) -> Floats:
        """Shape functions (10, m, quadrature points)."""
        return np.stack([np.broadcast_to(np.asarray(field[0]), self.x.shape) for field in self.basis.basis])

    @cached_property
    def _gradients(self) -> Floats:
        """Gradients of the shape functions (10, 2, m, quadrature points)."""
        return np.stack([np.asarray(field[0].grad) for field in self.basis.basis])

    @property
    def coordinates(self) -> Floats:
        """x and y as potentials, (2, n)."""
        return np.asarray(self.basis.doflocs)

    def integral(self, integrand: Floats) -> float:
        """Integral over the region of values (m, q) at the quadrature points."""
        return float(np.sum(integrand * self.basis.dx))

    def per_triangle(self, integrand: Floats) -> Floats:
        """Integrals (m,) over every triangle of values (m, q) at the quadrature points."""
        return np.sum(integrand * self.basis.dx, axis=1)

    def load(self, density: Floats) -> Floats:
        """Load integral(density v) of a density (m, q) given at the quadrature points."""
        local = np.einsum("imq,mq->im", self._values, density * self.basis.dx)
        return self._gather(local)

    def flux_load(self, flux: Floats) -> Floats:
        """Load integral(flux . grad v) of a vector field (2, m, q) given at the quadrature points."""
        local = np.einsum("idmq,dmq->im", self._gradients, flux * self.basis.dx)
        return self._gather(local)

    def _gather(self, local: Floats) -> Floats:
        numbers = np.asarray(self.basis.element_dofs)
        return np.bincount(numbers.ravel(), weights=local.ravel(), minlength=self.unknowns).astype(float)

    def value(self, potential: Floats) -> Floats:
        """Values (m, q) at the quadrature points."""
        return np.asarray(self.basis.interpolate(potential))

    def gradient(self, potential: Floats) -> Floats:
        """Gradients (2, m, q) at the quadrature points."""
        field: Any = self.basis.interpolate(potential)
        return np.asarray(field.grad)

    def of_zero_mean(self, potential: Floats) -> Floats:
        """The potential less its mean over the region; columns of an (n, k) array one by one."""
        return potential - (self.unit_load @ potential) / self.unit_load.sum()

    @cached_property
    def _free(self) -> Any:
        return factor(self.stiffness[1:, 1:].tocsc())

    @cached_property
    def _quadratics(self) -> tuple[csr_array, Any]:
        """The quadratic potentials as cubic ones (n, n2), and the factors of their stiffness."""
        from scipy.sparse import coo_array
        from skfem import Basis, ElementTriP2, ElementTriP3

        coarse = Basis(self.grid, ElementTriP2(), intorder=2)
        nodes = ElementTriP3.doflocs.T
        local = np.stack([ElementTriP2().lbasis(nodes, j)[0] for j in range(6)], axis=1)
        rows = np.asarray(self.basis.element_dofs)[:, None, :]
        columns = np.asarray(coarse.element_dofs)[None, :, :]
        shape = (10, 6, rows.shape[2])
        # Nodes shared by triangles get the same row from each of them: the mean undoes the sum.
        shared = np.bincount(rows.ravel(), minlength=self.unknowns)
        entries = np.broadcast_to(local[:, :, None], shape) / shared[np.broadcast_to(rows, shape)]
        embedding = coo_array(
            (entries.ravel(), (np.broadcast_to(rows, shape).ravel(), np.broadcast_to(columns, shape).ravel())),
            shape=(self.unknowns, coarse.N),
        ).tocsr()
        stiffness = (embedding.T @ self.stiffness @ embedding)[1:, 1:]
        return embedding, factor(stiffness.tocsc())

    def free(self, loads: Floats) -> Floats:
        """Potentials (n, k) of zero mean: integral(grad u . grad v) = load(v) for all v, loads (n, k) of zero sum."""
        found = np.zeros_like(loads)
        found[1:] = self._free.solve(np.ascontiguousarray(loads[1:]))
        return self.of_zero_mean(found)

    def error(self, loads: Floats, potentials: Floats) -> Floats:
        """Estimated energy (k, m) of the error of each potential, triangle by triangle.

        From the distance of the quadratic potentials of the same loads.
        """
        embedding, factors = self._quadratics
        gathered = embedding.T @ loads
        coarse = np.zeros((gathered.shape[0], loads.shape[1]))
        coarse[1:] = factors.solve(np.ascontiguousarray(gathered[1:]))
        difference = potentials - embedding @ coarse
        energy = [self.per_triangle(np.sum(self.gradient(d) ** 2, axis=0)) for d in difference.T]
        return _CUBIC_OVER_DISTANCE * np.stack(energy)

    def constant_on_loops(self, load: Floats, loop_of_edge: Indices, loop_loads: Floats) -> tuple[Floats, float]:
        """The potential that is zero on loop 0 and an unknown constant on each other loop, and load . potential.

        load : (n,); loop_of_edge : (edges,), the loop each outline edge belongs to
        loop_loads : (loops - 1,), loads on the constants
        """
        from scipy.sparse import coo_array

        loop = np.full(self.unknowns, -1)
        facets, edge = self._border
        for number in range(len(loop_loads) + 1):
            loop[self.basis.get_dofs(facets=facets[loop_of_edge[edge] == number]).flatten()] = number
        inner = np.flatnonzero(loop < 0)
        column = np.where(loop > 0, len(inner) + loop - 1, -1)
        column[inner] = np.arange(len(inner))
        rows = np.flatnonzero(column >= 0)
        spread = coo_array(
            (np.ones(len(rows)), (rows, column[rows])), shape=(self.unknowns, len(inner) + len(loop_loads))
        ).tocsr()
        gathered = spread.T @ load
        gathered[len(inner) :] += loop_loads
        found = factor((spread.T @ self.stiffness @ spread).tocsc()).solve(gathered)
        return spread @ found, float(gathered @ found)

    @cached_property
    def _border(self) -> tuple[Indices, Indices]:
        """The grid's boundary facets and the outline edge of each."""
        facets = np.asarray(self.grid.boundary_facets())
        count = len(self.mesh.points)
        ends = np.sort(np.asarray(self.grid.facets)[:, facets], axis=0)
        ours = np.sort(self.mesh.sides, axis=1)
        keys = ours[:, 0] * count + ours[:, 1]
        order = np.argsort(keys)
        place = np.searchsorted(keys[order], ends[0] * count + ends[1])
        return facets, self.mesh.side_edge[order[place]]
