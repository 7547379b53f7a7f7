"""Outlines of one face from several pictures, drawn at random about a known one, laid on each other and averaged."""

from __future__ import annotations

import math
from collections.abc import Sequence

import numpy as np
import pytest
from cutface.props.combination import Combined, Pictured, combined
from cutface.props.errors import Refusal, UsageError
from cutface.props.properties import section_properties
from cutface.props.section import Section
from cutface.props.shapes import hollow_rectangle
from cutface.props.uncertainty import EdgeNoise, Mode, OutlineUncertainty, quantify
from sample_sections import ANGLE, CHANNEL, PAIR, circle, rectangle, section

BOX = hollow_rectangle(depth=120, width=80, thickness=5, outer_radius=9)
NAMES = ("area", "second_moment_major", "second_moment_minor")
FIXED, LOOSE = {"print scale"}, {"reference corners"}


def turned(shape: Section, degrees: float, shift: Sequence[float] = (0.0, 0.0)) -> Section:
    c, s = math.cos(math.radians(degrees)), math.sin(math.radians(degrees))
    return shape.with_vertices(shape.vertices @ np.array([[c, s], [-s, c]]) + np.array(shift))


def of_a_picture(shape: Section, scale: float = 0.003, corners: float = 0.002) -> OutlineUncertainty:
    """A scale per axis of the reference, a height above it, corners of the reference that bend the plane."""
    about = shape.vertices - shape.vertices.mean(axis=0)
    size = float(np.ptp(about, axis=0).max())
    modes = [Mode("print scale", about * axis * scale) for axis in np.eye(2)]
    modes.append(Mode("plane offset", about * 0.001))
    modes += [Mode("reference corners", corners * about * about[:, [axis]] / size) for axis in (0, 1)]
    modes += [Mode("reference corners", corners * about * sign) for sign in ([1, -1], [1, 1])]
    count = len(about)
    return OutlineUncertainty(tuple(modes), EdgeNoise(np.full(count, 0.01), np.full(count, 0.4)), np.full(count, 0.1))


def pictures(shape: Section, turns: Sequence[float], rng: np.random.Generator, **sizes: float) -> list[Pictured]:
    """What pictures make of a face turned by so many degrees: what they have in common is drawn once."""
    common: dict[tuple[str, int], float] = {}
    found = []
    for turn in turns:
        laid = turned(shape, turn + rng.normal(0, 2), rng.uniform(-50, 50, 2).tolist())
        uncertainty = of_a_picture(laid, **sizes)
        moved = np.zeros_like(laid.vertices)
        for n, mode in enumerate(uncertainty.modes):
            own = rng.normal()
            size = own if mode.source in LOOSE else common.setdefault((mode.source, n), own)
            moved += size * mode.displacement
        found.append(Pictured(laid.with_vertices(laid.vertices + moved), uncertainty))
    return found


def figures(found: Combined | Pictured) -> dict[str, tuple[float, float, tuple[float, float]]]:
    values = section_properties(found.section)
    quantities = quantify(found.section, {n: values[n] for n in NAMES}, found.uncertainty)
    return {n: (q.value, q.std, q.interval95) for n, q in quantities.items()}


@pytest.mark.parametrize(("shape", "turns"), [(rectangle(73, 223), (0, 90)), (ANGLE, (0, 0, 0)), (BOX, (0, 90))])
def test_intervals_hold_the_truth(shape: Section, turns: Sequence[float]) -> None:
    rng = np.random.default_rng(8)
    true = section_properties(shape)
    draws = 30
    held, off, strained = 0, [], 0
    for _ in range(draws):
        found = combined(pictures(shape, turns, rng), FIXED, LOOSE)
        got = figures(found)
        held += sum(got[n][2][0] <= true[n] <= got[n][2][1] for n in NAMES)
        off.append([(got[n][0] - true[n]) / got[n][1] for n in NAMES])
        strained += found.probability < 0.05
    # Figures of one draw hang together: three standard deviations of so many draws, not of three times as many.
    assert held / (3 * draws) > 0.95 - 3 * math.sqrt(0.95 * 0.05 / draws)
    assert np.sqrt(np.mean(np.square(off), axis=0)) == pytest.approx(np.ones(3), abs=3 / math.sqrt(2 * draws))
    # Never more often than promised; rarer, as what may differ between pictures here does not.
    assert strained <= 0.05 * draws + 3 * math.sqrt(0.05 * draws)


def part_of(found: Combined | Pictured, source: str) -> float:
    """What a source makes of the standard uncertainty of the major second moment."""
    value = section_properties(found.section)["second_moment_major"]
    quantity = quantify(found.section, {"second_moment_major": value}, found.uncertainty)["second_moment_major"]
    return sum(line.std for line in quantity.budget if line.source == source)


def test_what_each_picture_has_averages_out_and_what_all_have_stays() -> None:
    of_four = pictures(CHANNEL, (0, 0, 0, 0), np.random.default_rng(2), corners=0.004)
    found = combined(of_four, FIXED, LOOSE)
    corners = part_of(found, "reference corners") / max(found.narrowed, found.widened)
    assert corners == pytest.approx(0.5 * part_of(of_four[0], "reference corners"), rel=0.1)
    for source in ("print scale", "plane offset"):
        assert part_of(found, source) == pytest.approx(part_of(of_four[0], source), rel=0.05), source


