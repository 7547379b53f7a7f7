"""Drawn shapes against closed forms, their validity, and the messages for impossible dimensions."""

import math

import numpy as np
import pytest
import shapely
from cutface.props.errors import OutlineError, UsageError
from cutface.props.properties import section_properties
from cutface.props.section import Material, Part, Section
from cutface.props.shapes import (
    SHAPES,
    Notch,
    angle,
    build,
    channel,
    circle,
    hollow_rectangle,
    rectangle,
    riveted_i,
    rolled_i,
    tee,
    timber,
    tube,
    typed_dimensions,
    welded_box,
    welded_i,
)
from cutface.props.shapes.arcs import arc, chord_angle, chord_angle_for_distance, rounded_outline
from cutface.props.shapes.placing import assemble, placed
from hypothesis import given, settings
from hypothesis import strategies as st

ONE_OF_EACH = {
    "rectangle": {"depth": 200.0, "width": 80.0, "corner_radius": 5.0},
    "timber": {"depth": 220.0, "width": 63.0, "notches": [Notch("top", 10.0, 20.0, 30.0)]},
    "circle": {"diameter": 60.0},
    "tube": {"diameter": 168.3, "thickness": 8.0},
    "hollow-rectangle": {"depth": 150.0, "width": 100.0, "thickness": 6.3, "outer_radius": 9.45, "inner_radius": 6.3},
    "rolled-i": {
        "depth": 200.0,
        "width": 90.0,
        "web_thickness": 7.5,
        "flange_thickness": 11.3,
        "root_radius": 7.5,
        "toe_radius": 4.5,
        "flange_slope": 0.14,
        "thickness_from_tip": 22.5,
    },
    "channel": {
        "depth": 160.0,
        "width": 65.0,
        "web_thickness": 7.5,
        "flange_thickness": 10.5,
        "root_radius": 10.5,
        "toe_radius": 5.5,
        "flange_slope": 0.08,
        "thickness_from_tip": 32.5,
    },
    "angle": {"depth": 120.0, "width": 80.0, "thickness": 10.0, "root_radius": 11.0, "toe_radius": 5.5},
    "tee": {
        "depth": 80.0,
        "width": 80.0,
        "web_thickness": 9.0,
        "flange_thickness": 9.0,
        "root_radius": 9.0,
        "toe_radius": 4.5,
        "web_toe_radius": 2.0,
        "flange_slope": 0.02,
        "web_slope": 0.02,
    },
    "welded-i": {"depth": 600.0, "web_thickness": 8.0, "top_width": 200.0, "top_thickness": 15.0},
    "welded-box": {"depth": 500.0, "width": 300.0, "web_thickness": 8.0, "flange_thickness": 12.0},
    "riveted-i": {
        "back_to_back": 606.0,
        "web_depth": 600.0,
        "web_thickness": 10.0,
        "angle_depth": 90.0,
        "angle_width": 90.0,
        "angle_thickness": 10.0,
        "root_radius": 11.0,
        "toe_radius": 5.5,
        "cover_width": 260.0,
        "cover_thickness": 12.0,
    },
}


@pytest.mark.parametrize("name", SHAPES)
def test_every_shape_is_one_valid_region(name):
    section = build(name, ONE_OF_EACH[name])
    assert section.to_polygon().is_valid
    assert len(section.parts) == 1


@pytest.mark.parametrize("name", [n for n in SHAPES if any(d.name == "tolerance" for d in SHAPES[n].dimensions)])
def test_arcs_are_drawn_to_the_requested_tolerance(name):
    exact = section_properties(build(name, {**ONE_OF_EACH[name], "tolerance": 1e-11}))
    for tolerance in (1e-4, 1e-6):
        drawn = section_properties(build(name, {**ONE_OF_EACH[name], "tolerance": tolerance}))
        assert drawn["area"] == pytest.approx(exact["area"], rel=1e-9)
        for moment in ("second_moment_x", "second_moment_y", "second_moment_major", "second_moment_minor"):
            assert drawn[moment] == pytest.approx(exact[moment], rel=tolerance)


