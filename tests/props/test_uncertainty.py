from __future__ import annotations

import math

import numpy as np
import pytest
from cutface.props.effects import NUMERICAL, RANDOM, SIMPLIFICATION, effects
from cutface.props.errors import UsageError
from cutface.props.monte_carlo import monte_carlo
from cutface.props.offset import mitre, pixel_bracket
from cutface.props.properties import analyse, section_properties
from cutface.props.section import Section
from cutface.props.uncertainty import (
    EdgeNoise,
    Mode,
    OutlineUncertainty,
    covariance,
    coverage_half_width,
    quantify,
    standard_uncertainties,
)
from sample_sections import ANGLE, CHANNEL, PAIR, SKEW_BOX, circle, oval, rectangle, section


def outward(shape: Section, distance: float) -> np.ndarray:
    """Movement (n, 2) of the vertices that moves every edge outward by the distance."""
    moved = []
    for loop in shape.loops:
        along = np.roll(loop, -1, axis=0) - loop
        normals = np.stack([along[:, 1], -along[:, 0]]) / np.hypot(*along.T)
        one = np.full(len(loop), distance)
        moved.append(mitre(np.roll(normals, 1, axis=1), normals, one, one).T)
    return np.concatenate(moved)


def scales(shape: Section, std: float) -> tuple[Mode, Mode]:
    about = shape.vertices - shape.vertices.mean(axis=0)
    return Mode("print scale", about * [std, 0.0]), Mode("print scale", about * [0.0, std])


def noise(shape: Section, std: float, length: float) -> EdgeNoise:
    count = len(shape.vertices)
    return EdgeNoise(np.full(count, std), np.full(count, length))


def typical(shape: Section) -> OutlineUncertainty:
    """Causes of about the size they have on a photo."""
    about = shape.vertices - shape.vertices.mean(axis=0)
    shear = np.column_stack([about[:, 1] * 0.001, np.zeros(len(about))])
    bend = np.column_stack([np.zeros(len(about)), 1e-5 * about[:, 0] ** 2])
    modes = (
        Mode("edge location (common)", outward(shape, 0.02), "rectangular"),
        *scales(shape, 0.002),
        Mode("tilt", shear),
        Mode("distortion", bend),
    )
    return OutlineUncertainty(modes, noise(shape, 0.02, 0.5), np.full(len(about), 0.1))


def rms_about(samples: np.ndarray, value: float) -> float:
    return float(np.sqrt(np.mean((samples - value) ** 2)))


IRREGULAR = {"box": SKEW_BOX, "angle": ANGLE, "pair": PAIR, "oval": oval(40)}
TURN = np.array([[math.cos(0.2), -math.sin(0.2)], [math.sin(0.2), math.cos(0.2)]])


@pytest.mark.parametrize("name", IRREGULAR)
def test_rows_are_the_derivatives_of_the_properties(name: str) -> None:
    # Turned, so that no edge is level and no two vertices are equally far out.
    shape = IRREGULAR[name].with_vertices(IRREGULAR[name].vertices @ TURN.T)
    generator = np.random.default_rng(5)
    fields = [1e-4 * generator.normal(size=shape.vertices.shape) for _ in range(4)]
    values = section_properties(shape, density=2700.0)
    found = effects(shape, analyse(shape), OutlineUncertainty(tuple(Mode("any", f) for f in fields)), values)
    assert set(found.rows) == set(values)
    sizes = {key: max(abs(value), 1.0) for key, value in values.items()}
    sizes |= {"product_moment": values["polar_second_moment"], "principal_angle": 1.0}
    for i, displacement in enumerate(fields):
        plus = section_properties(shape.with_vertices(shape.vertices + displacement), density=2700.0)
        minus = section_properties(shape.with_vertices(shape.vertices - displacement), density=2700.0)
        for key, row in found.rows.items():
            difference = 0.5 * (plus[key] - minus[key])
            assert row[i] == pytest.approx(difference, rel=2e-4, abs=3e-10 * sizes[key]), (key, i)


