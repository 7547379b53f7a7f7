from __future__ import annotations

import json
from collections.abc import Callable
from pathlib import Path

import numpy as np
import pytest
from cutface.props.errors import OutlineError
from cutface.props.integrals import centroidal, moments
from cutface.props.properties import PROPERTIES, section_properties
from cutface.props.section import Part, Section
from hypothesis import assume, given, settings
from hypothesis import strategies as st
from sample_sections import ANGLE, PAIR, SKEW_BOX, circle, random_sections, rectangle, section

CLOSED_FORMS = {
    entry["name"]: entry
    for entry in json.loads((Path(__file__).parents[1] / "reference" / "closed_forms.json").read_text("utf-8"))
}
# Chords enough that a circle's own rounding to a polygon, 6.6/n^2 of its area, is below the tolerance.
CHORDS = 400_000


def unequal_angle(h: float, b: float, t: float) -> Section:
    return section([[0, 0], [b, 0], [b, t], [t, t], [t, h], [0, h]])


def ellipse(a: float, b: float) -> Section:
    return section(circle(1.0, CHORDS) * [a, b])


def tube(outer: float, inner: float) -> Section:
    return section(circle(outer, CHORDS), circle(inner, CHORDS))


SHAPES: dict[str, Section] = {
    "rectangle": rectangle(75, 225),
    "right triangle": section([[0, 0], [90, 0], [0, 140]]),
    "square on its corner": section(circle(100 / np.sqrt(2), 4)),
    "isosceles triangle plastic": section([[0, 0], [90, 0], [45, 120]]),
    "triangle base 80 height 150": section([[0, 0], [80, 0], [40, 150]]),
    "equilateral triangle side 120": section([[0, 0], [120, 0], [60, 60 * np.sqrt(3)]]),
    "rectangle plastic 50 x 120": rectangle(50, 120),
    "diamond 60 x 140": section([[-30, 0], [0, -70], [30, 0], [0, 70]]),
    "regular hexagon side 40": section(circle(40, 6)),
    "regular polygon, 8 sides of 40: torsion": section(circle(20 / np.sin(np.pi / 8), 8)),
    "tee of two rectangles": section(
        [[-6, 0], [6, 0], [6, 180], [75, 180], [75, 200], [-75, 200], [-75, 180], [-6, 180]]
    ),
    "Z of three rectangles": section(
        [[-86, -100], [4, -100], [4, 92], [86, 92], [86, 100], [-4, 100], [-4, -92], [-86, -92]]
    ),
    "sharp unequal angle 150 x 90 x 12": unequal_angle(150, 90, 12),
    "sharp unequal angle 100 x 65 x 8": unequal_angle(100, 65, 8),
    "sharp unequal angle 203.2 x 152.4 x 25.4": unequal_angle(203.2, 152.4, 25.4),
    "ellipse semi-axes 50, 30": ellipse(50, 30),
    "ellipse semi-axes 80, 20": ellipse(80, 20),
    "circular tube": tube(60, 45),
    "circular tube 168.3 x 10": tube(168.3 / 2, 168.3 / 2 - 10),
    "circular tube 323.9 x 8": tube(323.9 / 2, 323.9 / 2 - 8),
    "solid circle diameter 100": section(circle(50, CHORDS)),
    "hollow ellipse 60, 40, inner similar at 0.8": section(
        circle(1.0, CHORDS) * [60, 40], circle(1.0, CHORDS) * [48, 32]
    ),
}


@pytest.mark.parametrize("name", SHAPES)
def test_closed_forms(name: str) -> None:
    values = section_properties(SHAPES[name])
    expected = CLOSED_FORMS[name]["values"]
    compared = [key for key in expected if key in values]
    assert compared
    size = values["width"] + values["depth"]
    # Values that are zero by symmetry are zero next to the size of the section to the same power.
    scale = {"centroid_x": size, "centroid_y": size, "product_moment": values["polar_second_moment"]}
    for key in compared:
        assert values[key] == pytest.approx(expected[key], rel=1e-9, abs=1e-9 * scale.get(key, 0.0)), key
    if "principal_angle_deg" in expected:
        assert np.degrees(values["principal_angle"]) == pytest.approx(expected["principal_angle_deg"], abs=1e-8)


