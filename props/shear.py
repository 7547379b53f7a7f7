"""Shear by transverse forces on one connected region: shear centre, shear areas, monosymmetry.

Knows the flexural shear stress of Saint-Venant for a stated Poisson ratio, about the centroid, in the
unit of the mesh; torsion comes from `torsion`, meshing to a tolerance from `field`.
"""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass
from typing import NamedTuple

import numpy as np

from .potential import Floats, Potentials
from .shape_gradient import ShapeGradient
from .torsion import MomentForces, RegionMoments, Torsion, rotation_slopes, stress, unit_rotation


class Axes(NamedTuple):
    """Axes of bending: their names, the angle from x, rad, and whether they stay principal as the boundary moves."""

    names: tuple[str, str]
    angle: float
    principal: bool


@dataclass(frozen=True)
class Shear:
    """Shear of one region by a unit force along x (index 0) and along y (index 1).

    coupling : nu/(2 (1 + nu)), the weight of lateral contraction
    gradients : (2, 2), row i the rate (p, q) of the normal stress p x + q y under force i
    bending : (n, 2), potentials of the stress without lateral contraction
    lateral : (n, 2) or None, potentials of the contraction alone, to be weighted by `coupling`
    centre : (2,), shear centre from the centroid
    flexibility : (2, 2), integral of stress i . stress j; the shear areas are one over its diagonal
    twist : (2,), moment about the centroid that contraction alone adds, per unit of coupling
    error : (2, m), estimated energy of the error of the whole potential
    """

    coupling: float
    gradients: Floats
    bending: Floats
    lateral: Floats | None
    centre: Floats
    flexibility: Floats
    twist: Floats
    error: Floats

    @property
    def areas(self) -> Floats:
        """Shear areas (2,) for forces along x and y."""
        return 1.0 / np.diag(self.flexibility)

    @property
    def area_errors(self) -> Floats:
        """Estimated errors (2,) of the shear areas."""
        return self.areas**2 * self.error.sum(axis=1)

    def centre_errors(self, torsion: Torsion) -> Floats:
        """Estimated errors (2,) of the shear centre: the moment of force i is a product of two potentials."""
        of_moments = np.sqrt(torsion.gap.sum() * self.error.sum(axis=1))
        return of_moments[::-1]


def _contraction(x: Floats, y: Floats, rates: Floats) -> Floats:
    """The field d of lateral contraction (2, ...) for normal stress p x + q y: stress = grad(potential) - c d."""
    p, q = rates
    half = 0.5 * (x**2 - y**2)
    return np.stack([p * half + q * x * y, p * x * y - q * half])


def _contraction_slopes(x: Floats, y: Floats, rates: Floats, vector: Floats) -> Floats:
    """Derivatives with respect to x and y, (2, ...), of vector . contraction, the vector (2, ...) held."""
    p, q = rates
    along, across = p * x + q * y, p * y - q * x
    return np.stack([along * vector[0] + across * vector[1], along * vector[1] - across * vector[0]])


def _turn(angle: float) -> Floats:
    """Matrix (2, 2) from x and y to axes turned counter-clockwise by the angle."""
    return np.array([[np.cos(angle), np.sin(angle)], [-np.sin(angle), np.cos(angle)]])


def solve_shear(potentials: Potentials, moments: RegionMoments, torsion: Torsion, poisson_ratio: float) -> Shear:
    """Shear of the region about its centroid, which must be the mesh's origin.

    The normal stress grows along the member at the rate g = p x + q y; the shear stress grad(u) - c d,
    c = nu/(2 (1 + nu)), balances it with no stress across the boundary and no twist on average over the
    section (Timoshenko and Goodier, Theory of Elasticity, bending of bars). Its moment about the centroid
    places the shear centre; for nu = 0 this is the centre of twist. Shear areas equate the strain energy
    V^2/(2 G A) to that of the stress. Forces lie along x and y, be they principal axes or not.
    """
    coupling = poisson_ratio / (2.0 * (1.0 + poisson_ratio))
    gradients: Floats = np.linalg.inv(moments.second).astype(float)
    loads: Floats = (potentials.mass @ potentials.coordinates.T) @ gradients
    bending = potentials.free(loads)
    flexibility = bending.T @ loads
    twist = np.zeros(2)
    lateral = None
    if coupling == 0.0:
        error = potentials.error(loads, bending)
    else:
        rotation = unit_rotation(potentials.x, potentials.y)
        fields = [_contraction(potentials.x, potentials.y, rates) for rates in gradients]
        lateral_loads = np.stack([potentials.flux_load(field) for field in fields], axis=1)
        lateral = potentials.free(lateral_loads)
        # The residues themselves: the difference of the two energies is all rounding in a wide thin plate.
        residues = [potentials.gradient(lateral[:, i]) - field for i, field in enumerate(fields)]
        own = [[potentials.integral(np.sum(one * other, axis=0)) for other in residues] for one in residues]
        flexibility = flexibility + coupling**2 * np.array(own)
        turned = np.array([potentials.integral(np.sum(rotation * field, axis=0)) for field in fields])
        twist = lateral_loads.T @ torsion.warping - turned
        error = potentials.error(loads + coupling * lateral_loads, bending + coupling * lateral)
    moment_x, moment_y = -(gradients @ torsion.products + coupling * twist)
    return Shear(coupling, gradients, bending, lateral, np.array([moment_y, -moment_x]), flexibility, twist, error)


