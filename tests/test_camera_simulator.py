"""The simulated camera is right by itself: geometry, exact edges, noise, repeatability."""

from __future__ import annotations

import io
from dataclasses import replace

import cv2
import numpy as np
import pytest
from camera_simulator import (
    Camera,
    Flatbed,
    Height,
    Light,
    Member,
    Print,
    Scene,
    Sensor,
    encoded_file,
    random_scene,
    render,
    truth,
)
from cutface.props.section import Section
from cutface.vision.references.board import SHEETS
from PIL import Image as Pictures
from scipy.special import ndtr
from shapely import Polygon, box, unary_union
from shapely.geometry.base import BaseGeometry
from simulated_painting import reflectance, sweep
from simulated_raster import bounding_box, coverage, loops_to_segments
from simulated_scene import marker_modules
from simulated_sensor import develop, encode
from simulated_shapes import FAMILIES, circle, flitch, random_section, rectangular_hollow, timber
from simulated_view import pixel_segments

FLAT = Light(shadow=0.0)
CLEAN = Sensor(blur_px=0.0, full_well=0.0, read_noise=0.0)


def clean(scene: Scene, **sensor: object) -> Scene:
    return replace(scene, light=FLAT, sensor=replace(CLEAN, **sensor))


# --- exact areas ---------------------------------------------------------------------------------


def test_coverage_of_a_polygon_sums_to_its_exact_area() -> None:
    rng = np.random.default_rng(1)
    a = np.sort(rng.uniform(0, 2 * np.pi, 40))
    loop = np.stack([50 + 31 * np.cos(a) * rng.uniform(0.4, 1, 40), 40 + 29 * np.sin(a)], -1)
    x, y = loop.T
    exact = 0.5 * abs(np.sum(x * np.roll(y, -1) - np.roll(x, -1) * y))
    covered = coverage(loops_to_segments([loop]), (0, 0, 100, 80))
    assert covered.sum(dtype=float) == pytest.approx(exact, rel=1e-6)


@pytest.mark.parametrize("angle", [0.0, 0.13, 0.5, np.pi / 4, 1.2])
def test_half_plane_covers_each_pixel_by_its_exact_area(angle: float) -> None:
    # Against clipping each pixel's square by the half plane.
    normal = np.array([np.cos(angle), np.sin(angle)])
    along = np.array([-normal[1], normal[0]])
    foot = np.array([10.37, 9.81])
    corners = [foot - 99 * along, foot + 99 * along, foot + 99 * along - 99 * normal, foot - 99 * along - 99 * normal]
    covered = coverage(loops_to_segments([np.array(corners)]), (0, 0, 20, 20))
    region = Polygon(corners)
    exact = [[region.intersection(box(i - 0.5, j - 0.5, i + 0.5, j + 0.5)).area for i in range(20)] for j in range(20)]
    assert np.abs(covered - np.array(exact)).max() < 1e-6


def test_polygon_reaching_out_of_the_box_on_every_side_is_clipped() -> None:
    big = np.array([(-30.0, -20.0), (60.0, -20.0), (60.0, 70.0), (-30.0, 70.0)])
    assert coverage(loops_to_segments([big]), (0, 0, 12, 9)).min() == 1.0
    beside = np.add(big, (100.0, 0.0))
    assert coverage(loops_to_segments([beside]), (0, 0, 12, 9)).max() == 0.0
    assert bounding_box(loops_to_segments([beside]), 12, 9)[0] == 12


@pytest.mark.parametrize("blur", [0.5, 0.7, 1.1])
@pytest.mark.parametrize("edge", [20.0, 20.3, 20.5])
def test_blurred_edge_follows_the_integrated_gaussian(edge: float, blur: float) -> None:
    # A straight edge through a gaussian lens and a pixel's box.
    bed = Flatbed(41, 1200, (25.4, 25.4))  # many rows: the grain of the surfaces averages out
    plate = Section.from_polygons(box(-90.0, -90.0, edge + 0.5, 1300.0))
    scene = Scene("scan", 1, bed, (), (Member(plate, ("white lid",)),), "dark lid", FLAT, replace(CLEAN, blur_px=blur))
    profile = reflectance(scene)[10:-10, :, 1].mean(axis=0)
    profile = (profile - profile[36:].mean()) / (profile[:5].mean() - profile[36:].mean())
    fine = (np.arange(-0.5, 0.5, 0.001) + 0.0005)[:, None]
    expected = ndtr((edge - (np.arange(41) + fine)) / blur).mean(axis=0)

    def crossing(levels: np.ndarray) -> float:
        last = int(np.nonzero(levels > 0.5)[0][-1])
        return last + (levels[last] - 0.5) / (levels[last] - levels[last + 1])

    # Both have the phase error of a linear interpolation; what is left is the simulator's own.
    assert crossing(profile) == pytest.approx(crossing(expected), abs=0.01)
    assert np.abs(profile - expected)[15:27].max() < 0.02


