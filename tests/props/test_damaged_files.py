"""Files damaged at random: whatever a reader meets, it gives a section or an error that says what to do."""

import json
import random
import re
import warnings
from collections.abc import Callable
from io import StringIO
from pathlib import Path
from typing import Any

import ezdxf
import numpy as np
import pytest
from cutface.cli.files.entries import section_entry, uncertainty_entry
from cutface.props.errors import CutfaceError
from cutface.props.readers import read_recorded, read_section
from cutface.props.section import Material, Part, Section
from cutface.props.uncertainty import EdgeNoise, Mode, OutlineUncertainty
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

SVG = (
    '<svg xmlns="http://www.w3.org/2000/svg" width="120mm" height="80mm" viewBox="0 0 120 80">'
    '<g transform="translate(2,3) rotate(10)"><path d="M0 0 h100 v50 H0 z M10 10 c 5 5 10 5 15 0 s 5 5 10 10 '
    'q 3 3 6 1 t 2 2 a 4 5 30 1 0 10 10 z"/></g><rect x="60" y="60" width="10" height="10" rx="2"/>'
    '<circle cx="5" cy="70" r="3"/><polygon points="1,1 2,2 3,1"/><use href="#a"/><line id="a" x2="3" y2="4"/></svg>'
)
WKT = "MULTIPOLYGON (((0 0, 50 0, 50 90, 0 90, 0 0), (5 5, 5 20, 20 20, 5 5)), ((70 0, 99 0, 99 90, 70 0)))"
CSV = "loop,x_mm,y_mm\n1,0,0\n1,50,0\n1,50,20\n1,0,20\n2,5,5\n2,9,5\n2,9,9\n"
POINTS = "0 0\n50 0\n50 20,5\n\n10 10\n20 10\n20 15\n"
GEOJSON = {
    "type": "FeatureCollection",
    "unit": "mm",
    "features": [
        {
            "type": "Feature",
            "properties": {"layer": "oak", "material": "oak", "elastic_modulus": 11000},
            "geometry": {"type": "Polygon", "coordinates": [[[0, 0], [50, 0], [50, 50], [0, 0]]]},
        },
        {
            "type": "Feature",
            "properties": {},
            "geometry": {"type": "MultiPolygon", "coordinates": [[[[60, 0], [70, 0], [70, 9], [60, 0]]]]},
        },
    ],
}
SECTION = Section((Part([[0, 0], [50, 0], [50, 90], [0, 90]], ([[4, 4], [4, 9], [9, 9]],), Material("oak", 11000.0)),))
RESULT = {
    "schema": "cutface/measurement/1",
    "status": "measured",
    "refusal": {"code": "no-face", "message": "No face.", "remedy": "Point at it."},
    "photo": {"file": "post.jpg"},
    "source": {"photo": {"file": "post.jpg"}},
    "section": section_entry(SECTION),
    "uncertainty": uncertainty_entry(
        OutlineUncertainty(
            (Mode("print scale", 0.01 * SECTION.vertices),), EdgeNoise(np.full(7, 0.1), np.ones(7)), np.full(7, 0.1)
        )
    ),
}
SCRAPS = ["", " ", "\n", '"', "[", "}", "(", ">", "null", "-", "0", "1e308", "-1e999", "nan", "inf", "EMPTY", "\0", "é"]
SCRAPS += ["LINESTRING", "GEOMETRYCOLLECTION", "POINT", "z", "A", "%", "9" * 25]
VALUES: list[Any] = [
    None,
    5,
    -1,
    [],
    {},
    "x",
    1e300,
    float("nan"),
    True,
    [[]],
    [1, 2],
    {"a": 1},
    10**400,
    "nm",
    "refused",
]


def scratched(text: str, draw: random.Random) -> str:
    """Text with a piece lost, repeated or replaced, or a number replaced."""
    place = draw.randrange(len(text) + 1)
    end = min(len(text), place + draw.choice([0, 1, 2, 5, 20, 100]))
    numbers = list(re.finditer(r"-?\d+\.?\d*", text))
    kind = draw.randrange(5)
    if kind == 0 and numbers:
        number = draw.choice(numbers)
        return text[: number.start()] + draw.choice(SCRAPS) + text[number.end() :]
    if kind == 1:
        return text[:place] + 3 * text[place:end] + text[end:]
    return text[:place] + (draw.choice(SCRAPS) if kind < 4 else "") + (text[end:] if kind < 4 else "")


