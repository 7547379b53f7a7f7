"""The kinds of reference that a person can state, by name: one line for each file.

Knows no more of them than where they are.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence

from . import bar, checker, chessboard, disc, points, rectangle, squares
from .reference import ReferenceKind
from .stated import Given, Kind, stated_reference

KINDS: Mapping[str, Kind] = {
    kind.name: kind
    for kind in (
        *rectangle.KINDS,
        *bar.KINDS,
        *points.KINDS,
        *disc.KINDS,
        *chessboard.KINDS,
        *checker.KINDS,
        *squares.KINDS,
    )
}


def stated_references(texts: Sequence[str], given: Given) -> list[ReferenceKind]:
    """The references of texts "KIND name=value ..."; raises UsageError."""
    return [stated_reference(text, KINDS, given) for text in texts]
