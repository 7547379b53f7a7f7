"""End to end: pictures whose truth is known against what is measured in them and the intervals stated.

Simulated pictures draw their true scale, focal length, offset and light from the distributions that the budget
assumes, so an error beyond four standard uncertainties is no chance (one in sixteen thousand).
"""

from __future__ import annotations

import io
import tempfile
from collections.abc import Mapping
from dataclasses import replace
from functools import cache
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from camera_simulator import Scene, encoded_file, random_scene, render, write
from cutface.props.properties import section_properties
from cutface.props.result import Quantity
from cutface.vision.measure import Measurement, Member, measure
from cutface.vision.photo import Photo, load_photo
from measured_member import right_about, sensible_intervals
from shapely import Polygon
from simulated_shapes import channel, extrusion, rectangular_hollow, timber


def stated(scene: Scene) -> dict[str, Any]:
    """What a careful person types."""
    if scene.kind == "scan":
        return {}
    options: dict[str, Any] = {"face_height": scene.stated["thickness_mm"]}
    if "check_mm" in scene.stated:
        options |= {"check_lengths": scene.stated["check_mm"], "check_length_std": scene.stated["check_std_mm"]}
    return options


SHEET = {"megapixels": 2.0, "check_std_mm": 0.05, "board": "A4"}
SCENES: dict[str, tuple[str, Mapping[str, Any]]] = {
    "flush channel": ("sheet", {**SHEET, "thickness_mm": 0.0, "section": channel(150, 65, 8, 11, 10), "look": "rust"}),
    "flush hollow": (
        "sheet",
        {**SHEET, "thickness_mm": 0.0, "section": rectangular_hollow(120, 80, 7, 12), "look": "steel"},
    ),
    "solid slice": (
        "sheet",
        {**SHEET, "thickness_mm": 14.0, "section": timber(80, 140, (25, 30), 1.0), "look": "wood"},
    ),
    "hollow slice": (
        "sheet",
        {**SHEET, "thickness_mm": 18.0, "section": rectangular_hollow(130, 90, 9, 15), "look": "rust"},
    ),
    "joist among cards": (
        "cards",
        {"megapixels": 2.0, "check_std_mm": 0.05, "family": "timber", "cards": 4, "background": "plaster"},
    ),
    "beam among cards": (
        "cards",
        {"megapixels": 2.0, "check_std_mm": 0.05, "family": "rolled_i", "cards": 2, "background": "plaster"},
    ),
    "scanned slices": (
        "scan",
        {"dpi": (300.0, 300.0), "count": 3, "section": extrusion(34, 24, 1.8, 2, 5), "look": "aluminium"},
    ),
}


def photograph(scene: Scene) -> Photo:
    """The scene as a file gives it back."""
    suffix = ".png" if scene.kind == "scan" else ".jpg"
    with tempfile.TemporaryDirectory() as folder:
        return load_photo(write(scene, Path(folder) / f"picture{suffix}"))


@cache
def shot(name: str, seed: int) -> tuple[Scene, Photo]:
    kind, options = SCENES[name]
    scene = random_scene(seed, kind, **options)
    return scene, photograph(scene)


def measured(name: str, seed: int, **options: Any) -> Measurement:
    """What is measured where a person states more, or less, than a careful one would."""
    scene, photo = shot(name, seed)
    return measure(photo, **(stated(scene) | options))


@cache
def taken(name: str, seed: int) -> tuple[Scene, Measurement]:
    return shot(name, seed)[0], measured(name, seed)


@pytest.mark.parametrize(
    ("name", "seed"), [*((name, 1) for name in SCENES), ("solid slice", 2), ("hollow slice", 2), ("scanned slices", 2)]
)
def test_simulated_pictures(name: str, seed: int) -> None:
    scene, result = taken(name, seed)
    assert result.reference.kind == scene.kind
    assert [m.number for m in result.members] == list(range(1, len(scene.members) + 1))
    left = list(scene.members)
    for member in result.members:
        # Members of a scan come in reading order; the simulated ones lie in rows from below.
        centre = member.section.vertices.mean(axis=0)
        true = (
            min(left, key=lambda m: np.linalg.norm(m.section.vertices.mean(axis=0) - centre)) if left[1:] else left[0]
        )
        left.remove(true)
        right_about(member, true.section)
        sensible_intervals(member, 0.02)