def monosymmetry(moments: RegionMoments, centre: Floats, angle: float) -> Floats:
    """Monosymmetry constants (2,) about axes turned by `angle` (rad) from x and y.

    moments, centre : about the centroid, in x and y
    beta_u = integral(v (u^2 + v^2))/I_u - 2 v_s with I_u the second moment about u, and beta_v likewise;
    Trahair, Flexural-Torsional Buckling of Structures (1993), from memory.
    """
    turn = _turn(angle)
    along_u, along_v = np.diag(turn @ moments.second @ turn.T)
    third_u, third_v = turn @ moments.third
    centre_u, centre_v = turn @ centre
    return np.array([third_v / along_v - 2.0 * centre_v, third_u / along_u - 2.0 * centre_u])


def shear_forces(
    shape: ShapeGradient,
    potentials: Potentials,
    moments: RegionMoments,
    torsion: Torsion,
    shear: Shear,
    changes: MomentForces,
    axes: Iterable[Axes],
) -> dict[str, Floats]:
    """Change of shear centre, shear areas and monosymmetry per movement of the boundary nodes (k, 2).

    changes : of the moments; axes : those wanted for monosymmetry
    The shear centre is that in the section's coordinates; monosymmetry takes it from the centroid, which moves too.
    The moment of a shear stress about the centroid and its strain energy are stationary in their potentials.
    """
    x, y, area = potentials.x, potentials.y, moments.area
    # The centroid moves by first/area, and the third moments about it with it.
    first, second, third = changes
    with_centroid = 2.0 * moments.second + np.trace(moments.second) * np.eye(2)
    third = third - np.einsum("ij,jkd->ikd", with_centroid, first) / area

    tau = stress(potentials, torsion)
    slope, warping = potentials.gradient(torsion.warping), potentials.value(torsion.warping)
    joint = shear.gradients @ torsion.products + shear.coupling * shear.twist
    moment, flexibility = [], []
    for i, rates in enumerate(shear.gradients):
        rate = rates[0] * x + rates[1] * y
        value, incline = potentials.value(shear.bending[:, i]), potentials.gradient(shear.bending[:, i])
        of_products = shape.of(
            rate * warping - np.sum(tau * incline, axis=0),
            [(slope, -incline), (incline, -tau)],
            rates[:, None, None] * warping + rotation_slopes(incline),
        )
        of_energy = shape.of(
            2.0 * rate * value - np.sum(incline**2, axis=0),
            [(incline, -2.0 * incline)],
            2.0 * rates[:, None, None] * value,
        )
        if shear.lateral is not None:
            lateral_slope = potentials.gradient(shear.lateral[:, i])
            residue = lateral_slope - _contraction(x, y, rates)
            # The field d is taken about the centroid, which moves.
            shift = (rates[1] * first[0] - rates[0] * first[1]) / area
            of_twist = shape.of(
                -np.sum(residue * tau, axis=0),
                [(lateral_slope, -tau), (slope, -residue)],
                _contraction_slopes(x, y, rates, tau) + rotation_slopes(residue),
            )
            of_residue = shape.of(
                np.sum(residue**2, axis=0),
                [(lateral_slope, 2.0 * residue)],
                -2.0 * _contraction_slopes(x, y, rates, residue),
            )
            of_products = of_products + shear.coupling * (of_twist + torsion.torsion_constant * shift)
            of_energy = of_energy + shear.coupling**2 * (of_residue + 2.0 * shear.twist[i] * shift)
        moment.append(-of_products + np.einsum("a,abkd,b->kd", rates, second, joint))
        flexibility.append(of_energy - 2.0 * np.einsum("a,abkd,b->kd", rates, second, shear.flexibility[i]))

    centre = np.stack([moment[1], -moment[0]])
    found = {
        "shear_centre_x": centre[0],
        "shear_centre_y": centre[1],
        "shear_area_x": -(shear.areas[0] ** 2) * flexibility[0],
        "shear_area_y": -(shear.areas[1] ** 2) * flexibility[1],
    }
    for names, angle, principal in axes:
        turn = _turn(angle)
        along = turn @ moments.second @ turn.T
        of_along = np.einsum("ai,ijkd,bj->abkd", turn, second, turn)
        third_u, third_v = turn @ moments.third
        centre_u, centre_v = turn @ shear.centre
        of_third_u, of_third_v = np.einsum("ai,ikd->akd", turn, third)
        of_centre_u, of_centre_v = np.einsum("ai,ikd->akd", turn, centre - first / area)
        if principal:
            rotation = of_along[0, 1] / (along[0, 0] - along[1, 1])
            of_third_u, of_third_v = of_third_u + third_v * rotation, of_third_v - third_u * rotation
            of_centre_u, of_centre_v = of_centre_u + centre_v * rotation, of_centre_v - centre_u * rotation
        found[f"monosymmetry_{names[0]}"] = (
            of_third_v / along[1, 1] - third_v / along[1, 1] ** 2 * of_along[1, 1] - 2.0 * of_centre_v
        )
        found[f"monosymmetry_{names[1]}"] = (
            of_third_u / along[0, 0] - third_u / along[0, 0] ** 2 * of_along[0, 0] - 2.0 * of_centre_u
        )
    return found
