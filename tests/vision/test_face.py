"""Labels of faces in pictures put together from known masks: light, shadow, walls, holes, joints and dirt."""

from __future__ import annotations

import cv2
import numpy as np
import pytest
from cutface.vision.face import (
    MIN_SEPARATION,
    opened_background,
    otsu,
    sharp_level,
    smooth_background,
    traced,
    without_false_holes,
    without_gap,
    without_specks,
)
from cutface.vision.shade import flooded
from cutface.vision.walls import sharp_patches, without_hidden_foot, without_seen_walls, without_walls
from shapely import Polygon

SHAPE = (300, 400)
Y, X = np.mgrid[0 : SHAPE[0], 0 : SHAPE[1]].astype(float)
EVERYWHERE = np.ones(SHAPE, bool)


def polygon(corners) -> np.ndarray:
    mask = np.zeros(SHAPE, np.uint8)
    cv2.fillPoly(mask, [np.array(corners, np.int32)], 1)
    return mask.astype(bool)


CHANNEL = polygon([(110, 70), (260, 85), (258, 110), (140, 98), (128, 210), (246, 222), (243, 247), (95, 232)])
BLOCK = polygon([(120, 80), (280, 95), (268, 225), (108, 210)])


def disc(x: float, y: float, radius: float) -> np.ndarray:
    return np.hypot(X - x, Y - y) < radius


def seen(values: np.ndarray, noise: float = 0.008, blur: float = 0.7, seed: int = 0) -> np.ndarray:
    """Values as a reduced picture shows them: softened, with a little noise."""
    soft = cv2.GaussianBlur(values.astype(np.float32), (0, 0), blur)
    return soft + np.float32(noise) * np.random.default_rng(seed).standard_normal(values.shape).astype(np.float32)


def shadow(mask: np.ndarray, depth: float, reach: float) -> np.ndarray:
    """What a shadow that falls to the lower right of a mask takes of the light: deepest at the edge, fading away."""
    cast = np.zeros(SHAPE)
    for step in np.linspace(0.0, 1.0, 12):
        moved = cv2.warpAffine(
            mask.astype(np.float32), np.array([[1.0, 0, 0.8 * reach * step], [0, 1.0, 0.6 * reach * step]]), SHAPE[::-1]
        )
        cast = np.maximum(cast, moved * (1.0 - 0.6 * step))
    return depth * cv2.GaussianBlur(cast, (0, 0), 0.25 * reach)


def agreement(found: np.ndarray, mask: np.ndarray) -> float:
    """Share of both masks that they have in common."""
    return float(np.sum(found & mask) / np.sum(found | mask))


def within(found: np.ndarray, mask: np.ndarray, pixels: int) -> bool:
    """Whether two masks differ nowhere by more than so many pixels."""
    square = np.ones((2 * pixels + 1, 2 * pixels + 1), np.uint8)
    wide, narrow = cv2.dilate(mask.astype(np.uint8), square), cv2.erode(mask.astype(np.uint8), square)
    return bool(np.all(found <= wide.astype(bool)) and np.all(narrow.astype(bool) <= found))


# Levels


@pytest.mark.parametrize("face", [0.15, 0.4, 0.85])
@pytest.mark.parametrize("depth", [0.0, 0.2, 0.4])
def test_sharp_level_parts_a_face_from_its_shadow(face: float, depth: float) -> None:
    """Distance from white paper: the shadow is up to two fifths as dark as the face and fades slowly."""
    dark = np.maximum(face * CHANNEL, shadow(CHANNEL, depth * face, 50.0))
    distance = np.abs(seen(dark, noise=0.006))
    level, separation = sharp_level(distance, EVERYWHERE, 36)
    assert separation > MIN_SEPARATION
    assert within(without_specks(distance > level, 36), CHANNEL, 3)


def test_sharp_level_takes_the_bright_face_with_its_dark_walls() -> None:
    """A bright face is nearer to the paper than its walls are: the level must lie below both."""
    wall = polygon([(108, 210), (268, 225), (272, 240), (112, 224)]) & ~BLOCK
    distance = np.abs(seen(0.25 * BLOCK + 0.7 * wall, noise=0.006))
    level, separation = sharp_level(distance, EVERYWHERE, 36)
    assert separation > MIN_SEPARATION
    assert within(distance > level, BLOCK | wall, 2)


