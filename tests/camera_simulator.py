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

import io
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field, replace
from pathlib import Path
from typing import Any, Protocol

import cv2
import numpy as np
from cutface.props.section import Section
from cutface.vision.references.board import CARD_SETS, SHEETS, Board
from numpy.typing import NDArray
from simulated_looks import albedo
from simulated_raster import Box, bounding_box, coverage, loops_to_segments, subdivided
from simulated_shapes import FAMILIES, flitch, random_section, rings, timber

Floats = NDArray[np.float64]
Image = NDArray[np.float32]

FULL_FRAME_DIAGONAL = 43.27
PAPER = 0.86
INK = 0.045
FINE = 2  # areas are kept at this many times the resolution until the lens has blurred them
STEP_PX = 8.0  # straight edges are cut this fine before the lens bends them


# --- the plane and what stands in it -------------------------------------------------------------


@dataclass(frozen=True)
class Height:
    """Height of a surface above the reference plane, mm: base + slopes."""

    base: float = 0.0
    slope_x: float = 0.0
    slope_y: float = 0.0

    def at(self, xy: Floats) -> Floats:
        """(..., 2) places to (...) heights."""
        return self.base + self.slope_x * xy[..., 0] + self.slope_y * xy[..., 1]


@dataclass(frozen=True)
class Print:
    """A printed board lying in the scene.

    scale : true length / nominal, along the board's x and y
    gain_mm : every black edge lies this far outside its place
    origin, angle : where the checker's lower left corner lies, and its turn in rad
    height : in the board's own coordinates
    bow_mm : rise of the left and right edges above the middle, a parabola
    """

    board: Board
    scale: tuple[float, float] = (1.0, 1.0)
    gain_mm: float = 0.0
    origin: tuple[float, float] = (0.0, 0.0)
    angle: float = 0.0
    height: Height = Height()
    bow_mm: float = 0.0
    margin_mm: float = 6.0

    def place(self, points: Floats) -> Floats:
        """(..., 2) board coordinates as printed nominally to (..., 3) true places, mm."""
        local = np.asarray(points, float) * self.scale
        c, s = np.cos(self.angle), np.sin(self.angle)
        x = self.origin[0] + c * local[..., 0] - s * local[..., 1]
        y = self.origin[1] + s * local[..., 0] + c * local[..., 1]
        half = self.board.size_mm[0] / 2
        z = self.height.at(local) + self.bow_mm * ((local[..., 0] - half) / half) ** 2
        return np.stack([x, y, z], axis=-1)

    @property
    def paper(self) -> Floats:
        """(4, 2) corners of the paper, board coordinates."""
        width, height = self.board.size_mm
        if self.board.paper_mm is None:
            mx = my = self.margin_mm
        else:
            mx, my = (self.board.paper_mm[0] - width) / 2, (self.board.paper_mm[1] - height) / 2
        return np.array([(-mx, -my), (width + mx, -my), (width + mx, height + my), (-mx, height + my)])

    def ink(self) -> list[Floats]:
        """Loops of the black areas, board coordinates (shells and holes opposite ways round)."""
        from shapely import box, unary_union

        board, side = self.board, self.board.square_mm
        pieces = []
        for row, column in np.argwhere(board.black):
            pieces.append(
                box(column * side, (board.rows - row - 1) * side, (column + 1) * side, (board.rows - row) * side)
            )
        module = board.marker_mm / 7
        for number, corners in zip(board.ids, board.marker_corners, strict=True):
            left, top = corners[0]
            for row, column in np.argwhere(marker_modules(number)):
                x, y = left + column * module, top - row * module
                pieces.append(box(x, y - module, x + module, y))
        grown = unary_union(pieces)
        # Even without gain a hair's growth joins squares that meet at a point into clean loops.
        grown = grown.buffer(max(self.gain_mm, 1e-6), join_style="mitre")
        loops = []
        for polygon in getattr(grown, "geoms", [grown]):
            for index, ring in enumerate((polygon.exterior, *polygon.interiors)):
                loop = np.asarray(ring.coords)[:-1, :2]
                loops.append(loop if ring.is_ccw == (index == 0) else loop[::-1])
        return loops


