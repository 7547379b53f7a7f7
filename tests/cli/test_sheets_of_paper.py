"""Real photos of sheets of paper, measured as a person would: by the print on them, the camera calibrated first.

US Letter, 215.9 x 279.4 mm (ANSI/ASME Y14.1 size A, from memory), with a printed chessboard or squares on it.
"""

from __future__ import annotations

import json
from pathlib import Path
from typing import Any

import pytest
from cutface.cli.app import app
from cutface.props.errors import Refusal
from photo_sets import photo_set
from typer.testing import CliRunner

LETTER_MM2 = 215.9 * 279.4
SQUARES = "square-grid columns=3 rows=4 pitch=60 side=30"
BOARD = "chessboard columns=6 rows=4 pitch=30"


def run(*words: object) -> Any:
    return CliRunner().invoke(app, [str(word) for word in words])


def area_of(photo: Path, reference: str, *more: object) -> tuple[float, float, float]:
    """Relative error of the gross area, and of the interval's ends; the squares may count as holes or not."""
    ended = run("measure", photo, "--reference", f"{reference} role=on-face", "--json", *more)
    assert ended.exit_code == 0, (photo.name, ended.output, ended.exception)
    area = json.loads(ended.stdout)["properties"]["area"]
    return tuple(float(value) / LETTER_MM2 - 1 for value in (area["value"], *area["interval95"]))


@pytest.fixture(scope="module")
def cameras(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """Where the cameras of both sets are kept, calibrated from all their photos."""
    folder = tmp_path_factory.mktemp("cameras")
    for name, begin, board in (("squares_on_sheet", "", SQUARES), ("chess_on_sheet_linear", "left", BOARD)):
        photos = [path for path in photo_set(name) if path.name.startswith(begin)]
        ended = run("calibrate", "camera", *photos, "--pattern", board, "--into", folder / name, "--quiet")
        assert ended.exit_code == 0, (ended.output, ended.exception)
    return folder


def camera_of(cameras: Path, name: str) -> Path:
    (file,) = (cameras / name).glob("*.json")
    return file


def test_sheets_by_printed_squares(cameras: Path) -> None:
    photos = {path.stem[-2:]: path for path in photo_set("squares_on_sheet")}
    camera = camera_of(cameras, "squares_on_sheet")
    for number in ("01", "03", "09", "11", "13"):
        off, low, high = area_of(photos[number], SQUARES, "--camera", camera)
        assert abs(off) < 0.0035, (number, off)
        assert low < 0 < high, number


def test_sheets_by_a_chessboard(cameras: Path) -> None:
    photos = {path.stem: path for path in photo_set("chess_on_sheet_linear")}
    camera = camera_of(cameras, "chess_on_sheet_linear")
    offs = []
    for number in ("01", "04", "05", "06", "07", "08"):
        off, low, high = area_of(photos[f"left_{number}"], BOARD, "--camera", camera)
        offs.append(off)
        assert low < 0 < high, number
    # Where the paper curls beyond the board its edge is seen in another place from every side.
    assert max(map(abs, offs)) < 0.0045
    assert max(offs) - min(offs) < 0.005


@pytest.mark.parametrize("number", ["03", "13"])
def test_without_a_calibration_the_interval_is_wider_and_holds(number: str) -> None:
    (photo,) = [path for path in photo_set("squares_on_sheet") if path.stem.endswith(number)]
    off, low, high = area_of(photo, SQUARES)
    assert abs(off) < 0.008
    assert low < 0 < high


@pytest.mark.parametrize("number", ["05", "07"])
def test_a_sheet_cut_by_the_frame_is_refused(number: str) -> None:
    (photo,) = [path for path in photo_set("squares_on_sheet") if path.stem.endswith(number)]
    ended = run("measure", photo, "--reference", f"{SQUARES} role=on-face", "--json")
    assert isinstance(ended.exception, Refusal)
    assert ended.exception.code == "face-cut"


def test_a_checker_nobody_counted_gives_the_same() -> None:
    (photo,) = [path for path in photo_set("chess_on_sheet") if path.stem.endswith("13")]
    counted, uncounted = (area_of(photo, text) for text in (BOARD, "checker pitch=30"))
    assert uncounted[0] == pytest.approx(counted[0], abs=1e-4)


def test_what_is_no_board_does_not_calibrate() -> None:
    (photo, *_) = photo_set("chess_on_sheet")
    ended = run("calibrate", "camera", photo, "--pattern", "rectangle size=A4")
    assert "no board" in str(ended.exception)
