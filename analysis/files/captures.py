"""Captures to and from disk: our own files, and other programs' text files by their structure."""

from __future__ import annotations

from pathlib import Path

from darkedge.analysis.captures import Capture
from darkedge.analysis.errors import CaptureError, InputError
from darkedge.analysis.files.atomic import write_atomic
from darkedge.analysis.files.foreign import parse_foreign
from darkedge.analysis.files.numbers import brief
from darkedge.analysis.files.own_capture import is_own, parse_capture, print_capture
from darkedge.analysis.files.roles import ChannelRoles
from darkedge.analysis.files.text import read_text


def read_capture(path: Path, *, name: str | None = None, channels: ChannelRoles | None = None) -> Capture:
    """Read one capture from a text file, plain or gzip.

    Parameters
    ----------
    path : Path
        A capture file of darkedge, or a waveform that another program saved as text.
    name : str, optional
        What the capture is called; else the file's name.
    channels : ChannelRoles, optional
        Which channel is which in another program's file; a capture file of darkedge says so itself.

    Returns
    -------
    Capture
        Even records are `Waveform`s; records with uneven steps are `TimedRecord`s, and the capture is remarked
        `uneven_time`. Volts and seconds; 0 s as in the file. Conditions only as far as the file states them.

    Raises
    ------
    CaptureError
        The file cannot be read, is no waveform, or cannot be decided. The message says file, line and reason.
    """
    name = name if name is not None else path.name
    text = read_text(path)
    try:
        return parse_capture(text, name=name) if is_own(text) else parse_foreign(text, name=name, channels=channels)
    except InputError as error:
        raise CaptureError(
            error.what,
            where=f"{path}, {brief(error.where)}" if error.where else str(path),
            found=brief(error.found),
            wanted=error.wanted,
            mend=error.mend,
        ) from error


def write_capture(capture: Capture, path: Path) -> None:
    """Write a capture as a capture file of darkedge; the file is there whole or not at all.

    Raises
    ------
    CaptureError
        The channels do not share their times.
    InputError
        The file cannot be written.
    """
    write_atomic(path, print_capture(capture))
