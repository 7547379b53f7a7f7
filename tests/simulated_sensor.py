"""From light on a simulated sensor to an encoded file: noise, mosaic, tone, sharpening, JPEG, EXIF."""

from __future__ import annotations

import io
from pathlib import Path
from typing import Any

import cv2
import numpy as np
from numpy.typing import NDArray
from simulated_painting import expose
from simulated_scene import Scene, Sensor
from simulated_view import Flatbed, Floats, Image


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
