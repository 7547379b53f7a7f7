"""The outline of a face in photo pixels, from a rough region to sub-pixel loops.

Joins the pieces: a region's rough loops, edge points along their normals, and bridges over short
gaps. Refuses an outline that cannot be located well enough.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from ..props.errors import Refusal
from .edges import approach, estimate_blur, fit_step, locate, normal_profiles, search_walled_step
from .face import Region
from .hidden import Hidden, round_corners
from .light import Light
from .outline import bridged, gaps, loop_normals, resampled, with_corners

Array = NDArray[np.float64]

# Points this far apart along the outline, px: closer ones share their pixels and say nothing new.
SPACING = 1.5
# Places where the outline cannot be located: beyond these shares the figures are the bridge's, not the picture's.
WARN_LOST, REFUSE_LOST, REFUSE_GAP = 0.05, 0.20, 0.05
# A gap that a person knows of and has looked at may be longer.
REFUSE_HIDDEN = 0.12


@dataclass(frozen=True)
class Trace:
    """A located closed outline.

    points : (n, 2) px; normals : (n, 2) unit, away from the face
    located : (n,) the edge was found there; elsewhere it is bridged
    inner, outer : (n,) light on the face's side and beyond
    scatter : (n,) px, standard deviation of a single edge point along its normal
    correlation : (n,) px, length over which edge points move together (the integral of their correlation, both sides)
    residual : (n,) rms of the profiles about a blurred step, in parts of the step
    hidden : (n,) a person ruled the place out
    """

    points: Array
    normals: Array
    located: NDArray[np.bool_]
    inner: Array
    outer: Array
    scatter: Array
    correlation: Array
    residual: Array
    hidden: NDArray[np.bool_]


def clearest_mix(light: Light, regions: Sequence[Region], reach: float) -> Light:
    """The light with the mix of channels in which face and background are well apart.

    Luminance unless another mix parts them more than twice as well for its scatter: rust on a blue lid is as light
    as the lid and differs in colour alone. Then the mix is along the mean difference of the two colours.
    """
    if light.pixels.ndim == 2:
        return light
    loop = max((loop for r in regions for loop in (r.shell, *r.holes)), key=len)
    points = resampled(loop, 8.0)
    normals = -loop_normals(points, 1)
    channels = [replace(light, weights=tuple(row)) for row in np.eye(3)]
    step = (reach + 3.0) * normals
    difference = np.stack([c.at(points + step) - c.at(points - step) for c in channels], axis=1)
    mean = np.median(difference, axis=0)
    if not np.any(mean):
        return light

    def clarity(weights: Array) -> float:
        along = difference @ weights
        middle = float(np.median(along))
        return abs(middle) / max(1.4826 * float(np.median(np.abs(along - middle))), 1e-3 * float(np.abs(weights).sum()))

    direction = mean / np.abs(mean).sum()
    if clarity(direction) > 2.0 * clarity(np.asarray(light.weights)):
        return replace(light, weights=(float(direction[0]), float(direction[1]), float(direction[2])))
    return light


def outline_blur(light: Light, regions: Sequence[Region], reach: float) -> float:
    """Standard deviation of the line spread at the outline, px."""
    loop = max((loop for r in regions for loop in (r.shell, *r.holes)), key=len)
    points = resampled(loop, 6.0)
    normals = -loop_normals(points, 1)
    shift, found = approach(light, points, normals, reach, 5.0)
    points, normals = (points + shift[:, None] * normals)[found], normals[found]
    if len(points) < 20:
        return 1.0
    offsets = np.arange(-6.0, 6.01, 0.5)
    profiles = normal_profiles(light, points, normals, offsets)
    position = fit_step(profiles, offsets, 1.0)[0]
    return estimate_blur(profiles, offsets, position)


def trace_loop(
    light: Light,
    loop: Array,
    blur: float,
    reach: float,
    foot: Callable[[Array], Array] | None = None,
    hidden: Hidden | None = None,
) -> Trace:
    """Locate one rough loop at sub-pixel accuracy.

    reach : px, how far the rough loop may be off the edge
    foot : (n, 2) px of points of the face -> of the points square below them, where the face stands above its ground
    hidden : where the outline is not seen
    """
    points = resampled(loop, 2.0)
    plateau = max(4.0, 3.0 * blur)
    # Away from the face: loops run counter-clockwise as seen with y up, pixels have y down.
    normals = -loop_normals(points, 3)
    shift, found = approach(light, points, normals, reach, plateau)
    if foot is not None:
        wall = visible_wall(points, normals, foot)
        walled = wall > 0
        if walled.any():
            shift[walled], found[walled] = search_walled_step(
                light, points[walled], normals[walled], blur, wall[walled], reach
            )
    points = points + shift[:, None] * normals
    if hidden is not None:
        found &= ~hidden.covers(points)
    points = resampled(bridged(points, found & _in_family(shift, found)), SPACING)
    normals = -loop_normals(points, 2)
    wall = np.zeros(len(points)) if foot is None else visible_wall(points, normals, foot)
    edge = locate(light, points, normals, blur, wall)
    shift = np.sum((edge.points - points) * normals, axis=1)
    near = _median_around(shift, 5)
    # A point that left its neighbours found another edge.
    located = edge.located & (np.abs(shift - near) < max(1.0, 2.0 * blur))
    contrast = np.abs(edge.outer - edge.inner)
    # Towards a wall the step is smaller than towards the ground, and has only the fit to stand for it.
    located &= (contrast > 0.25 * np.median(contrast)) | (wall > 0)
    unseen = np.zeros(len(points), bool) if hidden is None else hidden.covers(points, 3.0 * SPACING)
    located &= ~unseen
    found = points + shift[:, None] * normals
    scatter, correlation = np.empty(len(points)), np.empty(len(points))
    # Before a wall the step is small and the fit has two: such stretches scatter more than the others.
    for stretch in (wall > 0, wall == 0):
        scatter[stretch], correlation[stretch] = _scatter(found, normals, located & stretch, blur)
    whole = with_corners(bridged(found, located), SPACING, 2.0 * blur + 1.5)
    return Trace(
        round_corners(whole, located, unseen, SPACING),
        normals,
        located,
        edge.inner,
        edge.outer,
        scatter,
        correlation,
        edge.residual / np.maximum(contrast, 1e-9),
        unseen,
    )


def _scatter(points: Array, normals: Array, located: NDArray[np.bool_], blur: float) -> tuple[float, float]:
    """(standard deviation, correlation length) of edge points about the outline's own course, px.

    Third differences, which a course that bends evenly does not enter, over three points and over twelve: noise of
    the sensor shows in both, grain of the surface and blocks of the compression only in the longer one.
    """

    def over(lag: int) -> float:
        ends = [np.roll(points, step * lag, axis=0) for step in (-2, -1, 1, 2)]
        # The differences straddle the point whose normal is taken, a half step to either side of a third difference.
        third = np.sum((ends[0] - 2 * ends[1] + 2 * ends[2] - ends[3]) * normals, axis=1)
        whole = np.logical_and.reduce([np.roll(located, step * lag) for step in (-2, -1, 1, 2)])
        # 1 + 4 + 4 + 1: the variance of this difference of independent points.
        return 1.4826 / np.sqrt(10.0) * float(np.median(np.abs(third[whole]))) if whole.any() else 0.0

    short = over(3)
    long = max(short, over(12)) or blur
    noise, grain = max(2.0 * blur, SPACING), 12 * SPACING
    share = (short / long) ** 2
    return long, share * noise + (1.0 - share) * grain


def visible_wall(points: Array, normals: Array, foot: Callable[[Array], Array]) -> Array:
    """(n,) px of wall that the camera sees beyond each edge point along its normal; 0 where the wall faces away."""
    return np.maximum(np.sum((foot(points) - points) * normals, axis=1), 0.0)


def _in_family(shift: Array, found: NDArray[np.bool_]) -> NDArray[np.bool_]:
    """Whether each shift is within a pixel of what most of its neighbours found."""
    if not found.any():
        return found
    index = np.arange(len(shift))
    filled = np.interp(index, index[found], shift[found], period=len(shift))
    return np.abs(filled - _median_around(filled, 3)) <= 1.0


def _median_around(values: Array, reach: int) -> Array:
    window = np.arange(-reach, reach + 1)
    return np.median(values[(np.arange(len(values))[:, None] + window) % len(values)], axis=1)


def refuse_lost(traces: Sequence[Trace]) -> float:
    """Share of the outline that could not be located; Refusal when it is too much."""
    count = sum(len(t.points) for t in traces)
    lost = sum(int((~t.located).sum()) for t in traces) / count
    runs = [(len(run) / count, bool(t.hidden[run].any())) for t in traces for run in gaps(t.located)]
    gap = max((length for length, _ in runs), default=0.0)
    if lost > REFUSE_LOST or any(length > (REFUSE_HIDDEN if hidden else REFUSE_GAP) for length, hidden in runs):
        raise Refusal(
            "outline-lost",
            f"{100 * lost:.0f} % of the outline cannot be located (longest gap {100 * gap:.0f} %).",
            "Light the face evenly, avoid glare and shadow at its edge, clean burrs away and take the photo again.",
        )
    return lost
