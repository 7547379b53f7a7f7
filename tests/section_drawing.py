"""Sections for tests: curved outlines with many chords, thin walls from their centrelines."""

from collections.abc import Sequence

import numpy as np
from cutface.props.section import Part, Section
from numpy.typing import ArrayLike, NDArray
from shapely import LineString, union_all


def polygon(shell: ArrayLike, *holes: ArrayLike) -> Section:
    """One part from its shell and holes, (n, 2) each, mm."""
    return Section((Part(np.asarray(shell, float), tuple(np.asarray(hole, float) for hole in holes)),))


def ellipse(semi_x: float, semi_y: float, centre: tuple[float, float] = (0.0, 0.0), chords: int = 256) -> NDArray:
    """Vertices (chords, 2) of an ellipse drawn with its exact area."""
    step = 2.0 * np.pi / chords
    angle = step * np.arange(chords)
    grown = np.sqrt(step / np.sin(step))
    return np.stack([semi_x * grown * np.cos(angle), semi_y * grown * np.sin(angle)], axis=1) + centre


def sector(radius: float, angle: float, chords: int = 256) -> NDArray:
    """Vertices of a sector of a disc, symmetric about the x axis, apex at the origin."""
    turn = np.linspace(-0.5 * angle, 0.5 * angle, chords + 1)
    arc = radius * np.stack([np.cos(turn), np.sin(turn)], axis=1)
    return arc if angle == np.pi else np.concatenate([[(0.0, 0.0)], arc])


def arc_strip(radius: float, half_angle: float, thickness: float, chords: int = 180) -> NDArray:
    """Vertices of a strip along a circular arc, centre at the origin, symmetric about the x axis, open on the left."""
    turn = np.linspace(-half_angle, half_angle, chords + 1)
    unit = np.stack([np.cos(turn), np.sin(turn)], axis=1)
    return np.concatenate([(radius + 0.5 * thickness) * unit, (radius - 0.5 * thickness) * unit[::-1]])


def walls(centrelines: Sequence[Sequence[tuple[float, float]]], thickness: float) -> Section:
    """A section of walls of one thickness along centrelines, mm, corners mitred and ends square."""
    strips = [LineString(line).buffer(0.5 * thickness, cap_style="flat", join_style="mitre") for line in centrelines]
    return Section.from_polygons(union_all(strips))
