"""Which channel is which: the drive, and the outputs of the elements."""

from __future__ import annotations

import re
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field

from darkedge.analysis.errors import CaptureError, InputError
from darkedge.analysis.files.channel_files import FilePattern, file_patterns
from darkedge.analysis.files.units_written import Dimension, read_unit

_DRIVE_WORDS = {"drive", "input", "generator", "gen", "led", "emitter", "laser", "stimulus", "excitation", "vin"}
_OUTPUT_WORDS = {"output", "out", "detector", "det", "photodiode", "pd", "collector", "receiver", "response", "vout"}
_INPUT = re.compile(r"(?:x\()?(?:ch|c|chan|channel)?[ _]?\d+\)?", re.IGNORECASE)
_IN = re.compile(r"\(in\)$|^v?in$|[ _]in$", re.IGNORECASE)
_COMPUTED = re.compile(r"(?:f|m|r|math|ref|fft|func|memory)[ _]?\d*", re.IGNORECASE)


@dataclass(frozen=True, slots=True, kw_only=True)
class ChannelRoles:
    """What the user says of the channels: each a name, or a number.

    A number means the channel whose name ends in it (`2` is `CH2`, `C2`, `Channel 2`); where no channel is numbered,
    it counts the channels from 1. `time_scale` is seconds in one unit of the times, `None` where the user does not say.
    Where an acquisition is spread over a file per channel, `files` has the pattern of each role's files, and the other
    two name nothing.
    """

    drive: str | None = None
    outputs: Mapping[int, str]
    time_scale: float | None = None
    files: Mapping[str, FilePattern] = field(default_factory=dict)

    @classmethod
    def parse(cls, text: str) -> ChannelRoles:
        """Read `drive=1,output=3` or, with several elements, `drive=1,output=2,output2=3`; `time=us` beside it or alone.

        With `*` in them, as in `drive=*_1.csv,output=*_2.csv`, they are patterns of files of one channel each.

        Raises
        ------
        InputError
            No role or a role twice, an unknown role, one channel in two roles, no output, a unit that is none of time,
            a pattern that is none, patterns beside channels.
        """
        where = f"--channels {text}"
        found: dict[str, str] = {}
        time_scale: float | None = None
        for part in text.split(","):
            role, equals, channel = (piece.strip() for piece in part.partition("="))
            if role == "time" and channel and time_scale is None:
                time_scale = _time_scale(channel, where)
                continue
            match = re.fullmatch(r"drive|output([1-9]\d*)?", role)
            if not equals or not channel or match is None:
                raise InputError(
                    "not a channel with its role", where=where, found=repr(part.strip()),
                    wanted="drive=1,output=2 or drive=1,output=2,output2=3",
                )  # fmt: skip
            role = "output" if role == "output1" else role
            if role in found or channel in found.values():
                raise InputError("a role or channel is given twice", where=where, found=repr(part.strip()))
            found[role] = channel
        try:
            files = file_patterns(found)
        except InputError as error:
            raise error.at(where) from error
        drive = found.pop("drive", None)
        if not found and (drive is not None or time_scale is None):
            raise InputError("no output is named", where=where, mend="add the output's channel, such as output=2")
        if files:
            return cls(outputs={}, time_scale=time_scale, files=files)
        outputs = {element_of(role): c for role, c in found.items()}
        return cls(drive=drive, outputs=outputs, time_scale=time_scale)


def element_of(role: str) -> int:
    """The element of an output's role: 1 of `output`, 2 of `output2`."""
    return int(role.removeprefix("output") or 1)


def _time_scale(text: str, where: str) -> float:
    unit = read_unit(text)
    if unit is None or unit.dimension is not Dimension.TIME:
        raise InputError("not a unit of time", where=where, found=repr(text), wanted="s, ms, us or ns")
    return unit.scale


@dataclass(frozen=True, slots=True, kw_only=True)
class Assignment:
    """Places of the channels in their roles, counted from 0."""

    drive: int | None
    outputs: Mapping[int, int]


