"""What every kind of scale reference gives: a plane of the face, its uncertain causes, and where to look.

Knows no kind in particular.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass, field
from typing import Literal, Protocol

import numpy as np
from numpy.typing import NDArray

from ...props.result import Notice
from ...props.uncertainty import Mode
from ..colour_profile import Tone
from ..photo import Photo

Array = NDArray[np.float64]


class Mapper(Protocol):
    """Pixel <-> millimetre of a plane."""

    def to_mm(self, pixels: Array) -> Array:
        """(n, 2) photo pixels to (n, 2) plane mm."""
        ...

    def to_pixels(self, points: Array) -> Array:
        """(n, 2) plane mm to (n, 2) photo pixels."""
        ...

    def mm_per_px(self, pixels: Array) -> Array:
        """(n, 2, 2) Jacobian of `to_mm`."""
        ...


@dataclass(frozen=True, eq=False)
class PrintEdges:
    """Edges between the reference's own black and white.

    points : (n, 2) photo pixels, good to a pixel; normals : (n, 2) unit, from black to white
    reach : px to either side that hold nothing else
    """

    points: Array
    normals: Array
    reach: float


@dataclass(frozen=True, eq=False)
class Reference:
    """A scale reference found in a photo.

    kind, label : "sheet", "A4"
    face : pixel <-> mm of the plane in which the face lies
    background : what surrounds the face: "paper" (its tone is that of `white`), "lid" (a scan's border shows it), "any"
    modes : (n, 2) face points in mm -> what the reference's uncertain causes do to them
    region : outlines in photo pixels of where a face may lie; empty for the whole photo
    excluded : outlines in photo pixels of what is no face (cards)
    on_face : outlines in photo pixels of what certainly belongs to the face (a pattern printed on it)
    white, black : (k, 2) photo pixels on the reference's own white and black; empty where it has none
    print_edges : edges between black and white of the reference, None where it has none to ask
    tone : the curve that the photo's values follow, where a calibration of its camera tells it
    residual_px : rms of the corners per axis
    corners_px : (k, 2) corners used
    foot : (n, 2) photo pixels of face points -> of the points square below them in the reference plane; None where
        the face lies in it
    rise : (n, 2) mm of points of the reference plane, mm of height -> (n, 2) photo pixels of the points square above
        them; None where it is stated how high the face stands, or nobody would stand it up
    details : further figures for the result, in plain types
    """

    kind: str
    label: str
    face: Mapper
    modes: Callable[[Array], tuple[Mode, ...]]
    background: Literal["paper", "lid", "any"] = "any"
    region: tuple[Array, ...] = ()
    excluded: tuple[Array, ...] = ()
    on_face: tuple[Array, ...] = ()
    white: Array = field(default_factory=lambda: np.empty((0, 2)))
    black: Array = field(default_factory=lambda: np.empty((0, 2)))
    print_edges: PrintEdges | None = None
    tone: Tone | None = None
    residual_px: float = 0.0
    corners_px: Array = field(default_factory=lambda: np.empty((0, 2)))
    plane_offset_mm: float = 0.0
    foot: Callable[[Array], Array] | None = None
    rise: Callable[[Array, float], Array] | None = None
    details: Mapping[str, object] = field(default_factory=dict)
    notices: tuple[Notice, ...] = ()


class ReferenceKind(Protocol):
    """A way to get the scale of a photo that a person names; each kind is one file of this package.

    A kind is a small frozen dataclass that holds what the person stated.
    """

    def locate(self, photo: Photo) -> Reference:
        """The Reference that this kind gives in a photo; raises Refusal when it cannot be found or trusted."""
        ...
