"""Separate dark squares or discs in rows and columns of stated pitch as scale reference.

Their centres are free of edge bias, whatever the print gain and the tone curve. Knows how to find such a grid and
each mark's centre to a part of a pixel; a few marks may be missing. Does not use the marks' size as a scale.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Any, Literal

import numpy as np
from numpy.typing import NDArray

from ...props.errors import Refusal, UsageError
from ..edges import approach, estimate_blur, fit_step, locate, normal_profiles
from ..light import Light
from ..photo import Photo
from ..plane import Correspondences, Plane, fit_plane
from ..posed_plane import PosedPlane
from .pattern import Found, Pattern, fit_pattern
from .printed import UNCHECKED_PRINT_SCALE
from .setting import Setting
from .stated import Key, Kind, pattern_fields, stated_pitch

Array = NDArray[np.float64]

_SEARCH_SIZE = 1600
# Area squared over the determinant of the second moments: 144 for any parallelogram, 158 for any ellipse.
_COMPACT = (125.0, 175.0)
_LEAST_AREA = 30.0
# Of a grid this part of the marks may be hidden.
MOST_MISSING = 1 / 6
# Edge points of a mark: none near the corners of a square, which blur rounds.
_POINTS_A_SIDE, _CORNER_SHARE = 11, 0.18


@dataclass(frozen=True)
class Squares(Pattern):
    """Dark squares in rows and columns, apart from each other.

    columns, rows : squares along x and up
    pitch_mm : from centre to centre, or (along x, up)
    side_mm : side of a square as designed; only tells where to look for its edges
    Other fields as in Pattern.
    """

    columns: int
    rows: int
    pitch_mm: float | tuple[float, float]
    side_mm: float

    def __post_init__(self) -> None:
        _check(self.columns, self.rows, _pair(self.pitch_mm), self.side_mm, self.scale_std)

    @property
    def label(self) -> str:
        """What it is, in words."""
        return f"a grid of {self.columns} x {self.rows} squares"

    def find(self, photo: Photo) -> Found:
        """Where its marks' centres are; raises Refusal where it is not seen."""
        grid = _Grid("square", self.columns, self.rows, _pair(self.pitch_mm), self.side_mm, self.label)
        return _found(photo, grid, self)


@dataclass(frozen=True)
class Discs(Pattern):
    """Dark discs in rows and columns.

    columns, rows : discs along x and up
    pitch_mm : from centre to centre, or (along x, up)
    diameter_mm : of a disc as designed; only tells where to look for its edge
    Other fields as in Pattern.
    """

    columns: int
    rows: int
    pitch_mm: float | tuple[float, float]
    diameter_mm: float

    def __post_init__(self) -> None:
        _check(self.columns, self.rows, _pair(self.pitch_mm), self.diameter_mm, self.scale_std)

    @property
    def label(self) -> str:
        """What it is, in words."""
        return f"a grid of {self.columns} x {self.rows} discs"

    def find(self, photo: Photo) -> Found:
        """Where its marks' centres are; raises Refusal where it is not seen."""
        grid = _Grid("disc", self.columns, self.rows, _pair(self.pitch_mm), self.diameter_mm, self.label)
        return _found(photo, grid, self)


@dataclass(frozen=True)
class _Grid:
    """shape; counts; pitch (x, y) and size of a mark, mm."""

    shape: Literal["square", "disc"]
    columns: int
    rows: int
    pitch: tuple[float, float]
    size: float
    label: str

    @property
    def centres(self) -> Array:
        """(rows * columns, 2) mm, row by row from the top left; the origin is the lower left one."""
        row, column = np.divmod(np.arange(self.columns * self.rows), self.columns)
        return np.column_stack([column, self.rows - 1 - row]) * self.pitch

    def mark_edge(self) -> tuple[Array, Array, NDArray[np.intp]]:
        """(m, 2) mm on the edge of a mark about its centre, (m, 2) unit normals outward, (m,) number of the side."""
        half = 0.5 * self.size
        if self.shape == "disc":
            angle = np.linspace(0, 2 * np.pi, 48, endpoint=False)
            normal = np.column_stack([np.cos(angle), np.sin(angle)])
            return half * normal, normal, np.zeros(len(angle), int)
        along = np.linspace(-1 + 2 * _CORNER_SHARE, 1 - 2 * _CORNER_SHARE, _POINTS_A_SIDE) * half
        across = np.full_like(along, half)
        sides, normals = [], []
        for k in range(4):
            c, s = [(1, 0), (0, 1), (-1, 0), (0, -1)][k]
            turn = np.array([[c, s], [-s, c]], float)
            sides.append(np.column_stack([across, along]) @ turn)
            normals.append(np.tile([float(c), float(s)], (len(along), 1)))
        return np.concatenate(sides), np.concatenate(normals), np.repeat(np.arange(4), len(along))


