"""The list of shapes with their dimensions, as a person reads it before typing one."""

from __future__ import annotations

import textwrap

from ..props.shapes import SHAPES, Shape

_WIDTH = 78


def shape_lines() -> list[str]:
    """A block for every shape: its name, what it is, and its dimensions, those that may be left out in brackets."""
    lines = ["Dimensions in mm, or with mm, cm, m, in or % behind; those in brackets may be left out.", ""]
    for name, shape in SHAPES.items():
        lines.append(f"{name}: {shape.label}")
        words = " ".join(_dimensions(shape))
        lines += textwrap.wrap(words, _WIDTH, initial_indent="    ", subsequent_indent="    ", break_on_hyphens=False)
    return [*lines, "", "A notch is typed as notch=side,start,length,depth and may be repeated: notch=top,50,45,30."]


def _dimensions(shape: Shape) -> list[str]:
    # How finely arcs are drawn as chords is no dimension of a member.
    known = [d for d in shape.dimensions if d.name != "tolerance"]
    typed = [(d, "notch" if d.name == "notches" else d.name.replace("_", "-")) for d in known]
    return [name if d.required else f"[{name}]" for d, name in typed]
