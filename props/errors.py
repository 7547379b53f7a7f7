"""Errors that a person can act on: what is wrong, and what to do about it."""

from __future__ import annotations


class CutfaceError(Exception):
    """Base of every error meant for a person.

    code : short stable identifier, e.g. "no-reference"
    message : what is wrong, one sentence
    remedy : what to do about it, one sentence
    """

    def __init__(self, code: str, message: str, remedy: str) -> None:
        super().__init__(f"{message} {remedy}".strip())
        self.code = code
        self.message = message
        self.remedy = remedy


class OutlineError(CutfaceError):
    """An outline that encloses no valid region."""


class FileError(CutfaceError):
    """A file that cannot be read or written."""


class UsageError(CutfaceError):
    """Options that contradict each other or lie outside their range."""


class Refusal(CutfaceError):
    """A picture from which no defensible figure can be taken."""
