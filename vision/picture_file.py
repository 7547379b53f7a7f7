"""The kinds of picture files that can be read, and how their pixels are got out of them safely.

A file is recognised by its first bytes, its header is checked against the limits before anything is
decoded, and half a picture is never returned. Knows nothing of what the pixels mean, and leaves them
lying as stored (turning is the business of photo.py).
"""

from __future__ import annotations

import importlib
import io
import logging
import math
import re
import struct
import tempfile
import threading
import warnings
import zlib
from collections.abc import Iterator, Mapping
from contextlib import contextmanager
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from ..props.errors import FileError
from ..props.result import Notice
from .colour_profile import ColourProfile, power_profile, profile_name, read_profile
from .decoder_messages import decoder_messages
from .pdf_file import BYTES_PER_PIXEL as PDF_BYTES_PER_PIXEL
from .pdf_file import no_such_page, read_page
from .raw_file import BYTES_PER_PIXEL as RAW_BYTES_PER_PIXEL
from .raw_file import develop, is_raw, open_raw, raw_size

# Memory for a file and its decoding, in bytes for each pixel of the limit: 200 megapixels may take 840 MB,
# so that the whole process stays below 1 GiB.
_BYTES_PER_ALLOWED_PIXEL = 4.2
# A progressive picture has some ten scans; each costs a pass over all of it.
_MOST_SCANS = 100
# Decoded pictures above this many bytes are not copied on the way.
_LARGE = 256 * 2**20
# Rows converted at a time, so that a conversion needs no second picture.
_BAND = 256

# Name of a kind -> (Pillow's name, bytes per pixel and channel that its decoder holds beside the picture at its worst).
_KINDS = {
    "JPEG": ("JPEG", 0.0),
    "PNG": ("PNG", 0.0),
    "TIFF": ("TIFF", 0.0),
    "BMP": ("BMP", 0.0),
    "GIF": ("GIF", 1.0),
    "WebP": ("WEBP", 3.0),
    "AVIF": ("AVIF", 3.0),
    "JPEG 2000": ("JPEG2000", 4.0),
    "PNM": ("PPM", 0.0),
    "HEIF": ("", 3.0),
}
# Bytes per pixel of Pillow's modes; all others take 4.
_MODE_BYTES = {"1": 1, "L": 1, "P": 1, "I;16": 2, "I;16B": 2, "I;16L": 2, "I;16N": 2}

# Kinds of file that people hand over and that are not pictures of this sort: (first bytes, offset, what, remedy).
_OTHERS = (
    (b"8BPS", 0, "a layered picture of a drawing program", "Export it as PNG or TIFF."),
    (b"PK\x03\x04", 0, "a ZIP archive", "Unpack it and give the picture inside."),
    (b"ftyp", 4, "a film or another file of that family", "Save a single picture as JPEG or PNG."),
    (b"<svg", 0, "a vector drawing", "Give the photo or scan itself."),
    (b"<?xml", 0, "an XML document", "Give the photo or scan itself."),
)
_HEIF_BRANDS = {b"heic", b"heix", b"heim", b"heis", b"hevc", b"hevx", b"hevm", b"hevs", b"mif1", b"mif2", b"msf1"}
_AVIF_BRANDS = {b"avif", b"avis"}

_DNG_VERSION, _SUBFILE_TYPE, _PHOTOMETRIC, _ORIENTATION, _CFA = 50706, 254, 262, 274, 32803
_BITS_PER_SAMPLE, _PLANAR, _RESOLUTION_TAGS, _SUB_DIRECTORIES, _MAKE = 258, 284, (282, 283, 296), 330, 271

# PQ and HLG (ITU-T H.273, table 3).
_HDR_CURVES = (16, 18)

_pillow_lock = threading.RLock()


@dataclass(frozen=True, eq=False)
class Picture:
    """A decoded file.

    pixels : (h, w, 3) RGB or (h, w) grey, uint8 or uint16, as stored
    bits : bits of a sample in the file
    tags : EXIF and TIFF tags
    info : what Pillow found in the header
    upright : True if the decoder has already turned the picture
    profile : curves and primaries, or None to take it as sRGB
    icc_name : description of the embedded profile
    """

    pixels: NDArray[Any]
    file_format: str
    bits: int
    tags: Mapping[int, Any] = field(default_factory=dict)
    info: Mapping[str, Any] = field(default_factory=dict)
    upright: bool = False
    profile: ColourProfile | None = None
    icc_name: str | None = None
    notices: tuple[Notice, ...] = ()


