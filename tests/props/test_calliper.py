"""Sizes taken by calliper: against closed forms, Bayes' rule written out, and outlines drawn at random."""

from __future__ import annotations

import math
from dataclasses import replace

import numpy as np
import pytest
from cutface.props.calliper import CALLIPER, Adjusted, Place, Reading, adjusted
from cutface.props.effects import RANDOM
from cutface.props.errors import Refusal, UsageError
from cutface.props.properties import section_properties
from cutface.props.section import Section
from cutface.props.shapes import hollow_rectangle, rolled_i
from cutface.props.uncertainty import EdgeNoise, Mode, OutlineUncertainty, quantify
from sample_sections import ANGLE, CHANNEL, rectangle, section

BEAM = rolled_i(depth=200, width=100, web_thickness=5.6, flange_thickness=8.5, root_radius=12)
BOX = hollow_rectangle(depth=120, width=80, thickness=5, outer_radius=9)


def turned(shape: Section, degrees: float) -> Section:
    c, s = math.cos(math.radians(degrees)), math.sin(math.radians(degrees))
    return shape.with_vertices(shape.vertices @ np.array([[c, s], [-s, c]]))


def scales(shape: Section, std: float) -> tuple[Mode, ...]:
    about = shape.vertices - shape.vertices.mean(axis=0)
    return tuple(Mode("print scale", about * axis * std) for axis in np.eye(2))


def grown(shape: Section, distance: float) -> np.ndarray:
    """Movement (n, 2) that moves every edge out of the material by a distance."""
    moved = []
    for loop in shape.loops:
        along = np.roll(loop, -1, axis=0) - loop
        normal = np.stack([along[:, 1], -along[:, 0]], axis=1) / np.hypot(*along.T)[:, None]
        before = np.roll(normal, 1, axis=0)
        moved.append(distance * (normal + before) / (1.0 + np.sum(normal * before, axis=1))[:, None])
    return np.concatenate(moved)


def of_a_photo(shape: Section) -> OutlineUncertainty:
    about = shape.vertices - shape.vertices.mean(axis=0)
    size = float(np.ptp(about, axis=0).max())
    keystone = about * (about[:, :1] / size) * 0.001
    modes = (
        *scales(shape, 0.003),
        Mode("edge location (common)", grown(shape, 0.02), "rectangular"),
        Mode("tilt", keystone),
        Mode("plane offset", about * 0.001),
    )
    count = len(about)
    return OutlineUncertainty(modes, EdgeNoise(np.full(count, 0.01), np.full(count, 0.4)), np.full(count, 0.1))


def effect(field: np.ndarray, on: Adjusted, off: float = 1e-3) -> float:
    """Change of the area for a movement."""
    moved = on.section.with_vertices(on.section.vertices + off * field)
    return (section_properties(moved)["area"] - section_properties(on.section)["area"]) / off


# What a calliper reads


@pytest.mark.parametrize("skew", [0.0, 3.0, -11.0, 30.0, 90.0 + 4.0])
@pytest.mark.parametrize(("shape", "depth", "width"), [(rectangle(73, 223), 223, 73), (BEAM, 200, 100), (BOX, 120, 80)])
def test_sizes_are_those_of_the_member_however_it_lies(shape: Section, depth: float, width: float, skew: float) -> None:
    shape = turned(shape, skew)
    uncertainty = OutlineUncertainty(scales(shape, 0.003))
    upright = abs(skew) < 45
    sizes = {"depth": depth if upright else width, "width": width if upright else depth}
    sizes |= {"length": max(depth, width), "breadth": min(depth, width)}
    found = adjusted(shape, uncertainty, [Reading(name, size) for name, size in sizes.items()])
    assert [c.before for c in found.compared] == pytest.approx(list(sizes.values()), abs=1e-3)
    assert found.chi_square < 1e-4
    assert np.allclose(found.section.vertices, shape.vertices, atol=1e-3)


def test_an_oval_is_touched_at_its_crowns_and_a_channel_at_both_tips() -> None:
    t = 2 * np.pi * np.arange(400) / 400
    ellipse = turned(section(np.column_stack([50 * np.cos(t), 30 * np.sin(t)])), 20)
    readings = [Reading("length", 100.0), Reading("breadth", 60.0)]
    found = adjusted(ellipse, OutlineUncertainty(scales(ellipse, 0.003)), readings)
    assert [c.before for c in found.compared] == pytest.approx([100.0, 60.0], rel=1e-3)
    # A jaw over both tips of a channel reads the mean of them, and less surely the more they differ.
    skew = CHANNEL.vertices.copy()
    skew[1:3, 0] += 0.6
    tips = CHANNEL.with_vertices(skew)
    found = adjusted(tips, OutlineUncertainty(scales(tips, 0.003)), [Reading("breadth", 60.3)])
    assert found.compared[0].before == pytest.approx(60.3, abs=0.03)
    assert found.compared[0].after_std > 0.1


