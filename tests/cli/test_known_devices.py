"""Which calibration a picture is measured with, and what is said of those that do not belong to it."""

from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest
from cutface.cli.calibration_folder import VARIABLE
from cutface.cli.known_devices import StatedDevices, known_devices, unused_devices
from cutface.props.errors import FileError, Refusal
from cutface.vision.camera import Camera
from cutface.vision.camera_file import write_camera
from cutface.vision.photo import Photo
from cutface.vision.references.scanner import Scanner, write_scanner
from hand_made_measurement import one_member

LENS = np.array([702.0, 701.0, 322.0, 236.0, -0.25, 0.09, 0.0012, -0.0008, 0.02])
CAMERA = Camera(640, 480, LENS, np.diag(np.full(9, 1e-6)), 0.1, 380.0, "Alder", "A 7", 5.6, 26.0)
SCANNER = Scanner(
    (216.0, 300.0),
    (300.0, 300.0),
    np.zeros(15),
    np.diag(np.full(15, 1e-8)),
    0.0004,
    0.05,
    ((-90, -130), (90, 130)),
    0.02,
)


def a_photo(**about) -> Photo:
    known = {"make": "Alder", "model": "A 7", "focal_length_mm": 5.6, "focal_length_35mm": 26.0} | about
    return Photo(Path("p.jpg"), "", np.zeros((480, 640), np.uint8), **known)


def a_scan(**about) -> Photo:
    known = {"make": "Birch", "model": "S 1", "resolution_dpi": (300.0, 300.0)} | about
    return Photo(Path("s.png"), "", np.zeros((40, 30), np.uint8), **known)


@pytest.fixture
def folder(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> Path:
    monkeypatch.setenv(VARIABLE, str(tmp_path / "own"))
    write_camera(CAMERA, tmp_path / "own" / "alder.json")
    write_scanner(replace(SCANNER, make="Birch", model="S 1"), tmp_path / "own" / "birch.json")
    return tmp_path / "own"


def test_the_picture_finds_its_own(folder: Path) -> None:
    known = known_devices(a_photo(), StatedDevices())
    assert list(known.arguments) == ["camera"] and known.notices == ()
    assert known.arguments["camera"].file == "alder.json"
    known = known_devices(a_scan(), StatedDevices())
    assert list(known.arguments) == ["scanner"] and known.arguments["scanner"].file == "birch.json"
    stranger = known_devices(a_photo(make="Cedar", model="C 3"), StatedDevices())
    assert stranger.arguments == {} and stranger.notices == ()
    nameless = known_devices(a_photo(make=None, model=None), StatedDevices())
    assert nameless.arguments == {} and nameless.notices == ()


def test_none_means_none(folder: Path) -> None:
    stated = StatedDevices(Path("none"), Path("None"))
    assert known_devices(a_photo(), stated).arguments == {}
    assert known_devices(a_scan(), stated).arguments == {}


def test_an_empty_or_missing_own_folder_is_no_matter(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setenv(VARIABLE, str(tmp_path / "nowhere"))
    assert known_devices(a_photo(), StatedDevices()).arguments == {}


@pytest.mark.parametrize(
    ("about", "word"),
    [({"focal_length_mm": 9.0}, "9 mm"), ({"digital_zoom": 2.0}, "zoom"), ({"orientation": 6}, "480 x 640")],
)
def test_the_same_camera_at_another_setting_is_told(folder: Path, about: dict, word: str) -> None:
    known = known_devices(a_photo(**about), StatedDevices())
    assert known.arguments == {}
    (notice,) = known.notices
    assert notice.code == "camera-not-used" and word in notice.message and "alder.json" in notice.message


def test_a_stated_file_of_another_camera_is_refused(folder: Path) -> None:
    stated = StatedDevices(camera=folder / "alder.json")
    assert known_devices(a_photo(), stated).notices == ()
    for about in ({"model": "A 9"}, {"focal_length_mm": 9.0}, {"orientation": 6}):
        with pytest.raises(Refusal) as caught:
            known_devices(a_photo(**about), stated)
        assert caught.value.code == "camera-other" and "alder.json" in caught.value.message
    stripped = dict.fromkeys(("make", "model", "focal_length_mm", "focal_length_35mm"))
    known = known_devices(a_photo(**stripped), stated)
    assert [n.code for n in known.notices] == ["camera-unproven"] and "camera" in known.arguments


def test_a_stated_scanner_of_another_make_is_refused(folder: Path) -> None:
    stated = StatedDevices(scanner=folder / "birch.json")
    assert "scanner" in known_devices(a_scan(), stated).arguments
    with pytest.raises(Refusal) as caught:
        known_devices(a_scan(model="S 2"), stated)
    assert caught.value.code == "scanner-other"
    assert [n.code for n in known_devices(a_scan(make=None, model=None), stated).notices] == ["scanner-unproven"]


def test_of_two_calibrations_the_one_at_the_resolution_is_taken(folder: Path) -> None:
    write_scanner(replace(SCANNER, make="Birch", model="S 1", dpi=(600.0, 600.0)), folder / "fine.json")
    assert known_devices(a_scan(), StatedDevices()).arguments["scanner"].file == "birch.json"
    fine = a_scan(resolution_dpi=(600.0, 600.0))
    assert known_devices(fine, StatedDevices()).arguments["scanner"].file == "fine.json"


def test_a_stated_folder_is_looked_in(folder: Path, tmp_path: Path) -> None:
    other = tmp_path / "site cameras"
    write_camera(replace(CAMERA, model="A 9"), other / "a9.json")
    known = known_devices(a_photo(model="A 9"), StatedDevices(camera=other))
    assert known.arguments["camera"].file == "a9.json"
    # The own folder is then not looked in, and that nothing fits is told.
    known = known_devices(a_photo(), StatedDevices(camera=other))
    assert known.arguments == {} and [n.code for n in known.notices] == ["camera-not-used"]


def test_a_file_that_is_no_calibration_is_told(folder: Path, tmp_path: Path) -> None:
    (tmp_path / "x.json").write_text("{}")
    for stated in (tmp_path / "x.json", tmp_path / "missing.json", folder / "birch.json"):
        with pytest.raises(FileError):
            known_devices(a_photo(), StatedDevices(camera=stated))


def test_a_stated_calibration_that_was_not_needed_is_told(folder: Path) -> None:
    measured = one_member()
    stated = StatedDevices(folder / "alder.json", folder / "birch.json")
    assert [n.code for n in unused_devices(stated, measured)] == ["camera-unused", "scanner-unused"]
    through = replace(measured, reference=replace(measured.reference, details={"camera": {"file": "alder.json"}}))
    assert [n.code for n in unused_devices(stated, through)] == ["scanner-unused"]
    for silent in (StatedDevices(), StatedDevices(Path("none"), folder)):
        assert unused_devices(silent, measured) == ()
