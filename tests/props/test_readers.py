"""Sections read from generated files: round trips, units, layers, nesting; faults are told with their place."""

import json
import math
from pathlib import Path

import ezdxf
import numpy as np
import pytest
import shapely
from cutface.cli.files.geometry import to_geojson, to_svg, to_wkt
from cutface.props.errors import CutfaceError, FileError, OutlineError, UsageError
from cutface.props.properties import section_properties
from cutface.props.readers import READERS, read_section
from cutface.props.readers.curves import bezier
from cutface.props.section import Section
from cutface.props.shapes import angle, hollow_rectangle, rolled_i, tube
from cutface.props.shapes.placing import placed

RECTANGLE = [(0.0, 0.0), (50.0, 0.0), (50.0, 100.0), (0.0, 100.0)]
BOW_TIE = [(0.0, 0.0), (50.0, 100.0), (50.0, 0.0), (0.0, 100.0)]
QUARTER_BULGE = math.tan(math.pi / 8.0)


def area(section: Section) -> float:
    return section_properties(section)["area"]


def codes(notices) -> list[str]:
    return [notice.code for notice in notices]


class Sheet:
    """A DXF drawing under construction."""

    def __init__(self, path: Path, unit: int = 4) -> None:
        self.path = path
        self.document = ezdxf.new()
        self.document.header["$INSUNITS"] = unit
        self.space = self.document.modelspace()

    def closed(self, points, layer: str = "0") -> None:
        self.space.add_lwpolyline(points, close=True, dxfattribs={"layer": layer})

    def lines(self, points, layer: str = "0") -> None:
        for a, b in zip(points, [*points[1:], points[0]], strict=True):
            self.space.add_line(a, b, dxfattribs={"layer": layer})

    def read(self, **options):
        self.document.saveas(self.path)
        return read_section(self.path, **options)


@pytest.fixture
def sheet(tmp_path):
    return Sheet(tmp_path / "member.dxf")


def written(path: Path, text: str) -> Path:
    path.write_text(text, encoding="utf-8")
    return path


def svg(tmp_path: Path, body: str, size: str = 'width="200mm" height="200mm" viewBox="0 0 200 200"') -> Path:
    text = f'<svg xmlns="http://www.w3.org/2000/svg" xmlns:xlink="http://www.w3.org/1999/xlink" {size}>{body}</svg>'
    return written(tmp_path / "member.svg", text)


# DXF


def test_dxf_polyline_round_trip(sheet):
    drawn = rolled_i(200.0, 100.0, 5.6, 8.5, 12.0)
    sheet.closed(drawn.vertices)
    section, notices = sheet.read()
    assert notices == ()
    assert section.to_polygon().symmetric_difference(drawn.to_polygon()).area < 1e-6


@pytest.mark.parametrize(("code", "factor"), [(1, 25.4), (4, 1.0), (5, 10.0), (6, 1000.0), (14, 100.0)])
def test_dxf_units_are_honoured(tmp_path, code, factor):
    sheet = Sheet(tmp_path / "member.dxf", code)
    sheet.closed([(x / factor, y / factor) for x, y in RECTANGLE])
    section, notices = sheet.read()
    assert area(section) == pytest.approx(5000.0, rel=1e-9)
    assert notices == ()


def test_dxf_without_unit_is_taken_as_mm_and_says_so(tmp_path):
    sheet = Sheet(tmp_path / "member.dxf", 0)
    sheet.closed(RECTANGLE)
    section, notices = sheet.read()
    assert area(section) == pytest.approx(5000.0)
    assert codes(notices) == ["unit-assumed"]


def test_suspected_unit_is_refused_until_named(tmp_path):
    sheet = Sheet(tmp_path / "member.dxf", 4)
    sheet.closed([(x / 1000.0, y / 1000.0) for x, y in RECTANGLE])
    with pytest.raises(FileError, match=r"measures 0\.05 x 0\.1 mm, from \(0, 0\) to \(0\.05, 0\.1\)") as caught:
        sheet.read()
    assert caught.value.code == "unit-suspected"
    assert area(sheet.read(unit="m")[0]) == pytest.approx(5000.0)
    assert area(sheet.read(unit="mm")[0]) == pytest.approx(0.005)
    with pytest.raises(UsageError, match="no unit 'furlong'"):
        sheet.read(unit="furlong")


