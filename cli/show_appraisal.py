"""Answers to what was asked beyond the properties, as a person reads them in a terminal.

Knows wording, order and rounding on the screen.
"""

from __future__ import annotations

import math
from typing import TYPE_CHECKING

from rich.table import Table
from rich.text import Text

from ..props.properties import PROPERTIES
from ..props.result import Quantity
from .tables import ROOMY, Row, figure_table
from .units import Figure, UnitSystem, has_uncertainty, power_of_ten, readable, unit_factor

if TYPE_CHECKING:
    from rich.console import RenderableType

    from ..props.stress import Forces, NeutralAxis
    from .appraisal import AboutAxis, AfterLoss, Appraisal, SeveralMaterials, Stresses

ELASTIC = "These are linear elastic figures for the forces stated; they are no check to any code."

_ABOUT = {
    "centroid_u": ("Centroid, along u", "c_u"),
    "centroid_v": ("Centroid, along v", "c_v"),
    "first_moment_u": ("First moment of area about u", "S_u"),
    "first_moment_v": ("First moment of area about v", "S_v"),
    "second_moment_u": ("Second moment of area about u", "I_u"),
    "second_moment_v": ("Second moment of area about v", "I_v"),
    "product_moment_uv": ("Product moment of area", "I_uv"),
    "polar_second_moment": ("Polar second moment of area", "I_p"),
    "radius_of_gyration_u": ("Radius of gyration about u", "i_u"),
    "radius_of_gyration_v": ("Radius of gyration about v", "i_v"),
    "reach_above": ("Farthest fibre above u", "e_top"),
    "reach_below": ("Farthest fibre below u", "e_bot"),
    "reach_left": ("Farthest fibre left of v", "e_left"),
    "reach_right": ("Farthest fibre right of v", "e_right"),
}
_TRANSFORMED = {
    "area": ("Transformed area", "A"),
    "centroid_x": ("Centroid, from the left", "x_c"),
    "centroid_y": ("Centroid, from below", "y_c"),
    "second_moment_x": ("Second moment about x", "I_x"),
    "second_moment_y": ("Second moment about y", "I_y"),
    "product_moment": ("Product moment", "I_xy"),
    "axial_stiffness": ("Axial stiffness", "EA"),
    "bending_stiffness_x": ("Bending stiffness about x", "EI_x"),
    "bending_stiffness_y": ("Bending stiffness about y", "EI_y"),
}
_STRESSES = {
    "largest_stress": "Largest normal",
    "smallest_stress": "Smallest normal",
    "stress_at_centroid": "Normal, at the centroid",
}
_FORCES = (
    ("N", "axial", "N"),
    ("V_x", "shear_x", "N"),
    ("V_y", "shear_y", "N"),
    ("M_x", "moment_x", "N mm"),
    ("M_y", "moment_y", "N mm"),
    ("T", "torque", "N mm"),
)


def appraisal_blocks(appraisal: Appraisal, units: UnitSystem, width: int) -> list[RenderableType]:
    """One block for every question that was asked."""
    blocks: list[RenderableType] = []
    if appraisal.about is not None:
        blocks += _about(appraisal.about, units, width)
    if appraisal.materials is not None:
        blocks += _materials(appraisal.materials, units, width)
    if appraisal.stresses is not None:
        blocks += _stresses(appraisal.stresses, units)
    if appraisal.after_loss is not None:
        blocks += _loss(appraisal.after_loss, units, width)
    return blocks


def _heading(words: str) -> list[RenderableType]:
    return ["", Text(words, style="bold"), ""]


def _about(about: AboutAxis, units: UnitSystem, width: int) -> list[RenderableType]:
    origin = "the centroid" if about.axis.origin is None else _place(about.origin, units)
    words = f"About axes u and v through {origin}, u at {math.degrees(about.axis.angle):g}° from x"
    # About the centroid, these are zero by their meaning.
    zero = () if about.axis.origin is not None else ("centroid_u", "centroid_v", "first_moment_u", "first_moment_v")
    shown = [name for name in about.quantities if name in _ABOUT and name not in zero]
    rows: list[Row] = [(*_ABOUT[name], about.quantities[name]) for name in shown]
    return [*_heading(words), figure_table("Property", rows, units, width)]