# --- cameras -------------------------------------------------------------------------------------


def some_camera(**changes: object) -> Camera:
    options: dict = {
        "width": 800,
        "height": 600,
        "focal_px": 700.0,
        "centre": (405.0, 290.0),
        "distortion": (-0.11, 0.03, 4e-4, -3e-4, 0.002),
    }
    options.update(changes)
    return Camera.looking_at((40.0, 60.0), 300.0, 20.0, 35.0, 7.0, **options)


def test_distortion_round_trip() -> None:
    camera = some_camera()
    x, y = np.meshgrid(np.linspace(-0.55, 0.55, 21), np.linspace(-0.42, 0.42, 17))
    ideal = np.stack([x, y], -1)
    assert np.abs(camera.undistort(camera.distort(ideal)) - ideal).max() < 1e-10


def test_projection_agrees_with_the_common_camera_model() -> None:
    # OpenCV's projectPoints states the same model (Brown 1971) in code of others.
    camera = some_camera()
    points = np.random.default_rng(2).uniform((-60, -40, 0), (140, 160, 30), (50, 3))
    matrix = np.array([[700.0, 0, 405.0], [0, 700.0, 290.0], [0, 0, 1]])
    rotation, _ = cv2.Rodrigues(camera.rotation)
    theirs, _ = cv2.projectPoints(
        points, rotation, -camera.rotation @ camera.position, matrix, np.array(camera.distortion)
    )
    assert np.abs(camera.project(points) - theirs[:, 0]).max() < 1e-9


def test_camera_axes_are_right_handed_and_upright() -> None:
    camera = some_camera(distortion=(0.0,) * 5)
    assert np.linalg.det(camera.rotation) == pytest.approx(1.0)
    level = Camera.looking_at((0, 0), 100.0, width=10, height=10, focal_px=100.0, centre=(5.0, 5.0))
    assert level.project(np.array([1.0, 0, 0])) == pytest.approx((6, 5))
    assert level.project(np.array([0.0, 1.0, 0])) == pytest.approx((5, 4))  # up in the plane is up in the picture
    turned = Camera.looking_at((0, 0), 100.0, turn_deg=90.0, width=10, height=10, focal_px=100.0, centre=(5.0, 5.0))
    assert np.linalg.norm(turned.project(np.array([1.0, 0, 0])) - (5, 5)) == pytest.approx(1)
    # Moved towards +x the camera sees +x larger.
    side = Camera.looking_at((0, 0), 100.0, 30.0, 0.0, width=10, height=10, focal_px=100.0, centre=(5.0, 5.0))
    up = np.array([0.0, 1.0, 0.0])
    right, left = (side.project(np.array([x, 0, 0]) + up) - side.project(np.array([x, 0, 0]) - up) for x in (20, -20))
    assert np.linalg.norm(right) > np.linalg.norm(left)


def test_places_on_a_plane_invert_the_ideal_projection() -> None:
    camera = some_camera(distortion=(0.0,) * 5)
    points = np.random.default_rng(3).uniform((0, 0, 12), (100, 100, 12), (30, 3))
    pixels = camera.project(points)
    x, y = camera.on_plane(pixels[:, 0], pixels[:, 1], 12.0)
    assert np.abs(np.stack([x, y], -1) - points[:, :2]).max() < 1e-3


def test_edges_are_cut_fine_enough_for_the_lens() -> None:
    camera = some_camera(width=4000, height=3000, focal_px=3500.0, centre=(2000.0, 1500.0))
    line = np.array([[[-60.0, 130.0, 0.0], [150.0, 130.0, 0.0]]])
    pieces = pixel_segments(camera, line)
    t = np.linspace(0, 1, 20001)[:, None]
    fine = camera.project(line[:, 0] + t * (line[:, 1] - line[:, 0]))
    middle = pieces.mean(axis=1)
    gap = np.abs(fine[None] - middle[:, None]).sum(-1).argmin(axis=1)
    normal = pieces[:, 1] - pieces[:, 0]
    normal = np.stack([-normal[:, 1], normal[:, 0]], -1) / np.linalg.norm(normal, axis=1)[:, None]
    assert np.abs(np.sum((fine[gap] - middle) * normal, axis=1)).max() < 0.01


