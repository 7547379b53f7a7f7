"""Whether a photo's stored values are encoded for the eye or are linear light: asked of edges between black and white.

Nothing in a file tells: industrial cameras and some converters store light as it fell, telephones store it
encoded, and a half level read on the wrong scale lies up to half a blur beside the edge. Knows
profiles across many alike edges; does not know where they come from.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from .colour_profile import Tone
from .edges import fit_step, normal_profiles
from .light import Light
from .photo import Photo

Array = NDArray[np.float64]

# A blurred step is point-symmetric about its half level in linear light. Read as if encoded values were light, the
# middle of its 5 % and 95 % places lies 0.06 to 0.11 of the blur beside the half level for black print on white paper
# (computed for the sRGB curve and a normal spread, tones 0.03 to 0.06 on 0.5 to 0.9; sharpening changes it little);
# read as light that it is, 0.00. Half of the lower end divides them; nearer than a third to that is doubt.
LINEAR_BELOW = 0.03
DOUBT_BELOW = 0.045
# Fewer edges than these say too little.
LEAST_EDGES = 40


@dataclass(frozen=True)
class ToneFinding:
    """What the edges say.

    tone : "linear" where stored values are light, else "file" (the profile's or the sRGB curve)
    asymmetry : of the edges when stored values are taken as light, in parts of the blur; None where too few edges
    doubtful : neither reading fits clearly
    """

    tone: Tone
    asymmetry: float | None
    doubtful: bool


def find_tone(photo: Photo, points: Array, normals: Array, reach: float) -> ToneFinding:
    """Tone of a photo from (n, 2) px places on edges of black print on white, normals from black to white.

    reach : px to either side of an edge that hold nothing else
    """
    half = float(min(5.0, np.floor(2.0 * reach) / 2.0))
    inside = np.all((points > half + 2) & (points < np.array([photo.width, photo.height]) - half - 3), axis=1)
    points, normals = points[inside], normals[inside]
    if half < 2.5 or len(points) < LEAST_EDGES:
        return ToneFinding("file", None, False)
    stored = Light.of(photo, "linear", (0.0, 1.0, 0.0))
    offsets = np.arange(-half, half + 0.01, 0.25)
    shift = np.zeros(len(points))
    for _ in range(2):
        profiles = normal_profiles(stored, points + shift[:, None] * normals, normals, offsets)
        shift = shift + fit_step(profiles, offsets, 1.0)[0]
    profiles = normal_profiles(stored, points + shift[:, None] * normals, normals, offsets)
    black, white = np.median(profiles[:, :4], axis=1), np.median(profiles[:, -4:], axis=1)
    contrast = white - black
    good = (contrast > 0.3 * np.median(contrast)) & (np.abs(shift) < 2.0) & (white < 0.99)
    if good.sum() < LEAST_EDGES:
        return ToneFinding("file", None, False)
    step = np.median(((profiles - black[:, None]) / contrast[:, None])[good], axis=0)
    low, lower, middle, upper, high = np.interp([0.05, 0.25, 0.5, 0.75, 0.95], np.maximum.accumulate(step), offsets)
    # The quartiles of a normal spread lie 0.674 of it to either side.
    blur = (upper - lower) / 1.349
    asymmetry = float((0.5 * (low + high) - middle) / max(blur, 0.1))
    linear = abs(asymmetry) < LINEAR_BELOW
    return ToneFinding("linear" if linear else "file", asymmetry, not linear and asymmetry < DOUBT_BELOW)


def reading_shift(inner: Array, outer: Array) -> Array:
    """(n,) by how many blurs an edge moves outward when its half level is read on stored values instead of light.

    inner, outer : (n,) light on the face's side and beyond, under the sRGB curve
    """
    from scipy.special import ndtri

    encoded = 0.5 * (_encode(inner) + _encode(outer))
    level = np.where(encoded <= 0.04045, encoded / 12.92, ((encoded + 0.055) / 1.055) ** 2.4)
    share = (level - inner) / np.where(outer == inner, np.inf, outer - inner)
    return ndtri(np.clip(share, 1e-3, 1 - 1e-3))


def _encode(light: Array) -> Array:
    v = np.clip(light, 0.0, 1.0)
    return np.where(v <= 0.0031308, 12.92 * v, 1.055 * v ** (1 / 2.4) - 0.055)
