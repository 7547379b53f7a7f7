"""How a run that went wrong ends: one message a person can act on, and an exit code.

Knows the errors of the package and what the operating system says; knows no command.
"""

from __future__ import annotations

import sys
from pathlib import Path

from ..props.errors import CutfaceError, FileError, OutlineError, Refusal, UsageError

MEASURED = 0
FAULT = 1
WRONG_USE = 2
REFUSED = 3
UNREADABLE = 4

_ENDS: tuple[tuple[type[CutfaceError], int, str], ...] = (
    (UsageError, WRONG_USE, "Wrong use"),
    (Refusal, REFUSED, "Refused"),
    (OutlineError, REFUSED, "Refused"),
    (FileError, UNREADABLE, "File problem"),
)


def exit_code(error: BaseException) -> int:
    """The exit code that tells a calling program what kind of error ended the run."""
    return next((code for kind, code, _ in _ENDS if isinstance(error, kind)), FAULT)


def explain(error: BaseException) -> str:
    """What a person is told about an error: the cause, and what to do about it.

    An error that is not meant for a person is written to a file of its own, which the text names.
    """
    if isinstance(error, CutfaceError):
        heading = next((words for kind, _, words in _ENDS if isinstance(error, kind)), "Error")
        return "\n".join(filter(None, [f"{heading}: {error.message}", error.remedy and f"What to do: {error.remedy}"]))
    if isinstance(error, MemoryError):
        return "There is not enough memory for this picture.\nWhat to do: Close other programs or reduce the picture."
    if isinstance(error, ImportError) and error.name not in (None, "cutface") and "libGL" not in str(error):
        return (
            f"A part that cutface needs is missing or damaged: {error}.\n"
            "What to do: Install cutface again into a fresh environment, with everything it depends on."
        )
    if isinstance(error, ImportError) and ".so" in str(error):
        return (
            f"The picture library cannot start on this machine: {error}.\n"
            "What to do: Install the missing system library (Debian and Ubuntu: apt-get install libgl1 libglib2.0-0)."
        )
    saved = _save_details(error)
    where = f"Details are in {saved}; please send that file along when you report this." if saved else str(error)
    return f"Sorry, cutface failed through a fault of its own ({type(error).__name__}). {where}"


def _save_details(error: BaseException) -> Path | None:
    import platform
    import tempfile
    import traceback

    from .. import __version__

    text = "\n".join(
        [
            f"cutface {__version__}, Python {platform.python_version()}, {platform.platform()}",
            f"arguments: {sys.argv[1:]}",
            "".join(traceback.format_exception(error)),
        ]
    )
    try:
        with tempfile.NamedTemporaryFile(
            "w", prefix="cutface-fault-", suffix=".txt", delete=False, encoding="utf-8"
        ) as file:
            file.write(text)
    except OSError:
        return None
    return Path(file.name)