def test_unusual_unit_of_a_dxf_is_refused_until_named(tmp_path):
    sheet = Sheet(tmp_path / "member.dxf", 20)
    sheet.closed(RECTANGLE)
    with pytest.raises(FileError, match=r"\$INSUNITS 20"):
        sheet.read()
    assert area(sheet.read(unit="mm")[0]) == pytest.approx(5000.0)


def test_dxf_bulges_circle_and_nesting(sheet):
    # A stadium 100 x 40 with a round hole, and a round bar inside the hole.
    sheet.space.add_lwpolyline(
        [(-30.0, -20.0, 0.0), (30.0, -20.0, 1.0), (30.0, 20.0, 0.0), (-30.0, 20.0, 1.0)], format="xyb", close=True
    )
    sheet.space.add_circle((0.0, 0.0), 12.0)
    sheet.space.add_circle((0.0, 0.0), 5.0)
    section, _ = sheet.read()
    assert area(section) == pytest.approx(60.0 * 40.0 + math.pi * (20.0**2 - 12.0**2 + 5.0**2), rel=1e-9)
    assert sorted(len(part.holes) for part in section.parts) == [0, 1]
    assert section_properties(section)["width"] == pytest.approx(100.0, abs=0.01)


def test_dxf_loose_lines_and_arcs_are_joined_whatever_their_order_and_direction(sheet):
    # A 60 x 40 rectangle with 8 mm rounded corners, drawn piecemeal.
    sheet.space.add_arc((22.0, 12.0), 8.0, 0.0, 90.0)
    sheet.space.add_line((30.0, -12.0), (30.0, 12.0))
    sheet.space.add_arc((-22.0, -12.0), 8.0, 180.0, 270.0)
    sheet.space.add_line((22.0, 20.0), (-22.0, 20.0))
    sheet.space.add_line((-30.0, -12.0), (-30.0, 12.0))
    sheet.space.add_arc((-22.0, 12.0), 8.0, 90.0, 180.0)
    sheet.space.add_line((22.0, -20.0), (-22.0, -20.0))
    sheet.space.add_arc((22.0, -12.0), 8.0, 270.0, 360.0)
    section, _ = sheet.read()
    assert area(section) == pytest.approx(60.0 * 40.0 - (4.0 - math.pi) * 64.0, rel=1e-9)


def test_dxf_small_gaps_are_joined_and_told(sheet):
    sheet.space.add_line((0.0, 0.0), (50.0, 0.0))
    sheet.space.add_line((50.004, 0.0), (50.0, 100.0))
    sheet.space.add_lwpolyline([(50.0, 100.0), (0.0, 100.0), (0.0, 0.0)])
    section, notices = sheet.read()
    assert area(section) == pytest.approx(5000.0, rel=1e-4)
    assert codes(notices) == ["ends-joined"]
    assert "0.004 mm" in notices[0].message
    with pytest.raises(OutlineError, match="open"):
        sheet.read(join_tolerance=0.001)


def test_dxf_spline_and_ellipse(sheet):
    sheet.space.add_ellipse((0.0, 0.0), (40.0, 0.0), 0.5)
    spline = sheet.space.add_spline(dxfattribs={"layer": "wave"})
    spline.set_closed([(200, 0, 0), (260, 10, 0), (270, 60, 0), (220, 80, 0), (190, 40, 0)], degree=3)
    ellipse, _ = sheet.read(layer="0")
    assert area(ellipse) == pytest.approx(math.pi * 40.0 * 20.0, rel=1e-9)
    coarse, fine = (sheet.read(layer="wave", chord_tolerance=t)[0] for t in (0.01, 1e-4))
    strayed = shapely.hausdorff_distance(coarse.to_polygon().boundary, fine.to_polygon().boundary)
    assert 1e-4 < strayed < 0.011
    assert len(fine.vertices) > len(coarse.vertices)


def test_dxf_ellipse_arc_closed_by_a_line(sheet):
    sheet.space.add_ellipse((0.0, 0.0), (40.0, 0.0), 0.5, start_param=0.0, end_param=math.pi)
    sheet.space.add_line((-40.0, 0.0), (40.0, 0.0))
    assert area(sheet.read()[0]) == pytest.approx(0.5 * math.pi * 40.0 * 20.0, rel=1e-9)


