"""What a measured member is held against: its true section, and itself."""

from __future__ import annotations

import numpy as np
import pytest
from cutface.props.properties import section_properties
from cutface.props.section import Section
from cutface.vision.measure import Member

# Free of where the axes lie, which for cards is only what is upright in the picture.
INVARIANT = (
    "area",
    "second_moment_major",
    "second_moment_minor",
    "polar_second_moment",
    "plastic_modulus_major",
    "plastic_modulus_minor",
)


def right_about(member: Member, section: Section, names: tuple[str, ...] = INVARIANT) -> None:
    """Assert that a member is the section: holes and parts exact, figures within four standard uncertainties."""
    assert [len(part.holes) for part in member.section.parts] == [len(part.holes) for part in section.parts]
    true = section_properties(section)
    off = {n: (member.quantities[n].value - true[n]) / member.quantities[n].std for n in names}
    assert {name: ratio for name, ratio in off.items() if abs(ratio) > 4.0} == {}


def sensible_intervals(member: Member, most: float) -> None:
    """Assert that every quantity's statements agree with each other; `most` is the largest u of the area, relative."""
    for name, q in member.quantities.items():
        assert np.isfinite([q.value, q.std, *q.interval95]).all(), name
        assert q.std >= 0, name
        low, high = q.interval95
        assert low <= q.value <= high, name
        # 1.645 where one rectangular cause dominates, 1.96 for a normal one.
        assert 2 * 1.6 * q.std <= high - low <= 2 * 2.0 * q.std * (1 + 1e-9) + 1e-12, name
        if q.budget:
            total = float(np.sqrt(sum(part.std**2 for part in q.budget)))
            assert total == pytest.approx(q.std, rel=1e-6, abs=1e-12), name
            assert sum(part.share for part in q.budget) == pytest.approx(1.0, abs=1e-6), name
        if q.pixel_bounds is not None:
            assert q.pixel_bounds[0] < q.value < q.pixel_bounds[1], name
    area = member.quantities["area"]
    assert 1e-4 < area.std / area.value < most
    # Half a pixel all round.
    bound = 0.5 * (area.pixel_bounds[1] - area.pixel_bounds[0]) if area.pixel_bounds else 0.0
    assert bound > 2 * area.std * 0.1