def assign_roles(names: Sequence[str], stated: ChannelRoles | None = None) -> Assignment:
    """Decide which channel is the drive and which the output of which element.

    What the user states decides. Else words in the names do (`drive`, `input`, `generator`, `led`, `emitter` ...;
    `output`, `detector`, `photodiode`, `collector` ...). Else a lone channel is the output, and of two the first is the
    drive and the second the output, where computed traces (`F1` beside channels `1` and `3`) do not count. More are
    never guessed at.

    Parameters
    ----------
    names : sequence of str
        Names of the channels, in the order of the file; empty where the file gives none.
    stated : ChannelRoles, optional

    Raises
    ------
    CaptureError
        A stated channel is not in the file, or the roles cannot be told.
    """
    if stated is not None and stated.outputs:
        outputs = {element: _find(names, channel) for element, channel in stated.outputs.items()}
        return Assignment(drive=_find(names, stated.drive) if stated.drive is not None else None, outputs=outputs)
    by_words = _by_words(names)
    if by_words is not None:
        return by_words
    channels = plain_channels(names)
    if len(channels) == 1:
        return Assignment(drive=None, outputs={1: channels[0]})
    if len(channels) == 2:
        return Assignment(drive=channels[0], outputs={1: channels[1]})
    raise _undecided(names)


def plain_channels(names: Sequence[str]) -> list[int]:
    """Places of the channels without the computed traces (`F1`, `MATH`, `REF2` ...) beside numbered inputs."""
    inputs = [place for place, name in enumerate(names) if _INPUT.fullmatch(name.strip())]
    if not inputs:
        return list(range(len(names)))
    return [place for place, name in enumerate(names) if not _COMPUTED.fullmatch(name.strip())]


def says_role(name: str) -> bool:
    """Whether a word in a name says that it is a drive or an output."""
    words = re.findall(r"[a-z]+", name.casefold())
    return bool(_IN.search(name)) or any(word in _DRIVE_WORDS or word in _OUTPUT_WORDS for word in words)


def is_computed(name: str) -> bool:
    """Whether a name is that of a computed trace: `F1`, `MATH`, `REF2`."""
    return _COMPUTED.fullmatch(name.strip()) is not None


def is_numbered(name: str) -> bool:
    """Whether a name is that of a numbered input or computed trace: `CH1`, `3`, `X(CH2)`, `F1`."""
    bare = name.strip()
    return _INPUT.fullmatch(bare) is not None or (is_computed(bare) and _ends_in_number(bare) is not None)


def _by_words(names: Sequence[str]) -> Assignment | None:
    drives: list[int] = []
    outputs: dict[int, int] = {}
    for place, name in enumerate(names):
        for word, number in re.findall(r"([a-z]+)[ _]?(\d*)", name.casefold()):
            if word in _DRIVE_WORDS or _IN.search(name):
                drives.append(place)
                break
            if word in _OUTPUT_WORDS:
                if outputs.setdefault(int(number or 1), place) != place:
                    raise _undecided(names)
                break
    if not drives and not outputs:
        return None
    rest = [place for place in plain_channels(names) if place not in drives and place not in outputs.values()]
    if len(drives) > 1 or (not outputs and len(rest) != 1) or (not drives and rest):
        raise _undecided(names)
    return Assignment(drive=drives[0] if drives else None, outputs=outputs or {1: rest[0]})


def _find(names: Sequence[str], channel: str) -> int:
    wanted = channel.strip().casefold()
    exact = [place for place, name in enumerate(names) if name.strip().casefold() == wanted]
    if len(exact) == 1:
        return exact[0]
    if not exact and wanted.isdecimal():
        numbered = {place: int(m["number"]) for place, name in enumerate(names) if (m := _ends_in_number(name))}
        if not numbered and 1 <= int(wanted) <= len(names):
            return int(wanted) - 1
        same = [place for place, number in numbered.items() if number == int(wanted)]
        same = [place for place in same if place in plain_channels(names)] or same
        if len(same) == 1:
            return same[0]
    raise CaptureError(
        f"the channel {channel} of --channels is not in the file, or is there twice",
        found=listed_channels(names),
        mend="name one of these channels",
    )


def _ends_in_number(name: str) -> re.Match[str] | None:
    return re.fullmatch(r".*?(?P<number>\d+)\)?", name.strip())


def _undecided(names: Sequence[str]) -> CaptureError:
    return CaptureError(
        "it cannot be told which channel is the drive and which the output",
        found=listed_channels(names),
        wanted="one channel (the output), or two (drive, then output)",
        mend="say which with --channels, such as drive=1,output=2",
    )


def listed_channels(names: Sequence[str]) -> str:
    """The channels of a file, for a message."""
    return "channels " + ", ".join(name or f"number {place + 1}" for place, name in enumerate(names))