def _materials(found: SeveralMaterials, units: UnitSystem, width: int) -> list[RenderableType]:
    t = found.transformed
    # The reference is one of the parts' materials: the one that counts once.
    first = next(region.material.name for region in t.regions if math.isclose(region.ratio, 1.0))
    reference = _figure(t.reference_modulus, "MPa", units)
    words = f"Transformed section: every area counts E / E_ref times, E_ref = {reference} ({first})"
    rows: list[Row] = [(*_TRANSFORMED[name], q) for name, q in found.quantities.items()]
    if t.mass_per_metre is not None:
        rows.append(("Mass per metre", "m", _plain(t.mass_per_metre, "kg/m")))
    for joint, quantities in zip(t.interfaces, found.joints, strict=True):
        first, second = (n + 1 for n in joint.regions)
        for axis in "xy" if quantities else "":
            label = f"First moment about {axis}, joint of {first} and {second}"
            rows.append((label, f"S_{axis},{first}{second}", quantities[f"first_moment_{axis}"]))
    for name, plastic in zip("xy", found.plastic or (), strict=False):
        rows.append((f"Full plastic moment about {name}", f"M_pl,{name}", _plain(plastic.value, "N mm")))
    parts = Table(box=None, header_style="bold", pad_edge=False, collapse_padding=True)
    parts.add_column("Part", justify="right")
    parts.add_column("Material")
    areas = [quantities["area"] for quantities in found.regions]
    uncertain = any(has_uncertainty(q.value, q.std) for q in areas)
    for heading in ("E / E_ref", "Area", *(["± u"] if uncertain else []), "Unit", "Centroid (x, y)"):
        parts.add_column(heading, justify="right" if heading != "Unit" else "left", no_wrap=True)
    for number, (region, area) in enumerate(zip(t.regions, areas, strict=True), start=1):
        figure = readable(area.value, area.unit, area.std, area.interval95, units)
        parts.add_row(
            str(number),
            region.material.name,
            f"{region.ratio:.4g}",
            figure.value,
            *([figure.std] if uncertain else []),
            figure.unit,
            _place(region.centroid, units),
        )
    blocks = [*_heading(words), figure_table("Property", rows, units, width), "", parts]
    if any(found.joints):
        blocks += [
            "",
            Text("Shear flow over a joint: V_y S_x / I_x and V_x S_y / I_y where x and y are principal axes."),
        ]
    return blocks


def _stresses(found: Stresses, units: UnitSystem) -> list[RenderableType]:
    rows: list[tuple[str, Quantity, str]] = []
    shown, factor = unit_factor("mm", units)
    if found.normal is not None:
        places = {
            "largest_stress": _place(found.normal.largest.place, units),
            "smallest_stress": _place(found.normal.smallest.place, units),
            "stress_at_centroid": _place(found.normal.centroid, units),
        }
        rows += [(_STRESSES[name], q, places[name]) for name, q in found.quantities.items()]
    for number, (region, quantities) in enumerate(zip(found.regions, found.region_quantities, strict=True), start=1):
        for name, stress in (("largest_stress", region.largest), ("smallest_stress", region.smallest)):
            label = f"{_STRESSES[name]}, part {number} ({region.material.name})"
            rows.append((label, quantities[name], _place(stress.place, units)))
    for force, axis, cut in zip(("upright", "level"), "xy", found.cuts or (), strict=False):
        level = f"{axis} = {cut.level * factor:.{_decimals(shown)}f}"
        rows.append((f"Mean shear, {force} cut", found.shear[f"{force}_cut_shear"], level))
    if found.torsional is not None:
        place = _place(found.torsional.place, units)
        rows.append(("Shear from torsion", found.shear["torsional_shear"], place))
    table = Table(box=None, header_style="bold", pad_edge=False, collapse_padding=True)
    uncertain = any(has_uncertainty(q.value, q.std) for _, q, _ in rows)
    table.add_column("Stress, tension positive")
    table.add_column("Value", justify="right", no_wrap=True)
    if uncertain:
        table.add_column("± u", justify="right", no_wrap=True)
        table.add_column("95 % interval", justify="center", no_wrap=True)
    table.add_column("Unit", no_wrap=True)
    table.add_column(f"Place (x, y), {shown}", no_wrap=True)
    for label, q, place in rows:
        figure = readable(q.value, q.unit, q.std, q.interval95, units)
        if not figure.std:
            figure = Figure(_four_digits(q, units), "", "", "", figure.unit)
        interval = f"{figure.low} to {figure.high}" if figure.low else ""
        place = place.removesuffix(f" {shown}")
        table.add_row(label, figure.value, *([figure.std, interval] if uncertain else []), figure.unit, place)
    blocks = [*_heading(f"Stresses from {_forces(found.forces, units)}"), table, ""]
    if found.neutral_axis is not None:
        blocks.append(Text(_neutral_axis(found.neutral_axis, units)))
    if found.torsional is not None:
        blocks.append(Text("At sharp re-entrant corners the elastic shear stress from torsion has no limit."))
    return [*blocks, Text(ELASTIC)]


