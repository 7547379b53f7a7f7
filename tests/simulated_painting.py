"""Painting a simulated scene as the lens sees it, front to back, in linear light.

Areas of polygons are exact at twice the picture's resolution; they are blurred by the lens and only
then averaged over the pixels. Knows nothing of noise, tone curves or files.
"""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any

import cv2
import numpy as np
from cutface.props.section import Section
from simulated_looks import albedo
from simulated_raster import Box, bounding_box, coverage, loops_to_segments, subdivided
from simulated_scene import Height, Light, Member, Print, Scene, Sensor
from simulated_shapes import rings
from simulated_view import Camera, Floats, Image, View, pixel_segments

PAPER = 0.86
INK = 0.045
FINE = 2  # areas are kept at this many times the resolution until the lens has blurred them


def _lifted(loops: Sequence[Floats], height: Height) -> Floats:
    segments = loops_to_segments(loops)
    return np.concatenate([segments, height.at(segments)[..., None]], axis=-1)


def _grid(box: Box) -> tuple[Floats, Floats]:
    x0, y0, x1, y1 = box
    return np.arange(x0, x1, dtype=float)[None, :], np.arange(y0, y1, dtype=float)[:, None]


def _slices(box: Box, times: int = 1) -> tuple[slice, slice]:
    return slice(box[1] * times, box[3] * times), slice(box[0] * times, box[2] * times)


def _texture(view: View, box: Box, look: str, z: float, seed: int, origin: Floats | None = None) -> Image:
    x, y = view.on_plane(*_grid(box), z)
    if origin is not None:
        x, y = x - np.float32(origin[0]), y - np.float32(origin[1])
    shape = (box[3] - box[1], box[2] - box[0])
    return albedo(look, np.broadcast_to(x, shape), np.broadcast_to(y, shape), seed)


class _Canvas:
    """The picture while it is painted, front to back.

    What a layer shows is its area that nothing nearer covers. These areas are kept at twice the
    resolution, seen through the lens's blur, and only then averaged over the pixels: so profiles
    of edges are those of a lens before a sensor, not of a blurred raster.
    """

    def __init__(self, view: View, sensor: Sensor) -> None:
        self.view, self.sensor = view, sensor
        self.image = np.zeros((view.height, view.width, 3), np.float32)
        self.shade = np.ones((view.height, view.width), np.float32)  # shadows on what is still to come
        self.free = np.ones((view.height * FINE, view.width * FINE), np.float32)
        self.reach = int(np.ceil(5 * sensor.blur_px + sensor.defocus_px)) + 2

    def box(self, segments: Floats) -> Box:
        """Pixels that an area can reach through the blur."""
        x0, y0, x1, y1 = bounding_box(segments, self.view.width, self.view.height)
        if x1 <= x0 or y1 <= y0:
            return (0, 0, 0, 0)
        r = self.reach
        return max(x0 - r, 0), max(y0 - r, 0), min(x1 + r, self.view.width), min(y1 + r, self.view.height)

    def cover(self, segments: Floats, box: Box) -> Image:
        """Share of the fine pixels of the box inside the segments (in pixels of the picture)."""
        fine = (box[0] * FINE, box[1] * FINE, box[2] * FINE, box[3] * FINE)
        return coverage(segments * FINE + (FINE - 1) / 2, fine)

    def add(self, box: Box, shares: Sequence[Image], colours: Sequence[Image | float]) -> None:
        """Paint areas that share no ground, behind everything painted before."""
        free = self.free[_slices(box, FINE)]
        area, shade = self.image[_slices(box)], self.shade[_slices(box)]
        visible = [share * free for share in shares]
        for share, colour in zip(visible, colours, strict=True):
            free -= share
            area += (self.through_lens(share) * shade)[..., None] * colour
        np.maximum(free, 0, out=free)

    def through_lens(self, share: Image) -> Image:
        """Fine areas blurred by the lens, averaged over the pixels."""
        sensor = self.sensor
        if sensor.defocus_px > 0.3:
            share = cv2.filter2D(share, -1, _disc(sensor.defocus_px * FINE), borderType=cv2.BORDER_REPLICATE)
        if sensor.blur_px > 0:
            sigma = sensor.blur_px * FINE
            side = 2 * int(np.ceil(5 * sigma)) + 1
            share = cv2.GaussianBlur(share, (side, side), sigma, borderType=cv2.BORDER_REPLICATE)
        return cv2.resize(share, None, fx=1 / FINE, fy=1 / FINE, interpolation=cv2.INTER_AREA)

    def textured(self, image: Image) -> Image:
        """A surface's texture as the lens shows it."""
        sigma = float(np.hypot(self.sensor.blur_px, self.sensor.defocus_px / 2))
        return cv2.GaussianBlur(image, (0, 0), sigma) if sigma > 0 else image


