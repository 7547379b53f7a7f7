"""Parametric shapes of the trade, one family a file.

`SHAPES` lists them by name with their dimensions; `build` draws one from dimensions given by name.
"""

from __future__ import annotations

import inspect
from collections.abc import Callable, Mapping
from dataclasses import dataclass
from typing import Any

from ..errors import UsageError
from ..section import Section
from .angle import angle
from .built_up import riveted_i, welded_box, welded_i
from .channel import channel
from .circle import circle, tube
from .hollow_rectangle import hollow_rectangle, rectangle
from .rolled_i import rolled_i
from .tee import tee
from .timber import Notch, timber
from .typed import typed_dimensions

__all__ = [
    "SHAPES",
    "Dimension",
    "Notch",
    "Shape",
    "angle",
    "build",
    "channel",
    "circle",
    "hollow_rectangle",
    "rectangle",
    "riveted_i",
    "rolled_i",
    "tee",
    "timber",
    "tube",
    "typed_dimensions",
    "welded_box",
    "welded_i",
]


@dataclass(frozen=True)
class Dimension:
    """One dimension of a shape: its name, and whether it can be left out."""

    name: str
    required: bool


@dataclass(frozen=True)
class Shape:
    """A family of shapes: what draws it, what it is, the dimensions it takes (mm; slopes as plain ratios)."""

    draw: Callable[..., Section]
    label: str

    @property
    def dimensions(self) -> tuple[Dimension, ...]:
        """The dimensions, in the order `draw` takes them."""
        return tuple(Dimension(p.name, p.default is p.empty) for p in inspect.signature(self.draw).parameters.values())


SHAPES: Mapping[str, Shape] = {
    "rectangle": Shape(rectangle, "solid rectangle, corners sharp or round"),
    "timber": Shape(timber, "timber rectangle with notches"),
    "circle": Shape(circle, "round bar"),
    "tube": Shape(tube, "circular hollow section"),
    "hollow-rectangle": Shape(hollow_rectangle, "rectangular or square hollow section"),
    "rolled-i": Shape(rolled_i, "rolled I or H, flanges parallel or tapered"),
    "channel": Shape(channel, "channel, flanges parallel or tapered"),
    "angle": Shape(angle, "angle, legs equal or unequal"),
    "tee": Shape(tee, "tee, rolled or cut from an I"),
    "welded-i": Shape(welded_i, "I of three plates"),
    "welded-box": Shape(welded_box, "box of four plates"),
    "riveted-i": Shape(riveted_i, "girder of web plate, angles and cover plates"),
}


def build(name: str, dimensions: Mapping[str, Any]) -> Section:
    """Draw the shape `name` of `SHAPES` from dimensions by name, mm.

    Raises UsageError for an unknown shape, an unknown or a missing dimension; else what the shape itself raises.
    """
    if name not in SHAPES:
        raise UsageError("unknown-shape", f"There is no shape {name!r}.", f"Choose one of {', '.join(SHAPES)}.")
    shape = SHAPES[name]
    known = [d.name for d in shape.dimensions]
    unknown = [given for given in dimensions if given not in known]
    missing = [d.name for d in shape.dimensions if d.required and d.name not in dimensions]
    if unknown:
        raise UsageError("unknown-dimension", f"A {name} has no {', '.join(unknown)}.", f"It takes {', '.join(known)}.")
    if missing:
        raise UsageError("missing-dimension", f"The {name} lacks {', '.join(missing)}.", "Give them in mm.")
    return shape.draw(**dimensions)
