"""A cut that is not square to the member's axis: its face projected to the true section.

The face of a cut an angle a off square is stretched by 1/cos a along the line in which it falls away; seen along the
member's axis it is the true section. Knows outlines; not how the angle was measured.
"""

from __future__ import annotations

import math
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from .errors import UsageError
from .integrals import centroidal, following
from .section import Section
from .uncertainty import EdgeNoise, Mode, OutlineUncertainty

Floats = NDArray[np.float64]

SOURCE = "cut not square"
# A protractor or a bevel against the member's sides; a rule from a square line to the cut; where the line of steepest
# fall lies on the face (stated assumptions).
ANGLE_STD = math.radians(0.5)
DEPTH_STD = 0.5
DIRECTION_STD = math.radians(5.0)
# Beyond this the face tells too little of the section.
_STEEPEST = math.radians(70.0)


@dataclass(frozen=True)
class Cut:
    """How a cut lies to the member's axis.

    direction : rad from x on the face, along the line in which it falls away
    angle, angle_std : rad off square, where it was measured as an angle
    depths, depth_std : mm from a line square round the member to the cut, at the two ends of the face in that
        direction, where these were measured instead
    """

    direction: float
    angle: float | None = None
    angle_std: float = ANGLE_STD
    depths: tuple[float, float] | None = None
    depth_std: float = DEPTH_STD
    direction_std: float = DIRECTION_STD


@dataclass(frozen=True, eq=False)
class Projected:
    """The true section of an oblique cut, and the angle off square it was projected by, rad.

    shrink : (2, 2) from the face's coordinates to those of the section
    """

    section: Section
    uncertainty: OutlineUncertainty
    angle: float
    angle_std: float
    shrink: Floats


def projected(section: Section, uncertainty: OutlineUncertainty, cut: Cut) -> Projected:
    """The section square to the member's axis, of the face of a cut that is not, and its uncertainty.

    It keeps the face's coordinates across the fall. Raises UsageError for a cut that cannot be.
    """
    angle, std = _angle(section, cut)
    fall = np.array([math.cos(cut.direction), math.sin(cut.direction)])
    across = np.array([-fall[1], fall[0]])
    # Of an angle that is uncertain itself, the mean of its cosine.
    cosine = math.cos(angle) * (1.0 - 0.5 * std**2)
    shrink = np.eye(2) + (cosine - 1.0) * np.outer(fall, fall)
    square = section.with_vertices(section.vertices @ shrink)
    about = section.vertices - centroidal(section).origin
    along, beside = about @ fall, about @ across
    # The spread of a cosine, which near square is of second order.
    spread = math.hypot(math.sin(angle) * std, std**2 / math.sqrt(2.0))
    turned = (cosine - 1.0) * cut.direction_std * (np.outer(beside, fall) + np.outer(along, across))
    modes = [replace(mode, displacement=mode.displacement @ shrink) for mode in uncertainty.modes]
    modes += [Mode(SOURCE, spread * np.outer(along, fall)), Mode(SOURCE, turned)]
    stretch = _tangents(section) @ shrink
    length = np.linalg.norm(stretch, axis=1)
    noise, bound = uncertainty.noise, uncertainty.edge_bound
    return Projected(
        square,
        replace(
            uncertainty,
            modes=tuple(modes),
            # Areas shrink by the cosine: what moves along the outline less, moves across it more.
            noise=None if noise is None else EdgeNoise(noise.std * cosine / length, noise.correlation_length * length),
            edge_bound=None if bound is None else bound * cosine / length,
        ),
        angle,
        std,
        shrink,
    )


def _angle(section: Section, cut: Cut) -> tuple[float, float]:
    """Angle off square and its standard uncertainty, rad."""
    if cut.angle is not None:
        if not abs(cut.angle) <= _STEEPEST:
            raise UsageError(
                "bad-cut",
                f"A cut {math.degrees(cut.angle):g}° off square is no face to measure a section from.",
                f"State the angle from square, up to {math.degrees(_STEEPEST):.0f}°.",
            )
        return abs(cut.angle), cut.angle_std
    if cut.depths is None:
        raise UsageError("bad-cut", "Nothing tells how far the cut is off square.", "State its angle or two depths.")
    reach = float(np.ptp(section.vertices @ [math.cos(cut.direction), math.sin(cut.direction)]))
    sine = abs(cut.depths[1] - cut.depths[0]) / reach
    if not sine <= math.sin(_STEEPEST):
        raise UsageError(
            "bad-cut",
            f"Depths of {cut.depths[0]:g} and {cut.depths[1]:g} mm at both ends of a face of {reach:.4g} mm cannot be.",
            "State the depths in mm from a line square round the member to the cut, and the direction between them.",
        )
    angle = math.asin(sine)
    return angle, math.sqrt(2.0) * cut.depth_std / (reach * math.cos(angle))


def _tangents(section: Section) -> Floats:
    """(n, 2) unit directions of the outline at its vertices."""
    start, after = section.vertices, following(section)
    along = start[after] - start
    along /= np.linalg.norm(along, axis=1, keepdims=True)
    before = np.empty_like(after)
    before[after] = np.arange(len(after))
    mean = along + along[before]
    length = np.linalg.norm(mean, axis=1, keepdims=True)
    return np.where(length > 1e-9, mean / np.maximum(length, 1e-9), along)
