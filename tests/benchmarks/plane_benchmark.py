"""What the height of a face above the reference leaves in its area, by what is known of the camera.

    python tests/benchmarks/plane_benchmark.py --scenes 1000 --seed 1

Corners of a sheet are projected by the simulated camera with noise and handed to the reference as if they had been
found; the true outline of the face, so and so high above the sheet, is projected and measured back. No picture is
drawn, so the edge plays no part and thousands of views take a minute. The camera's focal length is off by 3 %
(standard deviation) from what its file states, as the stated uncertainty has it; a calibrated camera is known as its
covariance says, and focused anew.
"""

from __future__ import annotations

import argparse
import sys
from collections import Counter
from collections.abc import Mapping
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

HERE = Path(__file__).resolve().parent
sys.path.insert(0, str(HERE.parent))

from camera_simulator import Camera as View  # noqa: E402
from camera_simulator import Scene, random_scene  # noqa: E402
from cutface.props.errors import CutfaceError  # noqa: E402
from cutface.props.properties import section_properties  # noqa: E402
from cutface.props.section import Section  # noqa: E402
from cutface.props.uncertainty import OutlineUncertainty, quantify  # noqa: E402
from cutface.vision.camera import REFOCUS_STD, Camera  # noqa: E402
from cutface.vision.photo import Photo  # noqa: E402
from cutface.vision.references.coded import Sighting  # noqa: E402
from cutface.vision.references.printed import PrintCheck  # noqa: E402
from cutface.vision.references.sheet import sheet_reference  # noqa: E402

Floats = NDArray[np.float64]

HEIGHTS_MM = (5.0, 60.0)
CORNER_NOISE_PX = 0.05
# How well a calibration from a dozen photos knows its lens: focal length and centre relative to the half diagonal, lens
# terms by what they do at the corner of the frame.
CALIBRATED = np.array([0.0005, 0.0005, 0.0005, 0.0005, 0.0005, 0.0005, 0.0001, 0.0001, 0.0002])


@dataclass(frozen=True)
class Group:
    """What is drawn of the print, and what is known.

    camera : known from "nothing" but the perspective, the "file" or a "calibration"
    exact : print and height are stated without error
    """

    about: str
    camera: str
    drawn: Mapping[str, Any] = field(default_factory=dict)
    exact: bool = False


TRUE_PRINT = {"print_scale": (1.0, 1.0), "bow_mm": 0.0, "offset_error_mm": 0.0, "face_slope_deg": (0.0, 0.0)}
GROUPS = {
    "file": Group("height alone, focal length from the file", "file", TRUE_PRINT, True),
    "perspective": Group("height alone, focal length from the perspective", "nothing", TRUE_PRINT, True),
    "calibration": Group("height alone, calibrated camera", "calibration", TRUE_PRINT, True),
    "file, all": Group("all that is uncertain, focal length from the file", "file", {"check_std_mm": 0.05}),
    "calibration, all": Group("all that is uncertain, calibrated camera", "calibration", {"check_std_mm": 0.05}),
    "calibration, unchecked": Group("the same, print nobody checked", "calibration"),
}


@dataclass(frozen=True)
class Outcome:
    """One view: relative error of the area, error over standard uncertainty, whether the interval holds the truth."""

    relative: float
    ratio: float
    held: bool
    warnings: tuple[str, ...] = ()


def calibration(view: View, rng: np.random.Generator) -> Camera:
    """A calibration of the simulated camera: off by what its covariance says, and focused otherwise since."""
    radius = float(np.hypot(view.width, view.height) / 2)
    true = np.array([view.focal_px, view.focal_px, *view.centre, *view.distortion])
    # k1, k2, p1, p2, k3 by what they move at the corner of the frame.
    corner = radius / view.focal_px
    stds = CALIBRATED * np.array(
        [view.focal_px, view.focal_px, radius, radius, *corner ** -np.array([2.0, 4, 1, 1, 6])]
    )
    known = true + rng.normal(0, stds)
    known[1] = known[0] * (1 + rng.normal(0, 1e-4))
    known[:2] *= 1 + rng.normal(0, REFOCUS_STD)
    return Camera(view.width, view.height, known, np.diag(stds**2), 0.07, radius)