def test_sharp_level_of_a_grainy_face() -> None:
    rng = np.random.default_rng(3)
    grain = np.clip(0.4 + 0.08 * rng.standard_normal(SHAPE), 0.1, 0.9)
    distance = np.abs(seen(np.where(BLOCK, grain, 0.0), noise=0.006))
    level, separation = sharp_level(distance, EVERYWHERE, 36)
    assert separation > MIN_SEPARATION
    assert within(without_specks(distance > level, 200), BLOCK, 2)


@pytest.mark.parametrize("seed", range(4))
def test_plain_paper_has_no_face(seed: int) -> None:
    noise = np.abs(seen(np.zeros(SHAPE), noise=0.01, seed=seed))
    _, separation = sharp_level(noise, EVERYWHERE, 36)
    assert separation < MIN_SEPARATION


def test_a_shadow_alone_is_no_face() -> None:
    cast = cv2.GaussianBlur(0.5 * BLOCK.astype(np.float32), (0, 0), 18.0)
    distance = np.abs(seen(cast, noise=0.006))
    _, separation = sharp_level(distance, EVERYWHERE, 36)
    assert separation < MIN_SEPARATION
    relative = (1.0 - seen(cast, noise=0.006))[..., None].astype(np.float32)
    _, separation = flooded(relative, np.abs(1.0 - relative[..., 0]), EVERYWHERE)
    assert separation < MIN_SEPARATION


@pytest.mark.parametrize("noise", [0.03, 0.06])
def test_separation_falls_with_the_contrast(noise: float) -> None:
    """Contrast of 12 and of 3 noise deviations: the first is told, the second is refused."""
    told, lost = (
        sharp_level(np.abs(seen(step * BLOCK, noise=noise, blur=0.5)), EVERYWHERE, 36)[1]
        for step in (12 * noise, 2 * noise)
    )
    assert told > MIN_SEPARATION > lost


def test_otsu_cuts_between_two_tones() -> None:
    rng = np.random.default_rng(1)
    values = np.concatenate([rng.normal(0.2, 0.02, 3000), rng.normal(0.6, 0.03, 1000)])
    level, separation = otsu(values)
    assert 0.3 < level < 0.5
    assert separation == pytest.approx(0.4 / np.sqrt((0.02**2 + 0.03**2) / 2), rel=0.1)
    assert otsu(np.full(100, 0.3)) == (0.3, 0.0)


def flooded_in(light: np.ndarray) -> tuple[np.ndarray, float]:
    tone = seen(light, noise=0.004)[..., None]
    return flooded(tone, np.abs(1.0 - tone[..., 0]), EVERYWHERE)


@pytest.mark.parametrize(("left", "right"), [(0.3, 0.3), (0.3, 0.2), (0.5, 0.25)])
@pytest.mark.parametrize("reach", [24.0, 40.0])
def test_flooded_parts_a_face_from_a_shadow_as_dark_as_its_parts(left: float, right: float, reach: float) -> None:
    """No level parts the lighter half of the face from the shadow; its edge is sharp all round."""
    cast = 1.0 - shadow(BLOCK, 0.4, reach)
    mask, separation = flooded_in(np.where(BLOCK, np.where(X < 190, left, right), cast))
    assert separation > MIN_SEPARATION
    # Labels at a quarter of the size; the outline itself is located afterwards.
    assert agreement(mask, BLOCK) > 0.95


@pytest.mark.xfail(strict=True, reason="the boundary between the two tones passes for the edge of the face")
def test_flooded_never_takes_half_of_a_face_for_the_whole() -> None:
    """The lighter half is almost as light as the shadow along one side: refused or whole, never half."""
    cast = 1.0 - shadow(BLOCK, 0.5, 40.0)
    mask, separation = flooded_in(np.where(BLOCK, np.where(X < 190, 0.6, 0.3), cast))
    assert separation < MIN_SEPARATION or agreement(mask, BLOCK) > 0.9