def misfilled(document: Any, draw: random.Random) -> str:
    """A JSON document with an entry lost or replaced, anywhere in it."""
    document = json.loads(json.dumps(document))
    node = document
    while node:
        key = draw.choice(list(node) if isinstance(node, dict) else range(len(node)))
        if isinstance(node[key], dict | list) and node[key] and draw.random() < 0.75:
            node = node[key]
        elif draw.random() < 0.2:
            del node[key]
            break
        else:
            node[key] = draw.choice(VALUES)
            break
    return json.dumps(document)


def dxf() -> str:
    document = ezdxf.new()
    document.units = 4
    space = document.modelspace()
    space.add_lwpolyline([(0, 0, 0, 0, 0.2), (100, 0), (100, 50), (0, 50)], close=True)
    space.add_circle((30, 25), 10)
    space.add_arc((60, 25), 8, 0, 180)
    space.add_line((52, 25), (68, 25))
    space.add_ellipse((80, 25), (6, 0), 0.5)
    space.add_spline([(10, 10), (12, 14), (15, 12), (10, 10)])
    stream = StringIO()
    document.write(stream)
    return stream.getvalue()


DXF = dxf().split("\n")
ENTITIES = next(i for i, line in enumerate(DXF) if line.strip() == "ENTITIES")


def redrawn(draw: random.Random) -> str:
    """The drawing with the values of some entities lost or replaced."""
    lines = list(DXF)
    for _ in range(draw.choice([1, 1, 2, 4])):
        place = draw.randrange(ENTITIES, len(lines))
        if draw.random() < 0.8:
            lines[place] = draw.choice([*SCRAPS, "5", "70", "ARC", "SPLINE", "LWPOLYLINE", "ELLIPSE", "1e-300"])
        else:
            del lines[place : place + 2]
    return "\n".join(lines)


MAKERS: dict[str, Callable[[random.Random], str]] = {
    "a.svg": lambda draw: scratched(SVG, draw),
    "a.wkt": lambda draw: scratched(WKT, draw),
    "a.csv": lambda draw: scratched(CSV, draw),
    "a.txt": lambda draw: scratched(POINTS, draw),
    "a.dxf": redrawn,
    "a.geojson": lambda draw: misfilled(GEOJSON, draw),
    "b.geojson": lambda draw: scratched(json.dumps(GEOJSON), draw),
    "a.json": lambda draw: misfilled(RESULT, draw),
    "b.json": lambda draw: scratched(json.dumps(RESULT), draw),
}


@pytest.mark.parametrize("name", MAKERS)
def test_no_damage_ends_in_anything_but_a_section_or_a_message(
    name: str, tmp_path_factory: pytest.TempPathFactory
) -> None:
    path = tmp_path_factory.mktemp("damaged") / name
    ends: set[str] = set()

    @settings(
        max_examples=60 if name == "a.dxf" else 150,
        deadline=None,
        derandomize=True,
        suppress_health_check=list(HealthCheck),
    )
    @given(st.integers(0, 2**32))
    def damage_and_read(seed: int) -> None:
        draw = random.Random(seed)
        path.write_text(MAKERS[name](draw), encoding="utf-8")
        repair = draw.random() < 0.5
        for read in (lambda: read_section(path, repair=repair), lambda: read_recorded(path)):
            try:
                found = read()
            except CutfaceError as error:
                ends.add(error.code)
                assert error.message
                assert error.remedy
            else:
                ends.add("read")
                assert found is None or isinstance(found[0] if isinstance(found, tuple) else found.section, Section)

    with warnings.catch_warnings():
        # A warning of the arithmetic would reach the person's terminal.
        warnings.simplefilter("error", RuntimeWarning)
        damage_and_read()
    assert ends - {"read"}, "the damage does no harm"
    assert "read" in ends, "the damage leaves nothing whole"


def test_an_entry_named_section_does_not_make_a_result(tmp_path: Path) -> None:
    path = tmp_path / "a.json"
    path.write_text('{"section": {"parts": 5}}', encoding="utf-8")
    with pytest.raises(CutfaceError) as caught:
        read_section(path)
    assert caught.value.code == "not-geojson"


@pytest.mark.parametrize("path", ["M0 0 h100 v50 z M1 1 a 1e12 1e12 0 0 1 1e12 5", "M0 0 c 1e200 0 0 1e200 5 5 z"])
def test_curves_without_bound_end_in_a_message(tmp_path: Path, path: str) -> None:
    file = tmp_path / "a.svg"
    file.write_text(
        f'<svg xmlns="http://www.w3.org/2000/svg" width="9mm" viewBox="0 0 9 9"><path d="{path}"/></svg>', "utf-8"
    )
    with pytest.raises(CutfaceError):
        read_section(file)
