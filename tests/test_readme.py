"""What README.md and DEVELOPERS.md promise: commands, options, files, figures and examples are those of the program."""

from __future__ import annotations

import json
import math
import re
import shlex
import subprocess
import sys
from collections.abc import Iterator
from pathlib import Path
from typing import Any

import cutface
import pytest
import typer
from cutface.cli import failures
from cutface.cli.app import app
from cutface.cli.run import FILE_NAMES
from cutface.props import calliper, oblique
from cutface.props.properties import PROPERTIES
from cutface.vision import camera, parted
from cutface.vision import measure as measuring
from cutface.vision.references import printed, scan

ROOT = Path(__file__).resolve().parents[1]
PACKAGE = Path(cutface.__file__).parent


def document(name: str) -> str:
    file = ROOT / name
    if not file.exists():
        pytest.skip(f"{name} is not beside the tests")
    return file.read_text(encoding="utf-8")


def blocks(language: str) -> list[str]:
    return re.findall(rf"^```{language}\n(.*?)^```$", document("README.md"), re.MULTILINE | re.DOTALL)


def commands() -> list[str]:
    return [line for block in blocks("sh") for line in block.splitlines()]


def section(heading: str) -> str:
    """What stands under a heading, to the next heading of its level or above."""
    level, text = re.split(rf"^(#+) {re.escape(heading)}\n", document("README.md"), flags=re.MULTILINE)[1:]
    return re.split(rf"^#{{1,{len(level)}}} ", text, maxsplit=1, flags=re.MULTILINE)[0]


def rows(text: str) -> list[list[str]]:
    """Cells of every table row in a text, heads left out."""
    lines = [[cell.strip() for cell in line.strip("|").split("|")] for line in text.splitlines() if line[:1] == "|"]
    rules = [n for n, cells in enumerate(lines) if set("".join(cells)) <= set("- ")]
    return [cells for n, cells in enumerate(lines) if n not in rules and n + 1 not in rules]


def command_tree(command: Any = None, name: str = "cutface") -> Iterator[tuple[str, Any]]:
    """Every command of the program with its full name."""
    command = command or typer.main.get_command(app)
    yield name, command
    for sub, found in getattr(command, "commands", {}).items():
        yield from command_tree(found, f"{name} {sub}")


def options(name: str) -> set[str]:
    """The options of a command, as its help lists them."""
    command = dict(command_tree())[name]
    return {option for p in command.params for option in p.opts if option.startswith("--")} - {"--help"}


def start(line: str, cwd: Path) -> subprocess.CompletedProcess[str]:
    """Run a `cutface` line of the README on the pictures beside it, as a person would."""
    arguments = [str(ROOT / word) if word.startswith("sample_images/") else word for word in shlex.split(line)[1:]]
    code = "from cutface.cli.app import main; main()"
    return subprocess.run(
        [sys.executable, "-c", code, *arguments],
        cwd=cwd,
        capture_output=True,
        text=True,
        encoding="utf-8",
        timeout=120,
        check=False,
    )


def sample_command() -> str:
    return next(line for line in commands() if "joist_end_cards" in line and line.startswith("cutface"))


