"""Properties about one's own axes, and the uncertainty of derived figures."""

import math

import numpy as np
import pytest
from cutface.props.about import properties_about, quantify_about
from cutface.props.derived import quantify_figures
from cutface.props.errors import UsageError
from cutface.props.properties import section_properties
from cutface.props.shapes import angle, rectangle, rolled_i
from cutface.props.shapes.placing import placed
from cutface.props.uncertainty import EdgeNoise, Mode, OutlineUncertainty, quantify


def test_rectangle_about_its_edges():
    p = properties_about(rectangle(200.0, 50.0), (-25.0, -100.0))
    assert p["second_moment_u"] == pytest.approx(50.0 * 200.0**3 / 3.0, rel=1e-12)
    assert p["second_moment_v"] == pytest.approx(200.0 * 50.0**3 / 3.0, rel=1e-12)
    assert p["product_moment_uv"] == pytest.approx((50.0 * 200.0) ** 2 / 4.0, rel=1e-12)
    assert p["first_moment_u"] == pytest.approx(50.0 * 200.0 * 100.0, rel=1e-12)
    assert (p["reach_above"], p["reach_below"]) == pytest.approx((200.0, 0.0), abs=1e-9)
    assert p["radius_of_gyration_u"] == pytest.approx(200.0 / math.sqrt(3.0), rel=1e-12)


@pytest.mark.parametrize("turn", [0.3, -1.1, 2.5])
def test_turned_axes_are_those_of_the_section_turned_back(turn):
    section = angle(120.0, 80.0, 10.0, 11.0, 5.5)
    origin = (13.0, -7.0)
    p = properties_about(section, origin, turn)
    back = placed(placed(section, -origin[0], -origin[1]), turn=-turn)
    expected = properties_about(back, (0.0, 0.0))
    assert p == pytest.approx(expected, rel=1e-9)


def test_principal_axes_carry_no_product_moment():
    section = angle(120.0, 80.0, 10.0)
    own = section_properties(section)
    p = properties_about(section, angle=own["principal_angle"])
    assert p["second_moment_u"] == pytest.approx(own["second_moment_major"], rel=1e-12)
    assert p["product_moment_uv"] == pytest.approx(0.0, abs=1e-6)
    assert p["centroid_u"] == p["centroid_v"] == 0.0


def test_axis_must_be_finite():
    with pytest.raises(UsageError, match="finite"):
        properties_about(rectangle(2.0, 3.0), (math.inf, 0.0))


def outward(section, distance):
    """Movement of a rectangle's corners, all sides outward."""
    return distance * np.sign(section.vertices)


def test_derived_uncertainty_of_modes_is_the_derivative():
    section = rectangle(200.0, 50.0)
    uncertainty = OutlineUncertainty(
        modes=(
            Mode("edge location (common)", outward(section, 0.1), "rectangular"),
            Mode("print scale", 0.003 * section.vertices),
        )
    )
    found = quantify_about(section, uncertainty, (0.0, -100.0))["second_moment_u"]
    # About a fixed axis 100 below the centre I = b h^3 / 12 + b h 100^2; b and h grow by twice 0.1 mm, or by 0.3 %.
    b, h = 50.0, 200.0
    by_edges = 0.1 * (2.0 * (h**3 / 12.0 + h * 1e4) + 2.0 * (b * h**2 / 4.0 + b * 1e4))
    by_scale = 0.003 * (4.0 * b * h**3 / 12.0 + 2.0 * b * h * 1e4)
    assert found.std == pytest.approx(math.hypot(by_edges, by_scale), rel=1e-4)
    assert [line.source for line in found.budget] == ["print scale", "edge location (common)"]
    assert found.budget[1].std == pytest.approx(by_edges, rel=1e-4)
    assert found.value - found.interval95[0] < 1.96 * found.std


def test_derived_uncertainty_agrees_with_the_closed_form_sensitivities():
    section = rolled_i(200.0, 100.0, 5.6, 8.5, 12.0, tolerance=1e-4)
    vertices = section.vertices
    count = len(vertices)
    uncertainty = OutlineUncertainty(
        modes=(Mode("print scale", 0.002 * vertices * [1.0, 0.0]), Mode("print scale", 0.002 * vertices * [0.0, 1.0])),
        noise=EdgeNoise(np.full(count, 0.05), np.full(count, 2.0)),
    )
    names = ("area", "second_moment_x", "second_moment_y")
    derived = quantify_figures(
        section,
        uncertainty,
        lambda moved: {name: section_properties(moved)[name] for name in names},
        {"area": "mm^2", "second_moment_x": "mm^4", "second_moment_y": "mm^4"},
    )
    expected = quantify(section, section_properties(section), uncertainty)
    for name in names:
        assert derived[name].std == pytest.approx(expected[name].std, rel=1e-3)
        assert derived[name].interval95 == pytest.approx(expected[name].interval95, rel=1e-4)
        random_share = next(line.std for line in derived[name].budget if "random" in line.source)
        closed = next(line.std for line in expected[name].budget if "random" in line.source)
        assert random_share == pytest.approx(closed, rel=0.1)


def test_uncertainty_of_another_outline_is_refused():
    uncertainty = OutlineUncertainty(modes=(Mode("print scale", np.zeros((7, 2))),))
    with pytest.raises(UsageError, match="4 vertices"):
        quantify_about(rectangle(20.0, 10.0), uncertainty)
