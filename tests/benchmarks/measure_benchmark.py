"""How right, how honest and how fast `measure` is, on simulated pictures whose truth is known.

    python tests/benchmarks/measure_benchmark.py --scenes 200 --seed 1 [--kind sheet ...] [--megapixels 12]

True inputs (print scale, offset, focal length, flatness, scanner scale, ...) are drawn about the stated
ones from the distributions that the measuring states as its defaults, so that coverage means something.
Image formation shares no code with the measuring. For every group of pictures this prints

- median and 95th percentile of the relative error, r.m.s. of error / standard uncertainty, and the share
  of 95 % intervals that hold the truth, property by property;
- refusals by cause; silent failures: measured, off by more than three standard uncertainties, and no
  warning beyond those of unstated inputs;
- time as a ratio to decoding the same JPEG on one core, peak memory as a ratio to the decoded pixels.

`--list` prints a line a picture, `--keep DIR` keeps the pictures of silent failures and refusals.
"""

from __future__ import annotations

import argparse
import contextlib
import json
import math
import os
import subprocess
import sys
import tempfile
import time
from collections import Counter
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field, replace
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray
from PIL import Image

HERE = Path(__file__).resolve().parent
sys.path.insert(0, str(HERE.parent))

import cutface  # noqa: E402
import surveyed_scene  # noqa: E402
from camera_simulator import Camera, Scene, random_scene, write  # noqa: E402
from cutface.props.errors import CutfaceError  # noqa: E402
from cutface.props.section import Section  # noqa: E402
from surveyed_scene import SurveyedScene  # noqa: E402

Floats = NDArray[np.float64]

SHOWN = (
    "area",
    "second_moment_x",
    "second_moment_y",
    "width",
    "depth",
    "section_modulus_top",
    "plastic_modulus_x",
    "second_moment_major",
    "second_moment_minor",
)
JUDGED = SHOWN[:5]
# What a person did not state is told of on every picture; it does not warn of this picture.
ROUTINE = {
    "print-unchecked",
    "face-height-assumed",
    "scanner-unchecked",
    "pattern-unchecked",
    "points-unchecked",
    "tilt-assumed",
}
TIGHT_MM = 0.01


@dataclass(frozen=True)
class Group:
    """A kind of picture: what is drawn, and what the person states when measuring."""

    kind: str
    about: str
    drawn: Mapping[str, Any] = field(default_factory=dict)
    stated: Mapping[str, Any] = field(default_factory=dict)


EXACT = {
    "print_scale": (1.0, 1.0),
    "bow_mm": 0.0,
    "thickness_mm": 0.0,
    "offset_error_mm": 0.0,
    "face_slope_deg": (0.0, 0.0),
    "check_std_mm": TIGHT_MM,
}

GROUPS = {
    "sheet": Group("sheet", "face level with a sheet nobody checked", {"thickness_mm": 0.0}),
    "sheet true": Group(
        "sheet",
        "true print, check lengths and offset known to 0.01 mm",
        EXACT,
        {"check_length_std": TIGHT_MM, "face_height_std": TIGHT_MM},
    ),
    "sheet thick": Group("sheet", "slice lying on a sheet nobody checked, thickness stated", {"thickness_mm": None}),
    "sheet checked": Group(
        "sheet",
        "slice or level face, check lengths by calliper",
        {"check_std_mm": 0.05},
        {"check_length_std": 0.05},
    ),
    "sheet high": Group(
        "sheet",
        "true print, slice of 5 to 60 mm known to 0.01 mm, focal length from the file",
        {**EXACT, "thickness_mm": (5.0, 60.0)},
        {"check_length_std": TIGHT_MM, "face_height_std": TIGHT_MM},
    ),
    **{
        f"reference {kind}": Group("at hand", f"member beside, or on, a reference at hand: {kind}", {"reference": kind})
        for kind in surveyed_scene.KINDS
    },
    "hard": Group(
        "at hand",
        f"tile, board, grid or points with one of {', '.join(surveyed_scene.HARD)}",
        {"reference": ("tile", "chessboard", "square-grid", "six points"), "hard": tuple(surveyed_scene.HARD)},
    ),
    "cards": Group("cards", "end in place among two to four loose cards nobody checked"),
    "scan": Group("scan", "slices on a scanner nobody calibrated"),
    "scan true": Group(
        "scan",
        "slices on a true scanner, stated so",
        {"scan_scale": (1.0, 1.0), "wobble_mm": 0.0},
        {"scanner_scale_std": 1e-4},
    ),
}