def test_circle():
    p = section_properties(circle(100.0))
    assert p["area"] == pytest.approx(math.pi * 50.0**2, rel=1e-12)
    assert p["second_moment_x"] == pytest.approx(math.pi * 50.0**4 / 4.0, rel=1e-6)
    assert p["section_modulus_top"] == pytest.approx(math.pi * 50.0**3 / 4.0, rel=1e-6)
    assert p["plastic_modulus_x"] == pytest.approx(4.0 * 50.0**3 / 3.0, rel=1e-5)
    assert (p["width"], p["depth"]) == pytest.approx((100.0, 100.0), rel=1e-14)


def test_tube():
    p = section_properties(tube(168.3, 10.0))
    outer, inner = 84.15, 74.15
    assert p["area"] == pytest.approx(math.pi * (outer**2 - inner**2), rel=1e-12)
    assert p["second_moment_y"] == pytest.approx(math.pi * (outer**4 - inner**4) / 4.0, rel=1e-6)
    assert p["section_modulus_right"] == pytest.approx(math.pi * (outer**4 - inner**4) / 4.0 / outer, rel=1e-6)


def test_rectangle():
    p = section_properties(rectangle(225.0, 75.0))
    assert p["area"] == 225.0 * 75.0
    assert p["second_moment_x"] == pytest.approx(75.0 * 225.0**3 / 12.0, rel=1e-14)
    assert (p["centroid_x"], p["centroid_y"]) == pytest.approx((0.0, 0.0), abs=1e-12)


def test_a_fillet_adds_its_area_and_its_first_moment():
    r = 12.0
    sharp, filleted = (section_properties(angle(100.0, 80.0, 10.0, root)) for root in (0.0, r))
    added = (1.0 - math.pi / 4.0) * r**2
    assert filleted["area"] - sharp["area"] == pytest.approx(added, rel=1e-10)
    assert added == pytest.approx(0.2146 * r**2, rel=1e-4)
    # The centroid of a fillet lies 0.2234 r from either of its tangents.
    moment = filleted["area"] * filleted["centroid_y"] - sharp["area"] * sharp["centroid_y"]
    assert moment == pytest.approx(added * (10.0 + 0.2234 * r), rel=1e-4)


def test_a_toe_radius_takes_its_area_away():
    r = 5.0
    sharp, rounded = (section_properties(angle(100.0, 80.0, 10.0, 0.0, toe)) for toe in (0.0, r))
    assert sharp["area"] - rounded["area"] == pytest.approx(2.0 * (1.0 - math.pi / 4.0) * r**2, rel=1e-10)


def test_tapered_flange_has_its_thickness_at_the_stated_place():
    section = rolled_i(200.0, 90.0, 7.5, 11.3, flange_slope=0.14, thickness_from_tip=22.5)
    for x in (45.0 - 22.5, 22.5 - 45.0):
        cut = section.to_polygon().intersection(shapely.LineString([(x, 0.0), (x, 150.0)]))
        assert cut.length == pytest.approx(11.3, rel=1e-12)
    at_tip = section.to_polygon().intersection(shapely.LineString([(44.999999, 0.0), (44.999999, 150.0)]))
    assert at_tip.length == pytest.approx(11.3 - 0.14 * 22.5, abs=1e-6)


def test_thickness_of_a_tapered_channel_holds_at_mid_outstand_unless_stated():
    section = channel(160.0, 65.0, 7.5, 10.5, flange_slope=0.08)
    x = 7.5 + 0.5 * (65.0 - 7.5)
    cut = section.to_polygon().intersection(shapely.LineString([(x, 0.0), (x, 150.0)]))
    assert cut.length == pytest.approx(10.5, rel=1e-12)


def test_tapered_web_of_a_tee_has_its_thickness_at_half_the_depth():
    section = tee(80.0, 80.0, 9.0, 9.0, web_slope=0.02)
    cut = section.to_polygon().intersection(shapely.LineString([(-40.0, -40.0), (40.0, -40.0)]))
    assert cut.length == pytest.approx(9.0, rel=1e-12)


