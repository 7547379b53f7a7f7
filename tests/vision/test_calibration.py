"""Calibrations from corners whose camera is known: projected by OpenCV's own routine, with noise."""

from dataclasses import dataclass, field
from pathlib import Path

import cv2
import numpy as np
import pytest
from camera_simulator import Flatbed, Light, Print, Scene, Sensor, render
from cutface.props.errors import Refusal, UsageError
from cutface.vision.calibration import calibrate
from cutface.vision.calibration_boards import BoardSighting, CharucoBoard, PrintedBoards
from cutface.vision.photo import Photo
from cutface.vision.references.board import SHEETS

TRUE = np.array([702.0, 702.0, 322.0, 236.0, -0.25, 0.09, 0.0005, -0.0004, 0.0])
SIZE = (640, 480)


@dataclass
class Seen:
    """A board whose sightings were made beforehand."""

    by_photo: dict[str, list[BoardSighting]]
    label: str = "a board"
    asked: list[str] = field(default_factory=list)

    def sightings(self, photo: Photo) -> list[BoardSighting]:
        self.asked.append(photo.path.name)
        return self.by_photo.get(photo.path.name, [])


def photo(name: str, size=SIZE, **fields) -> Photo:
    return Photo(Path(name), "", np.zeros((size[1], size[0]), np.uint8), **fields)


def board(columns=9, rows=6, side=25.0):
    row, column = np.divmod(np.arange(columns * rows), columns)
    return np.column_stack([column, rows - 1 - row]) * side


def views(count, rng, *, noise=0.1, tilt=0.6, distance=(330, 600), spread=110.0, bow=0.0, stretch=0.0, true=TRUE):
    """Photos of the board and what is seen of it."""
    target = board()
    middle = target.mean(axis=0)
    half = np.linalg.norm(target - middle, axis=1).max()
    about = (target - middle) * (1 + stretch, 1 - stretch)
    solid = np.c_[about, bow * (1 - ((target[:, 0] - middle[0]) / half) ** 2)]
    matrix = np.array([[true[0], 0, true[2]], [0, true[1], true[3]], [0, 0, 1]])
    found, photos = {}, []
    for number in range(count):
        for _ in range(200):
            turn = np.array([np.pi, 0, 0]) + rng.uniform(-tilt, tilt, 3) * (1, 1, 0.5)
            place = np.array([*rng.uniform(-spread, spread, 2), rng.uniform(*distance)])
            pixels = cv2.projectPoints(solid, turn, place, matrix, true[4:])[0].reshape(-1, 2)
            if np.all((pixels > 3) & (pixels < np.array(SIZE) - 4)):
                break
        name = f"{number}.jpg"
        found[name] = [BoardSighting(target, pixels + rng.normal(0, noise, pixels.shape))]
        photos.append(photo(name))
    return photos, Seen(found)


def test_the_camera_is_found_and_the_stated_uncertainty_is_the_real_one():
    off = []
    for seed in range(6):
        photos, seen = views(10, np.random.default_rng(seed))
        camera = calibrate(photos, seen)
        assert camera.details["lens_model"] == "five coefficients"
        assert camera.residual_px == pytest.approx(0.1 * np.sqrt(2), rel=0.15)
        assert camera.focal_px == pytest.approx(702.0, rel=0.01)
        off.append((camera.parameters - TRUE)[:6] / np.sqrt(np.diag(camera.covariance))[:6])
        # Along the lens: places, not coefficients, are what counts.
        ring = 250.0 * np.column_stack([np.cos(np.arange(12)), np.sin(np.arange(12))]) + TRUE[2:4]
        truth = cv2.undistortPoints(
            ring.reshape(-1, 1, 2), np.array([[702.0, 0, 322], [0, 702, 236], [0, 0, 1]]), TRUE[4:], None, None
        ).reshape(-1, 2)
        assert np.abs(camera.to_directions(ring) - truth).max() < 0.006
    assert 0.5 < np.sqrt(np.mean(np.square(off))) < 1.3


