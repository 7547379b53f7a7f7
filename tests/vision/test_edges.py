"""Edges of half planes whose place is known, as a lens, a sensor and an 8-bit sRGB file make them.

The blurred step is the exact integral of a gaussian spread, averaged over each pixel's square by 8 x 8 samples.
"""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
import pytest
from cutface.vision.colour_profile import tone_curve
from cutface.vision.edges import (
    approach,
    estimate_blur,
    fit_step,
    locate,
    normal_profiles,
    search_walled_step,
)
from cutface.vision.light import Light
from scipy.special import ndtr
from simulated_sensor import encode

SIDE = 80
AT = np.array([39.3, 39.6])
# Rounding to whole stored values is an even error without a little noise; every sensor has more than this.
DITHER = 0.5 / 255


def half_plane(
    degrees: float, steps: Sequence[tuple[float, float]], spread: float, at: np.ndarray = AT
) -> tuple[np.ndarray, np.ndarray]:
    """((h, w) linear light, unit normal) of straight edges at stated distances along the normal.

    steps : (px along the normal from `at`, change of light there); the first is the light before them all
    """
    normal = np.array([np.cos(np.radians(degrees)), np.sin(np.radians(degrees))])
    sub = 8
    places = (np.arange(SIDE)[:, None] + (np.arange(sub) + 0.5) / sub - 0.5).ravel()
    along = normal[0] * (places[None, :] - at[0]) + normal[1] * (places[:, None] - at[1])
    light = np.full_like(along, steps[0][1])
    for offset, change in steps[1:]:
        light += change * ndtr((along - offset) / spread)
    return light.reshape(SIDE, sub, SIDE, sub).mean(axis=(1, 3)), normal


def as_file(light: np.ndarray, seed: int = 0) -> Light:
    """Light as an 8-bit sRGB file gives it back."""
    noise = DITHER * np.random.default_rng(seed).standard_normal(light.shape)
    stored = np.rint(np.clip(encode(light, "sRGB") + noise, 0, 1) * 255).astype(np.uint8)
    return Light(stored, tone_curve("srgb", 256))


def along_edge(normal: np.ndarray, off: np.ndarray | float, at: np.ndarray = AT, reach: float = 24.0) -> np.ndarray:
    """Points beside a straight edge, a pixel and a half apart, `off` px beyond it."""
    t = np.arange(-reach, reach + 0.1, 1.5)[:, None]
    return at + t * np.array([-normal[1], normal[0]]) + np.broadcast_to(off, t.shape[:1])[:, None] * normal


def line_spread(optics: float) -> float:
    """Of the optics and the pixel's own width."""
    return float(np.hypot(optics, np.sqrt(1 / 12)))


def errors(
    degrees: float,
    steps: Sequence[tuple[float, float]],
    optics: float,
    wall: float | None = None,
    seed: int = 0,
    known_blur: float | None = None,
) -> tuple[np.ndarray, np.ndarray]:
    """(px beyond the true edge, located) of every point when started up to 0.7 px off."""
    picture, normal = half_plane(degrees, steps, optics)
    points = along_edge(normal, 0.0)
    points = points + np.random.default_rng(seed).uniform(-0.7, 0.7, (len(points), 1)) * normal
    walls = None if wall is None else np.full(len(points), wall)
    blur = line_spread(optics) if known_blur is None else known_blur
    found = locate(as_file(picture, seed), points, np.tile(normal, (len(points), 1)), blur, walls)
    return (found.points - AT) @ normal, found.located


DIRECTIONS = [0.0, 7.0, 30.0, 45.0, 71.0, 90.0, 123.0, 180.0, 200.0, 270.0, 315.0, 341.0]


