"""The elastic and plastic properties of a section, and the registry of every property's name, unit and symbols.

One homogeneous material: a section of several materials is transformed elsewhere. Torsion, warping and shear have
entries in the registry but are solved elsewhere.
"""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import dataclass

from .axes import PrincipalAxes, principal_axes
from .integrals import Boundary, Moments, centroidal, moments, perimeter
from .plastic import PlasticAxis, plastic_axis
from .section import Section


@dataclass(frozen=True)
class PropertyInfo:
    """How a property is printed.

    symbol_en follows EN 1993-1-1, whose major axis of an upright section is y (here x) and minor axis z (here y);
    symbol_us follows the practice of US handbooks.
    """

    unit: str
    symbol_en: str
    symbol_us: str
    label: str


PROPERTIES: dict[str, PropertyInfo] = {
    "area": PropertyInfo("mm^2", "A", "A", "Area"),
    "perimeter": PropertyInfo("mm", "U", "P", "Outer perimeter"),
    "width": PropertyInfo("mm", "b", "b", "Overall width"),
    "depth": PropertyInfo("mm", "h", "d", "Overall depth"),
    "enclosing_length": PropertyInfo("mm", "l_s", "l_s", "Length, squared up"),
    "enclosing_breadth": PropertyInfo("mm", "b_s", "b_s", "Breadth, squared up"),
    "centroid_x": PropertyInfo("mm", "c_z", "x_c", "Centroid, from the left"),
    "centroid_y": PropertyInfo("mm", "c_y", "y_c", "Centroid, from below"),
    "second_moment_x": PropertyInfo("mm^4", "I_y", "I_x", "Second moment of area about x"),
    "second_moment_y": PropertyInfo("mm^4", "I_z", "I_y", "Second moment of area about y"),
    "product_moment": PropertyInfo("mm^4", "I_yz", "I_xy", "Product moment of area"),
    "polar_second_moment": PropertyInfo("mm^4", "I_p", "I_p", "Polar second moment of area"),
    "second_moment_major": PropertyInfo("mm^4", "I_u", "I_max", "Second moment about the major axis"),
    "second_moment_minor": PropertyInfo("mm^4", "I_v", "I_min", "Second moment about the minor axis"),
    "principal_angle": PropertyInfo("rad", "α", "α", "Angle from x to the major axis"),
    "radius_of_gyration_x": PropertyInfo("mm", "i_y", "r_x", "Radius of gyration about x"),
    "radius_of_gyration_y": PropertyInfo("mm", "i_z", "r_y", "Radius of gyration about y"),
    "radius_of_gyration_major": PropertyInfo("mm", "i_u", "r_max", "Radius of gyration about the major axis"),
    "radius_of_gyration_minor": PropertyInfo("mm", "i_v", "r_min", "Radius of gyration about the minor axis"),
    "section_modulus_top": PropertyInfo("mm^3", "W_el,y,top", "S_x,top", "Elastic modulus about x, top fibre"),
    "section_modulus_bottom": PropertyInfo("mm^3", "W_el,y,bot", "S_x,bot", "Elastic modulus about x, bottom fibre"),
    "section_modulus_left": PropertyInfo("mm^3", "W_el,z,left", "S_y,left", "Elastic modulus about y, left fibre"),
    "section_modulus_right": PropertyInfo("mm^3", "W_el,z,right", "S_y,right", "Elastic modulus about y, right fibre"),
    "section_modulus_major": PropertyInfo("mm^3", "W_el,u", "S_max", "Elastic modulus about the major axis"),
    "section_modulus_minor": PropertyInfo("mm^3", "W_el,v", "S_min", "Elastic modulus about the minor axis"),
    "plastic_axis_x": PropertyInfo("mm", "c_pl,z", "x_p", "Plastic axis along y, from the left"),
    "plastic_axis_y": PropertyInfo("mm", "c_pl,y", "y_p", "Plastic axis along x, from below"),
    "plastic_modulus_x": PropertyInfo("mm^3", "W_pl,y", "Z_x", "Plastic modulus about x"),
    "plastic_modulus_y": PropertyInfo("mm^3", "W_pl,z", "Z_y", "Plastic modulus about y"),
    "plastic_modulus_major": PropertyInfo("mm^3", "W_pl,u", "Z_max", "Plastic modulus about the major axis"),
    "plastic_modulus_minor": PropertyInfo("mm^3", "W_pl,v", "Z_min", "Plastic modulus about the minor axis"),
    "shape_factor_x": PropertyInfo("1", "W_pl,y/W_el,y", "Z_x/S_x", "Shape factor about x"),
    "shape_factor_y": PropertyInfo("1", "W_pl,z/W_el,z", "Z_y/S_y", "Shape factor about y"),
    "torsion_constant": PropertyInfo("mm^4", "I_t", "J", "Torsion constant"),
    "warping_constant": PropertyInfo("mm^6", "I_w", "C_w", "Warping constant"),
    "shear_centre_x": PropertyInfo("mm", "y_s", "x_o", "Shear centre, from the left"),
    "shear_centre_y": PropertyInfo("mm", "z_s", "y_o", "Shear centre, from below"),
    "shear_area_x": PropertyInfo("mm^2", "A_v,y", "A_v,x", "Shear area for a force along x"),
    "shear_area_y": PropertyInfo("mm^2", "A_v,z", "A_v,y", "Shear area for a force along y"),
    "monosymmetry_x": PropertyInfo("mm", "β_y", "β_x", "Monosymmetry about x"),
    "monosymmetry_y": PropertyInfo("mm", "β_z", "β_y", "Monosymmetry about y"),
    "monosymmetry_major": PropertyInfo("mm", "β_u", "β_max", "Monosymmetry about the major axis"),
    "monosymmetry_minor": PropertyInfo("mm", "β_v", "β_min", "Monosymmetry about the minor axis"),
    "mass_per_metre": PropertyInfo("kg/m", "m", "w", "Mass per metre"),
}


