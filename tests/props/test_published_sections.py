"""Published section tables against the same sections drawn from their dimensions and integrated.

A row passes when every figure agrees to its last printed digit, or, where the table is known to be rounded by hand or
its dimensions to three figures, within the band its row states.
"""

import csv
import functools
import math
from pathlib import Path

import pytest
from cutface.props.properties import section_properties
from cutface.props.section import Section
from cutface.props.shapes import (
    angle,
    channel,
    hollow_rectangle,
    rectangle,
    rolled_i,
    tee,
    tube,
)

REFERENCE = Path(__file__).parents[1] / "reference"
STEEL = 7850.0

# Chords in place of arcs at the default tolerance of the shapes: second moments to 1e-6, the perimeter up to
# a^2/24 long (a = 0.116 rad the angle of a chord).
DRAWN = 1e-6
DRAWN_PERIMETER = 6e-4

# Of the last printed digit: half for its rounding, a tenth for figures that were rounded from rounded ones. Masses of
# tees are half the rounded mass of the parent, those of the heaviest columns are cut off: a whole digit.
ROUNDING = 0.6
ROUNDING_OF_MASS = 1.0


def last_digit(text: str) -> float:
    """Worth of the last printed digit; final zeros of a whole number beyond three figures are not taken as printed."""
    if "." in text:
        return 10.0 ** -len(text.split(".")[1])
    digits = text.lstrip("-")
    return 10.0 ** (len(digits) - max(len(digits.rstrip("0")), min(3, len(digits))))


def number(row: dict, column: str) -> float:
    return float(row.get(column) or 0.0)


def draw(row: dict) -> Section:
    n = functools.partial(number, row)
    family = row["family"]
    flanged = (n("h"), n("b"), n("tw"), n("tf"), n("r1"))
    slope = n("slope_percent") / 100.0
    at = n("tf_at_from_tip_mm") or None
    if family.startswith(("CHS", "AISC HSS round", "AISC PIPE")):
        return tube(n("h"), n("t"))
    if family.startswith(("RHS", "SHS", "AISC HSS")):
        return hollow_rectangle(n("h"), n("b"), n("t"), n("r_outer"), n("r_inner"))
    if family.startswith("L") or family == "AISC L":
        return angle(n("h"), n("b"), n("t"), n("r1"), n("r2"))
    if family.startswith(("UPN", "UPE", "PFC", "AISC C", "AISC MC")):
        return channel(*flanged, n("r2"), slope, at)
    if family == "T equal":
        # EN 10055: 2 % on both faces of the web too.
        return tee(*flanged, n("r2"), n("r3"), slope, at, web_slope=slope)
    if family.startswith(("T from", "AISC WT", "AISC MT", "AISC ST")):
        return tee(*flanged, n("r2"), flange_slope=slope, thickness_from_tip=at)
    return rolled_i(*flanged, n("r2"), slope, at)


def smaller(p, *names: str) -> float:
    return min(p[name] for name in names)


# Printed column -> (figure from the properties in the column's own unit scale, relative error of the drawing).
FIGURES = {
    "A": lambda p: p["area"],
    "Iy": lambda p: p["second_moment_x"],
    "Iz": lambda p: p["second_moment_y"],
    "Iyz": lambda p: p["product_moment"],
    "Iu": lambda p: p["second_moment_major"],
    "Iv": lambda p: p["second_moment_minor"],
    "iy": lambda p: p["radius_of_gyration_x"],
    "iz": lambda p: p["radius_of_gyration_y"],
    "iu": lambda p: p["radius_of_gyration_major"],
    "iv": lambda p: p["radius_of_gyration_minor"],
    "Wel_y": lambda p: smaller(p, "section_modulus_top", "section_modulus_bottom"),
    "Wel_z": lambda p: smaller(p, "section_modulus_left", "section_modulus_right"),
    "Wel_y_toe": lambda p: p["section_modulus_bottom"],
    "Wel_y_flange": lambda p: p["section_modulus_top"],
    "Wpl_y": lambda p: p["plastic_modulus_x"],
    "Wpl_z": lambda p: p["plastic_modulus_y"],
    "S_half_y": lambda p: 0.5 * p["plastic_modulus_x"],
    "cy": lambda p: p["centroid_y"],
    "cz": lambda p: p["centroid_x"],
    "cy_from_flange": lambda p: -p["centroid_y"],
}
# The symbols of the US tables; x is the strong axis there.
US_FIGURES = {
    "A": FIGURES["A"],
    "Ix": FIGURES["Iy"],
    "Iy": FIGURES["Iz"],
    "Iz": FIGURES["Iv"],
    "rx": FIGURES["iy"],
    "ry": FIGURES["iz"],
    "rz": FIGURES["iv"],
    "Sx": FIGURES["Wel_y"],
    "Sy": FIGURES["Wel_z"],
    "Zx": FIGURES["Wpl_y"],
    "Zy": FIGURES["Wpl_z"],
    "x": FIGURES["cz"],
    # Places are printed from the heel, the web's back or the outer face of the flange: the drawing's own origin.
    "y": lambda p: abs(p["centroid_y"]),
    "xp": lambda p: p["plastic_axis_x"],
    "yp": lambda p: abs(p["plastic_axis_y"]),
}
CENTIMETRES = {"cm": 10.0, "cm2": 1e2, "cm3": 1e3, "cm4": 1e4}
INCHES = {"in": 1.0, "in2": 1.0, "in3": 1.0, "in4": 1.0}  # US rows are drawn in inches as they stand


