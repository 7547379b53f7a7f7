"""Real scans of punched cards and the sample pictures, straight from their files, against what is known of them."""

from __future__ import annotations

import json
from functools import cache
from pathlib import Path

import numpy as np
import pytest
from cutface.props.errors import Refusal
from cutface.props.properties import section_properties
from cutface.props.section import Section
from cutface.vision.measure import Member, measure
from cutface.vision.photo import load_photo
from measured_member import right_about, sensible_intervals
from photo_sets import photo_set
from shapely import Polygon, unary_union

SAMPLES = Path(__file__).resolve().parents[2] / "sample_images"


@cache
def punched(name: str) -> Member:
    (path,) = [p for p in photo_set("punched_cards") if p.stem == name]
    (member,) = measure(load_photo(path)).members
    return member


@pytest.mark.parametrize(("name", "holes"), [("card_2_back", 48), ("card_2_front", 48), ("card_3_back", 4)])
def test_punched_cards(name: str, holes: int) -> None:
    """187.325 x 82.55 mm: FIPS PUB 13 / ANSI X3.11 / ISO 1681, from memory.

    15407 mm2 is length times width less a cut corner (read from the picture) and three rounded ones.
    """
    member = punched(name)
    (part,) = member.section.parts
    assert len(part.holes) == holes
    corners = np.array(Polygon(part.shell).minimum_rotated_rectangle.exterior.coords)
    length, width = np.sort(np.linalg.norm(np.diff(corners, axis=0), axis=1))[[-1, 0]]
    assert length == pytest.approx(187.3, abs=0.6)
    assert width == pytest.approx(82.55, abs=0.35)
    assert Polygon(part.shell).area == pytest.approx(15407.0, rel=0.006)
    net = member.quantities["area"]
    assert abs(net.value - (15407.0 - holes * 3.175 * 1.397)) < 2 * net.std
    sensible_intervals(member, 0.01)


@pytest.mark.parametrize(
    "name",
    [
        "card_2_back",
        pytest.param(
            "card_2_front",
            marks=pytest.mark.xfail(strict=True, reason="printed numerals beside a hole pass for a part of it"),
        ),
        "card_3_back",
    ],
)
def test_punched_holes(name: str) -> None:
    """3.175 x 1.397 mm (FIPS PUB 13 / ANSI X3.11 / ISO 1681, from memory): sides of the rectangle of equal moments."""
    sides = []
    for hole in punched(name).section.parts[0].holes:
        found = section_properties(Section.from_polygons([Polygon(hole)]))
        moments = np.array([found["second_moment_major"], found["second_moment_minor"]])
        sides.append(np.sqrt(12 * moments / found["area"]))
    assert np.mean(sides, axis=0) == pytest.approx([3.175, 1.397], abs=0.12)
    assert np.abs(np.array(sides) - (3.175, 1.397)).max() < 0.2


SAMPLE_FILES = sorted(SAMPLES.glob("*.truth.json"))


@pytest.mark.parametrize("path", SAMPLE_FILES, ids=lambda p: p.name.split(".")[0])
def test_samples_against_their_truth(path: Path) -> None:
    told = json.loads(path.read_text("utf-8"))
    photo = load_photo(path.with_name(told["picture"]))
    options = {} if told["kind"] == "scan" else {"face_height": told["stated"]["thickness_mm"]}
    if told["expected"] != "measured":
        with pytest.raises(Refusal):
            measure(photo, **options)
        return
    result = measure(photo, **options)
    assert len(result.members) == len(told["members"])
    for member, true in zip(result.members, told["members"], strict=True):
        parts = [Polygon(part["shell"], part["holes"]) for part in true["section"]["parts"]]
        section = Section.from_polygons(parts)
        if len(parts) > 1:
            # Timber, plate, timber in contact are one outline in a picture.
            section = Section.from_polygons(unary_union([p.buffer(1e-6, join_style="mitre") for p in parts]))
        right_about(member, section)


def test_there_are_samples_of_every_kind() -> None:
    kinds = {json.loads(path.read_text("utf-8"))["kind"] for path in SAMPLE_FILES}
    assert kinds == {"sheet", "cards", "scan"}
