"""Faces high above the sheet: the goal of accuracy on a few views; the benchmark itself takes many."""

from __future__ import annotations

import importlib.util
import sys
from pathlib import Path
from types import ModuleType

import numpy as np
import pytest
from camera_simulator import random_scene


@pytest.fixture(scope="module")
def benchmark() -> ModuleType:
    path = Path(__file__).with_name("plane_benchmark.py")
    spec = importlib.util.spec_from_file_location("plane_benchmark", path)
    assert spec is not None and spec.loader is not None
    module = importlib.util.module_from_spec(spec)
    sys.modules[spec.name] = module
    spec.loader.exec_module(module)
    return module


def areas(benchmark: ModuleType, name: str, count: int, **drawn) -> np.ndarray:
    """(n, 2) relative error of the area and error over standard uncertainty of some views."""
    found = []
    for number in range(count):
        rng = np.random.default_rng([5, number])
        height = float(rng.uniform(*benchmark.HEIGHTS_MM))
        group = benchmark.GROUPS[name]
        outcome = benchmark.measured(
            random_scene(900 + number, "sheet", thickness_mm=height, **group.drawn, **drawn), group, rng
        )
        found.append((outcome.relative, outcome.ratio))
    return np.array(found)


@pytest.mark.parametrize(("name", "most_percent"), [("file", 0.25), ("calibration", 0.03)])
def test_the_height_of_a_face_leaves_little_in_its_area(benchmark: ModuleType, name: str, most_percent: float) -> None:
    errors = areas(benchmark, name, 20)
    assert 100 * np.median(np.abs(errors[:, 0])) < most_percent
    assert np.abs(errors[:, 1]).max() < 3.5


def test_a_wrong_focal_length_in_the_file_does_harm_that_a_calibration_undoes(benchmark: ModuleType) -> None:
    wrong = {"focal_error": 0.06, "tilt_deg": 3.0}
    assert 100 * np.median(np.abs(areas(benchmark, "file", 8, **wrong)[:, 0])) > 0.2
    assert 100 * np.median(np.abs(areas(benchmark, "calibration", 8, **wrong)[:, 0])) < 0.03