def rows_of(*files: str) -> list:
    rows = []
    for file in files:
        with (REFERENCE / file).open(encoding="utf-8", newline="") as lines:
            for row in csv.DictReader(lines):
                rows.append(pytest.param(row, id=f"{row['family']}-{row['designation']}"))
    return rows


def disagreements(row: dict, figures: dict, units: dict) -> list[str]:
    """Every printed figure of the row that the drawn section does not bear out, in words."""
    p = section_properties(draw(row), density=STEEL)
    band = 0.0 if row["recomputed_within"] == "last digit" else float(row["recomputed_within"].split()[0]) / 100.0
    found = []

    def compare(column: str, computed: float, drawing: float = DRAWN, rounding: float = ROUNDING) -> None:
        printed = row[column]
        # The two allowances are not added: a row with a band states the whole of its worst deviation.
        allowed = max(rounding * last_digit(printed), band * abs(float(printed))) + drawing * abs(computed)
        if not abs(computed - float(printed)) <= allowed * (1.0 + 1e-9):
            found.append(f"{column}: printed {printed}, drawn {computed:.6g} (source: {row['source']})")

    for column in [c for c in row if row[c]]:
        symbol, _, unit = column.rpartition("_")
        if symbol in figures and unit in units:
            compare(column, figures[symbol](p) / units[unit])
        if column == "tan_alpha":
            compare(column, abs(math.tan(p["principal_angle"])))
    if row.get("mass_kg_per_m"):
        compare("mass_kg_per_m", p["mass_per_metre"], rounding=ROUNDING_OF_MASS)
    if row.get("surface_m2_per_m"):
        compare("surface_m2_per_m", p["perimeter"] / 1000.0, DRAWN_PERIMETER)
    return found


@pytest.mark.parametrize("row", rows_of("sections_metric.csv", "sections_european.csv"))
def test_european_tables(row):
    assert disagreements(row, FIGURES, CENTIMETRES) == []


@pytest.mark.parametrize("row", rows_of("sections_us.csv", "sections_us_rolled.csv"))
def test_us_tables(row):
    assert disagreements(row, US_FIGURES, INCHES) == []


@pytest.mark.parametrize("row", rows_of("sections_timber.csv"))
def test_timber_tables(row):
    depth, width = sorted((number(row, "h"), number(row, "b")), reverse=True)
    p = section_properties(rectangle(depth, width))
    # The file prints seven figures of exact formulae.
    for column, name in {
        "A": "area",
        "perimeter": "perimeter",
        "I_strong": "second_moment_x",
        "I_weak": "second_moment_y",
        "Wel_strong": "section_modulus_top",
        "Wel_weak": "section_modulus_right",
        "Wpl_strong": "plastic_modulus_x",
        "Wpl_weak": "plastic_modulus_y",
        "i_strong": "radius_of_gyration_x",
        "i_weak": "radius_of_gyration_y",
    }.items():
        assert p[name] == pytest.approx(float(row[column]), rel=5e-7), column


def test_the_tables_cover_every_family():
    files = ["sections_metric.csv", "sections_european.csv", "sections_us.csv", "sections_us_rolled.csv"]
    rows = [parameter.values[0] for parameter in rows_of(*files)]
    assert len(rows) == 790
    assert len({row["family"] for row in rows}) == 38
