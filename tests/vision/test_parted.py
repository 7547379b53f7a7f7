"""Faces of several materials told apart: in the sample picture of a flitch beam, and in small painted ones."""

import json
from dataclasses import replace
from pathlib import Path

import cv2
import numpy as np
import pytest
from cutface.props.composite import quantify_regions, transformed_section
from cutface.props.errors import Refusal, UsageError
from cutface.props.integrals import boundary
from cutface.props.loss import quantify_loss, uniform_loss
from cutface.props.properties import section_properties
from cutface.props.section import Material, Part, Section
from cutface.props.uncertainty import EdgeNoise, Mode, OutlineUncertainty, quantify
from cutface.vision.colour_profile import tone_curve
from cutface.vision.face import Region
from cutface.vision.light import Light
from cutface.vision.measure import Member, measure
from cutface.vision.parted import PartedFace, part_face
from cutface.vision.photo import load_photo
from cutface.vision.references.reference import Reference
from cutface.vision.regions import Regions
from shapely import distance, points
from simulated_raster import coverage, loops_to_segments

SAMPLE = Path(__file__).resolve().parents[2] / "sample_images" / "flitch_beam_cards.jpg"
TIMBER, STEEL = Material("timber", 11000.0), Material("steel", 210000.0)
# One pixel on each: timber, plate, timber.
PARTS = ((1200.0, 1800.0), (1540.0, 1800.0), (1760.0, 1800.0))
CHECK = (140.0 * 0.999, 140.0 * 1.0005)


@pytest.fixture(scope="module")
def flitch() -> Member:
    (member,) = measure(load_photo(SAMPLE), check_lengths=CHECK, face_height=0.0, parts=PARTS).members
    return member


def truth() -> Section:
    document = json.loads(SAMPLE.with_suffix(".truth.json").read_text("utf-8"))
    parts = document["members"][0]["section"]["parts"]
    return Section(tuple(Part(part["shell"], part["holes"]) for part in parts))


def with_moduli(section: Section) -> Section:
    materials = (TIMBER, STEEL, TIMBER)
    return Section(tuple(replace(p, material=m) for p, m in zip(section.parts, materials, strict=True)))


def test_parts_of_the_flitch_beam_are_the_true_ones(flitch: Member) -> None:
    found = quantify_regions(with_moduli(flitch.section), flitch.uncertainty)
    for region, part in zip(found, truth().parts, strict=True):
        true = section_properties(Section((part,)))["area"]
        assert abs(region["area"].value - true) < 3.0 * region["area"].std
        assert region["area"].std < 0.01 * true
        assert "joint location (common)" in [line.source for line in region["area"].budget]
    # Drawn on the measured scale, the plate is as thick as the true one to a tenth of a millimetre.
    scale = [section_properties(section)["area"] for section in (flitch.section, truth())]
    plate = [section_properties(Section((section.parts[1],)))["area"] for section in (flitch.section, truth())]
    assert plate[0] / scale[0] == pytest.approx(plate[1] / scale[1], rel=0.1 / 12.0)


def test_neighbours_neither_gape_nor_overlap(flitch: Member) -> None:
    joined = flitch.section.joined()
    assert len(joined.geoms) == 1
    assert len(joined.geoms[0].interiors) == 0
    assert joined.area == pytest.approx(sum(section_properties(Section((p,)))["area"] for p in flitch.section.parts))
    assert [joint.regions for joint in transformed_section(with_moduli(flitch.section)).interfaces] == [(0, 1), (1, 2)]
    # The figures of the face as one do not feel the joints.
    values = section_properties(flitch.section)
    again = quantify(flitch.section, values, flitch.uncertainty)
    for name in ("area", "perimeter", "second_moment_x", "plastic_modulus_y"):
        assert again[name].value == pytest.approx(flitch.quantities[name].value, rel=1e-9), name
        assert again[name].std == pytest.approx(flitch.quantities[name].std, rel=0.05), name
    assert again["area"].pixel_bounds == pytest.approx(flitch.quantities["area"].pixel_bounds, rel=1e-3)


def test_what_moves_a_joint_gives_to_one_part_what_it_takes_from_the_other(flitch: Member) -> None:
    for mode in flitch.uncertainty.modes:
        if mode.source != "joint location (common)":
            continue
        moved = flitch.section.with_vertices(flitch.section.vertices + mode.displacement)
        changes = np.array(
            [
                section_properties(Section((after,)))["area"] - section_properties(Section((before,)))["area"]
                for after, before in zip(moved.parts, flitch.section.parts, strict=True)
            ]
        )
        assert np.abs(changes).max() > 5.0
        assert abs(changes.sum()) < 0.2 * np.abs(changes).max()