def places(shape: Section, *points: tuple[float, float]) -> tuple[Place, Place]:
    """The places on an outline nearest to points."""
    after = np.concatenate([np.roll(loop, -1, axis=0) for loop in shape.loops])
    start = shape.vertices
    found = []
    for point in points:
        along = after - start
        t = np.clip(np.sum((point - start) * along, axis=1) / np.sum(along**2, axis=1), 0, 1)
        edge = int(np.argmin(np.linalg.norm(start + t[:, None] * along - point, axis=1)))
        found.append((edge, float(t[edge])))
    return found[0], found[1]


def test_a_wall_and_a_gap_are_measured_square_to_their_faces() -> None:
    # A pick that is not quite opposite reads the same.
    wall = Reading("wall", 12.1, 0.05, places(ANGLE, (0, 80), (12, 83)))
    found = adjusted(ANGLE, of_a_photo(ANGLE), [wall])
    assert found.compared[0].before == pytest.approx(12.0)
    gap = Reading("gap", 104.0, 0.05, places(CHANNEL, (40, 8), (40, 112)))
    assert adjusted(CHANNEL, of_a_photo(CHANNEL), [gap]).compared[0].before == pytest.approx(104.0)
    with pytest.raises(UsageError, match="opposite"):
        adjusted(ANGLE, of_a_photo(ANGLE), [replace(wall, places=places(ANGLE, (0, 80), (50, 0)))])


@pytest.mark.parametrize(
    ("shape", "reading", "code"),
    [
        (turned(BOX, 44), Reading("depth", 120.0), "calliper-askew"),
        (BOX, Reading("girth", 400.0), "calliper-size"),
        (BOX, Reading("depth", -3.0), "calliper-figure"),
        (BOX, Reading("depth", 120.0, 0.0), "calliper-figure"),
        (BOX, Reading("depth", math.nan), "calliper-figure"),
    ],
)
def test_readings_that_cannot_be(shape: Section, reading: Reading, code: str) -> None:
    with pytest.raises(UsageError) as wrong:
        adjusted(shape, of_a_photo(shape), [reading])
    assert wrong.value.code == code


# The adjustment


def test_one_scale_and_one_reading_are_their_weighted_mean() -> None:
    shape = rectangle(80, 200)
    uncertainty = OutlineUncertainty(scales(shape, 0.003))
    found = adjusted(shape, uncertainty, [Reading("depth", 200.5, 0.4)])
    weights = 1 / 0.6**2, 1 / 0.4**2
    mean = (200.0 * weights[0] + 200.5 * weights[1]) / sum(weights)
    assert found.compared[0].after == pytest.approx(mean, rel=1e-9)
    assert found.compared[0].after_std == pytest.approx(sum(weights) ** -0.5)
    assert found.chi_square == pytest.approx(0.5**2 / (0.6**2 + 0.4**2))
    # The other axis learns nothing.
    width = np.ptp(found.section.vertices[:, 0])
    assert width == pytest.approx(80.0)
    quantities = quantify(found.section, section_properties(found.section), found.uncertainty)
    assert quantities["width"].std == pytest.approx(0.24)
    assert {c.source for c in quantities["depth"].budget} == {"print scale", CALLIPER}


def test_what_is_left_is_what_bayes_leaves() -> None:
    """Causes by their own names add up to the covariance I - A' S^-1 A of the adjusted causes."""
    shape = BEAM
    uncertainty = replace(of_a_photo(shape), noise=None)
    readings = [Reading("depth", 200.1, 0.05), Reading("width", 99.9, 0.1)]
    found = adjusted(shape, uncertainty, readings)
    # The beam's own sides are parallel to the axes: depth is the mean height of the top less that of the bottom.
    y, x = shape.vertices[:, 1], shape.vertices[:, 0]
    columns = np.array(
        [
            [np.ptp((m.displacement * [0, 1])[np.isin(y, [y.min(), y.max()])][:, 1]) for m in uncertainty.modes],
            [0.0] * len(uncertainty.modes),
        ]
    )
    for k, mode in enumerate(uncertainty.modes):
        d = mode.displacement
        columns[0, k] = d[np.isclose(y, y.max()), 1].mean() - d[np.isclose(y, y.min()), 1].mean()
        columns[1, k] = d[np.isclose(x, x.max()), 0].mean() - d[np.isclose(x, x.min()), 0].mean()
    s = columns @ columns.T + np.diag([0.05**2, 0.1**2])
    left = np.eye(columns.shape[1]) - columns.T @ np.linalg.solve(s, columns)
    fields = np.array([m.displacement for m in uncertainty.modes])
    areas = np.array([effect(field, found) for field in fields])
    std = quantify(found.section, section_properties(found.section), found.uncertainty)["area"].std
    assert std == pytest.approx(math.sqrt(areas @ left @ areas), rel=2e-3)
    assert [m.source for m in found.uncertainty.modes][: len(fields)] == [m.source for m in uncertainty.modes]
    assert [m.shape for m in found.uncertainty.modes][: len(fields)] == [m.shape for m in uncertainty.modes]


