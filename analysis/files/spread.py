"""An acquisition that is spread over a file per channel, read as one capture."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from itertools import chain
from pathlib import PurePosixPath

import numpy as np

from darkedge.analysis.captures import Capture, Conditions
from darkedge.analysis.errors import CaptureError, InputError
from darkedge.analysis.files.foreign import Signal, parse_signal
from darkedge.analysis.files.gather import Part, Source
from darkedge.analysis.files.own_capture import is_own
from darkedge.analysis.files.roles import ChannelRoles, element_of
from darkedge.analysis.files.text import read_text

_SAME_STEP_RATIO = 0.01
"""Times within this part of a step are the same, as they are for the channels of one file."""


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class _Read:
    """A file of the acquisition with what was read from it."""

    part: Part
    signal: Signal


def read_spread(source: Source, channels: ChannelRoles | None) -> Capture:
    """Read the files of one acquisition, each of which holds one channel.

    Parameters
    ----------
    source : Source
        One with parts.
    channels : ChannelRoles, optional
        The patterns of its files, where they are stated, and the unit of time.

    Raises
    ------
    CaptureError
        A file is missing, or there are two for a role; one cannot be read, is no file of one channel, or has other times
        than the others; their headers contradict each other. The message names the files.
    """
    if channels is not None and channels.files:
        _refuse_incomplete(source, channels)
    scale = None if channels is None else channels.time_scale
    used = sorted((part for part in source.parts if part.role != "aside"), key=_place)
    read = [_Read(part=part, signal=_signal(part, scale)) for part in used]
    for other in read[1:]:
        _refuse_unlike_times(read[0], other)
    # One axis for all of them, for its rounding may differ by the last bit from file to file.
    axis = read[0].signal.times.axis
    records = {r.part.role: axis.record(r.signal.signal_V, first_row=r.signal.first_row) for r in read}
    drive = records.pop("drive", None)
    return Capture(
        name=source.name,
        drive=drive,
        outputs={element_of(role): record for role, record in records.items()},
        conditions=_conditions(read),
        remarks=tuple(dict.fromkeys(chain.from_iterable(r.signal.remarks for r in read))),
        read_as=_understood(source, read),
    )


def _place(part: Part) -> int:
    """The drive first, then the elements as they are numbered."""
    return 0 if part.role == "drive" else element_of(part.role)


def _signal(part: Part, time_scale: float | None) -> Signal:
    text = read_text(part.path)
    try:
        if is_own(text):
            raise CaptureError(
                "a capture file of darkedge is no channel of another acquisition",
                found=part.role,
                wanted="files of one channel each, as other programs save them",
                mend="measure it by itself, or make the patterns of --channels pass it by",
            )
        return parse_signal(text, is_drive=part.role == "drive", time_scale=time_scale)
    except InputError as error:
        raise error.at(str(part.path)) from error


def _refuse_incomplete(source: Source, channels: ChannelRoles) -> None:
    stem = PurePosixPath(source.name).name
    where = str(source.path.parent / stem)
    for role, pattern in channels.files.items():
        paths = [part.path for part in source.parts if part.role == role]
        if not paths:
            there = ", ".join(f"{part.path.name} ({part.role})" for part in source.parts if part.role != "aside")
            raise CaptureError(
                "a file of the acquisition is missing",
                where=where,
                found=there,
                wanted=f"{pattern.file_name(stem)} beside it ({role}={pattern.text})",
                mend="put it there, or measure the others without patterns of files",
            )
        if len(paths) > 1:
            raise CaptureError(
                "two files have the same role in one acquisition",
                where=where,
                found=" and ".join(path.name for path in paths),
                wanted=f"one file for {role}={pattern.text}",
                mend="write the pattern more narrowly, with fewer ?",
            )


def _refuse_unlike_times(one: _Read, other: _Read) -> None:
    here, there = one.signal.times, other.signal.times
    if here.count == there.count:
        step = float(here.stamps_s[-1] - here.stamps_s[0]) / (here.count - 1)
        if bool(np.all(np.abs(here.stamps_s - there.stamps_s) <= _SAME_STEP_RATIO * step)):
            return
    raise CaptureError(
        "the files have different times, and may be two acquisitions",
        where=str(other.part.path),
        found=_times(other),
        wanted=f"{_times(one)}, as in {one.part.path.name}",
        mend="export the channels of one acquisition, with the same settings of time",
    )


def _times(read: _Read) -> str:
    times = read.signal.times
    return f"{times.count} samples from {times.stamps_s[0]:.6g} s to {times.stamps_s[-1]:.6g} s"


def _conditions(read: Sequence[_Read]) -> Conditions:
    joined, names = read[0].signal.conditions, read[0].part.path.name
    for one in read[1:]:
        try:
            joined = joined.merged(one.signal.conditions, here=names, there=one.part.path.name)
        except CaptureError as error:
            raise error.at(str(one.part.path)) from error
        names += f" or {one.part.path.name}"
    return joined


def _understood(source: Source, read: Sequence[_Read]) -> tuple[str, ...]:
    """In words: which file is what, and how each was understood."""
    roles = {"drive": "drive: none"}
    for r in read:
        called = "drive" if r.part.role == "drive" else f"output of element {element_of(r.part.role)}"
        roles[r.part.role] = f"{called}: {r.part.path.name}, {r.signal.read_as}"
    aside = [part.path.name for part in source.parts if part.role == "aside"]
    left = [f"left aside: {', '.join(aside)}"] if aside else []
    files = " and ".join(r.part.path.name for r in read)
    return (f"one acquisition, put together from {files}", *roles.values(), *left)
