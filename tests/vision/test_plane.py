"""The plane against an independent pinhole camera, against general-purpose routines, and against its own statistics."""

from __future__ import annotations

from dataclasses import replace

import cv2
import numpy as np
import pytest
from camera_simulator import Camera
from cutface.vision import plane as plane_module
from cutface.vision.plane import (
    PRINCIPAL_POINT_STD,
    PRIOR_DECENTRING,
    PRIOR_RADIAL,
    Correspondences,
    Plane,
    corner_residuals,
    direct_homography,
    fit_plane,
)
from cutface.vision.references.board import CARD_SETS, SHEETS

FRAME = (1600, 1200)
CENTRE = ((FRAME[0] - 1) / 2, (FRAME[1] - 1) / 2)
HALF_DIAGONAL = float(np.hypot(*FRAME) / 2)
SHEET = SHEETS["A4"].saddles
CARD = CARD_SETS["small"][0].saddles
# Places of a face inside the sheet's window.
FACE = np.array([(60.0, 80.0), (130.0, 80.0), (130.0, 190.0), (60.0, 190.0), (95.0, 135.0)])


def camera(
    tilt: float = 12.0,
    direction: float = 40.0,
    distance: float = 620.0,
    focal: float = 1900.0,
    distortion: tuple[float, ...] = (-0.08, 0.03, 6e-4, -4e-4),
    centre: tuple[float, float] = CENTRE,
    aim: tuple[float, float] = (95.0, 135.0),
) -> Camera:
    lens = (distortion[0], distortion[1], distortion[2], distortion[3], 0.0)
    return Camera.looking_at(
        aim, distance, tilt, direction, 3.0, width=FRAME[0], height=FRAME[1], focal_px=focal, centre=centre,
        distortion=lens,
    )  # fmt: skip


STRAIGHT = (0.0, 0.0, 0.0, 0.0)


def seen(view: Camera, points: np.ndarray, height: float = 0.0) -> np.ndarray:
    return view.project(np.column_stack([points, np.full(len(points), height)]))


def laid(points: np.ndarray, a: float, b: float, turn: float) -> np.ndarray:
    """Points of a card that lies at (a, b), turned."""
    c, s = np.cos(turn), np.sin(turn)
    return np.column_stack([a + c * points[:, 0] - s * points[:, 1], b + s * points[:, 0] + c * points[:, 1]])


def fitted(view: Camera, points: np.ndarray = SHEET, noise: float = 0.0, seed: int = 1) -> Plane:
    pixels = seen(view, points) + noise * np.random.default_rng(seed).standard_normal((len(points), 2))
    return fit_plane([Correspondences(points, pixels)], FRAME)


# Homography and lens


@pytest.mark.parametrize(("tilt", "direction"), [(0.0, 0.0), (12.0, 40.0), (35.0, 200.0), (50.0, 310.0)])
def test_exact_corners_give_the_exact_plane(tilt: float, direction: float) -> None:
    view = camera(tilt, direction)
    plane = fitted(view)
    # The priors on the lens pull by less than a thousandth of a pixel, which is a third of a micrometre here.
    assert plane.residual_px < 1e-3
    assert np.abs(plane.to_pixels(FACE) - seen(view, FACE)).max() < 1e-3
    assert np.abs(plane.to_mm(seen(view, FACE)) - FACE).max() < 4e-4


@pytest.mark.parametrize("lens", [STRAIGHT, (-0.3, 0.1, 2e-3, -1e-3), (0.25, -0.05, -2e-3, 2e-3)])
def test_pixels_to_mm_and_back(lens: tuple[float, ...]) -> None:
    plane = fitted(camera(distortion=lens))
    x, y = np.meshgrid(np.linspace(0, FRAME[0] - 1, 9), np.linspace(0, FRAME[1] - 1, 7))
    pixels = np.column_stack([x.ravel(), y.ravel()])
    assert np.abs(plane.to_pixels(plane.to_mm(pixels)) - pixels).max() < 1e-8
    assert np.abs(plane.to_mm(plane.to_pixels(FACE)) - FACE).max() < 1e-9


def test_the_homography_maps_mm_to_undistorted_pixels() -> None:
    plane = fitted(camera(distortion=STRAIGHT))
    h = plane.homography
    w = np.c_[FACE, np.ones(len(FACE))] @ h.T
    pixels = w[:, :2] / w[:, 2:] * plane.radius + plane.centre
    assert np.abs(pixels - seen(camera(distortion=STRAIGHT), FACE)).max() < 1e-3


