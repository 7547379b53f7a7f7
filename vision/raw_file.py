"""Raw camera files developed to linear light, by a reader that is an extra (rawpy, which is LibRaw).

Develops and no more: no sharpening, no tone curve, no lens correction, no automatic exposure. Does not know where a
file comes from or what is in it.
"""

from __future__ import annotations

import io
from typing import Any

import numpy as np
from numpy.typing import NDArray

from ..props.errors import FileError

# First bytes of raw files that are no TIFF inside: (start, at). Those that are TIFF files are told by their tags.
_STARTS = (
    (b"FUJIFILMCCD-RAW", 0),
    (b"IIU\0", 0),
    (b"IIRO", 0),
    (b"IIRS", 0),
    (b"MMOR", 0),
    (b"ftypcrx ", 4),
)
# Bytes for each pixel while developing: what the sensor stored, four colours of it, and the picture.
BYTES_PER_PIXEL = 2 + 8 + 6
# EXIF orientation of what LibRaw calls the flip.
_ORIENTATIONS = {0: 1, 3: 3, 5: 8, 6: 6}
_DEVELOP = "Develop it to a 16-bit TIFF or a JPEG without sharpening or lens correction."


def is_raw(data: bytes) -> bool:
    """Whether a file begins as a raw camera file that is no TIFF inside."""
    return any(data[at : at + len(start)] == start for start, at in _STARTS)


def open_raw(data: bytes, name: str) -> Any:
    """The reader's view of a raw file, not yet decoded; to be closed. Raises FileError: no reader, or not for it."""
    try:
        import rawpy  # pyright: ignore[reportMissingImports]
    except ImportError:
        raise FileError(
            "reader-missing",
            f"{name} is a raw camera file, and its reader is not installed.",
            f"Install it with: pip install 'cutface[raw]'. Or: {_DEVELOP[0].lower()}{_DEVELOP[1:]}",
        ) from None
    raw = rawpy.RawPy()
    try:
        raw.open_buffer(io.BytesIO(data))
    except Exception as error:
        # LibRaw has an error class for every cause; to a person they all mean the same.
        raw.close()
        raise FileError(
            "file-raw", f"{name} looks like a raw camera file that the reader does not know.", _DEVELOP
        ) from error
    return raw


def raw_size(raw: Any) -> tuple[int, int]:
    """(width, height) of the developed picture as the sensor lies, px."""
    sizes = raw.sizes
    return int(sizes.width), int(sizes.height)


def develop(raw: Any) -> tuple[NDArray[np.uint16], int]:
    """(h, w, 3) RGB in linear light (sRGB's primaries), as the sensor lies, and its EXIF orientation.

    White balance is the camera's own; values beyond the sensor's white are clipped to it.
    """
    import rawpy  # pyright: ignore[reportMissingImports]

    orientation = _ORIENTATIONS.get(int(raw.sizes.flip), 1)
    pixels = raw.postprocess(
        gamma=(1, 1),
        no_auto_bright=True,
        output_bps=16,
        use_camera_wb=True,
        output_color=rawpy.ColorSpace.sRGB,
        user_flip=0,
        highlight_mode=rawpy.HighlightMode.Clip,
    )
    return np.asarray(pixels, np.uint16), orientation
