"""Which files are captures: from the paths of a command to a list of sources."""

from __future__ import annotations

import os
import re
from collections.abc import Callable, Iterable, Iterator, Sequence
from dataclasses import dataclass, replace
from pathlib import Path, PurePosixPath

from darkedge.analysis.errors import InputError
from darkedge.analysis.files.archive import archive_names, is_archive

CAPTURES = "captures"
"""The folder of a run that holds its captures."""

_EXTENSIONS = (".csv", ".txt", ".dat", ".tsv", ".asc")
_NEVER = ("readme", "license", "licence", "copying", "changelog", "makefile", "journal.csv", "thumbs.db")
_SNIFF_BYTES = 4096


@dataclass(frozen=True, slots=True, kw_only=True)
class Part:
    """One file of an acquisition that is spread over several: `drive`, `output`, `output2` ..., or `aside` where it is not used."""

    path: Path
    role: str


@dataclass(frozen=True, slots=True, kw_only=True)
class Source:
    """One capture that was found: its file, and its name relative to the argument, with `/`.

    `run_folder` is the run it belongs to, `None` for a capture outside a run. `place` is its row in an archive, `None` for a file.
    `parts` are the files of an acquisition that is spread over a file per channel; `path` is then the first of them, and the name
    is folder and stem, without the ending. `remark` is what there is to say of a file that may be one of such files.
    """

    path: Path
    name: str
    run_folder: Path | None = None
    place: int | None = None
    parts: tuple[Part, ...] = ()
    remark: str = ""

    @property
    def part_names(self) -> tuple[str, ...]:
        """What the files of a spread acquisition would be called by themselves."""
        return tuple((PurePosixPath(self.name).parent / part.path.name).as_posix() for part in self.parts)


Joining = Callable[[Sequence[Source]], Sequence[Source]]
"""Puts files that are channels of one acquisition together; the joined source has the path of one of them."""


def find_captures(paths: Sequence[Path], joining: Joining | None = None) -> list[Source]:
    """Find the captures under the paths of a command.

    A file stands for itself, an archive for the captures in it. A run (a folder with `captures/`) gives the files in there and nothing else; any other
    folder, a lot among them, is searched through all its folders for capture files (`.csv`, `.txt`, `.dat`, `.tsv`,
    `.asc`, no extension, each also with `.gz`), where journals, tables with a column `capture` and hidden files are
    left out. The order is that of the arguments, then the natural one of names (2 before 10). A file is listed once.
    Names that would be the same under two arguments carry the folder of their argument in front. With `joining`, files of
    one acquisition are one source, at the place of the first of them.

    Raises
    ------
    InputError
        A path that is not there, a folder that cannot be searched, a folder without captures; what `joining` raises.
    """
    found: dict[tuple[Path, int | None], tuple[Source, Path]] = {}
    for path in paths:
        sources = list(_under(path))
        if not sources:
            raise InputError(
                "no captures in this folder",
                where=str(path),
                wanted="files such as 0001_pulse.csv, or a run with a folder captures/",
            )
        for source in sources:
            found.setdefault((source.path.resolve(), source.place), (source, path))
    if joining is None:
        return _with_unlike_names(list(found.values()))
    arguments = {(source.path, source.place): argument for source, argument in found.values()}
    joined = joining([source for source, _ in found.values()])
    return _with_unlike_names([(source, arguments[source.path, source.place]) for source in joined])


def _under(path: Path) -> Iterator[Source]:
    if path.is_dir():
        yield from _in_folder(path, path)
    elif is_archive(path):
        names = archive_names(path)
        yield from (Source(path=path, name=name, place=place) for place, name in enumerate(names))
    elif path.exists():
        run = path.parent.parent if path.parent.name == CAPTURES else None
        yield Source(path=path, name=path.name, run_folder=run)
    else:
        raise InputError("no such file or folder", where=str(path), mend="check the path")


def _in_folder(folder: Path, argument: Path) -> Iterator[Source]:
    captures = folder / CAPTURES
    if captures.is_dir():
        for file in _files(captures):
            yield Source(path=file, name=file.relative_to(argument).as_posix(), run_folder=folder)
        return
    run = folder.parent if folder.name == CAPTURES else None
    for file in _files(folder):
        yield Source(path=file, name=file.relative_to(argument).as_posix(), run_folder=run)
    for sub in _entries(folder):
        if sub.is_dir() and not sub.is_symlink() and not sub.name.startswith("."):
            yield from _in_folder(sub, argument)


def _files(folder: Path) -> Iterable[Path]:
    return [entry for entry in _entries(folder) if entry.is_file() and _may_be_capture(entry)]


def _entries(folder: Path) -> list[Path]:
    try:
        entries = list(folder.iterdir())
    except OSError as error:
        raise InputError("the folder cannot be searched", where=str(folder), found=error.strerror or "") from error
    return sorted(entries, key=lambda entry: natural_key(entry.name))


def natural_key(text: str) -> list[tuple[int, int, str]]:
    """Key for sorting as people count: `p2` before `p10`."""
    parts = re.split(r"(\d+)", text)
    return [(1, int(part), part) if part.isdecimal() else (0, 0, part.casefold()) for part in parts if part]


def _may_be_capture(file: Path) -> bool:
    name = file.name.lower()
    if name.startswith((".", "~$")) or name.startswith(_NEVER):
        return False
    bare = name.removesuffix(".gz")
    # A dot with a digit behind it is part of a name such as `1.5V`, not an extension.
    extension = re.search(r"\.[a-z]\w*$", bare)
    if extension is not None and extension.group() not in _EXTENSIONS:
        return False
    return not _is_table(file)


def _is_table(file: Path) -> bool:
    """Whether the first line names a column `capture`: a measurement table or a table of conditions."""
    try:
        with file.open("rb") as stream:
            start = stream.read(_SNIFF_BYTES)
    except OSError:
        return False  # the reader will say why
    first = start.removeprefix(b"\xef\xbb\xbf").lstrip().split(b"\n")[0]
    return b"capture" in [cell.strip(b' "\r') for cell in re.split(rb"[,;\t]", first)]


def _with_unlike_names(found: Sequence[tuple[Source, Path]]) -> list[Source]:
    sources = [source for source, _ in found]
    counts: dict[str, int] = {}
    for source in sources:
        counts[source.name] = counts.get(source.name, 0) + 1
    clashing = {argument for source, argument in found if counts[source.name] > 1}
    if not clashing:
        return sources
    folders = {a: (a if a.is_dir() else a.parent).resolve() for a in clashing}
    depth = _depth_that_tells_apart(list(set(folders.values())))
    named = []
    for source, argument in found:
        if argument in folders:
            front = "/".join(folders[argument].parts[-depth:]).lstrip(os.sep)
            source = replace(source, name=f"{front}/{source.name}")
        named.append(source)
    return named


def _depth_that_tells_apart(folders: Sequence[Path]) -> int:
    depth = 1
    while len({folder.parts[-depth:] for folder in folders}) < len(folders):
        depth += 1
    return depth
