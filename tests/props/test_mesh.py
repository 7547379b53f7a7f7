"""Triangles over a region: they fill it, they meet side to side, and they know the outline's edges."""

import numpy as np
import pytest
from cutface.props.mesh import Mesh, mesh_region, refine
from cutface.props.section import Section
from section_drawing import arc_strip, ellipse, polygon, walls

SECTIONS = {
    "square": polygon([(0, 0), (40, 0), (40, 40), (0, 40)]),
    "ring": polygon(ellipse(30.0, 30.0, chords=64), ellipse(20.0, 20.0, (4.0, 0.0), chords=48)),
    "thin cells": walls([[(0, 0), (60, 0), (60, 40), (0, 40), (0, 0)], [(25, 0), (25, 40)]], 0.3),
    "slit tube": polygon(arc_strip(50.0, 3.1, 1.0)),
    "wedge": polygon([(0, 0), (100, 0), (100, 2)]),
}


def check(mesh: Mesh, section: Section) -> None:
    corners = mesh.points[mesh.triangles]
    one, other = corners[:, 1] - corners[:, 0], corners[:, 2] - corners[:, 0]
    areas = 0.5 * (one[:, 0] * other[:, 1] - one[:, 1] * other[:, 0])
    assert areas.min() > 0.0
    assert areas.sum() == pytest.approx(section.to_polygon().area, rel=1e-9)
    # Every side belongs to two triangles, or to one and the boundary; no point hangs in the middle of a side.
    sides = np.stack([mesh.triangles, np.roll(mesh.triangles, -1, axis=1)], axis=2).reshape(-1, 2)
    directed = {tuple(side) for side in sides.tolist()}
    assert len(directed) == len(sides)
    single = {side for side in directed if side[::-1] not in directed}
    assert single == {tuple(side) for side in mesh.sides.tolist()}
    # Each boundary side lies on the outline edge it names.
    loops = section.loops
    start = np.concatenate(loops)[mesh.side_edge]
    end = np.concatenate([np.roll(loop, -1, axis=0) for loop in loops])[mesh.side_edge]
    along = (end - start) / np.hypot(*(end - start).T)[:, None]
    for k in range(2):
        offset = mesh.points[mesh.sides[:, k]] - start
        assert np.abs(along[:, 0] * offset[:, 1] - along[:, 1] * offset[:, 0]).max() < 1e-9


@pytest.mark.parametrize("name", SECTIONS)
def test_a_mesh_fills_the_region_and_stays_whole_when_refined(name):
    section, random = SECTIONS[name], np.random.default_rng(2)
    mesh = mesh_region(section.loops, 5.0)
    check(mesh, section)
    for _ in range(4):
        mesh = refine(mesh, random.random(len(mesh.triangles)) < 0.2)
        check(mesh, section)


def test_refining_nothing_changes_nothing():
    mesh = mesh_region(SECTIONS["square"].loops, 10.0)
    same = refine(mesh, np.zeros(len(mesh.triangles), dtype=bool))
    assert np.array_equal(same.points, mesh.points)
    assert np.array_equal(same.triangles, mesh.triangles)


def test_refining_keeps_angles_from_vanishing():
    mesh = mesh_region(SECTIONS["square"].loops, 20.0)

    def smallest_angle(mesh: Mesh) -> float:
        corners = mesh.points[mesh.triangles]
        angles = []
        for k in range(3):
            one, other = corners[:, k - 1] - corners[:, k], corners[:, k - 2] - corners[:, k]
            cross = np.abs(one[:, 0] * other[:, 1] - one[:, 1] * other[:, 0])
            angles.append(np.arctan2(cross, np.sum(one * other, axis=1)))
        return float(np.min(angles))

    first = smallest_angle(mesh)
    for _ in range(12):
        at_corner = np.any(np.all(mesh.points[mesh.triangles] == 0.0, axis=2), axis=1)
        mesh = refine(mesh, at_corner)
    assert smallest_angle(mesh) >= 0.5 * first * (1 - 1e-9)
