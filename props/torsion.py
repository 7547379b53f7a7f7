"""Saint-Venant torsion of one connected region: torsion constant, warping function and warping constant.

Knows the warping function and the stress function of a region about its centroid, in whatever unit of
length the mesh has; meshing to a tolerance, parts and units of people are left to `field`.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import NamedTuple

import numpy as np

from .mesh import Indices
from .potential import Floats, Potentials
from .shape_gradient import ShapeGradient


@dataclass(frozen=True)
class RegionMoments:
    """Integrals over a region about its centroid.

    second : (2, 2), integral of (x, y) outer (x, y); third : (2,), integral of (x, y)(x^2 + y^2)
    """

    area: float
    second: Floats
    third: Floats

    @classmethod
    def of(cls, potentials: Potentials) -> RegionMoments:
        """The moments of a mesh whose origin is its centroid."""
        x, y, integral = potentials.x, potentials.y, potentials.integral
        mixed = integral(x * y)
        square = x**2 + y**2
        return cls(
            integral(np.ones_like(x)),
            np.array([[integral(x * x), mixed], [mixed, integral(y * y)]]),
            np.array([integral(x * square), integral(y * square)]),
        )


class MomentForces(NamedTuple):
    """Change of moments about a fixed point (the centroid at rest) per movement of the boundary nodes.

    first : (2, k, 2); second : (2, 2, k, 2); third : (2, k, 2), arranged as in `RegionMoments`
    """

    first: Floats
    second: Floats
    third: Floats


def moment_forces(shape: ShapeGradient, potentials: Potentials) -> MomentForces:
    """Forces of the moments of a mesh whose origin is its centroid."""
    x, y = potentials.x, potentials.y
    along_x, along_y = np.stack([np.ones_like(x), np.zeros_like(x)]), np.stack([np.zeros_like(x), np.ones_like(x)])
    mixed = shape.of(x * y, explicit=np.stack([y, x]))
    square, radial = x**2 + y**2, 2.0 * np.stack([x, y])
    return MomentForces(
        np.stack([shape.of(x, explicit=along_x), shape.of(y, explicit=along_y)]),
        np.stack(
            [
                np.stack([shape.of(x * x, explicit=2.0 * x * along_x), mixed]),
                np.stack([mixed, shape.of(y * y, explicit=2.0 * y * along_y)]),
            ]
        ),
        np.stack(
            [
                shape.of(x * square, explicit=square * along_x + x * radial),
                shape.of(y * square, explicit=square * along_y + y * radial),
            ]
        ),
    )


@dataclass(frozen=True)
class Torsion:
    """Torsion of one region.

    lower, upper : bounds of the torsion constant, from the stress function and the warping function
    gap : (m,), upper less lower as an integral that cannot be negative, triangle by triangle; it bounds the energy of
        the warping function's error
    warping : (n,), warping function about the centroid, of zero mean, at unit twist
    warping_at_twist_centre : (n,), the same about the centre of twist
    adjoint : (n,), the potential whose load is `warping_at_twist_centre`
    products : (2,), integral of warping times (x, y)
    adjoint_error : (m,), estimated energy of the adjoint's error
    """

    lower: float
    upper: float
    gap: Floats
    warping: Floats
    warping_at_twist_centre: Floats
    adjoint: Floats
    products: Floats
    warping_constant: float
    adjoint_error: Floats

    @property
    def torsion_constant(self) -> float:
        """Middle of the bounds."""
        return 0.5 * (self.lower + self.upper)

    @property
    def warping_constant_error(self) -> float:
        """Estimated error of the warping constant: 2 integral(grad adjoint . grad error), by Cauchy's inequality."""
        return 2.0 * float(np.sqrt(self.gap.sum() * self.adjoint_error.sum()))


def unit_rotation(x: Floats, y: Floats) -> Floats:
    """The field (y, -x), (2, ...): the stress of unit twist is grad(warping) less this field."""
    return np.stack([y, -x])


