"""The measurement as a person reads it in a terminal: figures, causes, and what to mind.

Knows wording, order and rounding on the screen. Every figure shown is also in the result document,
unrounded.
"""

from __future__ import annotations

import math
from collections.abc import Iterable, Mapping, Sequence
from itertools import zip_longest
from typing import TYPE_CHECKING

from rich.console import Group, RenderableType
from rich.text import Text

from .show_appraisal import appraisal_blocks
from .tables import ROOMY, Symbols, property_table
from .units import UnitSystem

if TYPE_CHECKING:
    from ..props.calliper import Compared
    from ..props.combination import Combined
    from ..props.oblique import Projected
    from ..props.result import Notice, Quantity
    from ..vision.measure import Measurement, ReferenceSummary
    from .appraisal import Appraisal

_AXES: dict[Symbols, str] = {
    "en": "x runs to the right on the face and y up; the symbols of EN 1993-1-1 call these axes y and z.",
    "us": "x runs to the right on the face and y up.",
}

CAUTION = (
    "The figures describe this one cut face. Defects inside, variation along the member, strength and grade "
    "are not seen; their use needs a competent engineer and the local code."
)

DRAWN_CAUTION = (
    "The figures describe the outline as drawn, not a member: what was built, its strength and its state are not seen; "
    "their use needs a competent engineer and the local code."
)

_REFERENCES = {"sheet": "sheet", "cards": "cards", "scan": "resolution of the scan"}


def measurement_view(
    measurement: Measurement,
    units: UnitSystem = "mm",
    symbols: Symbols = "en",
    width: int = ROOMY,
    appraisals: Sequence[Appraisal] = (),
) -> RenderableType:
    """Everything about a measurement that fits a terminal of `width` columns: a table for each member, and notices.

    appraisals : of the members, in their order; none where only properties are shown
    """
    several = len(measurement.members) > 1
    blocks: list[RenderableType] = [Text(_scale_line(measurement.reference))]
    for member, appraisal in zip_longest(measurement.members, appraisals):
        if several:
            blocks += ["", Text(f"Member {member.number} of {len(measurement.members)}", style="bold")]
        quantities = member.quantities if appraisal is None else appraisal.quantities
        blocks += ["", property_table(quantities, units, symbols, width), "", *_causes(member.quantities)]
        if measurement.combined is not None:
            blocks.append(Text(_combination_line(measurement, measurement.combined)))
        if member.cut is not None:
            blocks.append(Text(_cut_line(member.cut)))
        blocks += [Text(_calliper_line(c, units)) for c in (member.calliper.compared if member.calliper else ())]
        if appraisal is not None:
            blocks += appraisal_blocks(appraisal, units, width)
        blocks += notice_lines([*member.notices, *(appraisal.notices if appraisal is not None else ())])
    blocks += [""] if appraisals else []
    blocks.append(Text(_AXES[symbols if width >= ROOMY else "us"]))
    blocks += notice_lines(measurement.notices)
    blocks += ["", Text(CAUTION, style="dim")]
    return Group(*blocks)


def section_view(
    title: str,
    appraisal: Appraisal,
    notices: Iterable[Notice],
    units: UnitSystem = "mm",
    symbols: Symbols = "en",
    width: int = ROOMY,
    measured: bool = False,
) -> RenderableType:
    """Everything about a section that did not come straight from a photo, for a terminal of `width` columns.

    measured : whether its outline was measured earlier; else it was drawn or stated by its dimensions
    """
    blocks: list[RenderableType] = [
        Text(title),
        "",
        property_table(appraisal.quantities, units, symbols, width, measured),
        "",
    ]
    if measured:
        blocks += _causes(appraisal.quantities)
    else:
        blocks.append(Text("The outline is taken as it is drawn, without uncertainty."))
        if appraisal.field is not None:
            blocks.append(Text("± u of torsion and shear is what their numerical solution may be off."))
    blocks += appraisal_blocks(appraisal, units, width)
    blocks += ["", Text(_AXES[symbols if width >= ROOMY else "us"])]
    blocks += notice_lines([*notices, *appraisal.notices])
    blocks += ["", Text(CAUTION if measured else DRAWN_CAUTION, style="dim")]
    return Group(*blocks)


