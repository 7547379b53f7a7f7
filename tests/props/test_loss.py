"""Sections less holes and layers, against subtracted rectangles."""

import math

import numpy as np
import pytest
from cutface.props.errors import OutlineError, UsageError
from cutface.props.loss import (
    FaceLoss,
    RoundHole,
    compare,
    face_loss,
    quantify_loss,
    quantify_remaining,
    uniform_loss,
    with_holes,
    without,
)
from cutface.props.properties import section_properties
from cutface.props.section import Material, Part, Section
from cutface.props.shapes import hollow_rectangle, rectangle, rolled_i, timber
from cutface.props.uncertainty import Mode, OutlineUncertainty


def area(section):
    return section_properties(section)["area"]


def test_uniform_loss_of_a_solid_and_a_hollow_rectangle():
    assert area(uniform_loss(rectangle(200.0, 50.0), 3.0)) == pytest.approx(194.0 * 44.0)
    box = hollow_rectangle(200.0, 100.0, 8.0)
    assert area(uniform_loss(box, 1.0, inside=False)) == pytest.approx(198.0 * 98.0 - 184.0 * 84.0)
    # The corners of the hole are re-entrant: the layer runs round them, a quarter disc each.
    assert area(uniform_loss(box, 1.0)) == pytest.approx(
        198.0 * 98.0 - 184.0 * 84.0 - 2.0 * (184.0 + 84.0) - math.pi, rel=1e-5
    )
    assert uniform_loss(box, 0.0) is box


def test_uniform_loss_thins_flanges_and_web_alike():
    remaining = section_properties(uniform_loss(rolled_i(200.0, 100.0, 6.0, 10.0), 1.0))
    expected = section_properties(rolled_i(198.0, 98.0, 4.0, 8.0))
    # But for the rounded roots: a square less a quarter disc of 1 mm each.
    assert remaining["area"] == pytest.approx(expected["area"] + 4.0 * (1.0 - math.pi / 4.0), rel=1e-5)


def test_face_loss_of_a_timber_charred_on_three_sides():
    remaining = face_loss(timber(200.0, 100.0), FaceLoss(bottom=30.0, left=25.0, right=25.0))
    p = section_properties(remaining)
    assert (p["width"], p["depth"]) == pytest.approx((50.0, 170.0))
    assert p["area"] == pytest.approx(50.0 * 170.0)
    assert p["centroid_y"] == pytest.approx(30.0 + 85.0)


def test_face_loss_takes_every_face_that_looks_that_way():
    remaining = face_loss(rolled_i(200.0, 100.0, 6.0, 10.0), FaceLoss(top=2.0))
    # The top face, and the upper faces of the bottom flange either side of the web.
    assert area(remaining) == pytest.approx(100.0 * 10.0 * 2 + 6.0 * 180.0 - 2.0 * 100.0 - 2.0 * 94.0)
    untouched = rectangle(20.0, 10.0)
    assert face_loss(untouched, FaceLoss()) is untouched


def test_face_loss_may_open_a_hole():
    remaining = face_loss(hollow_rectangle(200.0, 100.0, 8.0), FaceLoss(right=10.0))
    assert [len(part.holes) for part in remaining.parts] == [0]
    assert section_properties(remaining)["width"] == pytest.approx(90.0)


def test_holes():
    section = with_holes(rolled_i(200.0, 100.0, 6.0, 10.0), [RoundHole(0.0, 0.0, 40.0), RoundHole(30.0, 95.0, 22.0)])
    # A bolt hole seen along its axis in the web plane would be a strip; these are round holes in the face.
    strip = without(rectangle(200.0, 50.0), rectangle(22.0, 60.0))
    assert area(strip) == pytest.approx(50.0 * 178.0)
    assert len(strip.parts) == 2
    assert area(section) < 100.0 * 10.0 * 2 + 6.0 * 180.0 - 6.0 * 39.0
    bored = with_holes(rectangle(200.0, 50.0), [RoundHole(0.0, 20.0, 16.0)])
    assert area(bored) == pytest.approx(1e4 - math.pi * 64.0, rel=1e-9)


