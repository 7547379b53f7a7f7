"""Shear centre, shear areas and monosymmetry against closed forms, thin-wall limits and another solution."""

import csv
from pathlib import Path

import numpy as np
import pytest
from cutface.props.field import field_properties
from cutface.props.section import Section
from cutface.props.shapes import angle, channel, hollow_rectangle, rolled_i, tee
from section_drawing import arc_strip, ellipse, polygon, sector, walls
from shapely import box

REFERENCE = Path(__file__).parents[1] / "reference"


@pytest.mark.parametrize(("width", "depth"), [(75.0, 225.0), (60.0, 60.0), (300.0, 20.0)])
def test_shear_area_of_a_rectangle(width, depth):
    # 5/6 of the area at zero Poisson ratio, exact (Timoshenko).
    found = field_properties(polygon([(0, 0), (width, 0), (width, depth), (0, depth)]))
    assert found.values["shear_area_x"] == pytest.approx(5 / 6 * width * depth, rel=1e-4)
    assert found.values["shear_area_y"] == pytest.approx(5 / 6 * width * depth, rel=1e-4)


@pytest.mark.parametrize("poisson_ratio", [0.0, 0.3, 0.5])
def test_shear_area_of_a_disc(poisson_ratio):
    # Source: strain energy of the exact stresses (Love; Timoshenko and Goodier, circular cantilever), from memory:
    # 6 (1 + nu)^2/(7 + 14 nu + 8 nu^2) of the area.
    found = field_properties(polygon(ellipse(50.0, 50.0)), poisson_ratio=poisson_ratio)
    share = 6 * (1 + poisson_ratio) ** 2 / (7 + 14 * poisson_ratio + 8 * poisson_ratio**2)
    assert found.values["shear_area_x"] == pytest.approx(share * np.pi * 50.0**2, rel=1e-4)
    assert found.values["shear_area_y"] == pytest.approx(share * np.pi * 50.0**2, rel=1e-4)


@pytest.mark.parametrize("poisson_ratio", [0.0, 0.3, 0.5])
def test_shear_centre_of_a_half_disc(poisson_ratio):
    # Source: Timoshenko and Goodier, semicircular cantilever (from memory): 8/(15 pi) (3 + 4 nu)/(1 + nu) R where the
    # centre of the circle does not twist; for none at the centroid, 4 R/(3 pi) away, less J nu xc/(2 (1 + nu) I).
    radius = 50.0
    centroid, torsion, second = 4 * radius / (3 * np.pi), (np.pi / 2 - 4 / np.pi) * radius**4, np.pi * radius**4 / 8
    expected = 8 / (15 * np.pi) * (3 + 4 * poisson_ratio) / (1 + poisson_ratio) * radius
    expected -= torsion * poisson_ratio * centroid / (2 * (1 + poisson_ratio) * second)
    found = field_properties(polygon(sector(radius, np.pi)), poisson_ratio=poisson_ratio)
    assert found.values["shear_centre_x"] == pytest.approx(expected, abs=2e-4 * radius)
    assert found.values["shear_centre_y"] == pytest.approx(0.0, abs=1e-3)


def thin_limit(draw, name: str) -> float:
    thick, thin = (field_properties(draw(t)).values[name] for t in (0.5, 0.25))
    return 2.0 * thin - thick


# Sources: Vlasov; Timoshenko and Gere; Roark, flexural centres (from memory). Distances from the web's centreline, the
# centre of the arc, the junction of the legs.
CENTRES = {
    "channel 60 x 120": (lambda t: walls([[(60, -60), (0, -60), (0, 60), (60, 60)]], t), (-22.5, 0.0)),
    "channel 75 x 200": (
        lambda t: walls([[(75, -100), (0, -100), (0, 100), (75, 100)]], t),
        (-3 * 75**2 / (200 + 6 * 75), 0.0),
    ),
    "angle": (lambda t: walls([[(0, 100), (0, 0), (75, 0)]], t), (0.0, 0.0)),
    "tee": (lambda t: walls([[(-50, 0), (50, 0)], [(0, 0), (0, -90)]], t), (0.0, 0.0)),
    "Z": (lambda t: walls([[(80, 80), (0, 80), (0, -80), (-80, -80)]], t), (0.0, 0.0)),
    # Two flanges of second moments in the ratio 8 : 1, 190 apart: 190/9 from the larger.
    "I of unequal flanges": (
        lambda t: walls([[(-50, 0), (50, 0)], [(0, 0), (0, 190)], [(-25, 190), (25, 190)]], t),
        (0.0, 190 / 9),
    ),
    "half circle": (lambda t: polygon(arc_strip(60.0, np.pi / 2, t)), (4 * 60 / np.pi, 0.0)),
    "arc of 240 deg": (lambda t: polygon(arc_strip(60.0, np.radians(120), t)), (90.838824747, 0.0)),
}


