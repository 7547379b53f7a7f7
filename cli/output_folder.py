"""One run's files land in one folder, all of them or none.

Knows names and folders, not what is in the files. A file that the run would not itself write is
never touched, and nothing existing is overwritten unless asked for.
"""

from __future__ import annotations

import re
import secrets
import shutil
from collections.abc import Iterator
from contextlib import contextmanager, suppress
from pathlib import Path

from ..props.errors import FileError, UsageError


def ensure_free(folder: Path, written: re.Pattern[str], *, replace: bool = False) -> None:
    """Check, before any long work, that a run may write into `folder`.

    written : full-matches the name of every file that such a run may write
    Raises UsageError if the folder holds such files and `replace` is False, or is not a folder;
    FileError if it cannot be looked into.
    """
    try:
        if folder.exists() and not folder.is_dir():
            raise UsageError("not-a-folder", f"{folder} is a file, not a folder.", "Name another folder after --into.")
        earlier = _earlier_files(folder, written)
    except OSError as error:
        raise _unwritable(folder, error) from error
    if earlier and not replace:
        names = ", ".join(file.name for file in earlier[:3]) + (", ..." if len(earlier) > 3 else "")
        raise UsageError(
            "would-overwrite",
            f"{folder} already holds files of an earlier run ({names}).",
            "Name another folder after --into, or add --replace to write over them.",
        )


@contextmanager
def output_folder(folder: Path, written: re.Pattern[str], *, replace: bool = False) -> Iterator[Path]:
    """A draft folder to write into, whose files all move to `folder` when the block ends well.

    folder : made if it does not exist; its parents too
    written : full-matches the name of every file that such a run may write; with `replace`, earlier
        files of such names go, so that no stale one stays beside the new
    If the block or the move fails, `folder` is left as it was and the draft is removed.
    Raises UsageError as `ensure_free`, FileError if the files cannot be written.
    """
    ensure_free(folder, written, replace=replace)
    existed = folder.exists()
    token = secrets.token_hex(4)
    # Within an existing folder, else beside the new one: always the same file system, so that
    # a move is a rename.
    draft = folder / f".unfinished-{token}" if existed else folder.absolute().parent / f".{folder.name}-{token}"
    try:
        draft.mkdir(parents=True)
        try:
            yield draft
            if existed:
                _move_into(folder, draft, written)
            else:
                draft.rename(folder)
        finally:
            shutil.rmtree(draft, ignore_errors=True)
    except OSError as error:
        raise _unwritable(folder, error) from error


def _move_into(folder: Path, draft: Path, written: re.Pattern[str]) -> None:
    fresh = sorted(draft.iterdir())
    # A folder of its own, never swept: should putting back fail too, the earlier files are still there.
    set_aside = folder / f".earlier-{draft.name[-8:]}"
    set_aside.mkdir()
    moves = [(file, set_aside / file.name) for file in _earlier_files(folder, written)]
    moves += [(file, folder / file.name) for file in fresh]
    done: list[tuple[Path, Path]] = []
    try:
        for source, target in moves:
            if target.exists():
                raise FileExistsError(f"{target.name} is in the way")
            source.rename(target)
            done.append((source, target))
    except BaseException:
        for source, target in reversed(done):
            with suppress(OSError):
                target.rename(source)
        with suppress(OSError):
            set_aside.rmdir()
        raise
    shutil.rmtree(set_aside, ignore_errors=True)


def _earlier_files(folder: Path, written: re.Pattern[str]) -> list[Path]:
    if not folder.is_dir():
        return []
    return sorted(file for file in folder.iterdir() if written.fullmatch(file.name))


def _unwritable(folder: Path, error: OSError) -> FileError:
    reason = error.strerror or str(error)
    return FileError(
        "cannot-write",
        f"The files could not be written to {folder}: {reason}.",
        "Free some space or name a folder you may write to after --into; nothing that was there has changed.",
    )