def test_the_lens_is_that_of_the_general_purpose_routines() -> None:
    """The terms mean what they mean in OpenCV for a focal length of the half diagonal."""
    lens = np.array([-0.12, 0.04, 1.5e-3, -8e-4])
    plane = fitted(camera(distortion=STRAIGHT))
    bent = replace(plane, parameters=np.concatenate([lens, plane.parameters[4:]]))
    matrix = np.array([[plane.radius, 0, plane.centre[0]], [0, plane.radius, plane.centre[1]], [0, 0, 1.0]])
    pixels = bent.to_pixels(SHEET)
    assert np.abs(pixels - plane.to_pixels(SHEET)).max() > 5.0
    criteria = (cv2.TERM_CRITERIA_COUNT + cv2.TERM_CRITERIA_EPS, 100, 1e-12)
    straight = cv2.undistortPoints(pixels.reshape(-1, 1, 2), matrix, np.append(lens, 0.0), None, None, matrix, criteria)
    assert np.abs(straight.reshape(-1, 2) - plane.to_pixels(SHEET)).max() < 1e-6


def test_direct_homography_against_the_general_purpose_routine() -> None:
    pixels = seen(camera(distortion=STRAIGHT, tilt=30.0), SHEET)
    ours, theirs = direct_homography(SHEET, pixels), cv2.findHomography(SHEET, pixels)[0]
    assert np.abs(ours / theirs - 1).max() < 1e-6


def test_direct_homography_of_just_four_points() -> None:
    four = SHEET[[0, 16, -17, -1]]
    pixels = seen(camera(), four)
    w = np.c_[four, np.ones(4)] @ direct_homography(four, pixels).T
    assert np.abs(w[:, :2] / w[:, 2:] - pixels).max() < 1e-6


def test_the_fit_leaves_less_than_the_general_purpose_homography() -> None:
    """With noise and no lens both minimise the same sum, so they agree far within the noise."""
    pixels = seen(camera(distortion=STRAIGHT), SHEET) + 0.2 * np.random.default_rng(3).standard_normal((len(SHEET), 2))
    plane = fit_plane([Correspondences(SHEET, pixels)], FRAME, lens_fixed=True)
    assert np.all(plane.parameters[:4] == 0)
    theirs = cv2.findHomography(SHEET, pixels, 0)[0]
    w = np.c_[SHEET, np.ones(len(SHEET))] @ theirs.T
    left = pixels - w[:, :2] / w[:, 2:]
    assert np.sum((pixels - plane.to_pixels(SHEET)) ** 2) <= np.sum(left**2) * (1 + 1e-6)
    assert np.abs(plane.to_pixels(FACE) - cv2.perspectiveTransform(FACE[:, None], theirs)[:, 0]).max() < 0.01


def test_analytic_jacobian_against_finite_differences() -> None:
    rng = np.random.default_rng(5)
    view = camera(tilt=25.0)
    scaled = [(rng.uniform(-1, 1, (7, 2)), rng.uniform(-0.5, 0.5, (7, 2))) for _ in range(3)]
    parameters = np.concatenate(
        [rng.normal(0, 0.05, 4), fitted(view).parameters[4:], [0.4, -0.2, 0.9, -0.7, 0.1, -2.5]]
    )
    _, jacobian = plane_module._residuals(parameters, scaled, lens_fixed=False)
    for index in range(len(parameters)):
        step = np.zeros(len(parameters))
        step[index] = 1e-6
        up, _ = plane_module._residuals(parameters + step, scaled, lens_fixed=False)
        down, _ = plane_module._residuals(parameters - step, scaled, lens_fixed=False)
        # Residuals are seen minus predicted, the Jacobian is that of what is predicted.
        assert np.abs((down - up) / 2e-6 - jacobian[:, index]).max() < 1e-7


def test_mm_per_px_is_the_slope_of_to_mm() -> None:
    plane = fitted(camera(tilt=40.0))
    pixels = seen(camera(tilt=40.0), FACE)
    jacobian = plane.mm_per_px(pixels)
    for axis in range(2):
        step = 1e-4 * np.eye(2)[axis]
        slope = (plane.to_mm(pixels + step) - plane.to_mm(pixels - step)) / 2e-4
        assert np.abs(jacobian[:, :, axis] - slope).max() < 1e-5 * np.abs(slope).max()


def test_turned_axes() -> None:
    plane = fitted(camera(), noise=0.05)
    turned = plane.turned(0.6)
    pixels = seen(camera(), FACE)
    expected = laid(plane.to_mm(pixels) - plane.origin, 0.0, 0.0, 0.6) + plane.origin
    assert np.abs(turned.to_mm(pixels) - expected).max() < 1e-9
    before = sum(np.sum(field**2, axis=1) for _, field in plane.displacements(plane.to_mm(pixels)))
    after = sum(np.sum(field**2, axis=1) for _, field in turned.displacements(expected))
    assert after == pytest.approx(before, rel=1e-4)


# Statistics


