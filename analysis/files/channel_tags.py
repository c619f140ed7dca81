"""Files that look like the channels of one acquisition: alike but for a tag such as `_1`, `_CH2`, `-C3`, `_F1`, `_drive`.

A number at the end of a name may as well be that of a device or of a repeat. Files are channels for certain only where each of
them says so once more: by a tag that is a word for a channel or a role, or by a heading that names the channel of the
tag; where none says otherwise; where format and times are the same; and where the roles can be told as in one file.
"""

from __future__ import annotations

import re
from collections.abc import Sequence
from dataclasses import dataclass, replace
from pathlib import Path

from darkedge.analysis.errors import CaptureError, InputError
from darkedge.analysis.files.gather import Part, Source, natural_key
from darkedge.analysis.files.layout import find_layout
from darkedge.analysis.files.names import file_stem
from darkedge.analysis.files.own_capture import is_own
from darkedge.analysis.files.roles import (
    Assignment,
    ChannelRoles,
    assign_roles,
    is_computed,
    is_numbered,
    says_role,
)
from darkedge.analysis.files.text import read_text

_MOST_CHANNELS = 8
"""More files of one stem than this are repeats or devices, not channels."""

_ENDING = re.compile(
    r"(?P<stem>.+?)(?:(?P<between>_)(?P<number>\d{1,2})"
    r"|(?P<before>[_\- ]|(?<=\d)(?=ch\d))(?P<word>(?:ch|chan|channel)[_ ]\d{1,2}|[a-z]+\d{0,2}))",
    re.IGNORECASE,
)
"""A bare number counts only behind `_`: behind `-` it is that of a device (`SP-2`)."""

_CHANNEL_WORD = re.compile(r"ch(?:an|annel)?[_ ]?\d+", re.IGNORECASE)


@dataclass(frozen=True, slots=True, kw_only=True)
class Member:
    """A file whose name ends in what may be the tag of a channel."""

    source: Source
    tag: str


@dataclass(frozen=True, slots=True, kw_only=True)
class Group:
    """Files of one folder whose names are the same but for their tags."""

    folder: Path
    stem: str
    members: tuple[Member, ...]


@dataclass(frozen=True, slots=True, kw_only=True)
class Verdict:
    """What was found of a group: the files of one acquisition, or the sources with what is to be said of them, or neither."""

    parts: tuple[Part, ...] = ()
    remarked: tuple[Source, ...] = ()


def groups_of(sources: Sequence[Source]) -> list[Group]:
    """Group the files by folder, stem and extension; nothing is opened."""
    found: dict[tuple[Path, str, str, str], list[Member]] = {}
    for source in sources:
        stem = file_stem(source.path.name)
        match = _ENDING.fullmatch(stem)
        if source.place is not None or match is None:
            continue
        tag = str(match["number"] or match["word"])
        if not is_numbered(tag) and not says_role(tag):
            continue
        between = match["between"] or match["before"]
        key = source.path.parent, match["stem"], between, source.path.name[len(stem) :].casefold()
        found.setdefault(key, []).append(Member(source=source, tag=tag))
    return [
        Group(folder=folder, stem=stem, members=tuple(members))
        for (folder, stem, _, _), members in found.items()
        if 2 <= len(members) <= _MOST_CHANNELS
    ]


def judged(group: Group, roles: ChannelRoles | None) -> Verdict:
    """Open the files of a group, and say whether they are the channels of one acquisition."""
    files = [file for file in _alike(group) if file.is_sure or not is_computed(file.name)]
    if len(files) < 2 or _contradict(files):
        return Verdict()
    ordered = sorted(files, key=lambda file: natural_key(file.path.name))
    assignment = _assignment([file.name for file in ordered], roles)
    if assignment is None or not all(file.is_sure for file in files):
        return Verdict(remarked=tuple(_remarked(file, ordered, group.stem) for file in ordered))
    by_path = {ordered[place].path: "output" if k == 1 else f"output{k}" for k, place in assignment.outputs.items()}
    if assignment.drive is not None:
        by_path[ordered[assignment.drive].path] = "drive"
    return Verdict(parts=tuple(Part(path=file.path, role=by_path.get(file.path, "aside")) for file in files))


def computed_beside(group: Group) -> list[Path]:
    """The files of a group that are certainly traces computed from the others: `F1` by name and heading, alike in all else."""
    if not any(is_computed(member.tag) for member in group.members):
        return []
    computed = [file for file in _alike(group) if is_computed(file.member.tag)]
    return [file.path for file in computed if _number(file.heading) == _number(file.member.tag)]