@pytest.mark.parametrize("name", CENTRES)
def test_shear_centre_of_thin_walls(name):
    draw, (x, y) = CENTRES[name]
    depth = max(np.ptp(draw(0.5).vertices, axis=0))
    assert thin_limit(draw, "shear_centre_x") == pytest.approx(x, abs=3e-4 * depth)
    assert thin_limit(draw, "shear_centre_y") == pytest.approx(y, abs=3e-4 * depth)


def test_shear_area_of_a_thin_tube_is_half_its_area():
    # q = V S/I round the tube (textbooks).
    def share(t):
        section = polygon(ellipse(60 + t / 2, 60 + t / 2), ellipse(60 - t / 2, 60 - t / 2))
        return field_properties(section).values["shear_area_y"] / (2 * np.pi * 60 * t)

    assert 2 * share(0.5) - share(1.0) == pytest.approx(0.5, rel=1e-3)


def test_shear_area_of_a_thin_i():
    # Strain energy of the shear flow q = V S/I in half flanges and web (textbooks).
    b, h = 80.0, 120.0
    second = h**3 / 12 + b * h**2 / 2
    y = np.linspace(-h / 2, h / 2, 2001)
    web = np.trapezoid((b * h / 2 + (h**2 / 4 - y**2) / 2) ** 2, y)
    flanges = 4 * (h / 2) ** 2 * (b / 2) ** 3 / 3
    expected = second**2 / (web + flanges)

    def per_thickness(t):
        section = walls([[(-b / 2, 0), (b / 2, 0)], [(0, 0), (0, h)], [(-b / 2, h), (b / 2, h)]], t)
        return field_properties(section).values["shear_area_y"] / t

    assert 2 * per_thickness(0.5) - per_thickness(1.0) == pytest.approx(expected, rel=1e-3)


def rectangles(*boxes: tuple[float, float, float, float]) -> dict[str, float]:
    """Second and third moments of rectangles (x0, y0, x1, y1) about their common centroid, term by term."""

    def power(low, high, n):
        return (high ** (n + 1) - low ** (n + 1)) / (n + 1)

    def moment(m, n, x=0.0, y=0.0):
        return sum(power(a - x, c - x, m) * power(b - y, d - y, n) for a, b, c, d in boxes)

    area = moment(0, 0)
    x, y = moment(1, 0) / area, moment(0, 1) / area
    return {
        "x": x,
        "y": y,
        "of_y": (moment(2, 1, x, y) + moment(0, 3, x, y)) / moment(0, 2, x, y),
        "of_x": (moment(3, 0, x, y) + moment(1, 2, x, y)) / moment(2, 0, x, y),
        "share_of_first": 1 / (1 + (boxes[1][2] - boxes[1][0]) ** 3 / (boxes[0][2] - boxes[0][0]) ** 3),
        "slenderness": moment(2, 0, x, y) / moment(0, 2, x, y),
    }


def joined(*boxes: tuple[float, float, float, float]) -> Section:
    first, *others = [box(*sides) for sides in boxes]
    for other in others:
        first = first.union(other)
    return Section.from_polygons(first)


def test_monosymmetry_of_an_i_of_unequal_flanges():
    boxes = ((-75.0, 0.0, 75.0, 10.0), (-40.0, 290.0, 40.0, 300.0), (-3.0, 10.0, 3.0, 290.0))
    found = field_properties(joined(*boxes)).values
    known = rectangles(*boxes)
    centre = found["shear_centre_y"] - known["y"]
    assert found["monosymmetry_x"] == pytest.approx(known["of_y"] - 2 * centre, abs=1e-3)
    assert found["monosymmetry_major"] == pytest.approx(found["monosymmetry_x"], rel=1e-9)
    assert found["monosymmetry_y"] == pytest.approx(0.0, abs=0.05)
    # Source: Kitipornchai and Trahair, "Buckling properties of monosymmetric I-beams" (1980), a fit (from memory).
    fit = 0.9 * 290 * (2 * known["share_of_first"] - 1) * (1 - known["slenderness"] ** 2)
    assert found["monosymmetry_x"] == pytest.approx(fit, rel=0.05)


