"""Where an edge is, to a small part of a pixel, along given normals in linear light.

Knows blurred steps between two plateaus of their own. Knows nothing of what the edge bounds.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from .light import Light

Array = NDArray[np.float64]


@dataclass(frozen=True)
class EdgePoints:
    """Edge points found along normals.

    points : (n, 2) px, on the half level between the two sides' plateaus
    normals : (n, 2) unit, from the inner to the outer side
    inner, outer : (n,) plateaus, linear light
    residual : (n,) rms of the profile about a blurred step, linear light
    located : (n,) the profile holds one step that the fit explains
    """

    points: Array
    normals: Array
    inner: Array
    outer: Array
    residual: Array
    located: NDArray[np.bool_]


def normal_profiles(light: Light, points: Array, normals: Array, offsets: Array) -> Array:
    """(n, m) linear light at (m,) offsets in px along the normals of (n, 2) points."""
    return light.at(points[:, None, :] + offsets[None, :, None] * normals[:, None, :])


def approach(
    light: Light, points: Array, normals: Array, reach: float, plateau: float
) -> tuple[Array, NDArray[np.bool_]]:
    """A first correction of rough edge points: the crossing of the local half level nearest to each.

    reach : px to either side in which the edge may lie
    plateau : px beyond the edge over which a side's own level is read
    Returns (n,) offsets along the normals and (n,) whether a crossing was found.
    """
    far = reach + plateau
    offsets = np.arange(-far, far + 0.5, 0.5)
    profiles = normal_profiles(light, points, normals, offsets)
    shift = np.zeros(len(points))
    found = np.zeros(len(points), bool)
    rows = np.arange(len(points))
    # Levels read beside a wrong place are mixed; a second pass reads them beside the first crossing.
    for near in (0.3, 0.25):
        inside = (offsets < shift[:, None] - near * plateau) & (offsets > shift[:, None] - plateau)
        outside = (offsets > shift[:, None] + near * plateau) & (offsets < shift[:, None] + plateau)
        inner = _row_median(profiles, inside)
        outer = _row_median(profiles, outside)
        level = 0.5 * (inner + outer)
        sign = np.sign(outer - inner)[:, None]
        above = sign * (profiles - level[:, None])
        crossing = (above[:, :-1] <= 0) & (above[:, 1:] > 0)
        place = offsets[:-1] + 0.5 * above[:, :-1] / np.minimum(above[:, :-1] - above[:, 1:], -1e-12)
        distance = np.where(crossing & (np.abs(place) <= reach), np.abs(place - shift[:, None]), np.inf)
        best = distance.argmin(axis=1)
        found = np.isfinite(distance[rows, best])
        shift = np.where(found, place[rows, best], shift)
    return shift, found


def _row_median(values: Array, chosen: NDArray[np.bool_]) -> Array:
    return np.nanmedian(np.where(chosen, values, np.nan), axis=1)


def fit_step(
    profiles: Array, offsets: Array, blur: float, wall: Array | None = None, used: NDArray[np.bool_] | None = None
) -> tuple[Array, Array, Array, Array]:
    """Least-squares blurred steps through (n, m) profiles at (m,) offsets.

    blur : standard deviation of the line spread, px
    wall : (n,) px between the step and a second one beyond it (the foot of a wall that the camera sees), 0 for none
    used : (n, m) samples that count; all without it
    Returns (n,) position of the first step, level before it, level behind it and rms residual.

    Gauss-Newton on a + b Phi((t - x) / s) + c Phi((t - x - w) / s) with the levels projected out (variable
    projection, Golub and Pereyra 1973, in Kaufman's form). For any symmetric spread the position is unbiased in
    a window symmetric about it, whatever the spread's true shape. Where a wall has the face's own tone the
    second step alone tells the position, through the known width.
    """
    from scipy.special import ndtr

    n = len(profiles)
    x, before, after = np.zeros(n), np.zeros(n), np.zeros(n)
    residual = profiles
    half = np.abs(offsets).max()
    weight = np.ones_like(profiles) if used is None else used.astype(float)
    count = weight.sum(axis=1)
    walled = wall is not None and bool(np.any(wall > 0))
    distance = np.zeros(n) if wall is None else wall

    def mean_free(values: Array) -> Array:
        values = values * weight
        return values - weight * (values.sum(axis=1) / count)[:, None]

    def step_at(place: Array) -> tuple[Array, Array]:
        z = (offsets - place[:, None]) / blur
        return ndtr(z), np.exp(-0.5 * z * z) / (np.sqrt(2 * np.pi) * blur)

    y = mean_free(profiles)
    for _ in range(8):
        phi, slope = step_at(x)
        basis = [mean_free(phi)]
        slopes = [slope]
        if walled:
            phi2, slope2 = step_at(x + distance)
            # Without a wall the second step is the first; it must not share its height.
            basis.append(np.where((distance > 0)[:, None], mean_free(phi2), 0.0))
            slopes.append(slope2)
        heights, residual = _heights(basis, y)
        tangent = mean_free(-np.sum([h[:, None] * s for h, s in zip(heights, slopes, strict=True)], axis=0))
        tangent = _heights(basis, tangent)[1]
        curvature = np.einsum("ij,ij->i", tangent, tangent)
        move = np.einsum("ij,ij->i", tangent, residual) / np.maximum(curvature, 1e-12)
        x = np.clip(x + np.clip(move, -blur, blur), -half, half)
        if np.abs(move).max(initial=0.0) < 1e-4:
            break
    phi, _ = step_at(x)
    mean_phi = (phi * weight).sum(axis=1) / count
    before = (profiles * weight).sum(axis=1) / count - heights[0] * mean_phi
    if walled:
        before -= heights[1] * (step_at(x + distance)[0] * weight).sum(axis=1) / count
    after = before + heights[0]
    return x, before, after, np.sqrt(np.einsum("ij,ij->i", residual, residual) / count)


def search_walled_step(
    light: Light, points: Array, normals: Array, blur: float, wall: Array, reach: float
) -> tuple[Array, NDArray[np.bool_]]:
    """A first correction of rough edge points beyond which a wall of known width is seen.

    Every place half a pixel apart within `reach` is judged by how much of the profile its two steps explain, at the
    edge and at the wall's foot; the course along the points that joins the best places without leaping is taken
    (dynamic programming; Amini, Weymouth, Jain 1990). The points run along the outline.
    Returns (n,) offsets along the normals and (n,) whether the place explains enough.
    """
    half = max(3.0, 3.0 * blur + 0.5)
    furthest = wall.max(initial=0.0)
    offsets = np.arange(-half - reach, half + reach + 2.0 * furthest + 0.25, 0.5)
    profiles = normal_profiles(light, points, normals, offsets)
    places = np.arange(-reach, reach + 0.25, 0.5)
    quality = np.empty((len(points), len(places)))
    for column, place in enumerate(places):
        near = (offsets[None, :] >= place - half) & (offsets[None, :] <= place + half + wall[:, None])
        explained, left, foot = _two_step_energy(profiles, offsets, blur, place, wall, near)
        # The steps' own height counts too: noise on a flat stretch is explained by chance, but never much of it.
        floor = 0.01 * np.maximum(explained, left).max() + 1e-6 * near.sum(axis=1)
        share = explained / (explained + left + floor)
        # An edge taken for the foot explains what is near, and leaves its own foot a wall further out.
        beyond = (offsets[None, :] >= place - half) & (offsets[None, :] <= place + half + 2.0 * wall[:, None])
        far, far_left, _ = _two_step_energy(profiles, offsets, blur, place, wall, beyond)
        quality[:, column] = share * foot * far / (far + far_left + floor)
    course = _best_course(quality, np.linalg.norm(np.diff(points, axis=0), axis=1))
    return places[course], quality[np.arange(len(points)), course] > LEAST_QUALITY


def _best_course(quality: Array, steps: Array) -> NDArray[np.intp]:
    """(n,) column of (n, m) qualities that a course along the rows takes.

    steps : (n - 1,) px from row to row

    Maximises the sum of the logarithms less a price: a move by six columns over a pixel and a half of the way
    halves the worth, which a corner of a rough outline can pay and noise cannot pay at every point (stated assumption).
    """
    worth = np.log(quality + 1e-3)
    columns = np.arange(worth.shape[1])
    moved = np.abs(columns[:, None] - columns[None, :]) * (np.log(2.0) / 6.0)
    came = np.zeros(worth.shape, np.intp)
    best = worth[0]
    for row in range(1, len(worth)):
        choice = best[None, :] - moved * (1.5 / max(float(steps[row - 1]), 1.5))
        came[row] = choice.argmax(axis=1)
        best = choice[columns, came[row]] + worth[row]
    course = np.empty(len(worth), np.intp)
    course[-1] = best.argmax()
    for row in range(len(worth) - 1, 0, -1):
        course[row - 1] = came[row, course[row]]
    return course


def _two_step_energy(
    profiles: Array, offsets: Array, blur: float, place: float, wall: Array, near: NDArray[np.bool_]
) -> tuple[Array, Array, Array]:
    """What two blurred steps make of the samples `near`: (n,) energy explained, energy left, and trust in the foot.

    A wall never has the ground's own tone (it stands in its own shade), so a place whose second step is a small part
    of both is the foot taken for the edge; less than LEAST_FOOT of both is trusted in proportion.
    """
    from scipy.special import ndtr

    weight = near.astype(float)
    count = weight.sum(axis=1)[:, None]

    def mean_free(values: Array) -> Array:
        values = values * weight
        return values - weight * (values.sum(axis=1, keepdims=True) / count)

    y = mean_free(profiles)
    first = mean_free(np.broadcast_to(ndtr((offsets - place) / blur), profiles.shape))
    second = np.where((wall > 0)[:, None], mean_free(ndtr((offsets - place - wall[:, None]) / blur)), 0.0)
    heights, residual = _heights([first, second], y)
    one, two = np.abs(heights)
    left = np.einsum("ij,ij->i", residual, residual)
    foot = np.minimum(1.0, two / np.maximum(one + two, 1e-12) / LEAST_FOOT)
    return np.einsum("ij,ij->i", y, y) - left, left, foot


# A step over the rms of what a blurred step leaves of the profile. A sharpened edge leaves a twentieth, a shadow's ramp
# as wide as the window an eighth (computed).
MIN_CLARITY = 10.0
# Least share of the foot's step in the two steps of a wall (stated assumption).
LEAST_FOOT = 0.3
# Least share of a profile that an edge and a wall's foot explain, nearby and with the surroundings, for them to be
# there: half of half (stated assumption).
LEAST_QUALITY = 0.25
# A wall's step beside the face's own is told apart only where the wall is wide; this share of the profile's
# energy keeps the two heights from cancelling each other where it is not.
_RIDGE = 1e-3


def _heights(basis: list[Array], y: Array) -> tuple[list[Array], Array]:
    """Least-squares heights of one or two (n, m) functions in (n, m) data, and the residual."""
    first = basis[0]
    aa = np.maximum(np.einsum("ij,ij->i", first, first), 1e-12)
    ay = np.einsum("ij,ij->i", first, y)
    if len(basis) == 1:
        height = ay / aa
        return [height], y - height[:, None] * first
    second = basis[1]
    bb, ab = np.einsum("ij,ij->i", second, second), np.einsum("ij,ij->i", first, second)
    by = np.einsum("ij,ij->i", second, y)
    ridge = _RIDGE * aa
    determinant = (aa + ridge) * (bb + ridge) - ab * ab
    one = (ay * (bb + ridge) - by * ab) / determinant
    two = (by * (aa + ridge) - ay * ab) / determinant
    return [one, two], y - one[:, None] * first - two[:, None] * second


def estimate_blur(profiles: Array, offsets: Array, positions: Array) -> float:
    """Standard deviation of the line spread in px from many (n, m) profiles with known positions.

    The profiles are normalised and aligned; the blur that fits the median edge best is taken.
    """
    inner = np.median(profiles[:, offsets < offsets.min() * 0.6], axis=1)
    outer = np.median(profiles[:, offsets > offsets.max() * 0.6], axis=1)
    contrast = outer - inner
    good = np.abs(contrast) > 0.5 * np.median(np.abs(contrast))
    y = ((profiles - inner[:, None]) / np.where(contrast == 0, 1, contrast)[:, None])[good].ravel()
    t = (offsets[None, :] - positions[:, None])[good].ravel()
    bins = np.arange(-3.0, 3.01, 0.25)
    which = np.digitize(t, bins)
    centres, values = [], []
    for b in range(1, len(bins)):
        members = which == b
        if members.sum() >= 5:
            centres.append(float(t[members].mean()))
            values.append(float(np.median(y[members])))
    if len(values) < 8:
        return 1.0
    t, y = np.array(centres), np.array(values)
    candidates = np.geomspace(0.35, 6.0, 80)
    from scipy.special import ndtr

    misfits = [float(np.sum((y - _with_levels(ndtr(t / s), y)) ** 2)) for s in candidates]
    return float(candidates[int(np.argmin(misfits))])


def _with_levels(phi: Array, y: Array) -> Array:
    design = np.c_[np.ones_like(phi), phi]
    return design @ np.linalg.lstsq(design, y, rcond=None)[0]


def locate(light: Light, points: Array, normals: Array, blur: float, wall: Array | None = None) -> EdgePoints:
    """Sub-pixel edge points from points that are within about a pixel of the edge.

    wall : (n,) px by which a wall is seen beyond the edge along the normal, 0 for none

    The window is symmetric about the edge and three spreads wide to either side, so that both
    plateaus are seen and nothing further is; where a wall is seen it reaches three spreads beyond its foot.
    """
    half = max(3.0, 3.0 * blur + 0.5)
    distance = np.zeros(len(points)) if wall is None else wall
    # A wall wider than the window is a plateau of its own: its foot has nothing to say unless wall and face look alike.
    near = np.where(distance > 2.0 * half, 0.0, distance)
    found = _fitted(light, points, normals, blur, half, near)
    again = (near != distance) & ~found.located
    if again.any():
        other = _fitted(light, points[again], normals[again], blur, half, distance[again])
        for name in ("points", "inner", "outer", "residual", "located"):
            getattr(found, name)[again] = getattr(other, name)
    return found


def _fitted(light: Light, points: Array, normals: Array, blur: float, half: float, distance: Array) -> EdgePoints:
    offsets = np.arange(-half, half + distance.max(initial=0.0) + 0.25, 0.5)
    used = offsets[None, :] <= half + distance[:, None]
    shift = np.zeros(len(points))
    position = inner = outer = residual = shift
    for _ in range(2):
        profiles = normal_profiles(light, points + shift[:, None] * normals, normals, offsets)
        position, inner, outer, residual = fit_step(profiles, offsets, blur, distance, used)
        shift = shift + np.clip(position, -half, half)
    step = outer - inner
    if np.any(distance > 0):
        # Beyond a wall the ground tells the place through the foot, even where the wall has the face's tone.
        beyond = points + (shift + distance)[:, None] * normals
        ground = np.median(normal_profiles(light, beyond, normals, np.arange(1.0, half + 0.25, 0.5)), axis=1)
        outer = np.where((distance > 0) & (np.abs(ground - inner) > np.abs(step)), ground, outer)
    contrast = np.abs(outer - inner)
    # An edge is located when its step stands clear of what the step does not explain and it did not run away.
    located = (contrast > MIN_CLARITY * residual) & (np.abs(shift) < half)
    return EdgePoints(points + shift[:, None] * normals, normals, inner, outer, residual, located)
