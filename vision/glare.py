"""Whether uneven light, glare above all, hid a hole of a face or a part of it, or drew its outline itself.

Knows a finished outline and the light around it; judges each place by the tones of face and background at the nearest
clear edge. Does not move the outline, and does not know where the light comes from.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass, replace
from typing import Any

import numpy as np
from numpy.typing import NDArray

from ..props.errors import Refusal
from ..props.result import Notice
from .face import components
from .light import Light
from .outline import gaps
from .photo import LUMINANCE
from .trace import REFUSE_GAP, REFUSE_LOST, SPACING, Trace, visible_wall

Array = NDArray[np.float64]
Mask = NDArray[np.bool_]

# A place has the background's tone, or the face's, within a quarter of the step between the two (stated assumption:
# blur and grain spread a tone by less, and a face that comes nearer to its background cannot be told from it).
_LIKE = 0.25
# What is as light as that, but of another colour: apart from the line between the two tones by half of the step.
_OTHER_COLOUR = 0.5
# Beyond the face's own tone a place counts as face down to one more step: a spot lights one end of it alone.
_BEYOND = 1.0
# A patch begins with a step along nearly all of its border; patches of light and of shade fade out.
_SHARP_SHARE = 0.8
# Patches of less than this part of the face are dirt, knots and lettering, or move the area by less than its interval.
_LEAST_SHARE, _LEAST_PIXELS = 0.02, 30
# The face and its surroundings are judged on about this many pixels along the longer side.
_SIZE = 400
# Along a clean edge the light changes hardly beyond 1.5 blurs to either side (a fourteenth of the step each); along
# the border of a glare it changes as much just beside as within.
_EDGE_BLURS, _SOFT = 1.5, 0.3
# Light near the file's white, and of a face much darker than that.
_WHITE, _DARK_FACE = 0.9, 0.4
# A shorter stretch, px and part of the outline, is a nick.
_LEAST_PX, _LEAST_STRETCH = 8.0, 0.005

_REMEDY = (
    "Take the lamp or flash that shines on the face away, light it softly from all round, and take the photo again. If "
    "what is shown there is not part of the face's outline, cover it or chalk it over."
)


def glare_notices(
    number: int,
    traces: Sequence[Trace],
    light: Light,
    blur: float,
    foot: Callable[[Array], Array] | None = None,
) -> list[Notice]:
    """Words about places where glare may hide a hole or a part of a member, or drew its outline.

    traces : shells and holes of one member, photo pixels; blur : of the outline, px
    foot : (n, 2) px of points of the face -> of the points square below them, where the face stands above its ground;
        its walls, which look much like it, are not taken for it
    Raises Refusal when what is hidden has more outline than may be lost.
    """
    # Near white is so in luminance; the mix that parts face and background best may weigh the channels otherwise.
    light = replace(light, weights=LUMINANCE)
    outline = SPACING * sum(len(t.points) for t in traces)
    notices = []
    for what, patch in _patches(traces, light, blur, foot):
        said = f"{what.format(number=number)} (about {patch.width:.0f} x {patch.height:.0f} pixels at pixel {patch.at})"
        if patch.misses and patch.border > REFUSE_LOST * (outline + patch.border):
            raise Refusal("glare", f"{said}; uneven light or glare may have misled the outline.", _REMEDY)
        notices.append(Notice("glare", f"{said}; uneven light or glare may have misled the outline.", _REMEDY))
    return notices + _soft_stretches(number, traces, light, blur)


@dataclass(frozen=True)
class _Patch:
    """A patch in photo pixels: its middle, size, length of its border, whether the outline misses that for sure."""

    at: str
    width: float
    height: float
    border: float
    misses: bool


def _patches(
    traces: Sequence[Trace], light: Light, blur: float, foot: Callable[[Array], Array] | None
) -> list[tuple[str, _Patch]]:
    """What within the outline looks like background, and what beyond it looks like face and is not parted from it."""
    import cv2
    from scipy.spatial import KDTree

    points, normals = (np.concatenate([getattr(t, name) for t in traces]) for name in ("points", "normals"))
    located = np.concatenate([t.located for t in traces])
    if located.sum() < 20:
        return []
    size = np.ptp(points, axis=0).max()
    height, width = light.pixels.shape[:2]
    low = np.maximum(np.floor(points.min(axis=0) - 0.5 * size).astype(int), 0)
    high = np.minimum(np.ceil(points.max(axis=0) + 0.5 * size).astype(int) + 1, (width, height))
    factor = max(1, round(float((high - low).max()) / _SIZE))
    tone = Light(light.pixels[low[1] : high[1], low[0] : high[0]], light.curve, light.weights).reduced(factor)
    rows, columns = tone.shape[:2]

    def inside(loop: Array) -> NDArray[np.int32]:
        return np.rint((loop - low + 0.5) / factor - 0.5).astype(np.int32)

    face = np.zeros((rows, columns), np.uint8)
    # Shells and holes do not cross: filled together, by even and odd.
    cv2.fillPoly(face, [inside(t.points) for t in traces], 1)
    beside = (3.0 * blur + 2.0) * normals
    channels = [light] if light.pixels.ndim == 2 else [replace(light, weights=tuple(row)) for row in np.eye(3)]
    inner, outer = (np.column_stack([c.nearest(points + way * beside) for c in channels]) for way in (-1.0, 1.0))
    step = np.linalg.norm(outer - inner, axis=1)
    usual = float(np.median(step[located]))
    clear = located & (step > 0.5 * usual)
    if clear.sum() < 20:
        return []
    y, x = np.mgrid[0:rows, 0:columns]
    places = (np.column_stack([x.ravel(), y.ravel()]) + 0.5) * factor - 0.5 + low
    nearest = np.asarray(KDTree(points[clear]).query(places)[1])
    inner, outer = _smooth(inner[clear]), _smooth(outer[clear])
    across = outer - inner
    squared = np.maximum(np.sum(across**2, axis=1), 1e-12)
    off = tone.reshape(rows * columns, -1) - inner[nearest]
    share = np.sum(off * across[nearest], axis=1) / squared[nearest]
    aside = np.linalg.norm(off - share[:, None] * across[nearest], axis=1) / np.sqrt(squared[nearest])
    share, aside = share.reshape(rows, columns), aside.reshape(rows, columns)
    margin = int(np.ceil((3.0 * blur + 2.0) / factor))
    kernel = np.ones((2 * margin + 1, 2 * margin + 1), np.uint8)
    deep = cv2.erode(face, kernel) > 0
    walls = face.copy()
    wall = np.zeros(len(points))
    if foot is not None:
        wall = visible_wall(points, normals, foot)
        for trace in traces:
            top = np.stack([trace.points, np.roll(trace.points, -1, axis=0)], axis=1)
            bottom = foot(top.reshape(-1, 2)).reshape(top.shape)
            for quad in inside(np.concatenate([top, bottom[:, ::-1]], axis=1)):
                cv2.fillConvexPoly(walls, quad, 1)
    far = cv2.dilate(walls, kernel) == 0
    plain = aside < _OTHER_COLOUR
    least = _LEAST_SHARE * float(face.sum())
    found: list[tuple[str, _Patch]] = []
    # One direction of tone for all of the picture: steps across edges are compared, which a slow glare does not change.
    middle, way = np.median(inner, axis=0), np.median(across, axis=0)
    level = ((tone.reshape(rows * columns, -1) - middle) @ way / max(float(way @ way), 1e-12)).reshape(rows, columns)
    level = level.astype(np.float32)
    edges = cv2.morphologyEx(level, cv2.MORPH_GRADIENT, kernel) > 0.5
    for mask in _large(deep & plain & ~edges & (share > 1.0 - _LIKE), least):
        if not _stands_out(mask, level, face > 0, margin):
            continue
        mask = cv2.dilate(mask.astype(np.uint8), kernel) > 0
        text = "Within the face of member {number} lies a sharply bounded patch as light or dark as the background"
        found.append((text, _patch(mask, low, factor, misses=True)))
    # A glare covers what lies under it: a bore, a hole, a joint.
    bright = tone @ np.asarray(LUMINANCE, np.float32) if tone.shape[2] == 3 else tone[..., 0]
    if deep.any() and np.median(bright[deep]) < _DARK_FACE:
        half = 0.5 * (float(np.median(bright[deep])) + 1.0)
        for mask in _large(deep & (bright > _WHITE), least):
            # A sharp one is a label, or was seen above.
            if np.mean((bright < half)[_ring(mask)]) <= _SHARP_SHARE:
                text = "A glare within the face of member {number} was taken for face; it may hide a hole"
                found.append((text, _patch(mask, low, factor, misses=False)))
    # Where the outline runs across the face there is no step along it; what a person ruled out, they know of.
    open_ends = np.zeros((rows, columns), np.uint8)
    start = 0
    for trace in traces:
        stop = start + len(trace.points)
        for run in gaps((step > 0.5 * usual)[start:stop] | (wall > 0)[start:stop] | trace.hidden):
            if len(run) * SPACING >= max(_LEAST_PX, 4.0 * blur):
                cv2.polylines(open_ends, [inside(trace.points[run])], False, 1)
        start = stop
    if open_ends.any():
        reach = cv2.dilate(open_ends, np.ones((4 * margin + 3, 4 * margin + 3), np.uint8)) > 0
        same = far & plain & (share < _LIKE) & (share > -_BEYOND)
        for mask in _sharp(same, far, share > 0.5, least):
            if np.any(mask & reach):
                text = "Member {number} seems to go on beyond its outline, which runs across it without an edge"
                found.append((text, _patch(mask, low, factor, misses=True)))
    return found


def _smooth(values: NDArray[Any]) -> NDArray[Any]:
    """(n, c) medians of each value and the two to either side."""
    return np.median(np.stack([np.roll(values, k, axis=0) for k in range(-2, 3)]), axis=0)


def _large(mask: Mask, least: float) -> list[Mask]:
    """The connected regions of at least so many pixels."""
    labels, areas = components(mask)
    return [labels == label for label in range(1, len(areas)) if areas[label] >= max(least, _LEAST_PIXELS)]


def _ring(region: Mask) -> Mask:
    """The pixels two beyond the border of a region: those at the border itself are mixed."""
    import cv2

    around, kernel = region.astype(np.uint8), np.ones((3, 3), np.uint8)
    return (cv2.dilate(around, kernel, iterations=3) > 0) & (cv2.dilate(around, kernel, iterations=2) == 0)


def _stands_out(region: Mask, level: NDArray[np.float32], face: Mask, margin: int) -> bool:
    """Whether a region lies about a step towards the background from what is around it, along its border.

    margin : pixels that an edge takes to either side
    """
    import cv2

    around, by = region.astype(np.uint8), 2 * margin + 1
    disc = cv2.getStructuringElement(cv2.MORPH_ELLIPSE, (2 * by + 1, 2 * by + 1))
    border = (cv2.dilate(around, disc) > 0) & ~region & face
    border &= cv2.dilate(around, disc[1:-1, 1:-1].copy()) == 0
    near = cv2.dilate(np.where(region, level, -np.float32(np.inf)).astype(np.float32), disc)
    # What shows the ground stands out by the outline's own step, a label by any.
    return bool(border.any()) and float(np.mean(np.abs((near - level)[border] - 1.0) < 0.5)) > _SHARP_SHARE


def _sharp(mask: Mask, searched: Mask, other: Mask, least: float) -> list[Mask]:
    """The connected regions of at least so many pixels beyond whose border nearly everything is of the other tone."""
    kept = []
    for region in _large(mask, least):
        border = _ring(region) & searched
        if border.any() and np.mean(other[border]) > _SHARP_SHARE:
            kept.append(region)
    return kept


def _patch(mask: Mask, low: NDArray[np.intp], factor: int, *, misses: bool) -> _Patch:
    import cv2

    y, x = np.nonzero(mask)
    loops, _ = cv2.findContours(mask.astype(np.uint8), cv2.RETR_EXTERNAL, cv2.CHAIN_APPROX_SIMPLE)
    at = (np.median(np.column_stack([x, y]), axis=0) + 0.5) * factor - 0.5 + low
    border = factor * sum(cv2.arcLength(loop, True) for loop in loops)
    return _Patch(
        f"{at[0]:.0f}, {at[1]:.0f}", factor * float(np.ptp(x) + 1), factor * float(np.ptp(y) + 1), border, misses
    )


def _soft_stretches(number: int, traces: Sequence[Trace], light: Light, blur: float) -> list[Notice]:
    """Words about stretches that are the soft border of a glare; Refusal when they are more than may be lost."""
    count = sum(len(t.points) for t in traces)
    located, points, normals = (
        np.concatenate([getattr(t, n) for t in traces]) for n in ("located", "points", "normals")
    )
    dark = float(np.median(light.nearest(points - (3.0 * blur + 2.0) * normals)[located])) if located.any() else 1.0
    runs = []
    for trace in traces:
        soft = _soft(trace, light, blur) if dark < _DARK_FACE else np.zeros(len(trace.points), bool)
        runs += [trace.points[run] for run in gaps(~soft)]
    runs = [run for run in runs if len(run) > max(_LEAST_PX / SPACING, _LEAST_STRETCH * count)]
    if not runs:
        return []
    longest = max(runs, key=len)
    x, y = longest[len(longest) // 2]
    share = sum(len(run) for run in runs) / count
    said = (
        f"Along {100 * share:.0f} % of its outline (longest at pixel {x:.0f}, {y:.0f}) member {number} fades into "
        "white: the outline there is that of a glare, and the face's own edge is hidden."
    )
    if share > REFUSE_LOST or len(longest) > REFUSE_GAP * count:
        raise Refusal("glare", said, _REMEDY)
    return [Notice("glare", said, _REMEDY)]


def _soft(trace: Trace, light: Light, blur: float) -> Mask:
    """(n,) whether the light goes on rising across the outline, without an edge, to the file's white."""
    apart = 2.0 * (_EDGE_BLURS * blur + 0.5)
    offsets = apart * np.array([-1.5, -0.5, 0.5, 1.5])
    values = light.at(trace.points[:, None] + offsets[:, None] * trace.normals[:, None])
    within, middle, beyond = np.diff(values, axis=1).T
    slow = (np.minimum(within, beyond) > _SOFT * middle) & (middle > 0.0)
    further = apart * np.array([1.5, 3.0, 6.0, 12.0])
    reached = light.at(trace.points[:, None] + further[:, None] * trace.normals[:, None]).max(axis=1)
    return slow & (reached > _WHITE) & (values[:, -1] - values[:, 0] > 0.05)
