import math

import pytest
from cutface.cli.units import Figure, power_of_ten, readable, unit_factor


@pytest.mark.parametrize(
    ("value", "unit", "system", "shown", "expected"),
    [
        (1.0, "mm", "in", "in", 1 / 25.4),
        (1.0, "mm", "cm", "mm", 1.0),
        (1.0, "mm^2", "cm", "cm²", 0.01),
        (1.0, "mm^4", "cm", "cm⁴", 1e-4),
        (1.0, "mm^6", "cm", "cm⁶", 1e-6),
        (416231.4256, "mm^4", "in", "in⁴", 1.0),
        (16387.064, "mm^3", "in", "in³", 1.0),
        # 1 lb/ft is 1.48816 kg/m (0.45359237 / 0.3048, both exact by definition).
        (1.4881639435695537, "kg/m", "in", "lb/ft", 1.0),
        (7.85, "kg/m", "cm", "kg/m", 7.85),
        (math.pi / 6, "rad", "mm", "°", 30.0),
        (1.5, "1", "in", "", 1.5),
    ],
)
def test_conversion(value: float, unit: str, system: str, shown: str, expected: float) -> None:
    name, factor = unit_factor(unit, system)  # type: ignore[arg-type]
    assert name == shown
    assert value * factor == pytest.approx(expected, rel=1e-12)


@pytest.mark.parametrize(
    ("value", "std", "expected"),
    [
        (1136.04, 4.77, Figure("1136.0", "4.8", "1126.5", "1145.6", "mm")),
        (99.96, 0.0996, Figure("99.96", "0.10", "99.76", "100.16", "mm")),
        (0.00012345, 0.0000123, Figure("0.000123", "0.000012", "0.000099", "0.000148", "mm")),
        (-0.001, 0.2, Figure("0.00", "0.20", "-0.40", "0.40", "mm")),
        (4986.7, 213.0, Figure("4990", "210", "4560", "5410", "mm")),
    ],
)
def test_two_significant_digits_of_the_uncertainty(value: float, std: float, expected: Figure) -> None:
    assert readable(value, "mm", std, (value - 2 * std, value + 2 * std), "mm") == expected


def test_large_figures_show_no_digit_that_is_not_meant() -> None:
    interval = (59_700.0, 60_940.0)
    power = power_of_ten(60_322.0, "mm^2", 310.0, interval, "mm")
    assert power == 3
    assert readable(60_322.0, "mm^2", 310.0, interval, "mm", power) == Figure(
        "60.32", "0.31", "59.70", "60.94", "10³ mm²"
    )
    # The same area to 0.2 mm^2 needs no power: all its digits are meant.
    assert power_of_ten(60_322.0, "mm^2", 0.2, (60_321.6, 60_322.4), "mm") == 0


@pytest.mark.parametrize("std", [0.0, math.nan, math.inf])
def test_without_uncertainty_only_the_value_is_shown(std: float) -> None:
    figure = readable(1234.56789, "mm", std, (math.nan, math.nan), "mm")
    assert figure == Figure("1234.57", "", "", "", "mm")


def test_an_uncertainty_that_rounding_leaves_is_none() -> None:
    assert readable(1.5, "1", 2e-17, (1.5, 1.5), "mm") == Figure("1.50000", "", "", "", "")


@pytest.mark.parametrize(
    ("unit", "metric", "american"),
    [
        # 1 ksi = 6.894757 MPa, 1 kip = 4.448222 kN (ASTM SI 10, from memory).
        ("MPa", ("MPa", 1.0), ("ksi", 1 / 6.894757)),
        ("N", ("kN", 1e-3), ("kip", 1 / 4448.222)),
        ("N mm", ("kN m", 1e-6), ("kip in", 1 / (4448.222 * 25.4))),
        ("N mm^2", ("kN m²", 1e-9), ("kip in²", 1 / (4448.222 * 25.4**2))),
    ],
)
def test_forces_and_stresses(unit: str, metric: tuple[str, float], american: tuple[str, float]) -> None:
    assert unit_factor(unit, "mm") == unit_factor(unit, "cm") == metric
    name, factor = unit_factor(unit, "in")
    assert name == american[0]
    assert factor == pytest.approx(american[1], rel=1e-6)
