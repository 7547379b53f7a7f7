"""The result document: every figure of a measurement, unrounded, with what it rests on.

Knows the document's shape (schema "cutface/measurement/1"), one document per member. Rounds
nothing, converts no unit, and draws nothing.
"""

from __future__ import annotations

import dataclasses
import json
import math
from collections.abc import Iterable, Mapping
from functools import cache
from importlib.metadata import PackageNotFoundError, version
from typing import TYPE_CHECKING, Any

import numpy as np

from ... import __version__

if TYPE_CHECKING:
    from ...props.errors import CutfaceError
    from ...props.result import Notice, Quantity
    from ...props.section import Section
    from ...vision.measure import Measurement, Member
    from ...vision.photo import Photo

SCHEMA = "cutface/measurement/1"

_LIBRARIES = {
    "numpy": ("numpy",),
    "scipy": ("scipy",),
    # The same library is published under several names.
    "opencv": ("opencv-python", "opencv-python-headless", "opencv-contrib-python", "opencv-contrib-python-headless"),
    "scikit-image": ("scikit-image",),
    "shapely": ("shapely",),
    "pillow": ("pillow",),
    "scikit-fem": ("scikit-fem",),
    "netgen": ("netgen-mesher",),
}

Document = dict[str, Any]


def measured_documents(measurement: Measurement, options: Mapping[str, Any] | None = None) -> list[Document]:
    """One document per member of a measurement, in the order of the members' numbers.

    options : what the person stated, by the names of `measure`'s arguments
    """
    return [_measured(measurement, member, options or {}) for member in measurement.members]


def refused_document(photo: Photo, refusal: CutfaceError, options: Mapping[str, Any] | None = None) -> Document:
    """The document of a picture that gives no figure: why, and what to do about it."""
    return _document(
        status="refused",
        refusal={"code": refusal.code, "message": refusal.message, "remedy": refusal.remedy},
        warnings=_notices(photo.notices),
        photo=_photo(photo),
        options=_plain(options or {}),
    )


def to_text(document: Document, *, one_line: bool = False) -> str:
    """The document as JSON text, ending in a line feed; the same document always gives the same text.

    one_line : for another program's standard input: without line breaks and in ASCII
    """
    if one_line:
        return json.dumps(document, allow_nan=False) + "\n"
    return json.dumps(document, ensure_ascii=False, allow_nan=False, indent=1) + "\n"


def numbered(stem: str, suffix: str, number: int, of: int) -> str:
    """The name of a member's file: `result.json` for a single member, else `result-1.json`, ..."""
    return f"{stem}{suffix}" if of == 1 else f"{stem}-{number}{suffix}"


def _document(**entries: Any) -> Document:
    # The order is the reading order of a person who opens the file; absent parts are still named.
    empty: Document = {
        "schema": SCHEMA,
        "status": None,
        "refusal": None,
        "warnings": [],
        "member": None,
        "photo": None,
        "reference": None,
        "options": {},
        "section": None,
        "properties": {},
        "budget": {},
        "software": _software(),
    }
    return empty | entries


def _measured(measurement: Measurement, member: Member, options: Mapping[str, Any]) -> Document:
    return _document(
        status="measured",
        warnings=_notices(measurement.notices, member.notices),
        member={"number": member.number, "of": len(measurement.members)},
        photo=_photo(measurement.photo),
        reference=_plain(measurement.reference),
        options=_plain(options),
        section=_section(member.section),
        properties={name: _quantity(quantity) for name, quantity in member.quantities.items()},
        budget={name: _plain(quantity.budget) for name, quantity in member.quantities.items() if quantity.budget},
    )


def _section(section: Section) -> Document:
    return {
        "unit": "mm",
        "parts": [
            {"shell": part.shell.tolist(), "holes": [hole.tolist() for hole in part.holes]} for part in section.parts
        ],
    }


def _quantity(quantity: Quantity) -> Document:
    return {
        "value": _plain(quantity.value),
        "unit": quantity.unit,
        "std": _plain(quantity.std),
        "interval95": _plain(quantity.interval95),
        "pixel_bounds": _plain(quantity.pixel_bounds),
    }


def _photo(photo: Photo) -> Document:
    return {
        # The name only: the folder is the person's own affair, and the hash identifies the file.
        "file": "".join(c if c.isprintable() else "?" for c in photo.path.name),
        "sha256": photo.sha256,
        "width_px": photo.width,
        "height_px": photo.height,
        "format": photo.file_format,
        "bits": photo.bits,
        "resolution_dpi": _plain(photo.resolution_dpi),
        "orientation": _plain(photo.orientation),
        "make": photo.make,
        "model": photo.model,
        "focal_length_mm": _plain(photo.focal_length_mm),
        "focal_length_35mm": _plain(photo.focal_length_35mm),
        "taken": _plain(photo.taken),
        "icc_profile": photo.icc_name,
    }


def _notices(*groups: Iterable[Notice]) -> list[Document]:
    unique = dict.fromkeys((n.code, n.message, n.remedy) for group in groups for n in group)
    return [{"code": code, "message": message, "remedy": remedy} for code, message, remedy in unique]


def _plain(value: Any) -> Any:
    """The value in JSON's own types; a number that is not finite becomes null, as JSON has none."""
    if dataclasses.is_dataclass(value) and not isinstance(value, type):
        return {field.name: _plain(getattr(value, field.name)) for field in dataclasses.fields(value)}
    if isinstance(value, Mapping):
        return {str(key): _plain(entry) for key, entry in value.items()}
    if isinstance(value, np.ndarray | np.generic):
        return _plain(value.tolist())
    if isinstance(value, float):
        return value if math.isfinite(value) else None
    if value is None or isinstance(value, bool | int | str):
        return value
    if isinstance(value, Iterable):
        return [_plain(entry) for entry in value]
    return str(value)


@cache
def _software() -> dict[str, str]:
    found = {"cutface": __version__}
    for name, packages in _LIBRARIES.items():
        for package in packages:
            try:
                found[name] = version(package)
            except PackageNotFoundError:
                continue
            break
    return found
