"""What all prints have in common: an uncertain scale, seen by a camera of uncertain focal length.

Knows what is uncertain about the plane of a face that may lie above a print. Does not know what was printed.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from ...props.errors import Refusal, UsageError
from ...props.result import Notice
from ...props.uncertainty import Mode
from ..photo import Photo
from ..plane import Correspondences, Plane
from ..posed_plane import PosedPlane
from .coded import Sighting
from .reference import PrintEdges

Array = NDArray[np.float64]

# A printer's scale nobody has checked, per axis and independent (measured on office printers; stated assumption).
UNCHECKED_PRINT_SCALE = 0.003
# A calliper over the printed check lengths (common practice), and the length itself as designed.
CHECK_LENGTH_MM = 140.0
CALLIPER_STD_MM = 0.05
# Print scales further off than this are not a printer's error but another size setting or another quantity.
MAX_PRINT_SCALE_ERROR = 0.08
# A face laid on the sheet, or cards stuck beside a face, by hand (stated assumptions).
FLATNESS_STD_MM = 0.3
OFFSET_STD_MM = 0.5
PARALLEL_STD_RAD = np.deg2rad(0.5)
# Focal length from EXIF: rounding of the 35 mm equivalent, close focus, the choice of diagonal (common practice).
EXIF_FOCAL_STD = 0.03
# The main camera of a telephone, when the file says nothing; used only for how much small offsets matter.
USUAL_FOCAL_35MM, USUAL_FOCAL_STD = 27.0, 0.25
FULL_FRAME_DIAGONAL_MM = 43.27
# A bow of b mm leaves residuals of at least this share of it (simulated: 0.3 mm leaves 0.014 mm and more).
BOW_SHARE = 0.05


@dataclass(frozen=True)
class PrintCheck:
    """What the check lengths of a print really measure, mm; None where nobody measured."""

    lengths: tuple[float, float] | None = None
    std: float = CALLIPER_STD_MM

    @property
    def scale(self) -> tuple[float, float]:
        """True over designed length in x and y. Raises UsageError for lengths that no printer produces."""
        if self.lengths is None:
            return 1.0, 1.0
        scale = self.lengths[0] / CHECK_LENGTH_MM, self.lengths[1] / CHECK_LENGTH_MM
        if max(abs(s - 1) for s in scale) > MAX_PRINT_SCALE_ERROR:
            raise UsageError(
                "check-lengths",
                f"Check lengths of {self.lengths[0]:g} and {self.lengths[1]:g} mm cannot belong to a print whose "
                f"check lengths are designed as {CHECK_LENGTH_MM:g} mm.",
                "Measure the two printed check lengths from left edge to left edge and state them in mm, across first.",
            )
        return scale

    @property
    def scale_std(self) -> float:
        """Standard uncertainty of the scale, per axis."""
        return UNCHECKED_PRINT_SCALE if self.lengths is None else self.std / CHECK_LENGTH_MM

    def notices(self) -> tuple[Notice, ...]:
        """A word about a print nobody measured."""
        if self.lengths is not None:
            return ()
        return (
            Notice(
                "print-unchecked",
                "Nobody stated what the printed check lengths measure, so each axis may be off by "
                f"{100 * UNCHECKED_PRINT_SCALE:.1f} % (one standard deviation); this widens every figure.",
                "Measure the two check lengths with a calliper, ten seconds, and state them with --check.",
            ),
        )


@dataclass(frozen=True)
class Focal:
    """A focal length in pixels with its standard uncertainty and where it comes from."""

    px: float
    std: float
    source: str


def focal_length(
    photo: Photo, plane: Plane, stated_35mm: float | None, scale_std: float = UNCHECKED_PRINT_SCALE
) -> tuple[Focal | None, tuple[Notice, ...]]:
    """The camera's focal length from what was stated, else the file and the perspective, weighted.

    scale_std : relative standard uncertainty of the print's scale, per axis

    Returns None when nothing tells it, and notices where two sources contradict each other.
    """
    diagonal = 2 * plane.radius
    sources = []
    if stated_35mm is not None:
        sources.append(Focal(stated_35mm / FULL_FRAME_DIAGONAL_MM * diagonal, 0.0, "stated"))
    elif photo.focal_length_35mm:
        sources.append(Focal(photo.focal_length_35mm / FULL_FRAME_DIAGONAL_MM * diagonal, 0.0, "EXIF"))
    sources = [Focal(f.px, EXIF_FOCAL_STD * f.px, f.source) for f in sources]
    # A sheet that bulges looks a little shorter one way and tilted: a thousandth covers it.
    seen = plane.focal_px(float(np.hypot(np.sqrt(2.0) * scale_std, 0.001)))
    if seen is not None:
        sources.append(Focal(*seen, "perspective"))
    if not sources:
        return None, ()
    notices: tuple[Notice, ...] = ()
    if len(sources) == 2 and abs(sources[0].px - sources[1].px) > 3 * np.hypot(sources[0].std, sources[1].std):
        notices = (
            Notice(
                "focal-contradiction",
                f"The {sources[0].source} focal length gives {sources[0].px:.0f} px, the perspective "
                f"{sources[1].px:.0f} px: the picture was cropped, zoomed or edited; the perspective is used.",
                "Use the camera's original file, or state the focal length of the picture as it is.",
            ),
        )
        return sources[1], notices
    weight = np.array([1 / f.std**2 for f in sources])
    px = float(np.sum(weight * [f.px for f in sources]) / weight.sum())
    return Focal(px, float(weight.sum() ** -0.5), " and ".join(f.source for f in sources)), notices


def focal_for(
    photo: Photo,
    plane: Plane | PosedPlane,
    height: float,
    stated_35mm: float | None,
    scale_std: float,
    *,
    face: str,
    remedy: str,
) -> tuple[Focal, tuple[Notice, ...]]:
    """The focal length with which a face at `height` mm above a print is reached, and notices about it.

    face : the beginning of a sentence, "A face above the sheet"; remedy : what to do where nothing tells it
    A calibrated camera's own goes before all others. Without a height, a usual one says how much small offsets matter.
    Raises Refusal when there is a height and nothing tells the focal length.
    """
    if isinstance(plane, PosedPlane):
        return Focal(*plane.focal_px(), "calibration"), ()
    focal, contradiction = focal_length(photo, plane, stated_35mm, scale_std)
    if height == 0.0:
        return focal or usual_focal(plane), ()
    if focal is None:
        raise Refusal(
            "focal-unknown",
            f"{face} needs the camera's focal length, and neither the file nor the perspective tells it.",
            remedy,
        )
    return focal, contradiction


@dataclass(frozen=True)
class Placement:
    """How the face lies to the reference plane: height towards the camera, mm, and how well that is known.

    about : (x, y) mm in the plane, where the height is that; a tilt between the two, rad, adds to it further away
    """

    height: float
    height_std: float
    parallel_std: float
    about: tuple[float, float]


def face_modes(
    reference_plane: Plane | PosedPlane, placement: Placement, focal: Focal, scale_std: float
) -> tuple[Plane | PosedPlane, Callable[[Array], tuple[Mode, ...]]]:
    """The plane of the face, and the displacement fields of everything uncertain about it.

    scale_std : relative standard uncertainty of the print's scale, per axis and independent
    """
    face = reference_plane.raised(placement.height, focal.px)

    def modes(points: Array) -> tuple[Mode, ...]:
        pixels = face.to_pixels(points)
        about = points - points.mean(axis=0)
        found = [Mode(source, moved, "normal") for source, moved in face.displacements(points)]
        if isinstance(face, PosedPlane):
            # The difference of the axes is fitted, and is among the corners' modes; the mean is not.
            found.append(Mode("print scale", about * scale_std / np.sqrt(2), "normal"))
        else:
            found += [Mode("print scale", about * axis * scale_std, "normal") for axis in np.eye(2)]
        rise = reference_plane.raised(placement.height + 1.0, focal.px).to_mm(pixels) - points
        if placement.height_std > 0:
            found.append(Mode("plane offset", placement.height_std * rise, "normal"))
        if placement.parallel_std > 0:
            away = points - placement.about
            found += [
                Mode("tilt", rise * (placement.parallel_std * away[:, axis : axis + 1]), "normal") for axis in (0, 1)
            ]
        if placement.height != 0.0 and isinstance(reference_plane, Plane):
            longer = reference_plane.raised(placement.height, focal.px + focal.std).to_mm(pixels)
            found.append(Mode("focal length", longer - points, "normal"))
        return tuple(found)

    return face, modes


def usual_focal(plane: Plane | PosedPlane) -> Focal:
    """What cameras mostly have, for how much small offsets matter when nothing is known."""
    px = USUAL_FOCAL_35MM / FULL_FRAME_DIAGONAL_MM * 2 * plane.radius
    return Focal(px, USUAL_FOCAL_STD * px, "usual")


def scaled(sighting: Sighting, check: PrintCheck) -> Correspondences:
    """A sighting's corners with the print's true scale."""
    return Correspondences(sighting.target * check.scale, sighting.pixels)


def square_tones(to_pixels: Callable[[Array], Array], sighting: Sighting, check: PrintCheck) -> tuple[Array, Array]:
    """Places in photo pixels (k, 2) on the white and on the black of the squares around every corner.

    to_pixels : (n, 2) true mm on the board to photo pixels
    """
    board = sighting.board
    reach = (board.square_mm - board.marker_mm) / 4
    white, black = [], []
    for dx, dy in ((1, 1), (-1, 1), (-1, -1), (1, -1)):
        place = sighting.target + reach * np.array([dx, dy])
        column = np.floor(place[:, 0] / board.square_mm).astype(int)
        row = board.rows - 1 - np.floor(place[:, 1] / board.square_mm).astype(int)
        dark = board.black[row, column]
        pixels = to_pixels(place * check.scale)
        black.append(pixels[dark])
        white.append(pixels[~dark])
    return np.concatenate(white), np.concatenate(black)


def square_edges(boards: Sequence[tuple[Sighting, Callable[[Array], Array]]], check: PrintCheck) -> PrintEdges:
    """The sides of the black squares of all boards, away from their corners.

    boards : each with the map of (n, 2) true mm on it to photo pixels
    """
    points, normals, reach = [], [], []
    sides = np.array([(-1, 0), (1, 0), (0, -1), (0, 1)], float)
    for sighting, to_pixels in boards:
        board = sighting.board
        row, column = np.argwhere(board.black).T
        middle = np.column_stack([column + 0.5, board.rows - row - 0.5])
        for outward in sides:
            along = np.array([-outward[1], outward[0]])
            for place in (-0.15, 0.0, 0.15):
                target = (middle + 0.5 * outward + place * along) * board.square_mm
                pixels = to_pixels(target * check.scale)
                ahead = to_pixels((target + 0.02 * board.square_mm * outward) * check.scale) - pixels
                beside = to_pixels((target + 0.02 * board.square_mm * along) * check.scale) - pixels
                normal = np.column_stack([-beside[:, 1], beside[:, 0]])
                normal *= np.sign(np.sum(normal * ahead, axis=1))[:, None]
                points.append(pixels)
                normals.append(normal / np.linalg.norm(normal, axis=1, keepdims=True))
                # The white side ends where the marker begins.
                margin = (board.square_mm - board.marker_mm) / 2
                reach.append(np.linalg.norm(ahead, axis=1) / (0.02 * board.square_mm) * margin)
    return PrintEdges(np.concatenate(points), np.concatenate(normals), 0.8 * float(np.median(np.concatenate(reach))))


def refuse_bad_fit(plane: Plane | PosedPlane, label: str) -> tuple[Notice, ...]:
    """Notices about corners that do not fit a flat print; Refusal when they cannot carry a measurement.

    The corners of a flat print fit to 0.02 to 0.1 px; a bow of 1 mm leaves 0.5 to 1 px.
    """
    if plane.residual_px > 1.0:
        raise Refusal(
            "reference-bent",
            f"The corners of {label} miss a flat print by {plane.residual_px:.2f} px: it is bent or the lens odd.",
            "Tape the print to a flat board, smooth it out and take the photo again.",
        )
    if plane.residual_px > 0.3:
        return (
            Notice(
                "reference-uneven",
                f"The corners of {label} miss a flat print by {plane.residual_px:.2f} px (usual: below 0.1 px); "
                "the interval is widened accordingly.",
                "Flatten the print, hold the camera still and take the photo again.",
            ),
        )
    return ()


def middle_of(plane: Plane | PosedPlane, pixels: Array) -> tuple[float, float]:
    """(x, y) mm in the plane, the middle of what is seen at (k, 2) pixels."""
    x, y = plane.to_mm(pixels).mean(axis=0)
    return float(x), float(y)


def flatness_std(plane: Plane | PosedPlane, pixels: Array) -> float:
    """How far the print may bulge, mm: the usual figure, or less where the corners' fit leaves no room for it."""
    scale = float(np.median(np.sqrt(np.abs(np.linalg.det(plane.mm_per_px(pixels))))))
    return float(min(FLATNESS_STD_MM, plane.residual_px * scale / BOW_SHARE))
