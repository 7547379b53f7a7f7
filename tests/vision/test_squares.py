from pathlib import Path

import numpy as np
import pytest
from cutface.props.errors import Refusal, UsageError
from cutface.vision.measure import measure
from cutface.vision.photo import Photo, load_photo
from cutface.vision.references.squares import Discs, Squares, find_grid
from photo_sets import photo_set
from simulated_pattern import marks, photograph
from simulated_view import Camera

BARREL = (-0.2, 0.05, 0.0, 0.0, 0.0)
SQUARES = Squares(3, 4, 60.0, 30.0, scale_std=0.0)
DISCS = Discs(8, 6, 25.0, 15.0, scale_std=0.0)


def a_view(aim, distance=560.0, tilt=30.0, turn=5.0) -> Camera:
    return Camera.looking_at(
        aim, distance, tilt, 60.0, turn, width=640, height=480, focal_px=700.0, centre=(319.5, 239.5), distortion=BARREL
    )


def picture(kind, **about) -> tuple[Camera, Photo]:
    discs = isinstance(kind, Discs)
    view = a_view((87.5, 62.5), 380.0) if discs else a_view((60.0, 90.0))
    size = kind.diameter_mm if discs else kind.side_mm
    pattern = marks(kind.columns, kind.rows, kind.pitch_mm, size, discs=discs, gain=about.pop("gain", 0.0))
    return view, Photo(Path("grid.png"), "", photograph(view, pattern, **about))


def solid(places):
    return np.c_[places, np.zeros(len(places))]


@pytest.mark.parametrize("tone", ["sRGB", "linear"])
@pytest.mark.parametrize("kind", [SQUARES, DISCS], ids=["squares", "discs"])
def test_centres_are_free_of_print_gain_perspective_and_tone(kind, tone):
    view, photo = picture(kind, gain=0.15, tone=tone)
    reference = kind.locate(photo)
    row, column = np.divmod(np.arange(kind.columns * kind.rows), kind.columns)
    centres = np.column_stack([column, kind.rows - 1 - row]) * kind.pitch_mm
    expected = view.project(solid(centres))
    assert reference.corners_px.shape == expected.shape
    assert np.sqrt(np.mean((reference.corners_px - expected) ** 2)) < 0.05
    assert reference.residual_px < 0.05
    face = centres[[0, kind.columns + 1, -1]] + 7.0
    off = reference.face.to_mm(view.project(solid(face))) - face
    std = np.sqrt(sum(m.displacement**2 for m in reference.modes(face)))
    assert np.abs(off).max() < 0.25 and np.abs(off / std).max() < 3.0


def test_a_disc_is_seen_where_its_centre_is_and_not_where_its_ellipse_is():
    # At 45 degrees and near, the ellipse's centre is off by several tenths of a pixel at the ends.
    view = a_view((87.5, 62.5), 260.0, tilt=45.0)
    photo = Photo(Path("grid.png"), "", photograph(view, marks(4, 3, 40.0, 30.0, discs=True)))
    reference = Discs(4, 3, 40.0, 30.0, scale_std=0.0).locate(photo)
    row, column = np.divmod(np.arange(12), 4)
    expected = view.project(solid(np.column_stack([column, 2 - row]) * 40.0))
    assert np.sqrt(np.mean((reference.corners_px - expected) ** 2)) < 0.06


def test_a_hidden_mark_is_done_without():
    view, photo = picture(SQUARES)
    pixels = photo.pixels.copy()
    x, y = np.rint(view.project(np.array([[60.0, 120.0, 0.0]]))[0]).astype(int)
    pixels[y - 40 : y + 40, x - 40 : x + 40] = 200
    reference = SQUARES.locate(Photo(Path("grid.png"), "", pixels))
    assert len(reference.corners_px) == 11
    at = view.project(np.array([[60.0, 120.0, 0.0]]))
    assert reference.face.to_mm(at)[0] == pytest.approx((60.0, 120.0), abs=0.15)


@pytest.mark.parametrize("quarter", range(4))
def test_rows_run_down_the_picture_and_the_grid_is_seen_from_the_front(quarter):
    _, photo = picture(SQUARES)
    found = find_grid(np.ascontiguousarray(np.rot90(photo.pixels, quarter)), 3, 4)
    assert found is not None
    grid = found.reshape(4, 3, 2)
    right, down = (grid[:, -1] - grid[:, 0]).mean(axis=0), (grid[-1] - grid[0]).mean(axis=0)
    assert right[0] * down[1] - right[1] * down[0] > 0 and down[1] > 0


def test_other_grids_and_empty_pictures_are_not_taken_for_it():
    _, photo = picture(SQUARES)
    for columns, rows in ((4, 4), (3, 3), (3, 5), (2, 6)):
        assert find_grid(photo.pixels, columns, rows) is None
    with pytest.raises(Refusal) as caught:
        SQUARES.locate(Photo(Path("p.png"), "", np.full((480, 640), 128, np.uint8)))
    assert caught.value.code == "no-grid"


@pytest.mark.parametrize(
    "fields", [{"columns": 1}, {"rows": 1}, {"pitch_mm": 0.0}, {"side_mm": 60.0}, {"side_mm": -1.0}]
)
def test_grids_that_cannot_be_are_refused(fields):
    with pytest.raises(UsageError):
        Squares(**({"columns": 3, "rows": 4, "pitch_mm": 60.0, "side_mm": 30.0} | fields))


def test_a_mark_itself_is_measured_with_its_print_gain():
    _, photo = picture(SQUARES, gain=0.1)
    kind = Squares(3, 4, 60.0, 30.0, role="itself")
    reference = kind.locate(photo)
    area = measure(photo, reference=kind, seeds=[tuple(reference.corners_px[4])]).members[0].quantities["area"]
    assert area.interval95[0] < 30.2**2 < area.interval95[1]
    assert area.value == pytest.approx(30.2**2, rel=0.02)


def test_real_grids_are_found_in_every_photo():
    for path in photo_set("squares_on_sheet"):
        reference = Squares(3, 4, 60.0, 30.0).locate(load_photo(path))
        assert len(reference.corners_px) == 12 and reference.residual_px < 0.25, path.name
    for path in photo_set("discs"):
        reference = Discs(10, 8, 25.0, 15.0).locate(load_photo(path))
        assert len(reference.corners_px) == 80 and reference.residual_px < 0.5, path.name


def test_a_fisheyes_picture_is_refused():
    for path in photo_set("fisheye"):
        with pytest.raises(Refusal):
            Squares(3, 4, 60.0, 30.0).locate(load_photo(path))