def test_dxf_old_polyline_with_bulges(sheet):
    sheet.space.add_polyline2d(
        [(0, 0, 0), (40, 0, QUARTER_BULGE), (50, 10, 0), (50, 30, 0), (0, 30, 0)], format="xyb", close=True
    )
    assert area(sheet.read()[0]) == pytest.approx(1500.0 - (1.0 - math.pi / 4.0) * 100.0, rel=1e-9)


def test_dxf_block_is_placed_scaled_and_mirrored(sheet):
    block = sheet.document.blocks.new("LEG")
    block.add_lwpolyline(angle(100.0, 60.0, 8.0, 9.0).vertices, close=True)
    sheet.space.add_blockref("LEG", (500.0, 300.0), dxfattribs={"xscale": -1.0, "rotation": 90.0, "layer": "steel"})
    section, _ = sheet.read(layer="STEEL")
    expected = section_properties(angle(100.0, 60.0, 8.0, 9.0))
    p = section_properties(section)
    assert p["area"] == pytest.approx(expected["area"], rel=1e-9)
    assert p["second_moment_x"] == pytest.approx(expected["second_moment_y"], rel=1e-9)
    assert p["centroid_x"] == pytest.approx(500.0 - expected["centroid_y"], rel=1e-9)
    assert p["product_moment"] == pytest.approx(expected["product_moment"], rel=1e-9)


def test_dxf_arc_seen_from_below_is_mirrored(sheet):
    sheet.space.add_arc((-10.0, 0.0), 30.0, -90.0, 90.0, dxfattribs={"extrusion": (0, 0, -1)})
    sheet.space.add_line((10.0, -30.0), (10.0, 30.0))
    p = section_properties(sheet.read()[0])
    assert p["area"] == pytest.approx(0.5 * math.pi * 900.0, rel=1e-9)
    assert p["centroid_x"] == pytest.approx(10.0 - 4.0 * 30.0 / (3.0 * math.pi), rel=1e-4)


def test_dxf_layers(sheet):
    sheet.closed(RECTANGLE, "Outline")
    sheet.lines([(0, 0), (80, 0), (80, 130), (0, 130)], "Frame")
    sheet.space.add_text("C 24", dxfattribs={"layer": "Outline"})
    section, notices = sheet.read(layer="outline")
    assert area(section) == pytest.approx(5000.0)
    assert codes(notices) == ["entities-passed-over"]
    with pytest.raises(UsageError, match=r"layer 'steel'.*Frame, Outline"):
        sheet.read(layer="steel")
    sheet.document.layers.add("Frame").off()
    section, notices = sheet.read()
    assert area(section) == pytest.approx(5000.0)
    assert "hidden-layers" in codes(notices)


def test_open_outline_is_refused_with_its_ends_and_bridged_on_request(sheet):
    sheet.space.add_lwpolyline([(0.0, 3.0), *RECTANGLE[1:], (0.0, 4.0)], dxfattribs={"layer": "cut"})
    with pytest.raises(OutlineError, match=r"layer 'cut' is open: its ends at \(0, 3\) mm and \(0, 4\) mm lie 1 mm"):
        sheet.read()
    section, notices = sheet.read(repair=True)
    assert area(section) == pytest.approx(5000.0 - 0.5 * 50.0 * 3.0)
    assert codes(notices) == ["gap-bridged"]
    assert "1 mm between (0, 3) mm and (0, 4) mm" in notices[0].message.replace(
        "(0, 4) mm and (0, 3)", "(0, 3) mm and (0, 4)"
    )


def test_far_open_ends_are_not_bridged(sheet):
    sheet.space.add_lwpolyline(RECTANGLE)
    with pytest.raises(OutlineError, match="too far to bridge"):
        sheet.read(repair=True)


def test_repair_bridges_two_chains(sheet):
    sheet.space.add_lwpolyline([(0.0, 50.5), (0.0, 0.0), (50.0, 0.0), (50.0, 49.5)])
    sheet.space.add_lwpolyline([(50.0, 50.5), (50.0, 100.0), (0.0, 100.0), (0.0, 51.0)])
    section, notices = sheet.read(repair=True)
    assert area(section) == pytest.approx(5000.0)
    assert codes(notices) == ["gap-bridged", "gap-bridged"]


