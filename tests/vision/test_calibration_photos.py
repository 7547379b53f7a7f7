"""Calibrations from real photos of chessboards, judged by squares in photos that were not used."""

from functools import cache
from pathlib import Path

import pytest
from chessboard_scatter import SeenOnce, side_scatter
from cutface.vision.calibration import calibrate
from cutface.vision.photo import Photo, load_photo
from photo_sets import photo_set


@cache
def load(path: Path) -> Photo:
    return load_photo(path)


def photos(name: str, start: str = "") -> list[Photo]:
    return [load(path) for path in photo_set(name) if path.name.startswith(start)]


@pytest.mark.parametrize(("side", "focal", "within"), [("left", 532.8, 2.0), ("right", 537.4, 2.5)])
def test_two_cameras_before_one_board(side, focal, within):
    # Focal lengths and bounds: independent calibrations of the same photos.
    board = SeenOnce(9, 6, 25.0)
    pictures = photos("chessboard_stereo", side)
    camera = calibrate(pictures, board)
    assert camera.residual_px < 0.2
    assert camera.parameters[0] == pytest.approx(focal, abs=within)
    assert camera.tone == "linear"
    assert side_scatter(calibrate(pictures[::2], board), board, pictures[1::2]) < 0.0045


@pytest.mark.parametrize("side", ["left", "right"])
def test_an_industrial_camera_stores_light(side):
    board = SeenOnce(6, 4, 30.0)
    pictures = photos("chess_on_sheet_linear", side)
    camera = calibrate(pictures, board)
    assert camera.residual_px < 0.1
    assert camera.focal_px == pytest.approx(526.5, rel=0.006)
    assert camera.tone == "linear"
    # The sheet measures 0.3 % too much one way and too little the other: the print is stretched, pixels are square.
    assert camera.details["board_stretch"] == pytest.approx(0.002, abs=0.001)
    halves = [pictures[::2], pictures[1::2]]
    scatter = [side_scatter(calibrate(one, board), board, other) for one, other in (halves, halves[::-1])]
    assert max(scatter) < 0.0042 and min(scatter) < 0.0027


def test_a_consumer_camera_encodes_and_is_known_weakly_from_frontal_photos():
    camera = calibrate(photos("chess_on_sheet"), SeenOnce(6, 4, 30.0))
    assert camera.residual_px < 0.16
    assert camera.tone == "file"
    assert abs(camera.focal_px - 700.0) < 3 * camera.focal_std
    assert {"calibration-few", "calibration-coverage"} <= {n.code for n in camera.notices}


def test_a_board_that_is_not_flat_or_not_whole():
    board = SeenOnce(9, 6, 25.0)
    camera = calibrate(photos("chessboard_dashcam"), board)
    codes = {n.code: n.message for n in camera.notices}
    assert "view_01.jpg" in codes["board-incomplete"] and "view_05.jpg" in codes["board-incomplete"]
    assert "view_07.jpg" in codes["picture-size-differs"]
    assert camera.residual_px < 0.6
    assert camera.details["board_bow_mm"] > 1.0
    assert side_scatter(camera, board, [p for p in photos("chessboard_dashcam") if p.width == 1280]) < 0.0165
