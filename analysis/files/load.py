"""Captures read one after another, each with all that is stated of its conditions."""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from dataclasses import dataclass, replace

from darkedge.analysis.captures import Capture, Conditions
from darkedge.analysis.errors import CaptureError, InputError
from darkedge.analysis.files.archive import read_archived
from darkedge.analysis.files.captures import read_capture
from darkedge.analysis.files.conditions import ConditionsTable
from darkedge.analysis.files.gather import Source
from darkedge.analysis.files.names import NamePattern
from darkedge.analysis.files.roles import ChannelRoles
from darkedge.analysis.files.spread import read_spread


@dataclass(frozen=True, slots=True, kw_only=True)
class Refusal:
    """A file that was refused: its name as a capture, and the reason."""

    name: str
    error: CaptureError


def load_captures(
    sources: Sequence[Source],
    *,
    names: NamePattern | None = None,
    conditions: ConditionsTable | None = None,
    channels: ChannelRoles | None = None,
) -> Iterator[Capture | Refusal]:
    """Read the sources one at a time, in their order; never raises for one of them.

    The conditions of a capture are those of its header, joined with those of its file name and those of the table. A
    file that the pattern or the table does not speak of has the others only. Where nothing at all is stated, or the
    pattern was given, does not match and the file itself states nothing, the capture is remarked `conditions_missing`.
    An acquisition that is spread over several files has the conditions of all their headers, and, where the pattern
    does not match its own name, those of their names.

    Parameters
    ----------
    sources : sequence of Source
    names : NamePattern, optional
    conditions : ConditionsTable, optional
    channels : ChannelRoles, optional
        Which channel is which in files of other programs.

    Yields
    ------
    Capture or Refusal
        A file that cannot be read, or whose conditions contradict each other, gives a refusal.

    Raises
    ------
    InputError
        The table of conditions as a whole does not fit the captures; raised before the first is read.
    """
    if conditions is not None:
        conditions.check_against([s.name for s in sources], {s.name: s.part_names for s in sources})
    return (load_capture(source, names, conditions, channels) for source in sources)


def load_capture(
    source: Source, names: NamePattern | None, conditions: ConditionsTable | None, channels: ChannelRoles | None
) -> Capture | Refusal:
    """Read one source with all that is stated of its conditions; see `load_captures`."""
    try:
        if source.place is not None:
            capture = replace(read_archived(source.path, source.place), name=source.name)
        elif source.parts:
            capture = read_spread(source, channels)
        else:
            capture = read_capture(source.path, name=source.name, channels=channels)
            capture = replace(capture, read_as=(*capture.read_as, *([source.remark] if source.remark else [])))
        return _with_conditions(capture, source, names, conditions)
    except InputError as error:
        if source.remark and channels is not None and channels.outputs:
            return Refusal(name=source.name, error=_as_capture_error(error, also=source.remark))
        return Refusal(name=source.name, error=error if isinstance(error, CaptureError) else _as_capture_error(error))


def _with_conditions(
    capture: Capture, source: Source, names: NamePattern | None, table: ConditionsTable | None
) -> Capture:
    name = source.name
    try:
        joined = capture.conditions
        here = "the file"
        from_name = None if names is None else _from_names(names, name, source.part_names)
        if from_name is not None:
            joined = joined.merged(from_name, here=here, there="the file name")
            here = "the file or its name"
        for row in table.for_capture(name, source.part_names) if table is not None else ():
            joined = joined.merged(row.conditions, here=here, there=row.row)
            here = "another row, the file or its name"
    except InputError as error:
        raise CaptureError(
            error.what,
            where=f"{name}, {error.where}" if error.where else name,
            found=error.found,
            wanted=error.wanted,
            mend=error.mend,
        ) from error
    nothing = Conditions()
    unmatched = names is not None and from_name is None and capture.conditions == nothing
    remarks = (*capture.remarks, "conditions_missing") if unmatched or joined == nothing else capture.remarks
    return _for_element(replace(capture, conditions=joined, remarks=tuple(dict.fromkeys(remarks))))


def _from_names(pattern: NamePattern, name: str, parts: Sequence[str]) -> Conditions | None:
    """What the name of a capture says; where it says nothing, what the names of its files say."""
    found = [said for said in (pattern.conditions(name), *map(pattern.conditions, parts)) if said is not None]
    if pattern.conditions(name) is not None or not found:
        return found[0] if found else None
    joined = found[0]
    for said in found[1:]:
        joined = joined.merged(said, here="the name of one of its files", there="that of another")
    return joined


def _for_element(capture: Capture) -> Capture:
    """A lone output belongs to the element that the conditions name."""
    element = capture.conditions.element
    if element is None or len(capture.outputs) != 1 or element in capture.outputs:
        return capture
    ((_, record),) = capture.outputs.items()
    return replace(capture, outputs={element: record})


def _as_capture_error(error: InputError, *, also: str = "") -> CaptureError:
    mend = "; ".join(words for words in (error.mend, also) if words)
    return CaptureError(error.what, where=error.where, found=error.found, wanted=error.wanted, mend=mend)
