"""Calibration of a wide-angle action camera from real photos, judged by squares in photos that were not used."""

import numpy as np
from chessboard_scatter import SeenOnce, side_scatter
from cutface.vision.calibration import calibrate
from cutface.vision.photo import load_photo
from photo_sets import photo_set


def test_a_wide_angle_lens_needs_the_rational_model():
    board = SeenOnce(8, 6, 25.0)
    pictures = [load_photo(path) for path in photo_set("chessboard_wide")]
    halves = [pictures[::2], pictures[1::2]]
    scatter = []
    for used, others in (halves, halves[::-1]):
        camera = calibrate(used, board)
        assert camera.details["lens_model"] == "rational"
        assert camera.residual_px < 0.3
        assert "lens-model" not in {n.code for n in camera.notices}
        scatter.append(side_scatter(camera, board, others))
    # Plain routines reach 0.44 to 0.48 % with the rational model, 9.7 % without any.
    assert np.mean(scatter) < 0.0044
