import json
from dataclasses import replace
from functools import cache
from pathlib import Path

import numpy as np
import pytest
from camera_simulator import Flatbed, Light, Print, Scene, Sensor, render
from cutface.props.errors import FileError, Refusal, UsageError
from cutface.vision.photo import Photo
from cutface.vision.references.board import SHEETS
from cutface.vision.references.scanner import CalibratedScan, calibrate_scanner, read_scanner, write_scanner
from photo_sets import photo_set

DPI = 120.0
BED_MM = (216.0, 300.0)
PRINT_SCALE = (1.002, 0.999)
CHECK = (140 * PRINT_SCALE[0], 140 * PRINT_SCALE[1])
BED = Flatbed(
    round(BED_MM[0] * DPI / 25.4),
    round(BED_MM[1] * DPI / 25.4),
    (DPI, DPI),
    scale=(1.004, 0.997),
    wobble_mm=0.2,
    wobble_period_mm=700.0,
    phase=(1.0, 2.0),
)


@cache
def a_scan(turn: float = 0.01) -> Photo:
    """A4 sheet in the middle of the bed."""
    sheet = SHEETS["A4"]
    c, s = np.cos(turn), np.sin(turn)
    middle = np.array([[c, -s], [s, c]]) @ (np.array(sheet.size_mm) * PRINT_SCALE / 2)
    printed = Print(sheet, scale=PRINT_SCALE, gain_mm=0.06, origin=tuple(np.array(BED_MM) / 2 - middle), angle=turn)
    scene = Scene("scan", 1, BED, (printed,), (), "white lid", Light(vignetting=0.0, shadow=0.0), Sensor())
    return Photo(Path(f"scan {turn:.2f}.png"), "", render(scene), resolution_dpi=(DPI, DPI))


def distances(places: np.ndarray) -> np.ndarray:
    return np.linalg.norm(places[:, None] - places[None], axis=2)[np.triu_indices(len(places), 1)]


def test_scale_skew_and_wander_of_the_bed_are_taken_out():
    scanner = calibrate_scanner([a_scan(), a_scan(np.pi + 0.02)], CHECK)
    assert scanner.residual_mm < 0.02 and scanner.notices == ()
    reference = CalibratedScan(scanner).locate(a_scan())
    true = np.random.default_rng(0).uniform((20, 20), (196, 280), (60, 2))
    pixels = BED.project(np.c_[true, np.zeros(60)])
    raw = np.column_stack([pixels[:, 0], -pixels[:, 1]]) * 25.4 / DPI
    measured = reference.face.to_mm(pixels)
    assert np.abs(distances(raw) - distances(true)).max() > 0.5
    assert np.abs(distances(measured) - distances(true)).max() < 0.03
    assert np.abs(reference.face.to_pixels(measured) - pixels).max() < 1e-6
    step = np.stack(
        [reference.face.to_mm(pixels + h) - reference.face.to_mm(pixels - h) for h in np.eye(2) / 2], axis=-1
    )
    assert np.abs(reference.face.mm_per_px(pixels) - step).max() < 1e-9


def test_what_is_left_uncertain_is_mostly_the_callipers():
    face = np.array([[0.0, 0.0], [100.0, 0.0], [100.0, 60.0], [0.0, 60.0]])
    one_way = calibrate_scanner([a_scan()], CHECK)
    turned = calibrate_scanner([a_scan(), a_scan(np.pi + 0.02)], CHECK)
    assert [n.code for n in one_way.notices] == ["scanner-one-way"]

    def width_std(scanner, source=None) -> float:
        modes = CalibratedScan(scanner).locate(a_scan()).modes(face)
        chosen = [m for m in modes if source is None or m.source == source]
        return float(np.sqrt(sum((m.displacement[1, 0] - m.displacement[0, 0]) ** 2 for m in chosen)))

    assert width_std(turned, "print scale") == pytest.approx(100 * 0.05 / 140, rel=1e-6)
    assert width_std(turned) < 0.045 < width_std(one_way) < 0.08


