"""Keep a calibrated camera in an open, readable file, and find the one that took a photo.

The file is JSON. `camera` says whose pictures it is for: make, model, focal length and picture size as the camera
writes them. `lens` has the parameters by name (px; lens terms on tangents x/z, y/z, in OpenCV's order and meaning),
their standard uncertainties and their full covariance. `fit` has what the calibration left: rms, reach, notices, and
for every photo its corners as [x, y, seen minus fitted x, y], px. Does not know how either is used.
"""

from __future__ import annotations

import hashlib
import json
import math
from collections.abc import Mapping
from dataclasses import replace
from pathlib import Path
from typing import Any

import numpy as np

from ..props.errors import FileError
from ..props.result import Notice
from .camera import FIVE, PARAMETERS, RATIONAL, Camera, CornerResiduals
from .photo import RAW, Photo

SCHEMA = "cutface/camera/1"
# Cameras write focal lengths as short decimals.
_SAME_FOCAL = 0.005
_LARGEST_FILE = 20_000_000


def write_camera(camera: Camera, path: str | Path) -> Path:
    """Write a camera's file; raises FileError where it cannot be written."""
    path = Path(path)
    names = PARAMETERS[: len(camera.parameters)]
    stds = np.sqrt(np.diag(camera.covariance))
    document = {
        "schema": SCHEMA,
        "camera": {
            "make": camera.make,
            "model": camera.model,
            "focal_length_mm": camera.focal_length_mm,
            "focal_length_35mm": camera.focal_length_35mm,
            "digital_zoom": camera.digital_zoom,
            "raw": camera.raw,
            "width_px": camera.width,
            "height_px": camera.height,
            "tone": camera.tone,
        },
        "lens": {
            "model": "rational" if len(names) == RATIONAL else "five coefficients",
            "parameters": dict(zip(names, camera.parameters.tolist(), strict=True)),
            "std": dict(zip(names, stds.tolist(), strict=True)),
            "covariance": camera.covariance.tolist(),
        },
        "fit": {
            "residual_px": camera.residual_px,
            "reach_px": camera.reach_px,
            **camera.details,
            "warnings": [{"code": n.code, "message": n.message, "remedy": n.remedy} for n in camera.notices],
            "residuals": [
                {
                    "photo": r.photo,
                    "rms_px": round(r.rms, 4),
                    "corners": np.hstack([r.pixels, r.misses]).round(4).tolist(),
                }
                for r in camera.residuals
            ],
        },
    }
    try:
        path.parent.mkdir(parents=True, exist_ok=True)
        path.write_text(rows_on_lines(json.dumps(document, indent=1, allow_nan=False)), encoding="utf-8")
    except (OSError, ValueError) as error:
        reason = getattr(error, "strerror", None) or str(error)
        raise FileError("camera-file-unwritable", f"{path.name} cannot be written: {reason}.", _CHECK) from None
    return path


_CHECK = "Check the folder and its permissions."
_AGAIN = "Calibrate the camera again, or use another copy of the file."


def rows_on_lines(text: str) -> str:
    """Lists of numbers on one line each: a person reads rows, not columns of single figures."""
    import re

    return re.sub(r"\[\s+(-?[\d.eE+-]+(?:,\s+-?[\d.eE+-]+)*)\s+\]", lambda m: "[" + " ".join(m[1].split()) + "]", text)


def read_camera(path: str | Path) -> Camera:
    """The camera in a file; raises FileError with one line where it is not one."""
    path = Path(path)
    try:
        if path.stat().st_size > _LARGEST_FILE:
            raise FileError("camera-file", f"{path.name} is too large to be a camera's file.", _AGAIN)
        data = path.read_bytes()
        document = json.loads(data.decode("utf-8"))
    except OSError as error:
        raise FileError("camera-file", f"{path.name} cannot be read: {error.strerror}.", _CHECK) from None
    except (ValueError, RecursionError):
        raise FileError("camera-file", f"{path.name} is not a camera's file (no JSON).", _AGAIN) from None
    try:
        return replace(_camera(document), file=path.name, sha256=hashlib.sha256(data).hexdigest())
    except (KeyError, TypeError, ValueError, AttributeError, OverflowError) as error:
        what = str(error) or type(error).__name__
        raise FileError(
            "camera-file", f"{path.name} is not a complete camera's file (schema {SCHEMA}): {what[:80]}.", _AGAIN
        ) from None