@pytest.mark.parametrize("optics", [0.5, 0.7, 1.2])
@pytest.mark.parametrize(
    ("inner", "outer"),
    [(0.02, 0.9), (0.9, 0.05), (0.05, 0.3), (0.2, 0.6), (0.5, 0.3), (0.02, 0.06), (0.45, 0.6)],
)
def test_no_bias_at_any_contrast_in_any_direction(inner: float, outer: float, optics: float) -> None:
    means = []
    for degrees in DIRECTIONS:
        error, located = errors(degrees, [(0.0, inner), (0.0, outer - inner)], optics)
        assert located.all()
        means.append(error.mean())
    assert np.abs(means).max() < 0.05
    # Common to all directions it would grow or shrink every face.
    assert abs(np.mean(means)) < 0.01


@pytest.mark.parametrize("known_blur", [0.6, 1.3])
def test_the_blur_need_not_be_known_exactly(known_blur: float) -> None:
    for degrees in DIRECTIONS:
        error, located = errors(degrees, [(0.0, 0.05), (0.0, 0.75)], 0.8, known_blur=known_blur)
        assert located.all()
        assert abs(error.mean()) < 0.02


def test_a_lens_out_of_focus_moves_no_edge() -> None:
    """The spread of a disc is no gaussian, but symmetric."""
    radius, half = 1.6, 5.0
    offsets = np.arange(-half, half + 0.25, 0.5)
    truth = np.linspace(-0.4, 0.4, 9)
    t = np.clip((offsets[None, :] - truth[:, None]) / radius, -1, 1)
    # Share of a disc to the left of a line.
    profiles = 0.1 + 0.6 * (0.5 + (t * np.sqrt(1 - t * t) + np.arcsin(t)) / np.pi)
    place, before, after, residual = fit_step(profiles, offsets, radius / 2)
    assert np.abs(place - truth).max() < 0.01
    assert np.all(np.abs(before - 0.1) < 0.01) and np.all(np.abs(after - 0.7) < 0.01)
    assert residual.max() < 0.02


@pytest.mark.parametrize("optics", [0.5, 0.7, 1.0, 1.5])
def test_scatter_is_near_the_least_possible(optics: float) -> None:
    """Against the bound for a step of known plateaus seen by unit samples, (sigma/C) sqrt(2 s sqrt(pi)).

    Reading the picture between pixels averages a little, estimating the plateaus costs a little.
    """
    rng = np.random.default_rng(2)
    s = line_spread(optics)
    contrast, noise = 0.5, 0.01
    bound = noise / contrast * np.sqrt(2 * s * np.sqrt(np.pi))
    found = []
    for degrees in (0.0, 20.0, 45.0, 110.0):
        for _ in range(4):
            at = AT + rng.uniform(-0.5, 0.5, 2)
            picture, normal = half_plane(degrees, [(0.0, 0.1), (0.0, contrast)], optics, at)
            stored = np.rint((picture + noise * rng.standard_normal(picture.shape)) * 65535).astype(np.uint16)
            points = along_edge(normal, 0.0, at)
            points = points + rng.uniform(-0.7, 0.7, (len(points), 1)) * normal
            light = Light(stored, tone_curve("linear", 65536))
            edge = locate(light, points, np.tile(normal, (len(points), 1)), s)
            found.append((edge.points - at) @ normal)
    # 528 points, neighbours share pixels: the deviation is known to some 5 %.
    assert 0.8 * bound < np.std(found) < 1.3 * bound


# Walls

WALLED = [
    pytest.param(0.3, 0.1, 0.8, id="dark wall"),
    pytest.param(0.3, 0.3, 0.8, id="wall of the face's tone"),
    pytest.param(0.3, 0.2, 0.8, id="wall of nearly the face's tone"),
    pytest.param(0.7, 0.2, 0.9, id="bright face"),
    pytest.param(0.3, 0.45, 0.8, id="wall between face and ground"),
    pytest.param(0.05, 0.02, 0.8, id="black face"),
    pytest.param(0.5, 0.1, 0.52, id="ground of nearly the face's tone"),
]


@pytest.mark.parametrize(("face", "wall", "ground"), WALLED)
@pytest.mark.parametrize(("optics", "width"), [(0.5, 2.5), (0.5, 6.0), (0.8, 3.5), (0.8, 9.0), (1.1, 4.5), (1.1, 15.0)])
def test_an_edge_before_a_wall_of_known_width(
    face: float, wall: float, ground: float, optics: float, width: float
) -> None:
    steps = [(0.0, face), (0.0, wall - face), (width, ground - wall)]
    for degrees in (0.0, 33.0, 200.0):
        error, located = errors(degrees, steps, optics, wall=width)
        assert located.all()
        assert abs(error.mean()) < 0.05


