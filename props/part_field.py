"""The field quantities of one connected part, on triangles refined until the error is small enough.

Knows how to choose and refine the mesh, and the error reached; the fields are in `torsion` and `shear`,
putting parts together is left to `field`.
"""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from typing import NamedTuple

import numpy as np

from .boundary_sensitivity import BoundarySensitivity
from .integrals import centroidal, moments
from .mesh import Mesh, mesh_region, refine
from .potential import Floats, Potentials
from .section import Part, Points, Section, signed_area
from .shape_gradient import ShapeGradient
from .shear import Axes, Shear, monosymmetry, shear_forces, solve_shear
from .thinned import ThinnedOutline, thin
from .torsion import RegionMoments, Torsion, moment_forces, solve_torsion, torsion_forces

# Power of length of each quantity.
DIMENSIONS: dict[str, int] = {
    "torsion_constant": 4,
    "warping_constant": 6,
    "shear_centre_x": 1,
    "shear_centre_y": 1,
    "shear_area_x": 2,
    "shear_area_y": 2,
    "monosymmetry_x": 1,
    "monosymmetry_y": 1,
    "monosymmetry_major": 1,
    "monosymmetry_minor": 1,
}


# The share of warping in the torsional stiffness of a member of length L is pi^2 E Cw/(G J L^2), some 26 Cw/(J L^2).
# A warping constant so small that this share is below 1 % in a member as short as the section is deep need not
# have a small relative error: its error is then measured against that floor.
WARPING_FLOOR = 0.01 / 26.0

# Unknowns beyond which refining stops and the error reached is reported instead.
_MOST_UNKNOWNS = 150_000

# Share of the error whose triangles are refined at a time (Doerfler, "A convergent adaptive algorithm for
# Poisson's equation", 1996).
_BULK = 0.8

# Shares of the tolerance that thinning the outline may take, tried until no more than this many vertices are left.
SHARES_OF_THINNING = (0.1, 0.5, 2.0, 8.0, 32.0, 128.0)
_MANY_VERTICES = 1000

# The share where the first ones proved too coarse. Not nothing: vertices a nanometre apart defeat the mesher.
_FINEST_SHARE = 1e-3

# The second-order effect of roughness is known for a sine wave; other shapes may have twice that. Its first-order
# effect is put right with densities known between the nodes to a quarter or better.
_ROUGHNESS_SAFETY = 2.0
_DENSITY_ERROR = 0.25

# Re-entrant corners sharper than this carry stresses that grow without bound: start there with small triangles.
_RE_ENTRANT = np.radians(200.0)
_CORNER_HALVINGS = 4


class PartField(NamedTuple):
    """One part's field quantities in section coordinates, mm.

    bounds : guaranteed, of the torsion constant; depth : the part's larger overall size
    second : (2, 2), mm^4, integral of (x, y) outer (x, y) about the part's centroid
    second_force : (2, 2, k, 2), its change per mm each boundary point moves
    """

    values: dict[str, float]
    error: dict[str, float]
    bounds: tuple[float, float]
    sensitivity: BoundarySensitivity
    second: Floats
    second_force: Floats
    depth: float
    unknowns: int


def thinned_outline(loops: Sequence[Points], tolerance: float, shares: Sequence[float]) -> ThinnedOutline:
    """The outline with the vertices left out that torsion and shear hardly feel.

    A wall of thickness t whose faces both lie d off has a torsion constant 6 d/t off. A tenth of the tolerance is
    given up for it, half where that still leaves many vertices, and more where the outline is so rough and so
    long that only this keeps the mesh in bounds; the error of the result then says so.

    shares : of the tolerance, ascending, tried until few enough vertices are left
    """
    from shapely import Polygon

    thickness = mean_thickness(loops)
    best = ThinnedOutline.full(loops)
    for share in shares:
        outline = thin(loops, share * tolerance * thickness / (6.0 * _ROUGHNESS_SAFETY))
        shell, *holes = outline.kept_loops
        if Polygon(shell, holes).is_valid:
            best = outline
        if sum(len(kept) for kept in best.kept) <= _MANY_VERTICES:
            break
    return best


def mean_thickness(loops: Sequence[Points]) -> float:
    """Twice the area over the perimeter: the thickness of a wall that is long against it."""
    perimeter = sum(float(np.hypot(*(loop - np.roll(loop, 1, axis=0)).T).sum()) for loop in loops)
    return 2.0 * sum(signed_area(loop) for loop in loops) / perimeter


def start_mesh(loops: Sequence[Points]) -> Mesh:
    """Triangles some two mean thicknesses long, small at re-entrant corners."""
    thickness = mean_thickness(loops)
    mesh = mesh_region(loops, 2.0 * thickness)
    corners = []
    for loop in loops:
        before, after = loop - np.roll(loop, 1, axis=0), np.roll(loop, -1, axis=0) - loop
        turn = np.arctan2(before[:, 0] * after[:, 1] - before[:, 1] * after[:, 0], np.sum(before * after, axis=1))
        corners.append(turn < np.pi - _RE_ENTRANT)
    # The mesher numbers the outline's vertices first, in the order given.
    sharp = np.flatnonzero(np.concatenate(corners))
    while True:
        at_corner = np.isin(mesh.triangles, sharp).any(axis=1)
        spread = mesh.points[mesh.triangles]
        longest = np.max(np.hypot(*(spread - np.roll(spread, 1, axis=1)).transpose(2, 0, 1)), axis=1)
        coarse = at_corner & (longest > thickness / 2.0**_CORNER_HALVINGS)
        if not coarse.any():
            return mesh
        mesh = refine(mesh, coarse)


