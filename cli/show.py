"""The measurement as a person reads it in a terminal: figures, causes, and what to mind.

Knows wording, order and rounding on the screen. Every figure shown is also in the result document,
unrounded.
"""

from __future__ import annotations

from collections.abc import Iterable, Mapping
from typing import TYPE_CHECKING, Literal

from rich.console import Group, RenderableType
from rich.table import Table
from rich.text import Text

from ..props.properties import PROPERTIES
from .units import UnitSystem, power_of_ten, readable

if TYPE_CHECKING:
    from ..props.result import Notice, Quantity
    from ..vision.measure import Measurement, Member, ReferenceSummary

Symbols = Literal["en", "us"]

_AXES: dict[Symbols, str] = {
    "en": "x runs to the right on the face and y up; the symbols of EN 1993-1-1 call these axes y and z.",
    "us": "x runs to the right on the face and y up.",
}

# Columns in which names, symbols and figures stand side by side.
ROOMY = 108

CAUTION = (
    "The figures describe this one cut face. Defects inside, variation along the member, strength and grade "
    "are not seen; their use needs a competent engineer and the local code."
)

_REFERENCES = {"sheet": "sheet", "cards": "cards", "scan": "resolution of the scan"}


def measurement_view(
    measurement: Measurement, units: UnitSystem = "mm", symbols: Symbols = "en", width: int = ROOMY
) -> RenderableType:
    """Everything about a measurement that fits a terminal of `width` columns: a table for each member, and notices."""
    several = len(measurement.members) > 1
    blocks: list[RenderableType] = [Text(_scale_line(measurement.reference))]
    for member in measurement.members:
        if several:
            blocks += ["", Text(f"Member {member.number} of {len(measurement.members)}", style="bold")]
        blocks += ["", property_table(member.quantities, units, symbols, width), "", *_causes(member)]
        blocks += notice_lines(member.notices)
    blocks.append(Text(_AXES[symbols if width >= ROOMY else "us"]))
    blocks += notice_lines(measurement.notices)
    blocks += ["", Text(CAUTION, style="dim")]
    return Group(*blocks)


def property_table(quantities: Mapping[str, Quantity], units: UnitSystem, symbols: Symbols, width: int) -> Table:
    """Properties in the order of the registry: value with standard uncertainty, 95 % interval, unit.

    Symbols are left out where they would break the names over two lines.
    """
    table = Table(box=None, header_style="bold", pad_edge=False, collapse_padding=True)
    table.add_column("Property", ratio=1)
    if width >= ROOMY:
        table.add_column("Symbol", no_wrap=True)
    table.add_column("Value", justify="right", no_wrap=True)
    table.add_column("± u", justify="right", no_wrap=True)
    table.add_column("95 % interval", justify="center", no_wrap=True)
    table.add_column("Unit", no_wrap=True)
    # One power of ten for all figures of a kind, so that they compare at a glance.
    powers: dict[str, int] = {}
    for q in quantities.values():
        power = power_of_ten(q.value, q.unit, q.std, q.interval95, units)
        powers[q.unit] = max(power, powers.get(q.unit, 0))
    known = [name for name in PROPERTIES if name in quantities]
    for name in known + [name for name in quantities if name not in PROPERTIES]:
        quantity, about = quantities[name], PROPERTIES.get(name)
        figure = readable(
            quantity.value, quantity.unit, quantity.std, quantity.interval95, units, powers[quantity.unit]
        )
        symbol = "" if about is None else about.symbol_us if symbols == "us" else about.symbol_en
        label = name.replace("_", " ") if about is None else about.label
        interval = f"{figure.low} to {figure.high}" if figure.low else ""
        cells = [label, symbol, figure.value, figure.std, interval, figure.unit]
        table.add_row(*(cells if width >= ROOMY else cells[:1] + cells[2:]))
    return table


def notice_lines(notices: Iterable[Notice]) -> list[RenderableType]:
    """Each notice as what was found and what to do about it."""
    return [
        Text.assemble(("\nWarning: ", "bold"), notice.message, ("\nWhat to do: ", "bold"), notice.remedy)
        for notice in notices
    ]


def _scale_line(reference: ReferenceSummary) -> str:
    source = _REFERENCES.get(reference.kind, reference.kind)
    name = f"{source} {reference.label}" if reference.label and reference.kind != "scan" else source
    words = f"Scale from the {name}: 1 pixel is {reference.mm_per_px:.3g} mm on the face"
    if reference.residual_px > 0:
        words += f"; its corners fit to {reference.residual_px:.2g} pixel"
    if reference.plane_offset_mm:
        words += f"; face {reference.plane_offset_mm:g} mm above the reference"
    return words + "."


def _causes(member: Member) -> list[RenderableType]:
    """Where the uncertainty of the area comes from: the causes a person can do something about."""
    area = member.quantities.get("area")
    if area is None or not area.budget:
        return []
    largest = [line for line in area.budget if line.share >= 0.05][:4]
    words = ", ".join(f"{line.source} {100 * line.share:.0f} %" for line in largest)
    return [Text(f"u is the standard uncertainty; that of the area comes from: {words}.")]
