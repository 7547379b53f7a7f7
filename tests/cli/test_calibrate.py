"""Cameras and scanners calibrated by the command, from simulated pictures in files."""

import json
import os
import re
from hashlib import sha256
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from camera_simulator import Flatbed, Light, Print, Scene, Sensor, render
from cutface.cli import calibrate as calibrate_module
from cutface.cli.app import app
from cutface.cli.calibrate import PhotoFiles
from cutface.cli.calibration_folder import VARIABLE, calibration_folder, camera_stem, scanner_stem
from cutface.props.errors import FileError, Refusal, UsageError
from cutface.vision.camera_file import read_camera
from cutface.vision.references.board import SHEETS
from cutface.vision.references.scanner import read_scanner
from PIL import Image
from simulated_pattern import checker, photograph
from simulated_view import Camera
from typer.testing import CliRunner

MAKE, MODEL, FOCAL_MM = "Alder", "A 7", 5.6
STEM = "alder-a-7-5.6mm-640x480"


def save(path: Path, pixels: np.ndarray, **tags: Any) -> Path:
    exif = Image.Exif()
    exif[271], exif[272] = tags.get("make", MAKE), tags.get("model", MODEL)
    if tags.get("focal", FOCAL_MM) is not None:
        exif.get_ifd(0x8769)[37386] = tags.get("focal", FOCAL_MM)
    Image.fromarray(pixels).save(path, quality=95, exif=exif, dpi=tags.get("dpi", (72, 72)))
    return path


def a_photo(tilt: float, azimuth: float, turn: float, aim=(75.0, 45.0), distance=430.0) -> np.ndarray:
    view = Camera.looking_at(
        aim,
        distance,
        tilt,
        azimuth,
        turn,
        width=640,
        height=480,
        focal_px=700.0,
        centre=(322.0, 236.0),
        distortion=(-0.2, 0.05, 0.0, 0.0, 0.0),
    )
    return photograph(view, checker(6, 4, 30.0), seed=int(azimuth))


@pytest.fixture(scope="module")
def photos(tmp_path_factory: pytest.TempPathFactory) -> list[Path]:
    """Nine photos of one chessboard, from all sides and towards all corners of the frame."""
    folder = tmp_path_factory.mktemp("photos")
    aims = [(75, 45), (20, 10), (130, 80), (20, 80), (130, 10), (75, 0), (75, 90), (10, 45), (140, 45)]
    return [
        save(folder / f"board {n}.jpg", a_photo(28.0, 40.0 * n, 3.0 * n, aim)) for n, aim in enumerate(aims, start=1)
    ]


@pytest.fixture
def own_folder(monkeypatch: pytest.MonkeyPatch, tmp_path: Path) -> Path:
    monkeypatch.setenv(VARIABLE, str(tmp_path / "own"))
    return tmp_path / "own"


def invoke(*arguments: Any) -> Any:
    return CliRunner().invoke(app, ["calibrate", *map(str, arguments)])


def names(folder: Path) -> list[str]:
    return sorted(file.name for file in folder.iterdir())


def test_a_camera_is_calibrated_and_kept_where_later_photos_look(photos: list[Path], own_folder: Path) -> None:
    ended = invoke("camera", *photos, "--chessboard", "6x4")
    assert ended.exit_code == 0, ended.output
    assert names(own_folder) == [f"{STEM}.{ending}" for ending in ("json", "png", "svg")]
    camera = read_camera(own_folder / f"{STEM}.json")
    assert (camera.make, camera.model, camera.focal_length_mm) == (MAKE, MODEL, FOCAL_MM)
    assert camera.focal_px == pytest.approx(700.0, abs=4 * camera.focal_std)
    assert camera.details["photos"] == 9
    # Without the side of a square no distance is known.
    assert "distance_mm" not in camera.details and "board_bow_mm" not in camera.details
    words = " ".join(ended.output.split())
    shown = re.search(r"Focal length ([\d.]+) ([\d.]+) px", words)
    assert shown is not None and float(shown[1]) == pytest.approx(camera.focal_px, abs=0.06)
    assert "Alder A 7 at 5.6 mm, pictures of 640 x 480 px" in words
    assert f"Written to {own_folder}" in words and "find it there by themselves" in words
    # Nothing is written over, and what is there stays as it was.
    kept = (own_folder / f"{STEM}.json").read_bytes()
    again = invoke("camera", *photos, "--chessboard", "6x4")
    assert isinstance(again.exception, UsageError) and again.exception.code == "would-overwrite"
    assert invoke("camera", *photos[:5], "--chessboard", "6x4", "--replace", "--quiet").exit_code == 0
    assert (own_folder / f"{STEM}.json").read_bytes() != kept


