"""A measured photo of a cut that is not square to its member, projected to the true section."""

from __future__ import annotations

from dataclasses import replace

import numpy as np

from ..props.enclosing import measured_quantities
from ..props.errors import UsageError
from ..props.oblique import Cut, projected
from .measure import Measurement


def squared(measurement: Measurement, cut: Cut) -> Measurement:
    """The measurement with the true section of every member in place of its cut's face.

    Raises UsageError for a cut that cannot be, and for depths measured where there are several members.
    """
    if cut.depths is not None and len(measurement.members) > 1:
        raise UsageError(
            "cut-of-several",
            f"Depths of the cut are stated, and {len(measurement.members)} members are measured.",
            "State the angle of the cut, or point at one member with --seed.",
        )
    found = [projected(m.section, m.uncertainty, cut) for m in measurement.members]
    members = []
    for member, one in zip(measurement.members, found, strict=True):
        quantities = measured_quantities(one.section, one.uncertainty, member.density)
        members.append(
            replace(member, section=one.section, uncertainty=one.uncertainty, quantities=quantities, cut=one)
        )
    stretch = np.linalg.inv(found[0].shrink)
    to_pixels = measurement.to_pixels
    return replace(measurement, members=tuple(members), to_pixels=lambda points: to_pixels(points @ stretch))
