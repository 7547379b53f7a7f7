"""Draw the sample pictures again, with their truth: `python sample_images/make_samples.py [name ...]`.

The pictures are simulated: nothing in them is a real building, member, camera or printer. They tell of
Hollow Weir Mill, an invented spinning mill whose floors are surveyed before it becomes workshops.
Takes about ten seconds a picture.
"""

from __future__ import annotations

import json
import sys
from dataclasses import replace
from pathlib import Path

import numpy as np

HERE = Path(__file__).resolve().parent
sys.path.insert(0, str(HERE.parent / "tests"))

from camera_simulator import Camera, Scene, random_scene, truth, write  # noqa: E402
from simulated_shapes import (  # noqa: E402
    angle,
    corroded,
    extrusion,
    flitch,
    rectangular_hollow,
    rolled_i,
    timber,
)

DAYLIGHT = {
    "gradient": (0.16, -0.10),
    "vignetting": 0.14,
    "lamp_azimuth": 2.3,
    "lamp_elevation": 0.85,
    "shadow": 0.42,
    "penumbra": 0.45,
    "soft_edge": None,
    "tint": (1.02, 1.0, 0.96),
}
CAMERA = {
    "megapixels": 12.0,
    "blur_px": 0.75,
    "defocus_px": 0.0,
    "white": 0.74,
    "full_well": 16000.0,
    "read_noise": 0.0012,
    "mosaic": True,
    "tone": "sRGB",
    "sharpening": 0.25,
    "quality": 88,
}


def glazing_bar() -> tuple[Scene, str]:
    """Three slices of an aluminium glazing bar on the office scanner, under a blue folder."""
    scene = random_scene(
        301,
        "scan",
        section=extrusion(42.0, 30.0, 1.8, 2, 7.0),
        family="extrusion",
        look="aluminium",
        count=3,
        glass_mm=(150.0, 92.0),
        background="blue lid",
        scan_scale=(1.0009, 0.9986),
        wobble_mm=0.03,
        brightness=1.1,
        chamfer_mm=0.02,
        quality=91,
        tone="sRGB",
        sharpening=0.0,
        blur_px=0.8,
        white=0.8,
        full_well=25000.0,
    )
    return scene, "Glazing bar of the north roof light: three slices of the same bar, scanned at 600 dpi."


def joist() -> tuple[Scene, str]:
    """A joist end in its pocket, four cards taped to the wall round it."""
    scene = random_scene(
        302,
        "cards",
        section=timber(73.0, 223.0, (0.0, 0.0), 2.5),
        family="timber",
        looks=("wood",),
        cards=4,
        card_set="small",
        gap_mm=6.0,
        thickness_mm=0.0,
        offset_error_mm=0.4,
        background="brickwork",
        print_scale=(1.002, 0.9985),
        print_gain_mm=0.07,
        tilt_deg=11.0,
        tilt_direction_deg=215.0,
        turn_deg=2.2,
        focal_35mm=52.0,
        fill=0.9,
        taped=True,
        orientation_tag=6,
        brightness=0.85,
        **{**CAMERA, **DAYLIGHT, "soft_edge": (0.5, 0.55, 0.6, 0.3)},
    )
    return scene, "Joist J12, second floor, bay 3: sawn end flush with the wall, cards level with the face."


def beam() -> tuple[Scene, str]:
    """A sawn slice of a rolled beam on an A3 sheet on the bench."""
    scene = random_scene(
        303,
        "sheet",
        board="A3",
        section=rolled_i(203.0, 102.0, 5.6, 9.1, 9.5),
        family="rolled_i",
        look="steel",
        thickness_mm=12.0,
        offset_error_mm=0.2,
        face_angle_deg=3.0,
        background="bench",
        print_scale=(0.9985, 1.001),
        print_gain_mm=0.06,
        tilt_deg=9.0,
        tilt_direction_deg=300.0,
        turn_deg=-3.0,
        focal_35mm=50.0,
        fill=0.94,
        chamfer_mm=0.05,
        brightness=0.95,
        orientation_tag=1,
        **{**CAMERA, **DAYLIGHT},
    )
    return scene, "Slice of beam B4 from the engine house, 12 mm thick, flat on an A3 sheet."


