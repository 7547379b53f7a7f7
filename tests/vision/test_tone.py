"""Whether a file stores encoded values or light, told by the printed squares' own edges."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest
from camera_simulator import random_scene, write
from cutface.vision.measure import measure
from cutface.vision.photo import load_photo
from cutface.vision.tone_evidence import reading_shift


@pytest.mark.parametrize("sharpening", [0.0, 0.5])
@pytest.mark.parametrize(("tone", "expected"), [("sRGB", "file"), ("gamma", "file"), ("linear", "linear")])
def test_tone_of_a_photo_is_told_from_the_sheet(tone: str, expected: str, sharpening: float, tmp_path: Path) -> None:
    scene = random_scene(
        4101, kind="sheet", megapixels=4, thickness_mm=0.0, tone=tone, sharpening=sharpening, bow_mm=0.0
    )
    scale = scene.drawn["print_scale"]
    photo = load_photo(write(scene, tmp_path / "photo.jpg"))
    found = measure(photo, check_lengths=(140 * scale[0], 140 * scale[1]))
    codes = [notice.code for notice in found.notices]
    # What is not told rightly must at least be told as doubtful; the interval then holds both readings.
    assert found.reference.details["tone"] == expected or "tone-doubtful" in codes
    assert ("linear-tones" in codes) == (found.reference.details["tone"] == "linear")
    area = found.members[0].quantities["area"]
    truth = scene.members[0].section.to_polygon().area
    assert abs(area.value - truth) < 3 * area.std


def test_reading_stored_values_moves_an_edge_towards_the_dark_side() -> None:
    """-0.58, -0.47, -0.31 and -0.09 of the blur, computed from the sRGB curve (IEC 61966-2-1) and a normal spread."""
    dark = np.array([0.02, 0.05, 0.05, 0.30])
    light = np.array([0.90, 0.90, 0.30, 0.50])
    expected = [-0.58, -0.47, -0.31, -0.09]
    assert reading_shift(dark, light) == pytest.approx(expected, abs=0.006)
    # Seen from the light side the same edge moves outward.
    assert reading_shift(light, dark) == pytest.approx(-np.array(expected), abs=0.006)
