"""Torsion constant, warping constant, shear centre, shear areas and monosymmetry of any section.

Knows parts, tolerances and units (mm, rad); every connected part is solved by `part_field`. Materials are
not weighted: all parts count as one and the same.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import NamedTuple

import numpy as np

from .axes import ROUNDING, principal_axes
from .boundary_sensitivity import BoundarySensitivity, chain
from .errors import OutlineError, UsageError
from .integrals import centroidal, moments
from .part_field import DIMENSIONS, WARPING_FLOOR, PartField, solve_part
from .section import Part, Points, Section, signed_area
from .shear import Axes

# Length of outline squared over area of a part: a wall 5000 times as long as thick. Triangles as small as the wall is
# thick then take half a minute and more than a gigabyte; both grow in proportion.
_MOST_SLENDER = 2e4

# A figure solved no better than the loosest tolerance that can be asked for is none.
_LOOSEST = 0.05


@dataclass(frozen=True)
class FieldProperties:
    """Torsion and shear properties of a section, mm, with their numerical error.

    values : by name; what the section does not have is missing here and explained in `missing`
    error : estimated largest numerical error of each value, same unit
    relative_error : the same as a share of the value; of the larger overall size for shear centre and monosymmetry;
        for a warping constant next to none, of the least one that matters in a member as short as it is deep
    torsion_bounds : lower and upper bound of the torsion constant, guaranteed where no vertex of the outline was left
        out for the mesh, else widened by the estimated effect of that
    sensitivity : effect of a moving boundary, first order
    unknowns : of the finest solution, all parts together
    tolerance : asked for; within_tolerance says whether every relative error reached it
    assumptions : sentences on how separate parts were put together, and other choices
    missing : quantity -> why there is no value
    """

    values: Mapping[str, float]
    error: Mapping[str, float]
    relative_error: Mapping[str, float]
    torsion_bounds: tuple[float, float]
    sensitivity: BoundarySensitivity
    unknowns: int
    poisson_ratio: float
    tolerance: float
    assumptions: tuple[str, ...]
    missing: Mapping[str, str]

    @property
    def within_tolerance(self) -> bool:
        """Whether every estimated relative error is within the tolerance."""
        return all(error <= self.tolerance for error in self.relative_error.values())


def field_properties(
    section: Section, *, poisson_ratio: float = 0.0, tolerance: float = 1e-3, connected: bool = False
) -> FieldProperties:
    """Torsion and shear properties of a section of any outline.

    poisson_ratio : of the material, 0 to 0.5; it acts on shear centre and shear areas (and monosymmetry)
    tolerance : relative error to reach, 1e-6 to 0.05
    connected : for several parts, that diaphragms hold them to one shape while they slide freely along one
        another; without it every part twists on its own and there is no common shear centre

    Returns values named `torsion_constant` (mm^4), `warping_constant` (mm^6, about the centre of twist),
    `shear_centre_x`, `shear_centre_y` (section coordinates), `shear_area_x`, `shear_area_y` (mm^2, for forces
    along x and y), `monosymmetry_x`, `_y` and, about principal axes, `_major`, `_minor` (mm, named after the
    axis of bending).
    Raises UsageError for a ratio or tolerance out of range, OutlineError for outlines that cross or cannot be meshed,
    for walls too thin for that, and where an error of more than 5 % is left.
    """
    if not 0.0 <= poisson_ratio <= 0.5:
        raise UsageError("bad-poisson-ratio", "The Poisson ratio is not between 0 and 0.5.", "Give e.g. 0.3 for steel.")
    if not 1e-6 <= tolerance <= _LOOSEST:
        raise UsageError(
            "bad-tolerance", "The tolerance is not between 0.000001 and 0.05.", "Give e.g. 0.001 for 0.1 %."
        )
    overall = moments(centroidal(section))
    angle = principal_axes(overall.second_x, overall.second_y, overall.product).angle
    isotropic = np.hypot(0.5 * (overall.second_x - overall.second_y), overall.product) <= ROUNDING * (
        overall.second_x + overall.second_y
    )
    axes = (Axes(("x", "y"), 0.0, False), Axes(("major", "minor"), angle, not isotropic))
    for part in section.parts:
        _check(part)
        _require_solvable(part)
    parts = [solve_part(part, poisson_ratio, tolerance, axes) for part in section.parts]
    if len(parts) == 1:
        whole = _Joined(dict(parts[0].values), dict(parts[0].error), [parts[0].sensitivity.force], [], {})
    else:
        whole = _side_by_side(parts, connected)
    moduli = {part.material.elastic_modulus for part in section.parts if part.material is not None}
    if len(moduli) > 1:
        whole.assumptions.append("Torsion and shear count all parts as one material.")
    depth = max(part.depth for part in parts)
    scales = {name: abs(value) if DIMENSIONS[name] > 1 else depth for name, value in whole.values.items()}
    least_warping = WARPING_FLOOR * whole.values["torsion_constant"] * depth**2
    scales["warping_constant"] = max(whole.values["warping_constant"], least_warping)
    relative = {name: whole.error[name] / scales[name] for name in whole.values}
    _require_solved(relative, sum(part.unknowns for part in parts))
    force = {name: np.concatenate([of_part[name] for of_part in whole.force]) for name in whole.values}
    return FieldProperties(
        whole.values,
        whole.error,
        relative,
        (sum(part.bounds[0] for part in parts), sum(part.bounds[1] for part in parts)),
        chain([part.sensitivity for part in parts], force),
        sum(part.unknowns for part in parts),
        poisson_ratio,
        tolerance,
        tuple(whole.assumptions),
        whole.missing,
    )


def _check(part: Part) -> None:
    from shapely import LinearRing, Polygon
    from shapely.validation import explain_validity

    polygon = Polygon(part.shell, part.holes)
    rings = [LinearRing(loop) for loop in part.loops]
    touching = any(ring.intersects(other) for i, ring in enumerate(rings) for other in rings[i + 1 :])
    if touching or not polygon.is_valid:
        where = "a hole touches another outline" if touching else explain_validity(polygon)
        raise OutlineError(
            "outline-crosses",
            f"An outline crosses or touches itself or another one of the same part ({where}).",
            "Correct the outline there.",
        )


def _require_solvable(part: Part) -> None:
    """Raise OutlineError for walls so thin that triangles as small would take minutes and fill the memory."""
    length = sum(float(np.hypot(*(np.roll(loop, -1, axis=0) - loop).T).sum()) for loop in part.loops)
    area = sum(signed_area(loop) for loop in part.loops)
    if length**2 > _MOST_SLENDER * area:
        raise OutlineError(
            "too-thin-for-torsion",
            f"The walls are {2.0 * area / length:.2g} mm thick on average, too thin to solve torsion and shear along "
            f"{length:.4g} mm of outline.",
            "Check the unit and the thickness, or leave torsion out.",
        )


def _require_solved(relative_error: Mapping[str, float], unknowns: int) -> None:
    """Raise OutlineError where the finest solution that is tried leaves a figure that says little."""
    worst = max(relative_error, key=lambda name: relative_error[name])
    if relative_error[worst] > _LOOSEST:
        raise OutlineError(
            "torsion-not-solved",
            f"With {unknowns} unknowns the {worst.replace('_', ' ')} is still up to "
            f"{100 * relative_error[worst]:.2g} % off.",
            "Simplify the outline where it is rough, or leave torsion out.",
        )


class _Joined(NamedTuple):
    """Values and errors of a whole section, forces per part, assumptions made, quantities that do not exist."""

    values: dict[str, float]
    error: dict[str, float]
    force: list[Mapping[str, Points]]
    assumptions: list[str]
    missing: dict[str, str]


_SUMMED = ("torsion_constant", "warping_constant", "shear_area_x", "shear_area_y")


def _side_by_side(parts: Sequence[PartField], connected: bool) -> _Joined:
    """Separate parts put together under the assumptions that are listed."""
    values = {name: sum(part.values[name] for part in parts) for name in _SUMMED}
    error = {name: sum(part.error[name] for part in parts) for name in _SUMMED}
    force: list[Mapping[str, Points]] = [{name: part.sensitivity.force[name] for name in _SUMMED} for part in parts]
    missing = {
        f"monosymmetry_{axis}": "Separate parts have no monosymmetry constant." for axis in ("x", "y", "major", "minor")
    }
    assumptions = [f"The {len(parts)} parts are not joined: torsion constants and shear areas are sums over the parts."]
    if not connected:
        reason = "Separate parts have no common shear centre unless they are stated to be connected."
        missing |= {"shear_centre_x": reason, "shear_centre_y": reason}
        assumptions.append("Every part warps about its own centre of twist: the warping constant is the sum.")
        return _Joined(values, error, force, assumptions, missing)

    assumptions.append(
        "The parts are held to one shape by diaphragms and slide freely along one another: the shear centre is "
        "where their bending stiffnesses balance, and the warping constant includes their bending about it."
    )
    # A unit twist about the common centre moves a part's shear centre by its arm turned through a right angle.
    turn = np.array([[0.0, -1.0], [1.0, 0.0]])
    own = np.array([[part.values["shear_centre_x"], part.values["shear_centre_y"]] for part in parts])
    own_error = np.array([[part.error["shear_centre_x"], part.error["shear_centre_y"]] for part in parts])
    stiffness = np.array([part.second for part in parts])
    shares = turn.T @ np.linalg.inv(stiffness.sum(axis=0)) @ stiffness @ turn
    common = np.einsum("pij,pj->i", shares, own)
    movements = (own - common) @ turn.T
    slopes = 2.0 * np.einsum("pi,pij,jk->pk", movements, stiffness, turn)
    values |= {
        "shear_centre_x": float(common[0]),
        "shear_centre_y": float(common[1]),
        "warping_constant": values["warping_constant"]
        + float(np.einsum("pi,pij,pj->", movements, stiffness, movements)),
    }
    centre_error = np.einsum("pij,pj->i", np.abs(shares), own_error)
    error |= {
        "shear_centre_x": float(centre_error[0]),
        "shear_centre_y": float(centre_error[1]),
        "warping_constant": error["warping_constant"] + float(np.sum(np.abs(slopes) * own_error)),
    }
    flexibility = turn.T @ np.linalg.inv(stiffness.sum(axis=0))
    for i, part in enumerate(parts):
        of_own = np.stack([part.sensitivity.force["shear_centre_x"], part.sensitivity.force["shear_centre_y"]])
        of_balance = np.einsum("ij,jlkd,l->ikd", flexibility, part.second_force, movements[i])
        centre = of_balance + np.einsum("ij,jkd->ikd", shares[i], of_own)
        of_bending = np.einsum("i,ijkd,j->kd", movements[i], part.second_force, movements[i])
        force[i] = {
            **force[i],
            "shear_centre_x": centre[0],
            "shear_centre_y": centre[1],
            "warping_constant": force[i]["warping_constant"] + of_bending + np.einsum("j,jkd->kd", slopes[i], of_own),
        }
    return _Joined(values, error, force, assumptions, missing)
