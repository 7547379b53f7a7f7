"""Composite sections against hand calculation of the transformed section."""

import math

import numpy as np
import pytest
from cutface.props.composite import (
    plastic_moments,
    quantify_joints,
    quantify_regions,
    quantify_transformed,
    region_stresses,
    transformed_section,
)
from cutface.props.errors import UsageError
from cutface.props.properties import section_properties
from cutface.props.section import Material, Part, Section
from cutface.props.shapes import angle, rolled_i
from cutface.props.shapes.placing import placed
from cutface.props.stress import Forces
from cutface.props.uncertainty import EdgeNoise, Mode, OutlineUncertainty, quantify

WOOD = Material("spruce", elastic_modulus=10000.0, density=450.0, yield_strength=20.0)
STEEL = Material("steel", elastic_modulus=200000.0, density=7850.0, yield_strength=250.0)


def box(x0, y0, x1, y1, material=None):
    return Part([[x0, y0], [x1, y0], [x1, y1], [x0, y1]], material=material)


def flitch():
    """Two timbers 50 x 200 with a steel plate 10 x 160 between them, all centred on mid-depth."""
    return Section((box(-55, 0, -5, 200, WOOD), box(-5, 20, 5, 180, STEEL), box(5, 0, 55, 200, WOOD)))


def topped():
    """A timber 100 x 200 with a steel strip 100 x 10 under it."""
    return Section((box(0, 10, 100, 210, WOOD), box(0, 0, 100, 10, STEEL)))


def test_flitch_beam():
    t = transformed_section(flitch())
    assert t.reference_modulus == 10000.0
    assert [region.ratio for region in t.regions] == [1.0, 20.0, 1.0]
    second = 2.0 * 50.0 * 200.0**3 / 12.0 + 20.0 * 10.0 * 160.0**3 / 12.0
    assert t.second_moment_x == pytest.approx(second, rel=1e-12)
    assert t.bending_stiffness_x == pytest.approx(10000.0 * second, rel=1e-12)
    assert t.axial_stiffness == pytest.approx(2e4 * 1e4 + 1600.0 * 2e5, rel=1e-12)
    assert t.centroid == pytest.approx((0.0, 100.0), abs=1e-9)
    assert t.mass_per_metre == pytest.approx(0.02 * 450.0 + 0.0016 * 7850.0)
    steel = region_stresses(t, Forces(moment_x=10e6))[1]
    assert steel.largest.value == pytest.approx(20.0 * 10e6 * 80.0 / second)
    assert steel.largest.place[1] == 180.0
    assert [(i.regions, i.length) for i in t.interfaces] == [
        ((0, 1), pytest.approx(160.0, abs=0.01)),
        ((1, 2), pytest.approx(160.0, abs=0.01)),
    ]


def test_timber_with_a_strip():
    t = transformed_section(topped(), reference_modulus=10000.0)
    area = 100.0 * 200.0 + 20.0 * 1000.0
    centre = (20000.0 * 110.0 + 20000.0 * 5.0) / area
    assert t.centroid[1] == pytest.approx(centre)
    second = (
        100.0 * 200.0**3 / 12.0 + 2e4 * (110.0 - centre) ** 2 + 20.0 * 100.0 * 1000.0 / 12.0 + 2e4 * (5.0 - centre) ** 2
    )
    assert t.second_moment_x == pytest.approx(second)
    # First moment at the interface: that of the strip, equal and opposite to the timber's.
    assert t.regions[1].first_moment_x == pytest.approx(20.0 * 1000.0 * (5.0 - centre))
    assert t.regions[0].first_moment_x == pytest.approx(-t.regions[1].first_moment_x)


def test_what_lies_beyond_a_joint():
    t = transformed_section(flitch())
    left, right = t.interfaces
    assert (left.beyond, right.beyond) == ((0,), (0, 1))
    # Beyond the first joint the left timber, beyond the second that and the plate; in balance with the right timber.
    assert left.first_moment_y == pytest.approx(-50.0 * 200.0 * 30.0)
    assert right.first_moment_y == pytest.approx(-t.regions[2].first_moment_y)
    # A joint that goes round leaves no two sides once the others hold: a ring of three.
    ring = Section((box(0, 0, 50, 50, WOOD), box(50, 0, 100, 50, STEEL), box(0, 50, 100, 100, WOOD)))
    assert [joint.beyond for joint in transformed_section(ring).interfaces] == [(), (), ()]
    assert quantify_joints(ring, OutlineUncertainty()) == ({}, {}, {})


def test_first_moments_and_areas_follow_the_scale():
    section = topped()
    uncertainty = OutlineUncertainty((Mode("print scale", 0.01 * section.vertices),))
    (joint,) = quantify_joints(section, uncertainty)
    steel = quantify_regions(section, uncertainty)[1]
    assert joint["first_moment_x"].value == pytest.approx(-steel["first_moment_x"].value)
    assert steel["area"].std == pytest.approx(0.02 * 1000.0, rel=1e-3)
    assert joint["first_moment_x"].std == pytest.approx(0.03 * joint["first_moment_x"].value, rel=1e-3)


