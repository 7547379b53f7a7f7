"""How the stored values of a picture relate to light: tone curves and primaries of its colour profile.

Reads embedded ICC profiles of the matrix-and-curves kind and of the grey kind (ICC.1:2022, sections
9 and 10), and names the curves a picture has without one. Knows nothing of files or pictures, and
leaves profiles made of tables (most printers, some scanners) to the caller.
"""

from __future__ import annotations

import struct
from dataclasses import dataclass
from functools import lru_cache
from typing import Literal

import numpy as np
from numpy.typing import NDArray

Tone = Literal["file", "srgb", "linear"] | float

# Linear sRGB to XYZ adapted to the D50 white of profiles (IEC 61966-2-1 primaries, Bradford adaptation).
SRGB_TO_XYZ = np.array(
    [[0.4360747, 0.3850649, 0.1430804], [0.2225045, 0.7168786, 0.0606169], [0.0139322, 0.0971045, 0.7141733]]
)

# Entries of a curve as we keep it; an 8-bit picture uses every 257th of 65536 levels.
_LEVELS = 65536


def srgb_to_linear(encoded: NDArray[np.float64]) -> NDArray[np.float64]:
    """Linear light of sRGB values, both 0..1 (IEC 61966-2-1)."""
    return np.where(encoded <= 0.04045, encoded / 12.92, ((encoded + 0.055) / 1.055) ** 2.4)


@lru_cache(maxsize=16)
def tone_curve(tone: Tone, levels: int) -> NDArray[np.float32]:
    """Linear light 0..1 for each of `levels` stored values of a named curve or of a plain exponent.

    tone : "srgb" (also for "file": what a picture without a profile is taken to be), "linear", or an exponent
    Raises ValueError for an exponent that is not between 0.2 and 5.
    """
    encoded = np.linspace(0.0, 1.0, levels)
    if tone == "linear":
        light = encoded
    elif tone in ("srgb", "file"):
        light = srgb_to_linear(encoded)
    elif isinstance(tone, (int, float)) and 0.2 <= tone <= 5:
        light = encoded ** float(tone)
    else:
        raise ValueError(f"no tone curve {tone!r}: 'file', 'srgb', 'linear' or an exponent of 0.2 to 5")
    curve = light.astype(np.float32)
    curve.flags.writeable = False
    return curve


