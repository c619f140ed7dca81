"""Files that are whole or not there: written beside, flushed, then renamed."""

from __future__ import annotations

import os
from pathlib import Path

from darkedge.analysis.errors import InputError


def write_atomic(path: Path, content: str | bytes) -> None:
    r"""Write a file so that a reader, or a power cut, never meets half of it.

    Text is written as UTF-8 with `\\n`. The temporary file stands in the same folder, so that renaming is one step.

    Raises
    ------
    InputError
        The folder is not there or cannot be written to, or the disk is full; the old file is untouched.
    """
    payload = content.encode("utf-8") if isinstance(content, str) else content
    beside = path.with_name(f".{path.name}.{os.getpid()}.part")
    try:
        with beside.open("wb") as stream:
            stream.write(payload)
            stream.flush()
            os.fsync(stream.fileno())
        beside.replace(path)
    except OSError as error:
        beside.unlink(missing_ok=True)
        raise InputError(
            "the file cannot be written",
            where=str(path),
            found=error.strerror or str(error),
            mend="check folder, permission and space",
        ) from error


def make_folder(folder: Path) -> None:
    """Make a folder and those above it, where they are not there.

    Raises
    ------
    InputError
        It cannot be made.
    """
    try:
        folder.mkdir(parents=True, exist_ok=True)
    except OSError as error:
        raise InputError("the folder cannot be made", where=str(folder), found=error.strerror or str(error)) from error