def _forces(forces: Forces, units: UnitSystem) -> str:
    stated = [(name, getattr(forces, field), unit) for name, field, unit in _FORCES if getattr(forces, field)]
    words = []
    for name, value, unit in stated:
        shown, factor = unit_factor(unit, units)
        words.append(f"{name} = {value * factor:g} {shown}")
    return ", ".join(words) or "no forces"


def _neutral_axis(axis: NeutralAxis, units: UnitSystem) -> str:
    across = "" if axis.crosses else "; it does not cross the section"
    angle = round(math.degrees(axis.angle), 2) + 0.0
    return f"Neutral axis through {_place(axis.point, units)}, at {angle:g}° from x{across}."


def _loss(found: AfterLoss, units: UnitSystem, width: int) -> list[RenderableType]:
    table = Table(box=None, header_style="bold", pad_edge=False, collapse_padding=True)
    uncertain = any(has_uncertainty(q.value, q.std) for q in found.ratios.values())
    table.add_column("Property")
    for heading in ("Full", "Remaining"):
        table.add_column(heading, justify="right", no_wrap=True)
    table.add_column("Unit", no_wrap=True)
    table.add_column("Left, %", justify="right", no_wrap=True)
    if uncertain and width >= ROOMY:
        table.add_column("± u", justify="right", no_wrap=True)
    if uncertain:
        table.add_column("95 % interval", justify="center", no_wrap=True)
    powers: dict[str, int] = {}
    for name, pair in found.comparison.items():
        unit = PROPERTIES[name].unit
        power = power_of_ten(pair.full, unit, math.nan, (pair.full, pair.full), units)
        powers[unit] = max(power, powers.get(unit, 0))
    for name, pair in found.comparison.items():
        unit = PROPERTIES[name].unit
        full, remaining = (
            readable(v, unit, math.nan, (v, v), units, powers[unit]) for v in (pair.full, pair.remaining)
        )
        ratio = found.ratios[name]
        share = readable(100 * ratio.value, "1", 100 * ratio.std, _times(ratio.interval95, 100), units)
        known = [share.std, f"{share.low} to {share.high}" if share.low else ""][0 if width >= ROOMY else 1 :]
        table.add_row(
            PROPERTIES[name].label,
            full.value,
            remaining.value,
            full.unit,
            share.value if share.std else f"{100 * ratio.value:.2f}",
            *(known if uncertain else []),
        )
    words = f"Section left after a loss of {found.loss.words}"
    if found.angle:
        words += f", sides of the axes at {math.degrees(found.angle):g}° from x"
    return [*_heading(words), table, "", Text("Moments of either section are about its own centroid.")]


def _times(interval: tuple[float, float], factor: float) -> tuple[float, float]:
    return interval[0] * factor, interval[1] * factor


def _plain(value: float, unit: str) -> Quantity:
    return Quantity(value, unit, math.nan, (math.nan, math.nan))


def _four_digits(q: Quantity, units: UnitSystem) -> str:
    value = q.value * unit_factor(q.unit, units)[1]
    return f"{value:.{max(0, 3 - math.floor(math.log10(abs(value))))}f}" if abs(value) > 1e-9 else "0"


def _figure(value: float, unit: str, units: UnitSystem) -> str:
    shown, factor = unit_factor(unit, units)
    return f"{value * factor:.6g} {shown}"


def _place(point: tuple[float, float], units: UnitSystem) -> str:
    shown, factor = unit_factor("mm", units)
    x, y = (round(c * factor, _decimals(shown)) + 0.0 for c in point)
    return f"({x:.{_decimals(shown)}f}, {y:.{_decimals(shown)}f}) {shown}"


def _decimals(unit: str) -> int:
    return 3 if unit == "in" else 1
