"""Graduations along a line in a photo: where each is, and which number it has.

Knows lines on a rule and blocks in turn of two tones on a rod. Counts them; does not know what a division measures.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Literal

import numpy as np
from numpy.typing import NDArray

from ...props.errors import Refusal
from ..edges import normal_profiles
from ..light import Light

Array = NDArray[np.float64]
Marks = Literal["lines", "blocks"]

# Samples a px along the line, and px to either side of it over which light is averaged.
_FINE, _BAND = 4, 2.0
# A graduation may lie this part of a division beside where its neighbours put it.
_STRAY = 0.3
# So many in a row may be hidden or worn away, and this share of all must be seen.
_MOST_MISSING, LEAST_SEEN = 4, 0.6
# Graduations closer than this cannot be told apart: twice the sampling limit of the pixels, px.
LEAST_PITCH_PX = 3.0


@dataclass(frozen=True, eq=False)
class Comb:
    """Graduations found.

    numbers : (m,) from nought at the first pick; distances : (m,) px along the line from it
    scatter : px, of a graduation about a smooth course
    ends : numbers, in parts, at both picks
    parity : (m,) 1 or -1, which way round the edge is; nought for lines
    """

    numbers: NDArray[np.intp]
    distances: Array
    scatter: float
    ends: tuple[float, float]
    parity: Array
    pitch_px: float

    @property
    def count(self) -> int:
        """Divisions between the picks."""
        return round(self.ends[1]) - round(self.ends[0])


def find_comb(light: Light, start: Array, end: Array, marks: Marks, expected: int | None = None) -> Comb:
    """The graduations between two picked ones.

    start, end : (2,) px; expected : how many divisions there should be, to start the search with
    Raises Refusal where no regular graduations are seen.
    """
    length = float(np.linalg.norm(end - start))
    direction = (end - start) / length
    across = np.array([-direction[1], direction[0]])
    margin = 0.03 * length
    t = np.arange(-margin, length + margin, 1 / _FINE)
    points = start + t[:, None] * direction
    bands = normal_profiles(light, points, np.broadcast_to(across, points.shape), np.arange(-_BAND, _BAND + 0.5))
    profile = bands.mean(axis=1)
    pitch = length / expected if expected else _period(profile) * (1.0 if marks == "lines" else 0.5)
    if pitch < LEAST_PITCH_PX:
        raise Refusal(
            "graduations-fine",
            f"The graduations lie {pitch:.1f} px apart, too close to be told from each other.",
            "Go nearer, or state a coarser division that can be seen.",
        )
    places, parity = _lines(t, profile, pitch) if marks == "lines" else _edges(t, profile, pitch)
    if len(places) < 4:
        raise _not_seen()
    numbers = _numbered(places, pitch, length)
    kept = numbers != _NONE
    places, parity, numbers = places[kept], parity[kept], numbers[kept]
    if len(places) < 4:
        raise _not_seen()
    places, parity, numbers, course = _smoothed(places, parity, numbers)
    seen = len(numbers) / (np.ptp(numbers) + 1)
    reached = np.ptp(places) / length
    if len(numbers) < 4 or seen < LEAST_SEEN or reached < 0.7:
        raise _not_seen()
    span = np.arange(numbers.min() - 3, numbers.max() + 4)
    along = course(span.astype(float))
    if np.any(np.diff(along) <= 0):
        raise _not_seen()
    first, last = np.interp([0.0, length], along, span)
    residual = places - course(numbers.astype(np.float64))
    numbers = numbers - round(float(first))
    ends = float(first) - round(float(first)), float(last) - round(float(first))
    bias = float(np.mean(parity * residual)) if np.any(parity) else 0.0
    residual = residual - bias * parity
    scatter = float(np.sqrt(np.sum(residual**2) / max(1, len(residual) - 5)))
    return Comb(numbers.astype(np.intp), places, max(scatter, 0.01), ends, parity, length / max(1.0, ends[1] - ends[0]))


_NONE = -(10**9)


def _not_seen() -> Refusal:
    return Refusal(
        "graduations-unseen",
        "No regular graduations are seen between the two picked ends.",
        "Pick two graduations on the graduated edge itself, where lines of all lengths reach it; light it without "
        "glare and have it in focus.",
    )


def _smooth(values: Array, sigma: float) -> Array:
    reach = max(1, int(3 * sigma))
    kernel = np.exp(-0.5 * (np.arange(-reach, reach + 1) / sigma) ** 2)
    padded = np.pad(values, reach, mode="edge")
    return np.asarray(np.convolve(padded, kernel / kernel.sum(), mode="valid"), np.float64)


def _period(profile: Array) -> float:
    """Period of the strongest regular pattern in the middle half of a profile, px, by its spectrum."""
    n = len(profile)
    part = profile[n // 4 : n - n // 4]
    part = part - _smooth(part, max(4.0, 0.05 * len(part)))
    size = 8 * len(part)
    power = np.abs(np.fft.rfft(part * np.hanning(len(part)), size)) ** 2
    frequency = np.fft.rfftfreq(size)
    usable = (frequency > 4 / len(part)) & (frequency < 1 / (_FINE * LEAST_PITCH_PX / 1.5))
    if not usable.any():
        return 0.0
    peak = int(np.argmax(np.where(usable, power, 0)))
    return 1 / frequency[peak] / _FINE


def _levelled(profile: Array, span: float) -> tuple[Array, Array, Array]:
    """A smoothed profile, and the middle and the height of what it runs through over `span` px."""
    smooth = _smooth(profile, 0.4 * _FINE)
    window = max(3, round(span * _FINE))
    high, low = _running_range(smooth, window)
    return smooth, _smooth(0.5 * (high + low), window), _smooth(high - low, window)


def _lines(t: Array, profile: Array, pitch: float) -> tuple[Array, Array]:
    """Middles of the lines, px along: each the centroid of what a line takes from the ground's light, or adds to it."""
    smooth, level, contrast = _levelled(profile, 1.2 * pitch)
    # Lines are the narrower of the two tones.
    sign = -1.0 if np.mean(smooth > level) > 0.5 else 1.0
    above = sign * (smooth - level)
    strong = float(np.median(contrast))
    places = []
    for first, last in _runs(above > 0):
        peak = float(above[first : last + 1].max())
        width = (last - first + 1) / _FINE
        if peak < 0.2 * strong or width > 0.9 * pitch or first == 0 or last == len(t) - 1:
            continue
        weight = above[first : last + 1]
        places.append(float(weight @ t[first : last + 1] / weight.sum()))
    return np.array(places), np.zeros(len(places))