def test_branching_outline_is_refused_with_its_place(sheet):
    sheet.lines(RECTANGLE)
    sheet.space.add_line((50.0, 0.0), (70.0, 0.0))
    with pytest.raises(OutlineError, match=r"3 strokes end at \(50, 0\) mm") as caught:
        sheet.read()
    assert caught.value.code == "branching-outline"


def test_stroke_drawn_twice_is_refused_and_dropped_on_request(sheet):
    sheet.lines(RECTANGLE, "a")
    sheet.space.add_line((50.0, 100.0), (50.0, 0.0), dxfattribs={"layer": "b"})
    with pytest.raises(OutlineError, match=r"1 stroke\(s\) are drawn twice: LINE #\w+ on layer 'b' at \(50, 50\) mm"):
        sheet.read()
    section, notices = sheet.read(repair=True)
    assert area(section) == pytest.approx(5000.0)
    assert codes(notices) == ["copies-dropped"]


def test_outline_repeated_on_another_layer_is_refused_and_dropped_on_request(sheet):
    sheet.closed(RECTANGLE, "outline")
    sheet.closed(RECTANGLE[2:] + RECTANGLE[:2], "hatch edge")
    with pytest.raises(OutlineError, match=r"layer 'hatch edge' around \(25, 50\) mm is a copy of that of .*'outline'"):
        sheet.read()
    section, notices = sheet.read(repair=True)
    assert area(section) == pytest.approx(5000.0)
    assert codes(notices) == ["copies-dropped"]


def test_crossing_outlines_are_refused_with_their_place(sheet):
    sheet.closed(RECTANGLE)
    sheet.closed([(40.0, 20.0), (60.0, 20.0), (60.0, 40.0), (40.0, 40.0)])
    for repair in (False, True):
        with pytest.raises(OutlineError, match=r"cross at \(50, [24]0\) mm"):
            sheet.read(repair=repair)


def test_not_a_dxf(tmp_path):
    with pytest.raises(FileError, match="cannot be read as DXF"):
        read_section(written(tmp_path / "member.dxf", "this is not a drawing"))
    (tmp_path / "noise.dxf").write_bytes(bytes(range(256)) * 20)
    with pytest.raises(FileError):
        read_section(tmp_path / "noise.dxf")


# SVG


def test_svg_shapes_and_transforms(tmp_path):
    body = """
      <g transform="translate(100 100) rotate(30)">
        <rect x="-30" y="-20" width="60" height="40" rx="8"/>
        <circle r="10"/>
        <g transform="scale(0.5)"><ellipse rx="10" ry="6" /></g>
      </g>"""
    section, notices = read_section(svg(tmp_path, body))
    assert notices == ()
    p = section_properties(section)
    expected = 2400.0 - (4.0 - math.pi) * 64.0 - math.pi * 100.0 + math.pi * 5.0 * 3.0
    assert p["area"] == pytest.approx(expected, rel=1e-9)
    assert (p["centroid_x"], p["centroid_y"]) == pytest.approx((100.0, -100.0), abs=1e-9)
    # Seen on the screen, a turn by 30 degrees in SVG is clockwise.
    assert p["principal_angle"] == pytest.approx(math.radians(60.0), abs=1e-9)


@pytest.mark.parametrize(
    "path",
    [
        "M10 10H60V110H10Z",
        "m10 10 50 0 0 100-50 0z",
        "M 10,10 L 60,10 60,110 10,110 10,10",
        "M10 10h50v100h-50V10",
        "M10 10H60v100L10 110zm0 0",
    ],
)
def test_svg_path_commands(tmp_path, path):
    section, _ = read_section(svg(tmp_path, f'<path d="{path}"/>'))
    assert area(section) == pytest.approx(5000.0, rel=1e-6)


def test_svg_smooth_curves_continue_the_last_one(tmp_path):
    smooth = "M20 60C20 20 60 20 80 60S140 90 150 60L150 150Q120 180 90 150T20 150z"
    spelt_out = "M20 60C20 20 60 20 80 60C100 100 140 90 150 60L150 150Q120 180 90 150Q60 120 20 150z"
    one, other = (read_section(svg(tmp_path, f'<path d="{d}"/>'))[0] for d in (smooth, spelt_out))
    assert np.array_equal(one.vertices, other.vertices)
    # Green's theorem on the control points of the first curve: 3/20 of the cross products, against a straight side.
    bulge = read_section(svg(tmp_path, '<path d="M20 60C20 20 60 20 80 60z"/>'))[0]
    p = np.array([[0.0, 0.0], [0.0, 40.0], [40.0, 40.0], [60.0, 0.0]])

    def cross(i: int, j: int) -> float:
        return p[i][0] * p[j][1] - p[i][1] * p[j][0]

    exact = abs(
        0.15 * (2 * cross(0, 1) + cross(0, 2) + cross(1, 2) + cross(1, 3) + 2 * cross(2, 3)) + 0.05 * cross(0, 3)
    )
    assert area(bulge) == pytest.approx(exact, rel=1e-4)


