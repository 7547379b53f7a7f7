from pathlib import Path

import cv2
import numpy as np
import pytest
from cutface.props.errors import Refusal, UsageError
from cutface.vision.camera import Camera as Calibrated
from cutface.vision.measure import measure
from cutface.vision.photo import Photo, load_photo
from cutface.vision.references.chessboard import Chessboard, _refined, find_chessboard
from photo_sets import photo_set
from simulated_pattern import TABLE, checker, photograph
from simulated_view import Camera

BARREL = (-0.2, 0.05, 0.0, 0.0, 0.0)


def a_view(tilt=25.0, turn=4.0, distance=430.0, distortion=BARREL, aim=(75.0, 45.0)) -> Camera:
    return Camera.looking_at(
        aim,
        distance,
        tilt,
        40.0,
        turn,
        width=640,
        height=480,
        focal_px=700.0,
        centre=(322.0, 236.0),
        distortion=distortion,
    )


def a_photo(pixels) -> Photo:
    return Photo(Path("board.png"), "", pixels)


def solid(places):
    return np.c_[places, np.zeros(len(places))]


def test_corners_are_found_to_a_few_hundredths_of_a_pixel_and_in_order():
    view = a_view()
    corners = find_chessboard(photograph(view, checker(6, 4, 30.0)), 6, 4)
    assert corners is not None
    expected = view.project(solid(Chessboard(6, 4, 30.0).corners))
    assert np.sqrt(np.mean((corners - expected) ** 2)) < 0.06


@pytest.mark.parametrize("quarter", [0, 1, 2, 3])
def test_rows_run_down_the_picture_and_the_board_is_seen_from_the_front(quarter):
    pixels = np.ascontiguousarray(np.rot90(photograph(a_view(tilt=10.0, turn=20.0), checker(6, 4, 30.0)), quarter))
    corners = find_chessboard(pixels, 6, 4)
    assert corners is not None
    grid = corners.reshape(4, 6, 2)
    right, down = (grid[:, -1] - grid[:, 0]).mean(axis=0), (grid[-1] - grid[0]).mean(axis=0)
    assert right[0] * down[1] - right[1] * down[0] > 0
    assert down[1] > 0


def test_a_picture_without_the_whole_board_gives_none():
    pixels = photograph(a_view(), checker(6, 4, 30.0))
    assert find_chessboard(pixels, 7, 4) is None
    covered = pixels.copy()
    covered[150:330, 250:420] = 128
    assert find_chessboard(covered, 6, 4) is None
    with pytest.raises(Refusal) as caught:
        Chessboard(6, 4, 30.0).locate(a_photo(np.full((480, 640), 90, np.uint8)))
    assert caught.value.code == "no-chessboard"


def test_a_corner_led_astray_by_a_reflection_is_looked_for_again():
    # A first search at a part of the size takes a wrong corner in such pictures; the neighbours tell.
    pixels = photograph(a_view(), checker(6, 4, 30.0))
    corners = find_chessboard(pixels, 6, 4)
    assert corners is not None

    rough = corners.reshape(4, 6, 2).copy()
    rough[3, 5] += (14.0, -9.0)
    again = _refined(pixels, rough)
    assert again is not None
    assert np.abs(again.reshape(-1, 2) - corners).max() < 0.05


@pytest.mark.parametrize("side", [30.0, (30.1, 29.9)])
def test_places_come_out_in_true_millimetres(side):
    view = a_view()
    scale = (1.0, 1.0) if side == 30.0 else (30.1 / 30.0, 29.9 / 30.0)
    photo = a_photo(photograph(view, checker(6, 4, 30.0, scale=scale)))
    reference = Chessboard(6, 4, side, scale_std=0.0005).locate(photo)
    face = np.array([[20.0, 15.0], [130.0, 80.0], [75.0, -20.0], [-25.0, 60.0]])
    off = reference.face.to_mm(view.project(solid(face))) - face
    std = np.sqrt(sum(m.displacement**2 for m in reference.modes(face)))
    assert np.abs(off).max() < 0.2
    assert np.abs(off / std).max() < 3.0
    assert reference.residual_px < 0.06
    assert reference.details["focal_from"] == "perspective"
    # Its own black and white, told from the picture.
    tones = [
        photo.pixels[tuple(np.rint(places[:, ::-1]).astype(int).T)] for places in (reference.black, reference.white)
    ]
    assert tones[0].max() < 100 < 180 < tones[1].min()


