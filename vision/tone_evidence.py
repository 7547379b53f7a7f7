"""Which tone curve a photo's values follow, judged by the black and white edges of a print of known pitch.

The half level of a blurred edge lies where it should only in linear light. Under a wrong curve dark areas seem to
grow or shrink in proportion to the blur, while what ink really spreads is constant in millimetres and small. Knows
that much; does not know what is measured with the answer, nor curves that are no power of light (contrast styles).
"""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from .colour_profile import Tone
from .edges import approach, estimate_blur, fit_step, locate, normal_profiles
from .light import Light
from .photo import Photo
from .references.reference import Mapper, PrintEdges

Array = NDArray[np.float64]

# "file" is the file's own profile, sRGB without one.
TONES: tuple[Tone, ...] = ("file", 2.6, 1.8, 1.4, "linear")
# What a print does at a black edge, mm (stated assumption: 0 to 0.1 for toner and ink on office paper).
PRINT_GAIN_MM, PRINT_GAIN_STD_MM = 0.04, 0.04
# Under the right curve the half level may still lie beside the edge, px and per px of blur (sharpening, JPEG).
EDGE_BIAS_PX, EDGE_BIAS_TONE = 0.025, 0.05
# White exposed up to half a stop beyond the file's limit moves the half level by up to 0.4 of the blur; unknown, so
# half of it as a standard uncertainty (profile of a clipped blurred step).
CLIPPED_BIAS = 0.2
# Before looking at edges: pictures that a named camera developed follow their profile; others may come from anywhere
# (stated assumption).
PRIOR_NAMED: dict[Tone, float] = dict(zip(TONES, (0.90, 0.04, 0.04, 0.01, 0.01), strict=True))
PRIOR_UNNAMED: dict[Tone, float] = dict(zip(TONES, (0.50, 0.05, 0.10, 0.05, 0.30), strict=True))
LEAST_EDGES = 24
# Neighbouring places share what the paper and the lens do to them: so many say as much as one.
_INFLATION = 12.0
_MOST_POINTS = 4000


@dataclass(frozen=True)
class ToneEvidence:
    """What the edges say of each tone curve.

    tones : the candidates
    probabilities : of each after looking, sum 1
    log_likelihood : of the edges under each, up to a common constant
    gain_mm : by how much a black edge lies beyond its design under each, constant over the picture
    per_blur : by how much more, px for a px of blur
    blur_px : of the edges
    spread_px : standard deviation of an edge's place over the candidates about the best one, px
    """

    tones: tuple[Tone, ...]
    probabilities: tuple[float, ...]
    log_likelihood: tuple[float, ...]
    gain_mm: tuple[float, ...]
    per_blur: tuple[float, ...]
    blur_px: float
    spread_px: float

    @property
    def best(self) -> Tone:
        """The likeliest candidate."""
        return self.tones[int(np.argmax(self.probabilities))]


@dataclass(frozen=True, eq=False)
class PrintInPhoto:
    """A print as one photo shows it.

    plane : of the print, true mm; fitted to saddle points or centres, which no tone curve moves
    edges : where its black and white should meet
    """

    photo: Photo
    plane: Mapper
    edges: PrintEdges


