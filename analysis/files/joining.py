"""Which files are channels of one acquisition: as the user states it, else where their structure leaves no doubt."""

from __future__ import annotations

from collections.abc import Collection, Mapping, Sequence
from dataclasses import dataclass
from pathlib import Path, PurePosixPath

from darkedge.analysis.errors import InputError
from darkedge.analysis.files.channel_files import FilePattern
from darkedge.analysis.files.channel_tags import Group, computed_beside, groups_of, judged
from darkedge.analysis.files.conditions import ConditionsTable
from darkedge.analysis.files.gather import Part, Source
from darkedge.analysis.files.names import NamePattern
from darkedge.analysis.files.roles import ChannelRoles


@dataclass(frozen=True, slots=True, kw_only=True)
class SpreadFiles:
    """Puts the files of one acquisition together, for `find_captures`.

    With patterns of files in `roles` these alone decide; a file that none of them matches stays a capture of its own, but
    for a computed trace of the acquisition.
    Without, files are put together only where names, headings and times leave no doubt (`channel_tags`), and where neither
    the pattern of the names nor the table of conditions speaks of each of them as of something else.

    A joined capture is called after its folder and stem: `12V/SP-2_1.csv` and `12V/SP-2_2.csv` are `12V/SP-2`.
    """

    roles: ChannelRoles | None = None
    names: NamePattern | None = None
    conditions: ConditionsTable | None = None

    def __call__(self, sources: Sequence[Source]) -> list[Source]:
        """Return the sources, those of one acquisition as one, at the place of its first file.

        Raises
        ------
        InputError
            A stated pattern matches no file, two match the same file, or an acquisition would be called like another file.
        """
        if self.roles is not None and self.roles.files:
            return _join_stated(sources, self.roles.files) if sources else []
        return self._join_alike(sources)

    def _join_alike(self, sources: Sequence[Source]) -> list[Source]:
        by_path = _by_path(sources)
        instead: dict[Path, Source | None] = {}
        taken = set(by_path)
        for group in groups_of(sources):
            if self._told_apart(group):
                continue
            verdict = judged(group, self.roles)
            target = group.folder / group.stem
            if verdict.parts and target not in taken:
                taken.add(target)
                instead |= _joined(by_path, group.stem, verdict.parts)
            else:
                instead |= {source.path: source for source in verdict.remarked}
        return _arranged(sources, instead)

    def _told_apart(self, group: Group) -> bool:
        """Whether the user speaks of each file as of something else: a device, a repeat."""
        names = [member.source.name for member in group.members]
        if self.conditions is not None:
            stated = [row.conditions for name in names for row in self.conditions.for_capture(name)]
            if any(other != stated[0] for other in stated[1:]):
                return True
        if self.names is None:
            return False
        try:
            if self.names.conditions(group.stem) is not None:
                return False
            read = [said for name in names if (said := self.names.conditions(name)) is not None]
        except InputError:
            return True
        return any(other != read[0] for other in read[1:])


def _join_stated(sources: Sequence[Source], patterns: Mapping[str, FilePattern]) -> list[Source]:
    by_path = _by_path(sources)
    found: dict[tuple[Path, str], list[Part]] = {}
    matched: set[Path] = set()
    for path in by_path:
        match = _match(path, patterns)
        if match is not None:
            matched.add(path)
            found.setdefault((path.parent, match.stem), []).append(Part(path=path, role=match.role))
    _refuse_idle(sources, patterns, {part.role for parts in found.values() for part in parts})
    _refuse_taken(by_path, list(found))
    for group in groups_of(sources):
        if (parts := found.get((group.folder, group.stem))) is not None:
            parts += [Part(path=path, role="aside") for path in computed_beside(group) if path not in matched]
    instead: dict[Path, Source | None] = {}
    for (_, stem), parts in found.items():
        instead |= _joined(by_path, stem, parts)
    return _arranged(sources, instead)


@dataclass(frozen=True, slots=True)
class _Match:
    role: str
    stem: str


def _match(path: Path, patterns: Mapping[str, FilePattern]) -> _Match | None:
    """The role and the stem of a file."""
    stems = {role: pattern.stem_of(path.name) for role, pattern in patterns.items()}
    found = [(role, stem) for role, stem in stems.items() if stem is not None]
    if len(found) > 1:
        raise InputError(
            "two patterns of --channels match the same file",
            where=str(path),
            found=" and ".join(f"{role}={patterns[role].text}" for role, _ in found),
            wanted="each file in one role",
            mend="write the patterns so that they tell the files apart",
        )
    return _Match(*found[0]) if found else None


def _refuse_idle(sources: Sequence[Source], patterns: Mapping[str, FilePattern], matched: set[str]) -> None:
    for role, pattern in patterns.items():
        if role not in matched:
            raise InputError(
                "a pattern of --channels matches none of the files",
                where=f"--channels {role}={pattern.text}",
                found=f"{sources[0].path.name}{' and others' if len(sources) > 1 else ''}",
                wanted=f"names such as {pattern.file_name('SP-2')}",
                mend="correct the pattern; capitals and small letters differ, and the extension belongs to it",
            )


def _refuse_taken(taken: Collection[Path], keys: Sequence[tuple[Path, str]]) -> None:
    for folder, stem in keys:
        if folder / stem in taken:
            raise InputError(
                "an acquisition would be called like another file",
                where=str(folder / stem),
                found=f"a file of that name, and files of that stem for --channels in {folder}",
                wanted="one capture of a name",
                mend="rename the file, or give it an extension",
            )


def _by_path(sources: Sequence[Source]) -> dict[Path, Source]:
    """The sources that are files, not rows of an archive."""
    return {source.path: source for source in sources if source.place is None}


def _joined(by_path: Mapping[Path, Source], stem: str, parts: Sequence[Part]) -> dict[Path, Source | None]:
    """What stands instead of each file: of the first one source of them all, of the others nothing."""
    first = by_path[parts[0].path]
    name = (PurePosixPath(first.name).parent / stem).as_posix()
    joined = Source(path=first.path, name=name, run_folder=first.run_folder, parts=tuple(parts))
    return {part.path: joined if part is parts[0] else None for part in parts}


def _arranged(sources: Sequence[Source], instead: Mapping[Path, Source | None]) -> list[Source]:
    arranged = [instead.get(source.path, source) if source.place is None else source for source in sources]
    return [source for source in arranged if source is not None]