def notice_lines(notices: Iterable[Notice]) -> list[RenderableType]:
    """Each notice as what was found and what to do about it; those without a remedy together, as notes."""
    given = list(notices)
    lines: list[RenderableType] = [
        Text.assemble(("\nWarning: ", "bold"), notice.message, ("\nWhat to do: ", "bold"), notice.remedy)
        for notice in given
        if notice.remedy
    ]
    notes = " ".join(notice.message for notice in given if not notice.remedy)
    return [*lines, Text.assemble(("\nNote: ", "bold"), notes)] if notes else lines


def _scale_line(reference: ReferenceSummary) -> str:
    source = _REFERENCES.get(reference.kind, reference.kind)
    name = f"{source} {reference.label}" if reference.label and reference.kind != "scan" else source
    words = f"Scale from the {name}: 1 pixel is {reference.mm_per_px:.3g} mm on the face"
    if reference.residual_px > 0:
        words += f"; its corners fit to {reference.residual_px:.2g} pixel"
    if reference.plane_offset_mm:
        words += f"; face {reference.plane_offset_mm:g} mm above the reference"
    for device in ("camera", "scanner"):
        used = reference.details.get(device)
        if isinstance(used, Mapping):
            words += f"; {device} as calibrated in {used.get('file') or 'this session'}"
    return words + "."


def _combination_line(measurement: Measurement, found: Combined) -> str:
    """Where the common outline comes from, and how the photos agree."""
    areas = [one.members[0].quantities["area"] for one in measurement.photos]
    shown = ", ".join(f"{area.value:.5g}" for area in areas)
    weights = ", ".join(f"{one.weight:.2f}" for one in found.laid)
    turned = [f"{math.degrees(one.turn):.0f}°" for one in found.laid[1:] if abs(one.turn) > math.radians(20.0)]
    words = f"Combined from {len(areas)} photos, weights {weights}"
    words += f", turned by {', '.join(turned)}" if turned else ""
    return (
        f"{words}. Their areas are {shown} mm², which scatter by {found.scatter('area'):.2g}; each by itself has "
        f"± {max(area.std for area in areas):.2g}."
    )


def _cut_line(found: Projected) -> str:
    angle, std = math.degrees(found.angle), math.degrees(found.angle_std)
    return (
        f"The cut is {angle:.1f} ± {std:.1f}° off square: its face is projected to the true section, "
        f"{100 * (1 - math.cos(found.angle)):.2g} % smaller."
    )


def _calliper_line(compared: Compared, units: UnitSystem) -> str:
    """A size taken by calliper beside what the picture alone says of it."""
    unit, factor = ("in", 1 / 25.4) if units == "in" else ("mm", 1.0)
    digits = 4 if units == "in" else 2

    def figure(value: float, std: float) -> str:
        return f"{factor * value:.{digits}f} ± {factor * std:.{digits}f}"

    reading = compared.reading
    return (
        f"By calliper the {reading.name} is {figure(reading.value, reading.std)} {unit}, by the picture alone "
        f"{figure(compared.before, compared.before_std)}; adjusted {figure(compared.after, compared.after_std)}."
    )


def _causes(quantities: Mapping[str, Quantity]) -> list[RenderableType]:
    """Where the uncertainty of the area comes from: the causes a person can do something about."""
    area = quantities.get("area")
    if area is None or not area.budget:
        return []
    largest = [line for line in area.budget if line.share >= 0.05][:4]
    words = ", ".join(f"{line.source} {100 * line.share:.0f} %" for line in largest)
    return [Text(f"u is the standard uncertainty; that of the area comes from: {words}.")]
