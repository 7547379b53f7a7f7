import json
import math
from pathlib import Path
from typing import Any

import pytest
from cutface.cli import failures
from cutface.cli.app import app
from cutface.props.errors import CutfaceError, OutlineError, UsageError
from cutface.props.shapes import SHAPES
from typer.testing import CliRunner


@pytest.fixture(autouse=True)
def in_own_folder(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.chdir(tmp_path)


def shape(typed: str) -> Any:
    return CliRunner().invoke(app, ["shape", *typed.split()])


def document(typed: str) -> Any:
    result = shape(f"{typed} --json")
    assert result.exit_code == 0, result.output
    return json.loads(result.stdout)


def values(typed: str) -> dict[str, float]:
    return {name: entry["value"] for name, entry in document(typed)["properties"].items()}


def test_a_round_bar_against_closed_forms() -> None:
    d = 60.0
    found = values("circle diameter=60")
    assert found["second_moment_x"] == pytest.approx(math.pi * d**4 / 64, rel=2e-4)
    # Round, the torsion constant is the polar second moment.
    assert found["torsion_constant"] == pytest.approx(math.pi * d**4 / 32, rel=1e-3)
    assert found["plastic_modulus_x"] == pytest.approx(d**3 / 6, rel=2e-4)


def test_a_thin_tube_is_near_the_formula_of_bredt() -> None:
    # Bredt's formula for a thin closed wall, 4 A_m^2 t / perimeter; at t/d = 1/50 good to (t/d)^2.
    mean = 98.0
    found = values("tube diameter=100 thickness=2")
    assert found["torsion_constant"] == pytest.approx(math.pi * mean**3 * 2 / 4, rel=1e-3)


def test_a_shape_is_what_its_dimensions_say() -> None:
    found = document("hollow-rectangle depth=120 width=80 thickness=5 --density 7850")
    area = 120 * 80 - 110 * 70
    assert found["properties"]["area"]["value"] == pytest.approx(area)
    assert found["properties"]["mass_per_metre"]["value"] == pytest.approx(area * 7850e-6)
    assert found["source"] == {
        "kind": "shape",
        "shape": "hollow-rectangle",
        "dimensions": {"depth": "120", "width": "80", "thickness": "5"},
    }
    assert (found["status"], found["photo"], found["reference"]) == ("calculated", None, None)


def test_dimensions_have_units_and_hyphens() -> None:
    inches = values("rolled-i depth=8in width=4in web-thickness=0.25in flange-thickness=0.4in --skip-torsion")
    metric = values("rolled-i depth=203.2 width=10.16cm web_thickness=6.35mm flange-thickness=10.16 --skip-torsion")
    assert inches == pytest.approx(metric)


def test_shear_centre_of_a_channel_lies_behind_its_web() -> None:
    # Thin walls: e = 3 b^2 / (h + 6 b) from the web's middle for equal walls (Timoshenko, from memory).
    b, h, t = 50.0, 100.0, 1.0
    found = values("channel depth=101 width=50.5 web-thickness=1 flange-thickness=1")
    assert found["shear_centre_x"] == pytest.approx(t / 2 - 3 * b**2 / (h + 6 * b), rel=0.01)
    assert found["shear_centre_y"] == pytest.approx(0.0, abs=0.1)


def test_table_in_inches_and_the_files() -> None:
    result = shape("rectangle depth=8in width=2in --units in --skip-torsion --into out")
    assert "Solid rectangle, corners sharp or round: depth=8in, width=2in" in result.stdout
    (line,) = [line for line in result.stdout.splitlines() if line.startswith("Second moment of area about x ")]
    assert line.split()[-3:] == ["I_x", "85.3333", "in⁴"]
    names = ["result.json", "section.geojson", "section.svg", "section.wkt"]
    assert sorted(file.name for file in Path("out").iterdir()) == names


def test_a_zero_is_shown_as_zero() -> None:
    text = shape("circle diameter=50 --skip-torsion").stdout
    (line,) = [line for line in text.splitlines() if line.startswith("Product moment of area")]
    assert line.split()[4:6] == ["I_yz", "0"]


def test_list_names_every_shape_and_dimension() -> None:
    result = shape("--list")
    assert result.exit_code == 0
    for name, found in SHAPES.items():
        assert f"\n{name}: " in result.stdout
        for dimension in found.dimensions:
            shown = {"notches": "notch", "tolerance": ""}.get(dimension.name, dimension.name.replace("_", "-"))
            assert shown in result.stdout
    assert "tolerance" not in result.stdout
    assert max(map(len, result.stdout.splitlines())) <= 92


@pytest.mark.parametrize(
    ("typed", "kind", "words"),
    [
        ("", UsageError, "cutface shape --list"),
        ("gargoyle depth=3", UsageError, "no shape 'gargoyle'"),
        ("rectangle depth=200", UsageError, "width"),
        ("rectangle depth=200 width=wide", UsageError, "'wide'"),
        ("rectangle depth=200 width=-5", UsageError, "-5 mm"),
        ("rectangle depth=200 width=50 height=3", UsageError, "height"),
        ("circle diameter=1e-9", UsageError, "no size of a structural member"),
        ("angle depth=100 width=50 thickness=1e-6", OutlineError, "too thin to solve torsion"),
        ("rectangle 200 50", UsageError, "name=value"),
        ("rectangle depth=200 width=50 corner-radius=40", OutlineError, ""),
    ],
)
def test_errors_are_messages(typed: str, kind: type[CutfaceError], words: str) -> None:
    result = shape(typed)
    assert isinstance(result.exception, kind)
    assert words in failures.explain(result.exception)
    assert failures.exit_code(result.exception) == (2 if kind is UsageError else 3)
