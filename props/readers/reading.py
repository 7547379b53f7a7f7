"""What a reader hands over: strokes and regions in millimetres, and what it had to say.

Knows nothing of file formats, nor how strokes become a section.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

from ..result import Notice
from ..section import Material, Points

if TYPE_CHECKING:
    from shapely import Polygon


@dataclass(frozen=True)
class Stroke:
    """A line drawn in one go; curves already flattened.

    points : (n, 2), mm; a closed stroke does not repeat its first point
    layer : name of the layer or group it lies on, "" if the format has none
    where : how a person finds it in the file, for instance "ARC #2F" or "line 12"
    """

    points: Points
    closed: bool
    layer: str
    where: str


@dataclass(frozen=True)
class Region:
    """An area the file states as such, with its holes; mm."""

    polygon: Polygon
    where: str
    material: Material | None = None


@dataclass(frozen=True)
class Reading:
    """The content of a file: either strokes, whose nesting makes the holes, or regions that state them."""

    strokes: tuple[Stroke, ...] = ()
    regions: tuple[Region, ...] = ()
    notices: tuple[Notice, ...] = ()


@dataclass(frozen=True)
class Request:
    """What the person asked for.

    layer : the layer or group to read, None for all
    unit : mm per unit of the file, overriding what the file states; None to go by the file
    chord_tolerance : curves are replaced by chords that stray no farther than this, mm
    """

    layer: str | None
    unit: float | None
    chord_tolerance: float
