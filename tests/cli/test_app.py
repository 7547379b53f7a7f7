import dataclasses
import json
import math
import re
import subprocess
import sys
from collections.abc import Sequence
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from cutface import __version__
from cutface.cli import app as app_module
from cutface.cli import failures
from cutface.cli import run as run_module
from cutface.cli.app import app
from cutface.props.errors import FileError, OutlineError, Refusal, UsageError
from cutface.props.uncertainty import Mode, OutlineUncertainty
from hand_made_measurement import one_member, two_members
from PIL import Image
from typer.testing import CliRunner

PHOTO = "yard 7.jpg"


def command(*arguments: str, cwd: Path) -> subprocess.CompletedProcess[str]:
    """The installed command itself, as a person or a script starts it."""
    return subprocess.run(
        [sys.executable, "-c", "from cutface.cli.app import main; main()", *arguments],
        cwd=cwd,
        capture_output=True,
        text=True,
        encoding="utf-8",
        timeout=120,
        check=False,
    )


@pytest.fixture
def asked(monkeypatch: pytest.MonkeyPatch, tmp_path: Path) -> dict[str, Any]:
    """Stands in for opening and measuring; collects what the command asked for, answers `asked["answer"]`."""
    asked: dict[str, Any] = {"answer": one_member()}

    def measure(photo: Any, **options: Any) -> Any:
        asked["options"] = options
        if isinstance(asked["answer"], Exception):
            raise asked["answer"]
        return asked["answer"]

    monkeypatch.setattr(run_module, "measure", measure)
    monkeypatch.setattr(run_module, "load_photo", lambda path: one_member().photo)
    monkeypatch.chdir(tmp_path)
    return asked


def invoke(*arguments: str) -> Any:
    return CliRunner().invoke(app, ["measure", PHOTO, *arguments])


def files(folder: Path) -> list[str]:
    return sorted(file.name for file in folder.iterdir())


def test_start_loads_nothing_heavy(tmp_path: Path) -> None:
    heavy = ["cv2", "scipy", "skimage", "shapely", "skfem", "netgen", "PIL", "reportlab", "numpy"]
    code = f"import sys, cutface.cli.app; print([m for m in {heavy} if m in sys.modules])"
    found = subprocess.run([sys.executable, "-c", code], cwd=tmp_path, capture_output=True, text=True, check=True)
    assert found.stdout.strip() == "[]"


@pytest.mark.parametrize(
    ("arguments", "words"),
    [
        (["--help"], ["measure", "print"]),
        (["print", "--help"], ["sheet", "cards"]),
        (["print", "sheet", "--help"], ["--paper A4|A3|Letter|Tabloid", "--format pdf|svg|png", "--into DIR"]),
        (["measure", "--help"], ["--check W,H", "--face-height MM", "--seed X,Y", "--resolution DPI", "--json"]),
        (["--version"], [__version__]),
    ],
)
def test_help(arguments: list[str], words: Sequence[str]) -> None:
    result = CliRunner().invoke(app, arguments)
    assert result.exit_code == 0
    assert [word for word in words if word not in re.sub(r"\s+", " ", result.stdout)] == []


def test_a_measurement_is_shown_and_written(asked: dict[str, Any], tmp_path: Path) -> None:
    result = invoke()
    assert result.exit_code == 0
    assert "Second moment of area about x" in result.stdout
    assert "Written to yard 7-section" in result.stdout
    assert files(tmp_path / "yard 7-section") == [
        "outline.jpg",
        "result.json",
        "section.geojson",
        "section.svg",
        "section.wkt",
    ]
    document = json.loads((tmp_path / "yard 7-section" / "result.json").read_text("utf-8"))
    assert document["status"] == "measured"
    assert asked["options"] == {}


def test_several_members_have_numbered_files(asked: dict[str, Any], tmp_path: Path) -> None:
    asked["answer"] = two_members()
    assert invoke("--into", "out").exit_code == 0
    assert files(tmp_path / "out") == sorted(
        ["outline.jpg"]
        + [f"{stem}-{n}.{kind}" for n in (1, 2) for stem, kind in (("result", "json"), ("section", "geojson"))]
        + [f"section-{n}.{kind}" for n in (1, 2) for kind in ("svg", "wkt")]
    )
    assert json.loads((tmp_path / "out" / "result-2.json").read_text("utf-8"))["member"] == {"number": 2, "of": 2}