def test_residual_is_that_of_the_corners() -> None:
    plane = fitted(camera(), noise=0.08)
    # 204 corners: the rms of 408 residuals scatters by 3.5 %.
    assert plane.residual_px == pytest.approx(0.08, rel=0.12)


def test_covariance_against_the_scatter_of_many_fits() -> None:
    rng = np.random.default_rng(11)
    # Mid-range lens: the priors are weak against a whole sheet's corners.
    view = camera(tilt=15.0)
    pixels, exact = seen(view, SHEET), seen(view, FACE)
    places, predicted = [], []
    for _ in range(120):
        plane = fit_plane([Correspondences(SHEET, pixels + 0.1 * rng.standard_normal(pixels.shape))], FRAME)
        places.append(plane.to_mm(exact))
        predicted.append(sum(field**2 for _, field in plane.displacements(FACE)))
    error = np.array(places) - FACE
    expected = np.sqrt(np.mean(predicted, axis=0))
    # A deviation from 120 fits scatters by 6.5 %: a quarter is four of that.
    assert error.std(axis=0) / expected == pytest.approx(np.ones_like(expected), abs=0.26)
    assert np.all(np.abs(error.mean(axis=0)) < 4 * expected / np.sqrt(120))


@pytest.mark.parametrize("part", [(5, 4), (3, 3), (3, 2)])
def test_few_corners_leave_the_lens_uncertain(part: tuple[int, int]) -> None:
    """Lenses drawn from the prior, seen by part of one card: errors beside the card are as large as stated."""
    rng = np.random.default_rng(part)
    corners = CARD.reshape(4, 5, 2)[: part[1], : part[0]].reshape(-1, 2)
    away = np.array([(150.0, 25.0), (-60.0, 90.0)])
    ratios = []
    for _ in range(60):
        straight = camera(distortion=STRAIGHT, aim=(45.0, 45.0), distance=450.0)
        exact = fit_plane([Correspondences(SHEET, seen(straight, SHEET))], FRAME, lens_fixed=True)
        lens = rng.standard_normal(4) * (*PRIOR_RADIAL, PRIOR_DECENTRING, PRIOR_DECENTRING)
        true = replace(exact, parameters=np.concatenate([lens, exact.parameters[4:]]))
        pixels = true.to_pixels(corners) + 0.05 * rng.standard_normal(corners.shape)
        plane = fit_plane([Correspondences(corners, pixels)], FRAME)
        places = plane.to_mm(true.to_pixels(away))
        stated = np.sqrt(sum(field**2 for _, field in plane.displacements(places)))
        ratios.append((places - away) / stated)
    ratios = np.abs(np.array(ratios))
    # 95.4 % of normal errors lie within two standard deviations; 60 of them scatter by 2.7 %.
    assert np.all(np.mean(ratios < 2.0, axis=0) > 0.954 - 3 * 0.027)
    # And not so wide that it says nothing: half of normal errors exceed 0.67 of what is stated.
    assert np.all(np.median(ratios, axis=0) > 0.3)


def test_lens_share_of_the_uncertainty_shrinks_with_the_reference() -> None:
    def lens_part(points: np.ndarray) -> float:
        plane = fitted(camera(aim=(45.0, 45.0)), points, noise=0.05)
        fields = plane.displacements(np.array([[95.0, 135.0]]))
        return float(np.sqrt(sum(np.sum(field**2) for source, field in fields if source == "distortion")))

    assert lens_part(SHEET) < 0.1 * lens_part(CARD)


# Cards


def test_cards_at_unknown_places() -> None:
    view = camera(tilt=18.0, aim=(110.0, 60.0))
    places = [(0.0, 0.0, 0.0), (190.0, 12.0, 0.4), (95.0, 130.0, -2.2), (60.0, -90.0, np.pi / 2)]
    targets = [
        Correspondences(board.saddles, seen(view, laid(board.saddles, *place)))
        for board, place in zip(CARD_SETS["small"], places, strict=False)
    ]
    plane = fit_plane(targets, FRAME)
    # Cards of five corners say little of the lens, so its prior pulls a little more than with a sheet.
    assert np.array(plane.poses)[:, :2] == pytest.approx(np.array(places)[:, :2], abs=0.02)
    turns = np.array(plane.poses)[:, 2] - np.array(places)[:, 2]
    assert np.abs((turns + np.pi) % (2 * np.pi) - np.pi).max() < 2e-4
    assert np.abs(plane.to_pixels(FACE) - seen(view, FACE)).max() < 0.05
    assert np.concatenate(corner_residuals(plane, targets)) == pytest.approx(0.0, abs=2e-3)