def _edges(t: Array, profile: Array, pitch: float) -> tuple[Array, Array]:
    """Edges between blocks of two tones, px along, and which way round each is."""
    smooth, level, contrast = _levelled(profile, 2.4 * pitch)
    above = smooth - level
    strong = float(np.median(contrast))
    places, parity = [], []
    for i in np.flatnonzero(above[:-1] * above[1:] < 0):
        near = slice(max(0, i - round(0.35 * pitch * _FINE)), i + round(0.35 * pitch * _FINE) + 1)
        if np.ptp(smooth[near]) < 0.4 * strong:
            continue
        part = above[i] / (above[i] - above[i + 1])
        places.append(float(t[i] + part * (t[i + 1] - t[i])))
        parity.append(1.0 if above[i + 1] > 0 else -1.0)
    return np.array(places), np.array(parity)


def _running_range(values: Array, window: int) -> tuple[Array, Array]:
    """Largest and least value within a window about each."""
    from scipy.ndimage import maximum_filter1d, minimum_filter1d

    high = np.asarray(maximum_filter1d(values, window, mode="nearest"), np.float64)
    return high, np.asarray(minimum_filter1d(values, window, mode="nearest"), np.float64)


def _runs(mask: NDArray[np.bool_]) -> list[tuple[int, int]]:
    """First and last index of every run of True."""
    change = np.diff(np.concatenate([[0], mask.astype(int), [0]]))
    return list(zip(np.flatnonzero(change == 1).tolist(), (np.flatnonzero(change == -1) - 1).tolist(), strict=True))