def test_svg_open_path_is_an_open_outline(tmp_path):
    with pytest.raises(OutlineError, match=r"<path> is open: its ends at \(10, -10\) mm and \(10, -110\) mm"):
        read_section(svg(tmp_path, '<path d="M10 10h50v100h-50"/>'))


def test_svg_arcs_in_compact_form(tmp_path):
    # A disc of radius 30 as two half turns, flags run together; and a slanted ellipse given by large arc and sweep.
    section, _ = read_section(svg(tmp_path, '<path d="M70 100a30 30 0 01 60 0a30 30 0 0 1-60 0z"/>'))
    assert area(section) == pytest.approx(math.pi * 900.0, rel=1e-6)
    body = '<path d="M60 100 A 40 20 25 1 0 80 90 Z"/>'
    large = area(read_section(svg(tmp_path, body))[0])
    small = area(read_section(svg(tmp_path, body.replace("25 1 0", "25 0 0")))[0])
    other_large = area(read_section(svg(tmp_path, body.replace("25 1 0", "25 1 1")))[0])
    assert small < 0.5 * math.pi * 800.0 < large < math.pi * 800.0
    assert other_large == pytest.approx(large, rel=1e-6)
    assert large + small == pytest.approx(math.pi * 800.0, rel=1e-6)


@pytest.mark.parametrize(
    ("size", "factor"),
    [
        ('width="20cm" height="20cm" viewBox="0 0 200 200"', 1.0),
        ('width="4in" height="4in" viewBox="0 0 400 400"', 0.254),
        ('width="100mm" viewBox="0 0 400 400"', 0.25),
        ('width="400mm" height="200mm" viewBox="0 0 200 200"', 1.0),
        ('width="200mm" height="200mm"', 25.4 / 96.0),
    ],
)
def test_svg_scale(tmp_path, size, factor):
    section, _ = read_section(svg(tmp_path, '<polygon points="0,0 50,0 50,100 0,100"/>', size))
    assert area(section) == pytest.approx(5000.0 * factor**2, rel=1e-9)


def test_svg_without_size_is_refused_until_the_unit_is_named(tmp_path):
    path = svg(tmp_path, '<polygon points="0,0 50,0 50,100 0,100"/>', 'width="200" height="200"')
    with pytest.raises(FileError, match="states no size in mm") as caught:
        read_section(path)
    assert caught.value.code == "unit-unknown"
    assert area(read_section(path, unit="mm")[0]) == pytest.approx(5000.0)


def test_svg_groups_uses_and_what_is_not_drawn(tmp_path):
    body = """
      <defs><rect id="plate" width="50" height="100"/></defs>
      <g id="section"><use xlink:href="#plate" x="20" y="30"/></g>
      <g id="frame"><rect width="200" height="200"/></g>
      <rect width="10" height="10" style="display: none"/>
      <text x="3" y="4">C 24</text>"""
    path = svg(tmp_path, body)
    section, _ = read_section(path, layer="section")
    assert area(section) == pytest.approx(5000.0)
    assert section.vertices.min(axis=0) == pytest.approx((20.0, -130.0))
    assert area(read_section(path)[0]) == pytest.approx(40000.0 - 5000.0)
    with pytest.raises(UsageError, match=r"named 'steel'.*section, frame"):
        read_section(path, layer="steel")


def test_svg_faults(tmp_path):
    with pytest.raises(FileError, match="cannot be read from 'L 20 10 Z'"):
        read_section(svg(tmp_path, '<path d="M 10 10 L 20 L 20 10 Z"/>'))
    with pytest.raises(FileError, match="is no SVG"):
        read_section(written(tmp_path / "member.svg", "<html></html>"))
    with pytest.raises(FileError, match="is no SVG"):
        read_section(written(tmp_path / "member.svg", "not xml"))


