"""Spots of light on dark bars whose truth is known: told, or refused; labels, shadows and white paper are neither."""

from __future__ import annotations

import re
from collections.abc import Callable
from pathlib import Path

import cv2
import numpy as np
import pytest
import surveyed_scene
from cutface.props.errors import Refusal
from cutface.props.section import Part, Section
from cutface.vision.measure import measure, refuse_crossed
from cutface.vision.photo import Photo
from simulated_sensor import encode
from simulated_view import Floats

SIZE = (800, 1200)
MM = 25.4 / 300
AREA = 600 * 240 * MM**2


def scan(
    *,
    ground: float = 0.8,
    face: float = 0.05,
    hole: bool = False,
    shade: Callable[[Floats, Floats], Floats] | None = None,
    spot: tuple[float, float, float, float] | None = None,
    patch: float | None = None,
) -> Photo:
    """A bar of 600 x 240 pixels, linear light.

    spot : x, y, spread in px and light of what a lamp adds; shade : light over that without, at (x, y)
    patch : light of a sharply bounded label within the bar
    """
    y, x = np.mgrid[: SIZE[0], : SIZE[1]].astype(float)
    light = np.full(SIZE, ground)
    light[280:520, 300:900] = face
    if hole:
        light[340:460, 500:700] = ground
    if patch is not None:
        light[360:440, 400:460] = patch
    if shade is not None:
        light *= shade(x, y)
    light = cv2.GaussianBlur(light, (0, 0), 0.8)
    if spot is not None:
        light = light + spot[3] * np.exp(-0.5 * ((x - spot[0]) ** 2 + (y - spot[1]) ** 2) / spot[2] ** 2)
    noisy = 255 * encode(np.clip(light, 0.0, 1.0).astype(float), "sRGB") + np.random.default_rng(1).normal(0, 1, SIZE)
    pixels = np.clip(noisy, 0, 255).round().astype(np.uint8)
    return Photo(path=Path("scan.png"), sha256="", pixels=pixels, resolution_dpi=(300.0, 300.0))


def notices(photo: Photo) -> tuple[list[str], float]:
    """(codes of the member's notices, its area)."""
    (member,) = measure(photo).members
    return [notice.code for notice in member.notices], member.quantities["area"].value


@pytest.mark.parametrize("number", [2, 10, 18])
def test_spot_that_fills_a_hole_or_cuts_a_flange_off_is_refused(number: int) -> None:
    # A hollow and two I's on a table, a soft spot of light on them: neither is near the file's white.
    kind = {2: "tile", 10: "chessboard", 18: "square-grid"}[number]
    looks = surveyed_scene.Looks(glare=0.15)
    scene = surveyed_scene.draw(kind, 300_000 + number, megapixels=1.5, looks=looks)
    with pytest.raises(Refusal) as refused:
        measure(scene.photo, references=scene.texts, seeds=(scene.seed_px,), focal_length_35mm=28.0)
    assert refused.value.code == "glare"


def test_hole_that_a_spot_fills_is_refused_with_its_place() -> None:
    with pytest.raises(Refusal) as refused:
        measure(scan(ground=0.3, hole=True, spot=(600.0, 400.0, 150.0, 0.3)))
    assert refused.value.code == "glare"
    found = re.search(r"about (\d+) x (\d+) pixels at pixel (\d+), (\d+)", refused.value.message)
    assert found is not None
    # To a pixel of the reduced picture.
    assert [int(n) for n in found.groups()] == pytest.approx([200, 120, 599.5, 399.5], abs=4.0)


@pytest.mark.parametrize("ground", [0.3, 0.8])
def test_white_spot_over_a_hole_is_refused(ground: float) -> None:
    with pytest.raises(Refusal) as refused:
        measure(scan(ground=ground, hole=True, spot=(600.0, 400.0, 60.0, 1.5)))
    assert refused.value.code == "glare"


def test_white_spot_on_a_solid_bar_is_told() -> None:
    codes, area = notices(scan(spot=(600.0, 400.0, 60.0, 1.5)))
    # Nothing is hidden, which the picture does not show.
    assert area == pytest.approx(AREA, rel=0.01)
    assert "glare" in codes


def test_outline_that_fades_into_white_is_told() -> None:
    codes, _ = notices(scan(spot=(600.0, 310.0, 8.0, 1.5)))
    assert codes == ["glare"]


def test_outline_that_is_mostly_the_spots_is_refused() -> None:
    with pytest.raises(Refusal) as refused:
        measure(scan(spot=(600.0, 400.0, 30.0, 1.5)))
    assert refused.value.code == "glare"


def soft_shade(x: Floats, y: Floats) -> Floats:
    """A shadow below the bar that fades out."""
    return 1.0 - 0.5 * np.exp(-np.maximum(y - 520.0, 0.0) / 25.0) * (y >= 520.0)


def lamp_from_a_side(x: Floats, y: Floats) -> Floats:
    return 0.5 + 0.5 * x / SIZE[1]


@pytest.mark.parametrize(
    "photo",
    [
        pytest.param(lambda: scan(hole=True), id="white paper and a hole"),
        pytest.param(lambda: scan(hole=True, ground=1.3), id="white that burns out"),
        pytest.param(lambda: scan(hole=True, ground=0.1, face=0.7), id="pale metal on dark"),
        pytest.param(lambda: scan(hole=True, ground=1.0, face=0.5), id="pale metal on white"),
        pytest.param(lambda: scan(hole=True, ground=0.3, patch=0.95), id="white label, grey ground"),
        pytest.param(lambda: scan(hole=True, patch=0.2), id="grey label, white ground"),
        pytest.param(lambda: scan(hole=True, shade=soft_shade), id="soft shade"),
        pytest.param(lambda: scan(hole=True, shade=lamp_from_a_side), id="lamp from a side"),
        pytest.param(lambda: scan(hole=True, spot=(600.0, 400.0, 150.0, 0.2)), id="veil that hides nothing"),
    ],
)
def test_what_is_no_glare_is_not_called_so(photo: Callable[[], Photo]) -> None:
    codes, _ = notices(photo())
    assert "glare" not in codes


def test_outline_that_crosses_itself_is_refused() -> None:
    square = np.array([[0.0, 0.0], [10.0, 0.0], [10.0, 10.0], [0.0, 10.0]])
    refuse_crossed(1, Section((Part(square, (square[::-1] * 0.5 + 2.0,)),)))
    with pytest.raises(Refusal) as refused:
        # A hole that reaches beyond its shell.
        refuse_crossed(1, Section((Part(square, (square[::-1] + 3.0,)),)))
    assert refused.value.code == "outline-lost"
    assert "crosses itself" in refused.value.message


@pytest.mark.parametrize("place", [(600.0, 400.0), (340.0, 310.0)])
def test_small_spot_that_leaves_no_polygon_is_refused_as_lost(place: tuple[float, float]) -> None:
    with pytest.raises(Refusal) as refused:
        measure(scan(spot=(*place, 15.0, 1.5)))
    assert refused.value.code == "outline-lost"
