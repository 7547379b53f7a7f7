"""What stands before a simulated camera: prints, members' ends, light, sensor.

Plain descriptions; painting is done in `simulated_painting`.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from typing import Any

import cv2
import numpy as np
from cutface.props.section import Section
from cutface.vision.references.board import Board
from numpy.typing import NDArray
from simulated_view import Camera, Flatbed, Floats


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
    margin_mm : white border of a card
    taped : True for strips of masking tape over the paper's corners
    """

    board: Board
    scale: tuple[float, float] = (1.0, 1.0)
    gain_mm: float = 0.0
    origin: tuple[float, float] = (0.0, 0.0)
    angle: float = 0.0
    height: Height = Height()
    bow_mm: float = 0.0
    margin_mm: float = 6.0
    taped: bool = False

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

    def tape(self) -> list[Floats]:
        """(4, 2) corners of each strip of tape, board coordinates."""
        if not self.taped:
            return []
        middle = self.paper.mean(axis=0)
        strips = []
        for number, corner in enumerate(self.paper):
            out = np.sign(corner - middle) / np.sqrt(2)
            along = np.array([-out[1], out[0]])
            # Torn by hand: no two strips are alike.
            length, wide = 13.0 + 3.0 * np.sin(5.1 * number + self.angle), 4.2
            strips.append(
                np.array(
                    [
                        corner + out * wide - along * length,
                        corner + out * wide + along * (length - 1.5),
                        corner - out * wide + along * length,
                        corner - out * wide - along * (length - 2.0),
                    ]
                )
            )
        return strips

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
    chamfer_mm : width of a dulled or shining rim just inside the outline, as saws and files leave it
    """

    section: Section
    looks: tuple[str, ...]
    height: Height = Height()
    base: float = 0.0
    gap_mm: float = 0.0
    chamfer_mm: float = 0.0
    brightness: float = 1.0
    seed: int = 0


@dataclass(frozen=True)
class Light:
    """Even daylight with a lamp: gradient over the frame, shadows, vignetting.

    gradient : change of light across the frame's width and height, share
    vignetting : loss of light in the corners, share
    azimuth, elevation : of the lamp, rad, in the frame of the truth
    shadow : depth of the lamp's shadow, share of the light; penumbra : its width / height above the table
    tint : colour left by an imperfect white balance
    soft_edge : None, or (angle rad, position -1..1, width -, depth): a wide shadow lying across the frame
    """

    gradient: tuple[float, float] = (0.0, 0.0)
    vignetting: float = 0.0
    azimuth: float = 2.0
    elevation: float = 1.0
    shadow: float = 0.4
    penumbra: float = 0.35
    soft_edge: tuple[float, float, float, float] | None = None
    tint: tuple[float, float, float] = (1.0, 1.0, 1.0)


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