def marker_modules(number: int) -> NDArray[np.bool_]:
    """(7, 7) True where a marker is black, top row first."""
    dictionary = cv2.aruco.getPredefinedDictionary(cv2.aruco.DICT_5X5_1000)
    return cv2.aruco.generateImageMarker(dictionary, number, 7, borderBits=1) < 128


@dataclass(frozen=True)
class Member:
    """A member's end: its section placed in the frame of the truth, true mm.

    looks : one per part of the section
    height : of the face above the reference plane
    base : height where its walls end (the table); equal to the face's for a coplanar face
    gap_mm : width of a dark gap round it (a pocket in masonry), 0 for none
    """

    section: Section
    looks: tuple[str, ...]
    height: Height = Height()
    base: float = 0.0
    gap_mm: float = 0.0
    brightness: float = 1.0
    seed: int = 0


# --- cameras -------------------------------------------------------------------------------------


class View(Protocol):
    """What turns places into pixels."""

    @property
    def width(self) -> int: ...
    @property
    def height(self) -> int: ...
    @property
    def position(self) -> Floats | None: ...
    def project(self, points: Floats) -> Floats: ...
    def on_plane(self, x: Floats, y: Floats, z: float) -> tuple[Image, Image]: ...


@dataclass(frozen=True)
class Camera:
    """A perspective camera with Brown's lens distortion (k1, k2, p1, p2, k3).

    rotation : (3, 3), rows are the directions of pixel x, pixel y and the view, in the frame of the truth
    position : of the lens, mm; its z is the perpendicular distance from the reference plane
    centre : principal point, px
    """

    width: int
    height: int
    focal_px: float
    centre: tuple[float, float]
    rotation: Floats
    position: Floats
    distortion: tuple[float, float, float, float, float] = (0.0, 0.0, 0.0, 0.0, 0.0)

    def distort(self, xy: Floats) -> Floats:
        """(..., 2) ideal image coordinates (tangents) to those the lens makes."""
        k1, k2, p1, p2, k3 = self.distortion
        x, y = xy[..., 0], xy[..., 1]
        r2 = x * x + y * y
        radial = 1 + r2 * (k1 + r2 * (k2 + r2 * k3))
        return np.stack(
            [
                x * radial + 2 * p1 * x * y + p2 * (r2 + 2 * x * x),
                y * radial + p1 * (r2 + 2 * y * y) + 2 * p2 * x * y,
            ],
            axis=-1,
        )

    def undistort(self, xy: Floats, steps: int = 30) -> Floats:
        """The inverse of `distort`, by fixed-point steps."""
        ideal = np.array(xy, float)
        for _ in range(steps):
            ideal = ideal + (xy - self.distort(ideal))
        return ideal

    def project(self, points: Floats) -> Floats:
        """(..., 3) places, mm, to (..., 2) pixels."""
        local = (np.asarray(points, float) - self.position) @ self.rotation.T
        return self.distort(local[..., :2] / local[..., 2:]) * self.focal_px + self.centre

    def on_plane(self, x: Floats, y: Floats, z: float) -> tuple[Image, Image]:
        """Places seen by pixels x, y on the plane at height z, neglecting distortion."""
        u = ((np.asarray(x) - self.centre[0]) / self.focal_px).astype(np.float32)
        v = ((np.asarray(y) - self.centre[1]) / self.focal_px).astype(np.float32)
        r = self.rotation.astype(np.float32)
        down = np.minimum(r[0, 2] * u + r[1, 2] * v + r[2, 2], np.float32(-1e-3))
        depth = np.float32(z - self.position[2]) / down
        px, py = np.float32(self.position[0]), np.float32(self.position[1])
        return (
            px + depth * (r[0, 0] * u + r[1, 0] * v + r[2, 0]),
            py + depth * (r[0, 1] * u + r[1, 1] * v + r[2, 1]),
        )

    @classmethod
    def looking_at(
        cls,
        aim: tuple[float, float],
        distance: float,
        tilt_deg: float = 0.0,
        direction_deg: float = 0.0,
        turn_deg: float = 0.0,
        **camera: Any,
    ) -> Camera:
        """A camera whose axis meets the plane at `aim`, `distance` mm away along the axis.

        tilt_deg : between the axis and the plane's normal; direction_deg : towards which side the
        camera is moved from the normal; turn_deg : of the picture about the axis.
        """
        tilt, azimuth, turn = np.radians([tilt_deg, direction_deg, turn_deg])
        away = np.array([np.sin(tilt) * np.cos(azimuth), np.sin(tilt) * np.sin(azimuth), np.cos(tilt)])
        forward = -away
        down = np.array([0.0, -1.0, 0.0])
        down = down - (down @ forward) * forward
        down /= np.linalg.norm(down)
        right = np.cross(down, forward)
        c, s = np.cos(turn), np.sin(turn)
        rotation = np.stack([c * right + s * down, -s * right + c * down, forward])
        return cls(rotation=rotation, position=np.array([*aim, 0.0]) + distance * away, **camera)


