from __future__ import annotations

import numpy as np
import pytest
import shapely
from cutface.props.integrals import centroidal, moments
from cutface.props.plastic import cut_offset, plastic_axis
from cutface.props.properties import section_properties
from cutface.props.section import Part, Section
from hypothesis import given, settings
from hypothesis import strategies as st
from sample_sections import ANGLE, CHANNEL, PAIR, SKEW_BOX, random_sections, rectangle, section


def halves(shape: Section, level: float) -> tuple[shapely.Geometry, shapely.Geometry]:
    polygon = shape.to_polygon()
    return tuple(polygon.intersection(shapely.box(-1e4, low, 1e4, low + 1e4)) for low in (level - 1e4, level))  # type: ignore[return-value]


@given(random_sections())
@settings(max_examples=100, deadline=None)
def test_axis_halves_the_area_and_modulus_is_that_of_the_halves(shape: Section) -> None:
    values = section_properties(shape)
    below, above = halves(shape, values["plastic_axis_y"])
    assert below.area == pytest.approx(above.area, rel=1e-9)
    by_halves = below.area * (values["plastic_axis_y"] - below.centroid.y)
    by_halves += above.area * (above.centroid.y - values["plastic_axis_y"])
    assert values["plastic_modulus_x"] == pytest.approx(by_halves, rel=1e-9)


@given(random_sections(), st.floats(0.001, 0.999))
@settings(max_examples=100, deadline=None)
def test_cut_leaves_the_area_asked_for(shape: Section, share: float) -> None:
    edges = centroidal(shape)
    area = moments(edges).area
    _, above = halves(shape, cut_offset(edges, share * area) + edges.origin[1])
    assert above.area == pytest.approx(share * area, rel=1e-8, abs=1e-9 * area)


@given(random_sections())
@settings(max_examples=60, deadline=None)
def test_plastic_modulus_is_the_least_over_all_axes_of_that_direction(shape: Section) -> None:
    values = section_properties(shape)
    for shift in (-1.0, -1e-3, 1e-3, 1.0):
        below, above = halves(shape, values["plastic_axis_y"] + shift)
        level = values["plastic_axis_y"] + shift
        moment = below.area * (level - below.centroid.y) + above.area * (above.centroid.y - level)
        assert moment >= values["plastic_modulus_x"] * (1 - 1e-9)


@pytest.mark.parametrize("shape", [ANGLE, SKEW_BOX, PAIR], ids=["angle", "box", "pair"])
def test_principal_moduli_are_those_of_the_turned_section(shape: Section) -> None:
    values = section_properties(shape)
    c, s = np.cos(values["principal_angle"]), np.sin(values["principal_angle"])
    turned = section_properties(shape.with_vertices(shape.vertices @ np.array([[c, -s], [s, c]])))
    assert turned["product_moment"] == pytest.approx(0.0, abs=1e-9 * turned["second_moment_x"])
    assert values["plastic_modulus_major"] == pytest.approx(turned["plastic_modulus_x"], rel=1e-10)
    assert values["plastic_modulus_minor"] == pytest.approx(turned["plastic_modulus_y"], rel=1e-10)
    assert values["section_modulus_major"] == pytest.approx(
        min(turned["section_modulus_top"], turned["section_modulus_bottom"]), rel=1e-10
    )
    assert values["section_modulus_minor"] == pytest.approx(
        min(turned["section_modulus_left"], turned["section_modulus_right"]), rel=1e-10
    )


def two_plates(gap: float, lower: float = 10.0, upper: float = 10.0) -> Section:
    return Section((*rectangle(60, lower).parts, *rectangle(60, upper, 0, lower + gap).parts))


def test_between_equal_parts_the_axis_is_in_the_middle_of_the_gap() -> None:
    shape = two_plates(40)
    edges = centroidal(shape)
    axis = plastic_axis(edges, moments(edges).area)
    assert (axis.gap, axis.width) == (40.0, 0.0)
    values = section_properties(shape)
    assert values["plastic_axis_y"] == pytest.approx(30.0)
    assert values["plastic_modulus_x"] == pytest.approx(60 * 10 * 25 * 2)
    # Far out, where coordinates round differently in every part.
    far = section_properties(shape.with_vertices(shape.vertices / 3 + 12345.678))
    assert far["plastic_axis_y"] == pytest.approx(12345.678 + 10, abs=1e-6)


def test_between_unequal_parts_the_axis_lies_in_the_larger() -> None:
    values = section_properties(two_plates(40, upper=10.02))
    assert values["plastic_axis_y"] == pytest.approx(50.01)
    assert values["plastic_modulus_x"] == pytest.approx(600 * 45.01 + 0.01 * 60 * 0.005 + 60 * 10.01**2 / 2)


def test_three_parts_with_two_gaps() -> None:
    plates = [*two_plates(40).parts, *rectangle(60, 20, 0, -50).parts]
    values = section_properties(Section(tuple(plates)))
    # 1200 below, 600 and 600 above.
    assert values["plastic_axis_y"] == pytest.approx(-15.0)


def test_parts_that_overlap_in_height_leave_no_gap() -> None:
    shape = Section((*rectangle(10, 30).parts, *rectangle(10, 30, 20, 20).parts))
    assert section_properties(shape)["plastic_axis_y"] == pytest.approx(25.0)


def test_axis_along_an_edge() -> None:
    # Flange and web of equal area: the axis lies on the flange's underside, where the width jumps.
    tee = section([[-5, 0], [5, 0], [5, 100], [50, 100], [50, 110], [-50, 110], [-50, 100], [-5, 100]])
    edges = centroidal(tee)
    axis = plastic_axis(edges, moments(edges).area)
    assert axis.offset + edges.origin[1] == pytest.approx(100.0)
    assert axis.modulus == pytest.approx(1000 * 50 + 1000 * 5)
    assert 10 - 1e-6 <= axis.width <= 100 + 1e-6


def test_waist_of_no_width() -> None:
    bow_tie = Section((Part([[0, 0], [40, 0], [20, 30]]), Part([[20, 30], [40, 60], [0, 60]])))
    values = section_properties(bow_tie)
    assert values["plastic_axis_y"] == pytest.approx(30.0)
    assert values["plastic_modulus_x"] == pytest.approx(2 * 600 * 20)


def test_saw_teeth_over_the_full_height() -> None:
    # Every vertex at one of two levels: one strip, as wide as all teeth.
    teeth = 200
    x = np.arange(2 * teeth + 1)
    comb = np.column_stack([x, np.where(x % 2, 50.0, 0.0)])
    shape = section(np.vstack([comb, [[x[-1], 0.0], [0.0, 0.0]]])[:-1])
    values = section_properties(shape)
    assert values["area"] == pytest.approx(teeth * 50.0)
    # Each tooth is a triangle.
    assert values["plastic_axis_y"] == pytest.approx(50 * (1 - np.sqrt(0.5)))


@pytest.mark.parametrize("scale", [1e-3, 1.0, 1e4])
def test_channel_plastic_modulus_by_hand(scale: float) -> None:
    values = section_properties(CHANNEL.with_vertices(CHANNEL.vertices * scale))
    assert values["plastic_modulus_x"] == pytest.approx((60 * 8 * 112 + 6 * 104**2 / 4) * scale**3)
    # Half of 1584 mm^2 over 120 mm height of web and the flanges beyond it: 720 + 16 (x - 6) = 792.
    assert values["plastic_axis_x"] == pytest.approx(10.5 * scale)
