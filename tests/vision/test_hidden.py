"""Regions a person rules out: bars with a clamp over an edge, a corner, an end, in scans whose truth is known."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import numpy as np
import pytest
from cutface.props.errors import Refusal, UsageError
from cutface.vision.hidden import Hidden, round_corners
from cutface.vision.measure import Measurement, measure
from cutface.vision.photo import Photo
from simulated_sensor import encode

# A bar of 300 x 120 pixels, 25.4 x 10.16 mm at 300 dpi.
AREA = 25.4 * 10.16
BAR = (150.0, 140.0, 450.0, 260.0)


def box(x0: float, y0: float, x1: float, y1: float) -> tuple[tuple[float, float], ...]:
    return ((x0, y0), (x1, y0), (x1, y1), (x0, y1))


def covered(shape: tuple[int, int], rectangle: tuple[float, float, float, float]) -> np.ndarray:
    """(h, w) share of each pixel that a rectangle covers; pixel centres at integers."""
    x0, y0, x1, y1 = rectangle

    def along(count: int, low: float, high: float) -> np.ndarray:
        at = np.arange(count)
        return np.clip(np.minimum(at + 0.5, high) - np.maximum(at - 0.5, low), 0, 1)

    return np.outer(along(shape[0], y0, y1), along(shape[1], x0, x1))


def scan(*clamps: tuple[tuple[float, float, float, float], float]) -> Photo:
    """The dark bar on white with clamps (rectangle, light) over it."""
    import cv2

    light = np.full((400, 600), 0.8)
    for rectangle, tone in ((BAR, 0.05), *clamps):
        share = covered(light.shape, rectangle)
        light = light * (1 - share) + tone * share
    light = cv2.GaussianBlur(light, (0, 0), 0.8)
    noisy = 255 * encode(np.clip(light, 0, 1), "sRGB") + np.random.default_rng(1).normal(0, 1, light.shape)
    pixels = np.clip(noisy, 0, 255).round().astype(np.uint8)
    return Photo(path=Path("scan.png"), sha256="", pixels=pixels, resolution_dpi=(300.0, 300.0))


def measured(photo: Photo, *excluded: Any) -> Measurement:
    return measure(photo, excluded=excluded)


CLAMPS = {
    # As dark as the bar and standing out of it; paler than the paper and biting into it; up to the frame.
    "dark": ((280.0, 100.0, 310.0, 170.0), 0.06),
    "pale": ((280.0, 100.0, 310.0, 170.0), 0.95),
    "to the frame": ((280.0, -20.0, 310.0, 170.0), 0.06),
}


@pytest.mark.parametrize("name", CLAMPS)
def test_an_edge_under_a_clamp_is_bridged(name: str) -> None:
    rectangle, tone = CLAMPS[name]
    region = box(276.0, max(rectangle[1] - 4, 0), 314.0, 174.0)
    (member,) = measured(scan((rectangle, tone)), region).members
    area = member.quantities["area"]
    assert area.value == pytest.approx(AREA, abs=2 * area.std)
    assert member.poorly_located[0].any()
    assert "bridged outline" in {line.source for line in area.budget}
    bare = measured(scan()).members[0].quantities["area"]
    assert area.std > 1.2 * bare.std
    # The picture alone takes a clamp for the face, or the face for the paper.
    if name == "dark":
        wrong = measured(scan((rectangle, tone))).members[0].quantities["area"]
        assert abs(wrong.value - AREA) > 4 * wrong.std


def test_a_corner_under_a_clamp_is_where_its_sides_meet() -> None:
    clamp = ((140.0, 130.0, 170.0, 155.0), 0.9)
    (member,) = measured(scan(clamp), box(136, 126, 174, 159)).members
    area = member.quantities["area"]
    # A straight bridge would cut off half of the covered piece, 2 mm^2 and more.
    assert area.value == pytest.approx(AREA, abs=0.7)
    low = member.section.vertices.min(axis=0)
    assert member.quantities["width"].value == pytest.approx(25.4, abs=0.1)
    corner = np.array([low[0], member.section.vertices[:, 1].max()])
    assert np.linalg.norm(member.section.vertices - corner, axis=1).min() < 0.1


def test_what_lies_within_the_face_is_no_hole() -> None:
    (member,) = measured(scan(((250.0, 190.0, 270.0, 210.0), 0.9)), box(246, 186, 274, 214)).members
    assert [len(part.holes) for part in member.section.parts] == [0]
    assert member.quantities["area"].value == pytest.approx(AREA, abs=2 * member.quantities["area"].std)


@pytest.mark.parametrize(
    ("region", "code"),
    [
        (box(290, 100, 310, 300), "excluded-too-much"),
        (box(100, 100, 500, 300), "low-contrast"),
        (box(200, 100, 420, 200), "outline-lost"),
        (box(400, 120, 480, 280), "excluded-end"),
    ],
)
def test_what_cannot_be_bridged_is_refused(region: Any, code: str) -> None:
    with pytest.raises(Refusal) as refused:
        measured(scan(), region)
    assert refused.value.code == code


@pytest.mark.parametrize("region", [((1, 1), (2, 2)), ((0, 0), (50, 50), (50, 0), (0, 50)), ((1, 1), (2, 2), (3, 3))])
def test_regions_that_enclose_nothing(region: Any) -> None:
    with pytest.raises(UsageError) as wrong:
        Hidden.stated([region], 2.0)
    assert wrong.value.code == "excluded-corners"
    assert Hidden.stated([], 2.0) is None


def test_sides_that_go_on_straight_stay_straight() -> None:
    t = np.linspace(0, 2 * np.pi, 400, endpoint=False)
    points = 200 * np.column_stack([np.cos(t), np.sin(t)])
    located = np.ones(400, bool)
    located[100:104] = False
    assert np.array_equal(round_corners(points, located, ~located, 3.0), points)
