"""References that a surveyor has at hand, end to end: simulated photos, and what a person types of them.

What a person cannot know is drawn from what the measuring assumes, so an error beyond four standard uncertainties is
no chance.
"""

from __future__ import annotations

import json
from functools import cache
from pathlib import Path

import cv2
import numpy as np
import pytest
from cutface.cli.app import app
from cutface.props.errors import Refusal
from cutface.vision.measure import Measurement, measure
from measured_member import right_about, sensible_intervals
from plain_scene import PAPER, Shape, box
from surveyed_scene import (
    KINDS,
    RIGHT,
    Laid,
    SurveyedScene,
    draw,
    picked,
    printed,
    rectangle,
    rod,
    rule,
)
from typer.testing import CliRunner


@cache
def scene(kind: str, seed: int = 1) -> SurveyedScene:
    return draw(kind, seed)


@cache
def measured(kind: str, seed: int = 1) -> Measurement:
    one = scene(kind, seed)
    return measure(one.photo, references=one.texts)


@pytest.mark.parametrize("kind", KINDS)
def test_every_kind_measures_within_its_interval(kind: str) -> None:
    (member,) = measured(kind).members
    right_about(member, scene(kind).section)
    sensible_intervals(member, 0.12)


def test_what_tells_the_plane_is_better_than_what_does_not() -> None:
    u = {kind: q.std / q.value for kind in KINDS for q in [measured(kind).members[0].quantities["area"]]}
    plane = max(u[kind] for kind in ("tile", "chessboard", "square-grid", "disc-grid", "six points"))
    assert plane < 0.6 * min(u[kind] for kind in ("rule", "rod", "distance"))


def test_the_tilt_that_nothing_tells_is_said_and_counted() -> None:
    codes = {notice.code for notice in measured("distance").notices}
    assert {"tilt-assumed", "points-unchecked"} <= codes
    area = measured("rule").members[0].quantities["area"]
    assert area.budget[0].source == "camera tilt"
    one = scene("rule")
    closer = measure(one.photo, references=[one.texts[0].replace("tilt=5", "tilt=1")]).members[0].quantities["area"]
    assert closer.std < 0.5 * area.std


def test_a_sheet_of_paper_is_as_uncertain_as_its_standard_says() -> None:
    one = scene("paper")
    area = measured("paper").members[0].quantities["area"]
    share = {cause.source: cause.share for cause in area.budget}
    assert share["reference size"] > 0.2
    # Two millimetres of 148 and of 210, taken as equally likely within, are 1.0 % of the area.
    with pytest.raises(Refusal) as raised:
        measure(one.photo, references=[f"{one.texts[0]} u=0.01"])
    assert raised.value.code == "reference-contradicts"


def test_a_face_in_front_of_a_tile() -> None:
    lay = [lambda rng: rectangle(rng, RIGHT, "150x100", lift=-12.0)]
    one = draw(lay, 3)
    (member,) = measure(one.photo, references=one.texts, face_height=12.0).members
    right_about(member, one.section)
    flat = measure(one.photo, references=one.texts).members[0].quantities["area"].value
    # Nearer to the camera by 12 mm of some 450 or more: larger by twice that part.
    assert 0.03 < flat / member.quantities["area"].value - 1 < 0.07
    own = measure(one.photo, references=[f"{one.texts[0]} face-height=12"])
    assert own.members[0].quantities["area"].value == pytest.approx(member.quantities["area"].value)
    assert own.reference.plane_offset_mm == 12
    assert str(own.reference.details["focal_from"]) == "EXIF"


def test_through_the_command(tmp_path: Path) -> None:
    one = scene("tile", 2)
    photo = tmp_path / "end.png"
    cv2.imwrite(str(photo), one.photo.pixels)
    words = ["measure", str(photo), "--focal-35mm", "28", "--reference", one.texts[0], "--json"]
    ended = CliRunner().invoke(app, words)
    assert ended.exit_code == 0, ended.output
    document = json.loads(ended.stdout)
    assert document["options"]["references"] == [one.texts[0]]
    assert document["reference"]["kind"] == "rectangle"
    low, high = document["properties"]["area"]["interval95"]
    assert low < abs(one.section.to_polygon().area) < high
    words[5] = "rectangle size=A4"
    refused = CliRunner().invoke(app, words)
    assert isinstance(refused.exception, Refusal)
    assert json.loads(refused.stdout)["status"] == "refused"