def read_picture(
    data: bytes, name: str, max_megapixels: float = 200, page: int | None = None, page_dpi: float | None = None
) -> Picture:
    """Decode the bytes of a picture file.

    name : what to call the file in messages
    page : which picture of several, from 1; None takes the first (main) one, and says so
    page_dpi : at which a page of a PDF document that is no scan is drawn
    Raises FileError: not a kind that can be read, too large, cut short, damaged, no such page, a reader is missing.
    """
    kind = recognise(data)
    if kind is None:
        raise _not_a_picture(data, name)
    if kind in _SINGLE and page not in (None, 1):
        raise no_such_page(name, page, 1)
    try:
        with _pillow_limited(max_megapixels):
            if kind == "HEIF":
                return _read_heif(data, name, max_megapixels, page)
            if kind == "PDF":
                return _read_pdf(data, name, max_megapixels, page, page_dpi)
            if kind == "RAW":
                return _read_raw(data, name, max_megapixels, {})
            tags = _directory(data) if kind == "TIFF" else {}
            if _is_raw_tiff(data, tags):
                return _read_raw(data, name, max_megapixels, tags)
            return _read(kind, data, name, max_megapixels, page)
    except FileError:
        raise
    except MemoryError:
        raise FileError(
            "file-too-large",
            f"{name} states more pixels than the limit of {max_megapixels:g} megapixels, or than memory can hold.",
            _SMALLER,
        ) from None
    except Exception as error:
        # Decoders meet hostile bytes with errors of every class; to a person they all mean the same.
        raise _damaged(name, kind, data) from error


# Kinds that never hold more than one picture.
_SINGLE = {"JPEG", "BMP", "JPEG 2000", "PNM", "RAW"}


def recognise(data: bytes) -> str | None:
    """The kind of picture by its first bytes, or None."""
    if is_raw(data):
        return "RAW"
    if data[:4] == b"%PDF":
        return "PDF"
    if data[:3] == b"\xff\xd8\xff":
        return "JPEG"
    if data[:8] == b"\x89PNG\r\n\x1a\n":
        return "PNG"
    if data[:4] in (b"II*\0", b"MM\0*", b"II+\0", b"MM\0+"):
        return "TIFF"
    if data[:2] == b"BM":
        return "BMP"
    if data[:6] in (b"GIF87a", b"GIF89a"):
        return "GIF"
    if data[:4] == b"RIFF" and data[8:12] == b"WEBP":
        return "WebP"
    if data[:12] == b"\0\0\0\x0cjP  \r\n\x87\n" or data[:4] == b"\xff\x4f\xff\x51":
        return "JPEG 2000"
    if re.match(rb"P[1-6][\s#]", data[:3]):
        return "PNM"
    if data[4:8] == b"ftyp":
        size = struct.unpack(">I", data[:4])[0]
        brands = {data[i : i + 4] for i in (8, *range(16, min(size, 256), 4))}
        if brands & _AVIF_BRANDS:
            return "AVIF"
        if brands & _HEIF_BRANDS:
            return "HEIF"
    return None


@contextmanager
def _pillow_limited(max_megapixels: float) -> Iterator[None]:
    """Pillow with our limit of pixels as a hard one, and silent."""
    from PIL import Image

    log = logging.getLogger("PIL")
    quiet = logging.NullHandler()
    with _pillow_lock, warnings.catch_warnings():
        warnings.simplefilter("ignore")
        warnings.simplefilter("error", Image.DecompressionBombWarning)
        limit, Image.MAX_IMAGE_PIXELS = Image.MAX_IMAGE_PIXELS, int(max_megapixels * 1e6)
        log.addHandler(quiet)
        try:
            yield
        except (Image.DecompressionBombWarning, Image.DecompressionBombError):
            raise MemoryError from None
        finally:
            log.removeHandler(quiet)
            Image.MAX_IMAGE_PIXELS = limit


def _directory(data: bytes) -> dict[int, Any]:
    """Tags of a TIFF file's first directory and its EXIF, where they can be read."""
    from PIL import Image

    exif = Image.Exif()
    try:
        exif.load_from_fp(io.BytesIO(data))
        return _merged(exif)
    except Exception:
        # Whether the file is damaged is for its decoder to say.
        return {}