@dataclass(frozen=True, eq=False)
class MarkEdges:
    """Located edges of marks. mark : (n,) its number; side : (n,) its side; pixels : (n, 2)."""

    mark: NDArray[np.intp]
    side: NDArray[np.intp]
    pixels: Array


def _pair(value: float | tuple[float, float]) -> tuple[float, float]:
    return value if isinstance(value, tuple) else (value, value)


def _check(columns: int, rows: int, pitch: tuple[float, float], size: float, scale_std: float) -> None:
    if not (columns >= 2 and rows >= 2 and columns * rows >= 6 and 0 < size < min(pitch) and scale_std >= 0):
        raise UsageError(
            "grid-size",
            f"A grid of {columns} x {rows} marks of {size:g} mm at a pitch of {pitch[0]:g} x {pitch[1]:g} mm cannot "
            "be used.",
            "State columns and rows (six marks at least), the pitch from centre to centre, and the marks' size.",
        )


def _found(photo: Photo, grid: _Grid, stated: Pattern) -> Found:
    """The grid in a photo, centres refined; Refusal where it is not there."""
    from ..measure import grey

    rough = find_grid(grey(photo), grid.columns, grid.rows)
    if rough is None:
        raise Refusal(
            "no-grid",
            f"The picture does not show {grid.label}.",
            "Check the counts; keep all marks in the frame, apart from other dark things, in focus and evenly lit.",
        )
    seen = np.all(np.isfinite(rough), axis=1)
    target = grid.centres[seen]
    found = _as_found(grid, target, rough[seen])
    light = Light.of(photo)
    plane = fit_plane([Correspondences(target, rough[seen])], (photo.width, photo.height))
    edges = locate_marks(light, plane, grid.mark_edge(), target)
    kept, centres = np.ones(len(target), bool), rough[seen]
    for _ in range(3):
        centres, kept = _centres(grid, plane, target, edges)
        if kept.sum() < max(6, (1 - MOST_MISSING) * grid.columns * grid.rows):
            raise Refusal(
                "grid-blurred",
                f"The edges of {grid.label} cannot be located in the picture.",
                "Go nearer, focus, and avoid glare on the print.",
            )
        found = _as_found(grid, target[kept], centres[kept])
        plane, _ = fit_pattern(photo, found, stated)
    return found


def _as_found(grid: _Grid, target: Array, pixels: Array) -> Found:
    px, py = grid.pitch
    half = 0.5 * np.array(grid.pitch)
    low, high = -half, np.array([(grid.columns - 0.5) * px, (grid.rows - 0.5) * py])
    outline = np.array([low, (high[0], low[1]), high, (low[0], high[1])])
    # Between the marks of a row or column the paper shows; a quarter of a mark off its centre it is all mark.
    about = 0.25 * grid.size * np.array([[1, 1], [-1, 1], [-1, -1], [1, -1]]) / np.sqrt(2)
    dark = (target[:, None] + about[None]).reshape(-1, 2)
    between = 0.5 * np.array([[-px, 0], [0, -py], [-px, -py], [-px, py]])
    light = np.unique(np.round((target[:, None] + between[None]).reshape(-1, 2), 6), axis=0)
    light = light[np.all((light > low + 1e-3) & (light < high - 1e-3), axis=1)]
    kind = "squares" if grid.shape == "square" else "discs"
    points, normals, _ = grid.mark_edge()
    edges = (target[:, None] + points[None]).reshape(-1, 2), np.tile(normals, (len(target), 1))
    clear = 0.8 * min(0.5 * grid.size, min(grid.pitch) - grid.size)
    return Found(kind, grid.label, target, pixels, outline, (dark, light), edges, clear)


