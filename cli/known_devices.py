"""Which calibration belongs to a picture: the one stated, else the one that the picture itself names.

Knows where to look and what to say when nothing fits. Never lets another camera's calibration pass in silence.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, field
from pathlib import Path
from typing import TYPE_CHECKING, Any

from ..props.errors import Refusal
from ..props.result import Notice
from ..vision.camera_file import find_camera, other_camera, read_camera
from ..vision.references.scanner import find_scanner, other_scanner, read_scanner
from .calibration_folder import calibration_folder

if TYPE_CHECKING:
    from ..vision.measure import Measurement
    from ..vision.photo import Photo

# Stated in place of a file: no calibration at all.
NONE = "none"


@dataclass(frozen=True)
class StatedDevices:
    """What a person states of the camera and the scanner: a file, a folder to look in, "none", or None for nothing.

    Where nothing is stated, the person's own folder is looked in.
    """

    camera: Path | None = None
    scanner: Path | None = None

    @property
    def options(self) -> dict[str, str]:
        """What is written into the result: names, the folders being the person's own affair."""
        stated = {"camera": self.camera, "scanner": self.scanner}
        return {name: path.name for name, path in stated.items() if path is not None}


@dataclass(frozen=True)
class KnownDevices:
    """Calibrations that belong to a picture, as arguments of `measure`, and what is to be said of others."""

    arguments: dict[str, Any] = field(default_factory=dict)
    notices: tuple[Notice, ...] = ()


def known_devices(photo: Photo, stated: StatedDevices) -> KnownDevices:
    """The calibrations that belong to a photo or scan.

    Raises Refusal where the one stated belongs to another camera or scanner, FileError where it cannot be read.
    """
    arguments: dict[str, Any] = {}
    notices: list[Notice] = []
    camera, said = _camera(photo, stated.camera)
    notices += said
    if camera is not None:
        arguments["camera"] = camera
    scanner, said = _scanner(photo, stated.scanner)
    notices += said
    if scanner is not None:
        arguments["scanner"] = scanner
    return KnownDevices(arguments, tuple(notices))


def unused_devices(stated: StatedDevices, measurement: Measurement) -> tuple[Notice, ...]:
    """A word about calibrations that were stated as files and on which the measurement does not rest."""
    told = {notice.code for notice in measurement.notices}
    notices = []
    for device, path in (("camera", stated.camera), ("scanner", stated.scanner)):
        used = device in measurement.reference.details or f"{device}-contradicted" in told
        if path is None or _is_none(path) or path.is_dir() or used:
            continue
        notices.append(
            Notice(
                f"{device}-unused",
                f"The calibration {path.name} was not needed: the scale comes from the {measurement.reference.kind}.",
                f"Leave --{device} out, or measure with a reference that is seen through the {device}.",
            )
        )
    return tuple(notices)


def _camera(photo: Photo, stated: Path | None) -> tuple[Any, list[Notice]]:
    if _is_none(stated):
        return None, []
    if stated is None or stated.is_dir():
        camera, others = find_camera(photo, calibration_folder() if stated is None else stated)
        if camera is not None:
            return camera, []
        if others:
            return None, [_none_fits(others)]
        return None, [] if stated is None else [_not_there("camera", "photo", stated)]
    camera = read_camera(stated)
    why = other_camera(camera, photo)
    if why is not None:
        raise Refusal(
            "camera-other",
            f"The calibration {stated.name} does not belong to this photo: {why}.",
            "State the calibration of the camera that took it, as it took it, or none.",
        )
    if photo.model is None:
        return camera, [_unproven("photo", "camera", stated.name)]
    return camera, []


def _scanner(photo: Photo, stated: Path | None) -> tuple[Any, list[Notice]]:
    if _is_none(stated):
        return None, []
    if stated is None or stated.is_dir():
        scanner = find_scanner(photo, calibration_folder() if stated is None else stated)
        if scanner is None and stated is not None:
            return None, [_not_there("scanner", "scan", stated)]
        return scanner, []
    scanner = read_scanner(stated)
    why = other_scanner(scanner, photo)
    if why is not None:
        raise Refusal(
            "scanner-other",
            f"The calibration {stated.name} does not belong to this scan: {why}.",
            "State the calibration of the scanner that made it, or none.",
        )
    if photo.model is None:
        return scanner, [_unproven("scan", "scanner", stated.name)]
    return scanner, []


def _is_none(stated: Path | None) -> bool:
    return stated is not None and str(stated).lower() == NONE


def _none_fits(others: Sequence[str]) -> Notice:
    return Notice(
        "camera-not-used",
        "This camera has been calibrated, but not as it took this photo, so no calibration was used "
        f"({'; '.join(others)}).",
        "Calibrate the camera at this setting too (cutface calibrate camera).",
    )


def _not_there(device: str, picture: str, folder: Path) -> Notice:
    return Notice(
        f"{device}-not-used",
        f"No calibration in {folder.name} belongs to the {device} of this {picture}, so none was used.",
        f"Calibrate the {device} (cutface calibrate {device}), or state the file itself.",
    )


def _unproven(picture: str, device: str, name: str) -> Notice:
    return Notice(
        f"{device}-unproven",
        f"The {picture} does not say which {device} made it; the calibration {name} was used because it was stated.",
        f"Use the {device}'s original file, which names it.",
    )
