"""Figures as people read them: units of choice, and no more digits than the uncertainty carries.

Knows unit conversion and rounding. Inside the program everything stays in mm, rad and kg/m.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import Literal

UnitSystem = Literal["mm", "cm", "in"]

# mm per unit, by power of length. Section tables in cm give sizes in mm all the same (common practice).
_LENGTHS: dict[str, tuple[str, float]] = {"mm": ("mm", 1.0), "cm": ("cm", 10.0), "in": ("in", 25.4)}
_POWERS = {"mm": 1, "mm^2": 2, "mm^3": 3, "mm^4": 4, "mm^6": 6}
_SUPERSCRIPT = str.maketrans("0123456789-", "⁰¹²³⁴⁵⁶⁷⁸⁹⁻")

# Exact by definition: 1 lb = 0.45359237 kg, 1 ft = 0.3048 m (international yard and pound, 1959).
_POUND_PER_FOOT = 0.45359237 / 0.3048
# 1000 lbf in N: 1 lbf = 0.45359237 kg at 9.80665 m/s^2.
_KIP = 4448.2216152605

# Stresses and stiffnesses: (shown unit, factor) in metric and in US units.
_MECHANICAL: dict[str, tuple[tuple[str, float], tuple[str, float]]] = {
    "MPa": (("MPa", 1.0), ("ksi", 25.4**2 / _KIP)),
    "N": (("kN", 1e-3), ("kip", 1.0 / _KIP)),
    "N mm": (("kN m", 1e-6), ("kip in", 1.0 / (25.4 * _KIP))),
    "N mm^2": (("kN m²", 1e-9), ("kip in²", 1.0 / (25.4**2 * _KIP))),
}


def unit_factor(unit: str, system: UnitSystem) -> tuple[str, float]:
    """The unit that a figure in `unit` is shown in, and the factor it is multiplied by."""
    if unit == "rad":
        return "°", 180.0 / math.pi
    if unit == "kg/m":
        return ("lb/ft", 1.0 / _POUND_PER_FOOT) if system == "in" else ("kg/m", 1.0)
    if unit == "1":
        return "", 1.0
    if unit in _MECHANICAL:
        return _MECHANICAL[unit][system == "in"]
    power = _POWERS.get(unit)
    if power is None:
        return unit, 1.0
    name, size = _LENGTHS["mm" if system == "cm" and power == 1 else system]
    return name + (f"{power}".translate(_SUPERSCRIPT) if power > 1 else ""), size**-power


@dataclass(frozen=True)
class Figure:
    """A quantity ready to read, all texts in `unit`.

    std, low, high are empty if the uncertainty is not known.
    """

    value: str
    std: str
    low: str
    high: str
    unit: str


def power_of_ten(value: float, unit: str, std: float, interval: tuple[float, float], system: UnitSystem) -> int:
    """The power of ten (a multiple of 3) that spares a figure digits which are not meant; 0 if none need sparing."""
    _, factor = unit_factor(unit, system)
    size = factor * max(abs(value), *(abs(end) for end in interval))
    if size < 1e4 or not math.isfinite(size) or _last_place(value * factor, std * factor) <= 0:
        return 0
    return 3 * (math.floor(math.log10(size)) // 3)


def readable(
    value: float, unit: str, std: float, interval: tuple[float, float], system: UnitSystem, power: int = 0
) -> Figure:
    """A value with its standard uncertainty and 95 % interval, rounded to two significant digits of the uncertainty.

    power : power of ten taken out of the figures and put before the unit
    Without an uncertainty (0 or not finite) the value has six significant digits.
    """
    shown, factor = unit_factor(unit, system)
    place = _last_place(value * factor, std * factor)
    if power:
        shown = f"10{str(power).translate(_SUPERSCRIPT)} {shown}"

    def text(number: float) -> str:
        return _fixed(number * factor, place, power)

    if not has_uncertainty(value, std):
        return Figure(text(value), "", "", "", shown)
    return Figure(text(value), text(std), text(interval[0]), text(interval[1]), shown)


def has_uncertainty(value: float, std: float) -> bool:
    """Whether a figure's standard uncertainty is known, and more than what rounding in the computer leaves of zero."""
    return math.isfinite(std) and std > 1e-13 * abs(value)


def _last_place(value: float, std: float) -> int:
    """The power of ten of the last digit shown."""
    return _place(std, 2) if has_uncertainty(value, std) else _place(value, 6)


def _place(number: float, digits: int) -> int:
    """The power of ten of the last of `digits` significant digits of a number."""
    if number == 0.0 or not math.isfinite(number):
        return 0
    place = math.floor(math.log10(abs(number))) - digits + 1
    # 0.996 rounds up to 1.00: one digit more than asked for.
    return place + 1 if round(abs(number) / 10.0**place) >= 10**digits else place


def _fixed(number: float, place: int, power: int) -> str:
    if not math.isfinite(number):
        return "-"
    text = f"{round(number, -place) / 10.0**power:.{max(0, power - place)}f}"
    return text[1:] if text.startswith("-") and float(text) == 0.0 else text
