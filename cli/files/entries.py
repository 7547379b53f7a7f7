"""Parts of the result document that occur in several places: outlines, figures, values in JSON's own types.

Rounds nothing and converts no unit.
"""

from __future__ import annotations

import dataclasses
import math
from collections.abc import Iterable, Mapping
from typing import TYPE_CHECKING, Any

import numpy as np

if TYPE_CHECKING:
    from ...props.result import Quantity
    from ...props.section import Section

Document = dict[str, Any]


def section_entry(section: Section) -> Document:
    """The outlines of a section."""
    return {
        "unit": "mm",
        "parts": [
            {"shell": part.shell.tolist(), "holes": [hole.tolist() for hole in part.holes]} for part in section.parts
        ],
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