def solve_torsion(potentials: Potentials, moments: RegionMoments, loop_of_edge: Indices, hole_areas: Floats) -> Torsion:
    """Torsion of the region about its centroid, which must be the mesh's origin.

    loop_of_edge : (edges,), 0 for edges of the shell, 1, 2, ... for those of the holes
    hole_areas : (holes,), positive

    The warping function w solves laplace(w) = 0 with dw/dn = y nx - x ny, the stress function
    laplace(phi) = -2 with phi = 0 on the shell and a constant on each hole. Their energies bound the
    torsion constant from above and below, and the distance of the two stresses is the distance of the
    bounds, so it shows where to refine (Prager and Synge, "Approximations in elasticity based on the
    concept of function space", 1947). Boundary terms: Timoshenko and Goodier, Theory of Elasticity.
    """
    rotation = unit_rotation(potentials.x, potentials.y)
    load = potentials.flux_load(rotation)
    warping = potentials.free(load[:, None])[:, 0]
    stress_function, lower = potentials.constant_on_loops(2.0 * potentials.unit_load, loop_of_edge, 2.0 * hole_areas)

    stress_x, stress_y = potentials.gradient(warping) - rotation
    slope_x, slope_y = potentials.gradient(stress_function)
    # Polar moment less warping energy is the same number, but in a thin open section the difference is all rounding.
    upper = potentials.integral(stress_x**2 + stress_y**2)
    gap = potentials.per_triangle((stress_x - slope_y) ** 2 + (stress_y + slope_x) ** 2)

    axes = potentials.coordinates
    products = axes @ (potentials.mass @ warping)
    centred = warping - np.linalg.solve(moments.second, products) @ axes
    adjoint_load = potentials.mass @ centred
    adjoint = potentials.free(adjoint_load[:, None])[:, 0]
    adjoint_error = potentials.error(adjoint_load[:, None], adjoint[:, None])[0]
    return Torsion(
        lower,
        upper,
        gap,
        warping,
        centred,
        adjoint,
        products,
        float(centred @ adjoint_load),
        adjoint_error,
    )


def stress(potentials: Potentials, torsion: Torsion) -> Floats:
    """Shear stress (2, m, q) at unit twist and unit shear modulus."""
    return potentials.gradient(torsion.warping) - unit_rotation(potentials.x, potentials.y)


def rotation_slopes(vector: Floats) -> Floats:
    """Derivatives with respect to x and y, (2, ...), of vector . unit_rotation(x, y), the vector (2, ...) held."""
    return np.stack([-vector[1], vector[0]])


def torsion_forces(
    shape: ShapeGradient, potentials: Potentials, torsion: Torsion, moments: RegionMoments
) -> dict[str, Floats]:
    """Change of the torsion and warping constants per movement of the boundary nodes (k, 2).

    The torsion constant is the least integral of stress^2. The warping constant is stationary once the
    adjoint potential z of the warping w about the centre of twist joins in: w^2 - 2 stress . grad(z). With
    fields that solve their equations exactly these are Hadamard's densities on the boundary, stress^2 and
    w^2 - 2 stress dz/ds.
    """
    tau = stress(potentials, torsion)
    slope = potentials.gradient(torsion.warping)
    adjoint_slope = potentials.gradient(torsion.adjoint)
    warping = potentials.value(torsion.warping_at_twist_centre)
    shift = np.linalg.solve(moments.second, torsion.products)
    return {
        "torsion_constant": shape.of(np.sum(tau**2, axis=0), [(slope, 2.0 * tau)], -2.0 * rotation_slopes(tau)),
        "warping_constant": shape.of(
            warping**2 - 2.0 * np.sum(tau * adjoint_slope, axis=0),
            [(slope, -2.0 * adjoint_slope), (adjoint_slope, -2.0 * tau)],
            -2.0 * shift[:, None, None] * warping + 2.0 * rotation_slopes(adjoint_slope),
        ),
    }
