"""The size of a section squared up to its own sides."""

from __future__ import annotations

import numpy as np
import pytest
from cutface.props.enclosing import enclosing_angle, enclosing_dimensions
from cutface.props.section import Part, Section
from cutface.props.uncertainty import Mode, OutlineUncertainty

CARD = np.array([[0.0, 0.0], [187.0, 0.0], [187.0, 70.0], [175.0, 82.0], [0.0, 82.0]])


def turned(points: np.ndarray, angle: float) -> np.ndarray:
    c, s = np.cos(angle), np.sin(angle)
    return points @ np.array([[c, s], [-s, c]]) + (300.0, -40.0)


@pytest.mark.parametrize("degrees", [0.0, 1.2, 37.0, 90.0, -60.0, 178.0])
def test_size_does_not_depend_on_how_a_slice_lies(degrees: float) -> None:
    section = Section((Part(turned(CARD, np.deg2rad(degrees))),))
    sizes = enclosing_dimensions(section, OutlineUncertainty())
    assert sizes["enclosing_length"].value == pytest.approx(187.0, abs=1e-9)
    assert sizes["enclosing_breadth"].value == pytest.approx(82.0, abs=1e-9)
    off = (np.rad2deg(enclosing_angle(section)) - degrees) % 180.0
    assert min(off, 180.0 - off) == pytest.approx(0.0, abs=1e-9)


def test_scale_along_the_length_moves_the_length_alone() -> None:
    angle = np.deg2rad(25.0)
    section = Section((Part(turned(CARD, angle)),))
    along = np.array([np.cos(angle), np.sin(angle)])
    about = section.vertices - section.vertices.mean(axis=0)
    mode = Mode("print scale", 0.003 * (about @ along)[:, None] * along, "normal")
    sizes = enclosing_dimensions(section, OutlineUncertainty(modes=(mode,)))
    assert sizes["enclosing_length"].std == pytest.approx(0.003 * 187.0, rel=1e-6)
    assert sizes["enclosing_breadth"].std == pytest.approx(0.0, abs=1e-9)