def test_an_outward_shift_changes_integrals_by_their_boundary_integrals() -> None:
    # Rectangle b x h, outline out by d: every derivative by hand.
    b, h, d = 60.0, 140.0, 0.03
    shape = rectangle(b, h, 7.0, -3.0)
    found = standard_uncertainties(shape, OutlineUncertainty((Mode("common", outward(shape, d)),)))
    expected = {
        "area": 2 * (b + h) * d,
        "perimeter": 8 * d,
        "width": 2 * d,
        "depth": 2 * d,
        "centroid_x": 0.0,
        "second_moment_x": (b * h**2 / 2 + h**3 / 6) * d,
        "second_moment_y": (h * b**2 / 2 + b**3 / 6) * d,
        "section_modulus_top": (2 * b * h + h**2) / 3 * d,
        "plastic_modulus_x": (b * h + h**2 / 2) * d,
        "shape_factor_x": 0.0,
    }
    for name, value in expected.items():
        assert found[name] == pytest.approx(value, rel=1e-9, abs=1e-12), name


def test_scale_errors_act_by_their_powers() -> None:
    ex, ey = 0.004, 0.003
    about = SKEW_BOX.vertices
    values = section_properties(SKEW_BOX)
    for error, powers in (
        (np.array([ex, 0.0]), {"area": 1, "second_moment_x": 1, "second_moment_y": 3, "product_moment": 2}),
        (np.array([0.0, ey]), {"area": 1, "second_moment_x": 3, "second_moment_y": 1, "plastic_modulus_x": 2}),
    ):
        found = standard_uncertainties(SKEW_BOX, OutlineUncertainty((Mode("scale", about * error),)))
        for name, power in powers.items():
            assert found[name] == pytest.approx(power * error.sum() * abs(values[name]), rel=1e-9), name


def test_noise_along_the_outline_averages_out_by_its_correlation_length() -> None:
    # var = std^2 L integral of f^2: over the outline of a square of side a, 1 for its area, y^4 for I_x.
    a, std, length = 80.0, 0.03, 0.6
    shape = rectangle(a, a)
    found = standard_uncertainties(shape, OutlineUncertainty((), noise(shape, std, length)))
    assert found["area"] == pytest.approx(std * math.sqrt(length * 4 * a), rel=1e-9)
    of_sides = 2 * a * (a / 2) ** 4 + 2 * 2 * (a / 2) ** 5 / 5
    assert found["second_moment_x"] == pytest.approx(std * math.sqrt(length * of_sides), rel=1e-9)
    # Each end of a fitted edge has twice the std of its mean, and the outermost of two is the farther.
    one_side = 2 * std * math.sqrt(length / a)
    assert math.sqrt(2) * one_side / 2 < found["depth"] < math.sqrt(2) * one_side * 1.5


MONTE_CARLO = {"box": SKEW_BOX, "angle": ANGLE, "channel": CHANNEL, "bar": rectangle(75, 225)}


@pytest.mark.parametrize("name", MONTE_CARLO)
def test_first_order_agrees_with_monte_carlo(name: str) -> None:
    shape = MONTE_CARLO[name]
    uncertainty = typical(shape)
    quantities = quantify(shape, section_properties(shape), uncertainty)
    samples = monte_carlo(shape, uncertainty, draws=1500, seed=11)
    assert set(samples) == set(quantities)
    for key, quantity in quantities.items():
        ratio = quantity.std / rms_about(samples[key], quantity.value)
        # A std from 1500 draws is itself uncertain by 1.8 %. Scale cancels in shape factors and leaves the farthest
        # fibres, whose scatter is far from normal and whose bias is taken as if the outline had been traced.
        lowest, highest = (0.88, 1.35) if key.startswith("shape") else (0.93, 1.07)
        assert lowest < ratio < highest, (key, ratio)
        low, high = quantity.interval95
        assert np.mean((samples[key] >= low) & (samples[key] <= high)) > 0.93, key


def test_covariance_agrees_with_monte_carlo() -> None:
    names = ("area", "second_moment_x", "section_modulus_major", "plastic_modulus_minor", "depth")
    uncertainty = typical(ANGLE)
    found, matrix = covariance(ANGLE, uncertainty, names)
    assert found == names
    samples = monte_carlo(ANGLE, uncertainty, draws=1500, seed=2)
    expected = np.corrcoef([samples[name] for name in names])
    std = np.sqrt(np.diag(matrix))
    assert matrix / np.outer(std, std) == pytest.approx(expected, abs=0.08)


