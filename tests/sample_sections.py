"""Sections of invented shape, and random ones, for tests of properties and their uncertainty."""

from __future__ import annotations

import numpy as np
from cutface.props.section import Part, Section
from hypothesis import strategies as st


def section(*loops: list[list[float]] | np.ndarray) -> Section:
    """One part: a shell and its holes."""
    shell, *holes = (np.array(loop, float) for loop in loops)
    return Section((Part(shell, tuple(holes)),))


def rectangle(width: float, depth: float, x: float = 0.0, y: float = 0.0) -> Section:
    return section([[x, y], [x + width, y], [x + width, y + depth], [x, y + depth]])


ANGLE = section([[0, 0], [90, 0], [90, 12], [12, 12], [12, 150], [0, 150]])
CHANNEL = section([[0, 0], [60, 0], [60, 8], [6, 8], [6, 112], [60, 112], [60, 120], [0, 120]])
SKEW_BOX = section([[0, 0], [60, 5], [70, 100], [5, 90]], [[10, 10], [50, 15], [55, 80], [12, 75]])
# A closed box and a bar beside it, no side parallel to another.
PAIR = Section(
    (
        *SKEW_BOX.parts,
        Part(np.array([[80.0, -20.0], [96.0, -17.0], [101.0, 66.0], [84.0, 71.0]])),
    )
)


def oval(points: int = 120) -> Section:
    t = 2 * np.pi * np.arange(points) / points
    return section(np.column_stack([50 * np.cos(t + 0.3) + 5 * np.cos(2 * t), 30 * np.sin(t)]))


def circle(radius: float, points: int) -> np.ndarray:
    t = 2 * np.pi * np.arange(points) / points
    return radius * np.column_stack([np.cos(t), np.sin(t)])


@st.composite
def random_sections(draw: st.DrawFn, *, holes: bool = True) -> Section:
    """Star-shaped outlines of 3 to 30 corners, about half of them with a hole."""
    count = draw(st.integers(3, 30))
    seed = draw(st.integers(0, 2**32 - 1))
    generator = np.random.default_rng(seed)
    # Steps between a half and one and a half of the mean keep the star simple and its corners apart.
    steps = generator.uniform(0.5, 1.5, count)
    angles = 2 * np.pi * np.cumsum(steps) / steps.sum()
    radii = generator.uniform(20.0, 100.0, count)
    middle = generator.uniform(-500, 500, 2)
    shell = middle + np.column_stack([radii * np.cos(angles), radii * np.sin(angles)])
    if not (holes and draw(st.booleans())):
        return section(shell)
    # Of three corners, two may lie more than half a turn apart and leave the middle outside.
    centre = shell.mean(axis=0) if count == 3 else middle
    return section(shell, centre + 0.4 * (shell - centre))