def test_roots_and_toes_are_tangent_to_a_sloping_flange():
    loop = rolled_i(200.0, 90.0, 7.5, 11.3, 7.5, 4.5, 0.14, 22.5, tolerance=1e-10).loops[0]
    edges = np.roll(loop, -1, axis=0) - loop
    heading = np.arctan2(edges[:, 1], edges[:, 0])
    turns = np.abs((np.diff(heading, append=heading[0]) + math.pi) % (2.0 * math.pi) - math.pi)
    # Four sharp outer corners; every other turn is that between two chords.
    assert np.sum(turns > 1.0) == 4
    assert np.sort(turns)[-5] <= chord_angle(1e-10) * 1.001


def test_inner_radius_follows_the_outer_one():
    one = hollow_rectangle(100.0, 60.0, 4.0, 8.0)
    other = hollow_rectangle(100.0, 60.0, 4.0, 8.0, 4.0)
    assert np.array_equal(one.vertices, other.vertices)
    assert section_properties(one)["area"] == pytest.approx(
        2.0 * 4.0 * (100.0 + 60.0 - 8.0) - (4.0 - math.pi) * (8.0**2 - 4.0**2), rel=1e-12
    )


def test_welded_i_against_its_rectangles():
    p = section_properties(welded_i(500.0, 10.0, 200.0, 20.0, 300.0, 30.0))
    plates = [(200.0, 20.0, 240.0), (10.0, 450.0, 5.0), (300.0, 30.0, -235.0)]
    area = sum(b * t for b, t, _ in plates)
    centre = sum(b * t * y for b, t, y in plates) / area
    assert p["area"] == pytest.approx(area, rel=1e-12)
    assert p["centroid_y"] == pytest.approx(centre, rel=1e-12)
    assert p["second_moment_x"] == pytest.approx(
        sum(b * t**3 / 12.0 + b * t * (y - centre) ** 2 for b, t, y in plates), rel=1e-12
    )


def test_welded_box_has_one_cell():
    section = welded_box(500.0, 300.0, 8.0, 12.0, 20.0)
    assert [len(part.holes) for part in section.parts] == [1]
    assert section_properties(section)["area"] == pytest.approx(2 * 300 * 12 + 2 * 8 * 476, rel=1e-12)


def test_riveted_girder_against_its_pieces():
    shape = ONE_OF_EACH["riveted-i"]
    p = section_properties(build("riveted-i", shape))
    leg = section_properties(angle(90.0, 90.0, 10.0, 11.0, 5.5))
    area = 600.0 * 10.0 + 4.0 * leg["area"] + 2.0 * 260.0 * 12.0
    second = (
        10.0 * 600.0**3 / 12.0
        + 4.0 * (leg["second_moment_x"] + leg["area"] * (303.0 - leg["centroid_y"]) ** 2)
        + 2.0 * (260.0 * 12.0**3 / 12.0 + 260.0 * 12.0 * 309.0**2)
    )
    assert p["area"] == pytest.approx(area, rel=1e-8)
    assert p["second_moment_x"] == pytest.approx(second, rel=1e-6)
    assert p["product_moment"] == pytest.approx(0.0, abs=1e-6 * p["second_moment_x"])


def test_notched_timber_against_subtracted_rectangles():
    p = section_properties(timber(200.0, 100.0, [Notch("top", 0.0, 40.0, 30.0), Notch("right", 50.0, 20.0, 25.0)]))
    pieces = [(1.0, 100.0, 200.0, 50.0, 100.0), (-1.0, 40.0, 30.0, 20.0, 185.0), (-1.0, 25.0, 20.0, 87.5, 60.0)]
    area = sum(s * b * h for s, b, h, _, _ in pieces)
    y0 = sum(s * b * h * y for s, b, h, _, y in pieces) / area
    x0 = sum(s * b * h * x for s, b, h, x, _ in pieces) / area
    assert p["area"] == pytest.approx(area, rel=1e-12)
    assert (p["centroid_x"], p["centroid_y"]) == pytest.approx((x0, y0), rel=1e-12)
    assert p["second_moment_x"] == pytest.approx(
        sum(s * (b * h**3 / 12.0 + b * h * (y - y0) ** 2) for s, b, h, _, y in pieces), rel=1e-12
    )