def locate_marks(
    light: Light,
    plane: Plane | PosedPlane,
    mark: tuple[Array, Array, NDArray[np.intp]],
    centres: Array,
) -> MarkEdges:
    """The edges of marks at (k, 2) mm centres, each of the shape `mark` (points, normals, sides about its centre)."""
    points, normals, sides = mark
    count = len(points)
    at = (centres[:, None] + points[None]).reshape(-1, 2)
    pixels = plane.to_pixels(at)
    outward = np.tile(normals, (len(centres), 1))
    # A normal of the outline in the picture is the one in mm through the transposed Jacobian of to_mm.
    across = np.einsum("nij,ni->nj", plane.mm_per_px(pixels), outward)
    across /= np.linalg.norm(across, axis=1, keepdims=True)
    size_px = 2 * float(
        np.median(np.linalg.norm(pixels.reshape(-1, count, 2) - plane.to_pixels(centres)[:, None], axis=2))
    )
    reach = float(np.clip(0.15 * size_px, 2.0, 12.0))
    plateau = float(np.clip(0.25 * size_px, 3.0, 8.0))
    shift, found = approach(light, pixels, across, reach, plateau)
    pixels = pixels + shift[:, None] * across
    offsets = np.arange(-5.0, 5.01, 0.5)
    profiles = normal_profiles(light, pixels[found], across[found], offsets)
    blur = estimate_blur(profiles, offsets, fit_step(profiles, offsets, 1.0)[0]) if found.sum() > 20 else 1.0
    edge = locate(light, pixels, across, min(blur, plateau / 3))
    good = found & edge.located & (edge.outer > edge.inner)
    number = np.repeat(np.arange(len(centres)), count)
    return MarkEdges(number[good], np.tile(sides, len(centres))[good], edge.points[good])


def _centres(
    grid: _Grid, plane: Plane | PosedPlane, target: Array, edges: MarkEdges
) -> tuple[Array, NDArray[np.bool_]]:
    """(k, 2) photo pixels of the marks' centres, and which marks are well enough seen.

    A mark's edge points are mapped to mm, where it is a square or a circle again; its centre there is mapped back.
    So neither the perspective's shift of an ellipse's centre nor a common edge bias enters.
    """
    mm = plane.to_mm(edges.pixels)
    centres = np.zeros_like(target)
    kept = np.zeros(len(target), bool)
    for index in range(len(target)):
        own = edges.mark == index
        about = mm[own] - target[index]
        centre = _square_centre(about, edges.side[own]) if grid.shape == "square" else _circle_centre(about)
        if centre is not None and np.linalg.norm(centre) < 0.25 * grid.size:
            kept[index] = True
            centres[index] = target[index] + centre
    return plane.to_pixels(centres), kept


def _square_centre(points: Array, side: NDArray[np.intp]) -> Array | None:
    """Where the diagonals of a four-sided figure cross, from points on its sides; None with a side unseen."""
    lines = []
    for k in range(4):
        own = points[side == k]
        if len(own) < 5:
            return None
        lines.append(_line(own))
    corners = np.array([np.cross(lines[k], lines[(k + 1) % 4]) for k in range(4)])
    crossing = np.cross(np.cross(corners[0], corners[2]), np.cross(corners[1], corners[3]))
    return crossing[:2] / crossing[2]


def _line(points: Array) -> Array:
    """(a, b, c) with a x + b y + c = 0 of the line through points by total least squares, the worst tenth left out."""
    kept = points
    line = np.zeros(3)
    for _ in range(2):
        middle = kept.mean(axis=0)
        normal = np.linalg.svd(kept - middle)[2][1]
        line = np.append(normal, -normal @ middle)
        off = np.abs(points @ normal + line[2])
        kept = points[off <= np.quantile(off, 0.9)]
    return line


def _circle_centre(points: Array) -> Array | None:
    """Centre of the circle through points, geometric least squares with outliers weighed down; None with too few."""
    if len(points) < 16:
        return None
    state = np.array([*points.mean(axis=0), float(np.mean(np.linalg.norm(points - points.mean(axis=0), axis=1)))])
    for _ in range(12):
        to = points - state[:2]
        distance = np.linalg.norm(to, axis=1)
        off = distance - state[2]
        scale = max(1.4826 * float(np.median(np.abs(off))), 1e-9)
        root = np.sqrt(1 / (1 + (off / (3 * scale)) ** 2))
        design = np.c_[-to / distance[:, None], -np.ones(len(points))]
        step = np.linalg.lstsq(root[:, None] * design, -root * off, rcond=None)[0]
        state = state + step
        if np.abs(step).max() < 1e-9:
            break
    return state[:2]


