import re
from io import StringIO

import pytest
from cutface.cli.show import CAUTION, measurement_view
from cutface.cli.units import UnitSystem
from cutface.vision.measure import Measurement
from hand_made_measurement import ANGLE, angle_quantities, measurement_of, member_of, one_member, quantity, two_members
from rich.console import Console


def shown(measurement: Measurement, units: UnitSystem = "mm", symbols: str = "en", width: int = 120) -> str:
    console = Console(width=width, file=StringIO(), highlight=False)
    console.print(measurement_view(measurement, units, symbols, width))  # type: ignore[arg-type]
    text = console.file.getvalue()  # type: ignore[attr-defined]
    assert max(map(len, text.splitlines())) <= width
    return text


def row(text: str, label: str) -> list[str]:
    """The columns of a table row."""
    (line,) = [line for line in text.splitlines() if line.startswith(label + "  ")]
    return re.split(r"\s{2,}|(?<=\d) (?=\d+\.\d+ to)|(?<=\d)\s(?=-?[\d.]+ to )", line.strip())


def test_figures_are_rounded_to_their_uncertainty() -> None:
    line = " ".join(row(shown(one_member()), "Area"))
    assert line.split() == ["Area", "A", "1136.0", "4.8", "1126.9", "to", "1145.1", "mm²"]


def test_figures_of_a_kind_share_one_power_of_ten() -> None:
    text = shown(one_member())
    units = {line.rsplit("  ", 1)[-1].strip() for line in text.splitlines() if "mm⁴" in line}
    assert {unit.split()[-2] for unit in units} == {"10⁶"}
    assert "1.064 0.012" in re.sub(r"\s+", " ", text)
    assert "0.1911 0.0021" in re.sub(r"\s+", " ", text)


def test_units_and_symbols_of_choice() -> None:
    metric = re.sub(r" +", " ", shown(one_member(), "cm", "en"))
    assert "about x I_y 92.2 1.0 90.2 to 94.1 cm⁴" in metric
    assert "Overall depth h 90.00 0.28 89.47 to 90.53 mm" in metric
    assert "EN 1993-1-1 call these axes y and z" in metric
    us = re.sub(r" +", " ", shown(one_member(), "in", "us"))
    assert "about x I_x 2.214 0.024 2.168 to 2.260 in⁴" in us
    assert "EN 1993" not in us
    assert "α 23.864 0.072 23.728 to 24.000 °" in us


def test_warnings_stand_under_the_table_with_what_to_do() -> None:
    text = shown(one_member())
    assert text.index("Area") < text.index("Warning: 4 % of the outline") < text.index("What to do: Light that edge")
    assert CAUTION.split(",")[0] in re.sub(r"\s+", " ", text)


def test_says_where_scale_and_uncertainty_come_from() -> None:
    text = re.sub(r"\s+", " ", shown(one_member()))
    assert "Scale from the sheet A4: 1 pixel is 0.19 mm on the face; its corners fit to 0.06 pixel." in text
    assert "u is the standard uncertainty; that of the area comes from: print scale 64 %, edge location" in text


def test_each_member_has_its_own_table_and_common_warnings_come_once() -> None:
    text = shown(two_members())
    assert text.index("Member 1 of 2") < text.index("Member 2 of 2")
    assert text.count("The sheet is not quite flat.") == 1
    assert "Member 1 of" not in shown(one_member())


@pytest.mark.parametrize("width", [60, 80])
def test_no_figure_is_cut_off_in_a_narrow_terminal(width: int) -> None:
    text = shown(one_member(), width=width)
    assert "…" not in text
    assert "0.3268 to 0.3408" in text


def test_a_property_nobody_registered_is_shown_all_the_same() -> None:
    odd = member_of(1, ANGLE, {**angle_quantities(), "surface_of_coating": quantity(12.0, "mm^2")})
    assert "surface of coating" in shown(measurement_of(odd))