@settings(max_examples=40, deadline=None)
@given(st.floats(0.05, 6.2), st.floats(0.5, 500.0), st.floats(0.02, 0.7))
def test_every_chord_of_an_arc_keeps_the_area_of_its_sector(sweep, radius, widest):
    points = arc((0.0, 0.0), radius, 0.3, sweep, widest)
    angles = np.arctan2(points[:, 1], points[:, 0])
    steps = np.diff(np.unwrap(angles))
    triangles = 0.5 * np.abs(points[:-1, 0] * points[1:, 1] - points[1:, 0] * points[:-1, 1])
    assert triangles == pytest.approx(0.5 * radius**2 * steps, rel=1e-9)
    assert steps.sum() == pytest.approx(sweep, rel=1e-9)
    assert np.hypot(*points[[0, -1]].T) == pytest.approx([radius, radius], rel=1e-12)
    if len(points) > 3:
        assert steps.max() <= widest * (1.0 + 1e-6)


def test_chords_stay_within_the_stated_distance():
    angles = chord_angle_for_distance(50.0, 0.01)
    ring = shapely.LinearRing(circle(100.0, tolerance=1e-12).vertices)
    points = arc((0.0, 0.0), 50.0, 0.0, 2.0, angles)
    mid = 0.5 * (points[:-1] + points[1:])
    strayed = shapely.distance(ring, shapely.points(np.concatenate([points, mid])))
    assert 0.005 < strayed.max() <= 0.01 * (1.0 + 1e-3)


def test_rounding_works_either_way_round():
    corners = np.array([[0, 0], [60, 0], [60, 10], [10, 10], [10, 40], [0, 40]], float)
    radii = np.array([0, 0, 4, 8, 4, 0], float)
    one = shapely.Polygon(rounded_outline(corners, radii))
    other = shapely.Polygon(rounded_outline(corners[::-1], radii[::-1]))
    assert one.symmetric_difference(other).area < 1e-9


def test_moving_turning_and_mirroring():
    base = angle(100.0, 60.0, 8.0)
    p = section_properties(base)
    turned = section_properties(placed(base, 7.0, -3.0, turn=math.pi / 2.0))
    assert turned["second_moment_x"] == pytest.approx(p["second_moment_y"], rel=1e-12)
    assert turned["centroid_x"] == pytest.approx(7.0 - p["centroid_y"], rel=1e-12)
    mirrored = section_properties(placed(base, mirrored=True))
    assert mirrored["product_moment"] == pytest.approx(-p["product_moment"], rel=1e-12)
    by_any_angle = section_properties(placed(base, turn=0.4))
    assert by_any_angle["second_moment_major"] == pytest.approx(p["second_moment_major"], rel=1e-12)


def test_pieces_of_different_material_stay_parts():
    def piece(x: float, material: Material) -> Section:
        return Section((Part([[x, 0], [x + 50, 0], [x + 50, 200], [x, 200]], material=material),))

    wood, steel = Material("spruce", 11000.0), Material("steel", 210000.0)
    section = assemble([piece(0.0, wood), piece(50.0, steel), piece(100.0, wood)])
    assert [part.material.name for part in section.parts] == ["spruce", "spruce", "steel"]


def test_overlapping_pieces_are_refused_with_their_place():
    with pytest.raises(OutlineError, match=r"Pieces 1 and 2 overlap by 500 mm2 near \(0, 0\)") as caught:
        assemble([rectangle(100.0, 10.0), rectangle(50.0, 30.0)])
    assert caught.value.code == "pieces-overlap"
    assert caught.value.remedy


