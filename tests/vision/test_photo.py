import hashlib
import io
import json
import os
import struct
import subprocess
import sys
import zlib
from pathlib import Path

import cv2
import numpy as np
import pillow_heif
import pytest
from cutface.props.errors import FileError
from cutface.vision.photo import Photo, load_photo
from photo_sets import photo_set
from PIL import Image, ImageCms
from PIL.ImageFile import ImageFile


@pytest.fixture
def picture():
    """A smooth coloured picture whose corners all differ, 40 wide and 24 high."""
    y, x = np.mgrid[0:24, 0:40]
    return np.stack([x * 6, y * 10, 255 - x * 3 - y * 3], axis=-1).astype(np.uint8)


def saved(tmp_path, picture, name, **options):
    path = tmp_path / name
    Image.fromarray(picture).save(path, **options)
    return path


def refusal(path, **options) -> FileError:
    with pytest.raises(FileError) as caught:
        load_photo(path, **options)
    assert "\n" not in str(caught.value)
    assert caught.value.message and caught.value.remedy
    return caught.value


# --- kinds of file ---------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("name", "file_format", "tolerance", "options"),
    [
        ("a.png", "PNG", 0, {}),
        ("a.bmp", "BMP", 0, {}),
        ("a.tif", "TIFF", 0, {}),
        ("lzw.tif", "TIFF", 0, {"compression": "tiff_lzw"}),
        ("a.ppm", "PNM", 0, {}),
        ("lossless.webp", "WebP", 0, {"lossless": True}),
        ("a.jp2", "JPEG 2000", 0, {}),
        ("a.jpg", "JPEG", 12, {"quality": 95, "subsampling": 0}),
        ("progressive.jpg", "JPEG", 12, {"quality": 95, "subsampling": 0, "progressive": True}),
        ("a.avif", "AVIF", 12, {"quality": 95, "subsampling": "4:4:4"}),
    ],
)
def test_every_kind_gives_the_same_colours(tmp_path, picture, name, file_format, tolerance, options):
    photo = load_photo(saved(tmp_path, picture, name, **options))
    assert photo.file_format == file_format
    assert photo.pixels.shape == picture.shape
    assert np.abs(photo.pixels.astype(int) - picture).max() <= tolerance


def test_a_misleading_extension_does_not_matter(tmp_path, picture):
    path = saved(tmp_path, picture, "a.png")
    assert load_photo(path.rename(tmp_path / "a.jpg")).file_format == "PNG"


def test_heif_keeps_ten_bits(tmp_path):
    pillow_heif = pytest.importorskip("pillow_heif")
    ramp = np.tile(np.linspace(0, 65535, 64).astype(np.uint16)[None, :, None], (48, 1, 3))
    pillow_heif.encode("RGB;16", (64, 48), ramp.tobytes(), str(tmp_path / "a.heic"), quality=100)
    photo = load_photo(tmp_path / "a.heic")
    assert photo.pixels.dtype == np.uint16
    assert photo.bits > 8
    assert np.abs(photo.pixels.astype(int) - ramp).max() < 1200


def test_grey_stays_grey(tmp_path, picture):
    for name in ("a.png", "a.jpg", "a.tif"):
        photo = load_photo(saved(tmp_path, picture[..., 1], name))
        assert photo.pixels.shape == picture.shape[:2]


@pytest.mark.parametrize("name", ["a.png", "a.tif"])
def test_sixteen_bit_grey(tmp_path, name):
    grey = np.arange(0, 65536, 64, dtype=np.uint16).reshape(32, 32)
    photo = load_photo(saved(tmp_path, grey, name))
    assert photo.bits == 16
    assert np.array_equal(photo.pixels, grey)


def test_sixteen_bit_colour_png(tmp_path):
    bgr = np.random.default_rng(1).integers(0, 65536, (20, 30, 3), dtype=np.uint16)
    cv2.imwrite(str(tmp_path / "a.png"), bgr)
    photo = load_photo(tmp_path / "a.png")
    assert photo.bits == 16
    assert np.array_equal(photo.pixels, bgr[..., ::-1])


