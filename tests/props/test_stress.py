"""Linear elastic stresses against beam theory."""

import math

import numpy as np
import pytest
from cutface.props.errors import UsageError
from cutface.props.field import field_properties
from cutface.props.integrals import centroidal
from cutface.props.properties import section_properties
from cutface.props.shapes import angle, circle, hollow_rectangle, rectangle, rolled_i, tube, welded_box
from cutface.props.stress import (
    Forces,
    beyond_cut,
    cut_shear,
    normal_stress,
    quantify_cut_shear,
    quantify_normal_stress,
    torsional_shear,
)
from cutface.props.torsional_stress import quantify_torsional_shear
from cutface.props.uncertainty import EdgeNoise, Mode, OutlineUncertainty, quantify


def test_axial_force_alone():
    found = normal_stress(rectangle(200.0, 50.0), Forces(axial=-50e3))
    assert (found.largest.value, found.smallest.value) == pytest.approx((-5.0, -5.0))
    assert found.neutral_axis is None


def test_both_moments_on_a_rectangle():
    found = normal_stress(rectangle(200.0, 50.0), Forces(axial=10e3, moment_x=2e6, moment_y=-0.5e6))
    bending_x, bending_y = 2e6 / (50.0 * 200.0**2 / 6.0), 0.5e6 / (200.0 * 50.0**2 / 6.0)
    assert found.largest.value == pytest.approx(1.0 + bending_x + bending_y)
    assert found.largest.place == (-25.0, 100.0)
    assert found.smallest.value == pytest.approx(1.0 - bending_x - bending_y)
    assert found.smallest.place == (25.0, -100.0)
    assert found.at([(0.0, 0.0), (0.0, 100.0)]) == pytest.approx([1.0, 1.0 + bending_x])


def test_stresses_balance_the_forces_on_axes_that_are_not_principal():
    section = angle(120.0, 80.0, 10.0, 11.0, 5.5)
    forces = Forces(axial=3e4, moment_x=1.5e6, moment_y=-0.4e6)
    found = normal_stress(section, forces)
    p = section_properties(section)
    a, b = found.slope
    assert found.at_centroid * p["area"] == pytest.approx(forces.axial)
    assert a * p["product_moment"] + b * p["second_moment_x"] == pytest.approx(forces.moment_x)
    assert a * p["second_moment_y"] + b * p["product_moment"] == pytest.approx(forces.moment_y)
    assert found.at(section.vertices).max() == pytest.approx(found.largest.value)
    assert found.at(section.vertices).min() == pytest.approx(found.smallest.value)


def test_neutral_axis_is_free_of_stress():
    section = angle(120.0, 80.0, 10.0)
    found = normal_stress(section, Forces(axial=2e4, moment_x=1.5e6, moment_y=0.7e6))
    axis = found.neutral_axis
    along = np.array([math.cos(axis.angle), math.sin(axis.angle)])
    assert found.at([axis.point, axis.point + 50.0 * along]) == pytest.approx([0.0, 0.0], abs=1e-9)
    assert axis.crosses
    assert -math.pi / 2.0 < axis.angle <= math.pi / 2.0
    pulled = normal_stress(section, Forces(axial=1e6, moment_x=1e5))
    assert not pulled.neutral_axis.crosses


def test_neutral_axis_of_plain_bending_is_the_axis_of_bending():
    level = normal_stress(rectangle(200.0, 50.0), Forces(moment_x=1e6)).neutral_axis
    upright = normal_stress(rectangle(200.0, 50.0), Forces(moment_y=-1e6)).neutral_axis
    assert (level.angle, upright.angle) == pytest.approx((0.0, math.pi / 2.0))
    assert level.point == pytest.approx((0.0, 0.0))


def test_shear_of_a_rectangle_and_a_circle():
    upright, level = cut_shear(rectangle(200.0, 50.0), Forces(shear_y=30e3))
    assert level.value == pytest.approx(1.5 * 30e3 / 1e4, rel=1e-6)
    assert level.level == pytest.approx(0.0, abs=1e-3)
    assert level.width == pytest.approx(50.0)
    assert upright.value == pytest.approx(0.0, abs=1e-9)
    sideways, _ = cut_shear(rectangle(200.0, 50.0), Forces(shear_x=30e3))
    assert sideways.value == pytest.approx(1.5 * 30e3 / 1e4, rel=1e-6)
    _, disc = cut_shear(circle(80.0), Forces(shear_y=30e3))
    assert disc.value == pytest.approx(4.0 / 3.0 * 30e3 / (math.pi * 40.0**2), rel=1e-3)