def test_half_disc_closed_forms() -> None:
    angles = np.linspace(0, np.pi, CHORDS)
    values = section_properties(section(50 * np.column_stack([np.cos(angles), np.sin(angles)])))
    exact = CLOSED_FORMS["half disc radius 50"]["values"]
    assert values["centroid_y"] == pytest.approx(exact["centroid_from_diameter"], rel=1e-9)
    assert values["plastic_axis_y"] == pytest.approx(exact["plastic_axis_from_diameter"], rel=1e-9)
    about_chord = exact["plastic_modulus_about_axis_parallel_to_diameter"]
    assert values["plastic_modulus_x"] == pytest.approx(about_chord, rel=1e-9)
    assert values["plastic_modulus_y"] == pytest.approx(exact["plastic_modulus_about_axis_of_symmetry"], rel=1e-9)
    semicircle = CLOSED_FORMS["semicircle"]["values"]
    assert values["second_moment_x"] == pytest.approx(semicircle["second_moment_parallel_to_diameter"], rel=1e-9)
    assert values["second_moment_y"] == pytest.approx(semicircle["second_moment_normal_to_diameter"], rel=1e-9)


POSITIONS = {"centroid_x": 0, "plastic_axis_x": 0, "centroid_y": 1, "plastic_axis_y": 1}


def assert_same(values: dict, expected: dict, *, rel: float = 1e-9, leave: tuple[str, ...] = ()) -> None:
    """Equal but for rounding; angles modulo half a turn, signed values next to the size of the section."""
    size = expected["width"] + expected["depth"]
    for name, value in expected.items():
        if name in leave:
            continue
        if name == "principal_angle":
            turn = (values[name] - value) / np.pi
            assert abs(turn - round(turn)) < rel * 1e3, name
        else:
            scale = {**dict.fromkeys(POSITIONS, size), "product_moment": expected["polar_second_moment"]}.get(name, 0)
            assert values[name] == pytest.approx(value, rel=rel, abs=rel * scale), name


def moved(given_section: Section, matrix: list[list[float]] | np.ndarray, shift: np.ndarray | float = 0.0) -> Section:
    return given_section.with_vertices(given_section.vertices @ np.asarray(matrix, float).T + shift)


def turning(angle: float) -> np.ndarray:
    return np.array([[np.cos(angle), -np.sin(angle)], [np.sin(angle), np.cos(angle)]])


def has_axes(values: dict) -> bool:
    return values["second_moment_major"] - values["second_moment_minor"] > 0.01 * values["polar_second_moment"]


@given(random_sections(), st.floats(-1e5, 1e5), st.floats(-1e5, 1e5))
@settings(max_examples=60, deadline=None)
def test_translation_moves_positions_only(shape: Section, x: float, y: float) -> None:
    values = dict(section_properties(shape))
    assume(has_axes(values))
    shifted = dict(section_properties(moved(shape, np.eye(2), np.array([x, y]))))
    for name, axis in POSITIONS.items():
        shifted[name] -= (x, y)[axis]
    # Coordinates of 1e5 mm are themselves rounded to 1e-11 mm.
    assert_same(shifted, values, rel=1e-8)


@given(random_sections(), st.floats(-3.0, 3.0))
@settings(max_examples=60, deadline=None)
def test_rotation_turns_the_principal_axes_and_nothing_else_about_them(shape: Section, angle: float) -> None:
    values = dict(section_properties(shape))
    assume(has_axes(values))
    turned = dict(section_properties(moved(shape, turning(angle))))
    turned["principal_angle"] -= angle
    about_axes = [name for name in values if name.endswith(("major", "minor"))]
    names = ["area", "perimeter", "polar_second_moment", "principal_angle", "width", "depth", *about_axes]
    for name in ("width", "depth"):
        turned[name] = values[name]
    assert_same({n: turned[n] for n in names}, {n: values[n] for n in names})