def test_a_joist_in_its_pocket_before_brickwork() -> None:
    scene = random_scene(
        1, "cards", megapixels=2.5, check_std_mm=0.05, family="timber", cards=4, gap_mm=4.0, background="brickwork"
    )
    (member,) = measure(photograph(scene), **stated(scene)).members
    right_about(member, scene.members[0].section)


def test_holes_of_an_aluminium_profile_in_uneven_light() -> None:
    scene = random_scene(4, "sheet", megapixels=2.5, check_std_mm=0.05, thickness_mm=0.0)
    (member,) = measure(photograph(scene), **stated(scene)).members
    right_about(member, scene.members[0].section)


@pytest.mark.parametrize(("name", "seed"), [("flush channel", 1), ("flush hollow", 1), ("scanned slices", 2)])
def test_extreme_fibres(name: str, seed: int) -> None:
    scene, result = taken(name, seed)
    true = section_properties(scene.members[0].section)
    member = min(result.members, key=lambda m: abs(m.quantities["area"].value - true["area"]))
    right_about(member, scene.members[0].section, ("section_modulus_major", "section_modulus_minor"))


@pytest.mark.parametrize("name", ["flush channel", "flush hollow", "hollow slice"])
def test_outlines_are_no_longer_than_they_are(name: str) -> None:
    scene, result = taken(name, 1)
    for member, true in zip(result.members, scene.members, strict=True):
        right_about(member, true.section, ("perimeter",))


@pytest.mark.parametrize("name", ["flush channel", "solid slice"])
def test_a_sheet_tells_where_the_face_lies(name: str) -> None:
    """In the sheet's own axes, true mm from the checker's lower left corner."""
    scene, result = taken(name, 1)
    right_about(result.members[0], scene.members[0].section, ("second_moment_x", "second_moment_y", "product_moment"))
    found, true = (section_properties(m.section) for m in (result.members[0], scene.members[0]))
    # A centre of area lies better than any edge; the print's own place is scaled about the sheet's corner.
    assert found["centroid_x"] == pytest.approx(true["centroid_x"], abs=0.5)
    assert found["centroid_y"] == pytest.approx(true["centroid_y"], abs=0.5)


@pytest.mark.parametrize("name", ["hollow slice", "joist among cards", "scanned slices"])
def test_the_outline_on_the_picture(name: str) -> None:
    """Traces are the picture of the section, loop by loop; the section's vertices lie on them."""
    _, result = taken(name, 1)
    for member in result.members:
        assert len(member.trace_px) == len(member.section.loops) == len(member.poorly_located)
        for trace, lost, loop in zip(member.trace_px, member.poorly_located, member.section.loops, strict=True):
            assert len(trace) == len(lost)
            edge = Polygon(trace)
            assert Polygon(result.to_pixels(loop)).symmetric_difference(edge).area < 0.5 * edge.length


def test_the_same_photo_gives_the_same_figures() -> None:
    scene, first = taken("hollow slice", 1)
    again = measure(photograph(scene), **stated(scene))
    assert again.members[0].quantities == first.members[0].quantities
    assert np.array_equal(again.members[0].section.vertices, first.members[0].section.vertices)


@cache
def small_picture() -> tuple[Scene, np.ndarray]:
    scene = random_scene(1, "sheet", **{**SCENES["flush channel"][1], "megapixels": 1.2})
    return scene, render(scene)


def test_orientation_in_the_file_does_not_matter(tmp_path: Path) -> None:
    """Stored in any of four turns with the tag that turns it upright: the same pixels, the same figures."""
    scene, picture = small_picture()
    results = []
    for tag in (1, 3, 6, 8):
        path = tmp_path / f"turned{tag}.png"
        path.write_bytes(encoded_file(replace(scene, orientation_tag=tag), picture, ".png"))
        results.append(measure(load_photo(path), **stated(scene)).members[0].quantities)
    assert results[1:] == results[:1] * 3


