import json
from dataclasses import replace
from hashlib import sha256
from pathlib import Path

import cv2
import numpy as np
import pytest
from cutface.props.errors import FileError
from cutface.props.result import Notice
from cutface.vision.calibration_plot import camera_misses, residual_svg, write_residual_plot
from cutface.vision.camera import Camera, CornerResiduals, lens_turns_back
from cutface.vision.camera_file import find_camera, other_camera, read_camera, write_camera
from cutface.vision.photo import Photo, turn_upright
from cutface.vision.plane import Correspondences
from cutface.vision.posed_plane import fit_posed_plane, small_turn

FIVE = np.array([702.0, 701.0, 322.0, 236.0, -0.25, 0.09, 0.0012, -0.0008, 0.02])
RATIONAL = np.append(FIVE, [0.1, 0.03, -0.01])


def a_camera(parameters=FIVE, std=0.0, **about) -> Camera:
    stds = (
        np.abs(parameters) * 1e-6
        + std * np.array([2, 2, 1.5, 1.5, 0.01, 0.03, 3e-4, 3e-4, 0.02, 0.1, 0.1, 0.1])[: len(parameters)]
    )
    return Camera(640, 480, parameters, np.diag(stds**2), 0.1, 380.0, **about)


def a_pose(tilt=0.4, distance=500.0):
    # The board's x to the right, its y up, its z towards the camera.
    return small_turn(np.array([np.pi, 0, 0])) @ small_turn(np.array([tilt, 0.3 * tilt, 0.1])), np.array(
        [12.0, -8.0, distance]
    )


def seen(parameters, rotation, translation, points):
    matrix = np.array([[parameters[0], 0, parameters[2]], [0, parameters[1], parameters[3]], [0, 0, 1]])
    solid = np.c_[points, np.zeros(len(points))] if points.shape[1] == 2 else points
    return cv2.projectPoints(solid, cv2.Rodrigues(rotation)[0], translation, matrix, parameters[4:])[0].reshape(-1, 2)


def a_board(columns=7, rows=5, side=30.0):
    row, column = np.divmod(np.arange(columns * rows), columns)
    return np.column_stack([column, row]) * side - np.array([columns - 1, rows - 1]) * side / 2


@pytest.mark.parametrize("parameters", [FIVE, RATIONAL])
def test_directions_and_pixels_agree_with_opencv_and_with_each_other(parameters):
    camera = a_camera(parameters)
    pixels = np.random.default_rng(0).uniform((0, 0), (639, 479), (200, 2))
    directions = camera.to_directions(pixels)
    assert np.abs(camera.to_pixels(directions) - pixels).max() < 1e-8
    ours = camera.to_pixels(directions)
    theirs = seen(parameters, np.eye(3), np.zeros(3), np.c_[directions, np.ones(200)])
    assert np.abs(ours - theirs).max() < 1e-8


@pytest.mark.parametrize("orientation", range(1, 9))
def test_a_turned_picture_is_seen_by_the_turned_camera(orientation):
    camera = a_camera(RATIONAL, std=1.0)
    upright = camera.upright(orientation)
    stored = np.zeros((480, 640), np.int32)
    places = [(20, 30), (600, 40), (100, 450), (333, 222)]
    for number, (x, y) in enumerate(places, start=1):
        stored[y, x] = number
    turned = turn_upright(stored.astype(np.uint8), orientation)
    assert turned.shape == (upright.height, upright.width)
    for number, place in enumerate(places, start=1):
        y, x = np.argwhere(turned == number)[0]
        theirs, ours = (
            camera.to_directions(np.array([place], float))[0],
            upright.to_directions(np.array([[x, y]], float))[0],
        )
        # The sensor turned, the light did not: the angle off the axis is the same.
        assert np.linalg.norm(ours) == pytest.approx(np.linalg.norm(theirs), abs=1e-12)
    assert np.linalg.det(upright.covariance) == pytest.approx(np.linalg.det(camera.covariance), rel=1e-6)


def test_a_lens_whose_model_turns_back_within_the_frame_is_told():
    assert not lens_turns_back(FIVE, 640, 480)
    barrel = FIVE.copy()
    barrel[4:9] = -0.9, 0, 0, 0, 0
    assert lens_turns_back(barrel, 640, 480)


def test_the_pose_of_a_board_is_found_through_a_strong_lens():
    rotation, translation = a_pose()
    board = a_board()
    plane = fit_posed_plane([Correspondences(board, seen(RATIONAL, rotation, translation, board))], a_camera(RATIONAL))
    assert plane.residual_px < 1e-6
    face = np.array([[-150.0, 20.0], [40.0, 110.0], [130.0, -90.0]])
    pixels = seen(RATIONAL, rotation, translation, face)
    assert np.abs(plane.to_mm(pixels) - face).max() < 1e-4
    assert np.abs(plane.to_pixels(face) - pixels).max() < 1e-4
    # Perpendicular distance of the lens from the plane, and the plane 20 mm nearer.
    lens = -rotation.T @ translation
    assert plane.camera_height() == pytest.approx(lens[2], abs=1e-3)
    raised = plane.raised(20.0)
    above = np.c_[face, np.full(3, 20.0)]
    assert np.abs(raised.to_mm(seen(RATIONAL, rotation, translation, above)) - face).max() < 1e-4
    assert raised.camera_height() == pytest.approx(lens[2] - 20.0, abs=1e-3)
    numeric = np.stack([(plane.to_mm(pixels + h) - plane.to_mm(pixels - h)) / 2e-4 for h in 1e-4 * np.eye(2)], axis=-1)
    assert np.abs(plane.mm_per_px(pixels) - numeric).max() < 1e-3