def test_sixteen_bit_pgm(tmp_path):
    grey = np.array([[0, 1000], [30000, 65535]], np.uint16)
    (tmp_path / "a.pgm").write_bytes(b"P5 2 2 65535\n" + grey.astype(">u2").tobytes())
    assert np.array_equal(load_photo(tmp_path / "a.pgm").pixels, grey)


def test_white_is_zero_in_some_tiff_files(tmp_path):
    grey = np.array([[0, 1000, 65535]], np.uint16)
    Image.fromarray(grey).save(tmp_path / "a.tif", tiffinfo={262: 0})
    assert load_photo(tmp_path / "a.tif").pixels.tolist() == [[65535, 64535, 0]]


def test_palette(tmp_path, picture):
    Image.fromarray(picture).quantize(8).save(tmp_path / "a.png")
    photo = load_photo(tmp_path / "a.png")
    assert photo.pixels.shape == picture.shape
    assert len(np.unique(photo.pixels.reshape(-1, 3), axis=0)) <= 8


@pytest.mark.parametrize("name", ["a.png", "a.webp", "a.tif"])
def test_transparent_parts_lie_over_white(tmp_path, name):
    rgba = np.zeros((4, 3, 4), np.uint8)
    rgba[:, 1, 3] = 128
    rgba[:, 2, 3] = 255
    options = {"lossless": True, "exact": True} if name.endswith("webp") else {}
    photo = load_photo(saved(tmp_path, rgba, name, **options))
    assert photo.pixels[0].tolist() == [[255] * 3, [127] * 3, [0] * 3]


def test_printing_colours_are_converted_and_said_so(tmp_path):
    Image.new("CMYK", (8, 8), (0, 0, 0, 0)).save(tmp_path / "a.jpg")
    photo = load_photo(tmp_path / "a.jpg")
    assert photo.pixels.min() > 250
    assert [notice.code for notice in photo.notices] == ["printing-colours"]


def test_the_first_of_several_pages_is_used_and_said_so(tmp_path):
    pages = [Image.new("L", (8, 8), tone) for tone in (10, 200)]
    for name in ("a.tif", "a.gif"):
        pages[0].save(tmp_path / name, save_all=True, append_images=pages[1:])
        photo = load_photo(tmp_path / name)
        assert photo.pixels.max() == 10
        assert "several-pages" in [notice.code for notice in photo.notices]


def test_another_page_is_used_when_stated(tmp_path):
    pages = [Image.new("L", (8, 8), tone) for tone in (10, 200, 90)]
    for name in ("a.tif", "a.gif", "a.heic"):
        if name == "a.heic":
            heif = pillow_heif.from_pillow(pages[0])
            for page in pages[1:]:
                heif.add_from_pillow(page)
            heif.save(tmp_path / name, quality=100)
        else:
            pages[0].save(tmp_path / name, save_all=True, append_images=pages[1:])
        photo = load_photo(tmp_path / name, page=2)
        assert abs(int(photo.pixels.max()) - 200) < 3 and photo.notices == ()
        assert abs(int(load_photo(tmp_path / name, page=1).pixels.max()) - 10) < 3
        for page in (0, 4):
            assert refusal(tmp_path / name, page=page).code == "file-page"
    Image.new("L", (8, 8), 3).save(tmp_path / "a.jpg")
    assert load_photo(tmp_path / "a.jpg", page=1).notices == ()
    assert refusal(tmp_path / "a.jpg", page=2).code == "file-page"


