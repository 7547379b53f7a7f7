"""A sign of life while something takes its time, where a person is watching."""

from __future__ import annotations

import sys
from collections.abc import Callable, Iterator
from contextlib import contextmanager


@contextmanager
def working(what: str) -> Iterator[Callable[[str], None]]:
    """Shows `what` with a turning sign on standard error until the block ends; nothing unless that is a terminal.

    The block is handed a function that says how far things are, in place of `what`.
    """
    if not sys.stderr.isatty():
        yield lambda text: None
        return
    from rich.console import Console
    from rich.text import Text

    with Console(stderr=True).status(Text(f"{what} ...")) as status:
        yield lambda text: status.update(Text(f"{text} ..."))
