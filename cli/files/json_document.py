"""The result document: every figure of a measurement, unrounded, with what it rests on.

Knows the document's shape (schema "cutface/measurement/1"), one document per member. Rounds
nothing, converts no unit, and draws nothing.
"""

from __future__ import annotations

import json
import math
import re
from collections.abc import Iterable, Mapping, Sequence
from functools import cache
from importlib.metadata import PackageNotFoundError, version
from itertools import zip_longest
from typing import TYPE_CHECKING, Any

from ... import __version__
from .appraisal_entries import appraisal_entries
from .entries import Document, calliper_entry, cut_entry, plain, quantities_entry, section_entry, uncertainty_entry

if TYPE_CHECKING:
    from ...props.combination import Combined
    from ...props.errors import CutfaceError
    from ...props.result import Notice
    from ...props.uncertainty import OutlineUncertainty
    from ...vision.measure import Measurement, Member
    from ...vision.photo import Photo
    from ..appraisal import Appraisal

SCHEMA = "cutface/measurement/1"

_NUMBER = r"(?:-?\d[\d.]*(?:e[-+]?\d+)?|null)"
_ROW = re.compile(rf"\[\n\s*({_NUMBER}(?:,\s+{_NUMBER})*)\n\s*\]")

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


def measured_documents(
    measurement: Measurement, options: Mapping[str, Any] | None = None, appraisals: Sequence[Appraisal] = ()
) -> list[Document]:
    """One document per member of a measurement, in the order of the members' numbers.

    options : what the person stated, by the names of `measure`'s arguments
    appraisals : what else was asked of the members, in their order
    """
    return [
        _measured(measurement, member, options or {}, appraisal)
        for member, appraisal in zip_longest(measurement.members, appraisals)
    ]


def section_document(
    source: Mapping[str, Any],
    appraisal: Appraisal,
    notices: Iterable[Notice] = (),
    options: Mapping[str, Any] | None = None,
    uncertainty: OutlineUncertainty | None = None,
) -> Document:
    """The document of a section that was drawn, stated by its dimensions, or measured earlier.

    source : where the outline comes from
    uncertainty : of an outline measured earlier; without it properties have none (null) unless they were solved
        numerically
    """
    return _document(
        status="calculated",
        warnings=_notices(notices, appraisal.notices),
        source=plain(source),
        options=plain(options or {}),
        section=section_entry(appraisal.section),
        uncertainty=None if uncertainty is None else uncertainty_entry(uncertainty),
        **quantities_entry(appraisal.quantities),
        **appraisal_entries(appraisal),
    )


def refused_section_document(
    source: Mapping[str, Any], refusal: CutfaceError, options: Mapping[str, Any] | None = None
) -> Document:
    """The document of an outline that gives no figure: why, and what to do about it."""
    return _document(
        status="refused",
        refusal={"code": refusal.code, "message": refusal.message, "remedy": refusal.remedy},
        source=plain(source),
        options=plain(options or {}),
    )


def refused_document(photo: Photo, refusal: CutfaceError, options: Mapping[str, Any] | None = None) -> Document:
    """The document of a picture that gives no figure: why, and what to do about it."""
    return _document(
        status="refused",
        refusal={"code": refusal.code, "message": refusal.message, "remedy": refusal.remedy},
        warnings=_notices(photo.notices),
        photo=_photo(photo),
        options=plain(options or {}),
    )


def to_text(document: Document, *, one_line: bool = False) -> str:
    """The document as JSON text, ending in a line feed; the same document always gives the same text.

    one_line : for another program's standard input: without line breaks and in ASCII
    """
    if one_line:
        return json.dumps(document, allow_nan=False) + "\n"
    text = json.dumps(document, ensure_ascii=False, allow_nan=False, indent=1)
    # Points and other rows of numbers stay on one line. Text holds no raw line feed, so only lists can match.
    return _ROW.sub(lambda row: f"[{' '.join(row[1].split())}]", text) + "\n"


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
        "uncertainty": None,
        "properties": {},
        "budget": {},
        "software": _software(),
    }
    document = empty | entries
    document["software"] = document.pop("software")
    return document


def _measured(
    measurement: Measurement, member: Member, options: Mapping[str, Any], appraisal: Appraisal | None
) -> Document:
    quantities = member.quantities if appraisal is None else appraisal.quantities
    entries, notices = ({}, ()) if appraisal is None else (appraisal_entries(appraisal), appraisal.notices)
    return _document(
        status="measured",
        warnings=_notices(measurement.notices, member.notices, notices),
        member={"number": member.number, "of": len(measurement.members)},
        photo=_photo(measurement.photo),
        reference=plain(measurement.reference),
        options=plain(options),
        section=section_entry(member.section if appraisal is None else appraisal.section),
        uncertainty=uncertainty_entry(member.uncertainty),
        **quantities_entry(quantities),
        **({} if measurement.combined is None else combination_entries(measurement, measurement.combined)),
        **({} if member.cut is None else {"cut": cut_entry(member.cut)}),
        **({} if member.calliper is None else {"calliper": calliper_entry(member.calliper)}),
        **entries,
    )


def combination_entries(measurement: Measurement, found: Combined) -> Document:
    """Every photo of a combined measurement with its own figures, and how they were combined."""
    return {
        "photos": [
            {
                "photo": _photo(one.photo),
                "reference": plain(one.reference),
                "section": section_entry(one.members[0].section),
                **quantities_entry(one.members[0].quantities),
                "weight": laid.weight,
                "turn_deg": math.degrees(laid.turn),
                "mean_distance_mm": laid.apart,
            }
            for one, laid in zip(measurement.photos, found.laid, strict=True)
        ],
        "combination": {
            "scatter": {
                name: {"std": found.scatter(name), "degrees_of_freedom": len(found.laid) - 1}
                for name in found.laid[0].figures
            },
            "chi_square": found.chi_square,
            "degrees_of_freedom": found.degrees,
            "probability": found.probability,
            "factor_of_what_each_photo_has": found.narrowed,
            "factor_of_what_may_differ": found.widened,
        },
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
        "resolution_dpi": plain(photo.resolution_dpi),
        "orientation": plain(photo.orientation),
        "make": photo.make,
        "model": photo.model,
        "focal_length_mm": plain(photo.focal_length_mm),
        "focal_length_35mm": plain(photo.focal_length_35mm),
        "taken": plain(photo.taken),
        "icc_profile": photo.icc_name,
    }


def _notices(*groups: Iterable[Notice]) -> list[Document]:
    unique = dict.fromkeys((n.code, n.message, n.remedy) for group in groups for n in group)
    return [{"code": code, "message": message, "remedy": remedy} for code, message, remedy in unique]


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