@pytest.fixture(scope="module")
def sample_result(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """The folder that the README's own sample command writes."""
    folder = tmp_path_factory.mktemp("readme")
    words = shlex.split(sample_command())
    ended = start(sample_command(), folder)
    assert ended.returncode == failures.MEASURED, ended.stderr
    return folder / words[words.index("--into") + 1]


def test_set_up_is_two_lines_to_copy() -> None:
    first, second = (line for line in commands() if "-m venv" in line)
    assert re.fullmatch(r"python3 -m venv \.venv && \.venv/bin/pip install \. && \.venv/bin/cutface measure .*", first)
    assert re.fullmatch(r'python3 -m venv \.venv && \.venv/bin/pip install "\.\[test\]" && \.venv/bin/pytest', second)
    photo = shlex.split(first.split("&&")[-1])[2]
    assert (ROOT / photo).is_file()


def test_every_command_is_understood() -> None:
    tree = dict(command_tree())
    lines = [re.sub(r"^.*\.venv/bin/cutface", "cutface", line) for line in commands() if "cutface" in line]
    assert len(lines) > 5
    for line in lines:
        words = shlex.split(line)
        name = max((n for n in tree if words[: len(n.split())] == n.split()), key=len)
        # Parses and checks every value, runs nothing.
        tree[name].make_context(name, words[len(name.split()) :], resilient_parsing=False)


def test_option_tables_are_those_of_the_help() -> None:
    tables: dict[str, set[str]] = {}
    for headings, text in re.findall(r"^### ([^\n]*)\n(.*?)(?=^### |\Z)", section("Options"), re.MULTILINE | re.DOTALL):
        found = set(re.findall(r"^\| `(--[a-z0-9-]+)", text, re.MULTILINE))
        named = [f"cutface {name}" for name in re.findall(r"`([a-z ]+)`", headings)]
        assert found - set().union(*(options(name) for name in named)) == set(), headings
        for name in named:
            tables.setdefault(name, set()).update(found)
    ends = {name for name, command in command_tree() if not getattr(command, "commands", {})}
    assert tables.keys() == ends
    assert {name: options(name) - tables[name] for name in ends} == {name: set() for name in ends}


def test_every_option_named_exists() -> None:
    known = {option for name, _ in command_tree() for option in options(name)} | {"--help"}
    named = set(re.findall(r"(?<![\w-])--[a-z][a-z0-9-]*", document("README.md")))
    assert named - known == set()


def test_sample_command_writes_the_files_listed(sample_result: Path) -> None:
    listed = {name.strip("`") for name, _ in rows(section("6. The output folder"))}
    assert listed == {file.name for file in sample_result.iterdir()}
    assert [name for name in listed if not FILE_NAMES.fullmatch(name)] == []


def test_figures_shown_are_those_measured(sample_result: Path) -> None:
    """Within half of their uncertainty: another version of a library may move the last digit, not more."""
    measured = json.loads((sample_result / "result.json").read_text("utf-8"))["properties"]
    names = {info.label: name for name, info in PROPERTIES.items()}
    shown = re.findall(
        r"^(\S.*?\S) {2,}\S+ +([\d.]+) +([\d.]+) .*?(?:10(\S))? ?mm\S*$", blocks("text")[0], re.MULTILINE
    )
    assert len(shown) >= 5
    for label, value, std, power in shown:
        quantity = measured[names[label]]
        factor = 10.0 ** "⁰¹²³⁴⁵⁶⁷⁸⁹".index(power) if power else 1.0
        assert abs(float(value) * factor - quantity["value"]) < 0.5 * quantity["std"], label
        assert float(std) * factor == pytest.approx(quantity["std"], rel=0.15), label


def test_refusal_shown_is_refused(tmp_path: Path) -> None:
    line = next(line for line in commands() if "sheet_out_of_frame" in line)
    assert start(line, tmp_path).returncode == failures.REFUSED


def test_exit_codes() -> None:
    listed = {int(cells[0]) for cells in rows(section("7. When it refuses")) if cells[0].isdigit()}
    codes = {failures.MEASURED, failures.FAULT, failures.WRONG_USE, failures.REFUSED, failures.UNREADABLE}
    assert listed == codes


def test_refusals_listed_are_raised_somewhere() -> None:
    source = "\n".join(file.read_text("utf-8") for file in PACKAGE.rglob("*.py") if "tests" not in file.parts)
    raised = set(re.findall(r'Refusal\(\s*"([a-z-]+)"', source))
    first_cells = [cells[0] for cells in rows(section("7. When it refuses"))]
    listed = {code for cell in first_cells for code in re.findall(r"`([a-z-]+)`", cell)}
    assert len(listed) > 10
    assert listed - raised == set()


@pytest.mark.parametrize(
    ("cause", "figures"),
    [
        ("print scale, not checked", [100 * printed.UNCHECKED_PRINT_SCALE]),
        ("check length", [printed.CALLIPER_STD_MM]),
        ("height of the face over the reference", [printed.OFFSET_STD_MM]),
        ("flatness of a sheet", [printed.FLATNESS_STD_MM]),
        ("face not parallel to the reference", [math.degrees(printed.PARALLEL_STD_RAD)]),
        ("focal length, from the file or stated", [100 * printed.EXIF_FOCAL_STD]),
        ("focal length, of a calibrated camera", [100 * camera.REFOCUS_STD]),
        ("scanner scale", [100 * scan.SCALE_STD]),
        ("scanner travel", [100 * scan.WANDER_STD]),
        ("scanner skew", [math.degrees(scan.SKEW_STD_RAD)]),
        ("edge location, common to the outline", [measuring.EDGE_BIAS_PX, measuring.EDGE_BIAS_TONE]),
        ("edge location, common to a side", [measuring.GROUP_BIAS_PX]),
        ("one side clipped to white", [measuring.CLIPPED_BIAS]),
        (
            "cut off square, where it is stated",
            [math.degrees(oblique.ANGLE_STD), oblique.DEPTH_STD, math.degrees(oblique.DIRECTION_STD)],
        ),
        ("size by calliper", [calliper.CALLIPER_STD]),
        ("joint between two materials", [parted.JOINT_BIAS_PX, parted.JOINT_BIAS_BLUR]),
        ("outline that had to be bridged", [100 * measuring.BRIDGE_SAG]),
    ],
)
def test_stated_uncertainties_are_those_used(cause: str, figures: list[float]) -> None:
    table = {cells[0]: cells[1] for cells in rows(section("What the figures rest on"))}
    assert [float(text) for text in re.findall(r"\d+(?:\.\d+)?", table[cause])] == pytest.approx(figures)


@pytest.mark.parametrize("number", range(4))
def test_python_examples_run(number: int, monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str]) -> None:
    """Each by itself; what a comment behind `print` promises must be printed."""
    examples = blocks("python")
    assert len(examples) == 4
    monkeypatch.chdir(ROOT)
    exec(compile(examples[number], f"README.md, example {number + 1}", "exec"), {})
    lines = capsys.readouterr().out.splitlines()
    promised = re.findall(r"^\s*print\(.*\)  # (.+)$", examples[number], re.MULTILINE)
    assert [text for text in promised if text not in lines] == []
    assert len(lines) == len(re.findall(r"^\s*print\(", examples[number], re.MULTILINE))