def test_a_bowed_board_and_a_stretched_print_do_not_pass_for_the_lens():
    photos, seen = views(12, np.random.default_rng(1), bow=1.5, stretch=0.002)
    camera = calibrate(photos, seen)
    assert camera.details["board_bow_mm"] == pytest.approx(1.5, rel=0.35)
    assert camera.details["board_stretch"] == pytest.approx(0.002, abs=0.0007)
    std = np.sqrt(np.diag(camera.covariance))
    assert np.all(np.abs(camera.parameters - TRUE)[:4] < 3.5 * std[:4])
    assert camera.parameters[0] == pytest.approx(camera.parameters[1], rel=0.002)
    assert camera.residual_px < 0.17


def test_the_rational_model_is_taken_only_when_the_corners_ask_for_it():
    true = np.append([281.0, 281.0, 325.0, 248.0, 0.258, -0.021, 0.0, 0.0, 0.002], [0.532, -0.013, 0.003])
    photos, seen = views(14, np.random.default_rng(2), true=true, distance=(90, 200), tilt=0.7)
    camera = calibrate(photos, seen)
    assert camera.details["lens_model"] == "rational" and len(camera.parameters) == 12
    assert camera.residual_px < 0.16
    assert camera.focal_px == pytest.approx(281.0, rel=0.01)


def test_photos_held_upright_serve_the_same_sensor():
    rng = np.random.default_rng(4)
    photos, seen = views(8, rng)
    turned = []
    for one in photos:
        if rng.random() < 0.5:
            # Stored pixel (x, y) of a picture under orientation 6 is shown at (height - 1 - y, x).
            (sighting,) = seen.by_photo[one.path.name]
            x, y = sighting.pixels.T
            seen.by_photo[one.path.name] = [BoardSighting(sighting.target, np.column_stack([SIZE[1] - 1 - y, x]))]
            one = photo(one.path.name, SIZE[::-1], orientation=6)
        turned.append(one)
    assert {p.orientation for p in turned} == {1, 6}
    camera = calibrate(turned, seen)
    assert (camera.width, camera.height) == SIZE
    assert camera.residual_px < 0.17
    assert camera.focal_px == pytest.approx(702.0, rel=0.01)


def test_photos_that_cannot_be_used_are_left_out_and_named():
    photos, seen = views(9, np.random.default_rng(5))
    seen.by_photo.pop("3.jpg")
    other = photo("small.jpg", (320, 240))
    camera = calibrate([*photos, other], seen)
    codes = {n.code: n.message for n in camera.notices}
    assert "3.jpg" in codes["board-incomplete"]
    assert "small.jpg" in codes["picture-size-differs"]
    assert camera.details["photos"] == 8


def refusal(photos, seen) -> Refusal:
    with pytest.raises(Refusal) as caught:
        calibrate(photos, seen)
    assert caught.value.remedy
    return caught.value


def test_weak_geometry_is_refused_in_plain_words():
    rng = np.random.default_rng(6)
    assert refusal([], Seen({})).code == "calibration-photos"
    assert refusal(*views(3, rng)).code == "calibration-photos"
    frontal = refusal(*views(8, rng, tilt=0.01))
    assert frontal.code == "calibration-frontal" and "square on" in frontal.message
    assert refusal(*views(8, rng, distance=(1500, 1600), spread=20.0)).code in {
        "calibration-coverage",
        "calibration-weak",
    }
    photos, seen = views(8, rng)
    for name in seen.by_photo:
        # Corners counted wrongly: rows taken for columns.
        (sighting,) = seen.by_photo[name]
        order = np.arange(54).reshape(6, 9).T.ravel()
        seen.by_photo[name] = [BoardSighting(sighting.target, sighting.pixels[order])]
    assert refusal(photos, seen).code == "lens-model"