def test_a_wall_tells_where_the_edge_is() -> None:
    """With the scale known, one thickness halves twice over what the edge's place leaves of the area."""
    shape = ANGLE
    edge = Mode("edge location (common)", grown(shape, 0.05), "rectangular")
    wall = Reading("wall", 12.08, 0.01, places(shape, (0, 80), (12, 80)))
    found = adjusted(shape, OutlineUncertainty((edge,)), [wall])
    before = quantify(shape, section_properties(shape), OutlineUncertainty((edge,)))["area"]
    after = quantify(found.section, section_properties(found.section), found.uncertainty)["area"]
    assert after.std < 0.15 * before.std
    # 0.04 mm on either face, all round.
    assert after.value == pytest.approx(before.value + 0.04 * effect(grown(shape, 1.0), found), rel=1e-3)


def test_random_error_at_the_jaws_is_no_knowledge_of_the_scale() -> None:
    shape = rectangle(80, 200)
    rough = EdgeNoise(np.full(4, 0.5), np.full(4, 80.0))
    uncertainty = OutlineUncertainty(scales(shape, 0.003), rough)
    found = adjusted(shape, uncertainty, [Reading("depth", 200.5, 0.01)])
    noise = math.sqrt(2) * 0.5
    assert found.compared[0].after - 200.0 == pytest.approx(0.5 * 0.36 / (0.36 + noise**2 + 0.01**2), rel=1e-3)
    assert RANDOM in [m.source for m in found.uncertainty.modes]


# Contradictions


def test_a_reading_that_cannot_be_right_is_named() -> None:
    readings = [Reading("depth", 200.1), Reading("width", 96.0)]
    with pytest.raises(Refusal) as refused:
        adjusted(BEAM, of_a_photo(BEAM), readings)
    assert refused.value.code == "calliper-contradicts"
    assert "width of 96 mm" in refused.value.message
    # Two readings of the same size that contradict each other, though the picture bears either.
    with pytest.raises(Refusal, match="depth"):
        adjusted(BEAM, of_a_photo(BEAM), [Reading("depth", 199.5), Reading("depth", 200.5)])


def test_a_reading_that_is_hardly_right_is_told() -> None:
    found = adjusted(BEAM, of_a_photo(BEAM), [Reading("depth", 201.6)])
    assert [n.code for n in found.notices] == ["calliper-strained"]
    assert 1e-3 < found.probability < 0.05
    assert adjusted(BEAM, of_a_photo(BEAM), [Reading("depth", 200.3)]).notices == ()


def drawn(shape: Section, uncertainty: OutlineUncertainty, rng: np.random.Generator) -> Section:
    """What a picture makes of a section: moved by causes drawn at random."""
    sizes = [rng.normal() if m.shape == "normal" else rng.uniform(-1, 1) * math.sqrt(3) for m in uncertainty.modes]
    moved = sum((size * m.displacement for size, m in zip(sizes, uncertainty.modes, strict=True)), np.zeros(2))
    return shape.with_vertices(shape.vertices + moved)


@pytest.mark.parametrize(
    ("shape", "sizes"),
    [
        (rectangle(73, 223), {"depth": 223.0}),
        (BOX, {"depth": 120.0, "width": 80.0}),
        (turned(ANGLE, 5), {"length": 150.0, "breadth": 90.0}),
    ],
)
def test_intervals_hold_the_truth_and_contradictions_are_as_rare_as_stated(
    shape: Section, sizes: dict[str, float]
) -> None:
    rng = np.random.default_rng(11)
    uncertainty = replace(of_a_photo(shape), noise=None)
    true = section_properties(shape)
    names = ("area", "second_moment_major", "second_moment_minor")
    draws = 200
    held, off, chances, narrower = dict.fromkeys(names, 0), [], [], []
    for _ in range(draws):
        seen = drawn(shape, uncertainty, rng)
        readings = [Reading(name, rng.normal(size, 0.05)) for name, size in sizes.items()]
        try:
            found = adjusted(seen, uncertainty, readings)
        except Refusal:
            chances.append(0.0)
            continue
        chances.append(found.probability)
        quantities = quantify(found.section, section_properties(found.section), found.uncertainty)
        for name in names:
            low, high = quantities[name].interval95
            held[name] += low <= true[name] <= high
        off.append([(quantities[n].value - true[n]) / quantities[n].std for n in names])
        narrower.append(quantities["area"].std / quantify(seen, section_properties(seen), uncertainty)["area"].std)
    # Three binomial standard deviations about 95 %, and a std of 1 to as much.
    for name in names:
        assert held[name] / draws == pytest.approx(0.95, abs=3 * math.sqrt(0.95 * 0.05 / draws)), name
    assert np.sqrt(np.mean(np.square(off), axis=0)) == pytest.approx(np.ones(3), abs=3 / math.sqrt(2 * draws))
    assert np.mean(np.array(chances) < 0.05) == pytest.approx(0.05, abs=3 * math.sqrt(0.95 * 0.05 / draws))
    assert np.max(narrower) < 0.9