def test_true_second_moment_of_the_transformed_section(flitch: Member) -> None:
    measured, true = (transformed_section(with_moduli(section)) for section in (flitch.section, truth()))
    # Free of how the picture is turned; the scale is uncertain by 0.2 %, the plate's thickness by 0.6 %.
    for kind in ("major", "minor"):
        assert getattr(measured.principal, kind) == pytest.approx(getattr(true.principal, kind), rel=0.02)


def test_loss_of_a_member_of_parts_takes_nothing_from_the_joints(flitch: Member) -> None:
    ratio = quantify_loss(flitch.section, lambda s: uniform_loss(s, 2.0), flitch.uncertainty)["area"]
    whole = Section.from_polygons(list(flitch.section.joined().geoms))
    expected = 1.0 - section_properties(uniform_loss(whole, 2.0))["area"] / section_properties(whole)["area"]
    assert 1.0 - ratio.value == pytest.approx(expected, rel=1e-6)
    assert ratio.std < 0.001


@pytest.mark.parametrize(
    ("parts", "code"),
    [
        (((1200.0, 1800.0), (1250.0, 2200.0)), "parts-alike"),
        (((1200.0, 1800.0), (1540.0, 1800.0)), "part-not-picked"),
    ],
)
def test_points_that_do_not_tell_parts_apart_are_refused(parts: tuple[tuple[float, float], ...], code: str) -> None:
    with pytest.raises(Refusal) as caught:
        measure(load_photo(SAMPLE), check_lengths=CHECK, face_height=0.0, parts=parts)
    assert caught.value.code == code


def test_one_part_or_seeds_beside_parts_are_wrong_use() -> None:
    photo = load_photo(SAMPLE)
    for options in ({"parts": PARTS[:1]}, {"parts": PARTS, "seeds": PARTS[:1]}):
        with pytest.raises(UsageError):
            measure(photo, check_lengths=CHECK, face_height=0.0, **options)


# --- painted faces, a pixel a tenth of a millimetre ---

SCALE, WIDTH, HEIGHT = 0.1, 640, 520


class Square:
    """A plane seen straight on, y up."""

    def to_mm(self, pixels: np.ndarray) -> np.ndarray:
        return SCALE * (pixels * (1, -1) + (0, HEIGHT))

    def to_pixels(self, points: np.ndarray) -> np.ndarray:
        return (points / SCALE - (0, HEIGHT)) * (1, -1)

    def mm_per_px(self, pixels: np.ndarray) -> np.ndarray:
        return np.tile(np.diag([SCALE, -SCALE]), (len(pixels), 1, 1))


def modes(points: np.ndarray) -> tuple[Mode, ...]:
    return (Mode("print scale", 0.002 * points),)


REFERENCE = Reference("sheet", "A4", Square(), modes)
OUTER = np.array([[5.0, 5.0], [58.0, 6.0], [57.0, 46.0], [6.0, 45.0]])


def painted(regions: list[tuple[np.ndarray, float]]) -> tuple[Light, np.ndarray]:
    """Regions in mm and their light painted over one another on white, softened and with noise; the face in pixels."""
    picture = np.full((HEIGHT, WIDTH), 0.85, np.float32)
    for loop, light in regions:
        share = coverage(loops_to_segments([Square().to_pixels(loop)]), (0, 0, WIDTH, HEIGHT))
        picture += share * (light - picture)
    picture = cv2.GaussianBlur(picture, (0, 0), 0.8) + np.random.default_rng(4).normal(0, 0.004, picture.shape)
    levels = np.rint(65535 * np.clip(picture, 0, 1)).astype(np.uint16)
    return Light(levels, tone_curve("linear", 65536)), Square().to_pixels(OUTER)