@pytest.mark.parametrize(
    "fields",
    [
        [{"make": "A", "model": "one"}, {"make": "A", "model": "two"}],
        [{"focal_length_mm": 4.0}, {"focal_length_mm": 9.0}],
        [{"digital_zoom": 1.0}, {"digital_zoom": 2.0}],
    ],
)
def test_several_cameras_or_zooms_are_not_mixed(fields):
    photos, seen = views(8, np.random.default_rng(7))
    mixed = [photo(p.path.name, **fields[i % 2]) for i, p in enumerate(photos)]
    assert refusal(mixed, seen).code == "several-cameras"


def test_noise_beyond_any_lens_is_told():
    photos, seen = views(10, np.random.default_rng(8), noise=0.7)
    camera = calibrate(photos, seen)
    assert "lens-model" in {n.code for n in camera.notices}
    assert camera.residual_px > 0.6


def test_few_photos_and_an_uncovered_frame_are_told():
    photos, seen = views(4, np.random.default_rng(10), spread=20.0, distance=(480, 520))
    codes = {n.code for n in calibrate(photos, seen).notices}
    assert {"calibration-few", "calibration-coverage"} <= codes


def test_our_own_sheet_is_a_board():
    sheet = SHEETS["A4"]
    bed = Flatbed(700, 960, (84.0, 84.0))
    scene = Scene(
        "scan", 1, bed, (Print(sheet, origin=(12, 8)),), (), "white lid", Light(vignetting=0, shadow=0), Sensor()
    )
    picture = Photo(Path("scan.png"), "", render(scene))
    (sighting,) = PrintedBoards().sightings(picture)
    ppm = 84.0 / 25.4
    expected = np.column_stack([(sighting.target[:, 0] + 12) * ppm - 0.5, 959.5 - (sighting.target[:, 1] + 8) * ppm])
    assert np.abs(sighting.pixels - expected).max() < 0.25
    assert PrintedBoards().sightings(photo("empty.jpg")) == []


def test_a_charuco_board_is_found_without_its_markers_pulling_the_corners():
    charuco = CharucoBoard(7, 5, 30.0, 20.0, "DICT_4X4_50")
    dictionary = cv2.aruco.getPredefinedDictionary(cv2.aruco.DICT_4X4_50)
    drawn = cv2.aruco.CharucoBoard((7, 5), 30.0, 20.0, dictionary).generateImage((1400, 1000), marginSize=0)
    # 200 px a square; seen at 60 px, turned a little.
    c, s = 0.3 * np.cos(0.2), 0.3 * np.sin(0.2)
    matrix = np.array([[c, -s, 120.0], [s, c, 50.0]])
    smooth = cv2.GaussianBlur(drawn, (0, 0), 2.0)
    picture = cv2.warpAffine(smooth, matrix, (640, 480), flags=cv2.INTER_AREA, borderValue=255)
    (sighting,) = charuco.sightings(photo_of(picture))
    assert len(sighting.target) == 24
    # Target mm have y up and begin at the upper left corner.
    drawn_px = sighting.target * (200 / 30, -200 / 30) - 0.5
    expected = drawn_px @ matrix[:, :2].T + matrix[:, 2]
    assert np.sqrt(np.mean((sighting.pixels - expected) ** 2)) < 0.08
    assert charuco.sightings(photo("empty.jpg")) == []


def photo_of(pixels) -> Photo:
    return Photo(Path("picture.png"), "", pixels)


@pytest.mark.parametrize(
    "fields",
    [{"marker_mm": 30.0}, {"columns": 2}, {"dictionary": "DICT_9X9"}, {"dictionary": "Board"}, {"square_mm": 0.0}],
)
def test_charuco_boards_that_cannot_be_are_refused(fields):
    with pytest.raises(UsageError):
        CharucoBoard(**({"columns": 7, "rows": 5, "square_mm": 30.0, "marker_mm": 20.0} | fields))
