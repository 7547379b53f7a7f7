"""Sheets of paper and printed marks measured end to end by the pattern printed on them, as a person would.

The sheets are US Letter, 215.9 x 279.4 mm (ANSI/ASME Y14.1 size A, from memory); the prints are nominal.
"""

from functools import cache
from pathlib import Path

import numpy as np
import pytest
from chessboard_scatter import SeenOnce
from cutface.props.errors import Refusal
from cutface.vision.calibration import calibrate
from cutface.vision.measure import Measurement, measure
from cutface.vision.photo import Photo, load_photo
from cutface.vision.references.chessboard import Chessboard
from cutface.vision.references.squares import Discs, Squares
from photo_sets import photo_set

LETTER_MM2 = 215.9 * 279.4
# Where a person would point: on the paper beside the pattern, mm from its lower left point.
BESIDE_BOARD, BESIDE_SQUARES = (75.0, -45.0), (60.0, -25.0)


@cache
def load(path: Path) -> Photo:
    return load_photo(path)


def sheet(photo: Photo, kind, place) -> Measurement:
    seed = kind.locate(photo).face.to_pixels(np.array([place]))[0]
    return measure(photo, reference=kind, seeds=[tuple(seed)])


def area_off(measurement: Measurement) -> float:
    """Relative error of the sheet's area; fails where the interval does not hold the truth."""
    area = measurement.members[0].quantities["area"]
    assert area.interval95[0] < LETTER_MM2 < area.interval95[1]
    return area.value / LETTER_MM2 - 1


def test_a_sheet_with_squares_on_a_table():
    kind = Squares(3, 4, 60.0, 30.0, role="on face")
    paths = {path.stem[-2:]: path for path in photo_set("squares_on_sheet")}
    off = [area_off(sheet(load(paths[number]), kind, BESIDE_SQUARES)) for number in ("03", "09", "11", "13")]
    assert np.abs(off).max() < 0.006
    for number in ("05", "07"):
        with pytest.raises(Refusal) as caught:
            sheet(load(paths[number]), kind, BESIDE_SQUARES)
        assert caught.value.code == "face-cut"


def test_a_sheet_with_a_chessboard_by_a_consumer_camera():
    kind = Chessboard(6, 4, 30.0, role="on face")
    paths = {path.stem[-2:]: path for path in photo_set("chess_on_sheet")}
    off = [area_off(sheet(load(paths[number]), kind, BESIDE_BOARD)) for number in ("01", "13")]
    assert np.abs(off).max() < 0.004
    for number in ("05", "07", "09", "11"):
        with pytest.raises(Refusal) as caught:
            sheet(load(paths[number]), kind, BESIDE_BOARD)
        assert caught.value.code == "face-cut"


def test_a_sheet_with_a_chessboard_by_a_calibrated_camera_that_stores_light():
    pictures = [load(path) for path in photo_set("chess_on_sheet_linear") if path.name.startswith("left")]
    camera = calibrate(pictures, SeenOnce(6, 4, 30.0))
    kind = SeenOnce(6, 4, 30.0, role="on face", camera=camera)
    off = []
    for photo in pictures[3:9]:
        measured = sheet(photo, kind, BESIDE_BOARD)
        assert measured.reference.details["tone"] == "linear"
        off.append(area_off(measured))
    assert np.abs(off).max() < 0.006 and np.std(off) < 0.0025


def test_printed_squares_and_discs_have_one_size_in_all_photos():
    # Printed 30 mm squares and 15 mm discs: what is more is print gain, the same in every photo.
    for name, kind, size in (
        ("squares_on_sheet", Squares(3, 4, 60.0, 30.0, role="itself"), lambda area: np.sqrt(area)),
        ("discs", Discs(10, 8, 25.0, 15.0, role="itself"), lambda area: 2 * np.sqrt(area / np.pi)),
    ):
        means = []
        for path in photo_set(name)[:3]:
            photo = load(path)
            reference = kind.locate(photo)
            sizes = []
            for index in (len(reference.corners_px) // 2, len(reference.corners_px) // 2 + 2):
                middle = reference.face.to_mm(reference.corners_px[index : index + 1])
                half = 0.49 * kind.pitch_mm
                cell = reference.face.to_pixels(middle + half * np.array([[-1, -1], [1, -1], [1, 1], [-1, 1]]))
                seed = tuple(reference.corners_px[index])
                measured = measure(photo, reference=kind, seeds=[seed], within=[tuple(c) for c in cell])
                sizes.append(size(measured.members[0].quantities["area"].value))
            means.append(np.mean(sizes))
        nominal = 30.0 if name == "squares_on_sheet" else 15.0
        assert np.all((np.array(means) > nominal - 0.1) & (np.array(means) < nominal + 0.45)), (name, means)
        assert np.ptp(means) < 0.25, (name, means)