@pytest.mark.parametrize("orientation", [1, 6])
def test_sixteen_bit_colour_tiff(tmp_path, orientation):
    tifffile = pytest.importorskip("tifffile", reason="tifffile, which comes with scikit-image, is not installed")
    colour = np.random.default_rng(0).integers(0, 65536, (24, 40, 3)).astype(np.uint16)
    with tifffile.TiffWriter(tmp_path / "a.tif") as writer:
        for factor in (1, 2):
            writer.write(
                colour // factor, photometric="rgb", compression="zlib", extratags=[(274, "H", 1, orientation, True)]
            )
    for page, factor in ((1, 1), (2, 2)):
        photo = load_photo(tmp_path / "a.tif", page=page)
        shown = colour if orientation == 1 else np.rot90(colour, -1)
        assert photo.bits == 16 and np.array_equal(photo.pixels, shown // factor)


def test_a_cut_sixteen_bit_colour_tiff_is_refused(tmp_path):
    tifffile = pytest.importorskip("tifffile", reason="tifffile, which comes with scikit-image, is not installed")
    colour = np.random.default_rng(0).integers(0, 65536, (60, 80, 3)).astype(np.uint16)
    for compression in (None, "zlib"):
        data = io.BytesIO()
        tifffile.imwrite(data, colour, photometric="rgb", compression=compression)
        for share in (0.3, 0.95):
            (tmp_path / "cut.tif").write_bytes(data.getvalue()[: int(share * len(data.getvalue()))])
            assert refusal(tmp_path / "cut.tif").code in ("file-cut-short", "file-damaged")


def test_black_and_white_without_grey_is_said(tmp_path):
    Image.new("1", (8, 8), 1).save(tmp_path / "a.tif")
    photo = load_photo(tmp_path / "a.tif")
    assert photo.pixels.min() == 255
    assert photo.notices[0].code == "two-tones"


def test_what_identifies_the_file(tmp_path, picture):
    path = saved(tmp_path, picture, "a.png")
    photo = load_photo(str(path))
    assert photo.sha256 == hashlib.sha256(path.read_bytes()).hexdigest()
    assert (photo.path, photo.width, photo.height, photo.white) == (path, 40, 24, 255)
    with pytest.raises(ValueError, match="read-only"):
        photo.pixels[0, 0] = 0


# --- orientation -----------------------------------------------------------------------------

# What a viewer has to do to a picture of each EXIF orientation (EXIF 2.32, tag 0112), in Pillow's terms.
VIEWER = {
    1: None,
    2: Image.Transpose.FLIP_LEFT_RIGHT,
    3: Image.Transpose.ROTATE_180,
    4: Image.Transpose.FLIP_TOP_BOTTOM,
    5: Image.Transpose.TRANSPOSE,
    6: Image.Transpose.ROTATE_270,
    7: Image.Transpose.TRANSVERSE,
    8: Image.Transpose.ROTATE_90,
}


@pytest.mark.parametrize("orientation", VIEWER)
@pytest.mark.parametrize("name", ["a.jpg", "a.png", "a.tif", "a.webp", "a.avif"])
def test_orientation_is_applied_once(tmp_path, picture, name, orientation):
    stored = Image.fromarray(picture)
    exif = Image.Exif()
    exif[274] = orientation
    stored.save(tmp_path / name, exif=exif, quality=95)
    step = VIEWER[orientation]
    expected = np.asarray(stored if step is None else stored.transpose(step)).astype(int)
    photo = load_photo(tmp_path / name)
    assert photo.pixels.shape == expected.shape
    assert np.abs(photo.pixels - expected).mean() < 12


def test_a_large_turned_picture_is_a_view_of_the_same(monkeypatch, tmp_path, picture):
    exif = Image.Exif()
    for orientation in VIEWER:
        exif[274] = orientation
        path = saved(tmp_path, picture, f"{orientation}.png", exif=exif)
        usual = load_photo(path)
        with monkeypatch.context() as patch:
            patch.setattr("cutface.vision.photo._LARGE", 0)
            large = load_photo(path)
        assert np.array_equal(usual.pixels, large.pixels)
        assert np.array_equal(usual.linear(window=(1, 2, 9, 11)), large.linear(window=(1, 2, 9, 11)))


def test_senseless_orientation_leaves_the_picture_as_stored(tmp_path, picture):
    exif = Image.Exif()
    exif[274] = 77
    photo = load_photo(saved(tmp_path, picture, "a.png", exif=exif))
    assert photo.orientation == 1
    assert np.array_equal(photo.pixels, picture)


# --- resolution and camera -------------------------------------------------------------------


@pytest.mark.parametrize("name", ["a.jpg", "a.png", "a.tif", "a.bmp"])
def test_resolution_of_each_axis(tmp_path, picture, name):
    dpi = (300, 300) if name == "a.bmp" else (300, 600)
    photo = load_photo(saved(tmp_path, picture, name, dpi=dpi))
    assert photo.resolution_dpi == pytest.approx(dpi, rel=1e-4)
    assert photo.resolution_problem is None


def test_resolution_turns_with_the_picture(tmp_path, picture):
    exif = Image.Exif()
    exif[274] = 6
    photo = load_photo(saved(tmp_path, picture, "a.jpg", dpi=(300, 600), exif=exif))
    assert photo.resolution_dpi == pytest.approx((600, 300))


@pytest.mark.parametrize(("x", "unit", "dpi"), [(200.0, 2, 200.0), (200.0, 3, 508.0), (72.0, 2, 72.0)])
def test_resolution_by_exif(tmp_path, picture, x, unit, dpi):
    exif = Image.Exif()
    exif.update({282: x, 283: x, 296: unit})
    photo = load_photo(saved(tmp_path, picture, "a.webp", exif=exif))
    assert photo.resolution_dpi == pytest.approx((dpi, dpi))


@pytest.mark.parametrize("x", [0.0, 1.0, 29.0, 13000.0])
def test_senseless_resolution_is_not_used(tmp_path, picture, x):
    exif = Image.Exif()
    exif.update({282: x, 283: 300.0, 296: 2})
    photo = load_photo(saved(tmp_path, picture, "a.webp", exif=exif))
    assert photo.resolution_dpi is None
    assert photo.resolution_problem is not None
    assert "makes no sense" in photo.resolution_problem


def test_contradicting_resolutions_are_not_used(tmp_path, picture):
    exif = Image.Exif()
    exif.update({282: 600.0, 283: 600.0, 296: 2})
    photo = load_photo(saved(tmp_path, picture, "a.jpg", exif=exif, dpi=(300, 300)))
    assert photo.resolution_dpi is None
    assert photo.resolution_problem is not None
    assert "two resolutions" in photo.resolution_problem


def test_a_default_does_not_contradict(tmp_path, picture):
    exif = Image.Exif()
    exif.update({282: 600.0, 283: 600.0, 296: 2})
    photo = load_photo(saved(tmp_path, picture, "a.jpg", exif=exif, dpi=(72, 72)))
    assert photo.resolution_dpi == pytest.approx((600, 600))


def test_camera_and_lens(tmp_path, picture):
    exif = Image.Exif()
    exif.update({271: "Larkspur\0", 272: "Bench 2\n"})
    exif.get_ifd(0x8769).update({37386: 5.7, 41989: 26, 36867: "2031:04:02 10:20:30"})
    photo = load_photo(saved(tmp_path, picture, "a.jpg", exif=exif))
    assert (photo.make, photo.model, photo.taken) == ("Larkspur", "Bench 2", "2031:04:02 10:20:30")
    assert photo.focal_length_mm == pytest.approx(5.7)
    assert photo.focal_length_35mm == 26
    assert photo.digital_zoom is None


# --- linear light ----------------------------------------------------------------------------


def grey_ramp(**fields) -> Photo:
    values = np.arange(256, dtype=np.uint8).reshape(16, 16)
    return Photo(path=None, sha256="", pixels=values, **fields)  # pyright: ignore[reportArgumentType]


def test_srgb_curve():
    light = grey_ramp().linear()
    # IEC 61966-2-1, from memory: 0.5 decodes to 0.214, 10/255 lies on the straight part.
    assert np.interp(127.5, np.arange(256), light.ravel()) == pytest.approx(0.2140, abs=2e-4)
    assert light.ravel()[10] == pytest.approx(10 / 255 / 12.92, rel=1e-5)
    assert light.ravel()[[0, 255]].tolist() == [0, 1]


def test_other_curves():
    encoded = np.arange(256).reshape(16, 16) / 255
    assert grey_ramp().linear(tone="linear") == pytest.approx(encoded, abs=1e-6)
    assert grey_ramp().linear(tone=1.8) == pytest.approx(encoded**1.8, abs=1e-6)
    with pytest.raises(ValueError, match="tone"):
        grey_ramp().linear(tone=9.0)


def test_weights_and_window(tmp_path, picture):
    photo = load_photo(saved(tmp_path, picture, "a.png"))
    light = np.where(picture / 255 <= 0.04045, picture / 255 / 12.92, ((picture / 255 + 0.055) / 1.055) ** 2.4)
    assert photo.linear() == pytest.approx(light @ [0.2126, 0.7152, 0.0722], abs=1e-6)
    assert photo.linear((0, 1, 0)) == pytest.approx(light[..., 1], abs=1e-6)
    assert photo.linear(window=(3, 4, 10, 20)) == pytest.approx(photo.linear()[4:20, 3:10])
    with pytest.raises(ValueError, match="window"):
        photo.linear(window=(0, 0, 41, 3))


def test_sixteen_bits_agree_with_eight():
    eight = grey_ramp()
    sixteen = Photo(path=eight.path, sha256="", pixels=eight.pixels.astype(np.uint16) * 257)
    assert sixteen.linear() == pytest.approx(eight.linear(), abs=1e-6)


def matrix_profile(gamma: float, primaries: np.ndarray) -> bytes:
    """A minimal ICC display profile with one exponent and the given primaries in D50 XYZ (columns)."""

    def xyz(vector):
        return b"XYZ \0\0\0\0" + struct.pack(">3i", *(round(value * 65536) for value in vector))

    curve = b"curv\0\0\0\0" + struct.pack(">IH", 1, round(gamma * 256)) + b"\0\0"
    text = b"Bench profile\0"
    tags = {
        b"desc": b"desc\0\0\0\0" + struct.pack(">I", len(text)) + text + b"\0" * 80,
        b"wtpt": xyz(primaries.sum(axis=1)),
        **{name: xyz(primaries[:, i]) for i, name in enumerate((b"rXYZ", b"gXYZ", b"bXYZ"))},
        **dict.fromkeys((b"rTRC", b"gTRC", b"bTRC"), curve),
    }
    table, body = struct.pack(">I", len(tags)), b""
    start = 128 + 4 + 12 * len(tags)
    for name, content in tags.items():
        content += b"\0" * (-len(content) % 4)
        table += struct.pack(">4sII", name, start + len(body), len(content))
        body += content
    head = struct.pack(">I4sI4s4s4s", start + len(body), b"\0" * 4, 0x02400000, b"mntr", b"RGB ", b"XYZ ")
    head += b"\0" * 12 + b"acsp" + b"\0" * 28 + struct.pack(">3i", 63190, 65536, 54061)
    return head + b"\0" * (128 - len(head)) + table + body


# Colourants of a wide display (Display P3) adapted to D50, columns red, green, blue; from memory.
WIDE = np.array([[0.5151, 0.2919, 0.1572], [0.2412, 0.6922, 0.0666], [-0.0011, 0.0419, 0.7841]])


def test_embedded_profile_agrees_with_a_colour_engine(tmp_path):
    icc = matrix_profile(1.8, WIDE)
    colours = np.random.default_rng(3).integers(100, 180, (12, 12, 3), dtype=np.uint8)
    photo = load_photo(saved(tmp_path, colours, "a.png", icc_profile=icc))
    assert photo.icc_name == "Bench profile"
    # Little CMS converts to encoded sRGB of 8 bits; decoded again it must be the same light to that rounding.
    source = ImageCms.ImageCmsProfile(io.BytesIO(icc))
    converted = ImageCms.profileToProfile(Image.fromarray(colours), source, ImageCms.createProfile("sRGB"))
    assert converted is not None
    reference = Photo(path=photo.path, sha256="", pixels=np.asarray(converted))
    for weights in ((0.2126, 0.7152, 0.0722), (0, 1, 0)):
        assert photo.linear(weights) == pytest.approx(reference.linear(weights), abs=0.006)
    assert np.abs(photo.linear() - photo.linear(tone="srgb")).max() > 0.02


def test_srgb_profile_changes_nothing(tmp_path, picture):
    icc = ImageCms.ImageCmsProfile(ImageCms.createProfile("sRGB")).tobytes()
    photo = load_photo(saved(tmp_path, picture, "a.jpg", icc_profile=icc))
    assert photo.profile is not None
    assert photo.linear() == pytest.approx(photo.linear(tone="srgb"), abs=2e-4)


def test_a_profile_that_cannot_be_used_is_said(tmp_path, picture):
    icc = ImageCms.ImageCmsProfile(ImageCms.createProfile("LAB")).tobytes()
    photo = load_photo(saved(tmp_path, picture, "a.png", icc_profile=icc))
    assert [notice.code for notice in photo.notices] == ["profile-not-used"]
    assert np.array_equal(photo.linear(), photo.linear(tone="srgb"))


def png_chunk(kind: bytes, body: bytes) -> bytes:
    return struct.pack(">I", len(body)) + kind + body + struct.pack(">I", zlib.crc32(kind + body))


def test_exponent_stated_by_a_png(tmp_path):
    path = saved(tmp_path, np.arange(256, dtype=np.uint8).reshape(16, 16), "a.png")
    data = path.read_bytes()
    path.write_bytes(data[:33] + png_chunk(b"gAMA", struct.pack(">I", 100000)) + data[33:])
    photo = load_photo(path)
    assert photo.linear() == pytest.approx(photo.linear(tone="linear"), abs=1e-4)


# --- files that are not whole, and hostile ones ----------------------------------------------


@pytest.mark.parametrize("name", ["a.jpg", "a.png", "a.tif", "a.bmp", "a.ppm", "a.webp", "a.jp2", "a.avif"])
def test_a_file_cut_anywhere_is_refused(tmp_path, name):
    noise = np.random.default_rng(5).integers(0, 255, (60, 80, 3), dtype=np.uint8)
    whole = saved(tmp_path, noise, name).read_bytes()
    for share in (0.02, 0.3, 0.6, 0.95):
        path = tmp_path / f"cut_{name}"
        path.write_bytes(whole[: int(len(whole) * share)])
        assert refusal(path).code in ("file-cut-short", "file-damaged", "file-kind")


def test_a_jpeg_whose_rest_was_lost_before_the_end_marker_is_refused(tmp_path, capfd):
    noise = np.random.default_rng(5).integers(0, 255, (60, 80, 3), dtype=np.uint8)
    whole = saved(tmp_path, noise, "a.jpg").read_bytes()
    path = tmp_path / "lost.jpg"
    path.write_bytes(whole[: len(whole) // 2] + b"\xff\xd9")
    assert refusal(path).code == "file-cut-short"
    assert capfd.readouterr().err == ""


def test_a_png_with_rows_missing_is_refused(tmp_path):
    for depth in (8, 16):
        header = struct.pack(">IIBBBBB", 40, 40, depth, 2, 0, 0, 0)
        rows = zlib.compress((b"\0" + bytes(40 * 3 * depth // 8)) * 20)
        path = tmp_path / "rows.png"
        chunks = ((b"IHDR", header), (b"IDAT", rows), (b"IEND", b""))
        path.write_bytes(b"\x89PNG\r\n\x1a\n" + b"".join(png_chunk(*chunk) for chunk in chunks))
        assert refusal(path).code in ("file-cut-short", "file-damaged")


def test_an_altered_png_is_refused(tmp_path, picture):
    path = saved(tmp_path, picture, "a.png")
    data = bytearray(path.read_bytes())
    data[len(data) // 2] ^= 0x10
    path.write_bytes(data)
    assert refusal(path).code == "file-cut-short"


@pytest.mark.parametrize(
    ("content", "code"),
    [
        (b"", "file-empty"),
        (b"8BPS\0\1" + bytes(40), "file-kind"),
        (b"no picture at all", "file-kind"),
        (b"\0\0\0\x18ftypmp42" + bytes(40), "file-kind"),
        (b"\xff\xd8\xff", "file-damaged"),
        (b"\x89PNG\r\n\x1a\n", "file-damaged"),
        (b"GIF89a", "file-damaged"),
        (b"P5 0 0 255\n", "file-damaged"),
    ],
)
def test_what_is_no_picture_is_named(tmp_path, content, code):
    path = tmp_path / "thing.jpg"
    path.write_bytes(content)
    error = refusal(path)
    assert error.code == code
    assert "thing.jpg" in error.message


def test_missing_folder_and_device(tmp_path):
    assert refusal(tmp_path / "none.jpg").code == "file-missing"
    assert refusal(tmp_path).code == "file-kind"
    if hasattr(os, "mkfifo"):
        os.mkfifo(tmp_path / "pipe.jpg")
        assert refusal(tmp_path / "pipe.jpg").code == "file-kind"
    assert refusal("a\0b.jpg").code in ("file-missing", "file-unreadable")


def test_a_name_cannot_break_the_message(tmp_path):
    path = tmp_path / "two\nlines\x1b[31m.jpg"
    path.write_bytes(b"x")
    assert "\x1b" not in str(refusal(path))


def test_raw_camera_files_are_not_read_by_their_preview(tmp_path, picture):
    Image.fromarray(picture).save(tmp_path / "a.dng", format="TIFF", tiffinfo={50706: b"\1\4\0\0"})
    # With the reader of raw files or without.
    assert refusal(tmp_path / "a.dng").code in ("file-raw", "reader-missing")
    Image.fromarray(picture).save(tmp_path / "b.nef", format="TIFF", tiffinfo={254: 1})
    assert refusal(tmp_path / "b.nef").code == "file-raw"


def test_too_many_pixels_are_refused_from_the_header(tmp_path, picture):
    path = saved(tmp_path, picture, "a.png")
    assert refusal(path, max_megapixels=0.0005).code == "file-too-large"
    header = struct.pack(">IIBBBBB", 60000, 60000, 8, 2, 0, 0, 0)
    path.write_bytes(
        b"\x89PNG\r\n\x1a\n" + png_chunk(b"IHDR", header) + png_chunk(b"IDAT", b"") + png_chunk(b"IEND", b"")
    )
    assert refusal(path).code == "file-too-large"


def test_a_frame_larger_than_its_screen_does_not_take_memory(tmp_path):
    # A screen of 32 x 32, a frame of 65535 x 65535 that is to be restored to the background.
    screen = b"GIF89a" + struct.pack("<HHBBB", 32, 32, 0xF0, 0, 0) + bytes(6)
    control = b"\x21\xf9\x04" + struct.pack("<BHBB", 0x09, 0, 0, 0)
    frame = b"\x2c" + struct.pack("<HHHHB", 0, 0, 65535, 65535, 0) + b"\x02\x00"
    (tmp_path / "a.gif").write_bytes(screen + control + frame + b"\x3b")
    outcome, peak = opened_under_limits([tmp_path / "a.gif"])
    assert "limit" in outcome[str(tmp_path / "a.gif")]
    assert peak < 300


def test_the_limits_of_the_decoder_are_left_alone(tmp_path, picture):
    before = Image.MAX_IMAGE_PIXELS
    load_photo(saved(tmp_path, picture, "a.png"))
    assert before == Image.MAX_IMAGE_PIXELS
    assert not getattr(ImageFile, "LOAD_TRUNCATED_IMAGES", False)


def test_random_damage_ends_in_a_photo_or_one_line(tmp_path, picture):
    random = np.random.default_rng(11)
    for name in ("a.jpg", "a.png", "a.tif", "a.gif", "a.bmp", "a.webp", "a.jp2", "a.avif"):
        whole = saved(tmp_path, picture, name).read_bytes()
        for _ in range(25):
            data = bytearray(whole)
            for at in random.integers(0, len(data), 6):
                data[at] = random.integers(0, 256)
            path = tmp_path / f"bad_{name}"
            path.write_bytes(data)
            try:
                assert load_photo(path).linear().shape
            except FileError as error:
                assert "\n" not in str(error)


# Opens each file named on the command line and prints what came of it, under a limit of memory.
OPEN_UNDER_LIMITS = """
import json, sys
from cutface.props.errors import FileError
from cutface.vision.photo import load_photo
outcome = {}
for path in sys.argv[1:]:
    try:
        photo = load_photo(path)
        photo.linear(window=(0, 0, min(photo.width, 500), min(photo.height, 500)))
        outcome[path] = "opened"
    except FileError as error:
        outcome[path] = str(error)
peak = next(int(line.split()[1]) / 1024 for line in open("/proc/self/status") if line.startswith("VmHWM"))
print(json.dumps({"outcome": outcome, "peak_mb": peak}))
"""


def opened_under_limits(paths) -> tuple[dict[str, str], float]:
    """What came of each file in a fresh process stopped after 10 s, and its peak memory in MB."""
    if not Path("/proc/self/status").exists():
        pytest.skip("no account of a process's peak memory here")
    run = subprocess.run(
        [sys.executable, "-c", OPEN_UNDER_LIMITS, *map(str, paths)], capture_output=True, text=True, timeout=10
    )
    assert run.returncode == 0, run.stderr
    assert run.stderr == ""
    result = json.loads(run.stdout)
    return result["outcome"], result["peak_mb"]


@pytest.mark.parametrize("name", ["damaged", "heif"])
def test_odd_and_hostile_files_open_or_say_why_not(name):
    files = photo_set(name)
    outcome, peak = opened_under_limits(files)
    assert set(outcome) == set(map(str, files))
    assert all("\n" not in line for line in outcome.values())
    assert peak < 1024


def test_a_bomb_within_the_limit_of_pixels_stays_within_memory(tmp_path):
    # Few bytes that decode to many megapixels, by decoders that need very different memory.
    blank = Image.new("L", (15000, 13000))
    blank.save(tmp_path / "grey.png")
    Image.new("RGB", (8000, 5000)).save(tmp_path / "colour.webp", lossless=True, method=0)
    Image.new("RGB", (15000, 13000)).save(tmp_path / "plain.jpg")
    for path in sorted(tmp_path.iterdir()):
        outcome, peak = opened_under_limits([path])
        assert peak < 1024, (path.name, outcome)


def test_photos_turned_in_the_camera_are_the_same_upright():
    files = photo_set("orientation")
    first = load_photo(files[0])
    for path in files[1:]:
        other = load_photo(path)
        assert other.pixels.shape == first.pixels.shape
        assert np.abs(other.pixels.astype(int) - first.pixels).mean() < 5


@pytest.mark.parametrize(
    ("name", "dpi"),
    [
        ("exif-200dpcm.jpg", 508),
        ("photoshop-200dpi.jpg", 200),
        ("no-dpi-in-exif.jpg", None),
        ("exif-dpi-zerodivision.jpg", None),
        ("bmp_b_baddens2.bmp", None),
        ("hopper_float_dpi_2.tif", 72.8),
        ("16bit.deflate.tif", None),
    ],
)
def test_odd_resolution_tags(name, dpi):
    photo = load_photo(next(path for path in photo_set("damaged") if path.name == name))
    assert photo.resolution_dpi == (None if dpi is None else pytest.approx((dpi, dpi)))


def test_a_turned_phone_picture_of_the_heif_family():
    photo = load_photo(next(path for path in photo_set("heif") if path.name == "arrow.heic"))
    assert (photo.width, photo.height) == (3024, 4032)
    assert photo.icc_name == "Display P3"
    assert photo.profile is not None
