from __future__ import annotations

import math

import numpy as np
import pytest
from cutface.props.axes import principal_axes, turned_moments
from cutface.props.properties import PROPERTIES, section_properties
from cutface.props.section import Section
from sample_sections import ANGLE, CHANNEL, PAIR, SKEW_BOX, oval, rectangle, section

SECTIONS = {
    "angle": ANGLE,
    "channel": CHANNEL,
    "box": SKEW_BOX,
    "pair": PAIR,
    "oval": oval(),
    "bar": rectangle(50, 200),
}
SOLVED_ELSEWHERE = {
    "enclosing_length",
    "enclosing_breadth",
    "torsion_constant",
    "warping_constant",
    *(f"{name}_{axis}" for name in ("shear_centre", "shear_area", "monosymmetry") for axis in "xy"),
    "monosymmetry_major",
    "monosymmetry_minor",
}


def test_registry_lists_every_property_with_a_unit_symbols_and_a_label() -> None:
    values = section_properties(ANGLE, density=7850.0)
    assert set(PROPERTIES) == set(values) | SOLVED_ELSEWHERE
    for info in PROPERTIES.values():
        assert info.unit and info.symbol_en and info.symbol_us and info.label
    for symbols in ([info.symbol_en for info in PROPERTIES.values()], [info.symbol_us for info in PROPERTIES.values()]):
        assert len(set(symbols)) == len(symbols)


@pytest.mark.parametrize("shape", SECTIONS.values(), ids=SECTIONS)
def test_properties_that_follow_from_others(shape: Section) -> None:
    p = section_properties(shape)
    x, y = shape.vertices.T
    fibres = {
        "top": ("x", y.max() - p["centroid_y"]),
        "bottom": ("x", p["centroid_y"] - y.min()),
        "left": ("y", p["centroid_x"] - x.min()),
        "right": ("y", x.max() - p["centroid_x"]),
    }
    for side, (axis, distance) in fibres.items():
        assert p[f"section_modulus_{side}"] * distance == pytest.approx(p[f"second_moment_{axis}"])
    for axis in ("x", "y", "major", "minor"):
        assert p[f"radius_of_gyration_{axis}"] ** 2 * p["area"] == pytest.approx(p[f"second_moment_{axis}"])
    smaller_x = min(p["section_modulus_top"], p["section_modulus_bottom"])
    smaller_y = min(p["section_modulus_left"], p["section_modulus_right"])
    assert p["shape_factor_x"] == pytest.approx(p["plastic_modulus_x"] / smaller_x)
    assert p["shape_factor_y"] == pytest.approx(p["plastic_modulus_y"] / smaller_y)
    assert p["polar_second_moment"] == pytest.approx(p["second_moment_major"] + p["second_moment_minor"])
    assert p["second_moment_major"] * p["second_moment_minor"] == pytest.approx(
        p["second_moment_x"] * p["second_moment_y"] - p["product_moment"] ** 2
    )
    assert (p["width"], p["depth"]) == pytest.approx((np.ptp(x), np.ptp(y)))


@pytest.mark.parametrize("shape", SECTIONS.values(), ids=SECTIONS)
def test_no_axis_has_more_or_less_than_the_principal_ones(shape: Section) -> None:
    p = section_properties(shape)
    for angle in np.linspace(0, np.pi, 37):
        about, _, _ = turned_moments(
            p["second_moment_x"], p["second_moment_y"], p["product_moment"], math.cos(angle), math.sin(angle)
        )
        assert p["second_moment_minor"] * (1 - 1e-12) <= about <= p["second_moment_major"] * (1 + 1e-12)
    c, s = math.cos(p["principal_angle"]), math.sin(p["principal_angle"])
    major, minor, mixed = turned_moments(p["second_moment_x"], p["second_moment_y"], p["product_moment"], c, s)
    assert (major, minor) == pytest.approx((p["second_moment_major"], p["second_moment_minor"]))
    assert mixed == pytest.approx(0.0, abs=1e-10 * major)


@pytest.mark.parametrize(
    ("second_x", "second_y", "product", "degrees"),
    [
        (2.0, 1.0, 0.0, 0.0),
        (1.0, 2.0, 0.0, 90.0),
        (1.0, 2.0, 1e-17, 90.0),
        (1.0, 2.0, -1e-17, 90.0),
        (1.0, 1.0, 0.0, 0.0),
        (1.0, 1.0 + 1e-15, 1e-16, 0.0),
        (1.5, 1.5, -0.5, 45.0),
        (1.5, 1.5, 0.5, -45.0),
        (1.0, 2.0, 1e-3, -90.0 + 0.5 * math.degrees(math.atan(2e-3))),
    ],
)
def test_angle_to_the_major_axis(second_x: float, second_y: float, product: float, degrees: float) -> None:
    axes = principal_axes(second_x, second_y, product)
    assert math.degrees(axes.angle) == pytest.approx(degrees)
    assert math.copysign(1.0, axes.angle) == math.copysign(1.0, degrees)
    assert axes.major >= axes.minor


def test_major_axis_of_a_leaning_bar_runs_across_it() -> None:
    # A bar 200 long leaning 30 degrees from upright: it is stiffest about the axis square to its length.
    lean = np.radians(30.0)
    turn = np.array([[np.cos(lean), -np.sin(lean)], [np.sin(lean), np.cos(lean)]])
    bar = rectangle(20, 200)
    p = section_properties(bar.with_vertices(bar.vertices @ turn.T))
    assert np.degrees(p["principal_angle"]) == pytest.approx(30.0)
    assert p["section_modulus_major"] == pytest.approx(20 * 200**2 / 6)
    assert p["plastic_modulus_major"] == pytest.approx(20 * 200**2 / 4)
    assert p["section_modulus_minor"] == pytest.approx(200 * 20**2 / 6)
    assert p["plastic_modulus_minor"] == pytest.approx(200 * 20**2 / 4)


def test_mass_per_metre() -> None:
    # 100 x 100 mm of steel: 0.01 m^2 x 7850 kg/m^3.
    assert section_properties(rectangle(100, 100), density=7850.0)["mass_per_metre"] == pytest.approx(78.5)
    assert "mass_per_metre" not in section_properties(rectangle(100, 100))


def test_perimeter_is_that_of_the_outside() -> None:
    # RHS of any table: its surface per metre leaves the inside out.
    hollow = section([[0, 0], [40, 0], [40, 40], [0, 40]], [[5, 5], [35, 5], [35, 35], [5, 35]])
    assert section_properties(hollow)["perimeter"] == pytest.approx(160)
    both = Section((*hollow.parts, *rectangle(10, 20, 50, 0).parts))
    assert section_properties(both)["perimeter"] == pytest.approx(160 + 60)


def test_loops_given_the_wrong_way_round_count_all_the_same() -> None:
    shell, hole = SKEW_BOX.parts[0].loops
    turned = section(shell[::-1], hole[::-1])
    assert section_properties(turned) == pytest.approx(dict(section_properties(SKEW_BOX)))