def test_turning_the_axes_turns_the_places():
    rotation, translation = a_pose()
    board = a_board()
    plane = fit_posed_plane([Correspondences(board, seen(FIVE, rotation, translation, board))], a_camera())
    turned = plane.turned(0.3)
    pixels = plane.to_pixels(np.array([[40.0, 10.0]]))
    c, s = np.cos(0.3), np.sin(0.3)
    assert turned.to_mm(pixels)[0] == pytest.approx([c * 40 - s * 10, s * 40 + c * 10], abs=1e-6)
    assert turned.to_pixels(turned.to_mm(pixels))[0] == pytest.approx(pixels[0], abs=1e-6)


def test_several_boards_in_one_plane_are_placed_to_each_other():
    rotation, translation = a_pose(0.5, 700.0)
    card = a_board(5, 4, 12.0)
    turn = 0.4
    other = card @ np.array([[np.cos(turn), np.sin(turn)], [-np.sin(turn), np.cos(turn)]]) + (130.0, 40.0)
    plane = fit_posed_plane(
        [
            Correspondences(card, seen(FIVE, rotation, translation, card)),
            Correspondences(card, seen(FIVE, rotation, translation, other)),
        ],
        a_camera(),
    )
    assert plane.poses[0] == (0.0, 0.0, 0.0)
    assert plane.poses[1] == pytest.approx((130.0, 40.0, turn), abs=1e-4)


def test_square_pixels_show_a_print_stretched_along_one_axis():
    rotation, translation = a_pose(0.35)
    board = a_board()
    printed = board * (1.003, 0.997)
    plane = fit_posed_plane(
        [Correspondences(board, seen(FIVE, rotation, translation, printed))], a_camera(), print_scale_std=0.003
    )
    assert plane.stretch[0] == pytest.approx(0.003, abs=3e-5)
    face = np.array([[-60.0, 40.0], [70.0, 30.0]])
    # What is left is the mean scale, which nothing but a ruler tells.
    ratio = plane.to_mm(seen(FIVE, rotation, translation, face)) / face
    assert ratio == pytest.approx(np.ones((2, 2)), abs=2e-4)


def test_stated_uncertainty_is_what_repeated_photos_scatter_by():
    rng = np.random.default_rng(3)
    rotation, translation = a_pose(0.3)
    board, face = a_board(), np.array([[-170.0, -20.0], [0.0, 130.0], [160.0, 60.0]])
    calibrated = a_camera(std=1.0)
    off = []
    for _ in range(60):
        true = rng.multivariate_normal(FIVE, calibrated.covariance)
        pixels = seen(true, rotation, translation, board) + rng.normal(0, 0.1, board.shape)
        plane = fit_posed_plane([Correspondences(board, pixels)], calibrated)
        places = plane.to_mm(seen(true, rotation, translation, face))
        std = np.sqrt(sum(field**2 for _, field in plane.displacements(places)))
        off.append((places - face) / std)
    assert np.sqrt(np.mean(np.square(off))) == pytest.approx(1.0, abs=0.2)
    assert {source for source, _ in plane.displacements(face)} == {"camera calibration", "reference corners"}


def full_camera() -> Camera:
    rng = np.random.default_rng(1)
    misses = tuple(
        CornerResiduals(
            f"board {i}.jpg", rng.uniform((0, 0), (639, 479), (12, 2)).round(4), rng.normal(0, 0.1, (12, 2)).round(4)
        )
        for i in range(3)
    )
    camera = a_camera(
        RATIONAL,
        1.0,
        make="Alder",
        model="A 7",
        focal_length_mm=5.6,
        focal_length_35mm=26.0,
        tone="linear",
        residuals=misses,
        details={"board": "a chessboard of 9 x 6 inner corners", "photos": 3},
        notices=(Notice("calibration-few", "3 photos.", "More."),),
    )
    return camera


def test_a_cameras_file_gives_the_camera_back(tmp_path):
    camera = full_camera()
    read = read_camera(write_camera(camera, tmp_path / "cameras" / "alder.json"))
    assert np.array_equal(read.parameters, camera.parameters)
    assert np.array_equal(read.covariance, camera.covariance)
    for name in ("width", "height", "residual_px", "reach_px", "make", "model", "tone", "notices", "details"):
        assert getattr(read, name) == getattr(camera, name)
    assert [r.photo for r in read.residuals] == [r.photo for r in camera.residuals]
    assert np.array_equal(read.residuals[2].misses, camera.residuals[2].misses)
    document = json.loads((tmp_path / "cameras" / "alder.json").read_text())
    assert document["lens"]["parameters"]["fx"] == 702.0
    assert document["lens"]["std"]["fx"] == pytest.approx(2.0, rel=1e-3)


