"""A sign of life while something takes its time, where a person is watching."""

from __future__ import annotations

import sys
from collections.abc import Iterator
from contextlib import contextmanager


@contextmanager
def working(what: str) -> Iterator[None]:
    """Shows `what` with a turning sign on standard error until the block ends; nothing unless that is a terminal."""
    if not sys.stderr.isatty():
        yield
        return
    from rich.console import Console
    from rich.text import Text

    with Console(stderr=True).status(Text(f"{what} ...")):
        yield