def test_flooded_uses_colour() -> None:
    """A wooden face as light as the shadow beside it."""
    cast = 1.0 - shadow(BLOCK, 0.5, 30.0)
    channels = [np.where(BLOCK, tint, cast) for tint in (0.7, 0.5, 0.3)]
    tone = np.stack([seen(c, noise=0.004, seed=i) for i, c in enumerate(channels)], axis=-1)
    mask, separation = flooded(tone, np.abs(1.0 - tone).max(axis=2), EVERYWHERE)
    assert separation > MIN_SEPARATION
    assert agreement(mask, BLOCK) > 0.96


def test_background_is_fitted_through_what_most_places_show() -> None:
    def surface(x: np.ndarray, y: np.ndarray) -> np.ndarray:
        u, v = x / 400, y / 300
        return np.stack([0.7 + 0.2 * u - 0.1 * v + 0.1 * u * v, 0.6 - 0.2 * u * u, 0.5 + 0.1 * v * v], axis=-1)

    rng = np.random.default_rng(0)
    places = rng.uniform(0, 1, (600, 2)) * (400, 300)
    values = surface(*places.T) + 0.005 * rng.standard_normal((600, 3))
    # A sixth of the places lie in a shadow or on the face.
    soiled = places[:, 0] < 70
    assert 0.1 < soiled.mean() < 0.25
    values[soiled] *= 0.5
    clean = X > 70
    found = smooth_background(places, values, SHAPE)
    assert np.abs(found - surface(X, Y))[clean].max() < 0.02


# Parts of the labels


def test_specks_and_pinholes() -> None:
    mask = BLOCK | disc(40, 40, 3.0)
    mask &= ~disc(200, 150, 2.0) & ~disc(150, 150, 9.0)
    cleaned = without_specks(mask, 36)
    assert np.array_equal(cleaned, BLOCK & ~disc(150, 150, 9.0))


def test_narrow_gaps_are_closed_and_wide_ones_kept() -> None:
    scratch = (np.abs(X - Y - 40) < 2.0) & BLOCK
    slot = (np.abs(X - 230) < 8) & (Y < 150)
    opened = opened_background(BLOCK & ~scratch & ~slot, 6.0)
    # A scratch stays open for half of the width where it comes to the outside, and where it meets the slot.
    middle = cv2.erode(BLOCK.astype(np.uint8), np.ones((9, 9), np.uint8)).astype(bool) & (np.abs(X - 230) > 14)
    assert np.all(opened[scratch & middle])
    assert not opened[(np.abs(X - 230) < 6) & (Y < 145)].any()
    # Nothing is put where there was none beyond rounding its corners.
    assert agreement(opened, BLOCK & ~slot) > 0.995
    assert np.array_equal(opened_background(BLOCK, 2.0), BLOCK)


def test_gaps_at_the_border_of_the_picture() -> None:
    face = np.zeros(SHAPE, bool)
    face[:, 3:200] = True
    assert np.array_equal(opened_background(face, 9.0), face)


@pytest.mark.parametrize(("paper", "face"), [(0.85, 0.3), (0.03, 0.4)])
def test_holes_show_the_background_and_rings_do_not(paper: float, face: float) -> None:
    hole, ring = disc(160, 130, 14.0), disc(220, 170, 22.0) & ~disc(220, 170, 13.0)
    # A dark ring of timber or print dips half of the way to the background.
    light = np.where(BLOCK, np.where(ring, 0.5 * (paper + face), face), paper)
    light = seen(np.where(hole, paper, light), noise=0.004)
    labelled = BLOCK & ~hole & ~ring
    cleaned = without_false_holes(labelled, light, np.abs(light - paper))
    assert np.array_equal(cleaned, BLOCK & ~hole)


def test_a_hole_in_shadow_is_still_a_hole() -> None:
    hole = disc(160, 130, 14.0)
    # A quarter of the light is missing on the paper at its ground.
    light = seen(np.where(hole, 0.72, np.where(BLOCK, 0.2, 0.85)), noise=0.004)
    labelled = BLOCK & ~hole
    assert np.array_equal(without_false_holes(labelled, light, np.abs(light - 0.85)), labelled)


def test_a_dark_joint_is_taken_from_the_member_in_its_pocket() -> None:
    member = polygon([(130, 92), (268, 105), (257, 213), (119, 200)])
    light = seen(np.where(member, 0.3, np.where(BLOCK, 0.008, 0.45)), noise=0.002)
    found, doubtful = without_gap(BLOCK, light, 0.8)
    assert not doubtful
    assert within(found, member, 3)
    assert agreement(found, member) > 0.95


