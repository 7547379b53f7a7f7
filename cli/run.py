"""One photo, or several of one face, from the command line: open, measure, put everything about it into one folder.

Knows the order of things and the names of the files; not how a person asked for them.
"""

from __future__ import annotations

import dataclasses
import re
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from itertools import zip_longest
from pathlib import Path
from typing import TYPE_CHECKING, Any

from ..props.errors import CutfaceError, OutlineError, Refusal, UsageError
from ..vision.callipered import Stated, callipered
from ..vision.combined import combine
from ..vision.measure import measure
from ..vision.photo import load_photo
from ..vision.squared import squared
from .appraisal import Appraisal, Questions, appraise
from .files.geometry import to_geojson, to_svg, to_wkt
from .files.json_document import Document, measured_documents, numbered, refused_document, to_text
from .files.marks import Marks
from .files.picture import write_picture
from .known_devices import StatedDevices, known_devices, unused_devices
from .output_folder import ensure_free, output_folder
from .progress import working

if TYPE_CHECKING:
    from ..props.oblique import Cut
    from ..vision.measure import Measurement

# Every name that a run may write: a run that replaces another clears these, and only these.
FILE_NAMES = re.compile(r"result(-\d+)?\.json|section(-\d+)?\.(wkt|geojson|svg)|outline(-\d+)?\.jpg")


# Options that name places in one picture, by the arguments they become.
_PLACES = {"seeds": "--seed", "within": "--within", "excluded": "--exclude", "parts": "--part"}


@dataclass(frozen=True)
class Run:
    """What came of a photo: a measurement, or the reason why there is none; its documents, and the files written."""

    documents: tuple[Document, ...]
    measurement: Measurement | None = None
    refusal: CutfaceError | None = None
    files: tuple[str, ...] = ()
    appraisals: tuple[Appraisal, ...] = ()


def run(
    paths: Sequence[Path],
    options: Mapping[str, Any],
    folder: Path | None = None,
    *,
    replace: bool = False,
    questions: Questions | None = None,
    devices: StatedDevices | None = None,
    sizes: Sequence[Stated] = (),
    opening: Mapping[str, Any] | None = None,
    cut: Cut | None = None,
) -> Run:
    """Measure the photo at `paths`, or combine several of one face, and write the files, those of a refusal too.

    options : keyword arguments of `measure`; they are written into the documents
    questions : asked of every member beyond its properties
    devices : what is stated of the camera and the scanner; their calibrations are found by the photo otherwise
    sizes : taken by calliper on the members, to which their outlines are adjusted
    opening : keyword arguments of `load_photo`: which page of the file; written into the documents too
    cut : how the cut lies to the member's axis, where it is not square
    folder : where the files go, None to write none
    Raises UsageError if `folder` holds results and `replace` is False, an option cannot be, or one names a place in
    one picture where there are several; FileError if a photo cannot be read or the files cannot be written. A refusal
    is returned.
    """
    if len(paths) > 1:
        _require_no_places(len(paths), options, sizes)
    if folder is not None:
        ensure_free(folder, FILE_NAMES, replace=replace)
    devices = devices or StatedDevices()
    opening = opening or {}
    stated = {**opening, **devices.options}
    stated |= {name: value for name, value in {"calliper": sizes, "cut": cut}.items() if value}
    stated |= {} if questions is None else questions.stated
    with working(f"Measuring {paths[0].name if len(paths) == 1 else f'{len(paths)} photos'}"):
        photos = [load_photo(path, **opening) for path in paths]
        photo = photos[0]
        measurements: list[Measurement] = []
        try:
            for photo in photos:
                known = known_devices(photo, devices)
                photo = dataclasses.replace(photo, notices=(*photo.notices, *known.notices))
                found = measure(photo, **options, **known.arguments)
                said = (*found.notices, *unused_devices(devices, found))
                measurements.append(dataclasses.replace(found, notices=said))
            measurement = combine(measurements) if len(photos) > 1 else measurements[0]
            # A calliper is held square to the member, whatever the cut is.
            measurement = callipered(measurement if cut is None else squared(measurement, cut), sizes)
        except (Refusal, OutlineError) as refusal:
            if len(measurements) < len(photos) > 1:
                named = f"In {photo.path.name}: {refusal.message}"
                refusal = type(refusal)(refusal.code, named, refusal.remedy)
            outcome = Run((refused_document(photo, refusal, {**options, **stated}),), refusal=refusal)
        else:
            appraisals: tuple[Appraisal, ...] = ()
            if questions is not None:
                appraisals = tuple(
                    appraise(m.section, questions, m.quantities, m.uncertainty) for m in measurement.members
                )
            documents = measured_documents(measurement, {**options, **stated}, appraisals)
            outcome = Run(tuple(documents), measurement, appraisals=appraisals)
        if folder is not None:
            with output_folder(folder, FILE_NAMES, replace=replace) as draft:
                _write(outcome, draft)
                outcome = dataclasses.replace(outcome, files=tuple(sorted(file.name for file in draft.iterdir())))
    return outcome


def _write(outcome: Run, folder: Path) -> None:
    def write(stem: str, suffix: str, number: int, text: str) -> None:
        name = numbered(stem, suffix, number, len(outcome.documents))
        # Line feeds on every system: the same photo gives the same bytes.
        (folder / name).write_text(text, encoding="utf-8", newline="\n")

    for number, document in enumerate(outcome.documents, start=1):
        write("result", ".json", number, to_text(document))
    if outcome.measurement is None:
        return
    photo = outcome.documents[0]["photo"]["file"]
    pairs = zip_longest(outcome.measurement.members, outcome.appraisals)
    for number, (member, appraisal) in enumerate(pairs, start=1):
        marks = None if appraisal is None else Marks.of(appraisal)
        about = {"photo": photo, "member": member.number}
        write("section", ".wkt", number, to_wkt(member.section))
        write("section", ".geojson", number, to_geojson(member.section, about))
        write("section", ".svg", number, to_svg(member.section, f"Section of member {member.number} in {photo}", marks))
    if not outcome.measurement.photos:
        write_picture(outcome.measurement, folder / "outline.jpg", outcome.appraisals)
    for number, measurement in enumerate(outcome.measurement.photos, start=1):
        write_picture(measurement, folder / f"outline-{number}.jpg")


def _require_no_places(count: int, options: Mapping[str, Any], sizes: Sequence[Stated]) -> None:
    """Raise UsageError for what names a place in one picture, where there are several."""
    typed = [option for name, option in _PLACES.items() if name in options]
    typed += ["--calliper with two pixels"] if any(size.points is not None for size in sizes) else []
    if typed:
        raise UsageError(
            "place-in-several",
            f"{typed[0]} names a place in one picture, and {count} pictures are given.",
            "Measure the pictures one by one, or leave it out.",
        )