def find_grid(picture: NDArray[np.uint8], columns: int, rows: int) -> Array | None:
    """(rows * columns, 2) rough px of the centres of dark marks in a grid, row by row from the upper left; NaN where
    one is hidden. None where there is no such grid.

    picture : (h, w) grey as stored
    """
    import cv2

    scale = min(1.0, _SEARCH_SIZE / max(picture.shape))
    small = picture
    if scale < 1.0:
        shape = (round(picture.shape[1] * scale), round(picture.shape[0] * scale))
        small = np.asarray(cv2.resize(picture, shape, interpolation=cv2.INTER_AREA), np.uint8)
    ratio = np.array([picture.shape[1] / small.shape[1], picture.shape[0] / small.shape[0]])
    best: Array | None = None
    for part in (8, 16, 4, 32):
        centres, areas = _dark_marks(small, part)
        grid = _grow_grid(centres, areas, columns, rows)
        if grid is not None and (best is None or np.isfinite(grid).sum() > np.isfinite(best).sum()):
            best = grid
        if best is not None and np.all(np.isfinite(best)):
            break
    if best is None:
        return None
    return ((best + 0.5) * ratio - 0.5).reshape(-1, 2)


def _dark_marks(picture: NDArray[np.uint8], part: int) -> tuple[Array, Array]:
    """(k, 2) centres and (k,) areas of compact regions darker than their surroundings over 1/part of the picture."""
    import cv2

    window = max(9, (max(picture.shape) // part) | 1)
    smooth = cv2.GaussianBlur(picture, (0, 0), 0.8)
    spread = float(np.percentile(smooth, 95) - np.percentile(smooth, 5))
    dark = cv2.adaptiveThreshold(
        smooth, 255, cv2.ADAPTIVE_THRESH_MEAN_C, cv2.THRESH_BINARY_INV, window, max(4.0, 0.08 * spread)
    )
    count, labels, stats, centres = cv2.connectedComponentsWithStats(dark, connectivity=4)
    height, width = picture.shape
    good_centres, areas = [], []
    for label in range(1, count):
        x, y, w, h, area = (int(v) for v in stats[label])
        if area < _LEAST_AREA or area > 0.1 * height * width or x == 0 or y == 0 or x + w == width or y + h == height:
            continue
        if area < 0.3 * w * h:
            continue
        v, u = np.nonzero(labels[y : y + h, x : x + w] == label)
        # A pixel has its own extent: a twelfth along each axis.
        covariance = np.cov(u, v) + np.eye(2) / 12
        if _COMPACT[0] < area**2 / np.linalg.det(covariance) < _COMPACT[1]:
            good_centres.append(centres[label])
            areas.append(area)
    return np.array(good_centres, float).reshape(-1, 2), np.array(areas, float)


def _grow_grid(centres: Array, areas: Array, columns: int, rows: int) -> Array | None:
    """(rows, columns, 2) marks in a grid grown from any mark and two of its neighbours; None without one."""
    if len(centres) < (1 - MOST_MISSING) * columns * rows:
        return None
    distance = np.linalg.norm(centres[:, None] - centres[None], axis=2)
    distance[np.abs(np.log(areas[:, None] / areas[None])) > np.log(2.5)] = np.inf
    np.fill_diagonal(distance, np.inf)
    # Marks in the middle of a crowd first: they have neighbours on all sides.
    order = np.argsort(np.sort(distance, axis=1)[:, : min(4, len(centres) - 1)].sum(axis=1))
    best: Array | None = None
    for seed in order[:40]:
        near = [int(i) for i in np.argsort(distance[seed])[:6] if np.isfinite(distance[seed, i])]
        for first, second in ((a, b) for n, a in enumerate(near) for b in near[n + 1 :]):
            one, other = centres[first] - centres[seed], centres[second] - centres[seed]
            sine = abs(one[0] * other[1] - one[1] * other[0]) / (np.linalg.norm(one) * np.linalg.norm(other))
            if sine < 0.4:
                continue
            grid = _arranged(_grown(centres, int(seed), one, other), centres, columns, rows)
            if grid is None:
                continue
            if best is None or np.isfinite(grid).sum() > np.isfinite(best).sum():
                best = grid
            if np.all(np.isfinite(best)):
                return best
    return best


def _grown(centres: Array, seed: int, one: Array, other: Array) -> dict[tuple[int, int], int]:
    """Index in the grid -> mark, from `seed` at (0, 0) outward, each next mark expected where the last step leads."""
    placed = {(0, 0): seed}
    used = {seed}
    steps = {(0, 0): (one, other)}
    queue = [(0, 0)]
    while queue:
        i, j = queue.pop(0)
        here = centres[placed[i, j]]
        for di, dj in ((1, 0), (-1, 0), (0, 1), (0, -1)):
            there = (i + di, j + dj)
            if there in placed:
                continue
            along = steps[i, j][0] if di else steps[i, j][1]
            expected = here + (di + dj) * along
            off = np.linalg.norm(centres - expected, axis=1)
            mark = int(np.argmin(off))
            if off[mark] > 0.3 * np.linalg.norm(along) or mark in used:
                continue
            placed[there] = mark
            used.add(mark)
            step = (centres[mark] - here) * (di + dj)
            steps[there] = (step, steps[i, j][1]) if di else (steps[i, j][0], step)
            queue.append(there)
    return placed


def _arranged(placed: dict[tuple[int, int], int], centres: Array, columns: int, rows: int) -> Array | None:
    """(rows, columns, 2) of a grown grid, upright and seen from the front; None unless its extent is as stated."""
    index = np.array(list(placed))
    low = index.min(axis=0)
    extent = tuple((index.max(axis=0) - low + 1).tolist())
    if extent not in ((rows, columns), (columns, rows)) or len(placed) < (1 - MOST_MISSING) * rows * columns:
        return None
    grid = np.full((*extent, 2), np.nan)
    for (i, j), mark in placed.items():
        grid[i - low[0], j - low[1]] = centres[mark]
    candidates: Sequence[Array] = [np.rot90(g, k) for g in (grid, grid[::-1]) for k in range(4)]
    upright = []
    for candidate in candidates:
        if candidate.shape[:2] != (rows, columns):
            continue
        right = np.nanmean(np.diff(candidate, axis=1), axis=(0, 1))
        down = np.nanmean(np.diff(candidate, axis=0), axis=(0, 1))
        # Pixels have y down: seen from the front, a quarter turn with the clock leads from right to down.
        if right[0] * down[1] - right[1] * down[0] > 0:
            upright.append((float(down[1]), candidate))
    return max(upright, key=lambda pair: pair[0])[1]


def _counted(values: Mapping[str, Any], setting: Setting) -> dict[str, Any]:
    columns, rows = values["columns"], values["rows"]
    pitch = stated_pitch(values)
    whole = min((max(columns, 2) - 1) * pitch[0], (max(rows, 2) - 1) * pitch[1])
    return {"columns": columns, "rows": rows, "pitch_mm": pitch, **pattern_fields(values, setting, whole)}


def _stated_squares(values: Mapping[str, Any], setting: Setting) -> Squares:
    return Squares(side_mm=values["side"], **_counted(values, setting))


def _stated_discs(values: Mapping[str, Any], setting: Setting) -> Discs:
    return Discs(diameter_mm=values["diameter"], **_counted(values, setting))


_COUNTS = (
    Key("columns", "count", "marks in a row", required=True),
    Key("rows", "count", "marks in a column", required=True),
    Key("pitch", "length", "from centre to centre", required=True),
    Key("pitch-up", "length", "the same up the grid, where it differs"),
)
_U = Key("u", "length", "standard uncertainty of the shorter way from first to last centre, as measured")
_PRINT = (
    f"The print: {100 * UNCHECKED_PRINT_SCALE:g} % in either direction (assumed: a print nobody measured). The size of "
    "a mark only tells where to look."
)

KINDS = (
    Kind(
        "square-grid",
        "dark squares in rows and columns, apart from each other; their centres are found",
        (*_COUNTS, Key("side", "length", "of a square, roughly", required=True), _U),
        _PRINT,
        "square-grid columns=3 rows=4 pitch=60 side=30",
        _stated_squares,
    ),
    Kind(
        "disc-grid",
        "dark discs in rows and columns; their centres are found",
        (*_COUNTS, Key("diameter", "length", "of a disc, roughly", required=True), _U),
        _PRINT,
        "disc-grid columns=10 rows=8 pitch=25 diameter=15",
        _stated_discs,
    ),
)