@given(random_sections())
@settings(max_examples=60, deadline=None)
def test_quarter_turn_swaps_the_axes(shape: Section) -> None:
    values = section_properties(shape)
    turned = section_properties(moved(shape, [[0, -1], [1, 0]]))
    swaps = {
        "width": "depth",
        "second_moment_x": "second_moment_y",
        "radius_of_gyration_x": "radius_of_gyration_y",
        "plastic_modulus_x": "plastic_modulus_y",
        "shape_factor_x": "shape_factor_y",
        "section_modulus_top": "section_modulus_right",
        "section_modulus_bottom": "section_modulus_left",
        "centroid_y": "centroid_x",
        "plastic_axis_y": "plastic_axis_x",
    }
    for after, before in swaps.items():
        assert turned[after] == pytest.approx(values[before], rel=1e-9, abs=1e-7)


@given(random_sections())
@settings(max_examples=60, deadline=None)
def test_mirror_swaps_left_and_right(shape: Section) -> None:
    values = dict(section_properties(shape))
    assume(has_axes(values))
    mirrored = dict(section_properties(moved(shape, [[-1, 0], [0, 1]])))
    mirrored["section_modulus_left"], mirrored["section_modulus_right"] = (
        mirrored["section_modulus_right"],
        mirrored["section_modulus_left"],
    )
    for name in ("centroid_x", "plastic_axis_x", "product_moment", "principal_angle"):
        mirrored[name] = -mirrored[name]
    assert_same(mirrored, values)


POWERS = {"mm": 1, "mm^2": 2, "mm^3": 3, "mm^4": 4, "1": 0, "rad": 0}


@given(random_sections(), st.floats(0.001, 1000.0))
@settings(max_examples=60, deadline=None)
def test_scale_acts_by_the_dimension_of_a_property(shape: Section, factor: float) -> None:
    values = dict(section_properties(shape))
    assume(has_axes(values))
    scaled = dict(section_properties(moved(shape, factor * np.eye(2))))
    assert_same({n: v / factor ** POWERS[PROPERTIES[n].unit] for n, v in scaled.items()}, values)


@given(random_sections(), st.floats(0.2, 0.8))
@settings(max_examples=40, deadline=None)
def test_cut_into_parts_is_the_same_section(shape: Section, where: float) -> None:
    from shapely import box

    low, high = shape.vertices.min(axis=0), shape.vertices.max(axis=0)
    level = low[1] + where * (high[1] - low[1])
    polygon = shape.to_polygon()
    below = polygon.intersection(box(low[0] - 1, low[1] - 1, high[0] + 1, level))
    above = polygon.intersection(box(low[0] - 1, level, high[0] + 1, high[1] + 1))
    parts = [p for piece in (below, above) for p in getattr(piece, "geoms", [piece]) if p.area > 0]
    values = section_properties(shape)
    assume(has_axes(values))
    assert_same(section_properties(Section.from_polygons(parts)), values, rel=1e-7, leave=("perimeter",))


@given(random_sections(holes=False), st.floats(0.1, 0.6))
@settings(max_examples=40, deadline=None)
def test_hole_is_a_subtracted_part(shape: Section, share: float) -> None:
    centre = shape.vertices.mean(axis=0)
    shell = shape.parts[0].shell
    hole = centre + share * (shell - centre)
    pierced = moments(centroidal(Section((Part(shell, (hole,)),))))
    whole, cut_out = centroidal(shape), centroidal(section(hole))
    gap = whole.origin - centroidal(Section((Part(shell, (hole,)),))).origin
    away = cut_out.origin - whole.origin
    outer, inner = moments(whole), moments(cut_out)
    area = outer.area - inner.area
    assert pierced.area == pytest.approx(area, rel=1e-10)
    expected = outer.second_x - inner.second_x - inner.area * away[1] ** 2 - area * gap[1] ** 2
    assert pierced.second_x == pytest.approx(expected, rel=1e-9)
    product = outer.product - inner.product - inner.area * away[0] * away[1] - area * gap[0] * gap[1]
    assert pierced.product == pytest.approx(product, rel=1e-9, abs=1e-9 * pierced.second_x)


