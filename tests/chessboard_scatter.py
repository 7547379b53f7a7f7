"""How even the squares of a chessboard come out through a calibrated camera."""

from __future__ import annotations

import cv2
import numpy as np
from cutface.vision.calibration_boards import BoardSighting
from cutface.vision.camera import Camera
from cutface.vision.photo import Photo
from cutface.vision.references.chessboard import Chessboard


class SeenOnce(Chessboard):
    """A chessboard that searches each photo once."""

    found: dict[tuple[str, str], list[BoardSighting]] = {}  # noqa: RUF012

    def sightings(self, photo: Photo) -> list[BoardSighting]:
        key = str(photo.path), self.label
        if key not in self.found:
            self.found[key] = super().sightings(photo)
        return self.found[key]


def side_scatter(camera: Camera, board: Chessboard, pictures: list[Photo]) -> float:
    """Standard deviation of the sides of all squares over a square, undistorted and rectified by all corners."""
    grid = np.stack(np.meshgrid(np.arange(board.columns), np.arange(board.rows)), axis=-1).reshape(-1, 2).astype(float)
    sides = []
    for picture in pictures:
        for seen in board.sightings(picture):
            directions = camera.to_directions(seen.pixels)
            homography, _ = cv2.findHomography(directions, grid)
            flat = cv2.perspectiveTransform(directions[:, None], homography).reshape(board.rows, board.columns, 2)
            sides += [np.linalg.norm(np.diff(flat, axis=axis), axis=2).ravel() for axis in (0, 1)]
    return float(np.concatenate(sides).std())
