"""Prints before a calibrated camera: what the calibration gains, and when it is left aside."""

from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest
from cutface.props.errors import Refusal
from cutface.vision.camera import Camera
from cutface.vision.photo import Photo
from cutface.vision.plane import Correspondences, Plane
from cutface.vision.posed_plane import PosedPlane, small_turn
from cutface.vision.references.print_plane import fit_print

WIDTH, HEIGHT, FOCAL = 4000, 3000, 3000.0
LENS = np.array([FOCAL, FOCAL, 2010.0, 1490.0, 0.02, -0.01, 0.0, 0.0, 0.0])
STDS = np.array([3.0, 3.0, 3.0, 3.0, 5e-4, 1e-3, 2e-5, 2e-5, 1e-3])
CAMERA = Camera(WIDTH, HEIGHT, LENS, np.diag(STDS**2), 0.08, 2400.0)
PHOTO = Photo(Path("p.jpg"), "", np.broadcast_to(np.uint8(0), (HEIGHT, WIDTH)))
PLACES = ((0.0, 0.0, 0.0), (180.0, 10.0, 0.4), (-20.0, 160.0, -1.1))


def ring() -> np.ndarray:
    """Corners of a sheet's ring, 12 mm apart, 180 by 260 mm."""
    x, y = (g.ravel() for g in np.meshgrid(np.arange(0, 181, 12.0), np.arange(0, 261, 12.0)))
    return np.column_stack([x, y])[(x < 36) | (x > 140) | (y < 36) | (y > 220)]


def seen(points: np.ndarray, rng: np.random.Generator, *, stretch=0.0, tilt=0.3, noise=0.05, lens=LENS) -> np.ndarray:
    """Pixels of plane points by a camera that looks at their middle from 500 mm."""
    rotation = small_turn(np.array([np.pi, 0, 0])) @ small_turn(np.array([tilt, 0.4 * tilt, 0.1]))
    true = points * (1 + stretch, 1 - stretch)
    middle = true.mean(axis=0)
    solid = np.c_[true - middle, np.zeros(len(true))] @ rotation.T + (5.0, -8.0, 500.0)
    camera = replace(CAMERA, parameters=lens)
    return camera.to_pixels(solid[:, :2] / solid[:, 2:]) + rng.normal(0, noise, (len(true), 2))


def test_without_a_calibration_the_lens_is_fitted() -> None:
    target = Correspondences(ring(), seen(ring(), np.random.default_rng(0)))
    plane, notices = fit_print(PHOTO, [target], None, 0.003, "the sheet")
    assert isinstance(plane, Plane) and notices == []


def test_a_calibration_shows_how_the_print_is_stretched() -> None:
    rng = np.random.default_rng(1)
    target = Correspondences(ring(), seen(ring(), rng, stretch=0.002))
    plane, notices = fit_print(PHOTO, [target], CAMERA, 0.003, "the sheet")
    assert isinstance(plane, PosedPlane) and notices == []
    assert plane.stretch[0] == pytest.approx(0.002, abs=4 * plane.stretch[1]) and plane.stretch[1] < 0.0006
    # The misses are those of the fit: with the stretch that was found, not with the print as designed.
    (misses,) = plane.corner_residuals([target])
    assert np.sqrt(np.mean(misses**2)) == pytest.approx(plane.residual_px, rel=1e-6)


def test_misses_of_several_cards_are_those_of_the_fit() -> None:
    card = np.stack(np.meshgrid(np.arange(0, 61, 12.0), np.arange(0, 49, 12.0)), axis=-1).reshape(-1, 2)
    whole = []
    for a, b, turn in PLACES:
        c, s = np.cos(turn), np.sin(turn)
        whole.append((card * (1.002, 0.998)) @ np.array([[c, s], [-s, c]]) + (a, b))
    pixels = np.split(seen(np.concatenate(whole), np.random.default_rng(2)), 3)
    targets = [Correspondences(card, p) for p in pixels]
    plane, _ = fit_print(PHOTO, targets, CAMERA, 0.003, "the cards")
    assert isinstance(plane, PosedPlane)
    misses = np.concatenate(plane.corner_residuals(targets))
    assert np.sqrt(np.mean(misses**2)) == pytest.approx(plane.residual_px, rel=1e-6) and plane.residual_px < 0.07
    turned = np.concatenate(plane.turned(0.7).corner_residuals(targets))
    assert np.abs(turned - misses).max() < 1e-6


def test_another_lens_is_noticed_and_not_used() -> None:
    rng = np.random.default_rng(3)
    other = LENS.copy()
    other[4] = -0.06
    target = Correspondences(ring(), seen(ring(), rng, lens=other))
    plane, (notice,) = fit_print(PHOTO, [target], CAMERA, 0.003, "the sheet")
    assert isinstance(plane, Plane) and notice.code == "camera-contradicted" and "not used" in notice.message
    zoomed = LENS * np.array([1.3, 1.3, 1, 1, 1, 1, 1, 1, 1])
    target = Correspondences(ring(), seen(ring(), rng, lens=zoomed, tilt=0.5))
    plane, (notice,) = fit_print(PHOTO, [target], CAMERA, 0.003, "the sheet")
    assert isinstance(plane, Plane) and notice.code == "camera-contradicted"


def test_pictures_of_another_size_are_refused_and_turned_ones_are_not() -> None:
    target = Correspondences(ring(), seen(ring(), np.random.default_rng(4)))
    small = replace(PHOTO, pixels=np.broadcast_to(np.uint8(0), (1500, 2000)))
    with pytest.raises(Refusal) as caught:
        fit_print(small, [target], CAMERA, 0.003, "the sheet")
    assert caught.value.code == "camera-size"
    upright = replace(PHOTO, pixels=np.broadcast_to(np.uint8(0), (WIDTH, HEIGHT)), orientation=6)
    # Stored (x, y) of a picture under orientation 6 is shown at (height - 1 - y, x).
    shown = np.column_stack([HEIGHT - 1 - target.pixels[:, 1], target.pixels[:, 0]])
    plane, notices = fit_print(upright, [Correspondences(target.target, shown)], CAMERA, 0.003, "the sheet")
    assert isinstance(plane, PosedPlane) and notices == [] and plane.residual_px < 0.06


def test_corners_beyond_the_calibration_are_told() -> None:
    target = Correspondences(ring(), seen(ring(), np.random.default_rng(5)))
    _, (notice,) = fit_print(PHOTO, [target], replace(CAMERA, reach_px=600.0), 0.003, "the sheet")
    assert notice.code == "beyond-calibration" and notice.message.startswith("The sheet lies")


def test_focusing_much_farther_than_in_calibration_widens_the_focal_length() -> None:
    target = Correspondences(ring(), seen(ring(), np.random.default_rng(6), tilt=0.02))

    def focal_std(**about) -> float:
        plane, _ = fit_print(PHOTO, [target], replace(CAMERA, **about), 0.003, "the sheet")
        assert isinstance(plane, PosedPlane)
        return plane.focal_px()[1] / FOCAL

    phone = {"focal_length_mm": 5.6}
    # 5.6 mm at 250 and at 500 mm: principal distances differ by 1.1 %, and anything between is likely.
    near, same = focal_std(**phone, details={"distance_mm": 250.0}), focal_std(**phone, details={"distance_mm": 500.0})
    assert same == pytest.approx(np.hypot(0.002, 0.001 / np.sqrt(2)), rel=0.2)
    assert near == pytest.approx(0.0115 / np.sqrt(3), rel=0.2)
    assert focal_std() == focal_std(details={"distance_mm": 250.0}) == pytest.approx(same)
