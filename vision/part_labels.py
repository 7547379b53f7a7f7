"""Which pixels of a face belong to which part: by what the places look like that a person picked.

Knows colours and what hangs together; labels on a reduced picture, never the place of a joint.
"""

from __future__ import annotations

import itertools
from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from ..props.errors import Refusal
from .light import Light
from .regions import Regions

# Pictures come as float32, places as float64.
Array = NDArray[Any]
Labels = NDArray[np.int32]

# The larger side of the picture on which parts are told apart, pixels.
_WORKING_SIZE = 700
# Around a picked point this many of its pixels show what the part looks like.
_PATCH = 4
# Looks nearer than this many of their own deviations are one material.
_ALIKE = 2.5
# Light varies by this much, natural logarithm, within any material (stated assumption).
_GRAIN = 0.03
# A region of a look of its own that nobody picked is a part and no knot or stain beyond this share of the face.
_LEAST_PART = 0.05


@dataclass(frozen=True)
class LabelMap:
    """(h, w) part numbers from 1 of every pixel of a reduced window, also beyond the face; `face` where it is."""

    labels: Labels
    face: NDArray[np.bool_]
    left: int
    top: int
    factor: int

    def inside(self, pixels: Array) -> Array:
        """Photo pixels to pixels of the window."""
        return (pixels - (self.left, self.top) + 0.5) / self.factor - 0.5

    def outside(self, places: Array) -> Array:
        """Pixels of the window to photo pixels."""
        return (places + 0.5) * self.factor - 0.5 + (self.left, self.top)

    def at(self, pixels: Array) -> Labels:
        """(n,) part numbers at (n, 2) photo pixels."""
        x, y = np.rint(self.inside(pixels)).astype(int).T
        height, width = self.labels.shape
        return self.labels[np.clip(y, 0, height - 1), np.clip(x, 0, width - 1)]


def label_parts(light: Light, regions: Regions, picked: Sequence[tuple[float, float]]) -> LabelMap:
    """The parts of a face, numbered from 1 in the order of the points picked on them.

    picked : photo pixels (x, y)
    Raises Refusal for a point off the face, for two on one part, and for a large part without one.
    """
    import cv2

    group = regions.groups[0]
    shells = np.concatenate([region.shell for region in group])
    height, width = light.pixels.shape[:2]
    margin = 12
    low = np.maximum(np.floor(shells.min(axis=0)).astype(int) - margin, 0)
    high = np.minimum(np.ceil(shells.max(axis=0)).astype(int) + margin, (width, height))
    factor = max(1, round(float((high - low).max()) / _WORKING_SIZE))
    window = Light(light.pixels[low[1] : high[1], low[0] : high[0]], light.curve, light.weights)
    tone = window.reduced(factor)
    left, top = int(low[0]), int(low[1])
    empty = LabelMap(np.zeros(tone.shape[:2], np.int32), np.zeros(tone.shape[:2], bool), left, top, factor)
    face = np.zeros(tone.shape[:2], np.uint8)
    for region in group:
        cv2.fillPoly(face, [np.rint(empty.inside(region.shell)).astype(np.int32)], 1)
        for hole in region.holes:
            cv2.fillPoly(face, [np.rint(empty.inside(hole)).astype(np.int32)], 0)
    seeds = np.rint(empty.inside(np.array(picked, float))).astype(int)
    # Pixels at the outline are mixed with what lies behind.
    inner = cv2.erode(face, np.ones((5, 5), np.uint8)).astype(bool)
    for number, (x, y) in enumerate(seeds, start=1):
        if not inner[y, x]:
            raise Refusal(
                "part-off-face",
                f"The point picked on part {number} lies at the edge of the face or beside it.",
                "Point well inside the part.",
            )
    labels = _parts_by_look(tone, inner, seeds)
    return LabelMap(labels, face.astype(bool), left, top, factor)