@given(random_sections())
@settings(max_examples=60, deadline=None)
def test_area_centroid_and_perimeter_agree_with_shapely(shape: Section) -> None:
    values, polygon = section_properties(shape), shape.to_polygon()
    assert values["area"] == pytest.approx(polygon.area, rel=1e-10)
    assert values["perimeter"] == pytest.approx(polygon.geoms[0].exterior.length, rel=1e-12)
    assert (values["centroid_x"], values["centroid_y"]) == pytest.approx((polygon.centroid.x, polygon.centroid.y))


@pytest.mark.parametrize("shape", [ANGLE, SKEW_BOX, PAIR], ids=["angle", "box", "pair"])
def test_quadrature_over_a_triangulation(shape: Section) -> None:
    import shapely
    from scipy.integrate import dblquad

    values = section_properties(shape)
    cx, cy, level = values["centroid_x"], values["centroid_y"], values["plastic_axis_y"]
    # Cut along the plastic axis first: |y - level| is then smooth on every triangle.
    halves = [shape.to_polygon().intersection(shapely.box(-500, low, 500, low + 500)) for low in (level - 500, level)]
    triangles = [t for half in halves for t in shapely.constrained_delaunay_triangles(half).geoms]

    def over_region(integrand: Callable[[float, float], float]) -> float:
        total = 0.0
        for triangle in triangles:
            a, b, c = np.array(triangle.exterior.coords)[:3]
            size = abs((b - a)[0] * (c - a)[1] - (b - a)[1] * (c - a)[0])

            def mapped(t: float, s: float, a=a, b=b, c=c) -> float:
                return integrand(*(a + s * (b - a) + t * (c - a)))

            total += size * dblquad(mapped, 0, 1, 0, lambda s: 1 - s)[0]
        return total

    assert values["second_moment_x"] == pytest.approx(over_region(lambda x, y: (y - cy) ** 2), rel=1e-9)
    assert values["second_moment_y"] == pytest.approx(over_region(lambda x, y: (x - cx) ** 2), rel=1e-9)
    assert values["product_moment"] == pytest.approx(over_region(lambda x, y: (x - cx) * (y - cy)), rel=1e-8)
    assert values["plastic_modulus_x"] == pytest.approx(over_region(lambda x, y: abs(y - level)), rel=1e-9)


def test_far_from_the_origin_no_digits_are_lost_but_those_of_the_coordinates() -> None:
    near = dict(section_properties(SKEW_BOX))
    far = dict(section_properties(moved(SKEW_BOX, np.eye(2), np.array([2.0**30, -(2.0**31)]))))
    far["centroid_x"] -= 2.0**30
    far["centroid_y"] += 2.0**31
    far["plastic_axis_x"] -= 2.0**30
    far["plastic_axis_y"] += 2.0**31
    # Vertices are whole numbers, so their shift is exact.
    assert_same(far, near, rel=1e-11, leave=tuple(POSITIONS))
    for name in POSITIONS:
        assert far[name] == pytest.approx(near[name], abs=1e-6)


def test_a_million_vertices_keep_their_digits() -> None:
    count = 1_000_000
    values = section_properties(section(circle(50.0, count)))
    step = 2 * np.pi / count
    # Exact for the regular polygon.
    area = count / 2 * 50.0**2 * np.sin(step)
    assert values["area"] == pytest.approx(area, rel=1e-13)
    assert values["second_moment_x"] == pytest.approx(area * 50.0**2 / 12 * (2 + np.cos(step)), rel=1e-12)
    assert values["plastic_modulus_x"] == pytest.approx(4 / 3 * 50.0**3, rel=1e-10)


def test_holes_larger_than_the_shell_are_refused() -> None:
    with pytest.raises(OutlineError) as refusal:
        section_properties(section([[0, 0], [10, 0], [10, 10], [0, 10]], [[-5, -5], [15, -5], [15, 15], [-5, 15]]))
    assert refusal.value.code == "no-area"