def test_a_calibrated_camera_sees_the_plane_beyond_the_board_better():
    view = a_view()
    photo = a_photo(photograph(view, checker(6, 4, 30.0)))
    lens = np.array([700.0, 700.0, 322.0, 236.0, *BARREL])
    std = np.array([1.5, 1.5, 1.0, 1.0, 0.003, 0.01, 1e-4, 1e-4, 0.005])
    camera = Calibrated(640, 480, lens, np.diag(std**2), 0.1, 400.0)
    far = np.array([[-60.0, -50.0], [210.0, 140.0], [215.0, -40.0]])
    stds = []
    for kind in (Chessboard(6, 4, 30.0, scale_std=0.0), Chessboard(6, 4, 30.0, scale_std=0.0, camera=camera)):
        reference = kind.locate(photo)
        modes = reference.modes(far)
        stds.append(np.sqrt(sum(m.displacement**2 for m in modes if m.source not in ("plane offset", "tilt"))).max())
        off = reference.face.to_mm(view.project(solid(far))) - far
        assert np.abs(off).max() < 3.0 * stds[-1]
    assert stds[1] < 0.5 * stds[0]
    assert reference.details["focal_from"] == "calibration"
    with pytest.raises(Refusal) as caught:
        Chessboard(6, 4, 30.0, camera=camera).locate(a_photo(cv2.resize(photo.pixels, (800, 600))))
    assert caught.value.code == "camera-size"


def test_a_face_above_the_board_is_scaled_by_its_height():
    view = a_view(tilt=20.0)
    lens = np.array([700.0, 700.0, 322.0, 236.0, *BARREL])
    camera = Calibrated(640, 480, lens, np.diag((1e-4 * np.abs(lens) + 1e-6) ** 2), 0.1, 400.0)
    photo = a_photo(photograph(view, checker(6, 4, 30.0)))
    reference = Chessboard(6, 4, 30.0, camera=camera, face_height=25.0, face_height_std=0.1).locate(photo)
    face = np.array([[20.0, 15.0], [130.0, 80.0]])
    seen = view.project(np.c_[face, [25.0, 25.0]])
    assert np.abs(reference.face.to_mm(seen) - face).max() < 0.15
    assert reference.plane_offset_mm == 25.0


def test_a_dark_face_beside_the_board_is_measured_within_its_interval():
    view = a_view(tilt=15.0, aim=(110.0, 45.0), distance=560.0)

    board = checker(6, 4, 30.0)

    def scene(x, y):
        face = (x > 212) & (x < 282) & (y > 0) & (y < 90)
        return np.where(face, 0.08, np.where(board(x, y) == TABLE, 0.55, board(x, y)))

    photo = a_photo(photograph(view, scene))
    seed = tuple(view.project(np.array([[247.0, 45.0, 0.0]]))[0])
    measurement = measure(photo, reference=Chessboard(6, 4, 30.0), seeds=[seed])
    area = measurement.members[0].quantities["area"]
    assert area.interval95[0] < 70.0 * 90.0 < area.interval95[1]
    assert area.value == pytest.approx(6300.0, rel=0.01)
    assert measurement.reference.kind == "chessboard"


@pytest.mark.parametrize("fields", [{"columns": 2}, {"rows": 1}, {"square_mm": 0.0}, {"square_mm": (30.0, -1.0)}])
def test_boards_that_cannot_be_are_refused(fields):
    with pytest.raises(UsageError):
        Chessboard(**({"columns": 6, "rows": 4, "square_mm": 30.0} | fields))


def test_the_sheets_board_is_found_in_every_photo_and_lies_flat():
    board = Chessboard(6, 4, 30.0)
    for path in photo_set("chess_on_sheet"):
        reference = board.locate(load_photo(path))
        assert reference.residual_px < 0.2, path.name
        corners = reference.face.to_mm(reference.corners_px).reshape(4, 6, 2)
        sides = np.concatenate([np.linalg.norm(np.diff(corners, axis=axis), axis=2).ravel() for axis in (0, 1)])
        assert sides.std() / 30.0 < 0.0045, path.name
