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
    profiles: Array, offsets: Array, blur: float, start: Array | None = None
) -> tuple[Array, Array, Array, Array]:
    """Least-squares blurred steps through (n, m) profiles at (m,) offsets.

    blur : standard deviation of the line spread, px
    Returns (n,) position, inner level, outer level and rms residual.

    Gauss-Newton on inner + (outer - inner) Phi((t - x) / blur). For any symmetric spread the
    position is unbiased in a window symmetric about it, whatever the spread's true shape.
    """
    from scipy.special import ndtr

    n, m = profiles.shape
    x = np.zeros(n) if start is None else start.astype(float)
    half = np.abs(offsets).max()
    for _ in range(8):
        z = (offsets - x[:, None]) / blur
        phi = ndtr(z)
        slope = np.exp(-0.5 * z * z) / (np.sqrt(2 * np.pi) * blur)
        # Levels are linear given the position: solve them first, then one Newton step of the position.
        mean_phi, mean_y = phi.mean(axis=1), profiles.mean(axis=1)
        centred = phi - mean_phi[:, None]
        spread = np.einsum("ij,ij->i", centred, centred)
        step = np.einsum("ij,ij->i", centred, profiles) / np.maximum(spread, 1e-12)
        level = mean_y - step * mean_phi
        residual = profiles - level[:, None] - step[:, None] * phi
        # Variable projection (Golub, Pereyra 1973), Kaufman's form: the slope less what the levels absorb.
        tangent = slope - slope.mean(axis=1)[:, None]
        tangent -= centred * (np.einsum("ij,ij->i", centred, tangent) / np.maximum(spread, 1e-12))[:, None]
        curvature = np.einsum("ij,ij->i", tangent, tangent)
        move = -np.einsum("ij,ij->i", tangent, residual) / np.where(
            np.abs(step) > 1e-9, step * np.maximum(curvature, 1e-12), np.inf
        )
        x = np.clip(x + np.clip(move, -blur, blur), -half, half)
        if np.abs(move).max(initial=0.0) < 1e-4:
            break
    return x, level, level + step, np.sqrt(np.mean(residual**2, axis=1))


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


def locate(light: Light, points: Array, normals: Array, blur: float) -> EdgePoints:
    """Sub-pixel edge points from points that are within about a pixel of the edge.

    The window is symmetric about the edge and three spreads wide to either side, so that both
    plateaus are seen and nothing further is.
    """
    half = max(3.0, 3.0 * blur + 0.5)
    offsets = np.arange(-half, half + 0.25, 0.5)
    offsets -= offsets.mean()
    shift = np.zeros(len(points))
    for _ in range(2):
        profiles = normal_profiles(light, points + shift[:, None] * normals, normals, offsets)
        position, inner, outer, residual = fit_step(profiles, offsets, blur)
        shift = shift + position
    contrast = np.abs(outer - inner)
    # An edge is located when its step stands clear of what the step does not explain and it did not run away.
    located = (contrast > 4.0 * residual) & (np.abs(shift) < half)
    return EdgePoints(points + shift[:, None] * normals, normals, inner, outer, residual, located)
