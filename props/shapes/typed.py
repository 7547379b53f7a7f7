"""Dimensions as a person types them: "depth=200", "width=4in", "flange-slope=14%", "notch=top,50,45,30".

Knows the form of the text; what a dimension may be is checked by the shape.
"""

from __future__ import annotations

import re
from collections.abc import Sequence
from typing import Any

from ..errors import UsageError
from .timber import Notch

_UNITS = {"": 1.0, "mm": 1.0, "cm": 10.0, "m": 1000.0, "in": 25.4, "%": 0.01}
_NUMBER = re.compile(r"\s*([+-]?(?:\d+\.?\d*|\.\d+)(?:[eE][+-]?\d+)?)\s*(mm|cm|m|in|%|)\s*")


def typed_dimensions(pairs: Sequence[str]) -> dict[str, Any]:
    """Dimensions by name, mm (ratios for %), for `shapes.build`.

    pairs : texts "name=value"; hyphens in names count as underscores. "notch" may be given several times.
    Raises UsageError for a text of another form, or a dimension given twice.
    """
    dimensions: dict[str, Any] = {}
    for pair in pairs:
        name, equals, value = pair.partition("=")
        name = name.strip().lower().replace("-", "_")
        if not equals or not name:
            raise UsageError(
                "bad-dimension", f"{pair!r} is not a dimension.", "Write name=value, for instance depth=200."
            )
        if name == "notch":
            dimensions.setdefault("notches", []).append(Notch.from_text(value))
            continue
        if name in dimensions:
            raise UsageError("bad-dimension", f"The {name.replace('_', ' ')} is given twice.", "Give it once.")
        found = _NUMBER.fullmatch(value)
        if not found:
            raise UsageError(
                "bad-dimension",
                f"The {name.replace('_', ' ')} is {value!r}.",
                "Give a number, in mm or with mm, cm, m, in or %.",
            )
        dimensions[name] = float(found.group(1)) * _UNITS[found.group(2)]
    return dimensions
