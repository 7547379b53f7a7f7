"""Shadows drawn beside and within dark and bright shapes, with the grain that paper and metal have."""

from __future__ import annotations

import cv2
import numpy as np
import pytest
from cutface.vision.shade import flooded, is_cast_shadow, settled, shaded_ground

SIZE = (240, 320)


def disc(x: float, y: float, radius: float) -> np.ndarray:
    rows, columns = np.mgrid[: SIZE[0], : SIZE[1]]
    return np.hypot(columns - x, rows - y) <= radius


def lit(*painted: tuple[np.ndarray, float], blur: float = 1.0) -> np.ndarray:
    """(h, w, 1) light over that of the paper; each mask in turn is given its light."""
    tone = np.ones(SIZE, np.float32)
    for mask, light in painted:
        tone[mask] = light
    noise = np.random.default_rng(1).normal(0, 0.004, SIZE)
    return (cv2.GaussianBlur(tone, (0, 0), blur) + noise).astype(np.float32)[..., None]


RING = disc(140, 120, 70) & ~disc(140, 120, 55)


def moved(mask: np.ndarray, dx: int, dy: int) -> np.ndarray:
    return np.roll(np.roll(mask, dx, axis=1), dy, axis=0)


@pytest.mark.parametrize(("dx", "dy"), [(10, 0), (-6, 9), (0, -12)])
def test_the_shadow_of_a_ring_is_one(dx: int, dy: int) -> None:
    steps = np.linspace(0, 1, 25)
    cast = np.logical_or.reduce([moved(RING, round(s * dx), round(s * dy)) for s in steps]) & ~RING
    assert is_cast_shadow(RING, cast, lit((cast, 0.7)), 30.0)
    coloured = lit((cast, 0.7)) * np.array([1.0, 0.9, 0.6], np.float32)
    assert not is_cast_shadow(RING, cast, coloured, 30.0)


def test_the_lighter_half_of_a_face_is_none() -> None:
    face = np.zeros(SIZE, bool)
    face[60:180, 80:240] = True
    dark = face.copy()
    dark[:, 150:] = False
    frame = cv2.dilate(RING.astype(np.uint8), np.ones((9, 9), np.uint8)).astype(bool) & ~RING
    assert not is_cast_shadow(dark, face & ~dark, lit((face, 0.7)), 30.0)
    assert not is_cast_shadow(RING, frame, lit((frame, 0.7)), 30.0)


@pytest.mark.parametrize("shade", [0.95, 0.85, 0.75])
def test_ground_in_shade_within_a_bright_cell(shade: float) -> None:
    outer = disc(160, 120, 90)
    hole = disc(160, 120, 60)
    tone = lit((outer, 0.5), (hole, shade))
    ground = shaded_ground(outer, tone, 20)
    assert np.mean(ground[disc(160, 120, 55)]) == 1.0
    assert not ground[outer & ~disc(160, 120, 66)].any()


@pytest.mark.parametrize("patch", [0.58, 0.42, 0.2])
def test_patches_of_the_face_are_no_ground(patch: float) -> None:
    outer = disc(160, 120, 90)
    assert not shaded_ground(outer, lit((outer, 0.5), (disc(140, 110, 25), patch)), 20).any()


def test_a_small_dark_ring_among_its_soft_shadow() -> None:
    """Far less than a hundredth of the picture is edge; the limits must reach the steepness of these few."""
    ring = disc(200, 120, 24) & ~disc(200, 120, 17)
    shadow = cv2.GaussianBlur(moved(ring, 5, 3).astype(np.float32), (0, 0), 4.0)
    tone = lit((ring, 0.25)) * (1 - 0.4 * np.where(ring, 0, shadow))[..., None].astype(np.float32)
    face, separation = flooded(tone, np.abs(tone[..., 0] - 1), np.ones(SIZE, bool))
    face &= ~shaded_ground(face, tone, 20)
    assert separation > 6
    # Labels are good to a pixel.
    assert (face ^ ring).sum() < 2 * np.pi * (24 + 17)


def test_both_sides_settle_on_the_edge() -> None:
    face = disc(150, 120, 50)
    found = settled(lit((face, 0.3)), disc(150, 120, 30), ~disc(150, 120, 75))
    assert (found ^ face).sum() < 0.5 * 2 * np.pi * 50
