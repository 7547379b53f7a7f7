"""Several references in one picture: better together, and none that contradicts the others goes unseen."""

from __future__ import annotations

from collections.abc import Callable

import numpy as np
import pytest
from camera_simulator import random_scene, write
from cutface.props.errors import Refusal
from cutface.vision.measure import measure
from cutface.vision.photo import load_photo
from measured_member import right_about, sensible_intervals
from surveyed_scene import Laid, disc, draw, picked, rectangle, rule

Lay = Callable[[np.random.Generator], Laid]


def at(place: tuple[float, float], lay: Callable[..., Laid], *values, **more) -> Lay:
    return lambda rng: lay(rng, np.array(place, float), *values, **more)


def length(rng: np.random.Generator) -> Laid:
    return picked(rng, np.array([[-150.0, -90.0], [60.0, -95.0]]))


CARD, COIN = at((125, 20), rectangle, "ID-1"), at((110, -90), disc, 40.0)
LIFTED = at((125, 20), rectangle, "ID-1", lift=25.0)


@pytest.mark.parametrize(
    ("lays", "seed"),
    [
        ([CARD, COIN], 1),
        ([CARD, length], 2),
        ([at((95, 0), rule), length], 1),
        ([CARD, COIN, length], 4),
    ],
)
def test_references_that_agree(lays: list[Lay], seed: int) -> None:
    one = draw(lays, seed, frontal=True)
    result = measure(one.photo, references=one.texts, seeds=[one.seed_px])
    (member,) = result.members
    right_about(member, one.section)
    sensible_intervals(member, 0.05)
    assert "references-agree" in {notice.code for notice in result.notices}
    assert "points-unchecked" not in {notice.code for notice in result.notices}
    own = []
    for text in one.texts:
        alone = measure(one.photo, references=[text], seeds=[one.seed_px])
        own.append(alone.members[0].quantities["area"].std)
    assert member.quantities["area"].std < 1.02 * min(own)


@pytest.mark.parametrize(
    "lays", [[LIFTED, length], [at((130, 0), rectangle, "A5", "A6"), length], [CARD, at((110, -90), disc, 44.0)]]
)
def test_two_that_contradict_each_other_are_both_named(lays: list[Lay]) -> None:
    one = draw(lays, 1, frontal=True)
    texts = [text.replace("diameter=44", "diameter=40") for text in one.texts]
    with pytest.raises(
        Refusal, match=r"rectangle and the .* contradict each other: by the .* lengths are .* %"
    ) as raised:
        measure(one.photo, references=texts, seeds=[one.seed_px])
    assert raised.value.code == "references-disagree"


def test_a_wrong_division_is_found_out_by_a_card() -> None:
    one = draw([at((65, 0), rule), at((140, 20), rectangle, "ID-1")], 2, frontal=True)
    texts = [one.texts[0].replace("division=5 length=200", "division=5.5"), one.texts[1]]
    with pytest.raises(Refusal, match="the rule") as raised:
        measure(one.photo, references=texts, seeds=[one.seed_px])
    assert raised.value.code == "references-disagree"


def test_the_odd_one_out_of_three_is_named() -> None:
    one = draw([COIN, length, LIFTED], 2, frontal=True)
    with pytest.raises(Refusal, match=r"^The ID-1 rectangle contradicts the others, which agree") as raised:
        measure(one.photo, references=one.texts, seeds=[one.seed_px])
    assert raised.value.code == "references-disagree"


@pytest.fixture(scope="module")
def sheet(tmp_path_factory: pytest.TempPathFactory):
    """A slice on a sheet, and the corners of the sheet's window as one would pick them."""
    scene = random_scene(1, "sheet", megapixels=2.0, check_std_mm=0.05, thickness_mm=0.0, board="A4", look="rust")
    photo = load_photo(write(scene, tmp_path_factory.mktemp("sheet") / "slice.jpg"))
    return scene, photo


def picked_on_sheet(photo, stretch: float = 1.0) -> str:
    """Two points on the sheet by the measured plane itself, and their distance times `stretch`."""
    found = measure(photo, face_height=0.0)
    ends = found.to_pixels(np.array([[30.0, 12.0], [170.0, 12.0]]))
    (a, b), (c, d) = ends
    return f"distance from={a:.2f},{b:.2f} to={c:.2f},{d:.2f} length={140 * stretch:.3f} u=0.2 pick-u=0.5"


def test_a_length_beside_a_sheet_is_used_with_it(sheet) -> None:
    scene, photo = sheet
    alone = measure(photo, face_height=0.0)
    both = measure(photo, face_height=0.0, references=[picked_on_sheet(photo)])
    right_about(both.members[0], scene.members[0].section)
    assert both.reference.details["together"] == ["the A4 sheet", "the two picked points"]
    assert both.members[0].quantities["area"].std < alone.members[0].quantities["area"].std
    assert both.members[0].quantities["area"].value == pytest.approx(
        alone.members[0].quantities["area"].value, rel=0.005
    )


def test_a_length_that_contradicts_the_sheet(sheet) -> None:
    _, photo = sheet
    with pytest.raises(Refusal, match="A4 sheet and the two picked points contradict") as raised:
        measure(photo, face_height=0.0, references=[picked_on_sheet(photo, 1.02)])
    assert raised.value.code == "references-disagree"
