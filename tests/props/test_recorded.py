"""Results of measurements read again: the outline with its uncertainty, refused and damaged ones told apart."""

import copy
import json
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from cutface.cli.files.entries import section_entry, uncertainty_entry
from cutface.props.errors import FileError, OutlineError
from cutface.props.properties import section_properties
from cutface.props.readers import read_recorded, read_section
from cutface.props.section import Material, Part, Section
from cutface.props.uncertainty import EdgeNoise, Mode, OutlineUncertainty, quantify

STEEL = Material("steel", 210000.0, 7850.0, 275.0)
SECTION = Section(
    (
        Part([[0, 0], [50 / 3, 0], [50 / 3, 100], [0, 100]], ([[4, 10], [4, 60], [9, 60], [9, 10]],), STEEL),
        Part([[50 / 3, 0], [60, 0], [60, 100], [50 / 3, 100]]),
    )
)
COUNT = len(SECTION.vertices)
UNCERTAINTY = OutlineUncertainty(
    (
        Mode("print scale", 0.003 * SECTION.vertices),
        Mode("edge location (common)", np.tile([0.0123456, -0.02], (COUNT, 1)), "rectangular"),
    ),
    EdgeNoise(np.full(COUNT, 0.02), np.full(COUNT, 1.5)),
    np.full(COUNT, 0.07),
    {"area": 0.4},
)


@pytest.fixture
def document() -> dict[str, Any]:
    return {
        "schema": "cutface/measurement/1",
        "status": "measured",
        "photo": {"file": "post.jpg"},
        "section": section_entry(SECTION),
        "uncertainty": uncertainty_entry(UNCERTAINTY),
    }


def written(tmp_path: Path, document: Any) -> Path:
    path = tmp_path / "result.json"
    path.write_text(json.dumps(document), encoding="utf-8")
    return path


def test_outline_and_uncertainty_come_back(tmp_path: Path, document: dict[str, Any]) -> None:
    found = read_recorded(written(tmp_path, document))
    assert found is not None
    assert np.array_equal(found.section.vertices, SECTION.vertices)
    assert [part.material for part in found.section.parts] == [STEEL, None]
    assert (found.photo, found.notices) == ("post.jpg", ())
    assert found.uncertainty is not None
    values = section_properties(SECTION)
    again, first = (quantify(SECTION, values, u) for u in (found.uncertainty, UNCERTAINTY))
    for name, quantity in first.items():
        assert again[name].std == pytest.approx(quantity.std, rel=1e-4), name
        assert again[name].interval95 == pytest.approx(quantity.interval95, rel=1e-5), name
        assert again[name].pixel_bounds == pytest.approx(quantity.pixel_bounds), name
        causes = [[line.source for line in q.budget if line.share > 1e-9] for q in (again[name], quantity)]
        assert causes[0] == causes[1], name


def test_other_json_is_no_result(tmp_path: Path) -> None:
    assert read_recorded(written(tmp_path, {"type": "Point", "coordinates": [0, 0]})) is None
    assert read_recorded(written(tmp_path, [1, 2])) is None
    assert read_recorded(tmp_path / "section.wkt") is None


def test_a_measured_result_without_uncertainty_says_so(tmp_path: Path, document: dict[str, Any]) -> None:
    del document["uncertainty"]
    found = read_recorded(written(tmp_path, document))
    assert found is not None
    assert found.uncertainty is None
    assert [notice.code for notice in found.notices] == ["uncertainty-not-recorded"]
    found = read_recorded(written(tmp_path, document | {"status": "calculated"}))
    assert found is not None
    assert found.notices == ()


def test_a_refused_result_tells_why(tmp_path: Path) -> None:
    refusal = {"code": "no-face", "message": "No face is found in the picture.", "remedy": "Point at it."}
    path = written(tmp_path, {"schema": "cutface/measurement/1", "status": "refused", "refusal": refusal})
    for read in (read_recorded, read_section):
        with pytest.raises(FileError, match="No face is found in the picture") as caught:
            read(path)
        assert (caught.value.code, caught.value.remedy) == ("refused-result", "Point at it.")


def damaged(document: dict[str, Any], *way: Any) -> dict[str, Any]:
    """The document with the entry at the end of a way of keys set to the last word of it."""
    found = copy.deepcopy(document)
    *keys, last, value = way
    inner: Any = found
    for key in keys:
        inner = inner[key]
    inner[last] = value
    return found


@pytest.mark.parametrize(
    "way",
    [
        ("section", 5),
        ("section", "parts", 5),
        ("section", "parts", []),
        ("section", "unit", "in"),
        ("section", "parts", 0, "shell", [[0, 0], [1, 0]]),
        ("section", "parts", 0, "shell", 0, ["a", 1]),
        ("section", "parts", 0, "shell", 0, [1, 2, 3]),
        ("section", "parts", 0, "material", "elastic_modulus", "stiff"),
        ("uncertainty", []),
        ("uncertainty", "unit", "in"),
        ("uncertainty", "modes", 0, "x", [1]),
        ("uncertainty", "modes", 0, "shape", "triangular"),
        ("uncertainty", "noise", "std", [-1] * COUNT),
        ("uncertainty", "noise", "correlation_length", [0] * COUNT),
        ("uncertainty", "edge_bound", "wide"),
        ("uncertainty", "simplification", 3),
    ],
)
def test_a_damaged_result_is_refused(tmp_path: Path, document: dict[str, Any], way: tuple[Any, ...]) -> None:
    with pytest.raises(FileError) as caught:
        read_recorded(written(tmp_path, damaged(document, *way)))
    assert caught.value.code == "damaged-result"


def test_crossing_outlines_are_refused(tmp_path: Path, document: dict[str, Any]) -> None:
    bow_tie = [[0, 0], [10, 0], [0, 10], [10, 20]]
    with pytest.raises(OutlineError, match="crosses itself"):
        read_recorded(written(tmp_path, damaged(document, "section", "parts", 0, "shell", bow_tie)))
