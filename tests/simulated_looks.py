"""What materials and backgrounds look like: reflectance as a function of place, in linear light.

Procedural, repeatable from a seed. Albedos are those of the trade's materials in diffuse light;
knows nothing of cameras or of polygons.
"""

from __future__ import annotations

from collections.abc import Callable
from functools import lru_cache

import cv2
import numpy as np
from numpy.typing import NDArray

Image = NDArray[np.float32]
TILE = 512
SMOOTH = 1.0


@lru_cache(maxsize=16)
def _tile(seed: int) -> Image:
    # Smoothed before it is interpolated: else the lattice of the tile shows as a weave.
    white = np.random.default_rng([seed, 77]).standard_normal((TILE, TILE), np.float32)
    smooth = cv2.GaussianBlur(np.pad(white, 8, mode="wrap"), (0, 0), SMOOTH)[8:-8, 8:-8]
    return smooth / smooth.std()


def noise(x: Image, y: Image, scale: float | tuple[float, float], seed: int) -> Image:
    """Smooth noise of unit order, correlated over `scale` mm (along x, along y)."""
    sx, sy = scale if isinstance(scale, tuple) else (scale, scale)
    # The offset keeps layers of one tile at different scales from showing the same pattern.
    shift = 37.0 * (sx + 2 * sy) + 11.0 * seed
    u = np.mod(x * (2 * SMOOTH / sx) + shift, TILE).astype(np.float32)
    v = np.mod(y * (2 * SMOOTH / sy) + shift / 2, TILE).astype(np.float32)
    return cv2.remap(_tile(seed % 1000), u, v, cv2.INTER_LINEAR, borderMode=cv2.BORDER_WRAP)


def _tinted(grey: Image, tint: tuple[float, float, float]) -> Image:
    return grey[..., None] * np.array(tint, np.float32)


def plain(x: Image, y: Image, seed: int, tint: tuple[float, float, float], grain: float = 0.01) -> Image:
    """An even colour with a fine grain."""
    return _tinted(1 + grain * noise(x, y, 0.25, seed), tint)


def paper(x: Image, y: Image, seed: int) -> Image:
    """White office paper."""
    return plain(x, y, seed, (0.86, 0.86, 0.87), 0.006)


def steel(x: Image, y: Image, seed: int) -> Image:
    """Bright sawn steel: fine parallel saw marks, a slight haze."""
    rng = np.random.default_rng(seed)
    a = rng.uniform(-0.3, 0.3)
    u, v = np.cos(a) * x + np.sin(a) * y, np.cos(a) * y - np.sin(a) * x
    marks = 0.09 * noise(u, v, (60.0, 0.25), seed) + 0.07 * noise(u, v, (90.0, 1.1), seed + 1)
    haze = 0.06 * noise(x, y, 17.0, seed + 2)
    return _tinted(np.clip(1 + marks + haze, 0.5, 1.6), tuple(rng.uniform(0.24, 0.34) * np.array((0.97, 0.99, 1.03))))


def aluminium(x: Image, y: Image, seed: int) -> Image:
    """Sawn aluminium: lighter, arcs of a circular blade."""
    rng = np.random.default_rng(seed)
    cx, cy = rng.uniform(150, 250), rng.uniform(-80, 80)
    r = np.hypot(x - cx, y - cy).astype(np.float32)
    marks = 0.07 * noise(r, y, (0.3, 50.0), seed) + 0.04 * noise(r, y, (1.3, 80.0), seed + 1)
    return _tinted(np.clip(1 + marks, 0.6, 1.5), tuple(rng.uniform(0.40, 0.5) * np.array((0.99, 1.0, 1.01))))


def wood(x: Image, y: Image, seed: int) -> Image:
    """End grain of a softwood: growth rings about a pith off the face, rays, warm colour."""
    rng = np.random.default_rng(seed)
    px, py = rng.uniform(-60, 60), rng.choice([-1, 1]) * rng.uniform(30, 120)
    dx, dy = x - px, y - py
    r = np.hypot(dx, dy) + 1.6 * noise(x, y, 30.0, seed) + 0.3 * noise(x, y, 6.0, seed + 1)
    period = rng.uniform(2.2, 3.8)
    phase = np.mod(r / period + 0.5 * noise(r, 0 * r, (4.0, 9.0), seed + 4), 1.0)
    late = np.clip((phase - 0.55) / 0.35, 0, 1) ** 2 * np.clip((1.0 - phase) / 0.06, 0, 1)
    rays = 0.05 * noise(np.arctan2(dy, dx) * 60, r, (0.35, 14.0), seed + 2)
    grey_noise = noise(x, y, 20.0, seed + 3)
    split = np.ones_like(grey_noise)
    turn = np.arctan2(dy, dx)
    for angle, inner, outer in zip(
        rng.uniform(-3.1, 3.1, 3), rng.uniform(8, 30, 3), rng.uniform(35, 60, 3), strict=True
    ):
        # Drying checks: narrow, along the rays, closed at both ends.
        off = r * np.sin(turn - angle + 0.03 * noise(r, 0 * r, 7.0, seed + 8))
        width = 0.28 * np.clip((r - inner) / 8, 0, 1) * np.clip((outer - r) / 8, 0, 1)
        ahead = np.cos(turn - angle) > 0
        split *= np.where(ahead, 1 - 0.7 * np.clip((width - np.abs(off)) / 0.15, 0, 1), 1)
    grey = 1 - 0.38 * late + rays + 0.05 * grey_noise + 0.06 * noise(x, y, 0.35, seed + 5)
    return _tinted((np.clip(grey, 0.3, 1.4) * split), (0.50, 0.345, 0.205))