def _camera(document: Mapping[str, Any]) -> Camera:
    if document["schema"] != SCHEMA:
        raise ValueError(f"schema {document['schema']!r}")
    about, lens, fit = document["camera"], document["lens"], document["fit"]
    count = len(lens["parameters"])
    if count not in (FIVE, RATIONAL):
        raise ValueError(f"{count} lens parameters")
    parameters = np.array([float(lens["parameters"][name]) for name in PARAMETERS[:count]])
    covariance = np.array(lens["covariance"], float)
    width, height = int(about["width_px"]), int(about["height_px"])
    residual, reach = float(fit["residual_px"]), float(fit["reach_px"])
    if covariance.shape != (count, count) or not np.allclose(covariance, covariance.T, rtol=1e-6):
        raise ValueError("covariance")
    finite = np.all(np.isfinite(parameters)) and np.all(np.isfinite(covariance))
    if not (finite and math.isfinite(residual) and reach > 0 and width > 0 and height > 0 and parameters[:2].min() > 0):
        raise ValueError("values out of range")
    variance = np.diag(covariance)
    if variance.min() <= 0 or np.linalg.eigvalsh(covariance / np.sqrt(np.outer(variance, variance))).min() < -1e-6:
        raise ValueError("covariance")
    tone = about.get("tone")
    if not (tone in (None, "file", "srgb", "linear") or isinstance(tone, float)):
        raise ValueError("tone")
    residuals = []
    for one in fit.get("residuals", []):
        corners = np.array(one["corners"], float).reshape(-1, 4)
        residuals.append(CornerResiduals(str(one["photo"]), corners[:, :2], corners[:, 2:]))
    known = {"residual_px", "reach_px", "warnings", "residuals"}
    return Camera(
        width=width,
        height=height,
        parameters=parameters,
        covariance=covariance,
        residual_px=residual,
        reach_px=reach,
        make=_text(about.get("make")),
        model=_text(about.get("model")),
        focal_length_mm=_number(about.get("focal_length_mm")),
        focal_length_35mm=_number(about.get("focal_length_35mm")),
        digital_zoom=_number(about.get("digital_zoom")),
        raw=bool(about.get("raw", False)),
        tone=tone,
        residuals=tuple(residuals),
        details={name: value for name, value in fit.items() if name not in known},
        notices=tuple(Notice(str(n["code"]), str(n["message"]), str(n["remedy"])) for n in fit.get("warnings", [])),
    )


def _text(value: Any) -> str | None:
    return None if value is None else str(value)


def _number(value: Any) -> float | None:
    return None if value is None else float(value)


def other_camera(camera: Camera, photo: Photo) -> str | None:
    """Why a photo was not taken by this camera as it was calibrated, in words; None where nothing speaks against it.

    A photo that does not say what took it is of this camera as far as its size is right.
    """
    width, height = (photo.width, photo.height) if photo.orientation < 5 else (photo.height, photo.width)
    if (width, height) != (camera.width, camera.height):
        return f"its pictures have {camera.width} x {camera.height} px and this one {width} x {height}"
    own, theirs = (camera.make, camera.model), (photo.make, photo.model)
    if camera.model is not None and photo.model is not None and own != theirs:
        return f"it is of {_device(*own)} and the photo by {_device(*theirs)}"
    if camera.raw != (photo.file_format == RAW):
        kinds = ("raw files", "a developed picture") if camera.raw else ("developed pictures", "a raw file")
        return f"it is for {kinds[0]} and this is {kinds[1]}"
    for what, one, other in (
        ("a focal length", camera.focal_length_mm, photo.focal_length_mm),
        ("a 35 mm equivalent", camera.focal_length_35mm, photo.focal_length_35mm),
    ):
        if one is not None and other is not None and abs(one - other) > _SAME_FOCAL * one:
            return f"it is for {what} of {one:g} mm and the photo has {other:g} mm"
    # A digital zoom crops the frame and leaves the stated focal length alone.
    one, other = camera.digital_zoom or 1.0, photo.digital_zoom or 1.0
    if abs(one - other) > _SAME_FOCAL * one:
        return f"it is for a digital zoom of {one:g} and the photo has {other:g}"
    return None


def find_camera(photo: Photo, folder: str | Path) -> tuple[Camera | None, tuple[str, ...]]:
    """The camera in a folder of camera files that took a photo: same make, model, focal length, zoom and picture size.

    Returns it, of several the one of the most photos, or None; and why other files of the same make and model do
    not serve. Nothing is found for a photo that does not name its camera. Files that cannot be read are passed over.
    """
    if photo.model is None:
        return None, ()
    matching, others = [], []
    for path in sorted(Path(folder).glob("*.json")):
        try:
            camera = read_camera(path)
        except FileError:
            continue
        if (camera.make, camera.model) != (photo.make, photo.model):
            continue
        # A camera that states no focal length has one lens; then its photos do not state one either.
        why = other_camera(camera, photo) or _unstated(camera, photo)
        if why is None:
            matching.append(camera)
        else:
            others.append(f"{path.name}: {why}")
    return max(matching, key=lambda c: len(c.residuals), default=None), tuple(others)


def _unstated(camera: Camera, photo: Photo) -> str | None:
    for own, theirs in (
        (camera.focal_length_mm, photo.focal_length_mm),
        (camera.focal_length_35mm, photo.focal_length_35mm),
    ):
        if (own is None) != (theirs is None):
            return "only one of the two states a focal length"
    return None


def _device(make: str | None, model: str | None) -> str:
    return " ".join(filter(None, (make, model))) or "an unnamed camera"
