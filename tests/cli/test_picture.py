from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest
from cutface.cli.files.picture import draw_picture, write_picture
from cutface.vision.measure import Measurement
from hand_made_measurement import ANGLE, angle_quantities, measurement_of, member_of, one_member, two_members
from PIL import Image


def pixels(measurement: Measurement) -> np.ndarray:
    return np.asarray(draw_picture(measurement)).astype(int)


def differing(a: np.ndarray, b: np.ndarray) -> float:
    """Share of pixels that differ clearly between two pictures of the same width, over their common rows."""
    rows = min(len(a), len(b))
    return float((np.abs(a[:rows] - b[:rows]).max(axis=-1) > 40).mean())


def colour_share(picture: np.ndarray, colour: tuple[int, int, int]) -> float:
    return float((np.abs(picture - colour).max(axis=-1) < 12).mean())


def test_size_is_sensible_for_small_and_large_photos() -> None:
    measurement = one_member()
    assert max(draw_picture(measurement).size) == 1800
    small = replace(
        measurement,
        photo=replace(measurement.photo, pixels=measurement.photo.pixels[::4, ::4]),
        members=tuple(replace(m, trace_px=tuple(t / 4 for t in m.trace_px)) for m in measurement.members),
        to_pixels=lambda p: measurement.to_pixels(p) / 4,
        corners_px=measurement.corners_px / 4,
    )
    # 300 x 225 pixels are enlarged three times, not six.
    assert 800 < max(draw_picture(small).size) <= 900


def test_the_outline_lies_on_the_edge_of_the_face() -> None:
    """Where the outline is drawn, light and dark meet: on a picture whose face is known pixel by pixel."""
    measurement = measurement_of(member_of(1, ANGLE, angle_quantities()))
    picture = pixels(measurement)
    face, ground = (np.abs(picture - colour).max(axis=-1) < 12 for colour in ((92, 84, 78), (205, 205, 200)))
    key = np.flatnonzero((picture == 255).all(axis=-1).mean(axis=1) > 0.9).min()
    crimson = np.argwhere(np.abs(picture[:key] - (178, 0, 64)).max(axis=-1) < 60)
    assert len(crimson) > 1000
    # Three photo pixels to either side of the line.
    near = [np.s_[r - 5 : r + 6, c - 5 : c + 6] for r, c in crimson.tolist()]
    assert np.mean([face[around].any() and ground[around].any() for around in near]) > 0.99


@pytest.mark.parametrize("make", [one_member, two_members])
def test_marks_stand_out_in_grey(make) -> None:
    """Every coloured mark is dark and has something light beside it, so that it reads without colour."""
    picture = pixels(make())
    grey = picture @ np.array([0.299, 0.587, 0.114])
    for colour in ((178, 0, 64), (0, 56, 150)):
        found = np.argwhere(np.abs(picture - colour).max(axis=-1) < 12)
        for row, column in found[:: max(1, len(found) // 200)].tolist():
            around = grey[max(0, row - 6) : row + 7, max(0, column - 6) : column + 7]
            assert around.max() - grey[row, column] > 100


def test_poorly_located_places_are_marked_by_a_shape() -> None:
    marked, clean = (
        pixels(measurement_of(member_of(1, ANGLE, angle_quantities(), poor=poor)))
        for poor in (slice(300, 420), slice(0))
    )
    brown = (110, 50, 0)
    assert colour_share(marked, brown) > 3e-4
    assert colour_share(clean, brown) == 0.0


def test_holes_are_drawn_unlike_outlines_and_explained() -> None:
    blue = (0, 56, 150)
    assert colour_share(pixels(two_members()), blue) > 1e-3
    assert colour_share(pixels(one_member()), blue) == 0.0


def test_principal_axes_only_where_they_have_a_direction_of_their_own() -> None:
    green = (0, 92, 62)
    quantities = angle_quantities()
    upright = {**quantities, "principal_angle": replace(quantities["principal_angle"], value=np.pi / 2 - 0.001)}
    major = quantities["second_moment_major"]
    round_one = {**quantities, "second_moment_minor": replace(major, value=major.value * 0.99)}
    assert colour_share(pixels(one_member()), green) > 1e-5
    for changed in (upright, round_one):
        assert colour_share(pixels(measurement_of(member_of(1, ANGLE, changed))), green) == 0.0


def test_members_are_numbered_only_if_there_are_several() -> None:
    single = one_member()
    renumbered = replace(single, members=(replace(single.members[0], number=7),))
    assert differing(pixels(single), pixels(renumbered)) == 0.0
    pair = two_members()
    swapped = replace(pair, members=tuple(replace(m, number=3 - m.number) for m in pair.members))
    assert differing(pixels(pair), pixels(swapped)) > 0.0


def test_grey_and_sixteen_bit_photos() -> None:
    measurement = one_member()
    colour = measurement.photo.pixels
    expected = pixels(replace(measurement, photo=replace(measurement.photo, pixels=colour[..., :1].repeat(3, axis=2))))
    for stored in (colour[..., 0], colour[..., 0].astype(np.uint16) * 257):
        drawn = pixels(replace(measurement, photo=replace(measurement.photo, pixels=stored)))
        assert differing(drawn, expected) == 0.0


def test_a_face_that_fills_the_photo_still_gets_its_scale_bar() -> None:
    """No room below the face: the picture reaches beyond the photo."""
    measurement = one_member()
    x0, y0 = np.floor(measurement.members[0].trace_px[0].min(axis=0)).astype(int) - 4
    x1, y1 = np.ceil(measurement.members[0].trace_px[0].max(axis=0)).astype(int) + 4
    tight = replace(
        measurement,
        photo=replace(measurement.photo, pixels=measurement.photo.pixels[y0:y1, x0:x1]),
        members=tuple(replace(m, trace_px=tuple(t - (x0, y0) for t in m.trace_px)) for m in measurement.members),
        to_pixels=lambda p: measurement.to_pixels(p) - (x0, y0),
        corners_px=np.empty((0, 2)),
    )
    picture = pixels(tight)
    # Under the face's lowest row stands the bar with its black quarters.
    face = np.flatnonzero((np.abs(picture - (92, 84, 78)).max(axis=-1) < 12).sum(axis=1) > 100)
    end = int(face.max())
    below = picture[end + 20 : round(0.94 * picture.shape[0])]
    dark = (np.abs(below - (20, 20, 20)).max(axis=-1) < 12).sum(axis=1)
    assert dark.max() > 30


def test_file_is_deterministic(tmp_path: Path) -> None:
    for name in ("a.jpg", "b.jpg"):
        write_picture(two_members(), tmp_path / name)
    assert (tmp_path / "a.jpg").read_bytes() == (tmp_path / "b.jpg").read_bytes()
    with Image.open(tmp_path / "a.jpg") as image:
        assert image.format == "JPEG"
        assert image.size == draw_picture(two_members()).size