def test_shear_of_an_i_at_mid_depth():
    section = rolled_i(200.0, 100.0, 6.0, 10.0)
    _, level = cut_shear(section, Forces(shear_y=50e3))
    first = 100.0 * 10.0 * 95.0 + 6.0 * 90.0 * 45.0
    second = section_properties(section)["second_moment_x"]
    assert level.value == pytest.approx(50e3 * first / (second * 6.0), rel=1e-6)
    box = welded_box(200.0, 100.0, 6.0, 10.0)
    _, shared = cut_shear(box, Forces(shear_y=50e3))
    assert shared.width == pytest.approx(12.0, rel=1e-6)


def test_what_lies_beyond_a_cut():
    edges = centroidal(rectangle(200.0, 50.0))
    assert beyond_cut(edges, 20.0) == pytest.approx((50.0 * 80.0, 50.0, 50.0 * 80.0 * 60.0, 0.0))
    area, width, of_y, of_x = beyond_cut(centroidal(tube(100.0, 10.0)), 0.0)
    assert area == pytest.approx(0.5 * math.pi * (50.0**2 - 40.0**2))
    assert width == pytest.approx(20.0)
    assert of_y == pytest.approx(2.0 / 3.0 * (50.0**3 - 40.0**3), rel=1e-5)
    assert of_x == pytest.approx(0.0, abs=1e-9)


def test_torsional_shear_of_a_rectangle_and_a_circle():
    # 1 / alpha of Saint-Venant's bar of 2 : 1 is 0.246 (Timoshenko and Goodier, Theory of Elasticity; from memory).
    found = torsional_shear(field_properties(rectangle(100.0, 50.0)), 1e6)
    assert found.value == pytest.approx(1e6 / (0.246 * 100.0 * 50.0**2), rel=0.01)
    assert abs(found.place[0]) == pytest.approx(25.0)
    assert found.place[1] == pytest.approx(0.0, abs=5.0)
    disc = torsional_shear(field_properties(circle(60.0, tolerance=1e-5)), 1e6)
    assert disc.value == pytest.approx(1e6 * 30.0 / (math.pi * 30.0**4 / 2.0), rel=0.02)


def test_uncertainty_of_the_largest_stress():
    section = rectangle(200.0, 50.0)
    uncertainty = OutlineUncertainty(modes=(Mode("print scale", 0.003 * section.vertices),))
    found = quantify_normal_stress(section, Forces(moment_x=1e6), uncertainty)["largest_stress"]
    assert found.value == pytest.approx(1e6 / (50.0 * 200.0**2 / 6.0))
    # The elastic modulus grows with the third power of the scale.
    assert found.std / found.value == pytest.approx(0.009, rel=1e-3)


def test_forces_must_be_finite():
    with pytest.raises(UsageError, match="not a finite number"):
        Forces(axial=math.nan)


def longest_side_shear(width: float, depth: float, torque: float = 1e6) -> float:
    """Largest shear of a rectangle, depth the longer side.

    Timoshenko and Goodier, Theory of Elasticity; from memory.
    """
    odd = np.arange(1, 60, 2)
    across = 0.5 * odd * math.pi * depth / width
    constant = depth * width**3 / 3 * (1 - 192 / math.pi**5 * width / depth * np.sum(np.tanh(across) / odd**5))
    return torque * width / constant * (1 - 8 / math.pi**2 * np.sum(1 / (odd**2 * np.cosh(across))))


