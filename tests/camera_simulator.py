"""Pictures of cut faces whose truth is known: exact polygons seen by a full camera or scanner.

    from camera_simulator import random_scene, render, truth, write
    scene = random_scene(7, kind="sheet", thickness_mm=0.0, megapixels=3)  # or "cards", "scan"
    picture = render(scene)            # (h, w, 3) uint8 RGB, upright
    write(scene, "picture.jpg")        # JPEG with EXIF or PNG, with resolution for a scan
    scene.members[0].section           # the true outline, TRUE mm
    truth(scene)                       # everything else, ready for JSON

Frame of the truth: millimetres in the plane of the reference, x right, y up. For a sheet the origin is
the lower left corner of the printed checker (print scale error included: the truth is in true mm). For
cards it is the plane of the faces, upright as seen; `prints[i].origin` and `.angle` say where the cards
are. For a scan it is the lower left of the glass.

Any name drawn by `random_scene` can be overridden by keyword; `Scene.drawn` lists names and values.
Written without the measuring code: only the geometry of the printed boards and the section type are
shared. Polygons are rasterised by exact area at twice the resolution, blurred by the lens and averaged
over the pixels; textures ignore the lens's distortion.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import replace
from typing import Any

import numpy as np
from cutface.props.section import Section
from cutface.vision.references.board import CARD_SETS, SHEETS
from simulated_scene import Height, Light, Member, Print, Scene, Sensor
from simulated_sensor import encoded_file, render, write
from simulated_shapes import FAMILIES, flitch, random_section, timber
from simulated_view import Camera, Flatbed, Floats

FULL_FRAME_DIAGONAL = 43.27
CHECK_MM = 140.0  # the two lengths on every print that a person checks with a calliper


def truth(scene: Scene) -> dict[str, Any]:
    """What is true of the scene and what was stated of it, as plain values for JSON."""

    def plain(value: Any) -> Any:
        if isinstance(value, np.ndarray):
            return value.tolist()
        if isinstance(value, np.generic):
            return value.item()
        if isinstance(value, tuple | list):
            return [plain(v) for v in value]
        if isinstance(value, Mapping):
            return {k: plain(v) for k, v in value.items()}
        if isinstance(value, Section):
            return f"section of {len(value.parts)} part(s)"
        return value

    view = scene.view
    if isinstance(view, Camera):
        camera = {
            "focal_px": view.focal_px,
            "centre_px": plain(view.centre),
            "distortion": plain(view.distortion),
            "position_mm": plain(view.position),
            "rotation": plain(view.rotation),
        }
    else:
        camera = {"dpi": plain(view.dpi), "scale": plain(view.scale), "wobble_mm": view.wobble_mm}
    return {
        "kind": scene.kind,
        "seed": scene.seed,
        "width_px": view.width,
        "height_px": view.height,
        "camera": camera,
        "prints": [
            {
                "board": p.board.name,
                "scale": plain(p.scale),
                "gain_mm": p.gain_mm,
                "origin_mm": plain(p.origin),
                "angle_rad": p.angle,
            }
            for p in scene.prints
        ],
        "members": [
            {
                "height_mm": m.height.base,
                "looks": list(m.looks),
                "section": {
                    "unit": "mm",
                    "parts": [
                        {"shell": part.shell.round(6).tolist(), "holes": [h.round(6).tolist() for h in part.holes]}
                        for part in m.section.parts
                    ],
                },
            }
            for m in scene.members
        ],
        "stated": plain(dict(scene.stated)),
        "drawn": plain(dict(scene.drawn)),
    }


class _Draws:
    """Values drawn in a fixed order; an override replaces a value without disturbing the others."""

    def __init__(self, rng: np.random.Generator, overrides: Mapping[str, Any]) -> None:
        self.rng = rng
        self._overrides = dict(overrides)
        self.values: dict[str, Any] = {}

    def __call__(self, name: str, value: Any) -> Any:
        value = self._overrides.pop(name, value)
        self.values[name] = value
        return value

    def finish(self) -> None:
        if self._overrides:
            raise TypeError(f"unknown override(s) {sorted(self._overrides)}; known: {sorted(self.values)}")


def random_scene(seed: int, kind: str = "sheet", **overrides: Any) -> Scene:
    """A scene of the kind "sheet", "cards" or "scan" drawn from the stated input distributions.

    True inputs are drawn about their stated values with the standard uncertainties a careful person
    without checks would assume: print scale 0.3 % per axis, print gain 0.08 +- 0.04 mm, offset of the
    face 0.5 mm, focal length 3 %, flatness 0.3 mm, face parallel to 0.5 deg, scanner scale 0.2 % per
    axis. Raises ValueError for an unknown kind, TypeError for an unknown override.
    """
    makers = {"sheet": _sheet_scene, "cards": _cards_scene, "scan": _scan_scene}
    if kind not in makers:
        raise ValueError(f"unknown kind of scene {kind!r}")
    rng = np.random.default_rng([seed, sorted(makers).index(kind)])
    draw = _Draws(rng, overrides)
    scene = makers[kind](seed, draw)
    draw.finish()
    return replace(scene, drawn=draw.values)


def _sensor(draw: _Draws, *, scanner: bool = False) -> Sensor:
    rng = draw.rng
    tones = ["sRGB", "sRGB", "gamma"] if scanner else ["sRGB", "sRGB", "gamma", "contrast"]
    return Sensor(
        blur_px=draw("blur_px", rng.uniform(0.5, 0.9)),
        defocus_px=draw("defocus_px", float(rng.choice([0.0, 0.0, 0.8, 1.2]))),
        white=draw("white", rng.uniform(0.6, 0.85)),
        full_well=draw("full_well", float(10 ** rng.uniform(3.7, 4.5))),
        read_noise=draw("read_noise", rng.uniform(0.0008, 0.003)),
        mosaic=draw("mosaic", bool(rng.random() < 0.5) and not scanner),
        tone=draw("tone", str(rng.choice(tones))),
        sharpening=draw("sharpening", float(rng.choice([0.0, 0.0, 0.3, 0.6]))),
        quality=draw("quality", int(rng.integers(88, 97))),
    )


def _light(draw: _Draws) -> Light:
    rng = draw.rng
    soft = (rng.uniform(0, 6.28), rng.uniform(-0.4, 0.6), rng.uniform(0.3, 0.8), rng.uniform(0.1, 0.35))
    return Light(
        gradient=draw("gradient", tuple(rng.uniform(-0.25, 0.25, 2))),
        vignetting=draw("vignetting", rng.uniform(0.03, 0.25)),
        azimuth=draw("lamp_azimuth", rng.uniform(0, 6.28)),
        elevation=draw("lamp_elevation", rng.uniform(0.8, 1.3)),
        shadow=draw("shadow", rng.uniform(0.1, 0.55)),
        penumbra=draw("penumbra", rng.uniform(0.3, 1.2)),
        soft_edge=draw("soft_edge", soft if rng.random() < 0.4 else None),
        tint=draw("tint", tuple(np.clip(1 + rng.normal(0, (0.03, 0.0, 0.04)), 0.85, 1.15))),
    )


LOOK_OF = {"extrusion": "aluminium", "timber": "wood", "corroded": "rust", "blob": "wood", "flitch": "wood"}


def _camera(draw: _Draws, around: Floats, portrait: bool) -> tuple[Camera, float, int]:
    """A camera that holds the points `around` (n, 2) in its frame; its stated focal length, orientation tag."""
    rng = draw.rng
    megapixels = draw("megapixels", 12.0)
    long, short = np.sqrt(megapixels * 1e6 * 4 / 3), np.sqrt(megapixels * 1e6 * 3 / 4)
    width, height = (round(short), round(long)) if portrait else (round(long), round(short))
    stated_f = draw("focal_35mm", float(rng.choice([26, 28, 35, 50, 52, 70, 77])))
    true_f = stated_f * (1 + draw("focal_error", rng.normal(0, 0.03)))
    offset = np.array(draw("centre_offset", tuple(rng.normal(0, 0.005, 2)))) * max(width, height)
    corner = FULL_FRAME_DIAGONAL / 2 / true_f
    lens = (
        rng.normal(0, 0.007) / corner**2,
        rng.normal(0, 0.002) / corner**4,
        rng.normal(0, 2e-4),
        rng.normal(0, 2e-4),
        0.0,
    )
    tilt = draw("tilt_deg", min(abs(rng.normal(0, 12.0)), 35.0))
    direction = draw("tilt_direction_deg", rng.uniform(0, 360))
    turn = draw("turn_deg", rng.normal(0, 4.0) + 180 * int(rng.random() < 0.15))
    fill = draw("fill", rng.uniform(0.82, 0.96))
    aim_off = draw("aim_offset", tuple(rng.normal(0, 0.015, 2)))
    options = {
        "width": width,
        "height": height,
        "focal_px": true_f / FULL_FRAME_DIAGONAL * float(np.hypot(width, height)),
        "centre": ((width - 1) / 2 + offset[0], (height - 1) / 2 + offset[1]),
        "distortion": draw("distortion", lens),
    }
    low, high = around.min(axis=0), around.max(axis=0)
    aim = (low + high) / 2 + np.array(aim_off) * (high - low)
    points = np.column_stack([around, np.zeros(len(around))])

    def camera(distance: float) -> Camera:
        return Camera.looking_at((float(aim[0]), float(aim[1])), distance, tilt, direction, turn, **options)

    def too_close(distance: float) -> bool:
        # The ideal image decides: far outside the frame a lens polynomial may fold back.
        pixels = replace(camera(distance), distortion=(0.0,) * 5).project(points)
        half = np.array([width, height]) / 2
        return bool(np.any(np.abs((pixels + 0.5 - half) / half) > fill))

    near, far = 0.6 * float(np.linalg.norm(high - low)), 60 * float(np.linalg.norm(high - low))
    for _ in range(50):
        middle = np.sqrt(near * far)
        near, far = (middle, far) if too_close(middle) else (near, middle)
    tag = draw("orientation_tag", int(rng.choice([1, 1, 3, 6, 8])))
    return camera(far), stated_f, tag


def _placed(section: Section, centre: Floats, angle: float) -> Section:
    c, s = np.cos(angle), np.sin(angle)
    return section.with_vertices(section.vertices @ np.array([[c, s], [-s, c]]) + centre)


def _height(draw: _Draws, stated: float, centre: Floats) -> Height:
    rng = draw.rng
    error = draw("offset_error_mm", rng.normal(0, 0.5))
    slope = np.tan(np.radians(draw("face_slope_deg", tuple(rng.normal(0, 0.35, 2)))))
    # A slice lying on the sheet is not below it.
    base = max(stated + error, 0.0) if stated > 0 else stated + error
    return Height(base - float(slope @ centre), float(slope[0]), float(slope[1]))


def _sheet_scene(seed: int, draw: _Draws) -> Scene:
    rng = draw.rng
    board = SHEETS[draw("board", str(rng.choice(["A4", "A4", "A3", "Letter", "Tabloid"])))]
    assert board.window_mm is not None
    x0, y0, x1, y1 = board.window_mm
    scale = draw("print_scale", tuple(1 + rng.normal(0, 0.003, 2)))
    gain = draw("print_gain_mm", max(rng.normal(0.08, 0.04), 0.0))
    bow = draw("bow_mm", rng.normal(0, 0.15))
    family = draw("family", str(rng.choice(FAMILIES)))
    size = draw("face_size", rng.uniform(0.55, 0.85))
    shape_rng = np.random.default_rng([seed, 5])
    section = draw("section", None) or random_section(shape_rng, family, (size * (x1 - x0), size * (y1 - y0)))
    section = _placed(
        section,
        np.array([(x0 + x1) / 2, (y0 + y1) / 2]) + rng.uniform(-0.03, 0.03, 2) * (x1 - x0),
        draw("face_angle_deg", rng.uniform(-4, 4)) * np.pi / 180,
    )
    look = draw("look", LOOK_OF.get(family, str(rng.choice(["steel", "steel", "rust", "painted"]))))
    thickness = draw("thickness_mm", float(rng.choice([0.0, 0.0, round(rng.uniform(2, 25))])))
    height = _height(draw, thickness, np.mean(section.vertices, axis=0))
    member = Member(
        section,
        (look,) * len(section.parts),
        height,
        chamfer_mm=draw("chamfer_mm", 0.0),
        brightness=draw("brightness", rng.uniform(0.7, 1.15)),
        seed=seed,
    )
    if thickness == 0:
        # A coplanar face: the sheet is held level with it, no walls are seen.
        centre_height = float(height.at(np.mean(section.vertices, axis=0)))
        member = replace(member, base=centre_height)
    sheet = Print(board, scale, gain, bow_mm=bow)
    camera, stated_f, tag = _camera(draw, sheet.place(sheet.paper)[:, :2], portrait=True)
    check_u = draw("check_std_mm", None)
    stated: dict[str, Any] = {"thickness_mm": thickness, "focal_35mm": stated_f, "board": board.name}
    if check_u is not None:
        stated["check_mm"] = tuple(CHECK_MM * np.array(scale) + rng.normal(0, check_u, 2))
        stated["check_std_mm"] = check_u
    background = draw("background", str(rng.choice(["oak table", "bench", "dark mat"])))
    return Scene("sheet", seed, camera, (sheet,), (member,), background, _light(draw), _sensor(draw), 0.0, tag, stated)


def _cards_scene(seed: int, draw: _Draws) -> Scene:
    rng = draw.rng
    family = draw("family", str(rng.choice(["timber", "timber", "rolled_i", "channel", "corroded", "flitch", "blob"])))
    shape_rng = np.random.default_rng([seed, 6])
    depth = draw("depth_mm", shape_rng.uniform(120, 300))
    section = draw("section", None)
    if section is None:
        if family == "flitch":
            section = flitch(depth * 0.25, depth, round(depth * 0.05), round(depth * 0.04))
        elif family == "timber":
            section = timber(depth * shape_rng.uniform(0.25, 0.5), depth, (0, 0), 1.0)
        else:
            section = random_section(shape_rng, family, (0.8 * depth, depth))
    section = _placed(section, np.zeros(2), draw("face_angle_deg", rng.uniform(-3, 3)) * np.pi / 180)
    default = ("wood", "rust", "wood") if family == "flitch" else (LOOK_OF.get(family, "rust"),) * len(section.parts)
    looks = tuple(draw("looks", default))
    offset = draw("thickness_mm", 0.0)
    height = _height(draw, offset, np.zeros(2))
    gap = draw("gap_mm", float(rng.choice([0.0, 4.0, 7.0])))
    brightness = draw("brightness", rng.uniform(0.7, 1.15))
    chamfer = draw("chamfer_mm", 0.0)
    member = Member(section, looks, height, gap_mm=gap, chamfer_mm=chamfer, brightness=brightness, seed=seed)
    if offset == 0:
        member = replace(member, base=height.base)

    x0, y0 = section.vertices.min(axis=0)
    x1, y1 = section.vertices.max(axis=0)
    big = draw("card_set", "large" if max(x1 - x0, y1 - y0) > 260 else "small")
    scale = draw("print_scale", tuple(1 + rng.normal(0, 0.003, 2)))
    gain = draw("print_gain_mm", max(rng.normal(0.08, 0.04), 0.0))
    count = draw("cards", int(rng.choice([2, 3, 4, 4])))
    flatness = draw("card_flatness_mm", 0.3)
    taped = draw("taped", bool(rng.random() < 0.5))
    prints = []
    sides = [(x0, 0.0, -1.0, 0.0), (x1, 0.0, 1.0, 0.0), (0.0, y1, 0.0, 1.0), (0.0, y0, 0.0, -1.0)][:count]
    for number, (ex, ey, nx, ny) in enumerate(sides):
        board = CARD_SETS[big][number]
        half = np.array(board.size_mm) / 2
        turn = rng.choice([0, 0, 0, 1, 2, 3]) * np.pi / 2 + rng.normal(0, 0.06)
        # Neither paper nor tape may lie on the face.
        reach = float(half.max()) + 6.0 + gap + (13.0 if taped else 0.0) + rng.uniform(5, 18)
        slide = rng.uniform(-0.3, 0.3) * (y1 - y0 if nx else x1 - x0)
        centre = np.array([ex + nx * reach + (slide if ny else 0), ey + ny * reach + (slide if nx else 0)])
        c, s = np.cos(turn), np.sin(turn)
        local = half * scale
        origin = centre - (c * local[0] - s * local[1], s * local[0] + c * local[1])
        slope = rng.normal(0, flatness / 100, 2)
        tilted = Height(rng.normal(0, flatness) - float(slope @ half), slope[0], slope[1])
        prints.append(Print(board, scale, gain, (float(origin[0]), float(origin[1])), float(turn), tilted, taped=taped))
    around = np.concatenate([p.place(p.paper)[:, :2] for p in prints] + [section.vertices])
    portrait = bool(np.ptp(around[:, 1]) > np.ptp(around[:, 0]))
    camera, stated_f, tag = _camera(draw, around, portrait)
    stated: dict[str, Any] = {"thickness_mm": offset, "focal_35mm": stated_f}
    check_u = draw("check_std_mm", None)
    if check_u is not None:
        stated["check_mm"] = tuple(CHECK_MM * np.array(scale) + rng.normal(0, check_u, 2))
        stated["check_std_mm"] = check_u
    background = draw("background", str(rng.choice(["brickwork", "plaster"])))
    return Scene(
        "cards", seed, camera, tuple(prints), (member,), background, _light(draw), _sensor(draw), 0.0, tag, stated
    )


def _scan_scene(seed: int, draw: _Draws) -> Scene:
    rng = draw.rng
    dpi = draw("dpi", (600.0, 600.0))
    glass = draw("glass_mm", (130.0, 95.0))
    count = draw("count", int(rng.integers(1, 4)))
    family = draw("family", str(rng.choice([f for f in FAMILIES if f != "timber"])))
    columns = int(np.ceil(np.sqrt(count * glass[0] / glass[1])))
    rows = -(-count // columns)
    cell = np.array([glass[0] / columns, glass[1] / rows])
    given = draw("section", None)
    skew = draw("skew_deg", rng.uniform(-8, 8))
    look = draw("look", LOOK_OF.get(family, "steel"))
    brightness = draw("brightness", rng.uniform(0.8, 1.15))
    chamfer = draw("chamfer_mm", 0.0)
    shape_rng = np.random.default_rng([seed, 7])
    shape = given or random_section(shape_rng, family, tuple(0.72 * cell))
    members = []
    for number in range(count):
        centre = cell * (number % columns + 0.5, number // columns + 0.5) + rng.uniform(-1.5, 1.5, 2)
        turned = _placed(shape, centre, np.radians(skew + rng.normal(0, 2.0)))
        looks = (look,) * len(turned.parts)
        members.append(Member(turned, looks, chamfer_mm=chamfer, brightness=brightness, seed=seed + 100 * number))
    scale = draw("scan_scale", tuple(1 + rng.normal(0, 0.002, 2)))
    bed = Flatbed(
        round(glass[0] * dpi[0] / 25.4),
        round(glass[1] * dpi[1] / 25.4),
        dpi,
        scale,
        # Of 0.15 mm r.m.s., changing over the length of the bed.
        draw("wobble_mm", abs(rng.normal(0, 0.15 * np.sqrt(2)))),
        draw("wobble_period_mm", rng.uniform(600, 1000)),
        tuple(rng.uniform(0, 6.28, 2)),
    )
    lids = ["dark lid", "grey lid", "blue lid"] if look in ("aluminium", "steel") else ["white lid", "blue lid"]
    background = draw("background", str(rng.choice(lids)))
    return Scene(
        "scan",
        seed,
        bed,
        (),
        tuple(members),
        background,
        Light(vignetting=0.0, shadow=0.0),
        _sensor(draw, scanner=True),
        0.0,
        1,
        {"dpi": dpi},
    )


__all__ = [
    "Camera",
    "Flatbed",
    "Height",
    "Light",
    "Member",
    "Print",
    "Scene",
    "Sensor",
    "encoded_file",
    "random_scene",
    "render",
    "truth",
    "write",
]