def test_a_single_step_beside_a_wall_is_no_worse() -> None:
    """Points with and without a wall are fitted together; those without one are as if alone."""
    picture, normal = half_plane(20.0, [(0.0, 0.2), (0.0, 0.6)], 0.7)
    points, normals = along_edge(normal, 0.3), np.tile(normal, (33, 1))
    light = as_file(picture)
    walls = np.where(np.arange(33) % 2 == 0, 5.0, 0.0)
    alone = locate(light, points, normals, line_spread(0.7))
    mixed = locate(light, points, normals, line_spread(0.7), walls)
    assert mixed.points[1::2] == pytest.approx(alone.points[1::2], abs=2e-3)


def searched(face: float, wall: float, ground: float, width: float, degrees: float) -> np.ndarray:
    """Px beyond the true edge after a search from up to 4 px off."""
    picture, normal = half_plane(degrees, [(0.0, face), (0.0, wall - face), (width, ground - wall)], 0.7)
    points = along_edge(normal, np.linspace(-4.0, 4.0, 33))
    normals, walls = np.tile(normal, (len(points), 1)), np.full(len(points), width)
    shift, found = search_walled_step(as_file(picture), points, normals, line_spread(0.7), walls, 7.0)
    assert found.all()
    return (points + shift[:, None] * normals - AT) @ normal


@pytest.mark.parametrize(
    ("face", "wall", "ground"),
    [
        pytest.param(0.3, 0.3, 0.8, id="wall of the face's tone"),
        pytest.param(0.3, 0.45, 0.8, id="wall between face and ground"),
        pytest.param(0.05, 0.02, 0.8, id="black face"),
    ],
)
@pytest.mark.parametrize("width", [4.0, 6.0, 9.0])
def test_searching_a_walled_edge_from_far(face: float, wall: float, ground: float, width: float) -> None:
    for degrees in (0.0, 25.0, 210.0):
        # Places are tried half a pixel apart; what is left is for `locate`, which starts from within about a pixel.
        assert np.abs(searched(face, wall, ground, width, degrees)).max() < 1.0


@pytest.mark.parametrize(("face", "wall", "ground"), [(0.7, 0.2, 0.9), (0.6, 0.2, 0.8), (0.3, 0.1, 0.8)])
def test_searching_the_edge_of_a_face_over_a_darker_wall(face: float, wall: float, ground: float) -> None:
    for degrees in (0.0, 25.0, 210.0):
        assert np.abs(searched(face, wall, ground, 6.0, degrees)).max() < 1.0


def test_searching_a_walled_edge_on_plain_ground_finds_none() -> None:
    picture, normal = half_plane(25.0, [(0.0, 0.6)], 0.7)
    points = along_edge(normal, 0.0)
    normals, walls = np.tile(normal, (len(points), 1)), np.full(len(points), 6.0)
    light = as_file(picture)
    shift, _ = search_walled_step(light, points, normals, 0.75, walls, 5.0)
    assert not locate(light, points + shift[:, None] * normals, normals, 0.75, walls).located.any()


# First corrections, blur, and what is no edge


@pytest.mark.parametrize("degrees", [0.0, 50.0, 195.0])
@pytest.mark.parametrize(("inner", "outer"), [(0.1, 0.8), (0.6, 0.5)])
def test_approach_from_far(degrees: float, inner: float, outer: float) -> None:
    picture, normal = half_plane(degrees, [(0.0, inner), (0.0, outer - inner)], 0.7)
    # The levels beside the rough place must be seen to be those of two sides: up to two thirds of the plateau.
    off = np.linspace(-4.0, 4.0, 33)
    shift, found = approach(as_file(picture), along_edge(normal, off), np.tile(normal, (33, 1)), 7.0, 6.5)
    assert found.all()
    assert np.abs(off + shift).max() < 0.5