def test_covariance_of_a_shared_cause_is_full() -> None:
    names, matrix = covariance(SKEW_BOX, OutlineUncertainty((Mode("common", outward(SKEW_BOX, 0.1)),)))
    std = np.sqrt(np.diag(matrix))
    i, j = names.index("area"), names.index("plastic_modulus_x")
    assert matrix[i, j] == pytest.approx(std[i] * std[j])
    assert np.linalg.eigvalsh(matrix / np.outer(std, std)).min() > -1e-9
    with pytest.raises(UsageError):
        covariance(SKEW_BOX, OutlineUncertainty(), ("torsion_constant",))


@pytest.mark.parametrize(
    ("ratio", "factor"), [(0.0, 1.96), (0.5, 1.96), (1.0, 1.92), (2.0, 1.81), (4.0, 1.71), (1e6, 1.645)]
)
def test_coverage_factor_of_a_normal_and_a_rectangular_cause(ratio: float, factor: float) -> None:
    total = math.hypot(1.0, ratio)
    assert coverage_half_width(1.0, ratio) / total == pytest.approx(factor, abs=0.006)


@pytest.mark.parametrize("ratio", [0.3, 1.0, 3.0, 30.0, 900.0, 1200.0])
def test_coverage_interval_holds_95_percent(ratio: float) -> None:
    from scipy.integrate import quad

    edge, half = math.sqrt(3.0) * ratio, coverage_half_width(1.0, ratio)

    def inside(z: float) -> float:
        return 0.5 * (math.erf((half - z) / math.sqrt(2)) + math.erf((half + z) / math.sqrt(2)))

    points = [half] if half < edge else None
    covered = quad(inside, 0.0, edge, points=points, limit=500)[0] / edge
    assert covered == pytest.approx(0.95, abs=1e-4)


def test_interval_of_a_dominating_rectangular_cause_covers_95_percent() -> None:
    shape = CHANNEL
    modes = (Mode("edge location (common)", outward(shape, 0.1), "rectangular"), *scales(shape, 0.002))
    uncertainty = OutlineUncertainty(modes)
    area = quantify(shape, section_properties(shape), uncertainty)["area"]
    samples = monte_carlo(shape, uncertainty, draws=4000, seed=3)["area"]
    low, high = area.interval95
    assert np.mean((samples > low) & (samples < high)) == pytest.approx(0.95, abs=0.012)
    assert high - low < 2 * 1.75 * area.std


def test_farthest_points_of_a_traced_outline_are_biased_outward_and_covered() -> None:
    # Straight sides traced point by point: the farthest of hundreds lies some 2.5 std too far out, on every side.
    spacing, std = 0.5, 0.02
    along = {w: np.arange(0, w, spacing) for w in (40.0, 60.0)}
    shell = np.concatenate(
        [
            np.column_stack([along[40.0], 0 * along[40.0]]),
            np.column_stack([40 + 0 * along[60.0], along[60.0]]),
            np.column_stack([40 - along[40.0], 60 + 0 * along[40.0]]),
            np.column_stack([0 * along[60.0], 60 - along[60.0]]),
        ]
    )
    true = section(shell)
    exact = section_properties(true)
    generator = np.random.default_rng(8)
    covered = {"depth": 0, "width": 0, "section_modulus_top": 0, "section_modulus_minor": 0, "area": 0}
    errors = []
    for _ in range(60):
        traced = section(shell + outward(true, 1.0) * generator.normal(0, std, (len(shell), 1)))
        quantities = quantify(traced, section_properties(traced), OutlineUncertainty((), noise(traced, std, spacing)))
        errors.append((quantities["depth"].value - exact["depth"]) / quantities["depth"].std)
        for name in covered:
            low, high = quantities[name].interval95
            covered[name] += low <= exact[name] <= high
    assert min(covered.values()) >= 52, covered
    # Not by being far too wide.
    assert 0.5 < np.mean(errors) < 1.5


@pytest.mark.parametrize("shell", [circle(40.0, 4), circle(40.0, 60)], ids=["square", "circle"])
def test_undetermined_principal_axes(shell: np.ndarray) -> None:
    shape = section(shell)
    quantities = quantify(shape, section_properties(shape), typical(shape))
    angle = quantities["principal_angle"]
    assert angle.std == pytest.approx(math.pi / math.sqrt(12))
    assert angle.interval95 == pytest.approx((-math.pi / 2, math.pi / 2))
    samples = monte_carlo(shape, typical(shape), draws=500, seed=4)
    for name in ("second_moment", "section_modulus", "plastic_modulus"):
        for axis in ("major", "minor"):
            quantity = quantities[f"{name}_{axis}"]
            low, high = quantity.interval95
            assert np.mean((samples[f"{name}_{axis}"] >= low) & (samples[f"{name}_{axis}"] <= high)) > 0.93
            # No orientation of a square reaches a fibre more than sqrt(2) as far as another.
            assert quantity.std < 0.42 * quantity.value
    assert quantities["second_moment_major"].std < 0.02 * quantities["second_moment_major"].value