def test_options_reach_the_measurement_and_the_document(asked: dict[str, Any], tmp_path: Path) -> None:
    typed = (
        "--into out --check 140.2x139.9 --check-u 0.05 --face-height 12 --face-height-u 0.2 --focal-35mm 26 "
        "--resolution 600 --seed 10,20 --seed 30,40.5 --density 7850"
    )
    assert invoke(*typed.split()).exit_code == 0
    assert asked["options"] == {
        "check_lengths": (140.2, 139.9),
        "check_length_std": 0.05,
        "face_height": 12.0,
        "face_height_std": 0.2,
        "focal_length_35mm": 26.0,
        "resolution_dpi": (600.0, 600.0),
        "seeds": ((10.0, 20.0), (30.0, 40.5)),
        "density": 7850.0,
    }
    assert json.loads((tmp_path / "out" / "result.json").read_text("utf-8"))["options"]["check_lengths"] == [
        140.2,
        139.9,
    ]
    invoke("--into", "other", "--resolution", "600,1200")
    assert asked["options"] == {"resolution_dpi": (600.0, 1200.0)}


@pytest.mark.parametrize(
    "typed",
    [
        "--check 140",
        "--check a,b",
        "--check nan,1",
        "--check-u 0.1",
        "--check 140,140 --check-u 0",
        "--face-height-u 0.1",
        "--face-height tall",
        "--density -1",
        "--density inf",
        "--seed 3",
        "--units yd",
        "--nonsense",
    ],
)
def test_options_that_cannot_be_are_wrong_use(asked: dict[str, Any], tmp_path: Path, typed: str) -> None:
    result = invoke(*typed.split())
    code = failures.exit_code(result.exception) if isinstance(result.exception, UsageError) else result.exit_code
    assert code == 2
    assert "options" not in asked
    assert files(tmp_path) == []


def test_sizes_by_calliper_adjust_the_outline(asked: dict[str, Any], tmp_path: Path) -> None:
    answer = one_member()
    (member,) = answer.members
    about = member.section.vertices - member.section.vertices.mean(axis=0)
    scale = OutlineUncertainty(tuple(Mode("print scale", 0.005 * about * axis) for axis in np.eye(2)))
    asked["answer"] = dataclasses.replace(answer, members=(dataclasses.replace(member, uncertainty=scale),))
    result = invoke("--into", "out", "--calliper", "1:length=90.2 u=0.02", "--calliper", "BREADTH=2.36in u=0.001")
    assert result.exit_code == 0
    document = json.loads((tmp_path / "out" / "result.json").read_text("utf-8"))
    assert [s["size"] for s in document["calliper"]["sizes"]] == ["length", "breadth"]
    assert document["calliper"]["sizes"][1]["value"] == pytest.approx(2.36 * 25.4)
    assert document["calliper"]["degrees_of_freedom"] == 2
    assert document["options"]["calliper"][0] == {
        "value": 90.2,
        "std": 0.02,
        "size": "length",
        "points": None,
        "member": 1,
    }
    adjusted = document["calliper"]["sizes"][0]["adjusted"]["value"]
    assert 90.15 < adjusted < 90.2
    assert f"{adjusted:.2f} ± 0.02" in result.stdout
    assert "calliper" in {line["source"] for line in document["budget"]["area"]}
    by_points = invoke("--json", "--calliper", "170.2,719.9 -20,719=60")
    assert isinstance(by_points.exception, UsageError)


