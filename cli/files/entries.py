"""Parts of the result document that occur in several places: outlines, figures, values in JSON's own types.

Rounds nothing and converts no unit.
"""

from __future__ import annotations

import dataclasses
import math
from collections.abc import Iterable, Mapping
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import ArrayLike

if TYPE_CHECKING:
    from ...props.calliper import Adjusted
    from ...props.oblique import Projected
    from ...props.result import Quantity
    from ...props.section import Part, Section
    from ...props.uncertainty import OutlineUncertainty

Document = dict[str, Any]

# Raised when the entry changes so that readers of an earlier one fail.
UNCERTAINTY_VERSION = 1


def section_entry(section: Section) -> Document:
    """The outlines of a section."""
    return {"unit": "mm", "parts": [_part(part) for part in section.parts]}


def _part(part: Part) -> Document:
    entry: Document = {"shell": part.shell.tolist(), "holes": [hole.tolist() for hole in part.holes]}
    if part.material is not None:
        entry["material"] = plain(part.material)
    return entry


def uncertainty_entry(uncertainty: OutlineUncertainty) -> Document:
    """What moves the outline: all that the uncertainty of any figure is worked out from again.

    Per vertex, in the order of the section's loops: the movement along x and y by each cause at one standard
    uncertainty, the random error and the length over which it averages out, the largest error of the edge. Whole
    nanometres: a thousandth of what matters, in half the room.
    """
    noise, bound = uncertainty.noise, uncertainty.edge_bound
    return {
        "version": UNCERTAINTY_VERSION,
        "unit": "nm",
        "modes": [
            {
                "source": mode.source,
                "shape": mode.shape,
                "x": _nanometres(mode.displacement[:, 0]),
                "y": _nanometres(mode.displacement[:, 1]),
            }
            for mode in uncertainty.modes
        ],
        "noise": None
        if noise is None
        else {"std": _nanometres(noise.std), "correlation_length": _nanometres(noise.correlation_length)},
        "edge_bound": None if bound is None else _nanometres(bound),
        "simplification": plain(uncertainty.simplification),
    }


def _nanometres(values: ArrayLike) -> list[int]:
    return np.rint(1e6 * np.asarray(values, float)).astype(np.int64).tolist()


def calliper_entry(found: Adjusted) -> Document:
    """What sizes taken by calliper made of an outline, mm."""
    return {
        "sizes": [
            {
                "size": c.reading.name,
                "value": c.reading.value,
                "std": c.reading.std,
                "picture": {"value": plain(c.before), "std": plain(c.before_std)},
                "adjusted": {"value": plain(c.after), "std": plain(c.after_std)},
                "score": plain(c.score),
            }
            for c in found.compared
        ],
        "chi_square": plain(found.chi_square),
        "degrees_of_freedom": len(found.compared),
        "probability": plain(found.probability),
    }


def cut_entry(found: Projected) -> Document:
    """How the face of an oblique cut became the true section."""
    return {
        "angle_deg": math.degrees(found.angle),
        "angle_std_deg": math.degrees(found.angle_std),
        "face_to_section": plain(found.shrink),
    }


def quantities_entry(quantities: Mapping[str, Quantity]) -> Document:
    """`properties` and `budget` of figures with their uncertainty."""
    return {
        "properties": {name: _quantity(quantity) for name, quantity in quantities.items()},
        "budget": {name: plain(quantity.budget) for name, quantity in quantities.items() if quantity.budget},
    }


def _quantity(quantity: Quantity) -> Document:
    return {
        "value": plain(quantity.value),
        "unit": quantity.unit,
        "std": plain(quantity.std),
        # A figure without uncertainty has no interval; one that cannot be bounded has open ends.
        "interval95": None if math.isnan(quantity.interval95[0]) else plain(quantity.interval95),
        "pixel_bounds": plain(quantity.pixel_bounds),
    }


def plain(value: Any) -> Any:
    """The value in JSON's own types; a number that is not finite becomes null, as JSON has none."""
    if dataclasses.is_dataclass(value) and not isinstance(value, type):
        return {field.name: plain(getattr(value, field.name)) for field in dataclasses.fields(value)}
    if isinstance(value, Mapping):
        return {str(key): plain(entry) for key, entry in value.items()}
    if isinstance(value, np.ndarray | np.generic):
        return plain(value.tolist())
    if isinstance(value, float):
        return value if math.isfinite(value) else None
    if value is None or isinstance(value, bool | int | str):
        return value
    if isinstance(value, Iterable):
        return [plain(entry) for entry in value]
    return str(value)