def _numbered(places: Array, pitch: float, length: float) -> NDArray[np.intp]:
    """A number for each place, counted outwards from a regular stretch about the middle; _NONE where none fits."""
    gaps = np.diff(places)
    middle = 0.5 * (places[:-1] + places[1:])
    regular = np.abs(gaps - pitch) < 0.35 * pitch
    if not regular.any():
        return np.full(len(places), _NONE, np.intp)
    first = int(np.argmin(np.where(regular, np.abs(middle - 0.5 * length), np.inf)))
    numbers = np.full(len(places), _NONE, np.intp)
    numbers[first], numbers[first + 1] = 0, 1
    for step in (1, -1):
        at, number = (first + 1, 1) if step > 0 else (first, 0)
        local = float(gaps[first])
        last = places[at]
        index = at + step
        while 0 <= index < len(places):
            ahead = step * (places[index] - last) / local
            skipped = round(ahead)
            if skipped > _MOST_MISSING + 1:
                break
            if skipped >= 1 and abs(ahead - skipped) < _STRAY * (1 if skipped == 1 else 1.3):
                number += step * skipped
                numbers[index] = number
                # Perspective changes the pitch slowly; a running mean follows it.
                local = 0.7 * local + 0.3 * step * (places[index] - last) / skipped
                last = places[index]
            index += step
    return numbers


@dataclass(frozen=True, eq=False)
class _Course:
    """Where the graduation of a number lies: (a + b v) / (1 + c v) + a polynomial in v = (number - middle) / half.

    The quotient is that of even divisions in perspective; the polynomial holds what a lens adds.
    """

    middle: float
    half: float
    quotient: tuple[float, float, float]
    rest: Array

    def __call__(self, numbers: Array) -> Array:
        v = (numbers - self.middle) / self.half
        a, b, c = self.quotient
        return (a + b * v) / (1 + c * v) + np.polynomial.polynomial.polyval(v, self.rest)


def _course(numbers: Array, places: Array, parity: Array) -> _Course:
    middle, half = 0.5 * float(numbers.min() + numbers.max()), max(1.0, 0.5 * float(np.ptp(numbers)))
    v = (numbers - middle) / half
    odd = [parity] if np.any(parity) else []
    a, b, c = np.linalg.lstsq(np.column_stack([np.ones_like(v), v, -v * places, *odd]), places, rcond=None)[0][:3]
    left = places - (a + b * v) / (1 + c * v)
    degree = 3 if len(v) > 12 else 1
    design = np.column_stack([v**k for k in range(degree + 1)] + odd)
    rest = np.linalg.lstsq(design, left, rcond=None)[0][: degree + 1]
    return _Course(middle, half, (float(a), float(b), float(c)), rest)


def _smoothed(
    places: Array, parity: Array, numbers: NDArray[np.intp]
) -> tuple[Array, Array, NDArray[np.intp], _Course]:
    """Places, parities and numbers without strays, and their course."""
    n = numbers.astype(float)
    keep = np.ones(len(n), bool)
    course = _course(n, places, parity)
    for _ in range(4):
        residual = places - course(n)
        spread = 1.4826 * float(np.median(np.abs(residual[keep])))
        new = np.abs(residual) < max(0.3, 4 * spread)
        if new.sum() < 4 or np.array_equal(new, keep):
            break
        keep = new
        course = _course(n[keep], places[keep], parity[keep])
    return places[keep], parity[keep], numbers[keep], course