def test_several_photos_of_a_face_are_combined(asked: dict[str, Any], tmp_path: Path) -> None:
    answer = one_member()
    (member,) = answer.members
    about = member.section.vertices - member.section.vertices.mean(axis=0)
    scale = OutlineUncertainty(tuple(Mode("print scale", 0.005 * about * axis) for axis in np.eye(2)))
    asked["answer"] = dataclasses.replace(answer, members=(dataclasses.replace(member, uncertainty=scale),))
    result = CliRunner().invoke(app, ["measure", PHOTO, "yard 8.jpg", "yard 9.jpg", "--calliper", "length=90.1"])
    assert result.exit_code == 0, result.exception
    assert "Combined from 3 photos, weights 0.33, 0.33, 0.33." in result.stdout
    assert files(tmp_path / "yard 7-section") == [
        *(f"outline-{n}.jpg" for n in (1, 2, 3)),
        "result.json",
        "section.geojson",
        "section.svg",
        "section.wkt",
    ]
    document = json.loads((tmp_path / "yard 7-section" / "result.json").read_text("utf-8"))
    assert len(document["photos"]) == 3
    assert document["photos"][2]["properties"]["area"]["value"] == member.quantities["area"].value
    assert document["combination"]["scatter"]["area"] == {"std": 0.0, "degrees_of_freedom": 2}
    assert document["calliper"]["sizes"][0]["size"] == "length"
    wrong = CliRunner().invoke(app, ["measure", PHOTO, "yard 8.jpg", "--seed", "3,4", "--into", "out"])
    assert isinstance(wrong.exception, UsageError)
    assert wrong.exception.code == "place-in-several"


def test_a_refusal_among_several_photos_names_its_photo(asked: dict[str, Any], tmp_path: Path) -> None:
    asked["answer"] = Refusal("no-reference", "No sheet.", "Lay one.")
    result = CliRunner().invoke(app, ["measure", PHOTO, "yard 8.jpg", "--into", "out"])
    assert str(result.exception).startswith(f"In {PHOTO}: No sheet.")
    assert files(tmp_path / "out") == ["result.json"]


def test_an_oblique_cut_is_projected_before_sizes_are_compared(asked: dict[str, Any], tmp_path: Path) -> None:
    answer = one_member()
    (member,) = answer.members
    about = member.section.vertices - member.section.vertices.mean(axis=0)
    scale = OutlineUncertainty(tuple(Mode("print scale", 0.005 * about * axis) for axis in np.eye(2)))
    asked["answer"] = dataclasses.replace(answer, members=(dataclasses.replace(member, uncertainty=scale),))
    true = 90.0 * math.cos(math.radians(10))
    wall = " ".join(f"{x:.1f},{y:.1f}" for x, y in answer.to_pixels(np.array([[0.0, 60.0], [8.0, 60.0]])))
    result = invoke(
        *["--into", "out", "--cut", "angle=10 direction=up u=0.2"],
        *["--calliper", f"length={true:.2f} u=0.1", "--calliper", f"{wall}=8"],
    )
    assert result.exit_code == 0, result.exception
    document = json.loads((tmp_path / "out" / "result.json").read_text("utf-8"))
    assert document["cut"]["angle_deg"] == pytest.approx(10.0)
    assert document["cut"]["angle_std_deg"] == pytest.approx(0.2)
    length, thickness = document["calliper"]["sizes"]
    assert length["picture"]["value"] == pytest.approx(true, rel=0.01)
    # The wall lies across the fall, and is still the one that the pixels point at.
    assert thickness["picture"]["value"] == pytest.approx(8.0, abs=0.02)
    assert "The cut is 10.0 ± 0.2° off square" in result.stdout
    assert "cut not square" in {line["source"] for line in document["budget"]["area"]}
    depths = invoke("--json", "--cut", "depths=2,17.9 direction=90 u=0.3")
    assert json.loads(depths.stdout)["cut"]["angle_deg"] == pytest.approx(math.degrees(math.asin(15.9 / 90)), rel=1e-3)


@pytest.mark.parametrize(
    "typed",
    [
        "3",
        "angle=3",
        "direction=up",
        "angle=3 depths=1,2 direction=up",
        "depths=1 direction=up",
        "angle=x direction=up",
    ],
)
def test_cuts_that_say_nothing_are_wrong_use(asked: dict[str, Any], typed: str) -> None:
    assert isinstance(invoke("--cut", typed).exception, UsageError)
    assert "options" not in asked


@pytest.mark.parametrize("typed", ["depth", "depth=", "depth=12 v=3", "height=12", "1,2=3", "1,2 3=4", "x:depth=3"])
def test_sizes_that_say_nothing_are_wrong_use(asked: dict[str, Any], typed: str) -> None:
    assert isinstance(invoke("--calliper", typed).exception, UsageError)
    assert "options" not in asked