def post() -> tuple[Scene, str]:
    """A thick slice of a hollow post: inner and outer walls show."""
    scene = random_scene(
        304,
        "sheet",
        board="A4",
        section=rectangular_hollow(120.0, 80.0, 5.0, 9.0),
        family="rectangular_hollow",
        look="steel",
        thickness_mm=22.0,
        offset_error_mm=-0.1,
        face_angle_deg=-2.0,
        background="oak table",
        print_scale=(1.0015, 1.0005),
        print_gain_mm=0.09,
        tilt_deg=6.0,
        tilt_direction_deg=120.0,
        turn_deg=1.5,
        focal_35mm=70.0,
        fill=0.92,
        chamfer_mm=0.05,
        brightness=0.8,
        orientation_tag=1,
        **{**CAMERA, **DAYLIGHT, "shadow": 0.5, "lamp_azimuth": 0.8},
    )
    return scene, "Slice of a stair post added later, 22 mm thick, on an A4 sheet; its walls show in perspective."


def bracket() -> tuple[Scene, str]:
    """A corroded angle, brushed, on a Letter sheet."""
    shape = corroded(angle(100.0, 75.0, 9.0, 10.0, 4.5), 0.7, np.random.default_rng(12))
    scene = random_scene(
        305,
        "sheet",
        board="Letter",
        section=shape,
        family="corroded",
        look="rust",
        thickness_mm=8.0,
        offset_error_mm=0.3,
        face_angle_deg=1.0,
        background="dark mat",
        print_scale=(1.001, 1.002),
        print_gain_mm=0.08,
        tilt_deg=14.0,
        tilt_direction_deg=30.0,
        turn_deg=-1.0,
        focal_35mm=35.0,
        fill=0.93,
        brightness=1.1,
        orientation_tag=3,
        **{**CAMERA, **DAYLIGHT, "tint": (1.04, 1.0, 0.92)},
    )
    return scene, "Shelf angle from under the wheel pit lintel: wire-brushed, with section loss all round."


def trimmer() -> tuple[Scene, str]:
    """A flitch beam, steel plate between timbers, among cards."""
    scene = random_scene(
        306,
        "cards",
        section=flitch(62.0, 245.0, 12.0, 9.0),
        family="flitch",
        looks=("wood", "rust", "wood"),
        cards=4,
        card_set="small",
        gap_mm=3.0,
        thickness_mm=0.0,
        offset_error_mm=-0.3,
        background="plaster",
        print_scale=(0.999, 1.0005),
        print_gain_mm=0.08,
        tilt_deg=13.0,
        tilt_direction_deg=160.0,
        turn_deg=-2.0,
        focal_35mm=50.0,
        fill=0.9,
        taped=True,
        brightness=0.8,
        orientation_tag=1,
        **{**CAMERA, **DAYLIGHT},
    )
    return scene, "Trimmer T2 at the hoist: a plate bolted between two timbers, cut through for the new stair."


def cut_off() -> tuple[Scene, str]:
    """The sheet hangs out of the frame: to be refused."""
    scene, _ = beam()
    view = scene.view
    assert isinstance(view, Camera)
    # The camera was moved aside: half of the sheet and the tips of the flanges are out of the frame.
    x0, y0, x1, y1 = scene.prints[0].board.window_mm or (0.0, 0.0, 0.0, 0.0)
    moved = replace(view, position=view.position + np.array([0.8 * (x1 - x0), 0.2 * (y1 - y0), 0.0]))
    return replace(scene, view=moved, seed=307), "Second shot of beam B4, badly framed: must be refused."


SAMPLES = {
    "glazing_bar_scan": (glazing_bar, "measured"),
    "joist_end_cards": (joist, "measured"),
    "beam_slice_a3": (beam, "measured"),
    "post_slice_a4": (post, "measured"),
    "corroded_angle_letter": (bracket, "measured"),
    "flitch_beam_cards": (trimmer, "measured"),
    "sheet_out_of_frame": (cut_off, "refused"),
}


def main(names: list[str]) -> None:
    """Write the named samples, or all."""
    for name in names or SAMPLES:
        make, expected = SAMPLES[name]
        scene, story = make()
        path = write(scene, HERE / f"{name}.jpg")
        document = {"picture": path.name, "story": story, "expected": expected, **truth(scene)}
        (HERE / f"{name}.truth.json").write_text(json.dumps(document, indent=1) + "\n")
        print(f"{path.name}: {path.stat().st_size / 1e6:.1f} MB")


if __name__ == "__main__":
    main(sys.argv[1:])
