"""Checks of the dimensions a person types, with messages that name the dimension.

Knows what a length may be; how lengths fit together is checked by the shape that uses them.
"""

from __future__ import annotations

import math

from ..errors import UsageError


def require_positive(**lengths: float) -> None:
    """Raise UsageError unless every length is a finite number above zero, mm."""
    for name, value in lengths.items():
        if not (math.isfinite(value) and value > 0.0):
            raise UsageError(
                "bad-dimension", f"The {_words(name)} is {value:g} mm.", f"Give a {_words(name)} above 0 mm."
            )


def require_not_negative(**lengths: float) -> None:
    """Raise UsageError unless every length is a finite number, zero or above, mm."""
    for name, value in lengths.items():
        if not (math.isfinite(value) and value >= 0.0):
            raise UsageError(
                "bad-dimension", f"The {_words(name)} is {value:g} mm.", f"Give a {_words(name)} of 0 mm or more."
            )


def require_less(small: tuple[str, float], large: tuple[str, float]) -> None:
    """Raise UsageError unless the first (name, mm) is less than the second."""
    if not small[1] < large[1]:
        raise UsageError(
            "bad-dimension",
            f"The {_words(small[0])} ({small[1]:g} mm) must be less than the {_words(large[0])} ({large[1]:g} mm).",
            "Check the two dimensions; they may have been swapped or be in another unit.",
        )


def _words(name: str) -> str:
    return name.replace("_", " ")