def test_a_joint_along_one_side_is_taken_off_and_told() -> None:
    member = polygon([(120, 80), (280, 95), (269, 216), (109, 201)])
    light = seen(np.where(member, 0.3, np.where(BLOCK, 0.008, 0.45)), noise=0.002)
    found, doubtful = without_gap(BLOCK, light, 0.8)
    assert doubtful
    assert agreement(found, member) > 0.97


def test_a_black_end_is_no_joint() -> None:
    end = BLOCK & (X > 225)
    light = seen(np.where(end, 0.008, np.where(BLOCK, 0.3, 0.45)), noise=0.002)
    found, doubtful = without_gap(BLOCK, light, 0.8)
    assert not doubtful
    assert np.array_equal(found, BLOCK)


def test_small_patches_of_a_black_face_are_not_the_face() -> None:
    core = cv2.erode(BLOCK.astype(np.uint8), np.ones((15, 15), np.uint8)).astype(bool)
    patches = core & (((X // 24) + (Y // 24)) % 3 == 0)
    light = seen(np.where(patches, 0.1, np.where(BLOCK, 0.01, 0.45)), noise=0.001)
    assert np.array_equal(without_gap(BLOCK, light, 0.8)[0], BLOCK)


def test_dark_heartwood_in_pale_sapwood_is_no_joint() -> None:
    heart = cv2.erode(BLOCK.astype(np.uint8), np.ones((25, 25), np.uint8)).astype(bool)
    light = seen(np.where(heart, 0.15, np.where(BLOCK, 0.5, 0.3)), noise=0.004)
    assert np.array_equal(without_gap(BLOCK, light, 0.8)[0], BLOCK)


def test_a_rusty_rim_is_no_joint() -> None:
    """Dark all round, but no black hole: an eighth of white paper's light."""
    core = cv2.erode(BLOCK.astype(np.uint8), np.ones((15, 15), np.uint8)).astype(bool)
    light = seen(np.where(core, 0.4, np.where(BLOCK, 0.1, 0.6)), noise=0.004)
    assert np.array_equal(without_gap(BLOCK, light, 0.8)[0], BLOCK)


def test_walls_below_an_edge_are_taken_away() -> None:
    wall = polygon([(108, 210), (268, 225), (274, 241), (114, 226)]) & ~BLOCK
    light = seen(np.where(BLOCK, 0.45, np.where(wall, 0.12, 0.85)), noise=0.004)
    found = without_walls(BLOCK | wall, ~(BLOCK | wall), light)
    # Mixed pixels along the wall's foot stay as specks.
    assert agreement(BLOCK | wall, BLOCK) < 0.9
    assert agreement(without_specks(found, 36), BLOCK) > 0.99


def test_a_dark_ring_within_the_face_is_no_wall() -> None:
    ring = disc(190, 150, 40.0) & ~disc(190, 150, 30.0)
    light = seen(np.where(ring, 0.12, np.where(BLOCK, 0.45, 0.85)), noise=0.004)
    assert np.array_equal(without_walls(BLOCK, ~BLOCK, light), BLOCK)


# Slices that stand above their ground


def swept(face: np.ndarray, shift: np.ndarray) -> np.ndarray:
    """A face and its walls: the face moved along the shift to its foot, all the way."""
    whole = np.zeros(SHAPE, bool)
    for part in np.linspace(0, 1, 41):
        place_x = (X - part * shift[..., 0]).astype(np.float32)
        place_y = (Y - part * shift[..., 1]).astype(np.float32)
        whole |= cv2.remap(face.astype(np.uint8), place_x, place_y, cv2.INTER_NEAREST).astype(bool)
    return whole


@pytest.mark.parametrize("direction", [(9.0, 6.0), (-10.0, 3.0), (0.0, -11.0)])
@pytest.mark.parametrize("hollow", [False, True])
def test_the_hidden_foot_tells_the_face(direction: tuple[float, float], hollow: bool) -> None:
    face = BLOCK & ~disc(190, 150, 30.0) if hollow else BLOCK
    shift = np.broadcast_to(np.array(direction, np.float32), (*SHAPE, 2))
    solid = swept(face, shift)
    assert agreement(solid, face) < 0.95
    found = without_hidden_foot(solid, shift, float(np.hypot(*direction)))
    assert agreement(found, face) > 0.985


def test_the_hidden_foot_under_a_camera_above_the_middle() -> None:
    """Walls are seen on no side outside and all round inside: the shift points to the middle."""
    face = BLOCK & ~disc(190, 150, 40.0)
    shift = np.stack([0.06 * (200.0 - X), 0.06 * (150.0 - Y)], axis=-1).astype(np.float32)
    solid = face | swept(face, shift)
    found = without_hidden_foot(solid, shift, float(np.linalg.norm(shift, axis=2).max()))
    assert agreement(found, face) > 0.985
    assert agreement(solid, face) < agreement(found, face)


def test_walls_left_in_a_re_entrant_corner() -> None:
    """The closing fills the corner of a channel; what looks like the walls seen elsewhere goes."""
    shift = np.broadcast_to(np.array([12.0, 9.0], np.float32), (*SHAPE, 2))
    solid = swept(CHANNEL, shift)
    light = seen(np.where(CHANNEL, 0.4, np.where(solid, 0.1, 0.85)), noise=0.004)
    rough = without_hidden_foot(solid, shift, 15.0)
    found = without_seen_walls(rough, solid, light, 15.0)
    assert agreement(found, CHANNEL) > 0.97
    assert agreement(found, CHANNEL) >= agreement(rough, CHANNEL)
    # Walls of the face's own tone tell nothing: nothing is taken away.
    alike = seen(np.where(solid, 0.4, 0.85), noise=0.02)
    assert np.array_equal(without_seen_walls(rough, solid, alike, 15.0), rough)


def test_sharp_patches_are_bores_and_not_stains() -> None:
    stain = cv2.GaussianBlur(disc(230, 170, 22.0).astype(np.float32), (0, 0), 8.0)
    light = seen(np.where(disc(160, 130, 12.0), 0.1, np.where(BLOCK, 0.45, 0.85)) - 0.3 * stain, noise=0.004)
    found = sharp_patches(BLOCK, light, 6.0)
    assert len(found) == 1
    assert found[0] == pytest.approx([160.0, 130.0], abs=1.5)


# Loops


@pytest.mark.parametrize("factor", [1, 4])
def test_traced_loops_are_in_photo_pixels(factor: int) -> None:
    mask = np.zeros((60, 80), bool)
    mask[10:40, 20:60] = True
    mask[20:30, 30:45] = False
    (region,) = traced(mask, factor)
    # The first reduced pixel of the face covers photo pixels 20 f .. 20 f + f - 1; its edge lies half a pixel outside.
    expected = np.array([20 * factor - 0.5, 10 * factor - 0.5, 60 * factor - 0.5, 40 * factor - 0.5])
    assert np.array(Polygon(region.shell).bounds) == pytest.approx(expected, abs=0.15 * factor)
    (hole,) = region.holes
    expected = np.array([30 * factor - 0.5, 20 * factor - 0.5, 45 * factor - 0.5, 30 * factor - 0.5])
    assert np.array(Polygon(hole).bounds) == pytest.approx(expected, abs=0.15 * factor)


def turning(loop: np.ndarray) -> float:
    """Signed area with y up."""
    x, y = loop[:, 0], -loop[:, 1]
    return 0.5 * float(np.sum(x * np.roll(y, -1) - np.roll(x, -1) * y))


def test_traced_regions_holes_and_islands() -> None:
    mask = disc(130, 150, 80.0) & ~disc(130, 150, 50.0) | disc(130, 150, 20.0) | disc(320, 100, 30.0)
    regions = traced(mask, 1)
    assert [len(r.holes) for r in regions] == [1, 0, 0]
    assert [round(float(np.sqrt(turning(r.shell) / np.pi))) for r in regions] == [80, 30, 20]
    assert turning(regions[0].holes[0]) == pytest.approx(-np.pi * 50.0**2, rel=0.01)


def test_a_face_that_reaches_the_border_is_closed_there() -> None:
    mask = np.zeros(SHAPE, bool)
    mask[:, :50] = True
    (region,) = traced(mask, 1)
    assert turning(region.shell) == pytest.approx(50 * 300, rel=0.01)
