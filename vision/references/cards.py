"""Loose cards around a face: each at a place nobody measured, all in the plane of the face."""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from dataclasses import replace
from functools import partial

import numpy as np
from numpy.typing import NDArray

from ...props.errors import Refusal
from ...props.result import Notice
from ...props.uncertainty import Mode
from ..camera import Camera
from ..photo import Photo
from ..plane import Correspondences, Plane, corner_residuals, moved
from ..posed_plane import PosedPlane
from .coded import Sighting
from .print_plane import fit_print
from .printed import (
    FLATNESS_STD_MM,
    OFFSET_STD_MM,
    PARALLEL_STD_RAD,
    Placement,
    PrintCheck,
    face_modes,
    focal_for,
    middle_of,
    refuse_bad_fit,
    scaled,
    square_edges,
    square_tones,
)
from .reference import Reference

Array = NDArray[np.float64]

# Parts of FLATNESS_STD_MM that the corners may tell the cards' unevenness to be: a smooth face, rough masonry.
UNEVENNESS = (0.3, 3.0)


def cards_reference(
    photo: Photo,
    sightings: Sequence[Sighting],
    *,
    check: PrintCheck,
    face_height: float | None,
    face_height_std: float | None,
    focal_35mm: float | None,
    camera: Camera | None = None,
) -> Reference:
    """The Reference that loose cards give; cards lie anyhow, so the y axis is what is upright in the picture.

    face_height : height of the face above the plane of the cards towards the camera, mm; None takes it as flush
    camera : a calibration of the camera; None fits the lens from the cards
    Raises Refusal when cards contradict each other or, with a stated height, nothing tells the focal length.
    """
    targets = [scaled(s, check) for s in sightings]
    names = ", ".join(s.board.name for s in sightings)
    plane, notices = fit_print(photo, targets, camera, check.scale_std, names)
    misses = _misses(plane, targets)
    _refuse_odd_card(sightings, [float(np.sqrt(np.mean(r**2))) for r in misses])
    plane = _upright(plane, targets)
    notices += [*check.notices(), *refuse_bad_fit(plane, names)]
    if len(sightings) == 1:
        notices.append(
            Notice(
                "one-card",
                "Only one card is seen: the plane is carried from it across the whole face, which widens the interval.",
                "Place a second card on the opposite side of the face.",
            )
        )
    height = face_height or 0.0
    focal, contradiction = focal_for(
        photo,
        plane,
        height,
        focal_35mm,
        check.scale_std,
        face="A face off the plane of the cards",
        remedy="State it with --focal-35mm, or set the cards flush with the face.",
    )
    notices += contradiction
    placed = OFFSET_STD_MM if face_height_std is None else face_height_std
    face, others = face_modes(
        plane,
        Placement(
            height,
            placed,
            PARALLEL_STD_RAD if placed > 0 else 0.0,
            middle_of(plane, np.concatenate([s.pixels for s in sightings])),
        ),
        focal,
        check.scale_std,
    )
    bent = list(_lifted(plane, targets, focal.px))
    fitted = [fit_print(photo, b, camera, check.scale_std, names)[0] for b in bent]
    # What unevenness leaves in the corners tells how uneven the cards lie, beyond what the planes take up.
    left = [np.concatenate(_misses(p, b)) - np.concatenate(misses) for p, b in zip(fitted, bent, strict=True)]
    expected = float(np.sqrt(np.mean(np.sum(np.square(left), axis=0))))
    share = float(np.clip(plane.residual_px / max(expected, 1e-9), *UNEVENNESS))
    lifted = [_upright(p, b).raised(height, focal.px) for p, b in zip(fitted, bent, strict=True)]

    def modes(points: Array) -> tuple[Mode, ...]:
        pixels = face.to_pixels(points)
        uneven = [Mode("card flatness", share * _strain(points, p.to_mm(pixels) - points), "normal") for p in lifted]
        return (*others(points), *uneven)

    excluded, white, black = [], [], []
    for sighting, pose in zip(sightings, plane.poses, strict=True):
        to_pixels = partial(_card_to_pixels, plane, pose)
        light, dark = square_tones(to_pixels, sighting, check)
        white.append(light)
        black.append(dark)
        # The paper goes on about half a square beyond the checker.
        width, depth = sighting.board.size_mm
        rim = 0.6 * sighting.board.square_mm
        outline = np.array([[-rim, -rim], [width + rim, -rim], [width + rim, depth + rim], [-rim, depth + rim]])
        excluded.append(to_pixels(outline * check.scale))
    return Reference(
        kind="cards",
        label=names,
        face=face,
        modes=modes,
        background="any",
        excluded=tuple(excluded),
        white=np.concatenate(white),
        black=np.concatenate(black),
        print_edges=square_edges(
            [(s, partial(_card_to_pixels, plane, pose)) for s, pose in zip(sightings, plane.poses, strict=True)], check
        ),
        residual_px=plane.residual_px,
        corners_px=np.concatenate([s.pixels for s in sightings]),
        plane_offset_mm=height,
        details={
            "cards": [s.board.name for s in sightings],
            "corners": int(sum(len(s.pixels) for s in sightings)),
            "camera_height_mm": plane.camera_height(focal.px),
            "tilt_deg": float(np.rad2deg(plane.tilt(focal.px))),
            "focal_px": focal.px,
            "focal_from": focal.source,
            "print_scale": list(check.scale),
            "print_scale_std": check.scale_std,
        },
        notices=tuple(notices),
    )