# --- truth ---------------------------------------------------------------------------------------


def moments(section: Section) -> dict[str, float]:
    """Area, extents and centroidal second moments of a polygon, mm: sums over its edges.

    Written apart from the package's integrals, so that both would have to be wrong alike.
    """
    start = np.concatenate(section.loops)
    middle = start.mean(axis=0)
    edges = [(loop - middle, np.roll(loop, -1, axis=0) - middle) for loop in section.loops]
    (x0, y0), (x1, y1) = np.concatenate([a for a, _ in edges]).T, np.concatenate([b for _, b in edges]).T
    cross = x0 * y1 - x1 * y0
    area = math.fsum(cross) / 2
    cx, cy = math.fsum(cross * (x0 + x1)) / (6 * area), math.fsum(cross * (y0 + y1)) / (6 * area)
    ix = math.fsum(cross * (y0 * y0 + y0 * y1 + y1 * y1)) / 12 - area * cy * cy
    iy = math.fsum(cross * (x0 * x0 + x0 * x1 + x1 * x1)) / 12 - area * cx * cx
    ixy = math.fsum(cross * (x0 * y1 + 2 * x0 * y0 + 2 * x1 * y1 + x1 * y0)) / 24 - area * cx * cy
    mean, radius = (ix + iy) / 2, math.hypot((ix - iy) / 2, ixy)
    return {
        "area": area,
        "second_moment_x": ix,
        "second_moment_y": iy,
        "second_moment_major": mean + radius,
        "second_moment_minor": mean - radius,
        "width": float(np.ptp(start[:, 0])),
        "depth": float(np.ptp(start[:, 1])),
    }


def true_properties(section: Section) -> dict[str, float]:
    """Every property of the true section; those of `moments` by the code above."""
    return {**cutface.section_properties(section), **moments(section)}


def places_of_pixels(scene: Scene, pixels: Floats, height: float) -> Floats:
    """(n, 2) true places, mm, seen by pixels on the plane at `height`."""
    view = scene.view
    if isinstance(view, Camera):
        ideal = view.undistort((pixels - view.centre) / view.focal_px)
        rays = np.column_stack([ideal, np.ones(len(ideal))]) @ view.rotation
        return view.position[:2] + (height - view.position[2]) * (rays[:, :2] / rays[:, 2:])
    scale = np.array(view.pixels_per_mm)
    return np.stack([pixels[:, 0] + 0.5, view.height - 0.5 - pixels[:, 1]], axis=-1) / scale


def turn_between(frame: Floats, places: Floats) -> float:
    """Angle, rad, that turns places in the measured frame to true places: least squares."""
    a, b = frame - frame.mean(axis=0), places - places.mean(axis=0)
    return math.atan2(float(np.sum(a[:, 0] * b[:, 1] - a[:, 1] * b[:, 0])), float(np.sum(a * b)))


def turned(section: Section, angle: float) -> Section:
    """The section turned by an angle in rad."""
    c, s = math.cos(angle), math.sin(angle)
    return section.with_vertices(section.vertices @ np.array([[c, s], [-s, c]]))


def middle(section: Section) -> Floats:
    """Middle of the section's bounding box."""
    return (section.vertices.min(axis=0) + section.vertices.max(axis=0)) / 2


def joined(section: Section) -> Section:
    """The section with touching parts made one."""
    from shapely import unary_union

    return Section.from_polygons(unary_union(section.to_polygon().geoms))  # pyright: ignore[reportArgumentType]


# --- one picture ---------------------------------------------------------------------------------


@dataclass(frozen=True)
class Outcome:
    """What came of one member of one picture.

    refusal : code of the refusal, or None
    errors : property to (relative error, error / std, whether the interval holds the truth)
    warnings : codes beyond the routine ones
    """

    seed: int
    refusal: str | None
    errors: Mapping[str, tuple[float, float, bool]] = field(default_factory=dict)
    warnings: tuple[str, ...] = ()
    note: str = ""

    @property
    def silent(self) -> bool:
        """Measured, wrong, and not a word about it."""
        wrong = any(abs(self.errors[p][1]) > 3 for p in JUDGED if p in self.errors)
        return self.refusal is None and wrong and not self.warnings