def thinned(edges: PrintEdges, count: int) -> PrintEdges:
    """At most about `count` of the places, spread evenly over the list."""
    step = max(1, len(edges.points) // count)
    return PrintEdges(edges.points[::step], edges.normals[::step], edges.reach)


def tone_evidence(
    photo: Photo, plane: Mapper, edges: PrintEdges, tones: tuple[Tone, ...] = TONES
) -> ToneEvidence | None:
    """How well each tone curve explains where the edges of a print are seen in a photo.

    plane, edges : as in PrintInPhoto
    Returns None where fewer than LEAST_EDGES places on edges can be located.
    """
    return joint_tone_evidence([PrintInPhoto(photo, plane, edges)], tones)


def joint_tone_evidence(prints: Iterable[PrintInPhoto], tones: tuple[Tone, ...] = TONES) -> ToneEvidence | None:
    """The same from several photos by one camera of one print.

    The places of the edges are split into a part constant in mm (gain) and one in proportion to the local blur;
    under the right curve the first is that of a print and the second nothing. One scale and one blur can hardly
    tell the two apart; photos from several distances can.
    Returns None where fewer than LEAST_EDGES places on edges can be located. Takes up one print after the other, so
    that their pixels need not be in memory together.
    """
    likelihoods, gains, slopes, means, blurs = [], [], [], [], []
    by_tone: list[list[_Growth]] = [[] for _ in tones]
    named = False
    for one in prints:
        named |= one.photo.model is not None or one.photo.profile is not None
        for parts, tone in zip(by_tone, tones, strict=True):
            part = _growth(Light.of(one.photo, tone), one.plane, one.edges)
            if part is not None:
                parts.append(part)
    for parts in by_tone:
        seen = _Growth(*(np.concatenate([getattr(part, n) for part in parts] or [np.empty(0)]) for n in _FIELDS))
        if len(seen.growth_px) < LEAST_EDGES:
            return None
        gain, slope, value = _likelihood(seen)
        likelihoods.append(value)
        gains.append(gain)
        slopes.append(slope)
        means.append(float(np.median(seen.growth_px)))
        blurs.append(float(np.median(seen.blur_px)))
    before = PRIOR_NAMED if named else PRIOR_UNNAMED
    prior = np.array([before.get(tone, 0.05) for tone in tones])
    logs = np.array(likelihoods)
    weight = prior * np.exp(logs - logs.max())
    weight /= weight.sum()
    best = int(np.argmax(weight))
    spread = float(np.sqrt(np.sum(weight * (np.array(means) - means[best]) ** 2)))
    return ToneEvidence(
        tones, tuple(weight.tolist()), tuple(likelihoods), tuple(gains), tuple(slopes), blurs[best], spread
    )


@dataclass(frozen=True, eq=False)
class _Growth:
    """Per place: px by which black reaches beyond its design; mm to a pixel; blur, px; 1 where white is clipped."""

    growth_px: Array
    mm_per_px: Array
    blur_px: Array
    clipped: Array


_FIELDS = ("growth_px", "mm_per_px", "blur_px", "clipped")


def _growth(light: Light, plane: Mapper, edges: PrintEdges) -> _Growth | None:
    step = max(1, int(np.ceil(len(edges.points) / _MOST_POINTS)))
    pixels, across = edges.points[::step], edges.normals[::step]
    reach = float(np.clip(0.5 * edges.reach, 1.0, 3.0))
    plateau = float(np.clip(edges.reach - reach, 2.0, 5.0))
    height, width = light.pixels.shape[:2]
    far = reach + plateau + 1
    inside = np.all((pixels > far) & (pixels < (width - 1 - far, height - 1 - far)), axis=1)
    pixels, across = pixels[inside], across[inside]
    if len(pixels) < LEAST_EDGES:
        return None
    shift, found = approach(light, pixels, across, reach, plateau)
    near = pixels + shift[:, None] * across
    if found.sum() < LEAST_EDGES:
        return None
    offsets = np.arange(-min(plateau, 5.0), min(plateau, 5.0) + 0.01, 0.5)
    profiles = normal_profiles(light, near[found], across[found], offsets)
    blur = estimate_blur(profiles, offsets, fit_step(profiles, offsets, 1.0)[0])
    edge = locate(light, near, across, blur)
    off = np.sum((edge.points - pixels) * across, axis=1)
    good = found & edge.located & (edge.outer > edge.inner) & (np.abs(off) < reach)
    # White exposed beyond the file's limit moves every half level; such edges are used only where there are no others.
    clipped = edge.outer > 0.99
    if (good & ~clipped).sum() >= LEAST_EDGES:
        good &= ~clipped
    if good.sum() < LEAST_EDGES:
        return None
    jacobian = plane.mm_per_px(pixels[good])
    along = np.einsum("nij,nj->ni", jacobian, np.column_stack([-across[good, 1], across[good, 0]]))
    scale = np.abs(np.linalg.det(jacobian)) / np.linalg.norm(along, axis=1)
    return _Growth(off[good], scale, np.full(int(good.sum()), blur), clipped[good].astype(float))


def _likelihood(seen: _Growth) -> tuple[float, float, float]:
    """(gain mm, growth per blur, log likelihood): growth = gain + slope x blur, both near what they should be."""
    growth, blur_mm = seen.growth_px * seen.mm_per_px, seen.blur_px * seen.mm_per_px
    # What should be, as observations: without them the two cannot be told apart in a picture of one scale.
    bias = EDGE_BIAS_TONE + EDGE_BIAS_PX / float(np.median(seen.blur_px)) + CLIPPED_BIAS * float(np.mean(seen.clipped))
    expected, std = np.array([PRINT_GAIN_MM, 0.0]), np.array([PRINT_GAIN_STD_MM, bias])
    design = np.c_[np.ones_like(blur_mm), blur_mm]
    weight, solution, scatter = np.ones(len(growth)), expected, 1.0
    for _ in range(10):
        share = weight / (scatter**2 * _INFLATION)
        normal = (share[:, None] * design).T @ design + np.diag(1 / std**2)
        solution = np.linalg.solve(normal, design.T @ (share * growth) + expected / std**2)
        off = growth - design @ solution
        scatter = max(1.4826 * float(np.median(np.abs(off))), 1e-3)
        weight = 1 / (1 + (off / (3 * scatter)) ** 2)
    # How likely the mean growth and its trend with the blur are, gain and slope being drawn as expected.
    total = weight.sum()
    mean, level = float(weight @ growth / total), float(weight @ blur_mm / total)
    spread = blur_mm - level
    energy = max(float(weight @ spread**2), 1e-12)
    trend = float(weight @ (spread * (growth - mean))) / energy
    take = np.array([[1.0, level], [0.0, 1.0]])
    noise = np.diag([1 / total, 1 / energy]) * scatter**2 * _INFLATION
    covariance = take @ np.diag(std**2) @ take.T + noise
    miss = np.array([mean - PRINT_GAIN_MM, trend])
    value = -0.5 * float(miss @ np.linalg.solve(covariance, miss)) - 0.5 * float(np.linalg.slogdet(covariance)[1])
    return float(solution[0]), float(solution[1]), value


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
