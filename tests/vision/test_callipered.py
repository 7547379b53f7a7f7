"""Sizes put to measured photos: which face and which places are meant, and what they do to simulated pictures."""

from __future__ import annotations

from dataclasses import replace
from functools import cache

import numpy as np
import pytest
from camera_simulator import Scene, random_scene
from cutface.props.calliper import CALLIPER
from cutface.props.enclosing import enclosing_dimensions
from cutface.props.errors import Refusal, UsageError
from cutface.props.section import Section
from cutface.props.uncertainty import Mode, OutlineUncertainty
from cutface.vision.callipered import Stated, callipered
from cutface.vision.measure import Measurement, measure
from cutface.vision.photo import load_photo
from hand_made_measurement import one_member, to_pixels, two_members
from measured_member import right_about, sensible_intervals
from simulated_shapes import rectangular_hollow, timber


def with_scale(measurement: Measurement) -> Measurement:
    """Members whose outlines are uncertain in scale."""
    members = []
    for member in measurement.members:
        about = member.section.vertices - member.section.vertices.mean(axis=0)
        modes = tuple(Mode("print scale", 0.005 * about * axis) for axis in np.eye(2))
        members.append(replace(member, uncertainty=OutlineUncertainty(modes)))
    return replace(measurement, members=tuple(members))


def test_two_pixels_name_the_wall_between_them() -> None:
    """Some pixels off the outline, and not quite opposite: the thickness of the angle's upright leg, 8 mm."""
    first, second = to_pixels(np.array([[-0.4, 50.0], [8.3, 51.0]]))
    size = Stated(8.02, 0.02, points=((first[0], first[1]), (second[0], second[1])))
    member = callipered(with_scale(one_member()), [size]).members[0]
    assert member.calliper is not None
    (compared,) = member.calliper.compared
    assert compared.before == pytest.approx(8.0)
    # 0.5 % of 8 mm against 0.02 mm.
    assert compared.after == pytest.approx(8.0 + 0.02 * 0.04**2 / (0.04**2 + 0.02**2))
    assert {line.source for line in member.quantities["width"].budget} == {"print scale", CALLIPER}
    assert member.quantities["area"].value > one_member().members[0].quantities["area"].value


def test_the_member_that_is_meant() -> None:
    two = with_scale(two_members())
    found = callipered(two, [Stated(70.1, size="length", member=2)])
    assert found.members[0] is two.members[0]
    assert found.members[1].quantities["width"].value == pytest.approx(70.1, abs=0.02)
    wall = to_pixels(np.array([[90.0, 40.0], [97.0, 40.0]]))
    by_points = callipered(two, [Stated(7.0, points=((*wall[0],), (*wall[1],)))])
    assert by_points.members[0] is two.members[0]
    assert by_points.members[1].calliper is not None


@pytest.mark.parametrize(
    ("size", "code"),
    [
        (Stated(70.0, size="length"), "calliper-member"),
        (Stated(70.0, size="length", member=3), "calliper-member"),
        (Stated(70.0, points=((5.0, 5.0), (600.0, 400.0))), "calliper-off-outline"),
    ],
)
def test_sizes_that_nobody_can_place(size: Stated, code: str) -> None:
    with pytest.raises(UsageError) as wrong:
        callipered(with_scale(two_members()), [size])
    assert wrong.value.code == code


def test_mass_follows() -> None:
    measurement = with_scale(one_member())
    (member,) = measurement.members
    mass = replace(member.quantities["area"], value=8.9176, unit="kg/m")
    heavy = replace(measurement, members=(replace(member, quantities={**member.quantities, "mass_per_metre": mass}),))
    after = callipered(heavy, [Stated(90.4, size="length")]).members[0].quantities
    assert after["mass_per_metre"].value == pytest.approx(7850e-6 * after["area"].value)


SCENES = {
    "joist": {"section": timber(63, 150, (0, 0), 1.0), "look": "wood", "thickness_mm": 0.0},
    "box": {"section": rectangular_hollow(120, 80, 7, 12), "look": "rust", "thickness_mm": 12.0},
}


@cache
def pictured(name: str, tmp: str) -> tuple[Scene, Measurement]:
    """A face on a sheet of which nobody checked the print."""
    from camera_simulator import write

    scene = random_scene(3, "sheet", megapixels=2.0, board="A4", **SCENES[name])
    photo = load_photo(write(scene, f"{tmp}/{name}.jpg"))
    return scene, measure(photo, face_height=scene.stated["thickness_mm"])


def true_sizes(section: Section) -> tuple[float, float]:
    found = enclosing_dimensions(section, OutlineUncertainty())
    return found["enclosing_length"].value, found["enclosing_breadth"].value


@pytest.mark.parametrize("name", SCENES)
def test_simulated_pictures_come_out_right_and_surer(name: str, tmp_path_factory: pytest.TempPathFactory) -> None:
    scene, alone = pictured(name, str(tmp_path_factory.getbasetemp()))
    length, breadth = true_sizes(scene.members[0].section)
    found = callipered(alone, [Stated(length, size="length"), Stated(breadth, size="breadth")])
    (before,), (after,) = alone.members, found.members
    right_about(after, scene.members[0].section)
    sensible_intervals(after, 0.02)
    assert after.quantities["second_moment_major"].std < 0.5 * before.quantities["second_moment_major"].std
    scale = {line.source: line.std for line in after.quantities["area"].budget}["print scale"]
    assert scale < 0.3 * {line.source: line.std for line in before.quantities["area"].budget}["print scale"]
    with pytest.raises(Refusal) as refused:
        callipered(alone, [Stated(1.05 * length, size="length")])
    assert refused.value.code == "calliper-contradicts"