def statements(scene: Scene, group: Group) -> dict[str, Any]:
    """The options a person would give for this picture."""
    options = dict(group.stated)
    if "thickness_mm" in scene.stated:
        options["face_height"] = scene.stated["thickness_mm"]
    if "check_mm" in scene.stated:
        options["check_lengths"] = scene.stated["check_mm"]
    return options


def judge(scene: Scene, path: Path, options: Mapping[str, Any]) -> list[Outcome]:
    """Measure the picture at `path` and compare every member with the truth."""
    seed = scene.seed
    try:
        measurement = cutface.measure(cutface.load_photo(path), **options)
    except CutfaceError as refusal:
        return [Outcome(seed, refusal.code, note=refusal.message)]
    outcomes = []
    truths = [joined(member.section) for member in scene.members]
    heights = [float(member.height.at(member.section.vertices.mean(axis=0))) for member in scene.members]
    left = set(range(len(truths)))
    common = {notice.code for notice in measurement.notices}
    for member in measurement.members:
        frame = member.section.vertices
        places = places_of_pixels(scene, measurement.to_pixels(frame), heights[0])
        centre = (places.min(axis=0) + places.max(axis=0)) / 2
        gaps = {n: float(np.linalg.norm(centre - middle(truths[n]))) for n in left}
        nearest = min(gaps, key=lambda n: gaps[n], default=None)
        if nearest is None or gaps[nearest] > 0.5 * np.ptp(truths[nearest].vertices, axis=0).max():
            outcomes.append(Outcome(seed, None, dict.fromkeys(JUDGED, (1.0, 99.0, False)), note="not a member"))
            continue
        left.discard(nearest)
        angle = turn_between(frame, places) if scene.kind == "cards" else 0.0
        true = true_properties(turned(truths[nearest], -angle))
        errors = {}
        for name in SHOWN:
            quantity = member.quantities.get(name)
            if quantity is None or name not in true:
                continue
            error = quantity.value - true[name]
            low, high = quantity.interval95
            errors[name] = (error / true[name], error / quantity.std, low <= true[name] <= high)
        codes = (common | {notice.code for notice in member.notices}) - ROUTINE
        note = f"area {member.quantities['area'].value:.2f} true {true['area']:.2f}"
        outcomes.append(Outcome(seed, None, errors, tuple(sorted(codes)), note))
    outcomes.extend(Outcome(seed, "member-missed") for _ in left)
    return outcomes


def judge_at_hand(scene: SurveyedScene, path: Path, options: Mapping[str, Any]) -> list[Outcome]:
    """Measure a member beside a reference at hand; judged by what does not depend on how the axes lie."""
    try:
        measurement = cutface.measure(cutface.load_photo(path), **options)
    except CutfaceError as refusal:
        return [Outcome(scene.seed, refusal.code, note=f"{scene.drawn} {refusal.message}")]
    (member,) = measurement.members
    true = true_properties(scene.section)
    errors = {}
    for name in ("area", "second_moment_major", "second_moment_minor"):
        quantity = member.quantities[name]
        error = quantity.value - true[name]
        low, high = quantity.interval95
        errors[name] = (error / true[name], error / quantity.std, low <= true[name] <= high)
    codes = {n.code for n in (*measurement.notices, *member.notices)} - ROUTINE
    return [Outcome(scene.seed, None, errors, tuple(sorted(codes)), f"{scene.drawn}")]


