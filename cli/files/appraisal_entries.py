"""What the result document holds beyond the properties: torsion's solution, own axes, stresses, loss, materials.

Knows the entries' shape; every figure is unrounded, in mm, N, MPa and rad.
"""

from __future__ import annotations

import dataclasses
from collections.abc import Mapping
from typing import TYPE_CHECKING, Any

from ..show_appraisal import ELASTIC
from .entries import Document, plain, quantities_entry, section_entry

if TYPE_CHECKING:
    from ...props.stress import Stress
    from ..appraisal import AfterLoss, Appraisal, SeveralMaterials, Stresses


def appraisal_entries(appraisal: Appraisal) -> Document:
    """The entries of those questions that were asked."""
    entries: Document = {}
    if appraisal.field is not None:
        solution = appraisal.field
        entries["torsion_solution"] = plain(
            {
                "poisson_ratio": solution.poisson_ratio,
                "tolerance": solution.tolerance,
                "within_tolerance": solution.within_tolerance,
                "error": solution.error,
                "relative_error": solution.relative_error,
                "torsion_constant_bounds": solution.torsion_bounds,
                "unknowns": solution.unknowns,
                "assumptions": solution.assumptions,
                "missing": solution.missing,
            }
        )
    if appraisal.about is not None:
        about = appraisal.about
        entries["about_axis"] = {
            "origin": plain(about.origin),
            "through_centroid": about.axis.origin is None,
            "angle": about.axis.angle,
            **quantities_entry(about.quantities),
        }
    if appraisal.stresses is not None:
        entries["stresses"] = _stresses(appraisal.stresses)
    if appraisal.after_loss is not None:
        entries["loss"] = _loss(appraisal.after_loss)
    if appraisal.materials is not None:
        entries["transformed"] = _materials(appraisal.materials)
    return entries


def _stresses(found: Stresses) -> Document:
    entry: Document = {
        "basis": ELASTIC,
        "forces": {"force_unit": "N", "moment_unit": "N mm", **plain(found.forces)},
        **quantities_entry({**found.quantities, **found.shear}),
        "neutral_axis": plain(found.neutral_axis),
    }
    if found.normal is not None:
        entry["places"] = {
            "largest_stress": plain(found.normal.largest.place),
            "smallest_stress": plain(found.normal.smallest.place),
            "stress_at_centroid": plain(found.normal.centroid),
        }
    if found.regions:
        entry["parts"] = [
            {
                "part": number,
                "material": region.material.name,
                **quantities_entry(quantities),
                "places": {
                    "largest_stress": plain(region.largest.place),
                    "smallest_stress": plain(region.smallest.place),
                },
            }
            for number, (region, quantities) in enumerate(
                zip(found.regions, found.region_quantities, strict=True), start=1
            )
        ]
    if found.cuts is not None:
        entry["mean_shear"] = {"upright_cuts": plain(found.cuts[0]), "level_cuts": plain(found.cuts[1])}
    if found.torsional is not None:
        entry["torsional_shear"] = _stress(found.torsional)
    return entry


def _stress(stress: Stress) -> Document:
    return {"value": stress.value, "unit": "MPa", "place": plain(stress.place)}


def _loss(found: AfterLoss) -> Document:
    ratios: Mapping[str, Any] = quantities_entry(found.ratios)
    return {
        "stated": found.loss.words,
        "angle": found.angle,
        "remaining_section": section_entry(found.remaining),
        "full": {name: pair.full for name, pair in found.comparison.items()},
        "remaining": {name: pair.remaining for name, pair in found.comparison.items()},
        "ratio": ratios,
    }


def _materials(found: SeveralMaterials) -> Document:
    t = found.transformed
    entry: Document = {
        "reference_modulus": t.reference_modulus,
        **quantities_entry(found.quantities),
        "principal": plain(t.principal._asdict()),
        "mass_per_metre": t.mass_per_metre,
        "parts": [
            {**plain({"part": number, **_fields(region)}), **quantities_entry(quantities)}
            for number, (region, quantities) in enumerate(zip(t.regions, found.regions, strict=True), start=1)
        ],
        "interfaces": [
            {
                "parts": [number + 1 for number in joint.regions],
                "length": joint.length,
                "beyond": [number + 1 for number in joint.beyond],
                **quantities_entry(quantities),
            }
            for joint, quantities in zip(t.interfaces, found.joints, strict=True)
        ],
    }
    if found.plastic is not None:
        entry["plastic_moments"] = {"unit": "N mm", "x": plain(found.plastic[0]), "y": plain(found.plastic[1])}
    return entry


def _fields(value: Any) -> dict[str, Any]:
    return {field.name: getattr(value, field.name) for field in dataclasses.fields(value)}