class _Solution(NamedTuple):
    potentials: Potentials
    moments: RegionMoments
    torsion: Torsion
    shear: Shear


def _scales(solution: _Solution, depth: float) -> dict[str, float]:
    """What errors are measured against. The shear centre's enters monosymmetry twice, both coordinates together."""
    torsion, shear = solution.torsion, solution.shear
    least_warping = WARPING_FLOOR * torsion.torsion_constant * depth**2
    return {
        "torsion_constant": torsion.torsion_constant,
        "warping_constant": max(torsion.warping_constant, least_warping),
        "shear_centre_x": depth / math.sqrt(8.0),
        "shear_centre_y": depth / math.sqrt(8.0),
        "shear_area_x": shear.areas[0],
        "shear_area_y": shear.areas[1],
    }


def _errors(solution: _Solution) -> dict[str, float]:
    torsion, shear = solution.torsion, solution.shear
    centre, areas = shear.centre_errors(torsion), shear.area_errors
    return {
        "torsion_constant": 0.5 * float(torsion.gap.sum()),
        "warping_constant": torsion.warping_constant_error,
        "shear_centre_x": centre[0],
        "shear_centre_y": centre[1],
        "shear_area_x": areas[0],
        "shear_area_y": areas[1],
    }


def _share_of_error(solution: _Solution, relative: Mapping[str, float], tolerance: float) -> Floats:
    """Each triangle's share (m,) of the errors that are not yet within the tolerance."""
    torsion, shear = solution.torsion, solution.shear

    def of_product(one: Floats, other: Floats) -> Floats:
        # A product of two norms is least bounded by the sum of squares when both are brought to one size.
        return 0.5 * (one / one.sum() + other / other.sum())

    shares = {
        "torsion_constant": torsion.gap / torsion.gap.sum(),
        "warping_constant": of_product(torsion.gap, torsion.adjoint_error),
        "shear_centre_x": of_product(torsion.gap, shear.error[1]),
        "shear_centre_y": of_product(torsion.gap, shear.error[0]),
        "shear_area_x": shear.error[0] / shear.error[0].sum(),
        "shear_area_y": shear.error[1] / shear.error[1].sum(),
    }
    return np.sum([share * relative[name] for name, share in shares.items() if relative[name] > tolerance], axis=0)


def solve_part(part: Part, poisson_ratio: float, tolerance: float, axes: Sequence[Axes]) -> PartField:
    """Solve one part until every estimated relative error is within the tolerance, or the mesh grows too large.

    axes : of bending, for monosymmetry
    Raises OutlineError if the part cannot be meshed.
    """
    unit = float(np.sqrt(sum(signed_area(loop) for loop in part.loops)))
    loops = [loop / unit for loop in part.loops]
    outline = thinned_outline(loops, tolerance, SHARES_OF_THINNING)
    found, within = _solve(outline, unit, poisson_ratio, tolerance, axes)
    if not within and not outline.is_full and sum(len(loop) for loop in loops) <= _MANY_VERTICES:
        found, _ = _solve(thinned_outline(loops, tolerance, (_FINEST_SHARE,)), unit, poisson_ratio, tolerance, axes)
    return found


def _solve(
    outline: ThinnedOutline, unit: float, poisson_ratio: float, tolerance: float, axes: Sequence[Axes]
) -> tuple[PartField, bool]:
    """The part's field, and whether its error, that of the vertices left out included, is within the tolerance."""
    loops = outline.kept_loops
    edges = centroidal(Section((Part(loops[0], loops[1:]),)))
    centroid = edges.origin
    depth = float(np.max(np.ptp(loops[0], axis=0)))
    mesh = start_mesh([loop - centroid for loop in loops])
    loop_of_edge = np.repeat(np.arange(len(loops)), [len(loop) for loop in loops])
    hole_areas = np.array([-signed_area(loop) for loop in loops[1:]])
    aim = tolerance if outline.is_full else 0.5 * tolerance
    while True:
        potentials = Potentials(mesh)
        region = RegionMoments.of(potentials)
        torsion = solve_torsion(potentials, region, loop_of_edge, hole_areas)
        solution = _Solution(potentials, region, torsion, solve_shear(potentials, region, torsion, poisson_ratio))
        errors, scales = _errors(solution), _scales(solution, depth)
        relative = {name: errors[name] / scales[name] for name in errors}
        if max(relative.values()) <= aim or potentials.unknowns > _MOST_UNKNOWNS:
            break
        share = _share_of_error(solution, relative, aim)
        order = np.argsort(share)[::-1]
        enough = int(np.searchsorted(np.cumsum(share[order]), _BULK * share.sum())) + 1
        chosen = np.zeros(len(share), dtype=bool)
        chosen[order[:enough]] = True
        mesh = refine(mesh, chosen)
    found = _in_section(solution, errors, outline, centroid, unit, depth, axes)
    # Monosymmetry, a length, is measured against the depth.
    within = all(
        error <= tolerance * scales.get(name, depth) * unit ** DIMENSIONS[name] for name, error in found.error.items()
    )
    return found, within