def rust(x: Image, y: Image, seed: int) -> Image:
    """Rusty steel, brushed: brown patches of several sizes."""
    a = noise(x, y, 9.0, seed) + 0.7 * noise(x, y, 3.0, seed + 1) + 0.5 * noise(x, y, 0.9, seed + 2)
    fine = 0.12 * noise(x, y, 0.3, seed + 3)
    mix = np.clip(0.5 + 0.3 * a, 0, 1)[..., None]
    dark, light = np.array((0.085, 0.050, 0.035), np.float32), np.array((0.22, 0.105, 0.05), np.float32)
    return (dark + (light - dark) * mix) * np.clip(1 + fine, 0.5, 1.6)[..., None]


def painted(x: Image, y: Image, seed: int) -> Image:
    """Green workshop paint."""
    return plain(x, y, seed, (0.06, 0.14, 0.10), 0.02)


def oak_table(x: Image, y: Image, seed: int) -> Image:
    """Boards of a worn table."""
    board = np.floor(y / 118.0)
    tone = 0.12 * np.sin(board * 12.9898 + seed)
    xx = x + 300 * board
    grain = 0.10 * noise(xx, y, (90.0, 1.6), seed) + 0.07 * noise(xx, y, (30.0, 0.5), seed + 1)
    joint = 1 - 0.75 * np.exp(-((((np.mod(y, 118.0) - 59.0) / 59.0) ** 2 - 1) ** 2) / 1.5e-3)
    grey = (1 + tone + grain + 0.05 * noise(x, y, 60.0, seed + 2)) * joint
    return _tinted(np.clip(grey, 0.1, 1.6).astype(np.float32), (0.30, 0.185, 0.105))


def bench(x: Image, y: Image, seed: int) -> Image:
    """A grey workbench top, scuffed."""
    grey = (
        1 + 0.05 * noise(x, y, 40.0, seed) + 0.04 * noise(x, y, 1.2, seed + 1) + 0.03 * noise(x, y, (50.0, 0.6), seed)
    )
    return _tinted(grey, (0.19, 0.195, 0.20))


def dark_mat(x: Image, y: Image, seed: int) -> Image:
    """A black rubber mat."""
    return plain(x, y, seed, (0.035, 0.036, 0.04), 0.08)


def brickwork(x: Image, y: Image, seed: int) -> Image:
    """Old brickwork, lime mortar, sooty."""
    height, length, joint = 75.0, 225.0, 11.0
    wobble_x, wobble_y = 2.5 * noise(x, y, 22.0, seed + 6), 2.0 * noise(x, y, 25.0, seed + 7)
    course = np.floor((y + wobble_y) / height)
    along = x + wobble_x + np.mod(course, 2) * length / 2
    brick = np.floor(along / length)
    edge = np.minimum(
        np.minimum(np.mod(along, length), length - np.mod(along, length)),
        np.minimum(np.mod(y + wobble_y, height), height - np.mod(y + wobble_y, height)),
    )
    mortar = np.clip((joint / 2 - edge) / 1.5 + 0.5, 0, 1)[..., None]
    tone = 0.25 * np.sin(course * 91.7 + brick * 37.3 + seed)
    rough = 0.16 * noise(x, y, 1.1, seed) + 0.14 * noise(x, y, 5.0, seed + 1) + 0.12 * noise(x, y, 60.0, seed + 2)
    clay = _tinted(np.clip(1 + tone + rough, 0.25, 2), (0.215, 0.095, 0.062))
    lime = _tinted(np.clip(1 + 0.8 * rough, 0.3, 2), (0.33, 0.30, 0.255))
    return (clay * (1 - mortar) + lime * mortar).astype(np.float32)


def plaster(x: Image, y: Image, seed: int) -> Image:
    """Lime plaster."""
    return _tinted(1 + 0.05 * noise(x, y, 30.0, seed) + 0.05 * noise(x, y, 1.4, seed + 1), (0.55, 0.52, 0.46))


def tape(x: Image, y: Image, seed: int) -> Image:
    """Masking tape."""
    return _tinted(1 + 0.05 * noise(x, y, (0.8, 0.3), seed), (0.66, 0.56, 0.36))


def white_lid(x: Image, y: Image, seed: int) -> Image:
    """A scanner's white lid."""
    return plain(x, y, seed, (0.80, 0.81, 0.82), 0.004)


def grey_lid(x: Image, y: Image, seed: int) -> Image:
    """A white lid held off the glass by the slices: it gets less of the lamp's light."""
    return _tinted(1 + 0.03 * noise(x, y, 60.0, seed), (0.58, 0.59, 0.60))


def dark_lid(x: Image, y: Image, seed: int) -> Image:
    """The lid left open in a dim room, or a black cloth."""
    return plain(x, y, seed, (0.012, 0.012, 0.014), 0.05)


def blue_lid(x: Image, y: Image, seed: int) -> Image:
    """A sheet of blue card laid over the slices."""
    return plain(x, y, seed, (0.035, 0.10, 0.36), 0.03)


LOOKS: dict[str, Callable[[Image, Image, int], Image]] = {
    "paper": paper,
    "steel": steel,
    "aluminium": aluminium,
    "wood": wood,
    "rust": rust,
    "painted": painted,
    "oak table": oak_table,
    "bench": bench,
    "dark mat": dark_mat,
    "brickwork": brickwork,
    "plaster": plaster,
    "tape": tape,
    "white lid": white_lid,
    "grey lid": grey_lid,
    "dark lid": dark_lid,
    "blue lid": blue_lid,
}


def albedo(look: str, x: Image, y: Image, seed: int) -> Image:
    """Linear reflectance (h, w, 3) of a look at places x, y (h, w) mm. Raises KeyError for an unknown look."""
    return LOOKS[look](np.asarray(x, np.float32), np.asarray(y, np.float32), seed).astype(np.float32, copy=False)
