"""Several pictures of one face: simulated ones come out right, and what is no second picture of it is refused."""

from __future__ import annotations

from dataclasses import replace
from functools import cache

import numpy as np
import pytest
from camera_simulator import random_scene, write
from cutface.props.errors import Refusal
from cutface.props.section import Section
from cutface.vision.combined import combine
from cutface.vision.measure import Measurement, measure
from cutface.vision.photo import load_photo
from hand_made_measurement import one_member, two_members
from measured_member import right_about
from simulated_shapes import channel


@cache
def turned_scans(folder: str) -> tuple[Section, tuple[Measurement, ...]]:
    """One slice scanned twice on one scanner, turned by a quarter in between."""
    made = []
    for number, skew in enumerate((4.0, 92.0)):
        scene = random_scene(
            31 + number,
            "scan",
            section=channel(60, 30, 4, 5, 4),
            look="rust",
            background="white lid",
            dpi=(300.0, 300.0),
            glass_mm=(95.0, 95.0),
            count=1,
            scan_scale=(1.004, 0.998),
            skew_deg=skew,
        )
        made.append((scene, measure(load_photo(write(scene, f"{folder}/scan{number}.png")))))
    return made[0][0].members[0].section, tuple(m for _, m in made)


def test_a_slice_turned_between_scans(tmp_path_factory: pytest.TempPathFactory) -> None:
    section, scans = turned_scans(str(tmp_path_factory.getbasetemp()))
    found = combine(scans)
    (member,) = found.members
    right_about(member, section)
    assert found.combined is not None
    assert [abs(round(np.degrees(one.turn), -1)) for one in found.combined.laid] == [0, 90]
    assert found.photos == scans
    # The scales of both axes are averaged: two half shares of each instead of three parts of one.
    once = scans[0].members[0].quantities["second_moment_major"]
    both = member.quantities["second_moment_major"]

    def scale(quantity) -> float:
        return sum(line.std for line in quantity.budget if line.source == "scanner scale") / quantity.value

    assert scale(both) == pytest.approx(0.002 * np.hypot(2, 2), rel=0.05)
    assert scale(once) > 1.08 * scale(both)


def test_photos_of_other_references_have_scales_of_their_own(tmp_path_factory: pytest.TempPathFactory) -> None:
    _, scans = turned_scans(str(tmp_path_factory.getbasetemp()))
    other = replace(scans[1], reference=replace(scans[1].reference, label="another"))
    apart = combine([scans[0], other]).members[0].quantities["area"]
    same = combine(scans).members[0].quantities["area"]

    def scale(quantity) -> float:
        return sum(line.std for line in quantity.budget if line.source == "scanner scale")

    # Independent scales average out in the area, which a common one does not.
    assert scale(apart) == pytest.approx(scale(same) / np.sqrt(2), rel=0.15)


def test_density_and_notices_are_kept(tmp_path_factory: pytest.TempPathFactory) -> None:
    _, scans = turned_scans(str(tmp_path_factory.getbasetemp()))
    (member,) = scans[0].members
    mass = replace(member.quantities["area"], value=7850e-6 * member.quantities["area"].value, unit="kg/m")
    heavy = replace(scans[0], members=(replace(member, quantities={**member.quantities, "mass_per_metre": mass}),))
    found = combine([heavy, scans[1]]).members[0].quantities
    assert found["mass_per_metre"].value == pytest.approx(7850e-6 * found["area"].value)


def test_several_members_are_not_combined() -> None:
    with pytest.raises(Refusal) as refused:
        combine([one_member(), two_members()])
    assert refused.value.code == "several-members"
    assert "Photo 2" in refused.value.message
