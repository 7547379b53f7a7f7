"""The reference sheet: a printed ring of coded squares around the window in which the face lies."""

from __future__ import annotations

import numpy as np

from ...props.errors import Refusal
from ...props.result import Notice
from ..camera import Camera
from ..photo import Photo
from .coded import Sighting
from .print_plane import fit_print
from .printed import (
    OFFSET_STD_MM,
    PARALLEL_STD_RAD,
    Placement,
    PrintCheck,
    face_modes,
    flatness_std,
    focal_for,
    middle_of,
    refuse_bad_fit,
    scaled,
    square_edges,
    square_tones,
)
from .reference import Reference

# With fewer corners than this share of a sheet the ring does not enclose the face, and the lens is extrapolated.
LEAST_SHARE = 0.35


def sheet_reference(
    photo: Photo,
    sighting: Sighting,
    *,
    check: PrintCheck,
    face_height: float | None,
    face_height_std: float | None,
    focal_35mm: float | None,
    camera: Camera | None = None,
) -> Reference:
    """The Reference that a sheet seen in a photo gives.

    face_height : height of the face above the sheet, mm; None takes the face to lie in the sheet's plane, and says so
    camera : a calibration of the camera; None fits the lens from the sheet
    Raises Refusal when the sheet is cut by the frame, hidden or bent, or a height is stated and nothing tells the
    focal length.
    """
    board = sighting.board
    _refuse_incomplete(sighting, photo)
    label = f"the {board.name} sheet"
    plane, notices = fit_print(photo, [scaled(sighting, check)], camera, check.scale_std, label)
    notices += [*check.notices(), *refuse_bad_fit(plane, label)]
    height = face_height or 0.0
    focal, contradiction = focal_for(
        photo,
        plane,
        height,
        focal_35mm,
        check.scale_std,
        face="A face above the sheet",
        remedy="State it with --focal-35mm (the data sheet gives it), or use the camera's original file.",
    )
    notices += contradiction
    if face_height is None:
        distance = plane.camera_height(focal.px)
        notices.append(
            Notice(
                "face-height-assumed",
                "The face is taken to lie in the plane of the sheet; every 10 mm that it stands above it would make "
                f"the figures too large by {2000 / distance:.1f} % in area and {4000 / distance:.1f} % in second "
                "moments.",
                "State the thickness of the slice with --face-height, or 0 when the face lies in the sheet's plane.",
            )
        )
    placed = OFFSET_STD_MM if face_height_std is None else face_height_std
    flat = flatness_std(plane, sighting.pixels)
    about = middle_of(plane, sighting.pixels)
    placement = Placement(height, float(np.hypot(flat, placed)), PARALLEL_STD_RAD if placed > 0 else 0.0, about)
    face, modes = face_modes(plane, placement, focal, check.scale_std)
    x0, y0, x1, y1 = board.window_mm or (0.0, 0.0, *board.size_mm)
    # The window as it lies on the paper, a little inside its printed border.
    rim = 0.05 * board.square_mm
    t = np.linspace(0, 1, 24, endpoint=False)
    x0, y0, x1, y1 = x0 + rim, y0 + rim, x1 - rim, y1 - rim
    border = np.concatenate(
        [
            np.column_stack([x0 + (x1 - x0) * t, np.full_like(t, y0)]),
            np.column_stack([np.full_like(t, x1), y0 + (y1 - y0) * t]),
            np.column_stack([x1 - (x1 - x0) * t, np.full_like(t, y1)]),
            np.column_stack([np.full_like(t, x0), y1 - (y1 - y0) * t]),
        ]
    )
    white, black = square_tones(plane.to_pixels, sighting, check)
    return Reference(
        kind="sheet",
        label=board.name,
        face=face,
        modes=modes,
        background="paper",
        region=(plane.to_pixels(border * check.scale),),
        white=white,
        black=black,
        print_edges=square_edges([(sighting, plane.to_pixels)], check),
        residual_px=plane.residual_px,
        corners_px=sighting.pixels,
        plane_offset_mm=height,
        # A slice stands on the sheet: below every point of its face is the same point of its foot.
        foot=(lambda pixels: plane.to_pixels(face.to_mm(pixels))) if height > 0 else None,
        rise=(lambda points, mm: plane.raised(mm, focal.px).to_pixels(points)) if face_height is None else None,
        details={
            "corners": len(sighting.pixels),
            "camera_height_mm": plane.camera_height(focal.px),
            "tilt_deg": float(np.rad2deg(plane.tilt(focal.px))),
            "focal_px": focal.px,
            "focal_from": focal.source,
            "print_scale": list(check.scale),
            "print_scale_std": check.scale_std,
        },
        notices=tuple(notices),
    )


def _refuse_incomplete(sighting: Sighting, photo: Photo) -> None:
    board = sighting.board
    x, y = (sighting.target / board.size_mm).T
    sides = {"left": x < 0.3, "right": x > 0.7, "bottom": y < 0.3, "top": y > 0.7}
    missing = [side for side, seen in sides.items() if seen.sum() < 4]
    if missing or sighting.share < LEAST_SHARE:
        where = f" (nothing on its {' and '.join(missing)})" if missing else ""
        raise Refusal(
            "reference-incomplete",
            f"Only {100 * sighting.share:.0f} % of the {board.name} sheet's corners can be seen{where}.",
            "Take the photo again with the whole sheet in the frame, in focus, and nothing lying on its printed ring.",
        )