def test_a_photo_by_a_calibrated_camera_finds_it_by_itself(
    photos: list[Path], own_folder: Path, tmp_path: Path
) -> None:
    assert invoke("camera", *photos[:6], "--chessboard", "6x4", "--quiet").exit_code == 0

    photo = save(tmp_path / "face.jpg", a_photo(15.0, 70.0, 2.0, distance=600.0))

    def measured(*more: Any) -> dict[str, Any]:
        board = "chessboard columns=6 rows=4 pitch=30 role=on-face"
        words = ["measure", photo, "--reference", board, "--json", *more]
        ended = CliRunner().invoke(app, [str(word) for word in words])
        assert ended.exit_code == 0, ended.output
        return json.loads(ended.stdout)

    by_itself, without = measured(), measured("--camera", "none")
    used = by_itself["reference"]["details"]["camera"]
    assert (
        used["file"] == f"{STEM}.json"
        and used["sha256"] == sha256((own_folder / used["file"]).read_bytes()).hexdigest()
    )
    assert by_itself["reference"]["details"]["focal_from"] == "calibration"
    assert "camera" not in without["reference"]["details"]
    # The paper round the board is the face: half a square beyond the outer squares.
    true = 30.0**2 * 8 * 6
    low, high = by_itself["properties"]["area"]["interval95"]
    assert low < true < high
    assert by_itself["properties"]["area"]["std"] < without["properties"]["area"]["std"]
    # The same camera zoomed in is another one, and that is said.
    photo = save(tmp_path / "zoomed.jpg", a_photo(15.0, 70.0, 2.0, distance=600.0), focal=9.0)
    assert [w["code"] for w in measured()["warnings"] if w["code"] == "camera-not-used"] == ["camera-not-used"]


def test_another_folder_holds_files_that_others_can_read(photos: list[Path], own_folder: Path, tmp_path: Path) -> None:
    folder = tmp_path / "cameras"
    ended = invoke("camera", *photos[:5], "--chessboard", "6x4", "--pitch", "30", "--into", folder, "--quiet")
    assert ended.exit_code == 0 and not own_folder.exists()
    assert f"--camera {folder / STEM}.json" in ended.output
    assert "Focal length" not in ended.output
    document = json.loads((folder / f"{STEM}.json").read_text("utf-8"))
    lens = document["lens"]
    assert list(lens["parameters"])[:4] == ["fx", "fy", "cx", "cy"]
    assert len(lens["covariance"]) == len(lens["parameters"])
    assert document["fit"]["distance_mm"] == pytest.approx(430.0, rel=0.15)
    assert {"photo", "rms_px", "corners"} <= set(document["fit"]["residuals"][0])
    assert Image.open(folder / f"{STEM}.png").size[0] > 500
    assert (folder / f"{STEM}.svg").read_text("utf-8").startswith("<svg")


def test_photos_that_cannot_carry_a_calibration_are_refused(
    photos: list[Path], own_folder: Path, tmp_path: Path
) -> None:
    few = invoke("camera", *photos[:3], "--chessboard", "6x4")
    assert isinstance(few.exception, Refusal) and "3 of 3" in few.exception.message
    frontal = [save(tmp_path / f"frontal {n}.jpg", a_photo(0.5, 40.0 * n, 2.0 * n, (60 + 6 * n, 45))) for n in range(4)]
    square_on = invoke("camera", *frontal, "--chessboard", "6x4")
    assert isinstance(square_on.exception, Refusal) and square_on.exception.code == "calibration-frontal"
    # Squares counted in place of corners: said so that it can be put right.
    wrong = invoke("camera", photos[0], "--chessboard", "7x5")
    assert (
        isinstance(wrong.exception, Refusal)
        and wrong.exception.code == "calibration-board"
        and "where four squares meet" in wrong.exception.remedy
    )
    assert not own_folder.exists()


def test_a_copy_of_a_photo_does_not_count_again(photos: list[Path], own_folder: Path, tmp_path: Path) -> None:
    copy = tmp_path / "copy.jpg"
    copy.write_bytes(photos[0].read_bytes())
    few = invoke("camera", photos[0], copy, "--chessboard", "6x4")
    assert isinstance(few.exception, Refusal) and few.exception.message.startswith("The whole board is seen in 1 of 1")


def test_a_photo_that_cannot_be_read_is_named(photos: list[Path], own_folder: Path, tmp_path: Path) -> None:
    broken = tmp_path / "broken.jpg"
    broken.write_bytes(photos[0].read_bytes()[:5000])
    ended = invoke("camera", photos[0], broken, "--chessboard", "6x4")
    assert isinstance(ended.exception, FileError) and "broken.jpg" in ended.exception.message


@pytest.mark.parametrize(
    "arguments",
    [
        ["--chessboard", "6x4", "--charuco", "7x5"],
        ["--pitch", "30"],
        ["--chessboard", "6x4", "--marker", "20"],
        ["--charuco", "7x5", "--pitch", "30"],
        ["--charuco", "7x5", "--pitch", "30,31", "--marker", "20"],
        ["--chessboard", "2x4"],
        ["--chessboard", "six"],
    ],
)
def test_statements_that_do_not_go_together_are_wrong_use(arguments: list[str]) -> None:
    ended = invoke("camera", "photo.jpg", *arguments)
    assert isinstance(ended.exception, UsageError) or ended.exit_code == 2