@pytest.mark.parametrize(
    ("body", "size"),
    [
        ('<g transform="rotate(5e)"><rect width="3" height="4"/></g>', 'width="9mm" viewBox="0 0 9 9"'),
        ('<g transform="matrix(1 2 3)"><rect width="3" height="4"/></g>', 'width="9mm" viewBox="0 0 9 9"'),
        ('<path d="M1e999 0C0 0 1 1 1e999 3z"/>', 'width="9mm" viewBox="0 0 9 9"'),
        ('<rect width="nan" height="4" rx="1"/>', 'width="9mm" viewBox="0 0 9 9"'),
        ('<rect width="3" height="4"/>', 'width="9mm" viewBox="0 0 9 z"'),
    ],
)
def test_svg_numbers_that_are_none(tmp_path, body, size):
    with pytest.raises(FileError) as caught:
        read_section(svg(tmp_path, body, size))
    assert caught.value.code in ("bad-svg", "bad-coordinate")


def test_bezier_chords_stay_within_the_tolerance():
    control = np.array([[0.0, 0.0], [10.0, 80.0], [70.0, -60.0], [90.0, 30.0]])
    fine = shapely.LineString(bezier(control, 1e-6))
    for tolerance in (1.0, 0.01):
        coarse = bezier(control, tolerance)
        middles = shapely.points(0.5 * (coarse[1:] + coarse[:-1]))
        assert shapely.distance(fine, middles).max() <= tolerance
    assert np.array_equal(bezier(control, 0.1)[[0, -1]], control[[0, -1]])


# WKT, GeoJSON, results, tables of points


def test_wkt_round_trip(tmp_path):
    drawn = hollow_rectangle(150.0, 100.0, 6.3, 9.45, 6.3)
    section, notices = read_section(written(tmp_path / "member.wkt", shapely.to_wkt(drawn.to_polygon(), 12)))
    assert codes(notices) == ["unit-assumed"]
    assert section.to_polygon().symmetric_difference(drawn.to_polygon()).area < 1e-6
    assert [len(part.holes) for part in section.parts] == [1]


def test_wkt_several_lines_and_unit(tmp_path):
    text = "POLYGON ((0 0, 2 0, 2 1, 0 1, 0 0))\nLINEARRING (0 0, 1 0, 1 1, 0 0)\n"
    with pytest.raises(FileError, match="both polygons and lines"):
        read_section(written(tmp_path / "member.wkt", text))
    section, notices = read_section(written(tmp_path / "member.wkt", text.splitlines()[0]), unit="in")
    assert area(section) == pytest.approx(2.0 * 25.4**2)
    assert notices == ()


def test_wkt_faults(tmp_path):
    with pytest.raises(FileError, match="no well-known text"):
        read_section(written(tmp_path / "member.wkt", "POLYGON 1 2 3"))
    overlap = "MULTIPOLYGON (((0 0, 50 0, 50 50, 0 50, 0 0)), ((40 0, 90 0, 90 50, 40 50, 40 0)))"
    with pytest.raises(OutlineError, match=r"overlap by 500 mm2 near \(45, "):
        read_section(written(tmp_path / "member.wkt", overlap))
    outside = "POLYGON ((0 0, 50 0, 50 50, 0 50, 0 0), (60 0, 70 0, 70 10, 60 10, 60 0))"
    with pytest.raises(OutlineError, match="has a hole outside it"):
        read_section(written(tmp_path / "member.wkt", outside))


def test_geojson_layers_and_materials(tmp_path):
    def feature(x: float, layer: str, **properties) -> dict:
        ring = [[x, 0], [x + 40, 0], [x + 40, 200], [x, 200], [x, 0]]
        return {
            "type": "Feature",
            "properties": {"layer": layer, **properties},
            "geometry": {"type": "Polygon", "coordinates": [ring]},
        }

    collection = {
        "type": "FeatureCollection",
        "unit": "mm",
        "features": [
            feature(0.0, "wood", material="spruce", elastic_modulus=11000, density=450),
            feature(40.0, "steel", material="steel", elastic_modulus=210000.0),
        ],
    }
    path = written(tmp_path / "flitch.geojson", json.dumps(collection))
    section, notices = read_section(path)
    assert notices == ()
    assert [part.material.elastic_modulus for part in section.parts] == [11000.0, 210000.0]
    assert len(read_section(path, layer="steel")[0].parts) == 1
    with pytest.raises(UsageError, match=r"'brass'.*steel, wood"):
        read_section(path, layer="brass")
    collection["features"][0]["properties"]["density"] = "heavy"
    with pytest.raises(FileError, match="material of feature 1"):
        read_section(written(tmp_path / "flitch.geojson", json.dumps(collection)))