@dataclass(frozen=True, slots=True, kw_only=True)
class _File:
    """A file of one channel: what its heading calls the channel, and what is the same in all files of an acquisition."""

    member: Member
    heading: str
    likeness: tuple[object, ...]

    @property
    def path(self) -> Path:
        """Where it is."""
        return self.member.source.path

    @property
    def name(self) -> str:
        """What the channel is called: what tells its role, else what the heading says, else the tag."""
        if says_role(self.member.tag):
            return self.member.tag
        return self.heading if says_role(self.heading) or is_numbered(self.heading) else self.member.tag

    @property
    def is_sure(self) -> bool:
        """Whether more than a number at the end of the name says that this is a channel."""
        tag = self.member.tag
        if says_role(tag) or says_role(self.heading) or _CHANNEL_WORD.fullmatch(tag):
            return True
        return is_numbered(self.heading)  # and it is the number of the tag, or the files would contradict


def _alike(group: Group) -> list[_File]:
    """The files of one channel that are alike; none where an input differs, for then they are something else."""
    opened = [(member, _opened(member)) for member in group.members]
    inputs = [file for member, file in opened if not is_computed(member.tag)]
    first = inputs[0] if inputs else None
    if first is None or any(file is None or file.likeness != first.likeness for file in inputs):
        return []
    return [file for _, file in opened if file is not None and file.likeness == first.likeness]


def _opened(member: Member) -> _File | None:
    """What a look at its first and last lines tells of a file; `None` where it is not times and one channel."""
    try:
        text = read_text(member.source.path)
        layout = None if is_own(text) else find_layout(text)
    except InputError:
        return None
    if layout is None or len(layout.columns) != 2:
        return None
    times, signal = layout.columns
    likeness = (
        layout.body.writing, layout.body.first_line, times, signal.cell, layout.start_s, layout.increment_s,
        text.rstrip().count(b"\n"), tuple(row[0] for row in layout.sample_rows),
    )  # fmt: skip
    heading = signal.name
    if not is_numbered(heading) and not says_role(heading):
        named = {cell for _, cells in layout.settings for cell in cells[1:] if _CHANNEL_WORD.fullmatch(cell)}
        heading = named.pop() if len(named) == 1 else heading
    return _File(member=member, heading=heading, likeness=likeness)


def _contradict(files: Sequence[_File]) -> bool:
    """Whether two files are of the same channel, or one is of another channel than its name says."""
    for file in files:
        heading, tag = _number(file.heading), _number(file.member.tag)
        if heading is not None and tag is not None and heading != tag:
            return True
    return len({_identity(file) for file in files}) < len(files)


def _identity(file: _File) -> tuple[bool, str]:
    """Which channel a file is of, by its heading where that says so."""
    number = _number(file.heading)
    if number is None and says_role(file.heading):
        return False, file.heading.casefold()
    return number or _number(file.member.tag) or (False, file.member.tag.casefold())


def _number(name: str) -> tuple[bool, str] | None:
    """Number of an input or of a computed trace, and which of them; `None` for other names."""
    if not is_numbered(name):
        return None
    digits = re.findall(r"\d+", name)[-1]
    return is_computed(name), str(int(digits))


def _assignment(names: Sequence[str], roles: ChannelRoles | None) -> Assignment | None:
    """The roles as in a file with these channels; `None` where they cannot be told, or one file alone would be used."""
    stated = [] if roles is None else [*roles.outputs.values(), *([roles.drive] if roles.drive else [])]
    if any(channel.isdecimal() for channel in stated) and not any(map(is_numbered, names)):
        return None  # files have no order in which they could be counted
    try:
        assignment = assign_roles(names, roles)
    except CaptureError:
        return None
    used = len(assignment.outputs) + (assignment.drive is not None)
    return assignment if used > 1 else None


def _remarked(file: _File, files: Sequence[_File], stem: str) -> Source:
    source = file.member.source
    others = [other.path.name for other in files if other is not file]
    patterns = [f"*{other.path.name[len(stem) :]}" for other in files]
    said = (
        f"read by itself; it may be one channel of an acquisition with {' and '.join(others)} (same form, same times), "
        f"but that or the roles are not certain: if so, say which is which, such as --channels "
        f"'drive={patterns[0]},output={patterns[1]}'"
    )
    return replace(source, remark=said)