def _parts_by_look(tone: NDArray[np.float32], inner: NDArray[np.bool_], seeds: NDArray[np.int_]) -> Labels:
    """(h, w) part numbers from 1 everywhere: what looks like the picked places and hangs together with them.

    Looks are normal distributions of the logarithm of light, learnt around the seeds and then from all that is taken
    for them, as in clustering by mixtures; those that turn out alike are one.
    """
    import cv2

    weight = cv2.GaussianBlur(inner.astype(np.float32), (0, 0), 1.5)
    smooth = np.stack([cv2.GaussianBlur(np.where(inner, c, 0.0), (0, 0), 1.5) for c in np.moveaxis(tone, -1, 0)], -1)
    look = np.log(np.maximum(smooth / np.maximum(weight, 1e-3)[..., None], 1e-4))
    pixels = look[inner].astype(float)
    rows, columns = np.nonzero(inner)
    looks: list[tuple[list[int], NDArray[np.bool_]]] = []
    for number, (x, y) in enumerate(seeds):
        looks.append(([number], np.hypot(columns - x, rows - y) <= _PATCH))
    best = np.zeros(len(pixels), int)
    for _ in range(10):
        models = _merged(looks, pixels)
        if len(models) == 1:
            raise _alike(models[0][0])
        scores = np.stack([_score(pixels, mean, spread) for _, mean, spread in models])
        others = np.stack([np.delete(scores, k, axis=0).max(axis=0) for k in range(len(scores))])
        # Neighbours decide together: a grain of rust as light as wood is still rust.
        maps = np.zeros((len(models), *inner.shape), np.float32)
        maps[:, inner] = np.clip(scores - others, -4.0, 4.0)
        before, best = (
            best,
            np.stack([cv2.GaussianBlur(maps[k], (0, 0), 2.0) for k in range(len(maps))]).argmax(axis=0)[inner],
        )
        looks = [(members, best == k) for k, (members, _, _) in enumerate(models)]
        if np.array_equal(best, before):
            break
    labels = np.zeros(inner.shape, np.int32)
    for members, chosen in looks:
        mask = np.zeros(inner.shape, np.uint8)
        mask[inner] = chosen
        _, found, stats, _ = cv2.connectedComponentsWithStats(mask, connectivity=4)
        of_seed = {number: int(found[seeds[number][1], seeds[number][0]]) for number in members}
        for first, second in itertools.combinations(members, 2):
            if of_seed[first] == of_seed[second]:
                raise _alike([first, second])
        for number, component in of_seed.items():
            if component:
                labels[found == component] = number + 1
        left = [c for c in range(1, len(stats)) if c not in of_seed.values()]
        large = [c for c in left if stats[c, cv2.CC_STAT_AREA] > _LEAST_PART * inner.sum()]
        if large:
            raise Refusal(
                "part-not-picked",
                f"A region of {100 * stats[large[0], cv2.CC_STAT_AREA] / inner.sum():.0f} % of the face hangs together "
                "with no point that was picked.",
                "Pick a point on every part of the member (--part).",
            )
    for number, (x, y) in enumerate(seeds, start=1):
        if not (labels == number).any():
            labels[y, x] = number
    # Specks, and all beyond the face, go to the part next to them.
    _, nearest = cv2.distanceTransformWithLabels(
        (labels == 0).astype(np.uint8), cv2.DIST_L2, 5, labelType=cv2.DIST_LABEL_PIXEL
    )
    of_label = np.zeros(int(nearest.max()) + 1, np.int32)
    of_label[nearest[labels > 0]] = labels[labels > 0]
    return of_label[nearest]


def _merged(
    looks: Sequence[tuple[list[int], NDArray[np.bool_]]], pixels: Array
) -> list[tuple[list[int], Array, Array]]:
    """(members, mean, covariance) of every look, those that are alike joined."""
    floor = _GRAIN**2 * np.eye(pixels.shape[1])
    groups = [(list(members), chosen) for members, chosen in looks if chosen.sum() > 3]
    while True:
        models: list[tuple[list[int], Array, Array]] = []
        for members, chosen in groups:
            values = pixels[chosen]
            middle = np.median(values, axis=0)
            # Stains and cracks within a part do not widen its look.
            spread = 1.4826 * np.median(np.abs(values - middle), axis=0) + _GRAIN
            near = values[np.all(np.abs(values - middle) < 4.0 * spread, axis=1)]
            models.append((members, near.mean(axis=0), np.atleast_2d(np.cov(near.T)) + floor))
        apart = {(i, j): _apart(models[i], models[j]) for i, j in itertools.combinations(range(len(models)), 2)}
        closest = min(apart, key=lambda pair: apart[pair], default=None)
        if closest is None or apart[closest] > _ALIKE:
            return models
        i, j = closest
        joined = (groups[i][0] + groups[j][0], groups[i][1] | groups[j][1])
        groups = [g for k, g in enumerate(groups) if k not in closest] + [joined]


def _apart(a: tuple[list[int], Array, Array], b: tuple[list[int], Array, Array]) -> float:
    """Distance of two looks in deviations of theirs."""
    difference = a[1] - b[1]
    return float(np.sqrt(difference @ np.linalg.solve(0.5 * (a[2] + b[2]), difference)))


def _score(pixels: Array, mean: Array, spread: Array) -> Array:
    """Log likelihood, but for a constant, of a normal distribution."""
    off = pixels - mean
    return -0.5 * (np.einsum("ni,ni->n", off @ np.linalg.inv(spread), off) + np.linalg.slogdet(spread)[1])


def _alike(numbers: Sequence[int]) -> Refusal:
    first, second = sorted(numbers)[:2]
    return Refusal(
        "parts-alike",
        f"No joint can be seen between the points picked on part {first + 1} and part {second + 1}.",
        "Pick one point on each part; chalk one of them if they look alike, or measure them as one.",
    )