def test_files_written_by_the_program_are_read_back(tmp_path):
    drawn = Section(
        (
            *hollow_rectangle(150.0, 100.0, 6.3, 9.45, 6.3).parts,
            *placed(rolled_i(80.0, 40.0, 4.0, 6.0), 120.0, 3.0).parts,
        )
    )
    geojson, notices = read_section(written(tmp_path / "section.geojson", to_geojson(drawn)))
    assert notices == ()
    wkt, _ = read_section(written(tmp_path / "section.wkt", to_wkt(drawn)))
    for section in (geojson, wkt):
        assert all(np.array_equal(a, b) for a, b in zip(section.loops, drawn.loops, strict=True))
    path = written(tmp_path / "section.svg", to_svg(drawn))
    section, _ = read_section(path, layer="section")
    # The drawing has four decimals.
    assert section_properties(section)["second_moment_x"] == pytest.approx(
        section_properties(drawn)["second_moment_x"], rel=1e-5
    )
    with pytest.raises(OutlineError) as caught:
        read_section(path)
    assert "dimensions" in caught.value.remedy and "section" in caught.value.remedy


def test_geojson_faults(tmp_path):
    with pytest.raises(FileError, match="is no JSON"):
        read_section(written(tmp_path / "member.geojson", "{"))
    with pytest.raises(FileError, match="no geometry that can be read"):
        read_section(written(tmp_path / "member.geojson", '{"type": "Polygon", "coordinates": 3}'))
    with pytest.raises(FileError, match="holds no GeoJSON object"):
        read_section(written(tmp_path / "member.geojson", "[1, 2]"))


def test_result_of_a_measurement(tmp_path):
    drawn = tube(60.3, 5.0)
    parts = [{"shell": p.shell.tolist(), "holes": [h.tolist() for h in p.holes]} for p in drawn.parts]
    document = {"schema": "cutface/measurement/1", "section": {"unit": "mm", "parts": parts}}
    section, notices = read_section(written(tmp_path / "result.json", json.dumps(document)))
    assert notices == ()
    assert area(section) == pytest.approx(area(drawn), rel=1e-12)


@pytest.mark.parametrize(
    ("text", "unit"),
    [
        ("0,0\n50,0\n50,100\n0,100\n\n10,10\n20,10\n20,20\n10,20\n", None),
        ("# a sawn joist\nx_mm;y_mm\n0,0;0,0\n50,0;0\n50;100\n0;100\n;\n10;10\n20;10\n# inner\n20;20\n10;20\n", "mm"),
        ("loop\tx [cm]\ty [cm]\n1\t0\t0\n1\t5\t0\n1\t5\t10\n1\t0\t10\n2\t1\t1\n2\t2\t1\n2\t2\t2\n2\t1\t2\n", "cm"),
        ("0 0\n50 0\n50 100\n0 100\n0 0\n\n\n10 10\n20 10\n20 20\n10 20\n10 10", None),
        ('"y","x"\n0,0\n0,50\n100,50\n100,0\n\n10,10\n10,20\n20,20\n20,10\n', None),
    ],
)
def test_tables_of_points(tmp_path, text, unit):
    section, notices = read_section(written(tmp_path / "member.csv", text))
    assert area(section) == pytest.approx(4900.0)
    assert section.vertices.max(axis=0) == pytest.approx((50.0, 100.0))
    assert codes(notices) == ([] if unit else ["unit-assumed"])


@pytest.mark.parametrize(
    ("text", "message"),
    [
        ("0,0\n50,abc\n50,100\n", "Line 2 of member.csv holds no point"),
        ("0,0\n50\n50,100\n", "Line 2 of member.csv holds no point"),
        ("1,0,0\n1,50,0\n1,50,100\n", "has 3 columns and no header"),
        ("width,height\n0,0\n", "names no columns x and y"),
        ("\n\n", "holds no point"),
    ],
)
def test_faulty_tables_of_points(tmp_path, text, message):
    with pytest.raises(FileError, match=message):
        read_section(written(tmp_path / "member.csv", text))