def _is_raw_tiff(data: bytes, tags: Mapping[int, Any]) -> bool:
    """Whether a TIFF file is a raw camera file: says so, or leads with a camera's preview of what lies in it."""
    subfile = tags.get(_SUBFILE_TYPE)
    preview = isinstance(subfile, int) and subfile & 1 == 1 and _SUB_DIRECTORIES in tags and _MAKE in tags
    return data[8:10] == b"CR" or _DNG_VERSION in tags or tags.get(_PHOTOMETRIC) == _CFA or preview


def _read_raw(data: bytes, name: str, max_megapixels: float, tags: Mapping[int, Any]) -> Picture:
    raw = open_raw(data, name)
    try:
        remedy = "Develop it to a JPEG without sharpening or lens correction."
        _check_size(raw_size(raw), RAW_BYTES_PER_PIXEL, len(data), name, max_megapixels, remedy)
        pixels, turn = develop(raw)
    finally:
        raw.close()
    # A raw file's resolution is that of no picture; its own preview may lie otherwise than the sensor.
    kept = {tag: value for tag, value in tags.items() if tag not in _RESOLUTION_TAGS}
    return Picture(pixels, "RAW", 16, {**kept, _ORIENTATION: turn}, profile=power_profile(1.0, 3))


def _read_pdf(data: bytes, name: str, max_megapixels: float, page: int | None, dpi: float | None) -> Picture:
    def check(size: tuple[int, int]) -> None:
        remedy = "Draw it at a lower resolution, or save the scan as JPEG."
        _check_size(size, PDF_BYTES_PER_PIXEL, len(data), name, max_megapixels, remedy)

    found = read_page(data, name, page or 1, dpi, check)
    notices = [_several_pages(name)] if found.pages > 1 and page is None else []
    if found.drawn:
        notices.append(
            Notice(
                "page-drawn",
                f"The page of {name} is no single scan; it was drawn at {found.resolution_dpi[0]:.4g} dots per inch.",
                "State another resolution with --page-dpi if that is too coarse.",
            )
        )
    info = {"dpi": found.resolution_dpi}
    profile = power_profile(1.0, 3 if found.pixels.ndim == 3 else 1) if found.coverage else None
    return Picture(found.pixels, "PDF", 8, info=info, upright=True, profile=profile, notices=tuple(notices))


def _read(kind: str, data: bytes, name: str, max_megapixels: float, page: int | None) -> Picture:
    pillow_name, decoder = _KINDS[kind]
    image = _open(pillow_name, data)
    several = kind in ("TIFF", "GIF", "PNG", "WebP", "AVIF") and getattr(image, "is_animated", False)
    if page is not None and page != 1:
        count = int(getattr(image, "n_frames", 1)) if several else 1
        if not 1 <= page <= count:
            raise no_such_page(name, page, count)
        image.seek(page - 1)
    cost = _MODE_BYTES.get(image.mode, 4) + _kept_bytes(image.mode) + decoder * len(image.getbands())
    if kind == "JPEG":
        complete, scans = jpeg_structure(data)
        if not complete:
            raise _cut_short(name, kind)
        if scans > _MOST_SCANS:
            raise _damaged(name, kind, data)
        if image.mode in ("L", "RGB"):
            kept = _kept_bytes(image.mode)
            cost = kept if kept * math.prod(image.size) > _LARGE else 2 * kept
        cost += _coefficient_bytes(image) if scans > 1 else 0.0
    elif kind == "PNG" and data[24] == 16:
        cost = 12.0
    elif kind == "TIFF":
        # Pillow turns TIFF pictures itself, by a copy.
        cost += _MODE_BYTES.get(image.mode, 4) if image.tag_v2.get(_ORIENTATION, 1) != 1 else 0
        cost = max(cost, 12.0) if _is_deep(image) else cost
    _check_size(image.size, cost, len(data), name, max_megapixels)
    if kind == "PNG" and not png_complete(data):
        raise _cut_short(name, kind)
    if kind == "AVIF" and not boxes_complete(data):
        raise _cut_short(name, kind)
    if kind == "TIFF":
        _check_tiff(image, name)
    info = dict(image.info)
    tags = _tags(image)
    notices = []
    if several and page is None:
        notices.append(_several_pages(name))

    with decoder_messages() as complaints:
        pixels, bits, more = _decode(kind, image, data, name, page or 1)
    if complaints or (kind == "PNG" and _may_lack_rows(data, pixels) and not png_rows_complete(data)):
        raise _cut_short(name, kind)
    notices += more
    profile, icc_name, more = _profile(info.get("icc_profile"), 3 if pixels.ndim == 3 else 1, info, name)
    return Picture(pixels, kind, bits, tags, info, kind == "TIFF", profile, icc_name, (*notices, *more))


