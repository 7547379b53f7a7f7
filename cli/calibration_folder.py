"""Where calibrations of cameras and scanners are kept, and what their files are called.

Knows folders and names; reads and writes no calibration.
"""

from __future__ import annotations

import os
import re
import sys
from collections.abc import Mapping
from pathlib import Path

# Names a folder for calibrations in place of the person's own.
VARIABLE = "CUTFACE_CALIBRATIONS"


def calibration_folder(
    environment: Mapping[str, str] = os.environ, platform: str = sys.platform, home: Path | None = None
) -> Path:
    """The folder in which calibrations are kept and looked for; it need not exist.

    The one that VARIABLE names, else the person's own data folder as the system has it (on Linux the XDG base
    directory).
    """
    if stated := environment.get(VARIABLE):
        return Path(stated)
    home = Path.home() if home is None else home
    if platform == "win32":
        base = Path(environment.get("LOCALAPPDATA") or home / "AppData" / "Local")
    elif platform == "darwin":
        base = home / "Library" / "Application Support"
    else:
        stated = environment.get("XDG_DATA_HOME", "")
        # Relative paths are to be ignored (XDG base directory specification).
        base = Path(stated) if stated.startswith("/") else home / ".local" / "share"
    return base / "cutface" / "calibrations"


def camera_stem(
    make: str | None,
    model: str | None,
    focal_length_mm: float | None,
    size: tuple[int, int],
    zoom: float | None = None,
    raw: bool = False,
) -> str:
    """Name of a camera's files without the ending: what a photo says of it, as far as it does."""
    words = _device(make, model) or "camera"
    if focal_length_mm is not None:
        words += f"-{focal_length_mm:.4g}mm"
    if zoom is not None and zoom > 1.0:
        words += f"-zoom{zoom:.3g}"
    return f"{words}-{size[0]}x{size[1]}{'-raw' if raw else ''}"


def scanner_stem(make: str | None, model: str | None, bed_mm: tuple[float, float]) -> str:
    """The same of a scanner."""
    return f"{_device(make, model) or 'scanner'}-{bed_mm[0]:.0f}x{bed_mm[1]:.0f}mm"


def _device(make: str | None, model: str | None) -> str:
    """Make and model as a part of a file's name; many models begin with the make."""
    first, second = _plain(make), _plain(model)
    return second if second.startswith(first) else "-".join(filter(None, (first, second)))


def _plain(text: str | None) -> str:
    return re.sub(r"[^a-z0-9]+", "-", (text or "").lower()).strip("-")[:40]