# Faults common to all formats


@pytest.mark.parametrize("ending", [".csv", ".wkt", ".dxf", ".svg", ".geojson"])
def test_self_crossing_is_refused_with_its_place_and_repaired_on_request(tmp_path, ending):
    path = tmp_path / f"member{ending}"
    ring = [*BOW_TIE, BOW_TIE[0]]
    if ending == ".csv":
        written(path, "\n".join(f"{x},{y}" for x, y in BOW_TIE))
    elif ending == ".wkt":
        written(path, shapely.to_wkt(shapely.Polygon(ring)))
    elif ending == ".geojson":
        written(path, json.dumps({"type": "Polygon", "coordinates": [ring]}))
    elif ending == ".svg":
        svg(tmp_path, f'<g transform="scale(1 -1)"><polygon points="{" ".join(f"{x},{y}" for x, y in BOW_TIE)}"/></g>')
    else:
        drawing = Sheet(path)
        drawing.closed(BOW_TIE)
        drawing.document.saveas(path)
    with pytest.raises(OutlineError, match=r"crosses itself at \(25, 50\) mm") as caught:
        read_section(path)
    assert caught.value.code == "crossing-outline"
    assert "repair" in caught.value.remedy
    section, notices = read_section(path, repair=True)
    assert area(section) == pytest.approx(2500.0)
    assert "outline-repaired" in codes(notices)
    assert any("2 region(s) of 2500 mm2" in notice.message for notice in notices)


def test_hole_joined_to_the_shell_by_a_slit_is_refused_and_repaired_on_request(tmp_path):
    # Some exporters draw a hole by running to it and back along one line.
    points = [(0, 0), (60, 0), (60, 60), (0, 60), (0, 30), (20, 30), (20, 40), (40, 40), (40, 20), (20, 20), (20, 30)]
    path = written(tmp_path / "member.csv", "\n".join(f"{x},{y}" for x, y in [*points, (0, 30)]))
    with pytest.raises(OutlineError, match="itself at"):
        read_section(path)
    section, _ = read_section(path, repair=True)
    assert area(section) == pytest.approx(3600.0 - 400.0)
    assert [len(part.holes) for part in section.parts] == [1]


def test_degenerate_loop_is_refused_with_its_place_and_left_out_on_request(tmp_path):
    path = written(tmp_path / "member.csv", "0,0\n50,0\n50,100\n0,100\n\n7,8\n9,8\n")
    with pytest.raises(OutlineError, match=r"line 6 at \(7, 8\) mm encloses no area"):
        read_section(path)
    section, notices = read_section(path, repair=True)
    assert area(section) == pytest.approx(5000.0)
    assert "no-area" in codes(notices)


def test_outlines_that_touch_are_two_parts(tmp_path):
    path = written(tmp_path / "member.csv", "0,0\n50,0\n50,100\n0,100\n\n50,0\n60,0\n60,100\n50,100\n")
    section, _ = read_section(path)
    assert len(section.parts) == 2
    assert area(section) == pytest.approx(6000.0)


def test_paths_formats_and_options_that_do_not_exist(tmp_path):
    with pytest.raises(FileError, match="cannot be read"):
        read_section(tmp_path / "absent.csv")
    with pytest.raises(FileError, match="in a format that holds no section"):
        read_section(tmp_path / "member.xyz")
    path = written(tmp_path / "member.csv", "0,0\n50,0\n50,100\n")
    with pytest.raises(UsageError, match="without layers"):
        read_section(path, layer="a")
    with pytest.raises(UsageError, match="chord tolerance is 0 mm"):
        read_section(path, chord_tolerance=0.0)
    (tmp_path / "binary.csv").write_bytes(b"\xff\xfe\x00\x81" * 10)
    with pytest.raises(FileError, match="text"):
        read_section(tmp_path / "binary.csv")


@pytest.mark.parametrize("ending", READERS)
def test_rubbish_never_ends_in_a_traceback(tmp_path, ending):
    rng = np.random.default_rng(7)
    for content in (b"", b"\x00" * 50, rng.bytes(400), b"0,0\n1e999,2\n3,4", b"<svg/>", b"null", b'{"section": {}}'):
        path = tmp_path / f"member{ending}"
        path.write_bytes(content)
        with pytest.raises(CutfaceError):
            read_section(path)