def test_a_scan_of_a_part_of_the_bed_keeps_only_scale_and_skew():
    scanner = calibrate_scanner([a_scan()], CHECK)
    part = replace(a_scan(), pixels=a_scan().pixels[200:900, 100:800])
    reference = CalibratedScan(scanner).locate(part)
    assert "part-of-the-bed" in {n.code for n in reference.notices}
    places = reference.face.to_mm(np.array([[0.0, 0.0], [699.0, 0.0]]))
    assert np.linalg.norm(places[1] - places[0]) == pytest.approx(699 * 25.4 / DPI / 1.004, rel=3e-4)


def test_another_resolution_of_the_same_bed_is_the_same_bed():
    scanner = calibrate_scanner([a_scan()], CHECK)
    fine = Photo(
        Path("fine.png"), "", np.zeros((2 * BED.height, 2 * BED.width), np.uint8), resolution_dpi=(240.0, 240.0)
    )
    reference = CalibratedScan(scanner).locate(fine)
    assert "scanner-resolution" in {n.code for n in reference.notices}
    assert not {n.code for n in reference.notices} & {"part-of-the-bed"}
    coarse = CalibratedScan(scanner).locate(a_scan())
    assert reference.face.to_mm(np.array([[200.5, 400.5]]))[0] == pytest.approx(
        coarse.face.to_mm(np.array([[100.0, 200.0]]))[0], abs=1e-6
    )


def test_scans_that_cannot_be_used_are_refused():
    for scans, code in (
        ([replace(a_scan(), pixels=np.full_like(a_scan().pixels, 200))], "scanner-sheet"),
        ([a_scan(), replace(a_scan(), pixels=a_scan().pixels[:, 100:])], "scanner-size"),
        ([replace(a_scan(), resolution_dpi=None)], "no-resolution"),
    ):
        with pytest.raises(Refusal) as caught:
            calibrate_scanner(scans, CHECK)
        assert caught.value.code == code
    with pytest.raises(UsageError):
        calibrate_scanner([], CHECK)
    with pytest.raises(UsageError):
        calibrate_scanner([a_scan()], (100.0, 140.0))
    # A cube seen instead of a scan: bent out of any bed.
    sheared = a_scan().pixels[:, :, 0]
    import cv2

    bent = cv2.warpPerspective(
        sheared, np.array([[1, 0.02, 0], [0, 1, 0], [0, 8e-5, 1.0]]), sheared.shape[::-1], borderValue=200
    )
    with pytest.raises(Refusal) as caught:
        calibrate_scanner([replace(a_scan(), pixels=bent)], CHECK)
    assert caught.value.code == "scanner-sheet-bent"


def test_a_scanners_file_gives_the_scanner_back(tmp_path):
    scanner = calibrate_scanner([a_scan()], CHECK)
    path = write_scanner(scanner, tmp_path / "scanner.json")
    read = read_scanner(path)
    assert np.array_equal(read.coefficients, scanner.coefficients)
    assert np.array_equal(read.covariance, scanner.covariance)
    for name in ("bed_mm", "dpi", "covered", "print_scale_std", "print_wander_mm", "residual_mm", "notices", "details"):
        assert getattr(read, name) == getattr(scanner, name)
    good = path.read_text()
    for text in ("", "{}", "[]", good[:100], good.replace("cutface/scanner/1", "other"), good.replace("[", "{", 1)):
        path.write_text(text)
        with pytest.raises(FileError) as caught:
            read_scanner(path)
        assert "\n" not in str(caught.value)
    short = json.loads(good)
    short["coefficients"] = short["coefficients"][:4]
    path.write_text(json.dumps(short))
    with pytest.raises(FileError):
        read_scanner(path)
    with pytest.raises(FileError):
        read_scanner(tmp_path / "missing.json")


def test_a_photo_of_no_scanner_is_refused():
    scanner = calibrate_scanner([a_scan()], CHECK)
    for path in photo_set("chess_on_sheet")[:1]:
        from cutface.vision.photo import load_photo

        with pytest.raises(Refusal):
            CalibratedScan(scanner).locate(load_photo(path))
