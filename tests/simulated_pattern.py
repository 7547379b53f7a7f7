"""Grey photos of flat patterns by a simulated camera: every pixel averages what its rays meet.

    from simulated_pattern import checker, photograph
    pixels = photograph(view, checker(9, 6, 25.0))

Patterns are functions of true mm in the plane to reflectance. Shares no code with the measuring.
"""

from __future__ import annotations

from collections.abc import Callable

import cv2
import numpy as np
from numpy.typing import NDArray
from scipy.interpolate import RectBivariateSpline
from simulated_view import Camera, Floats

Pattern = Callable[[Floats, Floats], Floats]
BLACK, WHITE, TABLE = 0.05, 0.8, 0.3
_RAYS = 4


def checker(columns: int, rows: int, side: float, *, scale: tuple[float, float] = (1.0, 1.0)) -> Pattern:
    """A chessboard on white paper: corner (0, 0) at the origin, squares round the inner corners, half a side of rim."""

    def reflectance(x: Floats, y: Floats) -> Floats:
        u, v = np.asarray(x) / (side * scale[0]), np.asarray(y) / (side * scale[1])
        board = (u > -1) & (u < columns) & (v > -1) & (v < rows)
        paper = (u > -1.5) & (u < columns + 0.5) & (v > -1.5) & (v < rows + 0.5)
        black = (np.floor(u) + np.floor(v)) % 2 == 0
        return np.where(board & black, BLACK, np.where(paper, WHITE, TABLE))

    return reflectance


def marks(columns: int, rows: int, pitch: float, size: float, *, discs: bool = False, gain: float = 0.0) -> Pattern:
    """Squares or discs on white paper, grown by a print gain at every edge; the lower left centre at the origin."""

    def reflectance(x: Floats, y: Floats) -> Floats:
        column, row = np.round(np.asarray(x) / pitch), np.round(np.asarray(y) / pitch)
        dx, dy = x - column * pitch, y - row * pitch
        half = 0.5 * size + gain
        inside = np.hypot(dx, dy) < half if discs else np.maximum(np.abs(dx), np.abs(dy)) < half
        there = (column >= 0) & (column < columns) & (row >= 0) & (row < rows)
        rim = 0.75 * pitch
        paper = (x > -rim) & (x < (columns - 1) * pitch + rim) & (y > -rim) & (y < (rows - 1) * pitch + rim)
        return np.where(there & inside, BLACK, np.where(paper, WHITE, TABLE))

    return reflectance


def photograph(
    view: Camera, pattern: Pattern, *, blur_px: float = 0.6, noise: float = 0.003, tone: str = "sRGB", seed: int = 0
) -> NDArray[np.uint8]:
    """(h, w) picture of a pattern: optical blur, pixel average, noise, and a tone curve ("sRGB" or "linear")."""
    # The lens is as smooth as its few terms: a coarse grid of rays tells the rest.
    x, y = np.arange(-8.0, view.width + 16, 8.0), np.arange(-8.0, view.height + 16, 8.0)
    tangents = view.undistort((np.stack(np.meshgrid(x, y), axis=-1) - view.centre) / view.focal_px)
    fine = [(np.arange(n * _RAYS) + 0.5) / _RAYS - 0.5 for n in (view.height, view.width)]
    rays = [RectBivariateSpline(y, x, tangents[..., i])(*fine).astype(np.float32) for i in (0, 1)]
    rays = np.stack([*rays, np.ones_like(rays[0])], axis=-1) @ view.rotation.astype(np.float32)
    depth = -view.position[2] / np.minimum(rays[..., 2], -1e-6)
    light = pattern(view.position[0] + depth * rays[..., 0], view.position[1] + depth * rays[..., 1])
    light = cv2.GaussianBlur(light.astype(np.float32), (0, 0), blur_px * _RAYS)
    light = light.reshape(view.height, _RAYS, view.width, _RAYS).mean(axis=(1, 3))
    light = np.clip(light + np.random.default_rng(seed).normal(0, noise, light.shape), 0, 1)
    if tone == "sRGB":
        light = np.where(light <= 0.0031308, 12.92 * light, 1.055 * light ** (1 / 2.4) - 0.055)
    return np.round(255 * light).astype(np.uint8)
