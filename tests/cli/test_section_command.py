import json
import math
from pathlib import Path
from typing import Any

import pytest
from cutface.cli import failures
from cutface.cli.app import app
from cutface.props.errors import CutfaceError, FileError, OutlineError, UsageError
from cutface.props.readers import read_section
from cutface.props.section import Section
from typer.testing import CliRunner

RECTANGLE = "POLYGON ((0 0, 50 0, 50 100, 0 100, 0 0))"
BOW_TIE = "POLYGON ((0 0, 100 0, 0 50, 100 50, 0 0))"
TWO_PARTS = "MULTIPOLYGON (((0 0, 50 0, 50 100, 0 100, 0 0)), ((70 0, 120 0, 120 100, 70 100, 70 0)))"


@pytest.fixture(autouse=True)
def in_own_folder(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.chdir(tmp_path)


def drawn(text: str, name: str = "joist.wkt") -> str:
    Path(name).write_text(text, encoding="utf-8")
    return name


def section(*arguments: str) -> Any:
    return CliRunner().invoke(app, ["section", *arguments])


def document(*arguments: str) -> Any:
    result = section(*arguments, "--json")
    assert result.exit_code == 0, result.output
    return json.loads(result.stdout)


def value(found: Any, name: str) -> float:
    return found["properties"][name]["value"]


def test_layer_and_unit_of_a_drawing() -> None:
    import ezdxf

    drawing = ezdxf.new()
    drawing.units = ezdxf.units.CM
    for layer, width in (("joist", 5.0), ("plate", 1.2)):
        corners = [(0, 0), (width, 0), (width, 20), (0, 20)]
        drawing.modelspace().add_lwpolyline(corners, close=True, dxfattribs={"layer": layer})
    drawing.saveas("floor.dxf")
    joist = document("floor.dxf", "--layer", "joist", "--skip-torsion")
    assert value(joist, "second_moment_x") == pytest.approx(50 * 200**3 / 12)
    assert joist["source"]["layer"] == "joist"
    plate = document("floor.dxf", "--layer", "plate", "--unit", "in", "--skip-torsion")
    assert value(plate, "width") == pytest.approx(1.2 * 25.4)
    assert isinstance(section("floor.dxf", "--layer", "roof").exception, UsageError)


def test_properties_of_a_rectangle() -> None:
    found = document(drawn(RECTANGLE), "--unit", "mm", "--density", "500")
    b, h = 50.0, 100.0
    assert found["status"] == "calculated"
    assert (found["photo"], found["reference"], found["refusal"]) == (None, None, None)
    assert found["source"]["file"] == "joist.wkt"
    assert len(found["source"]["sha256"]) == 64
    closed = {
        "area": b * h,
        "second_moment_x": b * h**3 / 12,
        "section_modulus_top": b * h**2 / 6,
        "plastic_modulus_x": b * h**2 / 4,
        "radius_of_gyration_y": b / math.sqrt(12),
        "mass_per_metre": 2.5,
    }
    assert {name: value(found, name) for name in closed} == pytest.approx(closed)
    # An outline as drawn has no uncertainty; that of what was solved is the numerical error.
    area = found["properties"]["area"]
    assert (area["std"], area["interval95"], area["pixel_bounds"]) == (None, None, None)
    assert [line["source"] for line in found["budget"]["torsion_constant"]] == ["numerical solution"]


def test_torsion_and_shear_of_a_rectangle() -> None:
    found = document(drawn(RECTANGLE), "--unit", "mm", "--tolerance", "0.01")
    # Saint-Venant's series, sides 2 : 1 (Timoshenko and Goodier, Theory of Elasticity, from memory: 0.229 b t^3).
    series = sum(math.tanh(n * math.pi) / n**5 for n in range(1, 99, 2))
    factor = (1 - 192 / math.pi**5 * 0.5 * series) / 3
    assert factor == pytest.approx(0.2287, abs=5e-5)
    assert value(found, "torsion_constant") == pytest.approx(factor * 100 * 50**3, rel=1e-4)
    low, high = found["torsion_solution"]["torsion_constant_bounds"]
    assert low <= factor * 100 * 50**3 <= high
    # Shear area of a rectangle without lateral contraction: five sixths (common practice).
    assert value(found, "shear_area_y") == pytest.approx(5000 * 5 / 6, rel=1e-3)
    assert (value(found, "shear_centre_x"), value(found, "shear_centre_y")) == pytest.approx((25, 50), abs=0.05)


def test_torsion_can_be_skipped() -> None:
    found = document(drawn(RECTANGLE), "--skip-torsion")
    assert "torsion_constant" not in found["properties"]
    assert "torsion_solution" not in found
    assert found["options"] == {}


def test_poisson_ratio_acts_on_the_shear_area() -> None:
    areas = [value(document(drawn(RECTANGLE), *extra), "shear_area_x") for extra in ([], ["--poisson", "0.3"])]
    assert areas[1] < 0.995 * areas[0]


def test_table_says_what_it_shows() -> None:
    text = section(drawn(RECTANGLE), "--unit", "mm", "--units", "cm").stdout
    assert "Section drawn in joist.wkt" in text
    (line,) = [line for line in text.splitlines() if line.startswith("Second moment of area about x ")]
    assert line.split()[-3:] == ["I_y", "416.667", "cm⁴"]
    assert "Torsion constant" in text
    assert "without uncertainty" in text
    assert "competent engineer" in text
    skipped = section(drawn(RECTANGLE), "--unit", "mm", "--skip-torsion").stdout
    assert "± u" not in skipped
    assert section(drawn(RECTANGLE), "--quiet").output == ""


def test_no_files_without_a_folder() -> None:
    section(drawn(RECTANGLE))
    assert [file.name for file in Path().iterdir()] == ["joist.wkt"]


def test_the_files_hold_the_section() -> None:
    result = section(drawn(RECTANGLE), "--unit", "mm", "--into", "out")
    assert "Written to out: result.json, section.geojson, section.svg, section.wkt" in result.stdout
    for name, layer in (
        ("result.json", None),
        ("section.geojson", None),
        ("section.wkt", None),
        ("section.svg", "section"),
    ):
        again, _ = read_section(Path("out", name), layer=layer)
        assert isinstance(again, Section)
        assert again.to_polygon().area == pytest.approx(5000)
    svg = Path("out", "section.svg").read_text("utf-8")
    assert "shear centre" in svg
    assert "centroid" in svg
    # A result of our own goes in again, and gives the same figures.
    first = json.loads(Path("out", "result.json").read_text("utf-8"))
    assert document("out/result.json")["properties"] == first["properties"]
    assert isinstance(section("joist.wkt", "--into", "out").exception, UsageError)
    assert section("joist.wkt", "--into", "out", "--replace", "--skip-torsion").exit_code == 0


def test_a_fault_of_the_outline_is_refused_with_its_place() -> None:
    result = section(drawn(BOW_TIE), "--unit", "mm", "--into", "out")
    assert isinstance(result.exception, OutlineError)
    assert failures.exit_code(result.exception) == failures.REFUSED
    assert "(50, 25)" in failures.explain(result.exception)
    refused = json.loads(Path("out", "result.json").read_text("utf-8"))
    assert (refused["status"], refused["properties"]) == ("refused", {})
    assert "(50, 25)" in refused["refusal"]["message"]
    assert json.loads(section("joist.wkt", "--json").stdout)["status"] == "refused"


def test_repair_says_what_it_changed() -> None:
    found = document(drawn(BOW_TIE), "--unit", "mm", "--repair")
    assert found["source"]["repair"] is True
    assert value(found, "area") == pytest.approx(2500)
    (warning,) = [warning for warning in found["warnings"] if "(50, 25)" in warning["message"]]
    assert "crosses itself" in warning["message"]
    assert "crosses itself" in section("joist.wkt", "--unit", "mm", "--repair").stdout


def test_separate_parts_are_told_about() -> None:
    apart = document(drawn(TWO_PARTS), "--unit", "mm")
    single = document(drawn(RECTANGLE), "--unit", "mm")
    assert value(apart, "torsion_constant") == pytest.approx(2 * value(single, "torsion_constant"), rel=1e-3)
    assert "shear_centre_x" not in apart["properties"]
    assert "not joined" in " ".join(warning["message"] for warning in apart["warnings"])
    held = document(drawn(TWO_PARTS), "--unit", "mm", "--diaphragms")
    assert value(held, "shear_centre_x") == pytest.approx(60, abs=0.1)
    assert held["options"]["diaphragms"] is True


@pytest.mark.parametrize(
    ("arguments", "kind", "words"),
    [
        (["nowhere.dxf"], FileError, "no file nowhere.dxf"),
        (["joist.wkt", "--layer", "steel"], UsageError, "without layers"),
        (["joist.wkt", "--unit", "furlong"], UsageError, "no unit 'furlong'"),
        (["joist.wkt", "--unit", "mm", "--poisson", "0.7"], UsageError, "Poisson ratio"),
        (["joist.wkt", "--unit", "mm", "--tolerance", "20"], UsageError, "20 %"),
        (["joist.png"], FileError, "joist.png"),
    ],
)
def test_errors_are_messages(arguments: list[str], kind: type[CutfaceError], words: str) -> None:
    drawn(RECTANGLE)
    drawn("no picture", "joist.png")
    result = section(*arguments)
    assert isinstance(result.exception, kind)
    assert words in failures.explain(result.exception)


def test_help_names_the_options() -> None:
    text = CliRunner().invoke(app, ["section", "--help"]).stdout
    for option in ("--layer", "--unit", "--repair", "--skip-torsion", "--axis", "--forces", "--loss", "--material"):
        assert option in text