@dataclass(frozen=True)
class Sides:
    """Where the region ends along two axes at a right angle, mm from the origin of its edges."""

    left: float
    right: float
    bottom: float
    top: float


@dataclass(frozen=True)
class Analysis:
    """Everything the properties of a section are made of, about its centroid.

    edges : the boundary about the centroid; `edges.origin` is the centroid in section coordinates
    perimeter : of the shells, mm
    moments : about x and y through the centroid
    principal : principal axes
    sides, turned_sides : extents along x and y, and along the major and minor axis
    plastic_x, plastic_y, plastic_major, plastic_minor : plastic axes for bending about the named axis; the offset runs
        along y and x, and across and along the major axis
    """

    edges: Boundary
    perimeter: float
    moments: Moments
    principal: PrincipalAxes
    sides: Sides
    turned_sides: Sides
    plastic_x: PlasticAxis
    plastic_y: PlasticAxis
    plastic_major: PlasticAxis
    plastic_minor: PlasticAxis


def analyse(section: Section) -> Analysis:
    """Moments, axes and extents of a section.

    Raises OutlineError if the enclosed area is not positive.
    """
    edges = centroidal(section)
    about_centroid = moments(edges)
    area = about_centroid.area
    axes = principal_axes(about_centroid.second_x, about_centroid.second_y, about_centroid.product)
    plastic_x = plastic_axis(edges, area)
    plastic_y = plastic_axis(edges.swapped(), area)
    sides = _sides(edges)
    if axes.angle == 0.0:
        turned_sides, plastic_major, plastic_minor = sides, plastic_x, plastic_y
    else:
        turned = edges.turned(*axes.major_direction)
        turned_sides = _sides(turned)
        plastic_major = plastic_axis(turned, area)
        plastic_minor = plastic_axis(turned.swapped(), area)
    return Analysis(
        edges,
        perimeter(edges),
        about_centroid,
        axes,
        sides,
        turned_sides,
        plastic_x,
        plastic_y,
        plastic_major,
        plastic_minor,
    )


def section_properties(section: Section, density: float | None = None) -> Mapping[str, float]:
    """Elastic and plastic properties of a section of one material.

    section : parts with holes, mm
    density : kg/m^3; adds `mass_per_metre`
    Returns name -> value in the unit of `PROPERTIES`. Centroid and plastic axes are in section coordinates, second
    moments about the centroid, `principal_angle` from x to the major axis in (-pi/2, pi/2]. The perimeter is that of
    the shells, as tables of hollow sections state it.
    Raises OutlineError if the enclosed area is not positive.

    >>> from cutface import Part, Section
    >>> timber = Section((Part([[0, 0], [50, 0], [50, 200], [0, 200]]),))
    >>> round(section_properties(timber)["section_modulus_top"])
    333333
    """
    return properties_of(analyse(section), density)


def properties_of(analysis: Analysis, density: float | None = None) -> dict[str, float]:
    """The properties, name -> value, from an analysis; density in kg/m^3."""
    area, _, _, second_x, second_y, product = analysis.moments
    major, minor, angle = analysis.principal
    sides, turned = analysis.sides, analysis.turned_sides
    centroid_x, centroid_y = (float(c) for c in analysis.edges.origin)
    properties = {
        "area": area,
        "perimeter": analysis.perimeter,
        "width": sides.right - sides.left,
        "depth": sides.top - sides.bottom,
        "centroid_x": centroid_x,
        "centroid_y": centroid_y,
        "second_moment_x": second_x,
        "second_moment_y": second_y,
        "product_moment": product,
        "polar_second_moment": second_x + second_y,
        "second_moment_major": major,
        "second_moment_minor": minor,
        "principal_angle": angle,
        "radius_of_gyration_x": math.sqrt(second_x / area),
        "radius_of_gyration_y": math.sqrt(second_y / area),
        "radius_of_gyration_major": math.sqrt(major / area),
        "radius_of_gyration_minor": math.sqrt(minor / area),
        "section_modulus_top": second_x / sides.top,
        "section_modulus_bottom": second_x / -sides.bottom,
        "section_modulus_left": second_y / -sides.left,
        "section_modulus_right": second_y / sides.right,
        "section_modulus_major": major / max(turned.top, -turned.bottom),
        "section_modulus_minor": minor / max(turned.right, -turned.left),
        "plastic_axis_x": centroid_x + analysis.plastic_y.offset,
        "plastic_axis_y": centroid_y + analysis.plastic_x.offset,
        "plastic_modulus_x": analysis.plastic_x.modulus,
        "plastic_modulus_y": analysis.plastic_y.modulus,
        "plastic_modulus_major": analysis.plastic_major.modulus,
        "plastic_modulus_minor": analysis.plastic_minor.modulus,
        "shape_factor_x": analysis.plastic_x.modulus * max(sides.top, -sides.bottom) / second_x,
        "shape_factor_y": analysis.plastic_y.modulus * max(sides.right, -sides.left) / second_y,
    }
    if density is not None:
        # mm^2 to m^2
        properties["mass_per_metre"] = area * 1e-6 * density
    return properties


def _sides(edges: Boundary) -> Sides:
    x, y = edges.start
    return Sides(float(x.min()), float(x.max()), float(y.min()), float(y.max()))