def _paint_print(canvas: _Canvas, sheet: Print, seed: int) -> None:
    # Paper and ink bow with the sheet, so their edges are cut in board coordinates first.
    def segments(loops: Sequence[Floats]) -> Floats:
        flat = loops_to_segments(loops)
        pieces = np.maximum(np.ceil(np.linalg.norm(flat[:, 1] - flat[:, 0], axis=-1) / 1.5), 1).astype(np.intp)
        if sheet.bow_mm == 0:
            pieces = np.ones_like(pieces)
        return pixel_segments(canvas.view, sheet.place(subdivided(flat, pieces)))

    if sheet.taped:
        tape = segments(sheet.tape())
        box = canvas.box(tape)
        crepe = _texture(canvas.view, box, "tape", 0.0, seed)
        canvas.add(box, [canvas.cover(tape, box)], [canvas.textured(crepe)])
    ink = segments(sheet.ink())
    box = canvas.box(ink)
    canvas.add(box, [canvas.cover(ink, box)], [INK])
    paper = segments([sheet.paper])
    box = canvas.box(paper)
    canvas.add(box, [canvas.cover(paper, box)], [_texture(canvas.view, box, "paper", 0.0, seed)])
    if isinstance(canvas.view, Camera):
        _darken(canvas, _lifted([sheet.place(sheet.paper)[:, :2]], Height()), 1.0, 0.35)


def sweep(bottom: Sequence[Floats], top: Sequence[Floats]) -> list[Floats]:
    """Loops of the area swept while the region `bottom` moves straight to the region `top`.

    Both are loops of the same numbers of points, shells counter-clockwise, holes clockwise.
    """
    from shapely import Polygon, make_valid, polygons, unary_union

    quads = []
    for low, high in zip(bottom, top, strict=True):
        quads.append(np.stack([low, np.roll(low, -1, 0), np.roll(high, -1, 0), high], axis=1))
    corners = np.concatenate(quads)
    x, y = corners[..., 0], corners[..., 1]
    area = 0.5 * np.abs(np.sum(x * np.roll(y, -1, 1) - np.roll(x, -1, 1) * y, axis=1))
    sides = make_valid(polygons(corners[area > 1e-9]))

    def region(loops: Sequence[Floats]) -> Any:
        from shapely import unary_union

        solid = unary_union([Polygon(loop) for loop in loops if _ccw(loop)])
        return solid.difference(unary_union([Polygon(loop) for loop in loops if not _ccw(loop)]))

    # Rounding to a nanometre keeps slivers of the union out.
    swept = unary_union([region(bottom), region(top), *sides], grid_size=1e-6)
    loops = []
    for polygon in getattr(swept, "geoms", [swept]):
        if polygon.geom_type == "Polygon":
            loops.extend(rings(polygon))
    return loops


def _ccw(loop: Floats) -> bool:
    x, y = (loop - loop[0]).T
    return float(np.sum(x * np.roll(y, -1) - np.roll(x, -1) * y)) > 0


def _outline_loops(section: Section) -> list[Floats]:
    """Outer loops of the section with parts that touch made one."""
    if len(section.parts) == 1:
        return list(section.loops)
    from shapely import unary_union

    joined = unary_union(section.to_polygon().geoms)
    return list(Section.from_polygons(joined).loops)


def _seen_on_reference(position: Floats, loop: Floats, z: Floats) -> Floats:
    """Where points at height z cover the reference plane, seen from `position`."""
    k = position[2] / (position[2] - z)
    return position[:2] + (loop - position[:2]) * k[:, None]