def _misses(plane: Plane | PosedPlane, targets: Sequence[Correspondences]) -> list[Array]:
    return plane.corner_residuals(targets) if isinstance(plane, PosedPlane) else corner_residuals(plane, targets)


def _lifted(
    plane: Plane | PosedPlane, targets: Sequence[Correspondences], focal_px: float
) -> Iterator[list[Correspondences]]:
    """The targets as they would be seen if one of the cards stood off the plane, or one of its edges did.

    A card on a wall or taped to a face follows its roughness: FLATNESS_STD_MM off the common plane, and as much again
    from one of its edges to the other.
    """
    for index, (target, pose) in enumerate(zip(targets, plane.poses, strict=True)):
        places = moved(target.target, pose)
        by_height = plane.raised(FLATNESS_STD_MM, focal_px).to_pixels(places) - plane.to_pixels(places)
        across = (target.target - target.target.mean(axis=0)) / np.ptp(target.target, axis=0)
        for share in (np.ones(len(places)), across[:, 0], across[:, 1]):
            bent = list(targets)
            bent[index] = replace(target, pixels=target.pixels + share[:, None] * by_height)
            yield bent


def _strain(points: Array, displacement: Array) -> Array:
    """A displacement field of (n, 2) points without the rigid motion in it: where loose cards lie is arbitrary."""
    about = points - points.mean(axis=0)
    moved_about = displacement - displacement.mean(axis=0)
    turn = float(np.sum(about[:, 0] * moved_about[:, 1] - about[:, 1] * moved_about[:, 0]) / np.sum(about**2))
    return moved_about - turn * np.column_stack([-about[:, 1], about[:, 0]])


def _upright(plane: Plane | PosedPlane, targets: Sequence[Correspondences]) -> Plane | PosedPlane:
    """The plane with its y axis pointing up in the picture, at the middle of the corners."""
    middle = np.concatenate([t.pixels for t in targets]).mean(axis=0)
    here, above = plane.to_mm(np.array([middle, middle - (0.0, 10.0)]))
    x, y = above - here
    return plane.turned(float(np.arctan2(x, y)))


def _card_to_pixels(plane: Plane | PosedPlane, pose: tuple[float, float, float], points: Array) -> Array:
    """(n, 2) mm on a card that lies at (a, b, turn) in the plane to photo pixels."""
    return plane.to_pixels(moved(points, pose))


def _refuse_odd_card(sightings: Sequence[Sighting], residuals: Sequence[float]) -> None:
    """Refusal naming the card whose corners miss the common plane by far more than the others' do."""
    if len(residuals) < 2:
        return
    worst = int(np.argmax(residuals))
    others = float(np.median(np.delete(residuals, worst)))
    if residuals[worst] > 1.0 and (len(residuals) == 2 or residuals[worst] > 4 * others):
        raise Refusal(
            "cards-disagree",
            f"{sightings[worst].board.name.capitalize()} misses the plane of the others by {residuals[worst]:.1f} px.",
            "Set all cards flush with the face and flat, or cover the one that is not, and take the photo again.",
        )
