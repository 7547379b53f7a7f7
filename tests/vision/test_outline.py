"""Loops: even points, bridges, few-sided polygons of the same area, and parallel offsets."""

from __future__ import annotations

import numpy as np
import pytest
import shapely
from cutface.vision.outline import (
    breakpoints,
    bridged,
    gaps,
    loop_normals,
    mitred,
    resampled,
    simplified,
)
from hypothesis import given
from hypothesis import strategies as st
from simulated_shapes import blob, channel, circle, circular_hollow, corroded, rolled_i

RNG = np.random.default_rng


def area(loop: np.ndarray) -> float:
    x, y = loop.T
    return 0.5 * float(np.sum(x * np.roll(y, -1) - np.roll(x, -1) * y))


def lengths(loop: np.ndarray) -> np.ndarray:
    return np.linalg.norm(np.roll(loop, -1, axis=0) - loop, axis=1)


def distances(points: np.ndarray, loop: np.ndarray) -> np.ndarray:
    return np.asarray(shapely.distance(shapely.points(points), shapely.LinearRing(loop)))


def traced(loop: np.ndarray, spacing: float, scatter: float, seed: int = 0) -> np.ndarray:
    """A loop as it is traced: close points with a scatter square to it."""
    points = resampled(loop, spacing)
    return points + scatter * RNG(seed).standard_normal((len(points), 1)) * loop_normals(points)


def outline(section, turn: float = 0.3) -> np.ndarray:
    loop = section.parts[0].shell
    c, s = np.cos(turn), np.sin(turn)
    return loop @ np.array([[c, s], [-s, c]]) + (60.0, 40.0)


SHAPES = {
    "rolled beam": outline(rolled_i(200.0, 100.0, 5.6, 8.5, 12.0)),
    "channel": outline(channel(160.0, 65.0, 7.5, 10.5, 10.5), 1.1),
    "tube": outline(circular_hollow(80.0, 5.0)),
    "corroded beam": outline(corroded(rolled_i(150.0, 80.0, 8.0, 10.0, 8.0), 1.0, RNG(4))),
    "log": outline(blob(120.0, RNG(2))),
    "clockwise hole": circle(10.0, 20.0, 30.0)[::-1],
    "strip": np.array([(0.0, 0.0), (100.0, 20.0), (99.6, 22.0), (-0.4, 2.0)]),
}


# Even points


@pytest.mark.parametrize("name", SHAPES)
@pytest.mark.parametrize("spacing", [0.3, 1.7])
def test_resampled_points_lie_on_the_loop_evenly(name: str, spacing: float) -> None:
    loop = SHAPES[name]
    points = resampled(loop, spacing)
    assert np.array_equal(points[0], loop[0])
    assert distances(points, loop).max() < 1e-9
    ring = shapely.LinearRing(loop)
    along = np.asarray(shapely.line_locate_point(ring, shapely.points(points[1:])))
    step = ring.length / len(points)
    assert np.diff(along) == pytest.approx(np.full(len(points) - 2, step), rel=1e-6)
    # Half a point more or less over the whole length.
    assert abs(len(points) - ring.length / spacing) <= 0.5


def test_a_tiny_loop_keeps_eight_points() -> None:
    assert len(resampled(circle(0.0, 0.0, 1.0), 50.0)) == 8


@given(st.integers(3, 40), st.floats(0.05, 5.0), st.integers(0, 10**6))
def test_resampling_never_lengthens(corners: int, spacing: float, seed: int) -> None:
    loop = RNG(seed).uniform(-20, 20, (corners, 2))
    points = resampled(loop, spacing)
    assert lengths(points).sum() <= lengths(loop).sum() * (1 + 1e-12)
    assert lengths(points).max() <= lengths(loop).sum() / len(points) * (1 + 1e-9)


def test_normals_point_to_the_right_of_the_way() -> None:
    loop = circle(3.0, -2.0, 10.0)
    radial = (loop - (3.0, -2.0)) / 10.0
    assert loop_normals(loop) == pytest.approx(radial, abs=1e-9)
    assert loop_normals(loop[::-1], reach=3) == pytest.approx(-radial[::-1], abs=1e-9)


# Gaps and bridges


def test_gaps_are_the_runs_of_unknown_places() -> None:
    known = np.ones(12, bool)
    assert gaps(known) == []
    known[[3, 4, 8]] = False
    assert [run.tolist() for run in gaps(known)] == [[3, 4], [8]]
    known[[0, 1, 11]] = False
    # Round the end of the array in one piece.
    assert sorted(run.tolist() for run in gaps(known)) == [[3, 4], [8], [11, 0, 1]]
    assert [run.tolist() for run in gaps(np.zeros(4, bool))] == [[0, 1, 2, 3]]


@given(st.lists(st.booleans(), min_size=1, max_size=40))
def test_gaps_hold_every_unknown_place_once(flags: list[bool]) -> None:
    known = np.array(flags)
    runs = gaps(known)
    assert sorted(i for run in runs for i in run) == np.flatnonzero(~known).tolist()
    for run in runs:
        assert np.all(np.diff(run) % len(known) == 1)
        # Each is as long as it can be.
        if known.any():
            assert known[run[0] - 1] and known[(run[-1] + 1) % len(known)]


def test_bridges_are_straight_and_even() -> None:
    points = circle(0.0, 0.0, 10.0)
    known = np.ones(len(points), bool)
    known[10:14] = known[:2] = known[-3:] = False
    crossed = bridged(points, known)
    assert np.array_equal(crossed[known], points[known])
    assert crossed[10:14] == pytest.approx(np.linspace(points[9], points[14], 6)[1:-1])
    around = np.vstack([crossed[-4:], crossed[:3]])
    assert around == pytest.approx(np.linspace(points[-4], points[2], 7))