def test_json_is_one_line_a_member_and_nothing_else(asked: dict[str, Any], tmp_path: Path) -> None:
    result = invoke("--json")
    assert json.loads(result.stdout)["status"] == "measured"
    assert files(tmp_path) == []
    asked["answer"] = two_members()
    result = invoke("--json", "--into", "out")
    assert [json.loads(line)["member"]["number"] for line in result.stdout.splitlines()] == [1, 2]
    assert len(files(tmp_path / "out")) == 9


def test_quiet_says_nothing(asked: dict[str, Any], tmp_path: Path) -> None:
    result = invoke("--quiet")
    assert (result.exit_code, result.output) == (0, "")
    assert files(tmp_path) == ["yard 7-section"]


def test_units_choose_the_symbols(asked: dict[str, Any]) -> None:
    assert "I_y" in invoke("--replace").stdout
    american = invoke("--replace", "--units", "in").stdout
    assert "in⁴" in american
    assert "I_x" in american
    assert "I_z" in invoke("--replace", "--units", "in", "--symbols", "en").stdout


def test_earlier_results_stay_unless_replaced(asked: dict[str, Any], tmp_path: Path) -> None:
    asked["answer"] = two_members()
    invoke("--into", "out")
    del asked["options"]
    again = invoke("--into", "out")
    assert isinstance(again.exception, UsageError)
    # Found before any time is spent on measuring.
    assert "options" not in asked
    asked["answer"] = one_member()
    assert invoke("--into", "out", "--replace").exit_code == 0
    assert "result-1.json" not in files(tmp_path / "out")


@pytest.mark.parametrize("refusal", [Refusal("no-reference", "No sheet.", "Lay one."), OutlineError("x", "No.", "Do.")])
def test_a_refusal_is_written_too(asked: dict[str, Any], tmp_path: Path, refusal: Exception) -> None:
    asked["answer"] = refusal
    result = invoke("--into", "out")
    assert result.exception is refusal
    assert failures.exit_code(refusal) == 3
    assert files(tmp_path / "out") == ["result.json"]
    assert json.loads((tmp_path / "out" / "result.json").read_text("utf-8"))["status"] == "refused"
    assert json.loads(invoke("--json").stdout)["refusal"]["code"] == refusal.code  # type: ignore[attr-defined]


def test_a_failure_to_write_keeps_nothing_half_done(asked: dict[str, Any], tmp_path: Path, monkeypatch: Any) -> None:
    def full_disc(*_: Any) -> None:
        raise OSError(28, "No space left on device")

    monkeypatch.setattr(run_module, "write_picture", full_disc)
    result = invoke("--into", "out")
    assert isinstance(result.exception, FileError)
    assert "No space left on device" in failures.explain(result.exception)
    assert files(tmp_path) == []


@pytest.mark.parametrize(
    ("error", "code", "start"),
    [
        (UsageError("a", "Bad option.", "Use another."), 2, "Wrong use: Bad option.\nWhat to do: Use another."),
        (Refusal("a", "Too dark.", "Add light."), 3, "Refused: Too dark.\nWhat to do: Add light."),
        (FileError("a", "Broken.", "Copy it."), 4, "File problem: Broken.\nWhat to do: Copy it."),
        (MemoryError(), 1, "There is not enough memory"),
        (ImportError("libGL.so.1: cannot open shared object file", name="cv2"), 1, "The picture library cannot start"),
        (ModuleNotFoundError("No module named 'cv2'", name="cv2"), 1, "A part that cutface needs is missing"),
    ],
)
def test_every_error_is_one_message_and_a_code(error: Exception, code: int, start: str) -> None:
    assert failures.exit_code(error) == code
    assert failures.explain(error).startswith(start)
    assert "Traceback" not in failures.explain(error)


def test_a_fault_apologises_and_keeps_the_details_in_a_file(
    asked: dict[str, Any], tmp_path: Path, monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str]
) -> None:
    asked["answer"] = KeyError("third flange")
    monkeypatch.setattr("tempfile.tempdir", str(tmp_path))
    monkeypatch.setattr(sys, "argv", ["cutface", "measure", PHOTO])
    with pytest.raises(SystemExit) as end:
        app_module.main()
    assert end.value.code == 1
    said = capsys.readouterr().err
    assert said.startswith("Sorry, cutface failed through a fault of its own (KeyError).")
    assert "Traceback" not in said
    (details,) = tmp_path.glob("cutface-fault-*.txt")
    assert str(details) in said
    assert "third flange" in details.read_text("utf-8")