def test_raised_face_is_larger_by_its_share_of_the_distance() -> None:
    camera = Camera.looking_at((0, 0), 500.0, width=600, height=600, focal_px=1500.0, centre=(299.5, 299.5))
    section = Section.from_polygons(timber(60.0, 60.0).to_polygon())
    looks = ("painted",)
    low = Scene("sheet", 1, camera, (), (Member(section, looks),), "plaster", FLAT, CLEAN)
    high = replace(low, members=(Member(section, looks, Height(50.0)),))

    def width(scene: Scene) -> float:
        dark = (0.46 - reflectance(scene)[300, :, 2]) / 0.36
        return float(np.count_nonzero(dark > 0.5))

    assert width(low) == pytest.approx(60 * 1500 / 500, abs=1)
    assert width(high) == pytest.approx(60 * 1500 / 450, abs=1)


# --- prints --------------------------------------------------------------------------------------


def test_printed_board_is_read_by_the_common_detector() -> None:
    scene = clean(random_scene(4, "sheet", board="A4", megapixels=2.0, bow_mm=0.0, tilt_deg=12.0, family="timber"))
    picture = render(scene)
    dictionary = cv2.aruco.getPredefinedDictionary(cv2.aruco.DICT_5X5_1000)
    corners, ids, _ = cv2.aruco.ArucoDetector(dictionary).detectMarkers(cv2.cvtColor(picture, cv2.COLOR_RGB2GRAY))
    board = SHEETS["A4"]
    assert set(board.ids) <= set(ids.ravel().tolist())
    for number, found in zip(ids.ravel(), corners, strict=True):
        if number in board.ids:
            expected = scene.view.project(scene.prints[0].place(board.marker_corners[number - board.first_id]))
            assert np.abs(found[0] - expected).max() < 2.0


def test_saddles_lie_where_the_print_says() -> None:
    # No gain: it joins the squares by a neck, which draws a corner finder that knows of none.
    scene = clean(
        random_scene(4, "sheet", board="A4", megapixels=5.0, bow_mm=0.4, tilt_deg=20.0, print_gain_mm=0.0),
        blur_px=0.8,
        tone="linear",
    )
    grey = render(scene)[..., 1]
    expected = scene.view.project(scene.prints[0].place(SHEETS["A4"].saddles)).astype(np.float32)
    criteria = (cv2.TERM_CRITERIA_EPS + cv2.TERM_CRITERIA_MAX_ITER, 50, 1e-3)
    found = cv2.cornerSubPix(grey, expected.reshape(-1, 1, 2).copy(), (6, 6), (-1, -1), criteria)[:, 0]
    error = found - expected
    assert np.abs(error.mean(axis=0)).max() < 0.02
    assert np.sqrt(np.mean(error**2)) < 0.06


def test_print_gain_widens_black_and_scale_stretches() -> None:
    board = SHEETS["A4"]
    loops = Print(board, gain_mm=0.1).ink()
    points = np.concatenate(loops)
    assert points.min() == pytest.approx(-0.1, abs=1e-9)
    placed = Print(board, scale=(1.003, 0.998)).place(np.array([100.0, 200.0]))
    assert placed == pytest.approx((100.3, 199.6, 0.0))


def test_marker_border_is_black() -> None:
    modules = marker_modules(17)
    assert modules[0].all() and modules[-1].all() and modules[:, 0].all() and modules[:, -1].all()
    assert not modules.all()


# --- walls, shapes -------------------------------------------------------------------------------


def test_swept_area_of_a_square_and_of_a_hollow() -> None:
    square = timber(10.0, 10.0).loops
    moved = [np.add(loop, (3.0, 4.0)) for loop in square]
    assert enclosed(sweep(square, moved)).area == pytest.approx(100 + 10 * 3 + 10 * 4)
    hollow = rectangular_hollow(20.0, 20.0, 2.0, 0.0).loops
    around = sweep(hollow, [np.add(loop, (3.0, 0.0)) for loop in hollow])
    # Outside grows by 20 x 3, the see-through hole shrinks from 16 x 16 to 13 x 16.
    assert enclosed(around).area == pytest.approx(23 * 20 - 13 * 16)


