"""Linear light of a photo at any place, decoded only where it is asked for.

Knows one tone curve and one mix of channels. Does not know what is bright or dark, or why.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from .colour_profile import Tone, tone_curve
from .photo import LUMINANCE, Photo

Array = NDArray[np.float64]


@dataclass(frozen=True)
class Light:
    """A photo's pixels with the curve that decodes them.

    pixels : (h, w) or (h, w, 3) as stored
    curve : (levels,) or (3, levels) linear light of every stored value, per channel where they differ
    weights : channel mix
    beyond : light outside the picture, where that is known (the lid of a scanner); None repeats its border pixels
    """

    pixels: NDArray[np.uint8] | NDArray[np.uint16]
    curve: NDArray[np.float32]
    weights: tuple[float, float, float] = LUMINANCE
    beyond: float | None = None

    @classmethod
    def of(cls, photo: Photo, tone: Tone = "file", weights: tuple[float, float, float] = LUMINANCE) -> Light:
        """The light of a photo under its own profile ("file") or a named tone curve or exponent."""
        levels = photo.white + 1
        if tone == "file" and photo.profile is not None:
            channels = range(photo.profile.channels)
            curve = np.stack([photo.profile.curve(c, levels) for c in channels])
            return cls(photo.pixels, curve, photo.profile.own_weights(weights))
        return cls(photo.pixels, tone_curve(tone, levels), weights)

    @property
    def tables(self) -> NDArray[np.float32]:
        """(channels, levels) weighted decoding tables whose sum is the light."""
        if self.pixels.ndim == 2:
            return np.atleast_2d(self.curve)[:1]
        return np.asarray(self.weights, np.float32)[:, None] * np.broadcast_to(
            np.atleast_2d(self.curve), (3, self.curve.shape[-1])
        )

    def at(self, points: Array) -> Array:
        """(...) linear light at (..., 2) pixel places, bilinear between pixel centres.

        Places outside the picture take `beyond`, or else its border pixel.
        """
        height, width = self.pixels.shape[:2]
        x0, y0 = np.floor(points[..., 0]).astype(np.intp), np.floor(points[..., 1]).astype(np.intp)
        fx = (points[..., 0] - x0).astype(np.float32)
        fy = (points[..., 1] - y0).astype(np.float32)
        outside = (x0.min() < 0) or (y0.min() < 0) or (x0.max() >= width - 1) or (y0.max() >= height - 1)
        tables = self.tables
        flat = self.pixels.reshape(height * width, -1)
        light = np.zeros(x0.shape, np.float32)
        for dx, dy in ((0, 0), (1, 0), (0, 1), (1, 1)):
            share = (fx if dx else 1 - fx) * (fy if dy else 1 - fy)
            x, y = x0 + dx, y0 + dy
            if outside:
                known = (x >= 0) & (x < width) & (y >= 0) & (y < height)
                x, y = np.clip(x, 0, width - 1), np.clip(y, 0, height - 1)
            values = flat[y * width + x]
            part = np.zeros(x0.shape, np.float32)
            for channel, table in enumerate(tables):
                part += table[values[..., channel]]
            if outside and self.beyond is not None:
                part = np.where(known, part, np.float32(self.beyond))
            light += share * part
        return light.astype(float)

    def nearest(self, points: Array) -> NDArray[np.float32]:
        """(...) linear light of the pixels nearest to (..., 2) places; a quarter of the cost of `at`.

        Places outside the picture take its border pixel.
        """
        height, width = self.pixels.shape[:2]
        x = np.clip(np.rint(points[..., 0]).astype(np.intp), 0, width - 1)
        y = np.clip(np.rint(points[..., 1]).astype(np.intp), 0, height - 1)
        values = self.pixels.reshape(height * width, -1)[y * width + x]
        return np.sum([table[values[..., channel]] for channel, table in enumerate(self.tables)], axis=0)

    def reduced(self, factor: int) -> NDArray[np.float32]:
        """(h // factor, w // factor, channels) unweighted linear light of block means of the stored values.

        Good for telling regions apart, not for placing edges: the mean is taken before decoding.
        """
        import cv2

        height, width = (n // factor for n in self.pixels.shape[:2])
        block = self.pixels[: height * factor, : width * factor]
        small = block if factor == 1 else cv2.resize(block, (width, height), interpolation=cv2.INTER_AREA)
        small = small.reshape(height, width, -1)
        curves = np.atleast_2d(self.curve)
        return np.stack([curves[min(c, len(curves) - 1)][small[..., c]] for c in range(small.shape[2])], axis=-1)