def test_files_that_are_no_cameras_are_refused_in_one_line(tmp_path):
    good = write_camera(full_camera(), tmp_path / "good.json").read_text()
    bad = tmp_path / "bad.json"

    def changed(path: list, value) -> str:
        document = json.loads(good)
        inner = document
        for key in path[:-1]:
            inner = inner[key]
        inner[path[-1]] = value
        return json.dumps(document)

    for text in (
        "",
        "{}",
        "[1, 2]",
        good[: len(good) // 2],
        changed(["schema"], "cutface/measurement/1"),
        changed(["lens", "covariance"], [[1.0]]),
        changed(["lens", "covariance", 0, 0], -1.0),
        changed(["lens", "parameters", "fx"], "wide"),
        changed(["lens", "parameters", "fx"], float("nan")),
        changed(["camera", "width_px"], None),
        changed(["camera", "tone"], {}),
        changed(["fit", "residuals"], [{"photo": "a", "corners": [[1, 2, 3]]}]),
    ):
        bad.write_text(text)
        with pytest.raises(FileError) as caught:
            read_camera(bad)
        assert "\n" not in str(caught.value)
        assert "bad.json" in caught.value.message
    with pytest.raises(FileError):
        read_camera(tmp_path / "missing.json")
    with pytest.raises(FileError):
        write_camera(full_camera(), bad / "no folder.json")


def test_the_camera_of_a_photo_is_found_by_what_the_photo_says(tmp_path):
    camera = full_camera()
    write_camera(camera, tmp_path / "a.json")
    write_camera(replace(camera, focal_length_mm=13.0, focal_length_35mm=60.0), tmp_path / "tele.json")
    write_camera(replace(camera, model="A 8"), tmp_path / "other.json")
    (tmp_path / "broken.json").write_text("no camera")

    def photo(**fields) -> Photo:
        about = {"make": "Alder", "model": "A 7", "focal_length_mm": 5.6, "focal_length_35mm": 26.0} | fields
        shape = about.pop("shape", (480, 640))
        return Photo(Path("p.jpg"), "", np.zeros(shape, np.uint8), **about)

    found, others = find_camera(photo(), tmp_path)
    assert found is not None and found.focal_length_mm == 5.6 and found.model == "A 7"
    assert (
        found.file is not None and found.summary["sha256"] == sha256((tmp_path / found.file).read_bytes()).hexdigest()
    )
    assert any("13 mm" in other for other in others)
    # Held upright: the same sensor.
    assert find_camera(photo(shape=(640, 480), orientation=6), tmp_path)[0] is not None
    far = find_camera(photo(focal_length_mm=13.0, focal_length_35mm=60.0), tmp_path)[0]
    assert far is not None and far.focal_length_mm == 13.0
    for other in (
        {"model": "A 9"},
        {"model": None},
        {"make": None},
        {"focal_length_mm": 7.0},
        {"focal_length_mm": None},
        {"shape": (960, 1280)},
        {"shape": (640, 480)},
        {"digital_zoom": 2.0},
    ):
        assert find_camera(photo(**other), tmp_path)[0] is None


def test_why_a_camera_is_another_is_said_in_words():
    camera = replace(full_camera(), digital_zoom=2.0)

    def photo(**about):
        about = {
            "make": camera.make,
            "model": camera.model,
            "focal_length_mm": camera.focal_length_mm,
            "focal_length_35mm": camera.focal_length_35mm,
            "digital_zoom": 2.0,
        } | about
        shape = about.pop("shape", (480, 640))
        return Photo(Path("p.jpg"), "", np.zeros(shape, np.uint8), **about)

    assert other_camera(camera, photo()) is None
    # A file stripped of what its camera wrote may still be stated to be of it.
    stripped = dict.fromkeys(("make", "model", "focal_length_mm", "focal_length_35mm"))
    assert other_camera(camera, photo(**stripped)) is None
    for other, word in (
        ({"shape": (960, 1280)}, "1280 x 960"),
        ({"model": "A 9"}, "A 9"),
        ({"focal_length_mm": 7.0}, "7 mm"),
        ({"focal_length_35mm": 60.0}, "60 mm"),
        ({"digital_zoom": None}, "zoom"),
        ({"file_format": "RAW"}, "raw file"),
    ):
        assert word in (other_camera(camera, photo(**other)) or "")


def test_the_misses_are_drawn(tmp_path):
    camera = full_camera()
    text = residual_svg(camera_misses(camera))
    assert text.count("M") >= 36 and "36 corners, 3 views" in text
    assert write_residual_plot(camera_misses(camera), tmp_path / "plot.svg").read_text() == text
    picture = cv2.imread(str(write_residual_plot(camera_misses(camera), tmp_path / "plot.png")))
    blue = (picture[..., 0] > 140) & (picture[..., 2] < 60)
    assert picture.shape[1] == 924 and blue.sum() > 36 * 5
    with pytest.raises(FileError):
        write_residual_plot(camera_misses(camera), tmp_path / "plot.gif")
