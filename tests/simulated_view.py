"""Cameras and scanners of simulated pictures: places in millimetres to pixels.

Knows nothing of what is seen. Pixel centres lie at integers, x right, y down.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any, Protocol

import numpy as np
from numpy.typing import NDArray

Floats = NDArray[np.float64]
Image = NDArray[np.float32]

STEP_PX = 8.0  # straight edges are cut this fine before the lens bends them


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


def pixel_segments(view: View, places: Floats) -> Floats:
    """(m, 2, 3) straight edges in space to finely cut (k, 2, 2) edges in the picture."""
    ends = view.project(places)
    pieces = np.maximum(np.ceil(np.linalg.norm(ends[:, 1] - ends[:, 0], axis=-1) / STEP_PX), 1).astype(np.intp)
    which = np.repeat(np.arange(len(places)), pieces)
    part = np.arange(len(which)) - np.repeat(np.cumsum(pieces) - pieces, pieces)
    t0, t1 = (part / pieces[which])[:, None], ((part + 1) / pieces[which])[:, None]
    start, along = places[which, 0], (places[:, 1] - places[:, 0])[which]
    return np.stack([view.project(start + t0 * along), view.project(start + t1 * along)], axis=1)