def test_materials_survive_a_loss():
    wood = Material("spruce", 11000.0)
    section = Section((Part(rectangle(200.0, 50.0).parts[0].shell, material=wood),))
    assert uniform_loss(section, 2.0).parts[0].material is wood


def test_faults():
    with pytest.raises(OutlineError, match=r"hole of 10 mm at \(300, 0\) lies outside"):
        with_holes(rectangle(200.0, 50.0), [RoundHole(300.0, 0.0, 10.0)])
    with pytest.raises(OutlineError, match="Nothing is left"):
        uniform_loss(rectangle(200.0, 50.0), 25.0)
    with pytest.raises(UsageError, match="loss is -1 mm"):
        uniform_loss(rectangle(200.0, 50.0), -1.0)
    with pytest.raises(UsageError, match="loss at the left is nan mm"):
        FaceLoss(left=math.nan)
    with pytest.raises(UsageError, match="diameter 0 mm"):
        RoundHole(0.0, 0.0, 0.0)


def test_comparison_side_by_side():
    full = rectangle(200.0, 50.0)
    found = compare(full, uniform_loss(full, 5.0))["section_modulus_top"]
    assert found.full == pytest.approx(50.0 * 200.0**2 / 6.0)
    assert found.remaining == pytest.approx(40.0 * 190.0**2 / 6.0)
    assert found.ratio == pytest.approx(40.0 * 190.0**2 / (50.0 * 200.0**2))


def test_a_common_scale_cancels_in_the_ratio_of_a_stated_share_but_not_of_a_stated_depth():
    full = rectangle(200.0, 50.0)
    uncertainty = OutlineUncertainty(modes=(Mode("print scale", 0.003 * full.vertices),))

    def halved(section):
        low, high = section.vertices.min(axis=0), section.vertices.max(axis=0)
        middle = 0.5 * (low + high)
        return Section((Part([low, [high[0], low[1]], [high[0], middle[1]], [low[0], middle[1]]]),))

    assert quantify_loss(full, halved, uncertainty)["area"].std == pytest.approx(0.0, abs=1e-9)
    by_depth = quantify_loss(full, lambda s: uniform_loss(s, 5.0), uncertainty)["area"]
    # (b - 10)(h - 10) / (b h) changes by (10/b + 10/h) times the rest, relative to the scale.
    assert by_depth.std == pytest.approx(0.003 * (10.0 / 50.0 * 0.95 + 10.0 / 200.0 * 0.8), rel=1e-3)


def test_measured_remains_against_a_nominal_section():
    nominal, measured = rectangle(200.0, 50.0), rectangle(190.0, 40.0)
    outward = np.sign(measured.vertices) * 0.1
    uncertainty = OutlineUncertainty(modes=(Mode("edge location (common)", outward),))
    found = quantify_remaining(nominal, measured, uncertainty)["area"]
    assert found.value == pytest.approx(0.76)
    assert found.std == pytest.approx(0.2 * (190.0 + 40.0) / 1e4, rel=1e-3)


def test_face_loss_takes_the_sides_of_turned_axes():
    upright, angle = timber(200.0, 100.0), 0.3
    c, s = np.cos(angle), np.sin(angle)
    turned = upright.with_vertices(upright.vertices @ np.array([[c, s], [-s, c]]))
    loss = FaceLoss(top=5.0, left=2.0)
    expected = section_properties(face_loss(upright, loss))
    found = section_properties(face_loss(turned, loss, angle))
    for name in ("area", "second_moment_major", "second_moment_minor"):
        assert found[name] == pytest.approx(expected[name], rel=1e-9)
    # Along x and y the same loss takes something else.
    assert section_properties(face_loss(turned, loss))["area"] < 0.99 * expected["area"]
