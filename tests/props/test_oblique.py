"""Oblique cuts: sections of prisms against their slanted faces."""

from __future__ import annotations

import math

import numpy as np
import pytest
from cutface.props.errors import UsageError
from cutface.props.oblique import ANGLE_STD, SOURCE, Cut, projected
from cutface.props.properties import section_properties
from cutface.props.section import Section
from cutface.props.uncertainty import EdgeNoise, Mode, OutlineUncertainty, quantify
from sample_sections import ANGLE, CHANNEL, circle, rectangle, section

NAMES = ("area", "second_moment_major", "second_moment_minor", "plastic_modulus_x")


def face_of(shape: Section, angle: float, direction: float) -> Section:
    """The face of a cut: the section stretched along the fall."""
    fall = np.array([math.cos(direction), math.sin(direction)])
    stretch = np.eye(2) + (1.0 / math.cos(angle) - 1.0) * np.outer(fall, fall)
    return shape.with_vertices(shape.vertices @ stretch)


@pytest.mark.parametrize("direction", [0.0, 90.0, 37.0, -120.0])
def test_the_true_section_comes_back(direction: float) -> None:
    angle, direction = math.radians(12.0), math.radians(direction)
    cut = Cut(direction, angle, angle_std=1e-9, direction_std=1e-9)
    found = projected(face_of(CHANNEL, angle, direction), OutlineUncertainty(), cut)
    assert np.allclose(found.section.vertices, CHANNEL.vertices)
    # Either way round of the fall, and either sense of the angle.
    other = projected(face_of(CHANNEL, angle, direction), OutlineUncertainty(), Cut(direction + math.pi, -angle))
    assert np.allclose(other.section.vertices, CHANNEL.vertices, atol=0.01)


def test_depths_at_both_ends_tell_the_angle() -> None:
    shape = rectangle(60, 180)
    angle = math.radians(4.0)
    face = face_of(shape, angle, math.pi / 2)
    back = 180 * math.tan(angle)
    found = projected(face, OutlineUncertainty(), Cut(math.pi / 2, depths=(3.0, 3.0 + back), depth_std=0.4))
    assert found.angle == pytest.approx(angle)
    assert found.angle_std == pytest.approx(math.sqrt(2) * 0.4 / 180.0)
    assert section_properties(found.section)["depth"] == pytest.approx(180.0, rel=1e-4)


@pytest.mark.parametrize(
    "cut", [Cut(0.0), Cut(0.0, math.radians(80)), Cut(0.0, math.nan), Cut(0.0, depths=(0.0, 500.0))]
)
def test_cuts_that_cannot_be(cut: Cut) -> None:
    with pytest.raises(UsageError) as wrong:
        projected(ANGLE, OutlineUncertainty(), cut)
    assert wrong.value.code == "bad-cut"


def test_uncertain_angles_are_in_the_budget() -> None:
    shape = rectangle(60, 180)
    angle = math.radians(10.0)
    found = projected(face_of(shape, angle, math.pi / 2), OutlineUncertainty(), Cut(math.pi / 2, angle))
    values = section_properties(found.section)
    quantities = quantify(found.section, values, found.uncertainty)
    relative = quantities["area"].std / values["area"]
    assert relative == pytest.approx(math.tan(angle) * ANGLE_STD, rel=1e-3)
    assert quantities["second_moment_x"].std / values["second_moment_x"] == pytest.approx(3 * relative, rel=1e-3)
    assert {line.source for line in quantities["area"].budget} == {SOURCE}


def test_noise_keeps_its_effect_on_the_area_of_a_shrunken_circle() -> None:
    """Movements across the outline shrink with the areas: their share in the area stays."""
    face = section(circle(50.0, 300))
    noise = EdgeNoise(np.full(300, 0.05), np.full(300, 1.0))
    outline = OutlineUncertainty(noise=noise, edge_bound=np.full(300, 0.05))
    before = quantify(face, section_properties(face), outline)["area"]
    found = projected(face, outline, Cut(0.3, math.radians(30), angle_std=1e-9, direction_std=1e-9))
    after = quantify(found.section, section_properties(found.section), found.uncertainty)["area"]
    assert after.std / after.value == pytest.approx(before.std / before.value, rel=1e-3)
    assert before.pixel_bounds is not None
    assert after.pixel_bounds is not None
    assert np.ptp(after.pixel_bounds) / after.value == pytest.approx(
        np.ptp(before.pixel_bounds) / before.value, rel=0.02
    )


def test_intervals_hold_the_true_section() -> None:
    rng = np.random.default_rng(3)
    true = section_properties(ANGLE)
    draws, off, held = 400, [], 0
    for _ in range(draws):
        angle, direction = math.radians(8.0), math.radians(70.0)
        face = face_of(ANGLE, angle, direction)
        about = face.vertices - face.vertices.mean(axis=0)
        scale = Mode("print scale", 0.002 * about)
        seen = face.with_vertices(face.vertices + rng.normal() * scale.displacement)
        stated = Cut(direction + rng.normal(0, math.radians(5)), angle + rng.normal(0, ANGLE_STD))
        found = projected(seen, OutlineUncertainty((scale,)), stated)
        values = section_properties(found.section)
        quantities = quantify(found.section, {n: values[n] for n in NAMES}, found.uncertainty)
        off.append([(values[n] - true[n]) / quantities[n].std for n in NAMES])
        low, high = quantities["area"].interval95
        held += low <= true["area"] <= high
    assert held / draws == pytest.approx(0.95, abs=3 * math.sqrt(0.95 * 0.05 / draws))
    assert np.sqrt(np.mean(np.square(off), axis=0)) == pytest.approx(np.ones(4), abs=3 / math.sqrt(2 * draws))
