"""Every refusal through the command: its cause drawn into a small picture, then what a person is left with.

A refusal that nothing provokes fails the last test.
"""

from __future__ import annotations

import json
import re
import shlex
import sys
from collections.abc import Callable
from dataclasses import replace
from functools import cache
from pathlib import Path
from typing import Any

import cutface
import numpy as np
import pytest
from camera_simulator import Print, Scene, Sensor, encoded_file, random_scene, render
from cutface.cli import failures
from cutface.cli.app import main
from cutface.vision.references.board import SHEETS
from PIL import Image
from simulated_scene import Light
from simulated_sensor import encode
from simulated_shapes import channel, timber
from simulated_view import Camera, Floats

PACKAGE = Path(cutface.__file__).parent
DARK, WHITE = 60.0, 230.0


@pytest.fixture(autouse=True)
def _in_a_folder_of_its_own(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.chdir(tmp_path)


# Pictures


def saved(grey: Floats, file: str = "picture.png", *, focal_35mm: int | None = None, **options: Any) -> str:
    """A grey picture with a little noise, written into this folder."""
    noisy = grey + np.random.default_rng(3).normal(0.0, 1.0, grey.shape)
    picture = Image.fromarray(np.clip(noisy, 0, 255).round().astype(np.uint8))
    if focal_35mm is not None:
        exif = Image.Exif()
        exif[41989] = focal_35mm
        options["exif"] = exif
    picture.save(file, **options)
    return file


def photographed(scene: Scene, picture: np.ndarray | None = None, suffix: str = ".jpg") -> str:
    """A simulated scene as its camera writes it; `picture` in place of what it sees."""
    file = f"picture{suffix}"
    Path(file).write_bytes(encoded_file(scene, render(scene) if picture is None else picture, suffix))
    return file


def bar(width: int = 300, depth: int = 120) -> Floats:
    """A dark bar in the middle of white."""
    grey = np.full((400, 600), WHITE)
    top, left = (400 - depth) // 2, (600 - width) // 2
    grey[top : top + depth, left : left + width] = DARK
    return grey


def blank() -> Floats:
    return np.full((400, 600), WHITE)


def two_sheets() -> Scene:
    prints = [Print(SHEETS["A4"], gain_mm=0.1), Print(SHEETS["Letter"], gain_mm=0.1, origin=(240.0, 0.0))]
    places = np.concatenate([p.place(p.paper)[:, :2] for p in prints])
    middle = (places.min(axis=0) + places.max(axis=0)) / 2
    camera = Camera.looking_at(
        (float(middle[0]), float(middle[1])),
        800.0,
        width=1700,
        height=1200,
        focal_px=2500.0,
        centre=(849.5, 599.5),
    )
    return Scene("cards", 1, camera, tuple(prints), (), "plaster", Light(), Sensor())


FLUSH: dict[str, Any] = {
    "megapixels": 1.5,
    "board": "A4",
    "thickness_mm": 0.0,
    "orientation_tag": 1,
    "section": channel(150, 65, 8, 11, 10),
    "look": "rust",
    "tilt_deg": 0.0,
}


@cache
def sheet() -> tuple[Scene, np.ndarray]:
    scene = random_scene(1, "sheet", **FLUSH)
    return scene, render(scene)


def sheet_cut_by_the_frame() -> str:
    scene, picture = sheet()
    return photographed(scene, np.ascontiguousarray(picture[:, : int(0.5 * picture.shape[1])]))


def bent_sheet() -> str:
    return photographed(random_scene(1, "sheet", **FLUSH, bow_mm=12.0))


def slice_that_stands() -> str:
    thick = {**FLUSH, "thickness_mm": 25.0, "look": "steel", "tilt_deg": 15.0, "face_angle_deg": 20.0}
    return photographed(random_scene(1, "sheet", **thick))


def sheet_of_an_unknown_camera() -> str:
    return saved(np.asarray(Image.fromarray(sheet()[1]).convert("L"), float))


def two_faces_on_a_sheet() -> str:
    scene = random_scene(1, "sheet", **{**FLUSH, "section": timber(45, 60, (0, 0), 1.0), "face_angle_deg": 0.0})
    (member,) = scene.members
    pair = [
        replace(member, section=member.section.with_vertices(member.section.vertices + np.array([0.0, up])))
        for up in (-45, 45)
    ]
    return photographed(replace(scene, members=tuple(pair)))


def a_card_that_curls() -> str:
    scene = random_scene(1, "cards", megapixels=2.0, family="timber", cards=4, background="plaster")
    first, *others = scene.prints
    return photographed(replace(scene, prints=(replace(first, bow_mm=12.0), *others)))


def face_cut_by_the_scan() -> str:
    return saved(bar()[:, :400])


def edge_that_fades() -> str:
    grey = bar()
    # One long side runs out over forty pixels.
    grey[260:300, 150:450] = np.linspace(DARK, WHITE, 40)[:, None]
    return saved(grey)


def hole_that_a_spot_fills() -> str:
    y, x = np.mgrid[0:400, 0:600]
    light = np.full((400, 600), 0.3)
    light[100:300, 100:500] = 0.05
    light[160:240, 230:370] = 0.3
    light += 0.3 * np.exp(-0.5 * ((x - 300) ** 2 + (y - 200) ** 2) / 60.0**2)
    return saved(255.0 * encode(light, "sRGB"))


def bar_with_a_thin_fin() -> str:
    from cv2 import GaussianBlur

    grey = bar(200, 80)
    grey[200:203, 60:540] = DARK
    # The lens blurs light, not what the file stores.
    light = np.where(grey < WHITE, 0.05, 0.8).astype(np.float32)
    return saved(255.0 * encode(GaussianBlur(light, (0, 0), 1.5), "sRGB"))


def bar_of(*tones: float, ramp: int = 0) -> str:
    """A bar of several materials side by side, as dark as stated; `ramp` pixels from one to the next."""
    grey = bar()
    ends = np.linspace(150, 450, len(tones) + 1)
    middles = np.concatenate([ends[1:-1] - ramp / 2, ends[1:-1] + ramp / 2]).reshape(2, -1).T.ravel()
    grey[140:260, 150:450] = np.interp(np.arange(150, 450) + 0.5, middles, np.repeat(tones, 2)[1:-1])
    return saved(grey)


def pair(larger: float) -> str:
    """Two scans of a bar, one of them of another bar."""
    saved(bar(round(larger * 300), round(larger * 120)), "second.png", dpi=(300, 300))
    return saved(bar(), dpi=(300, 300))


def two_bars() -> str:
    grey = bar(150, 60)
    grey[300:360, 225:375] = DARK
    saved(grey, "second.png", dpi=(300, 300))
    return saved(bar(), dpi=(300, 300))


# code -> the picture's maker, and what a person types behind it
CASES: dict[str, tuple[Callable[[], str], str]] = {
    "no-reference": (lambda: saved(bar(), focal_35mm=28), ""),
    "no-resolution": (lambda: saved(bar()), ""),
    "default-resolution": (lambda: saved(bar(), dpi=(72, 72)), ""),
    "several-sheets": (lambda: photographed(two_sheets()), ""),
    "reference-incomplete": (sheet_cut_by_the_frame, ""),
    "reference-bent": (bent_sheet, ""),
    "focal-unknown": (sheet_of_an_unknown_camera, "--face-height 12"),
    "face-height-unstated": (slice_that_stands, ""),
    "cards-disagree": (a_card_that_curls, ""),
    "no-face": (lambda: photographed(*sheet()), "--within 5,5 --within 30,5 --within 30,30"),
    "seed-off-face": (lambda: saved(bar()), "--resolution 300 --seed 20,20"),
    "several-faces": (two_faces_on_a_sheet, ""),
    "face-cut": (face_cut_by_the_scan, "--resolution 300"),
    "low-contrast": (lambda: saved(np.where(bar() < WHITE, WHITE - 1, WHITE)), "--resolution 300"),
    "outline-lost": (edge_that_fades, "--resolution 300"),
    "glare": (hole_that_a_spot_fills, "--resolution 300"),
    "calliper-contradicts": (lambda: saved(bar(), dpi=(300, 300)), '--calliper "length=27 u=0.05"'),
    "excluded-too-much": (lambda: saved(bar(), dpi=(300, 300)), '--exclude "290,100 310,100 310,300 290,300"'),
    "excluded-end": (lambda: saved(bar(), dpi=(300, 300)), '--exclude "400,120 480,120 480,280 400,280"'),
    "photos-disagree": (lambda: pair(1.2), "second.png"),
    "several-members": (two_bars, "second.png"),
    "wall-too-thin": (bar_with_a_thin_fin, "--resolution 300"),
    "part-off-face": (lambda: bar_of(DARK, 130), "--resolution 300 --part 151,200 --part 400,200"),
    "parts-alike": (lambda: bar_of(DARK, 130), "--resolution 300 --part 200,200 --part 250,220"),
    "part-not-picked": (lambda: bar_of(DARK, 130, DARK), "--resolution 300 --part 200,200 --part 300,200"),
    "joint-lost": (lambda: bar_of(DARK, 130, ramp=80), "--resolution 300 --part 170,200 --part 430,200"),
}


def ended(monkeypatch: pytest.MonkeyPatch, *arguments: str) -> int:
    """The exit code of the command itself."""
    monkeypatch.setattr(sys, "argv", ["cutface", *arguments])
    with pytest.raises(SystemExit) as end:
        main()
    assert isinstance(end.value.code, int)
    return end.value.code


@pytest.mark.parametrize("code", CASES)
def test_a_refusal_is_one_message_one_document_and_nothing_else(
    code: str, monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str]
) -> None:
    maker, typed = CASES[code]
    picture = maker()
    status = ended(monkeypatch, "measure", picture, *shlex.split(typed), "--into", "out")
    said = capsys.readouterr()
    assert (status, said.out) == (failures.REFUSED, "\nWritten to out: result.json\n"), said.err
    assert sorted(file.name for file in Path("out").iterdir()) == ["result.json"]
    assert {file.name for file in Path().iterdir()} - {"second.png"} == {"out", picture}
    document = json.loads(Path("out/result.json").read_text("utf-8"))
    assert document["status"] == "refused"
    assert document["refusal"]["code"] == code
    message, remedy = document["refusal"]["message"], document["refusal"]["remedy"]
    assert message.endswith(".")
    assert remedy.endswith(".")
    assert said.err.splitlines()[-2:] == [f"Refused: {message}", f"What to do: {remedy}"]
    assert "Traceback" not in said.err
    assert document["section"] is None
    assert document["properties"] == document["budget"] == {}


def refusals_of(*patterns: str) -> set[str]:
    """Codes of the refusals that modules raise."""
    files = [file for pattern in patterns for file in PACKAGE.glob(pattern)]
    return {code for file in files for code in re.findall(r'Refusal\(\s*"([a-z0-9-]+)"', file.read_text("utf-8"))}


# What `measure` runs whether or not a person states a reference of their own.
ALWAYS = (
    "vision/*.py",
    "props/*.py",
    *(f"vision/references/{kind}.py" for kind in ("sheet", "cards", "printed", "coded", "scan")),
)
# Raised by commands of their own, or where a person states a reference; tested beside what raises them.
BESIDE = {"camera-resolution"} | refusals_of("vision/calibration*.py", "vision/posed_plane.py", "vision/camera*.py")


def test_every_refusal_is_provoked() -> None:
    assert CASES.keys() ^ (refusals_of(*ALWAYS) - BESIDE) == set()
    tests = "\n".join(file.read_text("utf-8") for file in Path(__file__).parents[1].rglob("test_*.py"))
    assert {code for code in BESIDE if f'"{code}"' not in tests} == set()