def test_a_photo_held_sideways_measures_the_same_face(tmp_path: Path) -> None:
    """Turned pixels, no tag: the sheet tells its own axes."""
    from PIL import Image

    scene, picture = small_picture()
    found = []
    for quarters in (0, 1):
        path = tmp_path / f"held{quarters}.png"
        exif = Image.open(io.BytesIO(encoded_file(replace(scene, orientation_tag=1), picture, ".png"))).getexif()
        Image.fromarray(np.ascontiguousarray(np.rot90(picture, quarters))).save(path, exif=exif)
        found.append(measure(load_photo(path), **stated(scene)).members[0].quantities)
    for name in ("area", "second_moment_x", "second_moment_y", "product_moment"):
        assert abs(found[0][name].value - found[1][name].value) < 0.2 * found[0][name].std


def test_mass_per_metre() -> None:
    _, plain = taken("flush channel", 1)
    assert "mass_per_metre" not in plain.members[0].quantities
    mass = measured("flush channel", 1, density=7850.0).members[0].quantities["mass_per_metre"]
    area = plain.members[0].quantities["area"]
    assert mass.value == pytest.approx(7850e-6 * area.value, rel=1e-9)
    assert mass.std == pytest.approx(7850e-6 * area.std, rel=1e-6)


def test_a_seed_picks_its_face() -> None:
    _, whole = taken("scanned slices", 1)
    second = whole.members[1]
    # A point on the metal: the middle of the second slice's widest wall.
    mark = scene_point(second)
    (picked,) = measured("scanned slices", 1, seeds=[mark]).members
    assert picked.quantities["area"].value == pytest.approx(second.quantities["area"].value, rel=1e-6)


def scene_point(member: Member) -> tuple[float, float]:
    """A photo pixel well inside the face."""
    face = Polygon(member.trace_px[0], member.trace_px[1:])
    inner = face
    while not (smaller := inner.buffer(-0.5)).is_empty:
        inner = smaller
    point = inner.representative_point()
    return point.x, point.y


# Statements widen


def part_of(quantity: Quantity, source: str) -> float:
    """Standard uncertainty of a quantity that one source makes up."""
    return sum(part.std for part in quantity.budget if part.source == source)


def test_unchecked_prints_and_unsure_heights_widen_the_interval() -> None:
    _, checked = taken("solid slice", 1)
    narrow = checked.members[0].quantities["area"]
    unchecked = measured("solid slice", 1, check_lengths=None, check_length_std=None)
    assert "print-unchecked" in [n.code for n in unchecked.notices]
    assert "print-unchecked" not in [n.code for n in checked.notices]
    wide = unchecked.members[0].quantities["area"]
    # Two axes of 0.3 % each, independent, against 0.05 mm over 140 mm.
    assert part_of(wide, "print scale") == pytest.approx(0.003 * np.sqrt(2) * wide.value, rel=0.02)
    assert part_of(narrow, "print scale") == pytest.approx(0.05 / 140 * np.sqrt(2) * narrow.value, rel=0.02)
    assert wide.std > 1.2 * narrow.std
    unsure = measured("solid slice", 1, face_height_std=3.0).members[0].quantities["area"]
    distance = float(checked.reference.details["camera_height_mm"]) - 14.0  # type: ignore[arg-type]
    assert unsure.std**2 - narrow.std**2 == pytest.approx((2 * 3.0 / distance * unsure.value) ** 2, rel=0.1)


def test_an_unstated_height_is_told() -> None:
    told = measured("flush channel", 1, face_height=None)
    assert "face-height-assumed" in [n.code for n in told.notices]


def test_one_card_is_less_than_two() -> None:
    scene, two = taken("beam among cards", 1)
    x, y = scene_point(two.members[0])
    alone = measure(photograph(replace(scene, prints=scene.prints[:1])), **stated(scene), seeds=[(x, y)])
    assert "one-card" in [n.code for n in alone.notices]
    assert "one-card" not in [n.code for n in two.notices]
    area, both = alone.members[0].quantities["area"], two.members[0].quantities["area"]
    assert area.std > both.std
    causes = ("reference corners", "distortion")
    apart, together = (np.hypot(*(part_of(q, cause) for cause in causes)) for q in (area, both))
    assert apart > 2 * together
    right_about(alone.members[0], scene.members[0].section)