def _decode(kind: str, image: Any, data: bytes, name: str, page: int) -> tuple[NDArray[Any], int, list[Notice]]:
    """Pixels, bits of a sample, notices; by OpenCV where it is faster or keeps 16 bits, else by Pillow."""
    pixels, bits = None, 8
    if kind == "JPEG" and image.mode in ("L", "RGB"):
        pixels = _decode_by_opencv(data, colour=image.mode == "RGB", depth=np.uint8, size=image.size)
    elif kind == "PNG" and image.mode == "RGB" and data[24] == 16 and "transparency" not in image.info:
        pixels, bits = _decode_by_opencv(data, colour=True, depth=np.uint16, size=image.size), 16
    elif kind == "TIFF" and _is_deep(image):
        pixels, bits = _decode_deep_tiff(data, page, image.size), 16
    if pixels is not None:
        return pixels, bits, []
    # Where the other decoder gave up, Pillow's has eight bits left.
    image.load()
    return _samples(image, name)


def _open(pillow_name: str, data: bytes) -> Any:
    """Pillow's view of the header, by the one plug-in that belongs to the kind."""
    from PIL import Image

    plugin = {"PPM": "Ppm", "TIFF": "Tiff", "WEBP": "WebP", "AVIF": "Avif", "JPEG2000": "Jpeg2K"}.get(pillow_name)
    importlib.import_module(f"PIL.{plugin or pillow_name.title()}ImagePlugin")
    return Image.open(io.BytesIO(data), formats=[pillow_name])


def _read_heif(data: bytes, name: str, max_megapixels: float, page: int | None) -> Picture:
    try:
        import pillow_heif
    except ImportError:
        raise FileError(
            "reader-missing",
            f"{name} is a HEIC/HEIF picture, and its reader is not installed.",
            "Install it with 'pip install pillow-heif', or convert the picture to JPEG.",
        ) from None
    from PIL import Image

    if not boxes_complete(data):
        raise _cut_short(name, "HEIF")
    file = pillow_heif.open_heif(io.BytesIO(data), convert_hdr_to_8bit=False)
    if page is not None and not 1 <= page <= len(file):
        raise no_such_page(name, page, len(file))
    main = file[file.primary_index if page is None else page - 1]
    samples = 2 if ";16" in main.mode else 1
    cost = len(main.mode.split(";")[0]) * (2 * samples + _KINDS["HEIF"][1])
    _check_size(main.size, cost, len(data), name, max_megapixels)
    stored = np.asarray(main)
    info = dict(main.info)
    channels = 1 if stored.ndim == 2 else stored.shape[2]
    if channels == 4:
        stored = _over_white(stored)
    notices = [_several_pages(name)] if len(file) > 1 and page is None else []
    if (info.get("nclx_profile") or {}).get("transfer_characteristics") in _HDR_CURVES:
        notices.append(
            Notice(
                "hdr-tones",
                f"{name} is stored with an HDR tone curve; its tones are taken as sRGB, which shifts blurred edges.",
                "Switch HDR off in the camera, or export the picture as an ordinary JPEG.",
            )
        )
    exif = Image.Exif()
    if info.get("exif"):
        exif.load(info["exif"])
    pixels = np.ascontiguousarray(stored)
    profile, icc_name, more = _profile(info.get("icc_profile"), 3 if pixels.ndim == 3 else 1, info, name)
    # The decoder applies the file's own turning; EXIF's would turn it twice.
    bits = int(info.get("bit_depth", 8))
    return Picture(pixels, "HEIF", bits, _merged(exif), info, True, profile, icc_name, (*notices, *more))


