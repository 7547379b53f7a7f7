"""Slices that stand on a sheet, measured as if they lay in its plane: their walls must give them away."""

from __future__ import annotations

from pathlib import Path

import pytest
from camera_simulator import random_scene, write
from cutface.props.errors import Refusal
from cutface.vision.measure import measure
from cutface.vision.photo import load_photo
from simulated_shapes import channel, timber

SECTIONS = {"steel": channel(120, 55, 9, 12, 12), "wood": timber(70, 95, (0, 0), 2.0)}


def picture(tmp_path: Path, look: str, thickness: float, tilt: float) -> Path:
    scene = random_scene(
        5,
        "sheet",
        megapixels=3.0,
        board="A4",
        section=SECTIONS[look],
        look=look,
        thickness_mm=thickness,
        tilt_deg=tilt,
        face_angle_deg=25.0,
    )
    write(scene, tmp_path / "picture.jpg")
    return tmp_path / "picture.jpg"


@pytest.mark.parametrize("look", SECTIONS)
@pytest.mark.parametrize("thickness", [12.0, 30.0])
def test_walls_that_show_are_told(tmp_path: Path, look: str, thickness: float) -> None:
    photo = load_photo(picture(tmp_path, look, thickness, 15.0))
    with pytest.raises(Refusal) as refused:
        measure(photo)
    assert refused.value.code == "face-height-unstated"
    told = float(refused.value.message.split("about ")[1].split(" mm")[0])
    # A twelfth between the heights tried, and the wall's end is looked for within a window.
    assert told == pytest.approx(thickness, rel=0.2)


@pytest.mark.parametrize("look", SECTIONS)
@pytest.mark.parametrize("tilt", [0.0, 25.0])
def test_a_face_in_the_plane_shows_none(tmp_path: Path, look: str, tilt: float) -> None:
    assert measure(load_photo(picture(tmp_path, look, 0.0, tilt))).members


def test_a_stated_height_is_taken(tmp_path: Path) -> None:
    photo = load_photo(picture(tmp_path, "steel", 12.0, 15.0))
    assert measure(photo, face_height=12.0).members