def test_exit_codes_of_the_command_itself(tmp_path: Path) -> None:
    rng = np.random.default_rng(7)
    Image.fromarray(rng.integers(90, 160, (240, 320, 3), dtype=np.uint8)).save(tmp_path / "no reference.png")
    (tmp_path / "text.jpg").write_text("not a picture")
    for arguments, code, words in [
        (["measure", "no reference.png"], 3, "Refused: "),
        (["measure", "text.jpg"], 4, "File problem: "),
        (["measure", "nowhere.jpg"], 4, "File problem: "),
        (["measure", "nowhere.jpg", "--check", "140"], 2, "--check"),
        (["measure", "nowhere.jpg", "--check-u", "1"], 2, "Wrong use: "),
        (["print", "cards", "--paper", "A3"], 2, "Wrong use: "),
        (["survey"], 2, "survey"),
    ]:
        ended = command(*arguments, cwd=tmp_path)
        assert (arguments, ended.returncode) == (arguments, code)
        assert words in ended.stderr
        assert "Traceback" not in ended.stderr + ended.stdout
        assert ended.stdout == "" or code == 3
    assert files(tmp_path) == ["no reference-section", "no reference.png", "text.jpg"]


def test_a_scan_is_measured_by_the_command_itself(tmp_path: Path) -> None:
    """A dark bar of 60 x 20 mm on white, 300 dpi, each pixel the mean of what it sees."""
    dots = 300 / 25.4

    def covered(pixels: int, start: float, length: float) -> np.ndarray:
        """Share of each pixel that the bar covers, along one axis."""
        left = np.arange(pixels)
        return np.clip(np.minimum(left + 1, start + length) - np.maximum(left, start), 0, 1)

    share = np.outer(covered(700, 200, 20 * dots), covered(1100, 150, 60 * dots))
    light = 0.85 * (1 - share) + 0.05 * share
    stored = np.where(light <= 0.0031308, 12.92 * light, 1.055 * light ** (1 / 2.4) - 0.055)
    noise = np.random.default_rng(1).normal(0, 1.0, stored.shape)
    picture = np.clip(255 * stored + noise, 0, 255).round().astype(np.uint8)
    Image.fromarray(picture).save(tmp_path / "bar.png")
    ended = command("measure", "bar.png", "--resolution", "300", "--into", "out", cwd=tmp_path)
    assert (ended.returncode, ended.stderr) == (0, "")
    assert "Area" in ended.stdout
    result = json.loads((tmp_path / "out" / "result.json").read_text("utf-8"))
    area = result["properties"]["area"]
    assert area["interval95"][0] < 1200.0 < area["interval95"][1]
    assert result["software"]["cutface"] == __version__
    first = (tmp_path / "out" / "result.json").read_bytes()
    command("measure", "bar.png", "--resolution", "300", "--into", "out", "--replace", cwd=tmp_path)
    assert (tmp_path / "out" / "result.json").read_bytes() == first


def test_print_writes_the_asked_for_formats(tmp_path: Path) -> None:
    into = tmp_path / "to print"
    result = CliRunner().invoke(app, ["print", "sheet", "--paper", "a3", "--format", "svg", "--into", str(into)])
    assert result.exit_code == 0
    assert "Print at 100 %" in result.stdout
    (file,) = into.iterdir()
    assert file.suffix == ".svg"
    assert str(file) in result.stdout
    again = CliRunner().invoke(app, ["print", "sheet", "--paper", "A3", "--format", "svg", "--into", str(into)])
    assert isinstance(again.exception, UsageError)


def test_regions_left_out_reach_the_measurement(asked: dict[str, Any]) -> None:
    assert invoke("--exclude", "10,20 30,20 30,40", "--exclude", "1,1 2,1 2,2 1,2").exit_code == 0
    assert asked["options"]["excluded"][0] == ((10.0, 20.0), (30.0, 20.0), (30.0, 40.0))
    assert len(asked["options"]["excluded"][1]) == 4
    assert isinstance(invoke("--exclude", "10,20 30,20", "--into", "other").exception, UsageError)
