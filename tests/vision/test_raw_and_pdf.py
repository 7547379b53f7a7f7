"""Raw camera files and PDF pages, by readers that are extras; skipped where they are not installed."""

import io
import sys
from pathlib import Path

import numpy as np
import pytest
from cutface.props.errors import FileError
from cutface.vision.photo import load_photo
from PIL import Image

BLACK, WHITE = 256, 4095
NEUTRAL = (0.5, 1.0, 0.7)


def mosaic(light: np.ndarray) -> np.ndarray:
    """(h, w) sensor values of (h, w) grey light 0..1, red and blue weaker as the neutral says."""
    gain = np.empty_like(light)
    gain[0::2, 0::2], gain[0::2, 1::2] = NEUTRAL[0], NEUTRAL[1]
    gain[1::2, 0::2], gain[1::2, 1::2] = NEUTRAL[1], NEUTRAL[2]
    return np.round(BLACK + (WHITE - BLACK) * gain * light).astype(np.uint16)


def write_dng(path: Path, light: np.ndarray, orientation: int = 1) -> Path:
    """A small raw file as the DNG specification 1.4 has it: a Bayer mosaic, uncompressed."""
    tifffile = pytest.importorskip("tifffile", reason="tifffile, which comes with scikit-image, is not installed")
    # Matrix of a sensor whose colours are those of sRGB (XYZ to camera), hundred-thousandths.
    matrix = np.array([[3.2406, -1.5372, -0.4986], [-0.9689, 1.8758, 0.0415], [0.0557, -0.2040, 1.0570]])
    rational = [int(v) for pair in ((round(1e5 * v), 100000) for v in matrix.ravel()) for v in pair]
    neutral = [int(v) for pair in ((round(1000 * v), 1000) for v in NEUTRAL) for v in pair]
    tags = [
        (271, "s", 0, "Alder", True),
        (272, "s", 0, "A 7", True),
        (274, "H", 1, orientation, True),
        (282, "2I", 1, (300, 1), True),
        (283, "2I", 1, (300, 1), True),
        (33421, "H", 2, (2, 2), True),
        (33422, "B", 4, (0, 1, 1, 2), True),
        (50706, "B", 4, (1, 4, 0, 0), True),
        (50708, "s", 0, "Alder A 7", True),
        (50714, "H", 1, BLACK, True),
        (50717, "H", 1, WHITE, True),
        (50721, "2i", 9, tuple(rational), True),
        (50728, "2I", 3, tuple(neutral), True),
        (50778, "H", 1, 21, True),
    ]
    tifffile.imwrite(path, mosaic(light), photometric=32803, extratags=tags, metadata=None, software=False)
    return path


def ramp(height: int = 120, width: int = 160) -> np.ndarray:
    return np.tile(np.linspace(0.05, 0.9, width), (height, 1))


def test_a_raw_file_gives_linear_light(tmp_path):
    pytest.importorskip("rawpy", reason="the extra for raw files is not installed")
    photo = load_photo(write_dng(tmp_path / "a.dng", ramp()))
    assert (photo.file_format, photo.bits, photo.pixels.shape) == ("RAW", 16, (120, 160, 3))
    assert (photo.make, photo.model) == ("Alder", "A 7")
    # A resolution in a camera's file is that of no picture.
    assert photo.resolution_dpi is None
    light = photo.linear()[20:-20, 20:-20]
    expected = ramp()[20:-20, 20:-20]
    ratio = light / expected
    # White balance may scale the whole; the curve is a straight line through black.
    assert np.ptp(ratio) < 0.02 * ratio.mean()
    green = photo.linear((0.0, 1.0, 0.0))[20:-20, 20:-20]
    red = photo.linear((1.0, 0.0, 0.0))[20:-20, 20:-20]
    assert np.abs(red / green - 1).max() < 0.03


@pytest.mark.parametrize("orientation", [3, 6, 8])
def test_a_raw_file_is_turned_upright_once(tmp_path, orientation):
    pytest.importorskip("rawpy", reason="the extra for raw files is not installed")
    photo = load_photo(write_dng(tmp_path / "a.dng", ramp(), orientation))
    assert photo.orientation == orientation
    assert photo.pixels.shape[:2] == ((160, 120) if orientation in (6, 8) else (120, 160))
    light = photo.linear()
    # The bright end of the sensor's right side: at the left, bottom or top.
    dark, bright = {
        3: (light[:, -20:], light[:, :20]),
        6: (light[:20], light[-20:]),
        8: (light[-20:], light[:20]),
    }[orientation]
    assert bright.mean() > 3 * dark.mean()


