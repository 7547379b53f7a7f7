"""One section from a drawing or from its dimensions: read or build it, answer the questions, write its files.

Knows the order of things and the names of the files; not how a person asked for them.
"""

from __future__ import annotations

import dataclasses
import hashlib
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np

from ..props.enclosing import measured_quantities
from ..props.errors import CutfaceError, FileError, OutlineError, UsageError
from ..props.readers import MILLIMETRES, Recorded, read_recorded, read_section
from ..props.result import Notice
from ..props.section import Section
from ..props.shapes import SHAPES, build, typed_dimensions
from ..props.uncertainty import OutlineUncertainty
from .appraisal import Appraisal, Questions, appraise, drawn_quantities
from .files.geometry import to_geojson, to_svg, to_wkt
from .files.json_document import Document, refused_section_document, section_document, to_text
from .files.marks import Marks
from .output_folder import ensure_free, output_folder
from .progress import working
from .run import FILE_NAMES

# mm; overall sizes beyond these are slips of typing.
SMALLEST_SHAPE, LARGEST_SHAPE = 1.0, 5e4


@dataclass(frozen=True)
class Drawn:
    """What came of a section: its appraisal or the reason why there is none; its document, and the files written.

    measured : whether its outline was measured, with an uncertainty that its figures carry
    """

    title: str
    document: Document
    appraisal: Appraisal | None = None
    notices: tuple[Notice, ...] = ()
    refusal: CutfaceError | None = None
    files: tuple[str, ...] = ()
    measured: bool = False


def section_from_file(
    path: Path,
    questions: Questions | None,
    folder: Path | None = None,
    *,
    layer: str | None = None,
    unit: str | None = None,
    repair: bool = False,
    density: float | None = None,
    replace: bool = False,
) -> Drawn:
    """Everything about the section in a file; its files go into `folder`, those of a refusal too.

    The section of a measurement's result.json keeps the uncertainty that was measured.
    layer, unit, repair : see `read_section`
    Raises UsageError, FileError as `read_section`, and as `output_folder`. A refusal is returned.
    """
    if folder is not None:
        ensure_free(folder, FILE_NAMES, replace=replace)
    source: dict[str, Any] = {"kind": "file", "file": _printable(path.name), "layer": layer, "unit": unit}
    source["repair"] = repair
    title = f"Section drawn in {_printable(path.name)}"
    if not path.is_file():
        raise FileError("no-such-file", f"There is no file {path}.", "Check the name and the folder.")
    with working(f"Reading {path.name}"):
        try:
            earlier = read_recorded(path)
            if earlier is not None:
                _require_as_recorded(path.name, layer, unit)
                source |= {"kind": "result", "sha256": _sha256(path), "photo": {"file": _printable(earlier.photo)}}
                title = _title(path.name, earlier)
                return _drawn(
                    title,
                    earlier.section,
                    earlier.notices,
                    source,
                    questions,
                    density,
                    folder,
                    replace,
                    earlier.uncertainty,
                )
            section, notices = read_section(path, layer=layer, unit=unit, repair=repair)
            source["sha256"] = _sha256(path)
            return _drawn(title, section, notices, source, questions, density, folder, replace)
        except OutlineError as refusal:
            source["sha256"] = _sha256(path)
            document = refused_section_document(source, refusal, _options(questions, density))
            return _written(Drawn(title, document, refusal=refusal), folder, replace)


def section_from_dimensions(
    name: str,
    pairs: Sequence[str],
    questions: Questions | None,
    folder: Path | None = None,
    *,
    density: float | None = None,
    replace: bool = False,
) -> Drawn:
    """Everything about a shape of `SHAPES` with dimensions typed as "name=value".

    Raises UsageError for a shape or dimension that cannot be, OutlineError for dimensions that do not fit together,
    and as `output_folder`.
    """
    if folder is not None:
        ensure_free(folder, FILE_NAMES, replace=replace)
    section = build(name, typed_dimensions(pairs))
    size = float(np.ptp(section.vertices, axis=0).max())
    if not SMALLEST_SHAPE <= size <= LARGEST_SHAPE:
        raise UsageError(
            "no-size-of-a-member",
            f"The {name} is {size:.3g} mm large, which is no size of a structural member.",
            "Check the dimensions and their units; without a unit they are mm.",
        )
    source = {"kind": "shape", "shape": name, "dimensions": dict(pair.split("=", 1) for pair in pairs)}
    title = f"{SHAPES[name].label[:1].upper()}{SHAPES[name].label[1:]}: {', '.join(pairs)}"
    with working(f"Working out the {name}"):
        return _drawn(title, section, (), source, questions, density, folder, replace)


def _drawn(
    title: str,
    section: Section,
    notices: tuple[Notice, ...],
    source: Mapping[str, Any],
    questions: Questions | None,
    density: float | None,
    folder: Path | None,
    replace: bool,
    uncertainty: OutlineUncertainty | None = None,
) -> Drawn:
    if uncertainty is None:
        quantities = drawn_quantities(section, density)
    else:
        quantities = measured_quantities(section, uncertainty, density)
    appraisal = appraise(section, questions or Questions(), quantities, uncertainty)
    document = section_document(source, appraisal, notices, _options(questions, density), uncertainty)
    return _written(Drawn(title, document, appraisal, notices, measured=uncertainty is not None), folder, replace)


def _title(name: str, earlier: Recorded) -> str:
    measured = f"measured in {_printable(earlier.photo)}, " if earlier.photo else ""
    return f"Section {measured}from {_printable(name)}"


def _require_as_recorded(name: str, layer: str | None, unit: str | None) -> None:
    """Raise UsageError for options that a result leaves no choice for."""
    if layer is not None:
        raise UsageError("no-layers", f"{name} is a result, which has no layers.", "Leave the layer out.")
    if unit is not None and MILLIMETRES.get(unit.strip().lower()) != 1.0:
        raise UsageError("unit-of-a-result", f"{name} is a result, which is in mm.", "Leave the unit out.")


def _options(questions: Questions | None, density: float | None) -> dict[str, Any]:
    return {**({} if questions is None else questions.stated), **({} if density is None else {"density": density})}


def _written(outcome: Drawn, folder: Path | None, replace: bool) -> Drawn:
    if folder is None:
        return outcome
    with output_folder(folder, FILE_NAMES, replace=replace) as draft:

        def write(name: str, text: str) -> None:
            # Line feeds on every system: the same input gives the same bytes.
            (draft / name).write_text(text, encoding="utf-8", newline="\n")

        write("result.json", to_text(outcome.document))
        if outcome.appraisal is not None:
            section = outcome.appraisal.section
            write("section.wkt", to_wkt(section))
            write("section.geojson", to_geojson(section, {"source": outcome.title}))
            write("section.svg", to_svg(section, outcome.title, Marks.of(outcome.appraisal)))
        return dataclasses.replace(outcome, files=tuple(sorted(file.name for file in draft.iterdir())))


def _sha256(path: Path) -> str:
    return hashlib.sha256(path.read_bytes()).hexdigest()


def _printable(name: str) -> str:
    return "".join(c if c.isprintable() else "?" for c in name)