def draw_at_hand(group: Group, seed: int, megapixels: float) -> SurveyedScene:
    """A member beside a reference at hand, number `seed`; of several kinds and hardships each in its turn."""
    kinds, hard = group.drawn["reference"], group.drawn.get("hard", ())
    kind = kinds if isinstance(kinds, str) else kinds[seed // max(1, len(hard)) % len(kinds)]
    hardship = hard[seed % len(hard)] if hard else None
    more = dict(surveyed_scene.HARD[hardship]) if hardship else {}
    scene = surveyed_scene.draw(kind, seed, megapixels=megapixels, **more)
    return replace(scene, drawn={**scene.drawn, "hard": hardship})


def draw_scene(group: Group, seed: int, megapixels: float) -> Scene:
    """The group's scene number `seed`."""
    drawn = {k: v for k, v in group.drawn.items() if v is not None}
    if group.kind != "scan":
        drawn["megapixels"] = megapixels
    rng = np.random.default_rng([seed, 99])
    if "thickness_mm" in group.drawn and group.drawn["thickness_mm"] is None:
        drawn["thickness_mm"] = float(round(rng.uniform(2, 25)))
    if isinstance(group.drawn.get("thickness_mm"), tuple):
        drawn["thickness_mm"] = float(rng.uniform(*group.drawn["thickness_mm"]))
    if group.kind == "cards":
        # Which parts of a composite belong to the member is for a person to say: not drawn here.
        drawn["family"] = str(rng.choice(["timber", "timber", "rolled_i", "channel", "corroded", "blob"]))
    return random_scene(seed, group.kind, **drawn)


# --- cost ----------------------------------------------------------------------------------------


def cost_of(path: Path, options: Mapping[str, Any]) -> dict[str, float]:
    """Time and memory of measuring one file, in a process of its own on one core.

    Returns seconds to decode and to measure (the quickest of three), and peak memory above that before
    the file was read, as a ratio to the decoded pixels' bytes.
    """
    small = path.with_name("small.jpg")
    if not small.exists():
        write(random_scene(1, "sheet", megapixels=1.0, family="angle", look="painted"), small)
    command = [sys.executable, str(Path(__file__).resolve()), "--probe", str(path), str(small)]
    environment = {**os.environ, "OMP_NUM_THREADS": "1", "OPENBLAS_NUM_THREADS": "1"}
    answer = subprocess.run(
        [*command, "--options", json.dumps(options)], check=True, capture_output=True, text=True, env=environment
    )
    return json.loads(answer.stdout.splitlines()[-1])


def peak_memory() -> int:
    """Largest resident memory of this process so far, bytes."""
    status = Path("/proc/self/status")
    if status.exists():
        # Linux hands a parent's ru_maxrss down to its children; this figure is the process's own.
        return 1024 * int(next(line for line in status.read_text().splitlines() if line.startswith("VmHWM")).split()[1])
    import resource

    return resource.getrusage(resource.RUSAGE_SELF).ru_maxrss * (1 if sys.platform == "darwin" else 1024)


def probe(path: Path, small: Path, options: Mapping[str, Any]) -> None:
    """Print the cost of measuring `path` as JSON; runs alone in its process.

    The small picture is measured first: libraries are loaded once, not for every picture.
    """
    import cv2
    import psutil

    if hasattr(os, "sched_setaffinity"):
        os.sched_setaffinity(0, {min(os.sched_getaffinity(0))})
    cv2.setNumThreads(1)
    with contextlib.suppress(CutfaceError):
        cutface.measure(cutface.load_photo(small), face_height=0.0)
    before = psutil.Process().memory_info().rss
    times = []
    for _ in range(3):
        start = time.perf_counter()
        with contextlib.suppress(CutfaceError):
            cutface.measure(cutface.load_photo(path), **options)
        times.append(time.perf_counter() - start)
    peak = peak_memory()
    data = np.frombuffer(path.read_bytes(), np.uint8)
    decodes = []
    for _ in range(5):
        start = time.perf_counter()
        picture = cv2.imdecode(data, cv2.IMREAD_COLOR)
        decodes.append(time.perf_counter() - start)
    assert picture is not None
    print(json.dumps({"decode": min(decodes), "measure": min(times), "memory": (peak - before) / picture.nbytes}))


# --- the table -----------------------------------------------------------------------------------


def report(name: str, group: Group, outcomes: Sequence[Outcome], costs: Sequence[Mapping[str, float]]) -> None:
    """Print a group's figures."""
    measured = [o for o in outcomes if o.refusal is None]
    refused = Counter(o.refusal for o in outcomes if o.refusal is not None)
    print(f"\n{name}: {group.about}")
    print(f"  {len(measured)} members measured, {sum(refused.values())} refused {dict(refused) or ''}")
    if measured:
        print(f"  {'':22}{'median %':>10}{'95th %':>10}{'error/u':>10}{'coverage %':>12}{'n':>6}")
    for prop in SHOWN:
        rows = [o.errors[prop] for o in measured if prop in o.errors]
        if not rows:
            continue
        relative = 100 * np.abs([r[0] for r in rows])
        ratio = float(np.sqrt(np.mean(np.square([r[1] for r in rows]))))
        held = 100 * float(np.mean([r[2] for r in rows]))
        low, high = np.percentile(relative, (50, 95))
        print(f"  {prop:22}{low:10.3f}{high:10.3f}{ratio:10.2f}{held:12.1f}{len(rows):6}")
    silent = [o.seed for o in measured if o.silent]
    warned = Counter(code for o in measured for code in o.warnings)
    print(f"  silent failures: {len(silent)} {silent[:12] or ''}; warnings: {dict(warned) or 'none'}")
    if costs:
        ratio = [c["measure"] / c["decode"] for c in costs]
        print(
            f"  cost on one core: {np.median(ratio):.1f} x decoding ({np.median([c['measure'] for c in costs]):.2f} s),"
            f" peak memory {np.max([c['memory'] for c in costs]):.1f} x the decoded pixels"
        )


def line(scene: Scene | SurveyedScene, outcome: Outcome) -> str:
    """One member's result in a line."""
    errors = [f"{p} {100 * e[0]:+.3f} % {e[1]:+.1f} u" for p, e in outcome.errors.items() if p in JUDGED]
    names = ("family", "look", "board", "focal_35mm", "tilt_deg", "thickness_mm", "tone", "background")
    values = {k: scene.drawn[k] for k in names if k in scene.drawn}
    drawn = [f"{k}={v:.3g}" if isinstance(v, float) else f"{k}={v}" for k, v in values.items()]
    parts = [outcome.refusal or "measured", *errors, *outcome.warnings, outcome.note, *drawn]
    return f"{outcome.seed}: " + ", ".join(part for part in parts if part)


def run(name: str, arguments: argparse.Namespace) -> None:
    """Draw, write and measure a group's pictures, then print its figures."""
    group = GROUPS[name]
    outcomes: list[Outcome] = []
    costs: list[Mapping[str, float]] = []
    with tempfile.TemporaryDirectory() as folder:
        for number in range(arguments.scenes):
            seed = arguments.seed * 100_000 + number
            path = Path(folder) / f"{name.replace(' ', '_')}_{seed}.jpg"
            if group.kind == "at hand":
                scene = draw_at_hand(group, seed, arguments.megapixels)
                Image.fromarray(scene.photo.pixels).save(path, quality=95)
                options = {"references": scene.texts, "seeds": (scene.seed_px,), "focal_length_35mm": 28.0}
                new = judge_at_hand(scene, path, options)
            else:
                scene = draw_scene(group, seed, arguments.megapixels)
                write(scene, path)
                options = statements(scene, group)
                new = judge(scene, path, options)
            outcomes.extend(new)
            if arguments.list:
                for o in new:
                    print(line(scene, o))
            if arguments.keep and any(o.silent or o.refusal for o in new):
                arguments.keep.mkdir(parents=True, exist_ok=True)
                (arguments.keep / path.name).write_bytes(path.read_bytes())
            if number < arguments.costs:
                costs.append(cost_of(path, options))
            path.unlink()
    report(name, group, outcomes, costs)


def main() -> None:
    """Read the command and run the groups."""
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    parser.add_argument("--scenes", type=int, default=20, help="pictures a group")
    parser.add_argument("--seed", type=int, default=1, help="another seed, other pictures")
    parser.add_argument(
        "--kind", nargs="*", default=list(GROUPS), choices=list(GROUPS), help="groups of pictures, default: all"
    )
    parser.add_argument("--megapixels", type=float, default=12.0, help="size of photos")
    parser.add_argument("--costs", type=int, default=2, help="pictures a group to take time and memory of")
    parser.add_argument("--list", action="store_true", help="a line for every member")
    parser.add_argument("--keep", type=Path, default=None, help="folder for pictures refused or silently wrong")
    parser.add_argument("--probe", type=Path, nargs=2, default=None, help=argparse.SUPPRESS)
    parser.add_argument("--options", type=json.loads, default={}, help=argparse.SUPPRESS)
    arguments = parser.parse_args()
    if arguments.probe is not None:
        probe(*arguments.probe, arguments.options)
        return
    for name in arguments.kind:
        run(name, arguments)


if __name__ == "__main__":
    main()