def cut(light: Light, face: np.ndarray, picked: list[tuple[float, float]]) -> PartedFace:
    whole = Section((Part(OUTER),))
    count = len(OUTER)
    uncertainty = OutlineUncertainty(
        (*modes(OUTER), Mode("edge location (common)", np.full((count, 2), 0.01))),
        EdgeNoise(np.full(count, 0.01), np.full(count, 0.5)),
        np.full(count, 0.05),
    )
    steps = np.linspace(0, 1, 200, endpoint=False)[:, None]
    dense = np.concatenate([a + steps * (b - a) for a, b in zip(face, np.roll(face, -1, axis=0), strict=True)])
    regions = Regions(((Region(face, ()),),), 1)
    pixels = [tuple(p) for p in Square().to_pixels(np.array(picked))]
    return part_face(
        whole, uncertainty, ([dense], [np.zeros(len(dense), bool)]), light, regions, 0.9, REFERENCE, pixels
    )


OAK, RUST, LEAD = 0.4, 0.06, 0.16


def test_a_point_at_the_edge_of_the_face_is_refused() -> None:
    plate = np.array([[28.0, 10.0], [34.0, 10.0], [34.0, 30.0], [28.0, 30.0]])
    with pytest.raises(Refusal) as caught:
        cut(*painted([(OUTER, OAK), (plate, RUST)]), [(5.6, 25.0), (31.0, 25.0)])
    assert caught.value.code == "part-off-face"


def areas(found: PartedFace) -> list[float]:
    return [section_properties(Section((part,)))["area"] for part in found.section.parts]


def test_a_bar_within_timber_becomes_a_part_in_a_hole() -> None:
    angle = np.linspace(0, 2 * np.pi, 120, endpoint=False)
    bar = np.array([30.0, 25.0]) + 6.0 * np.column_stack([np.cos(angle), np.sin(angle)])
    found = cut(*painted([(OUTER, OAK), (bar, RUST)]), [(12.0, 12.0), (30.0, 25.0)])
    timber, steel = found.section.parts
    assert (len(timber.holes), len(steel.holes)) == (1, 0)
    assert areas(found)[1] == pytest.approx(np.pi * 36.0, rel=0.01)
    assert sum(areas(found)) == pytest.approx(section_properties(Section((Part(OUTER),)))["area"])
    assert boundary(found.section).shared.sum() == 2 * len(steel.shell)
    # The joint's own mode is a wider or narrower bar.
    swell = next(m for m in found.uncertainty.modes if m.source == "joint location (common)")
    moved = found.section.with_vertices(found.section.vertices + swell.displacement)
    change = section_properties(Section((moved.parts[1],)))["area"] - areas(found)[1]
    assert abs(change) == pytest.approx(2 * np.pi * 6.0 * SCALE * (0.25 + 0.09), rel=0.05)


def test_three_parts_that_meet_in_a_point() -> None:
    left = np.array([[5.0, 5.0], [30.0, 5.5], [30.0, 45.5], [6.0, 45.0]])
    lower = np.array([[30.0, 5.0], [58.0, 6.0], [57.6, 26.0], [30.0, 24.0]])
    found = cut(*painted([(OUTER, LEAD), (left, OAK), (lower, RUST)]), [(15.0, 20.0), (45.0, 12.0), (45.0, 38.0)])
    assert len(found.section.joined().geoms) == 1
    true = [Section((Part(p),)).joined() for p in (left, lower)]
    for area, polygon in zip(areas(found), true, strict=False):
        assert area == pytest.approx(polygon.intersection(Section((Part(OUTER),)).joined()).area, rel=0.01)
    assert sum(areas(found)) == pytest.approx(section_properties(Section((Part(OUTER),)))["area"])
    for loop, trace in zip(found.section.loops, found.trace_px, strict=True):
        assert len(trace) > len(loop)


def test_joints_move_with_the_scale_and_with_nothing_of_the_outline() -> None:
    plate = np.array([[28.0, 0.0], [34.0, 0.0], [34.0, 60.0], [28.0, 60.0]])
    face = Section((Part(OUTER),)).to_polygon().geoms[0]
    clipped = np.asarray(Section((Part(plate),)).to_polygon().geoms[0].intersection(face).exterior.coords)[:-1]
    found = cut(*painted([(OUTER, OAK), (clipped, RUST)]), [(15.0, 20.0), (31.0, 25.0), (50.0, 25.0)])
    assert areas(found)[1] == pytest.approx(Section((Part(clipped),)).to_polygon().area, rel=0.01)
    vertices = found.section.vertices
    scale, edge = found.uncertainty.modes[:2]
    assert np.allclose(scale.displacement, 0.002 * vertices)
    on_outline = distance(face.exterior, points(vertices)) < 1e-6
    assert np.allclose(edge.displacement[on_outline], 0.01)
    assert np.allclose(edge.displacement[~on_outline], 0.0)
