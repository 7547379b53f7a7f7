"""Small pictures of flat shapes of one tone each, exact by area, for references that lie on a table.

Written without the measuring code: polygons are cut where the lens bends them, rasterised by exact area at twice the
resolution, blurred and averaged over the pixels; then noise, the sRGB curve and eight bits.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass
from pathlib import Path

import cv2
import numpy as np
from cutface.props.uncertainty import coverage_half_width
from cutface.vision.photo import Photo
from cutface.vision.references.reference import Reference
from simulated_raster import bounding_box, coverage, loops_to_segments
from simulated_sensor import encode
from simulated_view import Camera, Floats, pixel_segments

FULL_FRAME_DIAGONAL = 43.27
TABLE, PAPER, DARK = 0.25, 0.85, 0.05


@dataclass(frozen=True)
class Shape:
    """A flat shape: loops (k, 2) in mm on the table, of one tone; `height` (n, 2) -> (n,) mm above it."""

    loops: Sequence[Floats]
    tone: float
    height: Callable[[Floats], Floats] | None = None

    def places(self) -> Floats:
        """(m, 2, 3) edges in space."""
        flat = loops_to_segments(self.loops)
        z = (
            np.zeros(flat.shape[:2])
            if self.height is None
            else self.height(flat.reshape(-1, 2)).reshape(flat.shape[:2])
        )
        return np.concatenate([flat, z[..., None]], axis=-1)


def photograph(
    camera: Camera,
    shapes: Sequence[Shape],
    *,
    focal_35mm: float | None = None,
    blur: float = 0.7,
    noise: float = 0.004,
    seed: int = 0,
    table: float = TABLE,
    lamp: Callable[[Floats, Floats], Floats] | None = None,
    glare: Callable[[Floats, Floats], Floats] | None = None,
    tone: str = "sRGB",
) -> Photo:
    """A grey photo of shapes, the last on top; `noise` is the standard deviation of linear light.

    lamp : share of the light at (x, y), 0 to 1 across and down the picture; glare : light added there
    tone : "sRGB" or "linear", the curve of the stored values
    """
    size = (camera.height * 2, camera.width * 2)
    fine = np.full(size, table, np.float32)
    for shape in shapes:
        segments = pixel_segments(camera, shape.places()) * 2 + 0.5
        box = bounding_box(segments, size[1], size[0])
        share = coverage(segments, box)
        part = fine[box[1] : box[3], box[0] : box[2]]
        part += share * (np.float32(shape.tone) - part)
    image = cv2.GaussianBlur(fine, (0, 0), 2 * blur)
    image = cv2.resize(image, (camera.width, camera.height), interpolation=cv2.INTER_AREA)
    y, x = (np.linspace(0, 1, n) for n in image.shape)
    if lamp is not None:
        image = image * lamp(*np.meshgrid(x, y))
    if glare is not None:
        image = image + glare(*np.meshgrid(x, y))
    image = image + np.random.default_rng(seed).normal(0, noise, image.shape)
    clipped = np.clip(image, 0, 1)
    pixels = np.rint(255 * (encode(clipped, "sRGB") if tone == "sRGB" else clipped)).astype(np.uint8)
    return Photo(path=Path("scene.png"), sha256="", pixels=pixels, focal_length_35mm=focal_35mm)


def box(width: float, depth: float, centre: tuple[float, float] = (0.0, 0.0), angle: float = 0.0) -> Floats:
    """(4, 2) corners of a rectangle, lower left first, counter-clockwise."""
    corners = 0.5 * np.array([[-width, -depth], [width, -depth], [width, depth], [-width, depth]])
    return turned(corners, angle) + centre


def rounded_box(width: float, depth: float, radius: float) -> Floats:
    """A rectangle about the origin with quarter circles for corners."""
    t = np.linspace(0, np.pi / 2, 24)
    arc = radius * np.column_stack([np.cos(t), np.sin(t)])
    corner = np.array([width / 2 - radius, depth / 2 - radius])
    quarters = [turned(arc, np.pi / 2 * k) + corner * s for k, s in enumerate([(1, 1), (-1, 1), (-1, -1), (1, -1)])]
    return np.concatenate(quarters)


def ring(diameter: float, centre: tuple[float, float] = (0.0, 0.0)) -> Floats:
    """A circle as a polygon of its area."""
    t = np.linspace(0, 2 * np.pi, 360, endpoint=False)
    chord = 2 * np.pi / 360
    return 0.5 * diameter * np.sqrt(chord / np.sin(chord)) * np.column_stack([np.cos(t), np.sin(t)]) + centre


def turned(points: Floats, angle: float) -> Floats:
    """(n, 2) points turned by an angle, rad."""
    c, s = np.cos(angle), np.sin(angle)
    return points @ np.array([[c, s], [-s, c]])


@dataclass(frozen=True)
class TrueCamera:
    """A camera drawn about what is stated of it."""

    camera: Camera
    stated_35mm: float


def drawn_camera(
    rng: np.random.Generator,
    *,
    width: int = 1200,
    height: int = 900,
    stated_35mm: float = 28.0,
    distance: float = 400.0,
    tilt_deg: float | None = None,
    lens_std: float = 0.007,
    focal_std: float = 0.03,
) -> TrueCamera:
    """A camera over the origin whose focal length, centre and lens are what one takes such cameras to be."""
    focal = stated_35mm * (1 + rng.normal(0, focal_std)) / FULL_FRAME_DIAGONAL * float(np.hypot(width, height))
    corner = 0.5 * float(np.hypot(width, height)) / focal
    off = rng.normal(0, 0.005, 2) * np.hypot(width, height) / 2
    lens = (rng.normal(0, lens_std) / corner**2, rng.normal(0, 0.3 * lens_std) / corner**4, 0.0, 0.0, 0.0)
    tilt = abs(rng.normal(0, 12.0)) if tilt_deg is None else tilt_deg
    camera = Camera.looking_at(
        (0.0, 0.0),
        distance,
        min(tilt, 35.0),
        float(rng.uniform(0, 360)),
        float(rng.normal(0, 4)),
        width=width,
        height=height,
        focal_px=focal,
        centre=((width - 1) / 2 + off[0], (height - 1) / 2 + off[1]),
        distortion=lens,
    )
    return TrueCamera(camera, stated_35mm)


def length_errors(reference: Reference, camera: Camera, points: Floats) -> tuple[Floats, Floats, Floats]:
    """How a reference measures the distances between consecutive points (k, 3) of the face, closed.

    Returns per distance: error, standard uncertainty, and half width of its 95 % interval, mm.
    """
    ends = np.roll(points, -1, axis=0)
    truth = np.linalg.norm(ends - points, axis=1)
    seen = reference.face.to_mm(camera.project(points))
    along = np.roll(seen, -1, axis=0) - seen
    length = np.linalg.norm(along, axis=1)
    effects, rectangular = [], []
    for mode in reference.modes(seen):
        moved = np.roll(mode.displacement, -1, axis=0) - mode.displacement
        effects.append(np.sum(along * moved, axis=1) / length)
        rectangular.append(mode.shape == "rectangular")
    rows, flat = np.array(effects), np.array(rectangular)
    std = np.linalg.norm(rows, axis=0)
    half = np.empty(len(truth))
    for i, row in enumerate(rows.T):
        largest = float(np.abs(row[flat]).max()) if flat.any() else 0.0
        half[i] = coverage_half_width(float(np.sqrt(max(row @ row - largest**2, 0.0))), largest)
    return length - truth, std, half