def refusal_of(lay, seed: int = 1, *, edit=lambda text: text, **options) -> str:
    one = draw([lay], seed, **options)
    with pytest.raises(Refusal) as raised:
        measure(one.photo, references=[edit(text) for text in one.texts], seeds=[one.seed_px])
    assert raised.value.remedy
    return raised.value.code


@pytest.mark.parametrize(
    ("wrong", "told"), [("10", "graduations-unseen"), ("2", "graduations-unseen"), ("4", "graduations-count")]
)
def test_a_wrong_division_is_seen_where_the_readings_are_stated(wrong: str, told: str) -> None:
    def edit(text: str) -> str:
        return text.replace("division=5", f"division={wrong}")

    assert refusal_of(lambda rng: rule(rng, np.array([95.0, 0.0])), edit=edit, frontal=True) == told


def test_a_rod_whose_end_was_picked_one_block_off() -> None:
    def edit(text: str) -> str:
        return text.replace("length=240", "length=260")

    assert refusal_of(lambda rng: rod(rng, np.array([105.0, 0.0])), edit=edit, frontal=True) == "graduations-count"


@pytest.mark.parametrize(("size", "stated"), [("A5", "Letter"), ("150x100", "150x115"), ("ID-1", "150x100")])
def test_paper_of_other_proportions(size: str, stated: str) -> None:
    code = refusal_of(lambda rng: rectangle(rng, RIGHT, size, stated))
    assert code in {"reference-contradicts", "no-rectangle"}


def test_a_bent_sheet_of_paper() -> None:
    """A curl of 5 mm over 210 mm, the middle lying on the table."""

    def sheet(rng: np.random.Generator) -> Laid:
        edge = box(148, 210, tuple(RIGHT))
        t = np.linspace(0, 1, 24, endpoint=False)[:, None]
        dense = np.concatenate([a + t * (b - a) for a, b in zip(edge, np.roll(edge, -1, axis=0), strict=True)])
        shape = Shape([dense], PAPER, lambda p: 5 * ((p[:, 1] - RIGHT[1]) / 105) ** 2)
        return Laid([shape], lambda camera, _: "rectangle size=A5 u=0.2")

    one = draw([sheet], 4, tilt_deg=25.0)
    with pytest.raises(Refusal, match="flatness of the A5 rectangle"):
        measure(one.photo, references=one.texts, seeds=[one.seed_px])


def curled(rise: float):
    """A chessboard whose upper and lower edges stand `rise` mm above its middle."""

    def lay(rng: np.random.Generator) -> Laid:
        laid = printed(rng, RIGHT, "chessboard")
        shapes = [Shape(s.loops, s.tone, lambda p: rise * ((p[:, 1] - RIGHT[1]) / 70) ** 2) for s in laid.shapes]
        return Laid(shapes, laid.text)

    return lay


def test_a_print_that_bows_as_prints_do_is_in_the_interval() -> None:
    one = draw([curled(0.8)], 5, tilt_deg=25.0)
    (member,) = measure(one.photo, references=one.texts, seeds=[one.seed_px]).members
    right_about(member, one.section)
    assert "reference flatness" in {cause.source for cause in member.quantities["area"].budget[:4]}


def test_a_bent_chessboard() -> None:
    assert refusal_of(curled(16.0), 5, tilt_deg=25.0) == "reference-bent"


def test_points_of_a_mirrored_picture() -> None:
    places = np.array([[-160.0, -105.0], [10, -120], [170, -110], [175, 115], [-150, 110]])

    one = draw([lambda rng: picked(rng, places)], 1)
    words = [word.removeprefix("point=").split(",") for word in one.texts[0].split()[1:-1]]
    last = one.photo.width - 1
    text = " ".join(["points", *(f"point={last - float(x)},{y},{a},{b}" for x, y, a, b in words)])
    with pytest.raises(Refusal) as raised:
        measure(one.photo, references=[text], seeds=[one.seed_px])
    assert raised.value.code == "reference-mirrored"


def test_a_point_taken_from_the_wrong_place_is_named() -> None:
    places = np.array([[-160.0, -105.0], [10, -120], [170, -110], [175, 115], [5, 120], [-150, 110]])
    one = draw([lambda rng: picked(rng, places, wrong=2)], 1)
    with pytest.raises(Refusal, match="Point 3") as raised:
        measure(one.photo, references=one.texts, seeds=[one.seed_px])
    assert raised.value.code == "point-wrong"