@dataclass(frozen=True, eq=False)
class ColourProfile:
    """Tone curves of a picture's channels, and where its primaries lie.

    name : the profile's own description
    curves : (1, 65536) for grey or (3, 65536) for RGB, float32, linear light 0..1
    to_srgb : (3, 3) from the profile's linear RGB to linear sRGB, or None for grey
    """

    name: str
    curves: NDArray[np.float32]
    to_srgb: NDArray[np.float64] | None

    @property
    def channels(self) -> int:
        """1 for grey, 3 for RGB."""
        return len(self.curves)

    def curve(self, channel: int, levels: int) -> NDArray[np.float32]:
        """Linear light for each of `levels` stored values of a channel."""
        return self.curves[channel, :: (_LEVELS - 1) // (levels - 1)]

    def own_weights(self, weights: tuple[float, float, float]) -> tuple[float, float, float]:
        """The weights on the profile's own primaries that equal `weights` on those of sRGB."""
        if self.to_srgb is None:
            return weights
        red, green, blue = np.asarray(weights, float) @ self.to_srgb
        return float(red), float(green), float(blue)


def profile_name(data: bytes) -> str:
    """The description of an ICC profile, or "unnamed profile"."""
    try:
        body = _tags(data)[b"desc"]
    except (ValueError, KeyError, struct.error):
        return "unnamed profile"
    text = ""
    if body[:4] == b"desc" and len(body) > 12:
        length = struct.unpack(">I", body[8:12])[0]
        text = body[12 : 12 + min(length, 200)].split(b"\0")[0].decode("latin-1")
    elif body[:4] == b"mluc" and len(body) >= 28:
        length, offset = struct.unpack(">II", body[20:28])
        text = body[offset : offset + min(length, 400)].decode("utf-16-be", "ignore")
    text = "".join(c for c in text if c.isprintable()).strip()
    return text or "unnamed profile"


def power_profile(gamma: float, channels: int) -> ColourProfile:
    """The profile of a picture that only states an exponent (the gAMA chunk of PNG)."""
    curve = np.linspace(0, 1, _LEVELS) ** gamma
    return ColourProfile(f"exponent {gamma:.2f}", np.tile(curve.astype(np.float32), (channels, 1)), None)


@lru_cache(maxsize=4)
def read_profile(data: bytes) -> ColourProfile | None:
    """The curves and primaries of an ICC profile; None for one made of tables or damaged."""
    try:
        tags = _tags(data)
        space = data[16:20]
        if space == b"GRAY" and b"kTRC" in tags:
            return ColourProfile(profile_name(data), _curve(tags[b"kTRC"])[None], None)
        if space != b"RGB " or not tags.keys() >= {b"rTRC", b"gTRC", b"bTRC", b"rXYZ", b"gXYZ", b"bXYZ"}:
            return None
        curves = np.stack([_curve(tags[name]) for name in (b"rTRC", b"gTRC", b"bTRC")])
        primaries = np.stack([_xyz(tags[name]) for name in (b"rXYZ", b"gXYZ", b"bXYZ")], axis=1)
        if not np.linalg.cond(primaries) < 1e3:
            return None
        return ColourProfile(profile_name(data), curves, np.linalg.solve(SRGB_TO_XYZ, primaries).astype(np.float64))
    except (ValueError, KeyError, struct.error, FloatingPointError):
        return None


def _tags(data: bytes) -> dict[bytes, bytes]:
    if data[36:40] != b"acsp":
        raise ValueError("not a colour profile")
    count = struct.unpack(">I", data[128:132])[0]
    if count > 200:
        raise ValueError("too many tags")
    tags = {}
    for index in range(count):
        name, offset, size = struct.unpack(">4sII", data[132 + 12 * index : 144 + 12 * index])
        tags[name] = data[offset : offset + size]
    return tags


def _xyz(body: bytes) -> NDArray[np.float64]:
    return np.array(struct.unpack(">3i", body[8:20])) / 65536


def _curve(body: bytes) -> NDArray[np.float32]:
    x = np.linspace(0.0, 1.0, _LEVELS)
    if body[:4] == b"curv":
        count = struct.unpack(">I", body[8:12])[0]
        if count == 0:
            y = x
        elif count == 1:
            y = x ** (struct.unpack(">H", body[12:14])[0] / 256)
        elif len(body) >= 12 + 2 * count:
            table = np.frombuffer(body, ">u2", count, 12) / 65535
            y = np.interp(x, np.linspace(0, 1, count), table)
        else:
            raise ValueError("curve cut short")
    elif body[:4] == b"para":
        y = _parametric(x, body)
    else:
        raise ValueError("unknown kind of curve")
    # A curve that is not finite, falls, or hardly rises cannot have been meant.
    if not (np.all(np.isfinite(y)) and np.all(np.diff(y) >= -1e-6) and y[-1] - y[0] > 0.5):
        raise ValueError("senseless curve")
    return np.clip(y, 0, 1).astype(np.float32)


def _parametric(x: NDArray[np.float64], body: bytes) -> NDArray[np.float64]:
    kind = struct.unpack(">H", body[8:10])[0]
    count = (1, 3, 4, 5, 7)[kind] if kind < 5 else 0
    if not count:
        raise ValueError("unknown kind of curve")
    g, a, b, c, d, e, f = (*(v / 65536 for v in struct.unpack(f">{count}i", body[12 : 12 + 4 * count])), *(0.0,) * 6)[
        :7
    ]
    if kind == 0:
        return x**g
    if kind in (1, 2):
        if a == 0:
            raise ValueError("senseless curve")
        offset = c if kind == 2 else 0.0
        return np.where(x >= -b / a, np.maximum(a * x + b, 0) ** g + offset, offset)
    return np.where(x >= d, np.maximum(a * x + b, 0) ** g + e, c * x + f)
