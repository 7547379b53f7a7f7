"""Section properties of a member from a picture of its cut face, with uncertainty.

The public face of the package; every name is loaded on first use, so that importing
`cutface` costs nothing that is not needed.
"""

from __future__ import annotations

import importlib
from typing import TYPE_CHECKING, Any

if TYPE_CHECKING:
    from .props.properties import section_properties
    from .props.section import Part, Section
    from .vision.measure import measure
    from .vision.photo import load_photo

__version__ = "0.1.0"

_WHERE = {
    "Part": ".props.section",
    "Section": ".props.section",
    "load_photo": ".vision.photo",
    "measure": ".vision.measure",
    "section_properties": ".props.properties",
}

__all__ = ["Part", "Section", "load_photo", "measure", "section_properties"]


def __getattr__(name: str) -> Any:
    if name not in _WHERE:
        raise AttributeError(f"module 'cutface' has no attribute {name!r}")
    return getattr(importlib.import_module(_WHERE[name], __name__), name)


def __dir__() -> list[str]:
    return sorted([*globals(), *_WHERE])