def enclosed(loops: list) -> BaseGeometry:
    areas = [Polygon(loop) for loop in loops]
    signs = [np.sum(lo[:, 0] * np.roll(lo[:, 1], -1) - np.roll(lo[:, 0], -1) * lo[:, 1]) > 0 for lo in loops]
    shells = unary_union([a for a, s in zip(areas, signs, strict=True) if s])
    return shells.difference(unary_union([a for a, s in zip(areas, signs, strict=True) if not s]))


def test_walls_of_a_hollow_show_their_own_tone() -> None:
    camera = Camera.looking_at((0, 0), 300.0, 15.0, 40.0, width=500, height=500, focal_px=900.0, centre=(250.0, 250.0))
    section = rectangular_hollow(60.0, 60.0, 6.0, 4.0)
    member = Member(section, ("aluminium",), Height(40.0), 0.0)
    raised = reflectance(Scene("sheet", 1, camera, (), (member,), "plaster", Light(), CLEAN))
    level = reflectance(Scene("sheet", 1, camera, (), (replace(member, base=40.0),), "plaster", Light(), CLEAN))
    # A place inside the hole near the wall away from the camera: plaster if level, dark wall if raised.
    where = camera.project(np.array([-22.0, -18.0, 40.0])).round().astype(int)
    assert level[where[1], where[0], 0] > 0.45
    assert raised[where[1], where[0], 0] < 0.75 * level[where[1], where[0], 0]
    # The face itself is the same in both.
    face = camera.project(np.array([27.0, 0.0, 40.0])).round().astype(int)
    assert raised[face[1], face[0]] == pytest.approx(level[face[1], face[0]], rel=1e-4)


@pytest.mark.parametrize("family", FAMILIES)
def test_random_sections_are_valid_and_fit(family: str) -> None:
    for seed in range(4):
        section = random_section(np.random.default_rng(seed), family, (90.0, 120.0))
        polygon = section.to_polygon()
        assert polygon.is_valid
        x0, y0, x1, y1 = polygon.bounds
        assert 20 < x1 - x0 < 92 and 20 < y1 - y0 < 122
        assert len(polygon.geoms) == 1


def test_hollow_families_have_holes() -> None:
    rng = np.random.default_rng(1)
    assert len(random_section(rng, "extrusion", (90.0, 90.0)).parts[0].holes) >= 2
    assert len(random_section(rng, "circular_hollow", (90.0, 90.0)).parts[0].holes) == 1
    assert len(flitch(50.0, 200.0, 10.0, 5.0).parts) == 3
    round_area = Polygon(circle(0, 0, 10)).area
    assert round_area == pytest.approx(np.pi * 100, rel=1.1e-4)


# --- sensor --------------------------------------------------------------------------------------


@pytest.mark.parametrize("tone", ["sRGB", "gamma", "linear", "contrast"])
def test_tone_curves_rise_from_black_to_white(tone: str) -> None:
    value = encode(np.linspace(0, 1, 257), tone)
    assert value[0] == pytest.approx(0, abs=1e-12)
    assert value[-1] == pytest.approx(1)
    assert np.all(np.diff(value) > 0)


def test_noise_has_the_stated_variance() -> None:
    level = 0.4
    sensor = Sensor(blur_px=0, full_well=8000.0, read_noise=0.003, tone="linear")
    picture = develop(np.full((600, 600, 3), level, np.float32), sensor, np.random.default_rng(5)) / 255.0
    # Eight-bit rounding adds its own twelfth.
    expected = 0.003**2 + level / 8000.0 + 1 / 12 / 255**2
    assert picture.var() == pytest.approx(expected, rel=0.01)
    assert picture.mean() == pytest.approx(level, abs=1e-4)
    assert np.corrcoef(picture[..., 0].ravel(), picture[..., 1].ravel())[0, 1] == pytest.approx(0, abs=0.01)


def test_mosaic_keeps_colours_and_mean() -> None:
    flat = np.broadcast_to(np.array([0.6, 0.35, 0.15], np.float32), (64, 64, 3)).copy()
    sensor = Sensor(blur_px=0, full_well=0, read_noise=0, mosaic=True, tone="linear")
    picture = develop(flat, sensor, np.random.default_rng(0)) / 255.0
    assert np.abs(picture[4:-4, 4:-4] - flat[4:-4, 4:-4]).max() < 0.004