def test_a_quarter_turn_averages_the_scales_of_both_axes() -> None:
    shape = turned(rectangle(73, 223), 0)

    def pictured(turn: float) -> Pictured:
        laid = turned(shape, turn)
        stretched = laid.with_vertices(laid.vertices * [1.004, 1.0])
        about = laid.vertices - laid.vertices.mean(axis=0)
        modes = tuple(Mode("scanner scale", about * axis * 0.003) for axis in np.eye(2))
        return Pictured(stretched, OutlineUncertainty(modes))

    found = combined([pictured(0.0), pictured(90.0)], {"scanner scale"}, LOOSE)
    assert [abs(round(math.degrees(one.turn))) for one in found.laid] == [0, 90]
    assert [one.weight for one in found.laid] == pytest.approx([0.5, 0.5], abs=2e-3)
    # Half of the stretch along either side.
    assert np.ptp(found.section.vertices, axis=0) == pytest.approx([73 * 1.002, 223 * 1.002], rel=1e-5)
    got, once = figures(found)["second_moment_major"], figures(pictured(0.0))["second_moment_major"]
    # Alone: 3 times the scale along the depth, once that along the width; both: twice either.
    assert got[1] / got[0] == pytest.approx(0.003 * math.hypot(2.0, 2.0), rel=5e-3)
    assert once[1] / once[0] == pytest.approx(0.003 * math.hypot(3.0, 1.0), rel=5e-3)


def test_what_may_be_the_same_counts_as_the_same_in_whatever_sense_adds_up() -> None:
    """A slope of the face that changes its sense with the turn could be the slice's own."""

    def pictured(turn: float) -> Pictured:
        laid = turned(ANGLE, turn)
        about = laid.vertices - laid.vertices.mean(axis=0)
        return Pictured(laid, OutlineUncertainty((Mode("tilt", 1e-5 * about * about[:, [1]]),)))

    once = figures(pictured(0.0))
    both = figures(combined([pictured(0.0), pictured(180.0)], FIXED, LOOSE))
    for name in NAMES:
        assert both[name][1] == pytest.approx(once[name][1], rel=1e-3), name


def test_several_parts_and_holes_are_laid_on_each_other() -> None:
    rng = np.random.default_rng(4)
    found = combined(pictures(PAIR, (0, 0), rng), FIXED, LOOSE)
    assert [len(part.holes) for part in found.section.parts] == [len(part.holes) for part in PAIR.parts]
    assert section_properties(found.section)["area"] == pytest.approx(section_properties(PAIR)["area"], rel=0.02)
    around = section(circle(40.0, 200))
    tube = combined(pictures(around, (0, 0, 0), rng), FIXED, LOOSE)
    assert set(tube.laid[0].figures) == {"area", "polar_second_moment"}
    assert tube.degrees == 4


def test_pictures_that_agree_better_or_worse_than_expected_say_so() -> None:
    rng = np.random.default_rng(6)
    same = Pictured(ANGLE, of_a_picture(ANGLE))
    agreeing = combined([same] * 4, FIXED, LOOSE)
    assert agreeing.narrowed == pytest.approx(math.sqrt(8 / 17), rel=1e-2)
    assert agreeing.widened == 1.0
    assert agreeing.probability == pytest.approx(1.0)
    larger = ANGLE.with_vertices(1.011 * ANGLE.vertices)
    apart = [Pictured(shape, of_a_picture(ANGLE)) for shape in (ANGLE, ANGLE, larger)]
    strained = combined(apart, FIXED, LOOSE)
    assert [n.code for n in strained.notices] == ["photos-strained"]
    assert "photo 3" in strained.notices[0].message
    assert strained.widened > 1.0
    calm = combined(pictures(ANGLE, (0, 0, 0), rng), FIXED, LOOSE)
    assert figures(strained)["area"][1] > figures(calm)["area"][1]


@pytest.mark.parametrize(
    ("other", "words"),
    [
        (ANGLE.with_vertices(ANGLE.vertices * 1.03), "contradict"),
        (section([[0, 0], [60, 0], [60, 12], [12, 12], [12, 150], [0, 150]]), "not that of the first"),
        (ANGLE.with_vertices(ANGLE.vertices * [-1, 1]), "not that of the first"),
        (BOX, "1 part with 1 hole, the first 1 part with no hole"),
    ],
)
def test_what_is_not_the_same_face_is_refused(other: Section, words: str) -> None:
    with pytest.raises(Refusal) as refused:
        combined([Pictured(ANGLE, of_a_picture(ANGLE)), Pictured(other, of_a_picture(other))], FIXED, LOOSE)
    assert refused.value.code == "photos-disagree"
    assert words in refused.value.message.replace("holes", "hole")


def test_one_picture_is_none_to_combine() -> None:
    with pytest.raises(UsageError):
        combined([Pictured(ANGLE, of_a_picture(ANGLE))], FIXED, LOOSE)
