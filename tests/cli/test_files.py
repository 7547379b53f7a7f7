import json
import re
import xml.etree.ElementTree as ET
from dataclasses import replace
from itertools import pairwise
from pathlib import Path

import numpy as np
import pytest
from cutface.cli.files.geometry import nice_length, to_geojson, to_svg, to_wkt
from cutface.cli.files.json_document import measured_documents, numbered, refused_document, to_text
from cutface.props.errors import Refusal
from cutface.props.section import Part, Section
from hand_made_measurement import ANGLE, BOX, one_member, two_members
from shapely import from_wkt
from shapely.geometry import shape

TWO_PARTS = Section((*ANGLE.parts, *BOX.parts))
# Thirds have no short decimal form: a writer that rounds moves them.
THIRDS = Section((Part(np.array([[0, 0], [100 / 3, 0], [100 / 3, 1e-3 / 3], [0, 1 / 3]])),))

SVG = "{http://www.w3.org/2000/svg}"


@pytest.mark.parametrize("section", [ANGLE, BOX, TWO_PARTS, THIRDS])
def test_wkt_and_geojson_hold_the_very_section(section: Section) -> None:
    for read in (from_wkt(to_wkt(section)), shape(json.loads(to_geojson(section))["geometry"])):
        polygons = getattr(read, "geoms", [read])
        again = Section.from_polygons(list(polygons))
        assert len(again.loops) == len(section.loops)
        assert all(np.array_equal(a, b) for a, b in zip(again.loops, section.loops, strict=True))


def test_one_part_is_a_polygon_several_are_a_multipolygon() -> None:
    assert to_wkt(BOX).startswith("POLYGON ((")
    assert to_wkt(TWO_PARTS).startswith("MULTIPOLYGON (((")
    assert json.loads(to_geojson(TWO_PARTS, {"member": 2}))["properties"] == {
        "coordinates": "plane, x right, y up",
        "unit": "mm",
        "member": 2,
    }


def test_geojson_rings_are_closed_and_run_as_rfc_7946_asks() -> None:
    # RFC 7946, 3.1.6: the first and last positions are the same, exterior rings counter-clockwise, holes clockwise.
    shell, *holes = json.loads(to_geojson(BOX))["geometry"]["coordinates"]

    def area(ring: list[list[float]]) -> float:
        return sum(x0 * y1 - x1 * y0 for (x0, y0), (x1, y1) in pairwise(ring)) / 2

    assert shell[0] == shell[-1]
    assert area(shell) == pytest.approx(4900)
    assert [area(hole) for hole in holes] == [pytest.approx(-1400)] * 2


def svg_of(section: Section) -> ET.Element:
    return ET.fromstring(to_svg(section, "A & B <1>"))


def test_svg_is_at_true_size_with_y_up() -> None:
    root = svg_of(ANGLE)
    width, height = (float(root.attrib[key].removesuffix("mm")) for key in ("width", "height"))
    assert root.attrib["viewBox"] == f"0 0 {root.attrib['width'][:-2]} {root.attrib['height'][:-2]}"
    (path,) = root.findall(f"{SVG}g[@id='section']/{SVG}path")
    points = np.array(re.findall(r"[-\d.]+ [-\d.]+", path.attrib["d"]), dtype=object)
    xy = np.array([[float(v) for v in p.split()] for p in points])
    assert np.ptp(xy, axis=0) == pytest.approx([60.0, 90.0], abs=2e-4)
    # The angle's leg along the bottom is at the larger y of the page.
    assert xy[xy[:, 0] == xy[:, 0].max(), 1].min() == pytest.approx(xy[:, 1].max() - 8.0, abs=2e-4)
    assert (xy > 0).all()
    assert (xy < (width, height)).all()


def test_svg_states_the_overall_dimensions_and_a_bar_of_its_true_length() -> None:
    root = svg_of(BOX)
    words = [text.text for text in root.iter(f"{SVG}text")]
    assert words.count("70.0") == 2
    bar = sum(float(r.attrib["width"]) for r in root.findall(f"{SVG}g[@id='scale-bar']/{SVG}rect"))
    assert f"{bar:g} mm" in words
    title = root.find(f"{SVG}title")
    assert title is not None
    assert title.text == "A & B <1>"


