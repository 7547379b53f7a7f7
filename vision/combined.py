"""Several measured photos of one face made into one measurement.

Knows which causes photos have in common; how outlines are laid on each other and averaged is `props.combination`'s.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import replace

from ..props.combination import Pictured, combined
from ..props.effects import RANDOM
from ..props.enclosing import measured_quantities
from ..props.errors import Refusal
from .measure import Measurement

# One and the same in all photos of a print, all scans of a scanner, and fixed to it: a face that is turned between
# pictures is stretched along another of its own directions.
OF_THE_REFERENCE = frozenset({"print scale", "scanner scale", "scanner skew", "scanner calibration"})
# New in every photo. All else, from the height of the face and its place on the glass to the lens and the light at its
# edges, may be the same or not.
OF_EACH_PHOTO = frozenset({"reference corners", "bridged outline", RANDOM})


def combine(measurements: Sequence[Measurement]) -> Measurement:
    """The measurement of one face from several photos of it, in the frame of the first.

    measurements : each of one member; by references of one kind and label, else their scales count as independent
    Raises Refusal where a photo shows several members or where the photos cannot be of one face.
    """
    for number, measurement in enumerate(measurements, start=1):
        if len(measurement.members) != 1:
            raise Refusal(
                "several-members",
                f"Photo {number} shows {len(measurement.members)} members; several photos are combined of one alone.",
                "Give pictures that show the one member, or measure them one by one.",
            )
    first = measurements[0]
    member = first.members[0]
    same = len({(m.reference.kind, m.reference.label) for m in measurements}) == 1
    found = combined(
        [Pictured(m.members[0].section, m.members[0].uncertainty) for m in measurements],
        OF_THE_REFERENCE if same else frozenset(),
        OF_EACH_PHOTO if same else OF_EACH_PHOTO | OF_THE_REFERENCE,
    )
    quantities = measured_quantities(found.section, found.uncertainty, member.density)
    notices = dict.fromkeys(n for m in measurements for n in (*m.notices, *m.members[0].notices))
    return replace(
        first,
        members=(
            replace(
                member,
                section=found.section,
                uncertainty=found.uncertainty,
                quantities=quantities,
                notices=found.notices,
            ),
        ),
        notices=tuple(notices),
        photos=tuple(measurements),
        combined=found,
    )
