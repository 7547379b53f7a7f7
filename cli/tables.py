"""Tables of figures for the terminal: value, uncertainty, interval, unit.

Knows columns and rounding on the screen, not what the figures mean.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from typing import TYPE_CHECKING, Literal

from rich.table import Table

from ..props.properties import PROPERTIES
from .units import UnitSystem, has_uncertainty, power_of_ten, readable

if TYPE_CHECKING:
    from ..props.result import Quantity

Symbols = Literal["en", "us"]
Row = tuple[str, str, "Quantity"]

# Columns in which names, symbols and figures stand side by side.
ROOMY = 108
# Against the largest figure of the same unit: what rounding in the computer leaves of a zero.
ROUNDED_TO_ZERO = 1e-11


def property_table(
    quantities: Mapping[str, Quantity], units: UnitSystem, symbols: Symbols, width: int, intervals: bool = True
) -> Table:
    """Properties in the order of the registry; see `figure_table`."""
    known = [name for name in PROPERTIES if name in quantities]
    rows: list[Row] = []
    for name in known + [name for name in quantities if name not in PROPERTIES]:
        about = PROPERTIES.get(name)
        symbol = "" if about is None else about.symbol_us if symbols == "us" else about.symbol_en
        rows.append((name.replace("_", " ") if about is None else about.label, symbol, quantities[name]))
    return figure_table("Property", rows, units, width, intervals)


def figure_table(heading: str, rows: Sequence[Row], units: UnitSystem, width: int, intervals: bool = True) -> Table:
    """Rows of label, symbol and quantity: value with standard uncertainty, 95 % interval, unit.

    Symbols are left out where they would break the names over two lines, and the columns of uncertainty where no
    figure has one. Without `intervals`, their column is left out.
    """
    uncertain = any(has_uncertainty(q.value, q.std) for _, _, q in rows)
    table = Table(box=None, header_style="bold", pad_edge=False, collapse_padding=True)
    # As wide as the terminal where the interval fills it, else no wider than the names.
    table.add_column(heading, ratio=1 if uncertain and intervals else None)
    if width >= ROOMY:
        table.add_column("Symbol", no_wrap=True)
    table.add_column("Value", justify="right", no_wrap=True)
    if uncertain:
        table.add_column("± u", justify="right", no_wrap=True)
        if intervals:
            table.add_column("95 % interval", justify="center", no_wrap=True)
    table.add_column("Unit", no_wrap=True)
    # One power of ten for all figures of a kind, so that they compare at a glance.
    powers: dict[str, int] = {}
    sizes: dict[str, float] = {}
    for _, _, q in rows:
        power = power_of_ten(q.value, q.unit, q.std, q.interval95, units)
        powers[q.unit] = max(power, powers.get(q.unit, 0))
        sizes[q.unit] = max(abs(q.value), sizes.get(q.unit, 0.0))
    for label, symbol, q in rows:
        exact = not has_uncertainty(q.value, q.std)
        value = 0.0 if exact and abs(q.value) < ROUNDED_TO_ZERO * sizes[q.unit] else q.value
        figure = readable(value, q.unit, q.std, q.interval95, units, powers[q.unit])
        shown_value = "0" if exact and value == 0.0 else figure.value
        interval = f"{figure.low} to {figure.high}" if figure.low else ""
        known = [figure.std, interval] if intervals else [figure.std]
        cells = [label, symbol, shown_value, *(known if uncertain else []), figure.unit]
        table.add_row(*(cells if width >= ROOMY else cells[:1] + cells[2:]))
    return table