@dataclass(frozen=True)
class Flatbed:
    """A flatbed scanner: no perspective; true scales differ from the stated resolution.

    dpi : as the file states, x and y
    scale : true pixels a mm / stated ones, per axis
    wobble_mm, wobble_period_mm, phase : slow local errors along both axes
    """

    width: int
    height: int
    dpi: tuple[float, float]
    scale: tuple[float, float] = (1.0, 1.0)
    wobble_mm: float = 0.0
    wobble_period_mm: float = 150.0
    phase: tuple[float, float] = (0.0, 0.0)

    @property
    def position(self) -> None:
        """A scanner looks straight down everywhere."""
        return None

    @property
    def pixels_per_mm(self) -> tuple[float, float]:
        """True pixels a millimetre, x and y."""
        return self.dpi[0] / 25.4 * self.scale[0], self.dpi[1] / 25.4 * self.scale[1]

    def project(self, points: Floats) -> Floats:
        """(..., 3) places, mm, to (..., 2) pixels; heights do not matter."""
        points = np.asarray(points, float)
        x, y = points[..., 0], points[..., 1]
        k = 2 * np.pi / self.wobble_period_mm
        dx = self.wobble_mm * np.sin(k * y + self.phase[0])
        dy = self.wobble_mm * np.sin(k * y + self.phase[1])
        px, py = self.pixels_per_mm
        return np.stack([(x + dx) * px - 0.5, self.height - 0.5 - (y + dy) * py], axis=-1)

    def on_plane(self, x: Floats, y: Floats, z: float) -> tuple[Image, Image]:
        """Places seen by pixels x, y."""
        px, py = self.pixels_per_mm
        return (
            ((np.asarray(x) + 0.5) / px).astype(np.float32),
            ((self.height - 0.5 - np.asarray(y)) / py).astype(np.float32),
        )


# --- light and sensor ----------------------------------------------------------------------------


@dataclass(frozen=True)
class Light:
    """Even daylight with a lamp: gradient over the frame, shadows, vignetting.

    gradient : change of light across the frame's width and height, share
    vignetting : loss of light in the corners, share
    azimuth, elevation : of the lamp, rad, in the frame of the truth
    shadow : depth of the lamp's shadow, share of the light; penumbra : its width / height above the table
    soft_edge : None, or (angle rad, position -1..1, width -, depth): a wide shadow lying across the frame
    """

    gradient: tuple[float, float] = (0.0, 0.0)
    vignetting: float = 0.0
    azimuth: float = 2.0
    elevation: float = 1.0
    shadow: float = 0.4
    penumbra: float = 0.35
    soft_edge: tuple[float, float, float, float] | None = None