def _in_section(
    solution: _Solution,
    errors: Mapping[str, float],
    outline: ThinnedOutline,
    centroid: Floats,
    unit: float,
    depth: float,
    axes: Sequence[Axes],
) -> PartField:
    """Values in mm and section coordinates, put right to first order for the vertices that were left out."""
    potentials, region, torsion, shear = solution
    shape = ShapeGradient(potentials)
    changes = moment_forces(shape, potentials)
    force = torsion_forces(shape, potentials, torsion, region) | shear_forces(
        shape, potentials, region, torsion, shear, changes, axes
    )
    density = {name: np.sum(vectors * shape.normals, axis=1) / shape.reach for name, vectors in force.items()}
    centre = centroid + shear.centre
    values = {
        "torsion_constant": torsion.torsion_constant,
        "warping_constant": torsion.warping_constant,
        "shear_centre_x": centre[0],
        "shear_centre_y": centre[1],
        "shear_area_x": shear.areas[0],
        "shear_area_y": shear.areas[1],
    }
    error = dict(errors)
    of_centre = 2.0 * float(np.hypot(errors["shear_centre_x"], errors["shear_centre_y"]))
    for pair in axes:
        for name, value in zip(pair.names, monosymmetry(region, shear.centre, pair.angle), strict=True):
            values[f"monosymmetry_{name}"], error[f"monosymmetry_{name}"] = value, of_centre
    if not outline.is_full:
        left_out, rough = _left_out(shape, potentials.mesh, outline, centroid)
        for name in values:
            values[name] += float(density[name] @ left_out)
            error[name] += _ROUGHNESS_SAFETY * float(np.abs(density[name]) @ rough)
            error[name] += _DENSITY_ERROR * float(np.linalg.norm(density[name] * left_out))
    half_gap, middle = error["torsion_constant"], values["torsion_constant"]
    points = potentials.mesh.points[shape.nodes] + centroid
    before, after, fraction = outline.follow(points, shape.side_edge)[:3]
    order = np.argsort(before + fraction, kind="stable")
    sensitivity = BoundarySensitivity(
        points[order] * unit,
        shape.normals[order],
        shape.weights[order] * unit,
        before[order],
        after[order],
        fraction[order],
        tuple(len(loop) for loop in outline.loops),
        {name: vectors[order] * unit ** (DIMENSIONS[name] - 1) for name, vectors in force.items()},
        shape.reach[order] * unit,
    )
    return PartField(
        {name: float(value) * unit ** DIMENSIONS[name] for name, value in values.items()},
        {name: float(value) * unit ** DIMENSIONS[name] for name, value in error.items()},
        ((middle - half_gap) * unit**4, (middle + half_gap) * unit**4),
        sensitivity,
        _second_moments(outline) * unit**4,
        changes.second[:, :, order] * unit**3,
        depth * unit,
        potentials.unknowns,
    )


def _second_moments(outline: ThinnedOutline) -> Floats:
    shell, *holes = outline.loops
    full = moments(centroidal(Section((Part(shell, tuple(holes)),))))
    return np.array([[full.second_y, full.product], [full.product, full.second_x]])


def _left_out(shape: ShapeGradient, mesh: Mesh, outline: ThinnedOutline, centroid: Floats) -> tuple[Floats, Floats]:
    """Area between the meshed and the full outline that falls to each boundary node (k,), and the same of roughness."""
    places, weights = np.polynomial.legendre.leggauss(6)
    way, weights = 0.5 * (places + 1.0), 0.5 * weights
    start, end = mesh.points[mesh.sides[:, 0]], mesh.points[mesh.sides[:, 1]]
    length = np.hypot(*(end - start).T)
    points = start[:, None] + way[:, None] * (end - start)[:, None]
    full = outline.follow(points.reshape(-1, 2) + centroid, shape.side_edge.repeat(len(way)))[3].reshape(points.shape)
    outward = np.stack([(end - start)[:, 1], -(end - start)[:, 0]], axis=1)
    areas = np.einsum("kqd,kd->kq", full - centroid - points, outward) * weights
    roughness = (outline.roughness[shape.side_edge] * length)[:, None] * weights
    left_out, rough = np.zeros(len(shape.nodes)), np.zeros(len(shape.nodes))
    for found, share in ((left_out, areas), (rough, roughness)):
        np.add.at(found, shape.side_ends[:, 0], share @ (1.0 - way))
        np.add.at(found, shape.side_ends[:, 1], share @ way)
    return left_out, rough
