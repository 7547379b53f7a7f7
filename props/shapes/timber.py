"""Sawn timber: a rectangle, with notches, housings and rebates cut into its sides."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

from ..errors import OutlineError, UsageError
from ..section import Section
from .dimensions import require_not_negative, require_positive
from .hollow_rectangle import rectangle
from .placing import placed, polygonal_section

SIDES = ("top", "bottom", "left", "right")


@dataclass(frozen=True)
class Notch:
    """A rectangular cut into one side of a timber; mm.

    side : "top", "bottom", "left" or "right"
    start : where it begins, along the side from its left (top, bottom) or lower (left, right) end; 0 for a rebate
    length : along the side
    cut : depth of the cut, square to the side
    """

    side: str
    start: float
    length: float
    cut: float

    def __post_init__(self) -> None:
        if self.side not in SIDES:
            raise UsageError("bad-notch", f"A notch has no side {self.side!r}.", f"Choose one of {', '.join(SIDES)}.")
        require_not_negative(start_of_the_notch=self.start)
        require_positive(length_of_the_notch=self.length, depth_of_the_notch=self.cut)

    @classmethod
    def from_text(cls, text: str) -> Notch:
        """A notch from "side,start,length,cut", for instance "top,50,45,30".

        Raises UsageError if the text is not of that form.
        """
        try:
            side, *numbers = text.split(",")
            start, length, cut = (float(number) for number in numbers)
        except ValueError:
            raise UsageError(
                "bad-notch", f"{text!r} is not a notch.", "Write side,start,length,cut, for instance top,50,45,30."
            ) from None
        return cls(side.strip(), start, length, cut)


def timber(depth: float, width: float, notches: Sequence[Notch] = ()) -> Section:
    """A rectangle with notches, its lower left corner on the origin; lengths in mm.

    Raises UsageError for a dimension out of range, OutlineError for a notch that lies outside the timber or cuts
    it in two.
    """
    import shapely

    section = rectangle(depth, width)
    region = shapely.box(0.0, 0.0, width, depth)
    for notch in notches:
        across, span = (width, depth) if notch.side in ("top", "bottom") else (depth, width)
        if notch.start + notch.length > across * (1.0 + 1e-12) or notch.cut >= span:
            raise OutlineError(
                "notch-outside",
                f"The {notch.side} notch from {notch.start:g} to {notch.start + notch.length:g} mm, {notch.cut:g} mm "
                f"deep, does not lie within the {width:g} x {depth:g} mm timber.",
                "Check the place, length and depth of the notch.",
            )
        end = notch.start + notch.length
        region = (
            region
            - {
                "top": shapely.box(notch.start, depth - notch.cut, end, depth),
                "bottom": shapely.box(notch.start, 0.0, end, notch.cut),
                "left": shapely.box(0.0, notch.start, notch.cut, end),
                "right": shapely.box(width - notch.cut, notch.start, width, end),
            }[notch.side]
        )
    if not notches:
        return placed(section, 0.5 * width, 0.5 * depth)
    section = polygonal_section(region)
    if len(section.parts) > 1:
        raise OutlineError(
            "notch-cuts-through",
            f"The notches cut the timber into {len(section.parts)} pieces.",
            "Check the places and depths of the notches.",
        )
    return section