def test_cards_on_two_sides_agree_with_their_stated_uncertainty() -> None:
    rng = np.random.default_rng(8)
    view = camera(tilt=10.0, aim=(110.0, 20.0))
    places = [(0.0, 0.0, 0.0), (190.0, 5.0, 0.3)]
    exact = [seen(view, laid(CARD, *place)) for place in places]
    ends = np.array([(65.0, 20.0), (180.0, 20.0)])
    lengths, stated = [], []
    for _ in range(80):
        targets = [Correspondences(CARD, e + 0.05 * rng.standard_normal(e.shape)) for e in exact]
        plane = fit_plane(targets, FRAME)
        a, b = plane.to_mm(seen(view, ends))
        lengths.append(np.linalg.norm(b - a))
        fields = [field for _, field in plane.displacements(np.array([a, b]))]
        along = (b - a) / np.linalg.norm(b - a)
        stated.append(np.sqrt(sum(((field[1] - field[0]) @ along) ** 2 for field in fields)))
    error = np.array(lengths) - np.linalg.norm(ends[1] - ends[0])
    # Stated for a lens drawn from its prior; this one lens may be kinder, never much harsher.
    assert np.sqrt(np.mean(error**2)) < 1.35 * np.sqrt(np.mean(np.square(stated)))
    # The card to the one side alone is far worse.
    fields = [field for _, field in fitted(view, CARD, noise=0.05).displacements(ends)]
    assert np.sqrt(sum((field[1, 0] - field[0, 0]) ** 2 for field in fields)) > 3 * np.mean(stated)


# The camera over the plane


@pytest.mark.parametrize(("tilt", "direction"), [(0.0, 0.0), (8.0, 100.0), (28.0, 215.0)])
@pytest.mark.parametrize("height", [-15.0, 4.0, 60.0])
def test_raised_plane_against_exact_projection(tilt: float, direction: float, height: float) -> None:
    view = camera(tilt, direction)
    raised = fitted(view).raised(height, view.focal_px)
    assert np.abs(raised.to_pixels(FACE) - seen(view, FACE, height)).max() < 0.01
    assert np.abs(raised.to_mm(seen(view, FACE, height)) - FACE).max() < 0.005


def test_an_ignored_height_enlarges_by_h_over_d_minus_h() -> None:
    view = camera(tilt=20.0)
    plane = fitted(view)
    pixels = seen(view, FACE, 20.0)
    plain = plane.to_mm(pixels)
    right = plane.raised(20.0, view.focal_px).to_mm(pixels)
    distance = plane.camera_height(view.focal_px)
    ratio = np.linalg.norm(plain[2] - plain[0]) / np.linalg.norm(right[2] - right[0])
    assert ratio == pytest.approx(1 + 20.0 / (distance - 20.0), abs=2e-5)


def test_raising_by_nothing_and_back() -> None:
    plane = fitted(camera(tilt=20.0))
    assert plane.raised(0.0, 1900.0) is plane
    back = plane.raised(12.0, 1900.0).raised(-12.0, 1900.0)
    assert np.abs(back.to_pixels(FACE) - plane.to_pixels(FACE)).max() < 1e-3


@pytest.mark.parametrize("tilt", [0.0, 9.0, 33.0])
def test_camera_height_and_tilt(tilt: float) -> None:
    view = camera(tilt, 75.0, distance=540.0)
    plane = fitted(view)
    assert plane.camera_height(view.focal_px) == pytest.approx(view.position[2], rel=2e-5)
    assert np.degrees(plane.tilt(view.focal_px)) == pytest.approx(tilt, abs=0.02)


@pytest.mark.parametrize("tilt", [15.0, 40.0])
def test_focal_length_from_the_perspective(tilt: float) -> None:
    found = fitted(camera(tilt, 25.0), noise=1e-4).focal_px()
    assert found is not None
    assert found[0] == pytest.approx(1900.0, rel=1e-3)


def test_a_frontal_view_tells_no_focal_length() -> None:
    assert fitted(camera(0.0, 0.0), noise=0.05).focal_px() is None


def test_focal_length_is_as_uncertain_as_stated() -> None:
    rng = np.random.default_rng(21)
    ratios = []
    for number in range(60):
        off = PRINCIPAL_POINT_STD * HALF_DIAGONAL * rng.standard_normal(2)
        view = camera(
            rng.uniform(10, 35), rng.uniform(0, 360), centre=(CENTRE[0] + off[0], CENTRE[1] + off[1]),
            distortion=STRAIGHT,
        )  # fmt: skip
        found = fitted(view, noise=0.05, seed=number).focal_px()
        assert found is not None
        ratios.append((found[0] - view.focal_px) / found[1])
    # The rms of 60 standard deviates lies within 28 % (three deviations) of one; the distribution has wider tails.
    assert 0.6 < float(np.sqrt(np.mean(np.square(ratios)))) < 1.4
    assert np.mean(np.abs(ratios) < 2.0) > 0.86