def _decode_by_opencv(data: bytes, colour: bool, depth: type, size: tuple[int, int]) -> NDArray[Any] | None:
    """Pixels by OpenCV's faster decoders, or None where it makes something else of the file."""
    import cv2

    flags = cv2.IMREAD_IGNORE_ORIENTATION | (cv2.IMREAD_COLOR_RGB if colour else cv2.IMREAD_GRAYSCALE)
    if depth is np.uint16:
        flags |= cv2.IMREAD_ANYDEPTH
    width, height = size
    shape = (height, width, 3) if colour else (height, width)
    if depth is np.uint8 and math.prod(shape) > _LARGE:
        # Decoding out of memory makes a second copy; reading a file into an array of ours does not.
        pixels = np.empty(shape, np.uint8)
        with tempfile.TemporaryDirectory() as folder:
            copy = Path(folder) / "picture"
            copy.write_bytes(data)
            if cv2.imread(str(copy), pixels, flags) is None:
                return None
        return pixels
    pixels = cv2.imdecode(np.frombuffer(data, np.uint8), flags)
    if pixels is None or pixels.dtype != depth or pixels.shape != shape:
        return None
    return pixels


def _is_deep(image: Any) -> bool:
    """Whether a TIFF picture has three colours of 16 bits side by side, of which Pillow keeps eight bits."""
    tags = image.tag_v2
    return (
        tuple(tags.get(_BITS_PER_SAMPLE, ())) == (16, 16, 16)
        and tags.get(_PHOTOMETRIC) == 2
        and tags.get(_PLANAR, 1) == 1
    )


def _decode_deep_tiff(data: bytes, page: int, size: tuple[int, int]) -> NDArray[Any] | None:
    """Pixels of 16 bits by OpenCV, turned as the file says (as Pillow does it); None where it cannot."""
    import cv2

    done, pages = cv2.imdecodemulti(np.frombuffer(data, np.uint8), cv2.IMREAD_UNCHANGED, None, (page - 1, page))
    if (
        not done
        or len(pages) != 1
        or pages[0].dtype != np.uint16
        or pages[0].shape
        not in (
            (size[1], size[0], 3),
            (size[0], size[1], 3),
        )
    ):
        return None
    return np.asarray(cv2.cvtColor(pages[0], cv2.COLOR_BGR2RGB))


def jpeg_structure(data: bytes) -> tuple[bool, int]:
    """(whether the first picture in a JPEG file runs to its end marker, number of its scans)."""
    at, scans = 2, 0
    while True:
        found = _JPEG_MARKER.search(data, at)
        if found is None:
            return False, scans
        marker, at = data[found.end() - 1], found.end()
        if marker == 0xD9:
            return True, scans
        if marker == 0xD8 or marker == 0x01:
            continue
        if at + 2 > len(data):
            return False, scans
        if marker == 0xDA:
            scans += 1
        at += struct.unpack(">H", data[at : at + 2])[0]


# In coded data 0xFF is followed by 0 or a restart marker; anything else begins a segment.
_JPEG_MARKER = re.compile(rb"\xff[^\x00\xd0-\xd7\xff]")


def png_complete(data: bytes) -> bool:
    """Whether the chunks of a PNG file that carry the picture are whole, up to the end chunk."""
    at = 8
    view = memoryview(data)
    while at + 12 <= len(data):
        length, kind = struct.unpack(">I4s", view[at : at + 8])
        end = at + 12 + length
        if end > len(data):
            return False
        if kind in (b"IHDR", b"PLTE", b"IDAT") and (
            zlib.crc32(view[at + 4 : end - 4]) != struct.unpack(">I", view[end - 4 : end])[0]
        ):
            return False
        if kind == b"IEND":
            return True
        at = end
    return False


def _may_lack_rows(data: bytes, pixels: NDArray[Any]) -> bool:
    # Rows that the data do not reach are left in one tone; passes and OpenCV's decoder leave other traces.
    return data[28] != 0 or pixels.dtype == np.uint16 or bool((pixels[-1] == pixels[-1, 0]).all())


