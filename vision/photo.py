"""A photo or scan as the rest of the program sees it: upright pixels, linear light, and what the file says.

Opening is safe for files from strangers: everything ends in a Photo or in a FileError of one line.
Does not know what is in the picture.
"""

from __future__ import annotations

import hashlib
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from ..props.errors import FileError
from ..props.result import Notice
from .colour_profile import ColourProfile, Tone, tone_curve
from .metadata import camera, orientation, resolution
from .picture_file import read_picture

# Shares of sRGB's red, green and blue in luminance (IEC 61966-2-1).
LUMINANCE = (0.2126, 0.7152, 0.0722)

# The file format of raw camera files.
RAW = "RAW"
# A turned picture above this many bytes is kept as a view, because a copy would take as much again.
_LARGE = 256 * 2**20
# Rows taken at a time: three channels of one row of a wide picture stay in the processor's cache.
_BAND_PIXELS = 2**18


@dataclass(frozen=True, eq=False)
class Photo:
    """A picture, upright.

    path : where it was read
    sha256 : hash of the file's bytes
    pixels : (h, w, 3) RGB or (h, w) grey, uint8 or uint16, values as stored (encoded); read only
    file_format : "JPEG", "PNG", "TIFF", ..., RAW
    bits : bits of a sample in the file
    resolution_dpi : dots per inch along x and y of the upright picture, or None
    resolution_problem : why the file's own resolution is not used, when resolution_dpi is None
    orientation : EXIF orientation of the file (1 to 8); `pixels` are already turned
    taken : date and time as the camera wrote it, "YYYY:MM:DD HH:MM:SS"
    icc_name : description of the embedded colour profile
    profile : its curves and primaries, None where the picture is taken as sRGB
    """

    path: Path
    sha256: str
    pixels: NDArray[Any]
    file_format: str = "none"
    bits: int = 8
    resolution_dpi: tuple[float, float] | None = None
    resolution_problem: str | None = None
    orientation: int = 1
    make: str | None = None
    model: str | None = None
    focal_length_mm: float | None = None
    focal_length_35mm: float | None = None
    digital_zoom: float | None = None
    taken: str | None = None
    icc_name: str | None = None
    profile: ColourProfile | None = None
    notices: tuple[Notice, ...] = field(default=())

    @property
    def width(self) -> int:
        """Pixels from left to right."""
        return self.pixels.shape[1]

    @property
    def height(self) -> int:
        """Pixels from top to bottom."""
        return self.pixels.shape[0]

    @property
    def white(self) -> int:
        """The stored value of the brightest sample there can be (a clipped one has it)."""
        return int(np.iinfo(self.pixels.dtype).max)

    def curves(self, tone: Tone = "file") -> NDArray[np.float32]:
        """(1, levels) for grey or (3, levels) linear light 0..1 of every stored value; `tone` as in `linear`."""
        levels = self.white + 1
        channels = 1 if self.pixels.ndim == 2 else 3
        if tone == "file" and self.profile is not None:
            return np.stack([self.profile.curve(channel, levels) for channel in range(channels)])
        return np.tile(tone_curve(tone, levels), (channels, 1))

    def linear(
        self,
        weights: tuple[float, float, float] = LUMINANCE,
        window: tuple[int, int, int, int] | None = None,
        tone: Tone = "file",
    ) -> NDArray[np.float32]:
        """Weighted sum of the channels in linear light, 0 black to 1 white.

        weights : shares of sRGB red, green, blue; (0, 1, 0) is green alone; grey pictures use their one channel
            times the sum
        window : (x0, y0, x1, y1) pixels, x1 and y1 excluded; only this part is computed
        tone : "file" (the embedded profile, sRGB without one), "srgb", "linear", or an exponent
        Returns (h, w) float32. Raises ValueError for a window outside the picture or an unknown tone.
        """
        x0, y0, x1, y1 = window or (0, 0, self.width, self.height)
        if not (0 <= x0 < x1 <= self.width and 0 <= y0 < y1 <= self.height):
            raise ValueError(f"window {window} is not inside {self.width} x {self.height} pixels")
        part = self.pixels[y0:y1, x0:x1]
        curves = self.curves(tone)
        if part.ndim == 2:
            return _look_up(part, curves[0] * np.float32(sum(weights)))
        if tone == "file" and self.profile is not None:
            weights = self.profile.own_weights(weights)
        tables = [(i, curves[i] * np.float32(share)) for i, share in enumerate(weights) if share != 0]
        light = np.zeros(part.shape[:2], np.float32)
        rows = max(1, _BAND_PIXELS // part.shape[1])
        for top in range(0, part.shape[0], rows):
            band = light[top : top + rows]
            for channel, table in tables:
                band += _look_up(part[top : top + rows, :, channel], table)
        return light


def load_photo(
    path: str | Path, max_megapixels: float = 200, *, page: int | None = None, page_dpi: float | None = None
) -> Photo:
    """Open a photo or scan.

    max_megapixels : larger pictures are refused from their header; decoding takes at most 4.2 bytes for each
        pixel of this limit
    page : which picture of several that the file holds, from 1; None takes the first (main) one, and says so
    page_dpi : at which a page of a PDF document that is no scan is drawn, 300 if None
    Raises FileError with one line: what the file is, and what to do.
    """
    path = Path(path)
    name = _printable(path.name) or "the file"
    data = _read_bytes(path, name, max_megapixels)
    picture = read_picture(data, name, max_megapixels, page, page_dpi)
    stated = resolution(picture.file_format, picture.info, picture.tags)
    turn = orientation(picture.tags)
    dpi = stated.dpi
    if dpi is not None and turn >= 5:
        dpi = dpi[1], dpi[0]
    pixels = picture.pixels if picture.upright else turn_upright(picture.pixels, turn)
    pixels.flags.writeable = False
    about = camera(picture.tags)
    return Photo(
        path=path,
        sha256=hashlib.sha256(data).hexdigest(),
        pixels=pixels,
        file_format=picture.file_format,
        bits=picture.bits,
        resolution_dpi=dpi,
        resolution_problem=stated.problem,
        orientation=turn,
        make=about.make,
        model=about.model,
        focal_length_mm=about.focal_length_mm,
        focal_length_35mm=about.focal_length_35mm,
        digital_zoom=about.digital_zoom,
        taken=about.taken,
        icc_name=picture.icc_name,
        profile=picture.profile,
        notices=picture.notices,
    )


def turn_upright(stored: NDArray[Any], orientation: int) -> NDArray[Any]:
    """A stored picture turned as its EXIF orientation (1 to 8) says."""
    if orientation == 1:
        return stored
    turned = stored.swapaxes(0, 1) if orientation >= 5 else stored
    rows_back = orientation in (3, 4, 7, 8)
    columns_back = orientation in (2, 3, 6, 7)
    view = turned[:: -1 if rows_back else 1, :: -1 if columns_back else 1]
    if stored.nbytes > _LARGE:
        return view
    import cv2

    copy = cv2.transpose(stored) if orientation >= 5 else stored
    if rows_back or columns_back:
        copy = cv2.flip(copy, -1 if rows_back and columns_back else 0 if rows_back else 1)
    return copy


def _look_up(stored: NDArray[Any], curve: NDArray[np.float32]) -> NDArray[np.float32]:
    if stored.dtype == np.uint8:
        import cv2

        return np.asarray(cv2.LUT(np.ascontiguousarray(stored), curve), np.float32)
    return curve[stored]


def _read_bytes(path: Path, name: str, max_megapixels: float) -> bytes:
    try:
        if not path.exists():
            raise FileError("file-missing", f"There is no file {name}.", "Check its name and folder.")
        if not path.is_file():
            raise FileError("file-kind", f"{name} is a folder or a device, not a file.", "Give a picture file.")
        size = path.stat().st_size
        limit = 3 * max_megapixels * 1e6
        if size > limit:
            raise FileError(
                "file-too-large",
                f"{name} has {size / 1e6:.0f} MB; the limit is {limit / 1e6:.0f}.",
                "Save it as JPEG or PNG, or raise the limit if the file is trusted.",
            )
        data = path.read_bytes()
    except (OSError, ValueError) as error:
        reason = getattr(error, "strerror", None) or "its name cannot be used"
        raise FileError("file-unreadable", f"{name} cannot be read: {reason}.", "Check its permissions.") from None
    if not data:
        raise FileError("file-empty", f"{name} is empty.", "Copy it again from the camera or scanner.")
    return data


def _printable(text: str) -> str:
    return "".join(c if c.isprintable() else "?" for c in text)[:120]