def test_files_that_are_linked_exist() -> None:
    text = document("README.md")
    linked = re.findall(r"\]\((?!https?:)([^)#]+)\)", text) + re.findall(
        r"`([\w./]+\.md|LICENSE|sample_images/)`", text
    )
    assert [name for name in linked if not (ROOT / name).exists()] == []
    pictures = re.findall(r"!\[[^\]]+\]\(([^)]+)\)", text)
    assert pictures
    assert [name for name in pictures if (ROOT / name).stat().st_size > 400_000] == []


def test_the_map_shows_every_module_and_nothing_else() -> None:
    found = re.search(r"^## The tree\n(.*?)^## ", document("DEVELOPERS.md"), re.MULTILINE | re.DOTALL)
    assert found is not None
    shown, folder = set(), ""
    for line in found[1].splitlines():
        if entry := re.match(r"(\s*)([\w.]+/)(?:\s|$)", line):
            folder = entry[2] if not entry[1] else folder.split("/")[0] + "/" + entry[2]
        elif entry := re.match(r"\s+(\w+\.py)\b", line):
            shown.add(folder + entry[1])
    modules = {
        file.relative_to(ROOT).as_posix()
        for top in ("vision", "props", "cli")
        for file in (ROOT / top).rglob("*.py")
        if file.name != "__init__.py"
    }
    assert sorted(modules - shown) == [], "each of these wants a line in DEVELOPERS.md, 'The tree'"
    assert sorted(name for name in shown if not (ROOT / name).is_file()) == []