def png_rows_complete(data: bytes) -> bool:
    """Whether the compressed data of a PNG file hold every row that its header states."""
    width, height, depth, colour, _, _, interlaced = struct.unpack(">IIBBBBB", data[16:29])
    bits = depth * {0: 1, 2: 3, 3: 1, 4: 2, 6: 4}.get(colour, 4)
    # First column and row, steps of the seven passes (PNG specification, section 8.2).
    passes = (
        ((0, 0, 8, 8), (4, 0, 8, 8), (0, 4, 4, 8), (2, 0, 4, 4), (0, 2, 2, 4), (1, 0, 2, 2), (0, 1, 1, 2))
        if interlaced
        else ((0, 0, 1, 1),)
    )
    expected = 0
    for x, y, step_x, step_y in passes:
        columns, rows = max(0, -((x - width) // step_x)), max(0, -((y - height) // step_y))
        if columns:
            expected += rows * (1 + (columns * bits + 7) // 8)
    inflater, found, at = zlib.decompressobj(), 0, 8
    while at + 12 <= len(data) and found < expected:
        length, kind = struct.unpack(">I4s", data[at : at + 8])
        body = data[at + 8 : at + 8 + length] if kind == b"IDAT" else b""
        while body and found < expected:
            found += len(inflater.decompress(body, 1 << 20))
            body = inflater.unconsumed_tail
        at += 12 + length
    return found + len(inflater.flush()) >= expected


def boxes_complete(data: bytes) -> bool:
    """Whether the outermost boxes of a HEIF or AVIF file (ISO 14496-12) end within it."""
    at = 0
    while at + 8 <= len(data):
        size = struct.unpack(">I", data[at : at + 4])[0]
        if size == 1 and at + 16 <= len(data):
            size = struct.unpack(">Q", data[at + 8 : at + 16])[0]
        if size == 0:
            return True
        if size < 8:
            return False
        at += size
    return at <= len(data)


def _coefficient_bytes(image: Any) -> float:
    """Bytes per pixel of the coefficients that a picture in several scans keeps."""
    layers = [(layer[1], layer[2]) for layer in image.layer]
    widest = max(h for h, _ in layers) * max(v for _, v in layers)
    return 2.0 * sum(h * v for h, v in layers) / max(widest, 1)


def _check_size(
    size: tuple[int, int],
    bytes_per_pixel: float,
    file_bytes: int,
    name: str,
    max_megapixels: float,
    remedy: str = "Save it as plain (not progressive) JPEG.",
) -> None:
    width, height = size
    if width < 1 or height < 1:
        raise FileError("file-damaged", f"{name} states a size of {width} x {height} pixels.", _SAVE_AGAIN)
    if width * height > max_megapixels * 1e6:
        raise FileError(
            "file-too-large",
            f"{name} states {width} x {height} pixels ({width * height / 1e6:.0f} megapixels); "
            f"the limit is {max_megapixels:g}.",
            _SMALLER,
        )
    needed, allowed = width * height * bytes_per_pixel + file_bytes, max_megapixels * 1e6 * _BYTES_PER_ALLOWED_PIXEL
    if needed > allowed:
        raise FileError(
            "file-too-large",
            f"Decoding {name} ({width} x {height} pixels) may take {needed / 1e6:.0f} MB; the limit is "
            f"{allowed / 1e6:.0f}.",
            f"{remedy} {_SMALLER}",
        )


def _check_tiff(image: Any, name: str) -> None:
    tags = image.tag_v2
    if isinstance(tags.get(_SUBFILE_TYPE), int) and tags[_SUBFILE_TYPE] & 1:
        raise FileError(
            "file-raw",
            f"The page of {name} is only a reduced preview (as in raw camera files).",
            "State another page with --page, or export the full picture as TIFF, PNG or JPEG.",
        )


def _samples(image: Any, name: str) -> tuple[NDArray[Any], int, list[Notice]]:
    """The pixels of a loaded Pillow image as grey or RGB samples, bits of a sample, notices."""
    mode, notices = image.mode, []
    width, height = image.size
    if mode == "1":
        notices.append(
            Notice(
                "two-tones",
                f"{name} has only black and white, no grey: edges cannot be located within a pixel.",
                "Scan in grey or colour.",
            )
        )
    elif mode in ("I", "F"):
        low, high = image.getextrema()
        if mode == "F" or low < 0 or high > 65535:
            raise FileError(
                "file-samples",
                f"{name} stores its pixels as {'fractions' if mode == 'F' else 'signed or 32-bit numbers'}, "
                "whose white is not known.",
                "Save it with 8 or 16 bits a sample.",
            )
    elif mode == "CMYK":
        notices.append(
            Notice(
                "printing-colours",
                f"{name} is stored in printing colours (CMYK); its tones were converted.",
                "Export the original picture in RGB.",
            )
        )
    elif mode not in _CONVERTIBLE and not mode.startswith("I;16"):
        raise FileError("file-samples", f"{name} is stored in {mode} colours.", "Save it in RGB or grey.")
    wide = mode.startswith("I")
    grey = wide or mode in ("1", "L", "LA", "La")
    transparent = mode in ("RGBA", "RGBa", "LA", "La", "PA") or "transparency" in image.info
    target = ("L" if grey else "RGB") + ("A" if transparent else "")
    pixels = np.empty((height, width) if grey else (height, width, 3), np.uint16 if wide else np.uint8)
    for top in range(0, height, _BAND):
        band = image.crop((0, top, width, min(top + _BAND, height)))
        if not wide:
            band.info = image.info
            if mode in ("RGBa", "La"):
                band = band.convert(mode[:-1] + "A")
            band = band.convert(target)
        samples = np.asarray(band)
        if transparent and not wide:
            samples = _over_white(samples)
        pixels[top : top + _BAND] = samples.reshape(pixels[top : top + _BAND].shape)
    if wide and image.format == "TIFF" and image.tag_v2.get(_PHOTOMETRIC) == 0:
        np.subtract(65535, pixels, out=pixels)
    return pixels, 1 if mode == "1" else 16 if wide else 8, notices


_CONVERTIBLE = ("RGB", "RGBA", "RGBX", "RGBa", "P", "PA", "LA", "La", "L", "YCbCr")


def _kept_bytes(mode: str) -> int:
    """Bytes per pixel of what we keep of a picture in a mode of Pillow's."""
    return 2 if mode.startswith("I") else 1 if mode in ("1", "L", "LA", "La") else 3


def _over_white(rgba: NDArray[Any]) -> NDArray[Any]:
    """Colours (and alpha, last) laid over white paper."""
    white = np.iinfo(rgba.dtype).max
    colour, alpha = rgba[..., :-1], rgba[..., -1:]
    if alpha.min() == white:
        return np.ascontiguousarray(colour)
    mixed = colour.astype(np.float32) * alpha + white * (white - alpha.astype(np.float32))
    return (mixed / white + 0.5).astype(rgba.dtype)


def _profile(
    icc: bytes | None, channels: int, info: Mapping[str, Any], name: str
) -> tuple[ColourProfile | None, str | None, list[Notice]]:
    if icc:
        title, profile = profile_name(icc), read_profile(icc)
        if profile is not None and profile.channels == channels:
            return profile, title, []
        notice = Notice(
            "profile-not-used",
            f"The colour profile of {name} ({title}) is not of the matrix kind; its tones are taken as sRGB.",
            "Export the picture in sRGB.",
        )
        return None, title, [notice]
    gamma = info.get("gamma")
    # sRGB's own statement in this chunk is 0.45455.
    if "srgb" not in info and isinstance(gamma, float) and 0.2 <= gamma <= 5 and abs(gamma - 0.45455) > 0.02:
        return power_profile(1 / gamma, channels), None, []
    return None, None, []


def _tags(image: Any) -> dict[int, Any]:
    try:
        return _merged(image.getexif())
    except Exception:
        # Metadata is never a reason to lose the picture.
        return {}


def _merged(exif: Any) -> dict[int, Any]:
    tags = dict(exif)
    try:
        tags.update(exif.get_ifd(0x8769))
    except Exception:
        return tags
    return tags


_SMALLER = "Give a smaller picture of the same face, or raise the limit if the file is trusted."
_SAVE_AGAIN = "Save or copy the picture again from its source."


def _several_pages(name: str) -> Notice:
    return Notice(
        "several-pages",
        f"{name} holds several pictures; the first (main) one is used.",
        "State another one by its number with --page.",
    )


def _cut_short(name: str, kind: str) -> FileError:
    return FileError(
        "file-cut-short", f"{name} is a {kind} picture of which a part is missing or altered.", _SAVE_AGAIN
    )


def _damaged(name: str, kind: str, data: bytes) -> FileError:
    return FileError(
        "file-damaged", f"{name} ({len(data)} bytes) looks like a {kind} picture but is damaged.", _SAVE_AGAIN
    )


def _not_a_picture(data: bytes, name: str) -> FileError:
    for start, offset, what, remedy in _OTHERS:
        if data[offset : offset + len(start)] == start:
            return FileError("file-kind", f"{name} is {what}, not a photo or scan.", remedy)
    return FileError(
        "file-kind",
        f"{name} is not a picture of a known kind.",
        "Give a JPEG, PNG, TIFF, HEIC, WebP, AVIF, BMP, JPEG 2000, PNM, PDF or raw camera file.",
    )
