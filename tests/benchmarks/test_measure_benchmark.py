"""The benchmark's own arithmetic: exact moments, the way back from pixels, what counts as silent."""

from __future__ import annotations

import importlib.util
import sys
from pathlib import Path
from types import ModuleType

import numpy as np
import pytest
from camera_simulator import random_scene
from cutface.props.section import Part, Section
from PIL import Image
from simulated_shapes import flitch, rectangular_hollow


@pytest.fixture(scope="module")
def benchmark() -> ModuleType:
    path = Path(__file__).with_name("measure_benchmark.py")
    spec = importlib.util.spec_from_file_location("measure_benchmark", path)
    assert spec is not None and spec.loader is not None
    module = importlib.util.module_from_spec(spec)
    sys.modules[spec.name] = module
    spec.loader.exec_module(module)
    return module


def test_moments_of_a_turned_hollow_rectangle(benchmark: ModuleType) -> None:
    hollow = rectangular_hollow(100.0, 60.0, 5.0, 0.0)
    flat = benchmark.moments(hollow)
    assert flat["area"] == pytest.approx(100 * 60 - 90 * 50)
    assert flat["second_moment_x"] == pytest.approx((60 * 100**3 - 50 * 90**3) / 12)
    assert flat["second_moment_y"] == pytest.approx((100 * 60**3 - 90 * 50**3) / 12)
    assert (flat["width"], flat["depth"]) == pytest.approx((60.0, 100.0))
    leaning = benchmark.moments(benchmark.turned(hollow, 0.4))
    assert leaning["second_moment_major"] == pytest.approx(flat["second_moment_x"])
    assert leaning["second_moment_minor"] == pytest.approx(flat["second_moment_y"])
    assert leaning["second_moment_x"] < flat["second_moment_x"]
    far = hollow.with_vertices(np.add(hollow.vertices, (4000.0, -9000.0)))
    assert benchmark.moments(far)["second_moment_x"] == pytest.approx(flat["second_moment_x"], rel=1e-10)


def test_touching_parts_are_joined(benchmark: ModuleType) -> None:
    whole = benchmark.joined(flitch(50.0, 200.0, 10.0))
    assert len(whole.parts) == 1
    assert benchmark.moments(whole)["area"] == pytest.approx(110 * 200)


@pytest.mark.parametrize("kind", ["sheet", "cards", "scan"])
def test_pixels_lead_back_to_their_places(benchmark: ModuleType, kind: str) -> None:
    options = {"megapixels": 2.0} if kind != "scan" else {"wobble_mm": 0.0}
    scene = random_scene(5, kind, **options)
    places = np.random.default_rng(0).uniform(5, 60, (40, 2))
    pixels = scene.view.project(np.column_stack([places, np.full(40, 3.0)]))
    assert np.abs(benchmark.places_of_pixels(scene, pixels, 3.0) - places).max() < 1e-6


def test_turn_between_frames(benchmark: ModuleType) -> None:
    section = Section((Part(np.array([(0.0, 0.0), (50.0, 0.0), (50.0, 20.0), (10.0, 40.0)])),))
    moved = benchmark.turned(section, 0.7).vertices * 1.01 + (30.0, -8.0)
    assert benchmark.turn_between(section.vertices, moved) == pytest.approx(0.7)


def test_silent_failure_is_wrong_and_without_warning(benchmark: ModuleType) -> None:
    wrong = {"area": (0.1, 3.5, False)}
    assert benchmark.Outcome(1, None, wrong).silent
    assert not benchmark.Outcome(1, None, wrong, ("outline-bridged",)).silent
    assert not benchmark.Outcome(1, None, {"area": (0.1, 2.5, False)}).silent
    assert not benchmark.Outcome(1, "low-contrast").silent


def test_a_reference_at_hand_is_drawn_measured_and_judged(benchmark: ModuleType, tmp_path: Path) -> None:
    group = benchmark.GROUPS["reference tile"]
    scene = benchmark.draw_at_hand(group, 5, 1.0)
    path = tmp_path / "tile.png"
    Image.fromarray(scene.photo.pixels).save(path)
    options = {"references": scene.texts, "seeds": (scene.seed_px,), "focal_length_35mm": 28.0}
    (outcome,) = benchmark.judge_at_hand(scene, path, options)
    assert outcome.refusal is None
    assert all(abs(ratio) < 4 for _, ratio, _ in outcome.errors.values())
    (refused,) = benchmark.judge_at_hand(scene, path, options | {"references": ("rectangle size=A4",)})
    assert refused.refusal == "reference-contradicts"


def test_every_hardship_has_its_turn_with_every_kind(benchmark: ModuleType) -> None:
    group = benchmark.GROUPS["hard"]
    count = len(group.drawn["hard"])
    drawn = [benchmark.draw_at_hand(group, seed, 0.1).drawn for seed in (0, 1, count, 4 * count)]
    assert [d["kind"] for d in drawn] == ["tile", "tile", "chessboard", "tile"]
    assert drawn[0]["hard"] == drawn[2]["hard"] != drawn[1]["hard"]