def test_nothing_known_is_left_alone() -> None:
    points = circle(0.0, 0.0, 10.0)
    assert np.array_equal(bridged(points, np.zeros(len(points), bool)), points)


# Few-sided polygons


@pytest.mark.parametrize("name", SHAPES)
@pytest.mark.parametrize("tolerance", [0.02, 0.1, 0.5])
def test_breakpoints_leave_every_point_within_the_tolerance(name: str, tolerance: float) -> None:
    loop = resampled(SHAPES[name], 0.4)
    keys = breakpoints(loop, tolerance)
    assert np.all(np.diff(keys) > 0)
    assert distances(loop, loop[keys]).max() <= tolerance * (1 + 1e-9)


@pytest.mark.parametrize("name", SHAPES)
@pytest.mark.parametrize(("scatter", "tolerance"), [(0.0, 0.02), (0.02, 0.08), (0.05, 0.2), (0.05, 0.6)])
def test_simplified_keeps_the_area(name: str, scatter: float, tolerance: float) -> None:
    loop = traced(SHAPES[name], 0.35, scatter)
    polygon = simplified(loop, tolerance)
    assert area(polygon) == pytest.approx(area(loop), rel=1e-9)


@pytest.mark.parametrize("name", SHAPES)
@pytest.mark.parametrize(("scatter", "tolerance"), [(0.02, 0.08), (0.05, 0.2)])
def test_simplified_stays_within_the_tolerance(name: str, scatter: float, tolerance: float) -> None:
    loop = traced(SHAPES[name], 0.35, scatter)
    polygon = simplified(loop, tolerance)
    # Breakpoints hold the chords within the tolerance; fitting the sides to their points can but nearly keep to it.
    assert distances(loop, polygon).max() < 1.5 * tolerance
    assert np.mean(distances(loop, polygon) > tolerance) < 0.01
    assert len(polygon) < 0.6 * len(loop)


def test_straight_sides_average_their_points() -> None:
    """A traced rectangle comes back with four corners, each nearer to the truth than a single point is."""
    corners = np.array([(0.0, 0.0), (80.0, 0.0), (80.0, 50.0), (0.0, 50.0)]) @ np.array([[0.8, 0.6], [-0.6, 0.8]])
    off = []
    for seed in range(12):
        polygon = simplified(traced(corners, 0.4, 0.05, seed), 0.3)
        assert len(polygon) == 4
        off.append(np.abs(polygon[:, None] - corners[None]).max(axis=2).min(axis=0))
    # A side of 125 points or more: its line is known to 2 x 0.05 / sqrt(125) at its ends.
    assert np.sqrt(np.mean(np.square(off))) < 0.02


def test_simplified_follows_an_arc() -> None:
    loop = traced(circle(0.0, 0.0, 40.0), 0.3, 0.0)
    polygon = simplified(loop, 0.05)
    assert np.abs(np.linalg.norm(polygon, axis=1) - 40.0).max() < 0.15
    # A chord whose ends lie as far outside as its middle lies inside spans 4 sqrt(R t).
    assert len(polygon) > 2 * np.pi * 40.0 / (4 * np.sqrt(40.0 * 0.15))
    assert area(polygon) == pytest.approx(area(loop), rel=1e-9)


@pytest.mark.parametrize("far", [0.0, 3e4])
def test_simplified_does_not_mind_where_the_origin_is(far: float) -> None:
    loop = traced(SHAPES["rolled beam"], 0.4, 0.02)
    near = simplified(loop, 0.08)
    moved = simplified(loop + far, 0.08)
    assert moved - far == pytest.approx(near, abs=1e-6)


# Offsets


@given(
    st.floats(0.2, 3.0),
    st.floats(5.0, 200.0),
    st.floats(5.0, 200.0),
    st.floats(-3.1, 3.1),
)
def test_mitred_moves_every_side_in_parallel(distance: float, width: float, depth: float, turn: float) -> None:
    c, s = np.cos(turn), np.sin(turn)
    loop = np.array([(0.0, 0.0), (width, 0.0), (width, depth), (0.0, depth)]) @ np.array([[c, s], [-s, c]])
    moved = loop + mitred(loop, distance)
    assert area(moved) == pytest.approx((width + 2 * distance) * (depth + 2 * distance), rel=1e-9)


@pytest.mark.parametrize("name", ["rolled beam", "channel", "log", "clockwise hole"])
def test_mitred_against_the_general_purpose_buffer(name: str) -> None:
    loop = SHAPES[name]
    ring = shapely.Polygon(loop)
    sign = 1.0 if area(loop) > 0 else -1.0
    expected = ring.buffer(sign * 0.2, join_style="mitre", mitre_limit=10.0)
    moved = shapely.Polygon(loop + mitred(loop, 0.2))
    assert moved.symmetric_difference(expected).area < 1e-3 * ring.length * 0.2


def test_mitred_with_its_own_distance_at_every_vertex() -> None:
    loop = np.array([(0.0, 0.0), (10.0, 0.0), (10.0, 10.0), (0.0, 10.0)])
    moved = mitred(loop, np.array([1.0, 2.0, 0.0, 3.0]))
    assert moved == pytest.approx(np.array([(-1.0, -1.0), (2.0, -2.0), (0.0, 0.0), (-3.0, 3.0)]))


def test_a_needle_is_held_to_three_times_the_distance() -> None:
    needle = np.array([(0.0, 0.0), (100.0, 0.5), (0.0, 1.0)])
    moved = np.linalg.norm(mitred(needle, 0.4), axis=1)
    assert moved.max() <= 3.0 * 0.4 * (1 + 1e-9)
    assert moved[1] > 0.0