@pytest.mark.parametrize(("limit", "length"), [(1.0, 1.0), (0.99, 0.5), (24.0, 20.0), (49.9, 20.0), (50.0, 50.0)])
def test_nice_length(limit: float, length: float) -> None:
    assert nice_length(limit) == pytest.approx(length, rel=1e-12)


def test_document_of_a_measurement() -> None:
    measurement = one_member()
    (document,) = measured_documents(measurement, {"check_lengths": (140.2, np.float64(139.9))})
    assert list(document) == [
        "schema",
        "status",
        "refusal",
        "warnings",
        "member",
        "photo",
        "reference",
        "options",
        "section",
        "uncertainty",
        "properties",
        "budget",
        "software",
    ]
    assert document["schema"] == "cutface/measurement/1"
    assert (document["status"], document["refusal"]) == ("measured", None)
    assert document["member"] == {"number": 1, "of": 1}
    assert [warning["code"] for warning in document["warnings"]] == ["poorly-located"]
    assert document["photo"]["file"] == "yard 7.jpg"
    assert (document["photo"]["width_px"], document["photo"]["height_px"]) == (1200, 900)
    assert document["reference"]["mm_per_px"] == 0.19
    assert document["options"] == {"check_lengths": [140.2, 139.9]}
    assert document["section"]["parts"][0]["shell"] == ANGLE.parts[0].shell.tolist()
    area = measurement.members[0].quantities["area"]
    assert document["properties"]["area"] == {
        "value": area.value,
        "unit": "mm^2",
        "std": area.std,
        "interval95": list(area.interval95),
        "pixel_bounds": list(area.pixel_bounds or ()),
    }
    assert document["budget"]["area"][0] == {"source": "print scale", "std": area.budget[0].std, "share": 0.64}
    assert {"cutface", "numpy", "opencv"} <= set(document["software"])


def test_one_document_for_each_member_with_its_own_and_the_common_warnings() -> None:
    first, second = measured_documents(two_members())
    assert (first["member"], second["member"]) == ({"number": 1, "of": 2}, {"number": 2, "of": 2})
    assert first["warnings"] == second["warnings"] != []
    assert len(second["section"]["parts"][0]["holes"]) == 2


def test_document_of_a_refusal_has_the_same_entries() -> None:
    photo = one_member().photo
    document = refused_document(photo, Refusal("no-reference", "No sheet is in the picture.", "Lay one beside it."))
    assert document["status"] == "refused"
    assert document["refusal"] == {
        "code": "no-reference",
        "message": "No sheet is in the picture.",
        "remedy": "Lay one beside it.",
    }
    assert (document["section"], document["properties"]) == (None, {})
    assert document["photo"]["sha256"] == photo.sha256
    assert list(document) == list(measured_documents(one_member())[0])


def test_text_is_deterministic_exact_and_strict() -> None:
    first, second = (to_text(measured_documents(one_member())[0]) for _ in range(2))
    assert first == second
    value = one_member().members[0].quantities["principal_angle"].std
    assert json.loads(first)["properties"]["principal_angle"]["std"] == value
    line = to_text(measured_documents(one_member())[0], one_line=True)
    assert line.count("\n") == 1
    assert json.loads(line) == json.loads(first)


def test_a_figure_that_is_not_finite_becomes_null() -> None:
    measurement = one_member()
    member = measurement.members[0]
    broken = replace(member.quantities["area"], std=float("nan"), interval95=(float("-inf"), float("inf")))
    changed = replace(measurement, members=(replace(member, quantities={"area": broken}),))
    (document,) = measured_documents(changed)
    read = json.loads(to_text(document))["properties"]["area"]
    assert (read["std"], read["interval95"]) == (None, [None, None])


def test_a_name_that_cannot_be_written_does_not_stop_the_document() -> None:
    measurement = one_member()
    odd = replace(measurement, photo=replace(measurement.photo, path=Path("caf\udce9\n.jpg")))
    assert json.loads(to_text(measured_documents(odd)[0]))["photo"]["file"] == "caf??.jpg"


def test_numbered_names() -> None:
    assert numbered("result", ".json", 1, 1) == "result.json"
    assert [numbered("result", ".json", n, 2) for n in (1, 2)] == ["result-1.json", "result-2.json"]