def test_a_damaged_raw_file_ends_in_one_line(tmp_path):
    pytest.importorskip("rawpy", reason="the extra for raw files is not installed")
    data = write_dng(tmp_path / "a.dng", ramp()).read_bytes()
    for length in (200, len(data) // 2):
        (tmp_path / "b.dng").write_bytes(data[:length])
        with pytest.raises(FileError):
            load_photo(tmp_path / "b.dng")
    (tmp_path / "c.raf").write_bytes(b"FUJIFILMCCD-RAW " + bytes(500))
    with pytest.raises(FileError) as caught:
        load_photo(tmp_path / "c.raf")
    assert caught.value.code == "file-raw"


def test_without_the_reader_it_is_said_what_to_install(tmp_path, monkeypatch):
    monkeypatch.setitem(sys.modules, "rawpy", None)
    monkeypatch.setitem(sys.modules, "pypdfium2", None)
    (tmp_path / "a.raf").write_bytes(b"FUJIFILMCCD-RAW " + bytes(500))
    (tmp_path / "a.pdf").write_bytes(b"%PDF-1.7\n")
    for name, extra in (("a.raf", "cutface[raw]"), ("a.pdf", "cutface[pdf]")):
        with pytest.raises(FileError) as caught:
            load_photo(tmp_path / name)
        assert caught.value.code == "reader-missing" and extra in caught.value.remedy


def test_a_raw_preview_is_not_taken_for_the_picture(tmp_path, monkeypatch):
    monkeypatch.setitem(sys.modules, "rawpy", None)
    small = Image.fromarray(np.full((40, 60, 3), 128, np.uint8))
    small.save(tmp_path / "b.nef", format="TIFF", tiffinfo={254: 1, 271: "Alder", 330: 8})
    with pytest.raises(FileError) as caught:
        load_photo(tmp_path / "b.nef")
    assert caught.value.code == "reader-missing"


def write_pdf(path: Path, *pages: tuple[np.ndarray | None, float, float, str]) -> Path:
    """Pages of (picture or None, its width and height on the page in mm, "stamp" or "unseen" text over it)."""
    from reportlab.lib.units import mm
    from reportlab.lib.utils import ImageReader
    from reportlab.pdfgen.canvas import Canvas

    canvas = Canvas(str(path), pagesize=(pages[0][1] * mm, pages[0][2] * mm))
    for pixels, width, height, over in pages:
        canvas.setPageSize((width * mm, height * mm))
        if pixels is None:
            canvas.rect(10 * mm, 20 * mm, 30 * mm, 40 * mm, fill=1)
        else:
            png = io.BytesIO()
            Image.fromarray(pixels).save(png, "PNG")
            png.seek(0)
            canvas.drawImage(ImageReader(png), 0, 0, width * mm, height * mm)
        if over == "stamp":
            canvas.rect(2 * mm, 2 * mm, 3 * mm, 3 * mm, fill=1)
        elif over == "unseen":
            text = canvas.beginText(5 * mm, 5 * mm)
            text.setTextRenderMode(3)
            text.textLine("found by searching")
            canvas.drawText(text)
        canvas.showPage()
    canvas.save()
    return path


def test_a_scanned_page_gives_its_own_pixels_and_resolution(tmp_path):
    pytest.importorskip("pypdfium2", reason="the extra for PDF pages is not installed")
    colour = np.random.default_rng(0).integers(0, 256, (300, 200, 3), dtype=np.uint8)
    grey = np.random.default_rng(1).integers(0, 256, (236, 472), dtype=np.uint8)
    path = write_pdf(tmp_path / "a.pdf", (colour, 50.8, 76.2, ""), (grey, 101.6, 50.8, "unseen"))
    photo = load_photo(path)
    assert photo.file_format == "PDF" and np.array_equal(photo.pixels, colour)
    assert photo.resolution_dpi == pytest.approx((100.0, 100.0), rel=1e-3)
    assert [n.code for n in photo.notices] == ["several-pages"]
    second = load_photo(path, page=2)
    pixels = second.pixels if second.pixels.ndim == 2 else second.pixels[..., 0]
    assert np.array_equal(pixels, grey) and second.notices == ()
    assert second.resolution_dpi == pytest.approx((118.0, 118.0), rel=1e-3)
    with pytest.raises(FileError) as caught:
        load_photo(path, page=3)
    assert caught.value.code == "file-page" and "2 pages" in caught.value.message


def test_a_drawn_page_is_drawn_to_scale(tmp_path):
    pytest.importorskip("pypdfium2", reason="the extra for PDF pages is not installed")
    path = write_pdf(tmp_path / "a.pdf", (None, 60.0, 80.0, ""))
    for dpi in (None, 150.0):
        photo = load_photo(path, page_dpi=dpi)
        x_dpi, y_dpi = photo.resolution_dpi
        assert x_dpi == y_dpi == (dpi or 300.0)
        assert [n.code for n in photo.notices] == ["page-drawn"]
        # The dark area, half a pixel of its rim and of the pen's line round it aside.
        area = (1 - photo.linear()).sum() * (25.4 / x_dpi) ** 2
        pen = 25.4 / 72
        assert area == pytest.approx((30 + pen) * (40 + pen), rel=0.005)


def test_a_scan_with_something_over_it_is_drawn_at_its_own_resolution(tmp_path):
    pytest.importorskip("pypdfium2", reason="the extra for PDF pages is not installed")
    grey = np.full((236, 472), 255, np.uint8)
    photo = load_photo(write_pdf(tmp_path / "a.pdf", (grey, 101.6, 50.8, "stamp")))
    assert photo.resolution_dpi == pytest.approx((118.0, 118.0), rel=1e-3)
    # The stamp is seen, at the lower left.
    assert photo.linear()[-16, 16] < 0.1 and photo.linear()[20, 300] > 0.9


def test_hostile_pages_end_in_one_line(tmp_path):
    pytest.importorskip("pypdfium2", reason="the extra for PDF pages is not installed")
    path = write_pdf(tmp_path / "a.pdf", (None, 3000.0, 3000.0, ""))
    with pytest.raises(FileError) as caught:
        load_photo(path, page_dpi=1200)
    assert caught.value.code == "file-too-large"
    for content in (b"%PDF-1.7\n", b"%PDF-1.7\n" + bytes(2000), path.read_bytes()[:300]):
        (tmp_path / "b.pdf").write_bytes(content)
        with pytest.raises(FileError) as caught:
            load_photo(tmp_path / "b.pdf")
        assert caught.value.code == "file-damaged"