def test_axes_that_may_swap_are_undetermined() -> None:
    # Two second moments 0.3 % apart, each known to 1 %, the product to far less.
    shape = rectangle(100.0, 100.15)
    uncertainty = OutlineUncertainty((*scales(shape, 0.003), Mode("any", shape.vertices[:, ::-1] * 1e-6)))
    angle = quantify(shape, section_properties(shape), uncertainty)["principal_angle"]
    samples = monte_carlo(shape, uncertainty, draws=500, seed=1)["principal_angle"]
    assert np.mean(np.abs(samples - angle.value) > 1.0) > 0.2
    assert angle.interval95[1] - angle.value == pytest.approx(math.pi / 2)


def test_plastic_axis_in_a_gap_may_be_at_either_side_of_it() -> None:
    shape = Section((*rectangle(60, 10).parts, *rectangle(60, 10, 0, 50).parts))
    quantities = quantify(shape, section_properties(shape), typical(shape))
    # The least imbalance moves the axis from the middle to one part.
    assert quantities["plastic_axis_y"].std == pytest.approx(20.0, rel=0.01)
    assert quantities["plastic_modulus_x"].std < 0.02 * quantities["plastic_modulus_x"].value


def test_budget_adds_up_and_joins_modes_of_one_source() -> None:
    uncertainty = OutlineUncertainty(
        typical(SKEW_BOX).modes, noise(SKEW_BOX, 0.02, 0.5), None, {"area": 3.0, "depth": 0.01}
    )
    quantities = quantify(SKEW_BOX, section_properties(SKEW_BOX, density=7850.0), uncertainty)
    for name, quantity in quantities.items():
        assert math.fsum(line.share for line in quantity.budget) == pytest.approx(1.0), name
        assert math.hypot(*(line.std for line in quantity.budget)) == pytest.approx(quantity.std), name
        assert [line.std for line in quantity.budget] == sorted((c.std for c in quantity.budget), reverse=True)
        sources = [line.source for line in quantity.budget]
        assert len(sources) == len(set(sources))
    area = {line.source: line.std for line in quantities["area"].budget}
    size = section_properties(SKEW_BOX)["area"]
    assert area["print scale"] == pytest.approx(0.002 * math.sqrt(2) * size)
    assert area[SIMPLIFICATION] == pytest.approx(3.0)
    assert RANDOM in area
    mass = quantities["mass_per_metre"]
    assert mass.std == pytest.approx(7850e-6 * math.sqrt(quantities["area"].std ** 2 - 9.0), rel=1e-9)
    assert quantities["depth"].unit == "mm"


def test_nothing_uncertain_is_exact() -> None:
    for quantity in quantify(CHANNEL, section_properties(CHANNEL), OutlineUncertainty()).values():
        assert quantity.std == 0.0
        assert quantity.interval95 == (quantity.value, quantity.value)
        assert quantity.budget == () and quantity.pixel_bounds is None


def test_monte_carlo_repeats_itself() -> None:
    first, again = (monte_carlo(ANGLE, typical(ANGLE), draws=20, seed=7) for _ in range(2))
    other = monte_carlo(ANGLE, typical(ANGLE), draws=20, seed=8)
    assert np.array_equal(first["area"], again["area"])
    assert not np.array_equal(first["area"], other["area"])
    still = monte_carlo(ANGLE, OutlineUncertainty(), draws=3)
    assert np.ptp(still["area"]) == 0.0


def test_pixel_bounds_of_a_rectangle() -> None:
    shape = rectangle(60, 140)
    uncertainty = OutlineUncertainty((), None, np.full(4, 0.2))
    quantities = quantify(shape, section_properties(shape), uncertainty)
    assert quantities["area"].pixel_bounds == pytest.approx((59.6 * 139.6, 60.4 * 140.4))
    assert quantities["depth"].pixel_bounds == pytest.approx((139.6, 140.4))
    assert quantities["section_modulus_top"].pixel_bounds == pytest.approx((59.6 * 139.6**2 / 6, 60.4 * 140.4**2 / 6))
    assert quantities["centroid_x"].pixel_bounds is None