def test_uncertainty_of_torsional_shear_against_draws_of_a_closed_form():
    section = rectangle(100.0, 50.0)
    x, y = section.vertices.T
    wider, deeper = np.column_stack([0.3 * np.sign(x), 0 * y]), np.column_stack([0 * x, 0.8 * np.sign(y)])
    uncertainty = OutlineUncertainty((Mode("width", wider), Mode("depth", deeper, "rectangular")))
    field = field_properties(section)
    found = quantify_torsional_shear(section, field, torsional_shear(field, 1e6), uncertainty)
    random = np.random.default_rng(11)
    widths = 50.0 + 0.6 * random.standard_normal(4000)
    depths = 100.0 + 1.6 * random.uniform(-math.sqrt(3), math.sqrt(3), 4000)
    draws = np.array([longest_side_shear(w, d) for w, d in zip(widths, depths, strict=True)])
    assert found.value == pytest.approx(draws.mean(), rel=0.01)
    assert found.std == pytest.approx(draws.std(), rel=0.04)
    assert [line.source for line in found.budget] == ["width", "depth", "numerical solution"]
    # 95 % of the draws, to their own scatter.
    low, high = found.interval95
    offset = found.value - draws.mean()
    assert np.mean((draws + offset > low) & (draws + offset < high)) == pytest.approx(0.95, abs=0.015)


def test_uncertainty_of_torsional_shear_against_solved_draws():
    section = hollow_rectangle(60.0, 40.0, 4.0, 6.0, 2.0)
    vertices = section.vertices
    inner = np.zeros(len(vertices), bool)
    inner[len(section.parts[0].shell) :] = True
    # The core shifts aside, so that one wall gets thinner; the whole grows.
    modes = (Mode("core", np.outer(inner, [0.08, 0.0])), Mode("scale", 0.004 * vertices))
    field = field_properties(section)
    worst = torsional_shear(field, 1e6)
    found = quantify_torsional_shear(section, field, worst, OutlineUncertainty(modes))
    random = np.random.default_rng(3)
    draws = []
    for shares in random.standard_normal((24, 2)):
        moved = section.with_vertices(vertices + sum(s * m.displacement for s, m in zip(shares, modes, strict=True)))
        at = field_properties(moved, tolerance=0.003)
        density = at.sensitivity.density("torsion_constant")
        near = np.hypot(*(at.sensitivity.points - worst.place).T) < 2.0
        draws.append(1e6 / at.values["torsion_constant"] * math.sqrt(density[near].max()))
    # 24 draws know their own standard deviation to 15 %.
    assert found.std == pytest.approx(np.std(draws, ddof=1), rel=0.45)


def test_random_error_near_the_place_counts():
    section = rectangle(100.0, 50.0)
    field = field_properties(section)
    worst = torsional_shear(field, 1e6)
    noise = EdgeNoise(np.full(4, 0.2), np.full(4, 3.0))
    found = quantify_torsional_shear(section, field, worst, OutlineUncertainty(noise=noise))
    constant = quantify(section, field.values, OutlineUncertainty(noise=noise), field)["torsion_constant"]
    assert found.budget[0].source == "edge location (random)"
    assert constant.std / constant.value < found.std / found.value < 0.2 / 50.0
    none = quantify_torsional_shear(section, field, worst, OutlineUncertainty())
    assert none.std == pytest.approx(field.relative_error["torsion_constant"] / math.sqrt(3) * none.value)


def test_uncertainty_of_mean_shear_against_monte_carlo():
    section = rolled_i(200.0, 100.0, 6.0, 10.0, 12.0)
    vertices = section.vertices
    forces = Forces(shear_x=8e3, shear_y=50e3)
    thicker = np.column_stack([0.15 * np.sign(vertices[:, 0]) * (np.abs(vertices[:, 0]) < 20.0), 0.0 * vertices[:, 1]])
    uncertainty = OutlineUncertainty((Mode("web", thicker), Mode("scale", 0.004 * vertices)))
    found = quantify_cut_shear(section, forces, uncertainty)
    random = np.random.default_rng(6)
    draws = []
    for a, b in random.standard_normal((300, 2)):
        moved = section.with_vertices(vertices + a * thicker + 0.004 * b * vertices)
        draws.append([cut.value for cut in cut_shear(moved, forces)])
    for name, column in zip(("upright_cut_shear", "level_cut_shear"), np.array(draws).T, strict=True):
        assert found[name].value == pytest.approx(column.mean(), rel=0.02)
        assert found[name].std == pytest.approx(column.std(), rel=0.15), name
    # A mean shear over the web goes with the inverse of the web, and of the scale squared.
    level = found["level_cut_shear"]
    assert level.std / level.value == pytest.approx(math.hypot(0.3 / 6.0, 0.008), rel=0.1)