def test_sharpening_overshoots_and_blur_does_not() -> None:
    step = np.zeros((20, 40, 3), np.float32) + 0.1
    step[:, 20:] = 0.6
    plain = develop(step, replace(CLEAN, sharpening=0.0), np.random.default_rng(0))
    sharp = develop(step, replace(CLEAN, sharpening=0.6), np.random.default_rng(0))
    assert sharp.max() > plain.max() and sharp.min() < plain.min()


# --- scenes and files ----------------------------------------------------------------------------


@pytest.mark.parametrize("kind", ["sheet", "cards", "scan"])
def test_same_seed_same_picture_other_seed_another(kind: str) -> None:
    options: dict = {"glass_mm": (30.0, 20.0)} if kind == "scan" else {"megapixels": 0.5}
    first = render(random_scene(11, kind, **options))
    assert np.array_equal(first, render(random_scene(11, kind, **options)))
    other = render(random_scene(12, kind, **options))
    assert first.shape != other.shape or not np.array_equal(first, other)


def test_override_changes_only_its_own_value() -> None:
    plain = random_scene(8, "sheet", megapixels=1.0).drawn
    changed = random_scene(8, "sheet", megapixels=1.0, tilt_deg=3.0).drawn
    assert {k for k in plain if plain[k] != changed[k]} == {"tilt_deg"}


def test_unknown_names_are_refused() -> None:
    with pytest.raises(TypeError, match="tilt"):
        random_scene(1, "sheet", tlit_deg=3.0)
    with pytest.raises(ValueError, match="kind"):
        random_scene(1, "drawing")


@pytest.mark.parametrize("seed", range(6))
@pytest.mark.parametrize("kind", ["sheet", "cards"])
def test_reference_lies_inside_the_frame(kind: str, seed: int) -> None:
    scene = random_scene(seed, kind)
    for board in scene.prints:
        pixels = scene.view.project(board.place(board.paper))
        assert pixels.min() > 0
        assert np.all(pixels < (scene.view.width, scene.view.height))


@pytest.mark.parametrize(("tag", "turned"), [(1, False), (3, False), (6, True), (8, True)])
def test_orientation_tag_undoes_the_stored_turn(tag: int, turned: bool) -> None:
    from PIL import ImageOps

    scene = random_scene(9, "sheet", megapixels=0.4, orientation_tag=tag)
    picture = render(scene)
    with Pictures.open(io.BytesIO(encoded_file(scene, picture, ".png"))) as stored:
        assert (stored.size != picture.shape[1::-1]) == turned
        assert np.array_equal(np.asarray(ImageOps.exif_transpose(stored)), picture)


def test_files_state_focal_length_and_resolution() -> None:
    scene = random_scene(9, "sheet", megapixels=0.4, focal_35mm=28.0)
    with Pictures.open(io.BytesIO(encoded_file(scene, render(scene), ".jpg"))) as stored:
        assert stored.getexif().get_ifd(0x8769)[41989] == 28
    scan = random_scene(9, "scan", glass_mm=(25.0, 20.0))
    with Pictures.open(io.BytesIO(encoded_file(scan, render(scan), ".png"))) as stored:
        assert stored.info["dpi"] == pytest.approx((600, 600), abs=0.05)


def test_truth_is_plain_and_holds_the_outline() -> None:
    import json

    scene = random_scene(9, "sheet", megapixels=0.4)
    text = json.loads(json.dumps(truth(scene)))
    assert len(text["members"][0]["section"]["parts"][0]["shell"]) == len(scene.members[0].section.parts[0].shell)
    assert text["prints"][0]["scale"] == pytest.approx(scene.prints[0].scale)


def test_scanned_slice_covers_its_area_times_the_true_scales() -> None:
    scene = clean(random_scene(3, "scan", glass_mm=(40.0, 30.0), count=1, family="angle", wobble_mm=0.0))
    view = scene.view
    assert isinstance(view, Flatbed)
    member = scene.members[0]
    segments = loops_to_segments(
        [view.project(np.column_stack([loop, np.zeros(len(loop))])) for loop in member.section.loops]
    )
    pixels = coverage(segments, (0, 0, view.width, view.height)).sum(dtype=float)
    per_mm = view.pixels_per_mm
    assert pixels / (per_mm[0] * per_mm[1]) == pytest.approx(member.section.to_polygon().area, rel=1e-5)
