"""What is said beside the figures: notices."""

from __future__ import annotations

from dataclasses import dataclass


@dataclass(frozen=True)
class Notice:
    """Something a person should know about a result.

    code : short stable identifier, e.g. "several-pages"
    message : what was found, and what it does to the figures, one sentence
    remedy : what to do about it, one sentence
    """

    code: str
    message: str
    remedy: str
