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


def unit_factor(unit: str, system: UnitSystem) -> tuple[str, float]:
    """The unit that a figure in `unit` is shown in, and the factor it is multiplied by."""
    if unit == "rad":
        return "°", 180.0 / math.pi
    if unit == "kg/m":
        return ("lb/ft", 1.0 / _POUND_PER_FOOT) if system == "in" else ("kg/m", 1.0)
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


def readable(
    value: float, unit: str, std: float | None, interval: tuple[float, float] | None, system: UnitSystem
) -> Figure:
    """A value with its standard uncertainty and 95 % interval, rounded to two significant digits of the latter.

    Large figures are given in thousands, millions, ... so that every digit shown is meant.
    """
    shown, factor = unit_factor(unit, system)
    value *= factor
    known = std is not None and math.isfinite(std) and std > 0.0
    place = _place(std * factor) if known and std is not None else _place(value, digits=6)
    thousands = 0
    size = max(abs(value), *(abs(end * factor) for end in interval or (0.0,)))
    if place > 0 and size >= 1e4:
        thousands = 3 * (math.floor(math.log10(size)) // 3)
        shown = f"10{str(thousands).translate(_SUPERSCRIPT)} {shown}"
    decimals = max(0, thousands - place)

    def text(number: float | None) -> str:
        if number is None or not known:
            return ""
        return _fixed(number * factor, place, thousands, decimals)

    low, high = interval or (None, None)
    return Figure(_fixed(value, place, thousands, decimals), text(std), text(low), text(high), shown)


def _place(number: float, digits: int = 2) -> int:
    """The power of ten of the last of `digits` significant digits of a number."""
    if number == 0.0 or not math.isfinite(number):
        return 0
    place = math.floor(math.log10(abs(number))) - digits + 1
    # 0.996 rounds up to 1.00: one digit more than asked for.
    return place + 1 if round(abs(number) / 10.0**place) >= 10**digits else place


def _fixed(number: float, place: int, thousands: int, decimals: int) -> str:
    if not math.isfinite(number):
        return "-"
    rounded = round(number, -place) / 10.0**thousands
    text = f"{rounded:.{decimals}f}"
    return text[1:] if text.startswith("-") and float(text) == 0.0 else text
