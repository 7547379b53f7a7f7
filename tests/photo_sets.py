"""Where the sets of real photos are, for the tests that look at them.

They are too large to be kept with the program: the environment variable CUTFACE_PHOTOS names their
folder, or they lie in `shared/photos` beside the checkout. Without them those tests are skipped.
"""

from __future__ import annotations

import os
from pathlib import Path

import pytest


def photo_set(name: str) -> list[Path]:
    """The files of one set, sorted; skips the test where the set is not at hand."""
    stated = os.environ.get("CUTFACE_PHOTOS")
    folder = Path(stated) if stated else Path(__file__).resolve().parents[2] / "shared" / "photos"
    files = sorted((folder / name).glob("*"))
    if not files:
        pytest.skip(f"the photo set '{name}' is not at hand (set CUTFACE_PHOTOS to the folder of the sets)")
    return files
