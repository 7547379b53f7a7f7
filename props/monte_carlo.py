"""Section properties of outlines drawn at random from what is known about one (JCGM 101).

Moves vertices and integrates again, with nothing linearised: the check on first-order uncertainty, and the way to
distributions far from normal.
"""

from __future__ import annotations

import math
from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import NDArray

from .integrals import boundary, following
from .offset import edge_normals, mitre
from .properties import section_properties
from .section import Section

if TYPE_CHECKING:
    from .uncertainty import EdgeNoise, OutlineUncertainty

Floats = NDArray[np.float64]

# Stations of the random error on one edge: enough for the mean and the slope of a fitted straight line.
_STATIONS = 8
_DRAWS_AT_ONCE = 500


def monte_carlo(
    section: Section, uncertainty: OutlineUncertainty, draws: int = 10_000, seed: int = 0
) -> dict[str, Floats]:
    """Samples (draws,) of every elastic and plastic property.

    seed : the same seed gives the same samples
    Angles are taken within a quarter turn of that of `section`. The interval is the 2.5 and 97.5 % quantile; to know
    it to two figures takes some 200 000 draws (JCGM 101).

    Random error is drawn along the outline with exponential correlation; an edge longer than its correlation length
    moves as a straight line fitted to it would.
    """
    generator = np.random.default_rng(seed)
    vertices = section.vertices
    angle = section_properties(section)["principal_angle"]
    noise = _NoiseDraws(section, uncertainty.noise) if uncertainty.noise is not None else None
    modes = np.array([mode.displacement for mode in uncertainty.modes]).reshape(len(uncertainty.modes), vertices.size)
    rectangular = np.array([mode.shape == "rectangular" for mode in uncertainty.modes], dtype=bool)
    samples: dict[str, list[float]] = {}
    for first in range(0, draws, _DRAWS_AT_ONCE):
        count = min(_DRAWS_AT_ONCE, draws - first)
        uniform = generator.uniform(-math.sqrt(3.0), math.sqrt(3.0), (count, len(modes)))
        sizes = np.where(rectangular, uniform, generator.standard_normal((count, len(modes))))
        moved = (sizes @ modes).reshape(count, *vertices.shape)
        if noise is not None:
            moved = moved + noise.draw(generator, count)
        for movement in moved:
            for name, value in section_properties(section.with_vertices(vertices + movement)).items():
                samples.setdefault(name, []).append(value)
    arrays = {name: np.array(values) for name, values in samples.items()}
    turn = arrays["principal_angle"] - angle
    arrays["principal_angle"] = angle + turn - math.pi * np.round(turn / math.pi)
    return arrays


class _NoiseDraws:
    """Random error along the loops, drawn at stations on every edge and fitted by a straight line an edge."""

    def __init__(self, section: Section, noise: EdgeNoise) -> None:
        edges = boundary(section)
        self._after = following(section)
        self._before = np.empty_like(self._after)
        self._before[self._after] = np.arange(len(self._after))
        lengths, self._normals = edge_normals(edges)
        std, correlation = np.asarray(noise.std, float), np.asarray(noise.correlation_length, float)
        std, correlation = 0.5 * (std + std[self._after]), 0.5 * (correlation + correlation[self._after])
        counts = np.clip(np.ceil(2.0 * lengths / correlation), 1, _STATIONS).astype(int)
        self._first = np.cumsum(counts) - counts
        self._counts = counts
        # Stations stand for pieces of the edge; in half correlation lengths, their size.
        size = np.repeat(2.0 * lengths / (counts * correlation), counts)
        # Variance of the mean of exp(-u) correlated noise over a piece of that size.
        share = 2.0 * (size - 1.0 + np.exp(-size)) / size**2
        self._station_std = np.repeat(std, counts) * np.sqrt(share)
        # Chained so that variance times correlation adds up to the correlation length, whatever the size.
        chain = (2.0 - size * share) / (2.0 + size * share)
        self._chain = np.sqrt(chain * np.concatenate([[0.0], chain[:-1]]))
        loop_sizes = [len(loop) for loop in section.loops]
        loop_starts = np.cumsum([0, *loop_sizes[:-1]])
        self._chain[self._first[loop_starts]] = 0.0

    def draw(self, generator: np.random.Generator, count: int) -> Floats:
        """Movements (count, n, 2) of the vertices."""
        fresh = generator.standard_normal((len(self._chain), count))
        for i in range(1, len(fresh)):
            link = self._chain[i]
            if link > 0.0:
                fresh[i] = link * fresh[i - 1] + math.sqrt(1.0 - link * link) * fresh[i]
        fresh *= self._station_std[:, None]
        sums = np.add.reduceat(fresh, self._first, axis=0)
        mean = sums / self._counts[:, None]
        # Least-squares slope over stations at (i + 1/2)/m; the line's rise from the middle of the edge to its end.
        position = (np.arange(len(fresh)) - np.repeat(self._first, self._counts) + 0.5) / np.repeat(
            self._counts, self._counts
        ) - 0.5
        squares = np.add.reduceat(position**2, self._first)
        squares[squares == 0.0] = 1.0
        rise = 0.5 * np.add.reduceat(position[:, None] * fresh, self._first, axis=0) / squares[:, None]
        at_start, at_end = mean - rise, mean + rise
        moved = np.empty((count, len(mean), 2))
        for draw in range(count):
            moved[draw] = mitre(
                self._normals[:, self._before], self._normals, at_end[self._before, draw], at_start[:, draw]
            ).T
        return moved