@dataclass(frozen=True)
class Sensor:
    """From light on the sensor to the file.

    blur_px : std of the optics' gaussian blur; defocus_px : radius of the disc of a lens out of focus
    white : linear level of white paper in full light, 1 clips
    full_well : electrons at level 1 (0 for no shot noise); read_noise : std as a share of level 1
    mosaic : True to sample one colour a pixel and interpolate the others
    tone : "sRGB", "gamma", "linear", "contrast"
    sharpening : strength of an unsharp mask on encoded values; sharpening_px : its radius
    quality : JPEG quality
    """

    blur_px: float = 0.7
    defocus_px: float = 0.0
    white: float = 0.8
    full_well: float = 9000.0
    read_noise: float = 0.002
    mosaic: bool = False
    tone: str = "sRGB"
    sharpening: float = 0.0
    sharpening_px: float = 1.0
    quality: int = 92


@dataclass(frozen=True)
class Scene:
    """A picture to be taken, with its whole truth.

    stated : what the person or the file says of it: thickness_mm, focal_35mm, check lengths, ...
    drawn : every value that `random_scene` drew or was given
    """

    kind: str
    seed: int
    view: Camera | Flatbed
    prints: tuple[Print, ...]
    members: tuple[Member, ...]
    background: str
    light: Light
    sensor: Sensor
    background_height: float = 0.0
    orientation_tag: int = 1
    stated: Mapping[str, Any] = field(default_factory=dict)
    drawn: Mapping[str, Any] = field(default_factory=dict)


# --- painting ------------------------------------------------------------------------------------


def pixel_segments(view: View, places: Floats) -> Floats:
    """(m, 2, 3) straight edges in space to finely cut (k, 2, 2) edges in the picture."""
    ends = view.project(places)
    pieces = np.maximum(np.ceil(np.linalg.norm(ends[:, 1] - ends[:, 0], axis=-1) / STEP_PX), 1).astype(np.intp)
    which = np.repeat(np.arange(len(places)), pieces)
    part = np.arange(len(which)) - np.repeat(np.cumsum(pieces) - pieces, pieces)
    t0, t1 = (part / pieces[which])[:, None], ((part + 1) / pieces[which])[:, None]
    start, along = places[which, 0], (places[:, 1] - places[:, 0])[which]
    return np.stack([view.project(start + t0 * along), view.project(start + t1 * along)], axis=1)


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

    ink = segments(sheet.ink())
    box = canvas.box(ink)
    canvas.add(box, [canvas.cover(ink, box)], [INK])
    paper = segments([sheet.paper])
    box = canvas.box(paper)
    canvas.add(box, [canvas.cover(paper, box)], [_texture(canvas.view, box, "paper", 0.0, seed)])


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
    colours = [
        canvas.textured(
            _texture(view, box, look, top_z, member.seed + 31 * number, centre) * np.float32(member.brightness)
        )
        for number, look in enumerate(member.looks)
    ]
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
    return (0.5 * colour + 0.5 * colour.mean(axis=(0, 1))) * shading[..., None]


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


def encode(level: Floats, tone: str) -> Floats:
    """Linear level 0..1 to encoded value 0..1. Raises ValueError for an unknown tone curve."""
    level = np.clip(level, 0, 1)
    srgb = np.where(level <= 0.0031308, 12.92 * level, 1.055 * np.maximum(level, 1e-9) ** (1 / 2.4) - 0.055)
    if tone == "sRGB":
        return srgb
    if tone == "gamma":
        return level ** (1 / 2.2)
    if tone == "linear":
        return level
    if tone == "contrast":
        return 0.5 * srgb + 0.5 * srgb**2 * (3 - 2 * srgb)
    raise ValueError(f"unknown tone curve {tone!r}")


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


