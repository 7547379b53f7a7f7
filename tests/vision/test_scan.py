from pathlib import Path

import numpy as np
import pytest
from cutface.props.errors import Refusal, UsageError
from cutface.vision.photo import Photo, load_photo
from cutface.vision.references.scan import scan_resolution
from photo_sets import photo_set


def scan(**fields) -> Photo:
    return Photo(path=Path("scan.tif"), sha256="", pixels=np.zeros((4, 4), np.uint8), **fields)


def test_the_files_own_resolution_of_each_axis():
    x, y, notices = scan_resolution(scan(resolution_dpi=(300.0, 600.0)))
    assert (x, y) == (25.4 / 300, 25.4 / 600)
    assert notices == ()


@pytest.mark.parametrize(
    ("fields", "code"),
    [
        ({}, "no-resolution"),
        ({"resolution_problem": "the file states 1 x 1 dots per inch, which makes no sense"}, "no-resolution"),
        ({"resolution_dpi": (72.0, 72.0)}, "default-resolution"),
        ({"resolution_dpi": (72.009, 72.009)}, "default-resolution"),
        ({"resolution_dpi": (96.0, 96.0)}, "default-resolution"),
        ({"resolution_dpi": (350.0, 350.0), "focal_length_mm": 28.0}, "camera-resolution"),
    ],
)
def test_what_is_no_scale_is_refused(fields, code):
    with pytest.raises(Refusal) as caught:
        scan_resolution(scan(**fields))
    assert caught.value.code == code
    assert fields.get("resolution_problem", "") in caught.value.message
    # The person's word goes before it.
    assert scan_resolution(scan(**fields), 400)[:2] == (25.4 / 400, 25.4 / 400)


def test_a_stated_resolution_goes_before_the_files_and_says_so():
    x, _, notices = scan_resolution(scan(resolution_dpi=(300.0, 300.0)), 600)
    assert x == 25.4 / 600
    assert [notice.code for notice in notices] == ["resolution-overridden"]
    assert scan_resolution(scan(resolution_dpi=(299.9994, 299.9994)), (300, 300))[2] == ()


@pytest.mark.parametrize("stated", [0, -300, 20, 20000, float("nan"), (300.0, 0.0)])
def test_a_stated_resolution_must_make_sense(stated):
    with pytest.raises(UsageError) as caught:
        scan_resolution(scan(), stated)
    assert caught.value.code == "resolution-out-of-range"


def test_scanned_cards_state_their_resolution():
    for path in photo_set("punched_cards"):
        photo = load_photo(path)
        x, y, notices = scan_resolution(photo)
        # A card is 187.33 mm long; 1181 pixels of scan show it with a rim.
        assert 187.3 < photo.height * y < 210
        assert x == y == pytest.approx(25.4 / 150, rel=2e-4)
        assert notices == ()