@pytest.mark.parametrize(
    ("name", "change", "message"),
    [
        ("rectangle", {"depth": 0.0}, "depth is 0 mm"),
        ("rectangle", {"width": math.nan}, "width is nan mm"),
        ("circle", {"diameter": -5.0}, "diameter is -5 mm"),
        ("tube", {"thickness": 90.0}, r"wall thickness \(90 mm\) must be less than the outer radius"),
        ("hollow-rectangle", {"thickness": 60.0}, "must be less than the smaller side"),
        ("rolled-i", {"web_thickness": 95.0}, r"web thickness \(95 mm\) must be less than the width"),
        ("rolled-i", {"flange_slope": 0.6}, "thickness of flange at its tip is -2.2 mm"),
        ("channel", {"flange_thickness": 90.0}, "must be less than the half depth"),
        ("angle", {"thickness": 100.0}, "must be less than the width"),
        ("tee", {"flange_thickness": 81.0}, "must be less than the depth"),
        ("tee", {"web_slope": 0.2}, "half thickness of web at its end"),
        ("welded-i", {"top_thickness": 300.0}, "thickness of both flanges"),
        ("riveted-i", {"web_depth": 610.0}, "more than the depth over the angles"),
        ("riveted-i", {"cover_thickness": 0.0}, "cover plates measure 260 x 0 mm"),
        ("angle", {"tolerance": 0.5}, "tolerance 0.5 is out of range"),
    ],
)
def test_impossible_dimensions_are_named(name, change, message):
    with pytest.raises(UsageError, match=message) as caught:
        build(name, {**ONE_OF_EACH[name], **change})
    assert caught.value.remedy


@pytest.mark.parametrize(
    ("name", "change"),
    [
        ("rectangle", {"corner_radius": 41.0}),
        ("hollow-rectangle", {"inner_radius": 50.0}),
        ("rolled-i", {"toe_radius": 12.0}),
        ("angle", {"toe_radius": 12.0}),
    ],
)
def test_radii_that_do_not_fit_are_refused_with_their_place(name, change):
    with pytest.raises(OutlineError, match=r"mm long side from \(.*\) to \(") as caught:
        build(name, {**ONE_OF_EACH[name], **change})
    assert caught.value.code == "radius-too-large"


def test_notches_that_leave_no_single_timber_are_refused():
    with pytest.raises(OutlineError, match="does not lie within the 60 x 200 mm timber"):
        timber(200.0, 60.0, [Notch("top", 50.0, 20.0, 10.0)])
    with pytest.raises(OutlineError, match="cut the timber into 2 pieces"):
        timber(200.0, 60.0, [Notch("left", 90.0, 20.0, 40.0), Notch("right", 95.0, 10.0, 25.0)])
    with pytest.raises(UsageError, match="no side 'front'"):
        Notch("front", 0.0, 1.0, 1.0)
    with pytest.raises(UsageError, match="'top,1,2' is not a notch"):
        Notch.from_text("top,1,2")
    assert Notch.from_text("top, 1,2, 3") == Notch("top", 1.0, 2.0, 3.0)


def test_building_by_name_tells_what_is_missing_or_unknown():
    with pytest.raises(UsageError, match="no shape 'zed'"):
        build("zed", {})
    with pytest.raises(UsageError, match="lacks width"):
        build("rectangle", {"depth": 3.0})
    with pytest.raises(UsageError, match="has no height"):
        build("rectangle", {"height": 3.0})


def test_dimensions_as_typed():
    typed = typed_dimensions(["depth=200", "Width = 4in", "flange-slope=14%", "root_radius=1.2 cm"])
    assert typed == pytest.approx({"depth": 200.0, "width": 101.6, "flange_slope": 0.14, "root_radius": 12.0})
    notched = typed_dimensions(["depth=200", "width=60", "notch=top,0,20,10", "notch=left,50,20,10"])
    assert section_properties(build("timber", notched))["area"] == pytest.approx(12000.0 - 400.0)
    for text, message in (("depth", "is not a dimension"), ("depth=tall", "depth is 'tall'"), ("depth=1e", "depth is")):
        with pytest.raises(UsageError, match=message):
            typed_dimensions([text])
    with pytest.raises(UsageError, match="given twice"):
        typed_dimensions(["wall=3", "wall=4"])


def test_functions_and_registry_agree():
    by_name = build("riveted-i", ONE_OF_EACH["riveted-i"])
    assert np.array_equal(by_name.vertices, riveted_i(**ONE_OF_EACH["riveted-i"]).vertices)
    assert [d.name for d in SHAPES["tube"].dimensions if d.required] == ["diameter", "thickness"]