def test_approach_takes_the_nearer_of_two_edges() -> None:
    """A face beside a line of its own: the level beyond is that of the strip between, not of what follows it."""
    picture, normal = half_plane(40.0, [(0.0, 0.2), (0.0, 0.6), (9.0, -0.7)], 0.7)
    off = np.linspace(-1.5, 1.5, 33)
    shift, found = approach(as_file(picture), along_edge(normal, off), np.tile(normal, (33, 1)), 5.0, 4.0)
    assert found.all()
    assert np.abs(off + shift).max() < 0.5


def test_approach_never_goes_beyond_its_reach() -> None:
    picture, normal = half_plane(40.0, [(0.0, 0.2), (0.0, 0.6)], 0.7)
    light, points, normals = as_file(picture), along_edge(normal, 12.0), np.tile(normal, (33, 1))
    shift, _ = approach(light, points, normals, 4.0, 5.0)
    assert np.abs(shift).max() <= 4.0
    # Grain may look like a crossing; it does not pass for an edge.
    assert not locate(light, points + shift[:, None] * normals, normals, 0.75).located.any()


@pytest.mark.parametrize("optics", [0.4, 0.7, 1.0, 1.6, 2.5])
def test_blur_is_read_off_the_edge(optics: float) -> None:
    picture, normal = half_plane(17.0, [(0.0, 0.15), (0.0, 0.55)], optics)
    points, normals = along_edge(normal, 0.0), np.tile(normal, (33, 1))
    offsets = np.arange(-8.0, 8.01, 0.5)
    profiles = normal_profiles(as_file(picture), points, normals, offsets)
    position = fit_step(profiles, offsets, 1.0)[0]
    # Reading between pixel centres adds up to a sixth of a square pixel to the spread.
    least, most = 0.95 * line_spread(optics), 1.05 * np.hypot(line_spread(optics), np.sqrt(1 / 6))
    assert least < estimate_blur(profiles, offsets, position) < most


def test_a_shadow_is_no_edge() -> None:
    _, located = errors(30.0, [(0.0, 0.8), (0.0, -0.4)], 6.0, known_blur=0.8)
    assert not located.any()


def test_grain_is_no_edge() -> None:
    rng = np.random.default_rng(6)
    light = Light(rng.integers(118, 138, (SIDE, SIDE)).astype(np.uint8), tone_curve("srgb", 256))
    normals = np.tile([0.6, 0.8], (33, 1))
    assert np.mean(locate(light, along_edge(normals[0], 0.0), normals, 0.8).located) < 0.05


def test_plateaus_are_those_of_the_two_sides() -> None:
    picture, normal = half_plane(60.0, [(0.0, 0.72), (0.0, -0.6)], 0.7)
    found = locate(as_file(picture), along_edge(normal, 0.2), np.tile(normal, (33, 1)), line_spread(0.7))
    # Within the grain of the file: a stored value of light tones is 0.7 % of white.
    assert found.inner == pytest.approx(0.72, abs=0.02)
    assert found.outer == pytest.approx(0.12, abs=0.02)


def test_colour_is_read_by_the_mix_of_channels() -> None:
    """Rust and blue card of the same luminance: an edge in red, none in luminance."""
    step, normal = half_plane(35.0, [(0.0, 0.0), (0.0, 1.0)], 0.7)
    red = 0.4 - 0.3 * step
    blue = 0.1 + 0.3 * step * 0.2126 / 0.0722 * 0.9
    stored = np.stack([np.rint(encode(c, "sRGB") * 255) for c in (red, np.full_like(red, 0.2), blue)], axis=-1)
    light = Light(stored.astype(np.uint8), tone_curve("srgb", 256), (1.0, 0.0, 0.0))
    found = locate(light, along_edge(normal, 0.3), np.tile(normal, (33, 1)), line_spread(0.7))
    assert found.located.all()
    assert abs(np.mean((found.points - AT) @ normal)) < 0.02
    assert found.inner == pytest.approx(0.4, abs=0.01)