def test_monosymmetry_of_a_thin_equal_angle():
    # Symmetric about the major axis. About the minor one, thin legs of length a: the integral of u (u^2 + v^2) over
    # centrelines with u from the centroid along the axis of symmetry, and the shear centre at the heel.
    a = 80.0
    s = np.linspace(0.0, a, 4001)
    u, v = s / np.sqrt(2) - a / np.sqrt(8), s / np.sqrt(2)
    expected = np.trapezoid(u * (u**2 + v**2), s) / np.trapezoid(u**2, s) + 2 * a / np.sqrt(8)

    def draw(t):
        return walls([[(0, a), (0, 0), (a, 0)]], t)

    assert abs(thin_limit(draw, "monosymmetry_minor")) == pytest.approx(expected, rel=1e-3)
    assert field_properties(draw(1.0)).values["monosymmetry_major"] == pytest.approx(0.0, abs=0.05)


def field_rows() -> list:
    with (REFERENCE / "field_values.csv").open(encoding="utf-8", newline="") as lines:
        rows = [row for row in csv.DictReader(lines) if row["family"] in DRAWN]
    return [pytest.param(row, id=f"{row['family']}-{row['designation']}") for row in rows]


DRAWN = {
    "UPE": lambda n: channel(n("h"), n("b"), n("tw"), n("tf"), n("r1")),
    "PFC": lambda n: channel(n("h"), n("b"), n("tw"), n("tf"), n("r1")),
    "AISC C": lambda n: channel(n("h"), n("b"), n("tw"), n("tf"), n("r1"), n("r2"), n("slope_percent") / 100),
    "L equal": lambda n: angle(n("h"), n("b"), n("t"), n("r1"), n("r2")),
    "L unequal": lambda n: angle(n("h"), n("b"), n("t"), n("r1"), n("r2")),
    "T from UB": lambda n: tee(n("h"), n("b"), n("tw"), n("tf"), n("r1")),
    "IPE": lambda n: rolled_i(n("h"), n("b"), n("tw"), n("tf"), n("r1")),
    "RHS hot": lambda n: hollow_rectangle(n("h"), n("b"), n("t"), n("r_outer"), n("r_inner")),
}


@pytest.mark.parametrize("row", field_rows())
def test_shear_centre_agrees_with_another_solution(row):
    # Source: boundary-integral solution of the warping function on the drawn shape, shear centre at zero Poisson ratio.
    unit = 10.0 if "cm" in row["unit"] else 1.0
    section = DRAWN[row["family"]](lambda name: float(row[name] or 0.0))
    found = field_properties(section).values
    centroid = np.array(section.to_polygon().centroid.coords[0])
    centre = (np.array([found["shear_centre_x"], found["shear_centre_y"]]) - centroid) / unit
    known = np.array([float(row["shear_centre_x_from_centroid"]), float(row["shear_centre_y_from_centroid"])])
    assert np.abs(centre - known).max() <= 1e-3 * float(row["h"]) / unit


def test_the_shear_centre_turns_and_mirrors_with_the_section():
    section = channel(80.0, 45.0, 6.0, 8.0, 8.0, 4.0, 0.08)
    plain = field_properties(section, poisson_ratio=0.3)
    centre = np.array([plain.values["shear_centre_x"], plain.values["shear_centre_y"]])
    turn = np.array([[np.cos(0.7), -np.sin(0.7)], [np.sin(0.7), np.cos(0.7)]])
    mirror = np.diag([-1.0, 1.0])
    for change in (turn, mirror, turn @ mirror):
        other = field_properties(section.with_vertices(section.vertices @ change.T), poisson_ratio=0.3)
        found = np.array([other.values["shear_centre_x"], other.values["shear_centre_y"]])
        assert found == pytest.approx(change @ centre, abs=2e-3)
        for axis in ("major", "minor"):
            name = f"monosymmetry_{axis}"
            assert abs(other.values[name]) == pytest.approx(abs(plain.values[name]), abs=0.01)


def test_shear_areas_follow_the_forces():
    # Turning by a right angle exchanges them; a shear area is never more than 5/6 of the area or so.
    section = channel(80.0, 45.0, 6.0, 8.0)
    plain = field_properties(section).values
    turned = field_properties(section.with_vertices(section.vertices @ np.array([[0.0, 1.0], [-1.0, 0.0]]))).values
    assert turned["shear_area_x"] == pytest.approx(plain["shear_area_y"], rel=2e-3)
    assert turned["shear_area_y"] == pytest.approx(plain["shear_area_x"], rel=2e-3)
    area = section.to_polygon().area
    assert 0.0 < plain["shear_area_x"] < area
    assert 0.0 < plain["shear_area_y"] < area
