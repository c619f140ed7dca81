"""Which file is which channel, where an acquisition is spread over a file per channel: `drive=*_1.csv,output=*_2.csv`."""

from __future__ import annotations

import re
from collections.abc import Mapping
from dataclasses import dataclass

from darkedge.analysis.errors import InputError

_WANTED = "drive=*_1.csv,output=*_2.csv"


@dataclass(frozen=True, slots=True)
class FilePattern:
    """The names of the files that hold one channel.

    `*` stands for the stem, one character or more, that the files of an acquisition have in common; `?` for any one
    character. Everything else stands in the file name as it is written, the extension too.

    Raises
    ------
    InputError
        Not exactly one `*`, or a folder in the pattern.
    """

    text: str

    def __post_init__(self) -> None:
        if self.text.count("*") != 1:
            raise InputError(
                "a pattern has one * for the stem", found=repr(self.text), wanted=_WANTED,
                mend="write ? for a character that differs",
            )  # fmt: skip
        if "/" in self.text or "\\" in self.text:
            raise InputError(
                "a pattern names files, not folders", found=repr(self.text), wanted=_WANTED,
                mend="put the files of an acquisition into one folder, and name it as PATH",
            )  # fmt: skip

    def stem_of(self, file_name: str) -> str | None:
        """What `*` stands for in a file name without folders; `None` where the pattern does not match."""
        front, back = (re.escape(piece).replace(r"\?", ".") for piece in self.text.split("*"))
        match = re.fullmatch(f"{front}(.+){back}", file_name, flags=re.DOTALL)
        return None if match is None else match[1]

    def file_name(self, stem: str) -> str:
        """The name that the file of a stem has."""
        return self.text.replace("*", stem)


def file_patterns(channels: Mapping[str, str]) -> dict[str, FilePattern]:
    """Take what is said of each role as patterns of files; empty where it is channels of one file.

    Parameters
    ----------
    channels : mapping
        What stands behind each role (`drive`, `output`, `output2` ...).

    Raises
    ------
    InputError
        Channels and patterns are mixed, or a pattern is none.
    """
    patterns = {role: text for role, text in channels.items() if "*" in text}
    if not patterns:
        return {}
    if len(patterns) < len(channels):
        role = next(role for role in channels if role not in patterns)
        raise InputError(
            "channels of one file and patterns of files are mixed", found=f"{role}={channels[role]}",
            wanted=_WANTED, mend="write a pattern with * for every role, or for none",
        )  # fmt: skip
    return {role: FilePattern(text) for role, text in patterns.items()}
