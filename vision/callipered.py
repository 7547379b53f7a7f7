"""A measured photo adjusted to sizes that a person took by calliper on the member itself.

Knows which face and which places a person means; the adjustment is that of `props.calliper`.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from ..props.calliper import CALLIPER_STD, Place, Reading, adjusted
from ..props.enclosing import measured_quantities
from ..props.errors import UsageError
from ..props.integrals import following
from .measure import Measurement, Member

Array = NDArray[np.float64]
Pixel = tuple[float, float]

# A picked point this far from the outline, in parts of the face's size in the picture, was not meant to lie on it.
_FARTHEST = 0.05


@dataclass(frozen=True)
class Stated:
    """A size as a person states it.

    value, std : mm
    size : one of `props.calliper.SIZES`, None for the distance of two points
    points : two photo pixels on the outline, straight across a wall; None for a size
    member : number of the face, None where there is but one, or where the points tell
    """

    value: float
    std: float = CALLIPER_STD
    size: str | None = None
    points: tuple[Pixel, Pixel] | None = None
    member: int | None = None


def callipered(measurement: Measurement, stated: Sequence[Stated]) -> Measurement:
    """The measurement with every face adjusted to the sizes stated of it.

    Raises UsageError for a size of which nobody knows where it was taken, Refusal where a size and the photo cannot
    both be right.
    """
    readings: dict[int, list[Reading]] = {}
    for size in stated:
        member = _member(measurement, size)
        readings.setdefault(member.number, []).append(_reading(measurement, member, size))
    members = tuple(_adjusted(m, readings[m.number]) if m.number in readings else m for m in measurement.members)
    return replace(measurement, members=members)


def _adjusted(member: Member, readings: Sequence[Reading]) -> Member:
    found = adjusted(member.section, member.uncertainty, readings)
    quantities = measured_quantities(found.section, found.uncertainty, member.density)
    return replace(
        member,
        section=found.section,
        uncertainty=found.uncertainty,
        quantities=quantities,
        calliper=found,
        notices=(*member.notices, *found.notices),
    )


def _member(measurement: Measurement, size: Stated) -> Member:
    members = measurement.members
    if size.member is not None:
        if not 1 <= size.member <= len(members):
            raise UsageError(
                "calliper-member",
                f"There is no member {size.member}; {len(members)} are measured.",
                "Count the members as the picture numbers them.",
            )
        return members[size.member - 1]
    if len(members) == 1:
        return members[0]
    if size.points is None:
        raise UsageError(
            "calliper-member",
            f"{len(members)} members are measured, and the {size.size} is stated of none of them.",
            f'Put the member\'s number before it, as "2:{size.size}={size.value:g}".',
        )
    pixel = np.mean(size.points, axis=0)
    return min(members, key=lambda m: min(float(np.linalg.norm(t - pixel, axis=1).min()) for t in m.trace_px))


def _reading(measurement: Measurement, member: Member, size: Stated) -> Reading:
    if size.points is None:
        return Reading(size.size or "", size.value, size.std)
    first, second = (_place(measurement, member, point) for point in size.points)
    return Reading("thickness", size.value, size.std, (first, second))


def _place(measurement: Measurement, member: Member, pixel: Pixel) -> Place:
    """The place on a member's outline nearest to a photo pixel."""
    start = measurement.to_pixels(member.section.vertices)
    along = start[following(member.section)] - start
    share = np.clip(np.sum((pixel - start) * along, axis=1) / np.sum(along**2, axis=1), 0.0, 1.0)
    distance = np.linalg.norm(start + share[:, None] * along - pixel, axis=1)
    edge = int(np.argmin(distance))
    if distance[edge] > _FARTHEST * float(np.ptp(start, axis=0).max()):
        raise UsageError(
            "calliper-off-outline",
            f"The point ({pixel[0]:g}, {pixel[1]:g}) lies {distance[edge]:.0f} pixels off the outline.",
            "Give two points on the outline, in pixels of the upright picture from its upper left corner.",
        )
    return edge, float(share[edge])