def test_bracket_of_holes_shrinks_them_outward() -> None:
    inner, outer = pixel_bracket(SKEW_BOX, np.full(8, 0.5))
    assert inner is not None
    lengths = SKEW_BOX.to_polygon().length
    area = section_properties(SKEW_BOX)["area"]
    # Shell and hole turn once each, so their corners' areas cancel but for the mitres.
    assert section_properties(outer)["area"] == pytest.approx(area + 0.5 * lengths, rel=1e-3)
    assert section_properties(inner)["area"] == pytest.approx(area - 0.5 * lengths, rel=1e-3)


def test_every_edge_of_the_bracket_moves_by_its_own_bound() -> None:
    inner, outer = pixel_bracket(rectangle(60, 140), np.array([0.2, 0.2, 0.4, 0.4]))
    assert inner is not None
    p = section_properties(outer)
    # The lower edge by 0.2, all others by the larger bound at their ends.
    assert (p["width"], p["depth"]) == pytest.approx((60.8, 140.6))
    assert section_properties(inner)["depth"] == pytest.approx(139.4)


def test_bracket_of_an_outline_that_would_fold_is_not_too_narrow() -> None:
    # A thin notch and a finely traced fillet: edges shorter than the bound.
    arc = circle(1.0, 80)[20:41] + np.array([1.0, 19.0])
    shell = np.concatenate([[[0, 0], [30, 0], [30, 20], [15.3, 20], [15.3, 8], [15, 8], [15, 20]], arc])
    shape = section(shell)
    inner, outer = pixel_bracket(shape, np.full(len(shell), 0.3))
    assert inner is not None
    polygon = shape.to_polygon()
    assert outer.to_polygon().is_valid and inner.to_polygon().is_valid
    assert outer.to_polygon().buffer(1e-9).contains(polygon.buffer(0.3))
    assert polygon.buffer(-0.3).buffer(1e-6).contains(inner.to_polygon())


def test_bracket_of_a_wall_thinner_than_the_bound_starts_at_nothing() -> None:
    shape = rectangle(0.3, 50)
    quantities = quantify(shape, section_properties(shape), OutlineUncertainty((), None, np.full(4, 0.2)))
    low, high = quantities["area"].pixel_bounds or (-1.0, -1.0)
    assert low == 0.0
    assert high == pytest.approx(0.7 * 50.4)


def test_uncertainty_of_another_outline_is_refused() -> None:
    with pytest.raises(UsageError) as refusal:
        quantify(ANGLE, section_properties(ANGLE), typical(CHANNEL))
    assert refusal.value.code == "uncertainty-of-another-outline"


def test_torsion_takes_part_with_its_numerical_error() -> None:
    from cutface.props.field import field_properties

    shape = ANGLE
    solved = field_properties(shape, tolerance=2e-3)
    about = shape.vertices - shape.vertices.mean(axis=0)
    uncertainty = OutlineUncertainty((Mode("scale", 0.002 * about),), noise(shape, 0.02, 0.5))
    values = {**section_properties(shape), **solved.values}
    quantities = quantify(shape, values, uncertainty, solved)
    assert set(quantities) == set(values)
    for name, power in (("torsion_constant", 4), ("warping_constant", 6), ("shear_area_y", 2), ("area", 2)):
        budget = {line.source: line.std for line in quantities[name].budget}
        assert budget["scale"] == pytest.approx(power * 0.002 * values[name], rel=0.01), name
    torsion = {line.source: line.std for line in quantities["torsion_constant"].budget}
    assert torsion[NUMERICAL] == pytest.approx(solved.error["torsion_constant"] / math.sqrt(3))
    # An open section of thickness t: dJ = sum of t^2 x thickness error along both faces.
    assert torsion[RANDOM] == pytest.approx(12.0**2 * 0.02 * math.sqrt(0.5 * 2 * 228), rel=0.15)
    names, matrix = covariance(shape, uncertainty, ("area", "torsion_constant"), solved)
    assert names == ("area", "torsion_constant")
    assert 0.5 < matrix[0, 1] / math.sqrt(matrix[0, 0] * matrix[1, 1]) < 1.0