def test_photos_are_opened_only_when_asked_for(photos: list[Path], monkeypatch: pytest.MonkeyPatch) -> None:
    opened: list[Path] = []
    monkeypatch.setattr(calibrate_module, "load_photo", lambda path: opened.append(path) or path)
    said: list[str] = []
    files = PhotoFiles(photos, said.append)
    assert len(files) == 9 and opened == []
    assert files[2] == photos[2] and opened == [photos[2]]
    assert said == ["Looking at board 3.jpg, 3 of 9"]
    assert len(files[1:3]) == 2 and len(opened) == 1


BED_MM, DPI = (216.0, 300.0), 120.0


def a_scan(path: Path, turn: float, **tags: Any) -> Path:
    sheet = SHEETS["A4"]
    bed = Flatbed(
        round(BED_MM[0] * DPI / 25.4), round(BED_MM[1] * DPI / 25.4), (DPI, DPI), scale=(1.004, 0.997), wobble_mm=0.1
    )
    c, s = np.cos(turn), np.sin(turn)
    middle = np.array([[c, -s], [s, c]]) @ (np.array(sheet.size_mm) / 2)
    x, y = np.array(BED_MM) / 2 - middle
    printed = Print(sheet, origin=(float(x), float(y)), angle=turn)
    scene = Scene("scan", 1, bed, (printed,), (), "white lid", Light(vignetting=0.0, shadow=0.0), Sensor())
    return save(path, render(scene), make="Birch", model="S 1", focal=None, dpi=(DPI, DPI), **tags)


def test_a_scanner_is_calibrated_and_kept(own_folder: Path, tmp_path: Path) -> None:
    scans = [a_scan(tmp_path / "one.png", 0.01), a_scan(tmp_path / "two.png", np.pi)]
    ended = invoke("scanner", *scans, "--check", "140,140")
    assert ended.exit_code == 0, ended.output
    (file,) = [name for name in names(own_folder) if name.endswith(".json")]
    assert file == "birch-s-1-216x300mm.json"
    assert names(own_folder) == [f"birch-s-1-216x300mm.{ending}" for ending in ("json", "png", "svg")]
    scanner = read_scanner(own_folder / file)
    assert scanner.scale == (pytest.approx(1 / 1.004, abs=0.0005), pytest.approx(1 / 0.997, abs=0.0005))
    assert len(scanner.places) == len(scanner.misses) == scanner.details["corners"]
    assert np.sqrt(np.mean(scanner.misses**2)) == pytest.approx(scanner.residual_mm, rel=0.01)
    words = " ".join(ended.output.split())
    assert "Birch S 1, bed of 216 x 300 mm at 120 x 120 dpi" in words
    shown = re.search(r"across the bed ([\d.]+) ([\d.]+)", words)
    assert shown is not None and float(shown[1]) == pytest.approx(scanner.scale[0], abs=0.0006)
    assert 0.0003 < float(shown[2]) < 0.003
    assert isinstance(invoke("scanner", *scans, "--check", "140,140").exception, UsageError)
    photo = invoke("scanner", scans[0], "--check", "14,14", "--into", tmp_path / "x")
    assert isinstance(photo.exception, UsageError) and photo.exception.code == "check-lengths"


def test_the_folder_is_the_one_that_the_system_has() -> None:
    home = Path("/home/ada")
    assert calibration_folder({}, "linux", home) == home / ".local/share/cutface/calibrations"
    assert calibration_folder({"XDG_DATA_HOME": "/data"}, "linux", home) == Path("/data/cutface/calibrations")
    assert calibration_folder({"XDG_DATA_HOME": "data"}, "linux", home) == home / ".local/share/cutface/calibrations"
    assert calibration_folder({}, "darwin", home) == home / "Library/Application Support/cutface/calibrations"
    assert calibration_folder({"LOCALAPPDATA": "/l"}, "win32", home) == Path("/l/cutface/calibrations")
    assert calibration_folder({VARIABLE: "/site", "XDG_DATA_HOME": "/data"}, "linux", home) == Path("/site")
    assert os.environ.get(VARIABLE) is None or calibration_folder() == Path(os.environ[VARIABLE])


def test_names_of_files_are_plain_and_tell_the_device() -> None:
    assert camera_stem("Alder", "Alder A/7 ü", 5.6, (640, 480)) == "alder-a-7-5.6mm-640x480"
    assert camera_stem(None, None, None, (640, 480)) == "camera-640x480"
    assert camera_stem("Alder", "A 7", 5.6, (640, 480), 2.0) == "alder-a-7-5.6mm-zoom2-640x480"
    assert camera_stem("Alder", "A 7", None, (640, 480), raw=True) == "alder-a-7-640x480-raw"
    assert scanner_stem(None, None, (216.2, 299.9)) == "scanner-216x300mm"
