"""Leaving out vertices: what is kept, how far off the chords are, and finding the way back."""

import numpy as np
import pytest
from cutface.props.thinned import ThinnedOutline, thin
from section_drawing import ellipse, polygon
from shapely import Polygon


def divided(loop, count: int) -> np.ndarray:
    """Every edge of the loop in `count` equal pieces."""
    way = np.arange(count)[:, None] / count
    return np.concatenate([a + way * (b - a) for a, b in zip(loop, np.roll(loop, -1, axis=0), strict=True)])


SQUARE = np.array([(0.0, 0.0), (40.0, 0.0), (40.0, 40.0), (0.0, 40.0)])


def test_points_on_straight_edges_go_and_corners_stay():
    outline = thin([divided(SQUARE, 50)], 1e-9)
    assert outline.kept_loops[0] == pytest.approx(SQUARE)
    assert not outline.is_full


def test_nothing_goes_where_nothing_is_allowed():
    outline = thin([ellipse(30.0, 20.0)], 0.0)
    assert outline.is_full


@pytest.mark.parametrize("allowed", [1e-5, 1e-4, 1e-3])
def test_roughness_stays_within_what_is_allowed(allowed):
    loop = ellipse(30.0, 20.0, chords=2000)
    outline = thin([loop], allowed)
    assert outline.roughness.max() <= allowed
    assert len(outline.kept[0]) < 1000
    # Chords of arcs: the area is off by about the deviation times the perimeter.
    assert Polygon(outline.kept_loops[0]).area == pytest.approx(np.pi * 600.0, rel=0.05 * np.sqrt(allowed))


def test_a_hole_too_small_to_matter_is_kept_whole():
    hole = ellipse(1e-3, 1e-3, chords=24)[::-1]
    outline = thin([SQUARE, hole], 0.1)
    assert len(outline.kept[1]) == 24


def test_places_on_chords_are_found_on_the_full_outline():
    loops = polygon(divided(SQUARE, 10), divided(SQUARE / 4 + 15, 6)).loops
    outline = thin(loops, 1e-9)
    shell, hole = outline.kept_loops
    ends = np.concatenate([np.roll(shell, -1, axis=0), np.roll(hole, -1, axis=0)])
    starts = np.concatenate([shell, hole])
    wanted = starts + 0.37 * (ends - starts)
    before, after, fraction, places = outline.follow(wanted, np.arange(len(wanted)))
    assert places == pytest.approx(wanted)
    every = np.concatenate(loops)
    assert every[before] + fraction[:, None] * (every[after] - every[before]) == pytest.approx(wanted)
    assert before[:4].max() < len(loops[0]) <= before[4:].min()


def test_steps_across_a_chord_are_followed():
    # A staircase as a pixel border draws it, up and down again by the same step.
    stairs = np.array([(0, 0), (10, 0), (10, 0.01), (20, 0.01), (20, 0), (30, 0), (30, 20), (0, 20)], float)
    outline = thin([stairs], 1e-2)
    assert list(outline.kept[0]) == [0, 5, 6, 7]
    places = outline.follow(np.array([(5.0, 0.0), (15.0, 0.0), (30.0, 0.0)]), np.zeros(3, int))[3]
    assert places == pytest.approx(np.array([(5.0, 0.0), (15.0, 0.01), (30.0, 0.0)]))


def test_the_full_outline_follows_itself():
    outline = ThinnedOutline.full([SQUARE])
    before, after, fraction, places = outline.follow(SQUARE, np.arange(4))
    assert list(before) == [0, 1, 2, 3]
    assert list(after) == [1, 2, 3, 0]
    assert fraction == pytest.approx(0.0)
    assert places == pytest.approx(SQUARE)


def test_vertices_that_differ_by_rounding_are_one():
    doubled = np.insert(SQUARE, [1, 4], SQUARE[[1, 0]] + 1e-14, axis=0)
    assert len(doubled) == 6
    outline = thin([doubled], 0.0)
    assert outline.kept_loops[0] == pytest.approx(SQUARE, abs=1e-12)
    assert outline.kept[0][0] == 0