def test_joints_are_no_perimeter():
    whole, halves = (Section(parts) for parts in ((box(0, 0, 100, 50),), (box(0, 0, 40, 50), box(40, 0, 100, 50))))
    first, second = (section_properties(section) for section in (whole, halves))
    assert second == pytest.approx(first)
    noise = EdgeNoise(np.full(8, 0.05), np.full(8, 2.0))
    uncertainty = OutlineUncertainty((Mode("edge location", np.tile([0.1, 0.0], (8, 1))),), noise, np.full(8, 0.1))
    found = quantify(halves, second, uncertainty)
    assert found["perimeter"].value == pytest.approx(300.0)
    # Half a pixel all round the whole, and none at the joint.
    assert found["area"].pixel_bounds == pytest.approx((99.8 * 49.8, 100.2 * 50.2))


def test_one_material_in_pieces_is_the_whole():
    whole = rolled_i(200.0, 100.0, 6.0, 10.0, 8.0)
    t = transformed_section(Section((Part(whole.parts[0].shell, material=STEEL),)))
    p = section_properties(whole)
    assert (t.area, t.second_moment_x, t.second_moment_y) == pytest.approx(
        (p["area"], p["second_moment_x"], p["second_moment_y"]), rel=1e-9
    )
    about_x, about_y = plastic_moments(t.section)
    assert about_x.value == pytest.approx(250.0 * p["plastic_modulus_x"], rel=1e-9)
    assert about_y.value == pytest.approx(250.0 * p["plastic_modulus_y"], rel=1e-9)


def test_unsymmetrical_section_of_one_material():
    whole = angle(120.0, 80.0, 10.0, 11.0, 5.5)
    t = transformed_section(Section((Part(placed(whole, 1e4, -3e4).parts[0].shell, material=STEEL),)))
    p = section_properties(whole)
    assert t.product_moment == pytest.approx(p["product_moment"], rel=1e-9)
    assert t.principal.angle == pytest.approx(p["principal_angle"], rel=1e-9)
    assert t.bending_stiffness_minor == pytest.approx(200000.0 * p["second_moment_minor"], rel=1e-9)
    assert plastic_moments(t.section)[0].axis == pytest.approx(p["plastic_axis_y"] - 3e4, rel=1e-9)


def test_plastic_moment_of_timber_with_a_strip():
    about_x, about_y = plastic_moments(topped())
    # Strip 250 kN; half of 650 kN is 325 kN, so 75 kN of the timber, 37.5 mm, lie below the axis.
    assert about_x.axis == pytest.approx(10.0 + 37.5)
    above, below = 200.0 - 37.5, 37.5
    expected = 20.0 * 100.0 * (above**2 + below**2) / 2.0 + 250e3 * (5.0 + 37.5)
    assert about_x.value == pytest.approx(expected, rel=1e-9)
    assert about_y.axis == pytest.approx(50.0)
    assert about_y.value == pytest.approx((20.0 * 200.0 + 250.0 * 10.0) * 100.0**2 / 4.0, rel=1e-9)


def test_plastic_axis_in_a_gap_is_its_middle():
    pair = Section((box(0, 0, 10, 10, STEEL), box(0, 30, 10, 40, STEEL)))
    about_x, _ = plastic_moments(pair)
    assert about_x.axis == pytest.approx(20.0, abs=1e-6)
    assert about_x.value == pytest.approx(250.0 * 2.0 * 100.0 * 15.0)


def test_uncertainty_of_outline_and_modulus():
    section = topped()
    scale = Mode("print scale", 0.003 * (section.vertices - [50.0, 105.0]))
    found = quantify_transformed(section, OutlineUncertainty(modes=(scale,)), {"spruce": 0.1})
    stiffness = found["axial_stiffness"]
    assert stiffness.unit == "N"
    by_source = {line.source: line.std for line in stiffness.budget}
    assert by_source["print scale"] == pytest.approx(0.006 * 4e8, rel=1e-3)
    assert by_source["modulus of elasticity of spruce"] == pytest.approx(0.1 * 2e8, rel=1e-6)
    assert stiffness.std == pytest.approx(math.hypot(0.006 * 4e8, 0.1 * 2e8), rel=1e-3)
    # With no uncertainty of outline, the stiffness about x moves with the modulus through the centroid as well.
    alone = quantify_transformed(section, OutlineUncertainty(), {"spruce": 0.1})["bending_stiffness_x"]
    stiff, soft = (
        transformed_section(
            Section((box(0, 10, 100, 210, Material("s", 10000.0 * f)), box(0, 0, 100, 10, STEEL)))
        ).bending_stiffness_x
        for f in (1.1, 0.9)
    )
    assert alone.std == pytest.approx(0.5 * (stiff - soft), rel=1e-9)
    assert np.isfinite(alone.interval95).all()


def test_missing_or_impossible_materials_are_named():
    with pytest.raises(UsageError, match="Part 2 of the section has no material"):
        transformed_section(Section((box(0, 0, 1, 1, WOOD), box(1, 0, 2, 1))))
    with pytest.raises(UsageError, match="yield strength of 'glass' is not given"):
        plastic_moments(Section((box(0, 0, 1, 1, Material("glass", 70000.0)),)))
    with pytest.raises(UsageError, match="modulus of elasticity of 'foam' is 0 MPa"):
        transformed_section(Section((box(0, 0, 1, 1, Material("foam", 0.0)),)))
    with pytest.raises(UsageError, match="reference modulus is -1 MPa"):
        transformed_section(flitch(), -1.0)