def develop(image: Image, sensor: Sensor, rng: np.random.Generator) -> NDArray[np.uint8]:
    """Noise, colour mosaic, tone curve, sharpening, 8 bits: (h, w, 3) uint8."""

    def noisy(levels: Image) -> Image:
        if sensor.full_well <= 0 and sensor.read_noise <= 0:
            return levels
        variance = np.float32(sensor.read_noise**2) + (
            levels / np.float32(sensor.full_well) if sensor.full_well > 0 else 0
        )
        return levels + np.sqrt(variance) * rng.standard_normal(levels.shape, np.float32)

    if sensor.mosaic:
        raw = np.empty(image.shape[:2], np.float32)
        for row, column, channel in ((0, 0, 0), (0, 1, 1), (1, 0, 1), (1, 1, 2)):
            raw[row::2, column::2] = image[row::2, column::2, channel]
        levels = np.clip(noisy(raw) * 60000 + 2000, 0, 62000).astype(np.uint16)  # black level as in a raw file
        image = (cv2.cvtColor(levels, cv2.COLOR_BayerRGGB2RGB_EA).astype(np.float32) - 2000) / 60000
    else:
        image = noisy(image)
    table = encode(np.arange(65536) / 65535.0, sensor.tone).astype(np.float32)
    encoded = table[(np.clip(image, 0, 1) * 65535 + 0.5).astype(np.uint16)]
    if sensor.sharpening > 0:
        encoded += np.float32(sensor.sharpening) * (encoded - cv2.GaussianBlur(encoded, (0, 0), sensor.sharpening_px))
    return (np.clip(encoded, 0, 1) * 255 + 0.5).astype(np.uint8)


def render(scene: Scene) -> NDArray[np.uint8]:
    """The picture, upright: (h, w, 3) uint8 RGB, before JPEG compression. Same scene, same picture."""
    rng = np.random.default_rng([scene.seed, 20])
    return develop(expose(scene), scene.sensor, rng)


# --- files ---------------------------------------------------------------------------------------


def encoded_file(scene: Scene, picture: NDArray[np.uint8], suffix: str) -> bytes:
    """The picture as the bytes of a JPEG (".jpg") or PNG (".png") file with its metadata.

    EXIF as a camera writes it: make, model, orientation, date, focal lengths (as stated, which is not
    the true one). A scan states its resolution. Raises ValueError for another suffix.
    """
    from PIL import Image as Pictures

    turns = {1: 0, 6: 1, 3: 2, 8: 3}[scene.orientation_tag]
    stored = Pictures.fromarray(np.ascontiguousarray(np.rot90(picture, turns)))
    options: dict[str, Any] = {}
    if isinstance(scene.view, Flatbed):
        options["dpi"] = scene.view.dpi
    else:
        exif = Pictures.Exif()
        exif[271], exif[272], exif[274] = "Kestrel", "Kestrel P2", scene.orientation_tag
        inner = exif.get_ifd(0x8769)
        inner[36867] = "2024:05:14 10:32:00"
        focal = scene.stated.get("focal_35mm")
        if focal:
            inner[37386] = round(focal / 6.2, 2)
            inner[41989] = round(focal)
        options["exif"] = exif
    buffer = io.BytesIO()
    if suffix in (".jpg", ".jpeg"):
        stored.save(buffer, "JPEG", quality=scene.sensor.quality, subsampling="4:2:0", **options)
    elif suffix == ".png":
        stored.save(buffer, "PNG", compress_level=3, **options)
    else:
        raise ValueError(f"unknown picture format {suffix!r}")
    return buffer.getvalue()


def write(scene: Scene, path: str | Path) -> Path:
    """Render the scene into a JPEG or PNG file (by its suffix)."""
    path = Path(path)
    path.write_bytes(encoded_file(scene, render(scene), path.suffix.lower()))
    return path


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


