"""The list of references that can be stated, as a person reads it before typing one."""

from __future__ import annotations

import textwrap

from ..props.errors import UsageError
from ..vision.references.kinds import KINDS
from ..vision.references.stated import COMMON, Key, Kind

_WIDTH = 78


def reference_lines(name: str | None = None) -> list[str]:
    """A block for every kind, or for one: what it is, its keys, what is assumed, an example. Raises UsageError."""
    if name is not None and name.lower() not in KINDS:
        raise UsageError("reference-kind", f"{name!r} is no kind of reference.", f"The kinds are {', '.join(KINDS)}.")
    lines = [
        *textwrap.wrap(
            "Stated with --reference, which may be repeated. Lengths in mm, or with mm, cm, m or in behind; places in "
            "pixels of the upright picture, from its upper left corner; names in brackets may be left out.",
            _WIDTH,
        )
    ]
    for kind in KINDS.values() if name is None else [KINDS[name.lower()]]:
        lines += ["", *_block(kind)]
    lines += ["", "Every kind also takes:"]
    for key in COMMON:
        lines += _key(key)
    return lines


def _block(kind: Kind) -> list[str]:
    lines = textwrap.wrap(f"{kind.name}: {kind.about}", _WIDTH, subsequent_indent="    ")
    for key in kind.keys:
        lines += _key(key)
    lines += textwrap.wrap(f"assumed: {kind.uncertainty}", _WIDTH, initial_indent="    ", subsequent_indent="      ")
    return [*lines, f'    --reference "{kind.example}"']


def _key(key: Key) -> list[str]:
    # Long forms stand alone, so that what is said of them begins in one column.
    head = f"    {key.shown:<22}"
    about = textwrap.wrap(key.about, _WIDTH - 28, break_on_hyphens=False)
    if len(key.shown) > 22:
        return [head.rstrip(), *(" " * 28 + line for line in about)]
    return [f"{head}  {about[0]}", *(" " * 28 + line for line in about[1:])]
