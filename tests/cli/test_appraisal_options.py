"""The questions beyond the properties, on sections as drawn and on a measured rectangle whose scale is uncertain."""

import json
import math
import re
import subprocess
import sys
from dataclasses import replace
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from cutface.cli import failures
from cutface.cli import run as run_module
from cutface.cli.app import app
from cutface.props.errors import CutfaceError, OutlineError, UsageError
from cutface.props.properties import section_properties
from cutface.props.section import Part, Section
from cutface.props.uncertainty import Mode, OutlineUncertainty, quantify
from hand_made_measurement import measurement_of, member_of, one_member
from PIL import Image
from typer.testing import CliRunner

B, H = 50.0, 100.0
INERTIA = B * H**3 / 12
RECTANGLE = f"rectangle depth={H:g} width={B:g} --skip-torsion"
FLITCH = (
    '{"type": "MultiPolygon", "unit": "mm", "coordinates": [[[[0,0],[50,0],[50,200],[0,200],[0,0]]],'
    "[[[50,0],[62,0],[62,200],[50,200],[50,0]]]]}"
)
SCALE_STD = 0.01


@pytest.fixture(autouse=True)
def in_own_folder(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.chdir(tmp_path)


def invoke(command: str, typed: str, *more: str) -> Any:
    return CliRunner().invoke(app, [command, *typed.split(), *more])


def document(command: str, typed: str, *more: str) -> Any:
    result = invoke(command, typed, *more, "--json")
    assert result.exit_code == 0, (result.output, result.exception)
    return json.loads(result.stdout)


def value(entry: Any, name: str) -> float:
    return entry["properties"][name]["value"]


@pytest.fixture
def measured(monkeypatch: pytest.MonkeyPatch) -> None:
    """Stands in for a photo of the rectangle, measured at a scale that is uncertain by SCALE_STD."""
    section = Section((Part(np.array([[0, 0], [B, 0], [B, H], [0, H]])),))
    scale = Mode("print scale", SCALE_STD * section.vertices)
    uncertainty = OutlineUncertainty((scale,), None, np.full(4, 0.1))
    quantities = quantify(section, section_properties(section), uncertainty)
    member = replace(member_of(1, section, quantities), uncertainty=uncertainty)
    monkeypatch.setattr(run_module, "load_photo", lambda path: measurement_of(member).photo)
    monkeypatch.setattr(run_module, "measure", lambda photo, **options: measurement_of(member))


def relative_std(entry: Any, name: str) -> float:
    found = entry["properties"][name]
    return found["std"] / abs(found["value"])


# --- own axes ---


def test_own_axes_through_a_corner() -> None:
    found = document("shape", RECTANGLE, "--axis", "-25,-50")["about_axis"]
    # About a side, b h^3 / 3; the product about two sides, b^2 h^2 / 4.
    assert value(found, "second_moment_u") == pytest.approx(B * H**3 / 3)
    assert value(found, "second_moment_v") == pytest.approx(H * B**3 / 3)
    assert value(found, "product_moment_uv") == pytest.approx(B**2 * H**2 / 4)
    assert value(found, "first_moment_u") == pytest.approx(B * H * H / 2)
    assert (found["origin"], found["angle"]) == ([-25.0, -50.0], 0.0)


def test_own_axes_through_the_centroid_at_an_angle() -> None:
    found = document("shape", RECTANGLE, "--axis", "centroid,90")["about_axis"]
    assert value(found, "second_moment_u") == pytest.approx(H * B**3 / 12)
    assert found["through_centroid"] is True
    turned = invoke("shape", RECTANGLE, "--axis", "centroid,45").stdout
    assert "through the centroid, u at 45° from x" in turned
    (line,) = [line for line in turned.splitlines() if line.startswith("Second moment of area about u")]
    assert float(line.split()[7]) == pytest.approx((INERTIA + H * B**3 / 12) / 2 / 1e6, rel=1e-5)


# --- stresses ---


def test_bending_and_axial_force() -> None:
    found = document("shape", RECTANGLE, "--forces", "N=-50,Mx=4")["stresses"]
    bending, axial = 4e6 / (B * H**2 / 6), -50e3 / (B * H)
    assert value(found, "largest_stress") == pytest.approx(axial + bending)
    assert value(found, "smallest_stress") == pytest.approx(axial - bending)
    assert value(found, "stress_at_centroid") == pytest.approx(axial)
    assert found["places"]["largest_stress"][1] == 50.0
    axis = found["neutral_axis"]
    assert axis["point"][1] == pytest.approx(-axial * INERTIA / 4e6)
    assert (axis["angle"], axis["crosses"]) == (0.0, True)
    assert "no check to any code" in found["basis"]


def test_shear_of_a_rectangle() -> None:
    found = document("shape", RECTANGLE, "--forces", "Vy=30kN")["stresses"]
    level = found["mean_shear"]["level_cuts"]
    # Parabola over the depth, 1.5 V / A at mid-depth.
    assert level["value"] == pytest.approx(1.5 * 30e3 / (B * H), rel=1e-3)
    assert level["level"] == pytest.approx(0.0, abs=H / 100)


def test_torque_on_a_round_bar_solves_torsion_by_itself() -> None:
    found = document("shape", "circle diameter=60 --skip-torsion", "--forces", "T=1.5")
    # Round bar: T r / I_p = 16 T / (pi d^3).
    assert found["stresses"]["torsional_shear"]["value"] == pytest.approx(16 * 1.5e6 / (math.pi * 60**3), rel=0.01)


@pytest.mark.parametrize(
    ("typed", "field", "si"),
    [
        ("N=2", "axial", 2e3),
        ("N=2MN", "axial", 2e6),
        ("n=1kip", "axial", 4448.2216152605),
        ("Mx=2", "moment_x", 2e6),
        ("my=1kipft", "moment_y", 4448.2216152605 * 304.8),
        ("T=7Nmm", "torque", 7.0),
        ("Vx=-3lbf", "shear_x", -3 * 4.4482216152605),
    ],
)
def test_units_of_forces(typed: str, field: str, si: float) -> None:
    forces = document("shape", "rectangle depth=20 width=10 --skip-torsion", "--forces", typed)["stresses"]["forces"]
    assert forces[field] == pytest.approx(si, rel=1e-12)


def test_stresses_are_shown_with_places_and_the_sentence() -> None:
    result = invoke("shape", RECTANGLE, "--forces", "N=-50,Mx=4", "--into", "out")
    assert "Stresses from N = -50 kN, M_x = 4 kN m" in result.stdout
    assert "Neutral axis through (0.0, 10.4) mm, at 0° from x." in result.stdout
    assert "they are no check to any code" in result.stdout
    svg = Path("out", "section.svg").read_text("utf-8")
    assert "neutral axis" in svg
    assert "+38 MPa" in svg
    pushed = invoke("shape", RECTANGLE, "--forces", "N=-500,Mx=1", "--units", "in").stdout
    assert "it does not cross the section" in pushed
    assert "ksi" in pushed


# --- loss ---


def test_uniform_loss() -> None:
    found = document("shape", RECTANGLE, "--loss", "2")["loss"]
    assert found["remaining"]["area"] == pytest.approx(46 * 96)
    assert found["full"]["second_moment_x"] == pytest.approx(INERTIA)
    assert value(found["ratio"], "second_moment_x") == pytest.approx(46 * 96**3 / (50 * 100**3))
    assert len(found["remaining_section"]["parts"][0]["shell"]) == 4


def test_loss_by_sides_and_of_outer_faces() -> None:
    sides = document("shape", RECTANGLE, "--loss", "top=2,left=1mm")["loss"]
    assert sides["remaining"]["area"] == pytest.approx(49 * 98)
    assert sides["stated"] == "2 mm at the top and 1 mm at the left"
    hollow = "hollow-rectangle depth=100 width=60 thickness=5 --skip-torsion"
    both, outer = (document("shape", hollow, "--loss", typed)["loss"]["remaining"] for typed in ("1", "outer=1"))
    # Inside, the corners become round: each takes (1 - pi / 4) of a square of the loss less.
    assert both["area"] == pytest.approx(98 * 58 - 92 * 52 + 4 - math.pi, abs=0.01)
    assert outer["area"] == pytest.approx(98 * 58 - 90 * 50)


def test_holes_with_and_without_a_loss() -> None:
    hole = math.pi * 10**2
    alone = document("shape", RECTANGLE, "--hole", "0,20,20")["loss"]
    assert alone["remaining"]["area"] == pytest.approx(B * H - hole, rel=1e-4)
    assert alone["stated"] == "a hole of 20 mm at (0, 20)"
    both = document("shape", RECTANGLE, "--hole", "0,20,20", "--hole", "0,-20,20", "--loss", "top=2")["loss"]
    assert both["remaining"]["area"] == pytest.approx(B * (H - 2) - 2 * hole, rel=1e-4)
    # A hole has no sides: axes of one's own do not turn it.
    turned = document("shape", RECTANGLE, "--hole", "0,20,20", "--axis", "centroid,30")["loss"]
    assert turned["remaining"] == alone["remaining"]
    for wrong in ("0,20", "0,20,x", "0,20,-5"):
        assert isinstance(invoke("shape", RECTANGLE, "--hole", wrong).exception, UsageError)
    outside = invoke("shape", RECTANGLE, "--hole", "500,0,20").exception
    assert isinstance(outside, OutlineError)
    assert "outside the section" in str(outside)


@pytest.mark.usefixtures("measured")
def test_a_hole_in_a_measured_member_has_its_interval() -> None:
    area = document("measure", "yard.jpg --hole 25,50,20")["loss"]["ratio"]["properties"]["area"]
    # The hole is exact, the member's area is not: the share lost goes with the inverse square of the scale.
    lost = math.pi * 10**2 / (B * H)
    assert area["value"] == pytest.approx(1 - lost, rel=1e-4)
    assert area["std"] == pytest.approx(2 * SCALE_STD * lost, rel=0.02)


def test_reference_material_of_a_transformed_section() -> None:
    Path("flitch.geojson").write_text(FLITCH)
    typed = ["--material", "1=oak:11000", "--material", "2=steel:210000", "--reference-material"]
    found = document("section", "flitch.geojson --skip-torsion", *typed, "steel")["transformed"]
    assert found["reference_modulus"] == 210000
    assert value(found, "area") == pytest.approx(50 * 200 * 11 / 210 + 12 * 200)
    assert "(steel)" in invoke("section", "flitch.geojson --skip-torsion", *typed, "steel").stdout
    assert isinstance(invoke("section", "flitch.geojson --skip-torsion", *typed, "brass").exception, UsageError)


def test_loss_by_the_sides_of_own_axes() -> None:
    turned = document("shape", RECTANGLE, "--loss", "top=2", "--axis", "centroid,90")["loss"]
    # The top of axes turned by a right angle is the left of the section.
    assert turned["remaining"]["area"] == pytest.approx((B - 2) * H)
    assert turned["angle"] == pytest.approx(math.pi / 2)
    assert "at 90° from x" in invoke("shape", RECTANGLE, "--loss", "top=2", "--axis", "centroid,90").stdout


@pytest.mark.usefixtures("measured")
def test_a_member_that_lies_askew_to_the_sides_is_told() -> None:
    def codes(typed: str) -> list[str]:
        return [warning["code"] for warning in document("measure", f"yard.jpg {typed}")["warnings"]]

    assert "loss-askew" not in codes("--loss top=2")
    assert "loss-askew" not in codes("--loss 2 --axis centroid,5")
    found = document("measure", "yard.jpg --loss top=2 --axis centroid,5")["warnings"]
    (askew,) = [warning for warning in found if warning["code"] == "loss-askew"]
    assert "5.0°" in askew["message"]
    assert "--axis centroid,0;" in askew["remedy"]


def test_loss_is_shown_and_drawn() -> None:
    result = invoke("shape", RECTANGLE, "--loss", "2", "--into", "out")
    (line,) = [line for line in result.stdout.splitlines() if line.startswith("Second moment of area about x ")][1:]
    assert line.split()[-5:] == ["4.16667", "3.39149", "10⁶", "mm⁴", "81.40"]
    assert "section left after the loss" in Path("out", "section.svg").read_text("utf-8")


def test_a_loss_that_cuts_the_section_apart_is_told() -> None:
    typed = "welded-i depth=100 web-thickness=3 top-width=60 top-thickness=10 --skip-torsion --loss 2"
    found = document("shape", typed)
    assert [warning["code"] for warning in found["warnings"]] == ["in-pieces"]


# --- materials ---


def test_flitch_beam() -> None:
    Path("flitch.geojson").write_text(FLITCH)
    oak, steel = ["--material", "1=oak:11000:700:24"], ["--material", "2=steel:210000:7850:235"]
    found = document("section", "flitch.geojson --skip-torsion", *oak, *steel)["transformed"]
    inertia = {"oak": 50 * 200**3 / 12, "steel": 12 * 200**3 / 12}
    stiffness = 11000 * inertia["oak"] + 210000 * inertia["steel"]
    assert value(found, "bending_stiffness_x") == pytest.approx(stiffness)
    assert found["reference_modulus"] == 11000
    assert [part["ratio"] for part in found["parts"]] == pytest.approx([1.0, 210 / 11])
    assert found["mass_per_metre"] == pytest.approx((50 * 700 + 12 * 7850) * 200e-6)
    (joint,) = found["interfaces"]
    assert (joint["parts"], joint["beyond"], joint["length"]) == ([1, 2], [1], pytest.approx(200, abs=0.1))
    # Its area times the distance of the oak's centroid from the common one, for the connectors.
    assert value(joint, "first_moment_y") == pytest.approx(50 * 200 * (25 - value(found, "centroid_x")))
    assert value(joint, "first_moment_x") == pytest.approx(0.0, abs=1e-3)
    plastic = 24 * 50 * 200**2 / 4 + 235 * 12 * 200**2 / 4
    assert found["plastic_moments"]["x"]["value"] == pytest.approx(plastic)
    # Each part carries M E_i / EI times the distance.
    stresses = document("section", "flitch.geojson --skip-torsion", *oak, *steel, "--forces", "Mx=20")["stresses"]
    tops = [part["properties"]["largest_stress"]["value"] for part in stresses["parts"]]
    assert tops == pytest.approx([20e6 * modulus / stiffness * 100 for modulus in (11000, 210000)])
    assert stresses["neutral_axis"]["point"][1] == pytest.approx(100)
    text = invoke("section", "flitch.geojson --skip-torsion --into out", *oak, *steel, "--forces", "Mx=20").stdout
    svg = Path("out", "section.svg").read_text("utf-8")
    assert "centroid of the transformed section" in svg
    assert [f">{number}</text>" in svg for number in (1, 2)] == [True, True]
    assert "E_ref = 11000 MPa (oak)" in text
    assert "part 2 (steel)" in text


# --- measured ---


@pytest.mark.usefixtures("measured")
def test_measured_torsion_has_the_uncertainty_of_the_scale() -> None:
    found = document("measure", "yard.jpg --torsion")
    # The torsion constant goes with the fourth power of the scale, shear areas with the second.
    assert relative_std(found, "torsion_constant") == pytest.approx(4 * SCALE_STD, rel=0.01)
    assert relative_std(found, "shear_area_y") == pytest.approx(2 * SCALE_STD, rel=0.01)
    budget = {line["source"]: line["share"] for line in found["budget"]["torsion_constant"]}
    assert sum(budget.values()) == pytest.approx(1.0)
    assert budget["print scale"] > 0.99
    assert "numerical solution" in budget
    assert found["options"]["torsion"] is True
    text = invoke("measure", "yard.jpg --torsion").stdout
    assert "Torsion constant" in text
    # Its scale does not act on a ratio: the figure has no uncertainty, and no digits that say nothing.
    assert re.search(r"^Shape factor about x +\S+ +1\.50000 *$", text, re.MULTILINE)
    assert "torsion_constant" not in document("measure", "yard.jpg")["properties"]


@pytest.mark.usefixtures("measured")
def test_measured_stresses_loss_and_axes_have_uncertainty() -> None:
    found = document("measure", "yard.jpg --forces Mx=4 --loss 2 --axis 0,0")
    stresses = found["stresses"]
    assert relative_std(stresses, "largest_stress") == pytest.approx(3 * SCALE_STD, rel=0.01)
    low, high = stresses["properties"]["largest_stress"]["interval95"]
    assert low < 4e6 / (B * H**2 / 6) < high
    assert relative_std(found["about_axis"], "second_moment_u") == pytest.approx(4 * SCALE_STD, rel=0.01)
    # d ln of (1 - 4/b)(1 - 4/h) by d ln of the scale.
    expected = SCALE_STD * (4 / B / (1 - 4 / B) + 4 / H / (1 - 4 / H))
    assert relative_std(found["loss"]["ratio"], "area") == pytest.approx(expected, rel=0.01)


@pytest.mark.usefixtures("measured")
def test_measured_shear_has_uncertainty() -> None:
    stresses = document("measure", "yard.jpg --forces Vy=6,T=0.5")["stresses"]
    # Mean shear goes with the second power of the scale, that of a torque with the third.
    assert relative_std(stresses, "level_cut_shear") == pytest.approx(2 * SCALE_STD, rel=0.02)
    assert relative_std(stresses, "torsional_shear") == pytest.approx(3 * SCALE_STD, rel=0.02)
    assert value(stresses, "torsional_shear") == pytest.approx(stresses["torsional_shear"]["value"])
    (line,) = [
        line
        for line in invoke("measure", "yard.jpg --forces T=0.5").stdout.splitlines()
        if line.startswith("Shear from torsion")
    ]
    assert " to " in line


@pytest.mark.usefixtures("measured")
def test_measured_files_and_table() -> None:
    result = invoke("measure", "yard.jpg --forces Mx=4,N=10 --loss 2 --into out")
    assert result.exit_code == 0
    assert "Left, %" in result.stdout
    assert "neutral axis" in Path("out", "section.svg").read_text("utf-8")
    with_axis = np.asarray(Image.open(Path("out", "outline.jpg")), int)
    invoke("measure", "yard.jpg --into plain")
    plain = np.asarray(Image.open(Path("plain", "outline.jpg")), int)
    assert with_axis.shape == plain.shape
    assert np.abs(with_axis - plain).max() > 60


@pytest.mark.usefixtures("measured")
def test_transformed_section_of_a_measured_member() -> None:
    found = document("measure", "yard.jpg --material 1=oak:11000")["transformed"]
    assert relative_std(found, "bending_stiffness_x") == pytest.approx(4 * SCALE_STD, rel=0.01)


@pytest.mark.usefixtures("measured")
def test_a_result_taken_up_again_keeps_its_uncertainty() -> None:
    asked = "--torsion --axis -25,0,20 --forces Mx=4,N=10 --loss 2 --material 1=oak:11000"
    first = document("measure", f"yard.jpg {asked} --into out")
    again = document("section", f"out/result.json {asked.removeprefix('--torsion')} --into later")
    assert again["source"]["photo"] == {"file": "yard 7.jpg"}
    for entry in (lambda found: found, lambda found: found["about_axis"], lambda found: found["loss"]["ratio"]):
        for name, figure in entry(first)["properties"].items():
            found = entry(again)["properties"][name]
            assert found["value"] == pytest.approx(figure["value"], rel=1e-9, abs=1e-9), name
            assert found["std"] == pytest.approx(figure["std"], rel=1e-3, abs=1e-9), name
    # And once more, from the result of that.
    third = document("section", "later/result.json --skip-torsion")
    assert relative_std(third, "area") == pytest.approx(2 * SCALE_STD, rel=0.01)
    assert third["section"]["parts"][0]["material"]["name"] == "oak"
    text = invoke("section", "out/result.json --skip-torsion").stdout
    assert "95 % interval" in text
    assert "comes from: print scale" in text
    assert "measured in yard 7.jpg" in text
    for option in ("--layer steel", "--unit in"):
        assert isinstance(invoke("section", f"out/result.json {option}").exception, UsageError)


def test_scanner_scale_is_typed_in_percent(monkeypatch: pytest.MonkeyPatch) -> None:
    asked: dict[str, Any] = {}
    monkeypatch.setattr(run_module, "load_photo", lambda path: one_member().photo)

    def measure(photo: Any, **options: Any) -> None:
        asked.update(options)
        raise UsageError("enough", "Enough.", "")

    monkeypatch.setattr(run_module, "measure", measure)
    invoke("measure", "scan.png --scanner-scale-u 0.05 --json")
    assert asked == {"scanner_scale_std": pytest.approx(0.0005)}


def test_parts_are_typed_with_their_materials(monkeypatch: pytest.MonkeyPatch) -> None:
    asked: dict[str, Any] = {}

    def run(photo: Any, options: Any, folder: Any, **rest: Any) -> None:
        asked.update(options, **rest)
        raise UsageError("enough", "Enough.", "")

    monkeypatch.setattr(run_module, "run", run)
    invoke("measure", "flitch.jpg --part 5,6=oak:11000 --part 7,8 --part 9,10=steel:210000:7850 --material 2=elm:9000")
    assert asked["parts"] == ((5.0, 6.0), (7.0, 8.0), (9.0, 10.0))
    materials = asked["questions"].materials
    assert {number: (m.name, m.elastic_modulus, m.density) for number, m in materials.items()} == {
        1: ("oak", 11000.0, None),
        2: ("elm", 9000.0, None),
        3: ("steel", 210000.0, 7850.0),
    }
    for wrong in ("5", "5,6=oak", "5,6=oak:stiff", "a,b=oak:11000"):
        result = invoke("measure", f"flitch.jpg --part {wrong} --part 7,8")
        assert result.exit_code != 0
        assert failures.exit_code(result.exception) == failures.WRONG_USE or result.exit_code == failures.WRONG_USE


# --- wrong use ---


@pytest.mark.parametrize(
    "typed",
    [
        "--axis 1",
        "--axis a,b",
        "--axis 0,0,0,0",
        "--axis centroid,north",
        "--axis nan,0",
        "--forces 5",
        "--forces N=heavy",
        "--forces Q=5",
        "--forces N=5kNm",
        "--forces N=5,N=6",
        "--forces N=",
        "--loss much",
        "--loss -2",
        "--loss top=-1",
        "--loss front=2",
        "--loss outer=1,top=2",
        "--loss top=1,top=2",
        "--material oak",
        "--material oak:11000",
        "--material 1=oak",
        "--material 1=oak:stiff",
        "--material 1=oak:-5",
        "--material 2=oak:11000",
        "--material 1=oak:11000 --forces Vy=3",
        "--material 1=oak:1 --material 1=elm:2",
        "--loss inf",
        "--axis 1e300,0",
        "--forces Mx=1e300",
        "--material 1=oak:1e300",
        "--forces Mx=inf",
    ],
)
def test_what_cannot_be_is_wrong_use(typed: str) -> None:
    result = invoke("shape", f"{RECTANGLE} {typed} --into out")
    assert isinstance(result.exception, UsageError), result.output
    assert failures.exit_code(result.exception) == failures.WRONG_USE
    assert result.exception.remedy
    assert not Path("out").exists()


def test_a_loss_that_leaves_nothing_is_refused() -> None:
    result = invoke("shape", f"{RECTANGLE} --loss 40")
    assert isinstance(result.exception, OutlineError)
    assert isinstance(result.exception, CutfaceError)
    assert failures.exit_code(result.exception) == failures.REFUSED


@pytest.mark.usefixtures("measured")
@pytest.mark.parametrize("typed", ["--poisson 0.3", "--diaphragms", "--material 2=oak:11000"])
def test_measured_wrong_use(typed: str) -> None:
    assert isinstance(invoke("measure", f"yard.jpg {typed}").exception, UsageError)
    assert list(Path().iterdir()) == []


def test_the_command_itself_ends_in_one_message() -> None:
    code = "from cutface.cli.app import main; main()"
    arguments = ["shape", "rectangle", "depth=100", "width=50", "--loss", "40", "--skip-torsion"]
    ended = subprocess.run(
        [sys.executable, "-c", code, *arguments], capture_output=True, text=True, encoding="utf-8", check=False
    )
    assert ended.returncode == failures.REFUSED
    assert ended.stderr.startswith("Refused: ")
    assert "Traceback" not in ended.stderr