# --- random scenes -------------------------------------------------------------------------------


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
        0.0 if thickness > 0 else min(height.base, 0.0),
        0.0,
        draw("brightness", rng.uniform(0.7, 1.15)),
        seed,
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
        true = np.array(board.size_mm) * scale
        stated["check_mm"] = tuple(true + rng.normal(0, check_u, 2))
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
    member = Member(section, looks, height, 0.0, gap, draw("brightness", rng.uniform(0.7, 1.15)), seed)
    if offset == 0:
        member = replace(member, base=height.base)

    x0, y0 = section.vertices.min(axis=0)
    x1, y1 = section.vertices.max(axis=0)
    big = draw("card_set", "large" if max(x1 - x0, y1 - y0) > 260 else "small")
    scale = draw("print_scale", tuple(1 + rng.normal(0, 0.003, 2)))
    gain = draw("print_gain_mm", max(rng.normal(0.08, 0.04), 0.0))
    count = draw("cards", int(rng.choice([2, 3, 4, 4])))
    flatness = draw("card_flatness_mm", 0.3)
    prints = []
    sides = [(x0, 0.0, -1.0, 0.0), (x1, 0.0, 1.0, 0.0), (0.0, y1, 0.0, 1.0), (0.0, y0, 0.0, -1.0)][:count]
    for number, (ex, ey, nx, ny) in enumerate(sides):
        board = CARD_SETS[big][number]
        half = np.array(board.size_mm) / 2
        turn = rng.choice([0, 0, 0, 1, 2, 3]) * np.pi / 2 + rng.normal(0, 0.06)
        reach = float(np.linalg.norm(half)) * 0.8 + gap + rng.uniform(8, 22)
        slide = rng.uniform(-0.3, 0.3) * (y1 - y0 if nx else x1 - x0)
        centre = np.array([ex + nx * reach + (slide if ny else 0), ey + ny * reach + (slide if nx else 0)])
        c, s = np.cos(turn), np.sin(turn)
        local = half * scale
        origin = centre - (c * local[0] - s * local[1], s * local[0] + c * local[1])
        slope = rng.normal(0, flatness / 100, 2)
        tilted = Height(rng.normal(0, flatness) - float(slope @ half), slope[0], slope[1])
        prints.append(Print(board, scale, gain, (float(origin[0]), float(origin[1])), float(turn), tilted))
    around = np.concatenate([p.place(p.paper)[:, :2] for p in prints] + [section.vertices])
    portrait = bool(np.ptp(around[:, 1]) > np.ptp(around[:, 0]))
    camera, stated_f, tag = _camera(draw, around, portrait)
    stated: dict[str, Any] = {"thickness_mm": offset, "focal_35mm": stated_f}
    check_u = draw("check_std_mm", None)
    if check_u is not None:
        true = np.array(prints[0].board.size_mm) * scale
        stated["check_mm"] = tuple(true + rng.normal(0, check_u, 2))
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
    shape_rng = np.random.default_rng([seed, 7])
    shape = given or random_section(shape_rng, family, tuple(0.72 * cell))
    members = []
    for number in range(count):
        centre = cell * (number % columns + 0.5, number // columns + 0.5) + rng.uniform(-1.5, 1.5, 2)
        turned = _placed(shape, centre, np.radians(skew + rng.normal(0, 2.0)))
        members.append(Member(turned, (look,) * len(turned.parts), Height(), 0.0, 0.0, brightness, seed + 100 * number))
    scale = draw("scan_scale", tuple(1 + rng.normal(0, 0.002, 2)))
    bed = Flatbed(
        round(glass[0] * dpi[0] / 25.4),
        round(glass[1] * dpi[1] / 25.4),
        dpi,
        scale,
        draw("wobble_mm", abs(rng.normal(0, 0.1))),
        draw("wobble_period_mm", rng.uniform(100, 300)),
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
    "random_scene",
    "render",
    "truth",
    "write",
]