def _darken(canvas: _Canvas, places: Floats, blur_mm: float, depth: float) -> None:
    """Shade what lies behind by a blurred area: rasterised coarsely, since nothing in it is sharp."""
    coarse, view = 4, canvas.view
    edges = pixel_segments(view, places)
    flat = places[:, 0, :2]
    scale = float(np.linalg.norm(np.ptp(edges[:, 0], axis=0)) / np.linalg.norm(np.ptp(flat, axis=0)))
    box = (0, 0, -(-view.width // coarse), -(-view.height // coarse))
    area = coverage((edges + 0.5) / coarse - 0.5, box)
    area = cv2.GaussianBlur(area, (0, 0), max(blur_mm * scale / coarse, 0.5))
    full = cv2.resize(area, (box[2] * coarse, box[3] * coarse), interpolation=cv2.INTER_LINEAR)
    canvas.shade *= 1 - np.float32(depth) * full[: view.height, : view.width]


def _cast_shadows(canvas: _Canvas, member: Member, light: Light) -> None:
    loops = _outline_loops(member.section)
    thickness = float(member.height.at(np.mean(member.section.vertices, axis=0))) - member.base
    if thickness <= 0.2:
        return
    reach = thickness / np.tan(light.elevation)
    shift = -reach * np.array([np.cos(light.azimuth), np.sin(light.azimuth)])
    ground = Height(member.base)
    cast = sweep(loops, [loop + shift for loop in loops])
    _darken(canvas, _lifted(cast, ground), max(light.penumbra * thickness / 2, 0.3), light.shadow)
    _darken(canvas, _lifted(loops, ground), 0.5 * thickness, 0.35)


def _paint_member(canvas: _Canvas, member: Member, light: Light) -> None:
    view = canvas.view
    outline = _outline_loops(member.section)
    centre = np.mean(member.section.vertices, axis=0)
    top_z = float(member.height.at(centre))
    faces = [pixel_segments(view, _lifted(part.loops, member.height)) for part in member.section.parts]
    silhouette = None
    if isinstance(view, Camera) and top_z - member.base > 1e-9:
        bottom = [_seen_on_reference(view.position, p, np.full(len(p), member.base)) for p in outline]
        top = [_seen_on_reference(view.position, p, member.height.at(p)) for p in outline]
        silhouette = pixel_segments(view, _lifted(sweep(bottom, top), Height()))
    box = canvas.box(np.concatenate(faces) if silhouette is None else silhouette)
    if box[2] <= box[0]:
        return
    shares = [canvas.cover(face, box) for face in faces]
    rim = _rim(view, member, outline, box, light) if member.chamfer_mm > 0 else None
    colours = []
    for number, look in enumerate(member.looks):
        surface = _texture(view, box, look, top_z, member.seed + 31 * number, centre) * np.float32(member.brightness)
        colours.append(canvas.textured(surface if rim is None else surface * rim[..., None]))
    if silhouette is not None and isinstance(view, Camera):
        # Walls show where the silhouette is not face.
        walls = np.maximum(canvas.cover(silhouette, box) - np.sum(shares, axis=0), 0).astype(np.float32)
        shares.append(walls)
        colours.append(_wall_colours(view, member, outline, box, light))
    canvas.add(box, shares, colours)
    if isinstance(view, Camera):
        _cast_shadows(canvas, member, light)
    if member.gap_mm > 0:
        pocket = Section.from_polygons(member.section.to_polygon().buffer(member.gap_mm, join_style="mitre"))
        edges = pixel_segments(view, _lifted([part.shell for part in pocket.parts], Height(member.base)))
        box = canvas.box(edges)
        canvas.add(box, [canvas.cover(edges, box)], [0.012])


def _rim(view: View, member: Member, outline: Sequence[Floats], box: Box, light: Light) -> Image:
    """How much lighter or darker the member's chamfered rim is than its face, by its angle to the lamp."""
    lamp = np.array([np.cos(light.azimuth), np.sin(light.azimuth)])
    lines, shades = [], []
    for loop in outline:
        following = np.roll(loop, -1, axis=0)
        along = following - loop
        normal = np.stack([along[:, 1], -along[:, 0]], -1) / np.maximum(np.linalg.norm(along, axis=1), 1e-12)[:, None]
        at_corner = normal + np.roll(normal, 1, axis=0)
        at_corner /= np.maximum(np.sum(at_corner * normal, axis=1), 0.3)[:, None]
        inner = loop - member.chamfer_mm * at_corner
        strips = np.stack([loop, following, np.roll(inner, -1, axis=0), inner], axis=1)
        lines.append(np.concatenate([strips, member.height.at(strips)[..., None]], axis=-1))
        shades.append(0.85 + 0.45 * (normal @ lamp))
    corners, shade = np.concatenate(lines), np.concatenate(shades)
    result = np.ones((box[3] - box[1], box[2] - box[0]), np.float32)
    levels = np.round(shade * 12).astype(int)
    for level in np.unique(levels):
        chosen = corners[levels == level]
        edges = np.stack([chosen, np.roll(chosen, -1, axis=1)], axis=2).reshape(-1, 2, 3)
        result += coverage(pixel_segments(view, edges), box) * np.float32(level / 12 - 1)
    return result


def _wall_colours(view: Camera, member: Member, outline: Sequence[Floats], box: Box, light: Light) -> Image:
    """Colours of the member's visible side walls over the box; each wall by its angle to the lamp."""
    lamp = np.array([np.cos(light.azimuth), np.sin(light.azimuth)]) * np.cos(light.elevation)
    quads, shades = [], []
    for loop in outline:
        following = np.roll(loop, -1, axis=0)
        along = following - loop
        normal = np.stack([along[:, 1], -along[:, 0]], -1) / np.maximum(np.linalg.norm(along, axis=1), 1e-12)[:, None]
        middle = 0.5 * (loop + following)
        facing = np.sum(normal * (view.position[:2] - middle), axis=1) > 0
        low = np.full(len(loop), member.base)
        corners = np.stack(
            [
                np.column_stack([loop, low]),
                np.column_stack([following, low]),
                np.column_stack([following, member.height.at(following)]),
                np.column_stack([loop, member.height.at(loop)]),
            ],
            axis=1,
        )
        shade = 0.42 + 0.75 * np.maximum(normal @ lamp, 0)
        # The inside of a hole sees less of the sky.
        quads.append(corners[facing])
        shades.append((shade if _ccw(loop) else 0.5 * shade)[facing])
    corners, shade = np.concatenate(quads), np.concatenate(shades)
    total = np.zeros((box[3] - box[1], box[2] - box[0]), np.float32)
    weighted = np.zeros_like(total)
    levels = np.round(shade * 12).astype(int)
    for level in np.unique(levels):
        chosen = corners[levels == level]
        edges = np.stack([chosen, np.roll(chosen, -1, axis=1)], axis=2).reshape(-1, 2, 3)
        part = coverage(pixel_segments(view, edges), box)
        total += part
        weighted += part * np.float32(level / 12)
    shading = np.where(total > 1e-4, weighted / np.maximum(total, 1e-4), 0.45).astype(np.float32)
    centre = np.mean(member.section.vertices, axis=0)
    colour = _texture(view, box, member.looks[0], 0.0, member.seed + 5, centre) * np.float32(member.brightness)
    return (0.15 * colour + 0.85 * colour.mean(axis=(0, 1))) * shading[..., None]


def _light_field(view: View, light: Light) -> Image:
    """Light over the frame, at most 1, (h, w)."""
    step = 16
    small_w, small_h = -(-view.width // step), -(-view.height // step)
    u = (np.arange(small_w) + 0.5) / small_w * 2 - 1
    v = ((np.arange(small_h) + 0.5) / small_h * 2 - 1)[:, None]
    aspect = view.height / view.width
    r2 = (u**2 + (aspect * v) ** 2) / (1 + aspect**2)
    field_ = (1 + 0.5 * light.gradient[0] * u + 0.5 * light.gradient[1] * v) * (1 - light.vignetting * r2)
    if light.soft_edge is not None:
        angle, position, width, depth = light.soft_edge
        across = np.cos(angle) * u + np.sin(angle) * v - position
        field_ = field_ * (1 - depth / (1 + np.exp(-across / width * 4)))
    field_ = (field_ / field_.max()).astype(np.float32)
    full = cv2.resize(field_, (small_w * step, small_h * step), interpolation=cv2.INTER_CUBIC)
    return np.minimum(full[: view.height, : view.width], 1)


def reflectance(scene: Scene) -> Image:
    """What the lens makes of the scene in even light: (h, w, 3) linear reflectance, averaged over each pixel."""
    view = scene.view
    canvas = _Canvas(view, scene.sensor)
    for member in reversed(scene.members):
        _paint_member(canvas, member, scene.light)
    for number, sheet in enumerate(scene.prints):
        _paint_print(canvas, sheet, scene.seed + number)
    frame = (0, 0, view.width, view.height)
    ground = _texture(view, frame, scene.background, scene.background_height, scene.seed % 997)
    canvas.add(frame, [np.ones_like(canvas.free)], [canvas.textured(ground)])
    return canvas.image


def _disc(radius: float) -> Image:
    """Kernel of an evenly lit disc, rim pixels by area."""
    half = int(np.ceil(radius + 0.5))
    angle = np.arange(256) * (2 * np.pi / 256)
    loop = radius * np.stack([np.cos(angle), np.sin(angle)], -1)
    kernel = coverage(loops_to_segments([loop]), (-half, -half, half + 1, half + 1))
    return kernel / kernel.sum()


def expose(scene: Scene) -> Image:
    """Linear sensor levels without noise, (h, w, 3); 1 is the sensor's limit."""
    return (
        reflectance(scene) * (_light_field(scene.view, scene.light) * np.float32(scene.sensor.white / PAPER))[..., None]
    )