def measured(scene: Scene, group: Group, rng: np.random.Generator) -> Outcome:
    """The area of the scene's first member as the sheet's corners give it. Raises Refusal."""
    (sheet,), member, view = scene.prints, scene.members[0], scene.view
    assert isinstance(view, View)
    corners = sheet.board.saddles
    pixels = view.project(sheet.place(corners)) + rng.normal(0, CORNER_NOISE_PX, corners.shape)
    seen = np.all((pixels > 3) & (pixels < np.array([view.width, view.height]) - 4), axis=1)
    sighting = Sighting(sheet.board, corners[seen], pixels[seen], float(np.mean(seen)))
    photo = Photo(
        Path("view.jpg"),
        "",
        np.broadcast_to(np.uint8(0), (view.height, view.width)),
        focal_length_35mm=scene.stated["focal_35mm"] if group.camera == "file" else None,
    )
    check = PrintCheck((140.0, 140.0), 1e-3) if group.exact else PrintCheck(scene.stated.get("check_mm"))
    reference = sheet_reference(
        photo,
        sighting,
        check=check,
        face_height=scene.stated["thickness_mm"],
        face_height_std=1e-3 if group.exact else None,
        focal_35mm=None,
        camera=calibration(view, rng) if group.camera == "calibration" else None,
    )
    places = member.section.vertices
    solid = np.column_stack([places, member.height.at(places)])
    section: Section = member.section.with_vertices(reference.face.to_mm(view.project(solid)))
    uncertainty = OutlineUncertainty(reference.modes(section.vertices))
    area = quantify(section, {"area": section_properties(section)["area"]}, uncertainty)["area"]
    true = section_properties(member.section)["area"]
    low, high = area.interval95
    codes = {n.code for n in reference.notices} - {"print-unchecked"}
    return Outcome(area.value / true - 1, (area.value - true) / area.std, low <= true <= high, tuple(sorted(codes)))


def run(group: Group, scenes: int, seed: int) -> None:
    """Measure a group's views and print its figures."""
    outcomes: list[Outcome] = []
    refused: Counter[str] = Counter()
    for number in range(scenes):
        rng = np.random.default_rng([seed, number, 7])
        height = float(rng.uniform(*HEIGHTS_MM))
        scene = random_scene(seed * 100_000 + number, "sheet", thickness_mm=height, **group.drawn)
        try:
            outcomes.append(measured(scene, group, rng))
        except CutfaceError as refusal:
            refused[refusal.code] += 1
    relative = 100 * np.abs([o.relative for o in outcomes])
    ratio = np.sqrt(np.mean(np.square([o.ratio for o in outcomes])))
    held = 100 * np.mean([o.held for o in outcomes])
    warned = Counter(code for o in outcomes for code in o.warnings)
    print(
        f"{group.about}: area median {np.median(relative):.3f} %, 95th {np.percentile(relative, 95):.3f} %, "
        f"error/u {ratio:.2f}, coverage {held:.1f} %, n {len(outcomes)}, refused {dict(refused)}, "
        f"warnings {dict(warned)}"
    )


def main() -> None:
    """Read the command and run the groups."""
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    parser.add_argument("--scenes", type=int, default=500, help="views a group")
    parser.add_argument("--seed", type=int, default=1, help="another seed, other views")
    parser.add_argument("--kind", nargs="*", default=list(GROUPS), choices=list(GROUPS), help="groups, default: all")
    arguments = parser.parse_args()
    for name in arguments.kind:
        run(GROUPS[name], arguments.scenes, arguments.seed)


if __name__ == "__main__":
    main()
