"""Other programs' waveforms: from the structure of a file to time, channels and a capture."""

from __future__ import annotations

import re
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, replace

import numpy as np

from darkedge.analysis.captures import Capture, Conditions, FloatArray, Record, TimedRecord
from darkedge.analysis.errors import CaptureError
from darkedge.analysis.files.layout import Layout, find_layout
from darkedge.analysis.files.number_table import A_WAVEFORM, NumberTable, digits_behind, finite_part
from darkedge.analysis.files.numbers import BLANKS, read_numbers
from darkedge.analysis.files.roles import ChannelRoles, assign_roles, listed_channels, plain_channels
from darkedge.analysis.files.stated import axis_units, stated_conditions
from darkedge.analysis.files.time_columns import Times, time_places, times_of
from darkedge.analysis.files.units_written import Dimension


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class _Channel:
    """One channel: where it stands, its name, and the place of the times it belongs to."""

    place: int
    name: str
    time_place: int | None


def parse_foreign(text: bytes, *, name: str, channels: ChannelRoles | None = None) -> Capture:
    """Read a waveform that another program saved, by the structure of its text.

    Parameters
    ----------
    text : bytes
        UTF-8, lines ending in LF.
    name : str
        What the capture will be called.
    channels : ChannelRoles, optional
        Which channel is which; else as `assign_roles` says.

    Notes
    -----
    Times and volts without a stated unit are taken as seconds and volts; times only where their steps are below
    0.1 ms and not whole numbers (remarked `time_unit_assumed` where they are plain decimals), volts only where not all are whole numbers (those would be counts or logic states).
    Blank samples at the ends of a channel are cut off; between others they are refused. A channel in amperes can be
    the drive, which gives times only.

    Raises
    ------
    CaptureError
        The text is no time-domain waveform, or something in it cannot be decided. The message says line and reason.
    """
    opened = _open(text)
    table, found = opened.table, opened.channels
    roles = assign_roles([channel.name for channel in found], channels)
    outputs = {element: found[index] for element, index in sorted(roles.outputs.items())}
    drive = None if roles.drive is None else found[roles.drive]
    used = [*outputs.values(), *([] if drive is None else [drive])]
    _refuse_counts(table, used)
    told = None if channels is None else channels.time_scale
    places = {channel.time_place for channel in used}
    times = {place: times_of(table, place, opened.counting, told) for place in places}
    _refuse_unlike_times(table, list(times.values()), stated=channels is not None and bool(channels.outputs))
    drive_record = None if drive is None else _record(table, drive, times[drive.time_place], drive=True)
    records = {element: _record(table, c, times[c.time_place]) for element, c in outputs.items()}
    uneven = any(isinstance(record, TimedRecord) for record in (drive_record, *records.values()))
    assumed = any(axis.unit_assumed for axis in times.values())
    return Capture(
        name=name,
        drive=drive_record,
        outputs=records,
        conditions=stated_conditions(table.layout.settings),
        remarks=_remarks(uneven=uneven, min_max=opened.has_companions, assumed=assumed),
        read_as=(*_understood(table, drive, outputs, times), *opened.doubtful),
    )


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Signal:
    """The one signal of a file: volts (amperes of a drive) from row `first_row` of the times on, and what is known beside."""

    signal_V: FloatArray
    first_row: int
    times: Times
    conditions: Conditions
    remarks: tuple[str, ...]
    read_as: str


def parse_signal(text: bytes, *, is_drive: bool = False, time_scale: float | None = None) -> Signal:
    """Read a file of another program that holds one channel of an acquisition; computed traces beside it do not count.

    Parameters
    ----------
    text : bytes
        UTF-8, lines ending in LF.
    is_drive : bool
        The drive may be in amperes, and in whole numbers.
    time_scale : float, optional
        Seconds in one unit of the times, where the user says so.

    Raises
    ------
    CaptureError
        As `parse_foreign`, or there is more than one signal.
    """
    opened = _open(text)
    table = opened.table
    names = [channel.name for channel in opened.channels]
    places = plain_channels(names)
    if len(places) != 1:
        raise CaptureError(
            "the file holds more than one signal", where=table.heading, found=listed_channels(names),
            wanted="one channel a file",
            mend="measure it by itself, and say which is which by channel, such as --channels drive=1,output=2",
        )  # fmt: skip
    channel = opened.channels[places[0]]
    if not is_drive:
        _refuse_counts(table, [channel])
    times = times_of(table, channel.time_place, opened.counting, time_scale)
    signal_V, first_row = _samples(table, channel, times, drive=is_drive)
    uneven = times.axis.stamps_s is not None
    return Signal(
        signal_V=signal_V,
        first_row=first_row,
        times=times,
        conditions=stated_conditions(table.layout.settings),
        remarks=_remarks(uneven=uneven, min_max=opened.has_companions, assumed=times.unit_assumed),
        read_as="; ".join(
            (_channel_words(table, channel), _written_words(table), _time_words(table, times), *opened.doubtful)
        ),
    )


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class _Opened:
    """The numbers of a file, its channels without the second ends of minimum-maximum records, and the columns that count.

    `doubtful` says what was left out.
    """

    table: NumberTable
    channels: Sequence[_Channel]
    counting: Sequence[int]
    has_companions: bool
    doubtful: tuple[str, ...] = ()


def _open(text: bytes) -> _Opened:
    layout = find_layout(text)
    _refuse_spectra(layout)
    table = NumberTable(layout=layout, values=read_numbers(layout.body))
    table, doubtful = _without_cut_number(table)
    stamped, counting = time_places(table)
    found = _channels(table, stamped, counting)
    companions = _companions(table, found)
    found = [channel for place, channel in enumerate(found) if place not in companions]
    return _Opened(table=table, channels=found, counting=counting, has_companions=bool(companions), doubtful=doubtful)


def _remarks(*, uneven: bool, min_max: bool, assumed: bool) -> tuple[str, ...]:
    remarks = {"uneven_time": uneven, "min_max_record": min_max, "time_unit_assumed": assumed}
    return tuple(code for code, true in remarks.items() if true)


def _understood(
    table: NumberTable, drive: _Channel | None, outputs: Mapping[int, _Channel], times: Mapping[int | None, Times]
) -> tuple[str, ...]:
    """In words: how the numbers are written, which column is what, in which unit, and what was left aside."""
    words = [_written_words(table), *(_time_words(table, time) for time in times.values())]
    for role, channel in (("drive", drive), *((f"output of element {k}", c) for k, c in outputs.items())):
        words.append(f"{role}: {'none' if channel is None else _channel_words(table, channel)}")
    used = {c.place for c in outputs.values()} | {t.place for t in times.values()} | ({drive.place} if drive else set())
    aside = [table.called(place) for place in range(len(table.layout.columns)) if place not in used]
    if aside:
        words.append(f"left aside: {', '.join(aside)}")
    return tuple(words)


def _written_words(table: NumberTable) -> str:
    body = table.layout.body
    separator = {"\t": "tabulators", BLANKS: "blanks"}.get(body.writing.separator, f"{body.writing.separator!r}")
    mark = "comma" if body.writing.decimal == "," else "point"
    rows = len(table.values)
    return f"numbers from line {body.first_line} on, {rows} rows, separated by {separator}, decimal {mark}"


def _time_words(table: NumberTable, time: Times) -> str:
    where = "counted rows" if time.place is None else table.called(time.place)
    assumed = ", no unit stated, taken as seconds" if time.unit_assumed else ""
    return f"time: {where}{assumed}, from {time.axis.t0_s:.6g} s in steps of {time.axis.dt_s:.6g} s"


def _channel_words(table: NumberTable, channel: _Channel) -> str:
    unit = table.layout.columns[channel.place].unit or table.axis_unit(Dimension.VOLTAGE)
    return f"{table.called(channel.place)}, {'no unit stated, taken as V' if unit is None else f'in {unit.text}'}"


def _refuse_spectra(layout: Layout) -> None:
    has_times = any(c.unit is not None and c.unit.dimension is Dimension.TIME for c in layout.columns)
    for line, unit in axis_units(layout.settings):
        if unit.dimension in (Dimension.FREQUENCY, Dimension.LEVEL) and not has_times:
            raise CaptureError(
                "not a waveform: an axis is in the unit of a spectrum", where=f"line {line}", found=unit.text,
                wanted=A_WAVEFORM,
            )  # fmt: skip


def _without_cut_number(table: NumberTable) -> tuple[NumberTable, tuple[str, ...]]:
    """The table without a last number that may have lost digits, and what to say of it.

    A last line without its end is cut off where its number is shorter and all others are alike; where they are not,
    that cannot be told, and the row is left out. With a separator behind it a number is whole.
    """
    body, rows = table.layout.body, table.layout.sample_rows
    last_line = body.text[body.text.rfind(b"\n") + 1 :].decode("utf-8")
    whole = not last_line.strip() or last_line.endswith(BLANKS)
    if whole or len(rows) < 3 or len(body.writing.cells(last_line)) != body.columns[-1] + 1:
        return table, ()
    forms = {digits_behind(row[-1]) for row in rows if row != rows[-1]}
    last = digits_behind(rows[-1][-1])
    if len(forms) == 1 and any(have < want for have, want in zip(last, forms.pop(), strict=True)):
        raise CaptureError(
            "the file is cut off in its last line",
            where=table.line(len(table.values) - 1),
            found=rows[-1][-1],
            wanted=f"a number written like {rows[0][-1]}",
            mend="export or copy it again",
        )
    if len(forms) <= 1:
        return table, ()
    layout = replace(table.layout, sample_rows=rows[:-1])
    words = f"left out: {table.line(len(table.values) - 1)}, whose number may have lost digits, for the line has no end"
    return NumberTable(layout=layout, values=table.values[:-1]), (words,)


def _channels(table: NumberTable, times: Sequence[int], counting: Sequence[int]) -> list[_Channel]:
    """Every column of numbers that is neither times nor a count, with the times on its left."""
    found = []
    for place, column in enumerate(table.layout.columns):
        if place in times or place in counting or not bool(np.any(np.isfinite(table.values[:, place]))):
            continue
        if column.unit is not None and column.unit.dimension not in (Dimension.VOLTAGE, Dimension.CURRENT):
            continue
        left = [t for t in (times or counting) if t < place]
        time_place = left[-1] if left else next(iter(times or counting), None)
        found.append(_Channel(place=place, name=column.name, time_place=time_place))
    if not found:
        named = [f"{table.called(p)} in {c.unit.text}" for p, c in enumerate(table.layout.columns) if c.unit]
        raise CaptureError(
            "not a waveform: no column in volts beside the time",
            where=table.heading,
            found=", ".join(named) or f"{len(table.layout.columns)} column",
            wanted=A_WAVEFORM,
        )
    return found


def _companions(table: NumberTable, channels: Sequence[_Channel]) -> set[int]:
    """Channels that hold the other end of a minimum-maximum record: named after their neighbour, never crossing it."""
    found: set[int] = set()
    for index in range(1, len(channels)):
        one, other = channels[index - 1], channels[index]
        if index - 1 in found or not _named_after(one.name, other.name):
            continue
        difference = table.values[:, other.place] - table.values[:, one.place]
        difference = difference[np.isfinite(difference)]
        if bool(np.any(difference != 0)) and (bool(np.all(difference >= 0)) or bool(np.all(difference <= 0))):
            found.add(index)
    return found


def _named_after(one: str, other: str) -> bool:
    """`CH1` and `CH1 Peak Detect`, or `CH1` twice; not `Voltage` and `Voltage 2`."""
    one, other = one.strip().casefold(), other.strip().casefold()
    if not re.search(r"\w\w|\d", one):
        return False
    return one == other or bool(re.fullmatch(re.escape(one) + r"[ _-]+[^\d\s].*", other))


def _refuse_unlike_times(table: NumberTable, times: Sequence[Times], *, stated: bool) -> None:
    """Channels with times of their own belong together where the times are the same, or the user says so."""
    one = times[0]
    for other in times[1:]:
        n = min(one.count, other.count)
        here, there = (t.stamps_s[:n] for t in (one, other))
        step = float(here[-1] - here[0]) / (n - 1)
        if not stated and not bool(np.all(np.abs(here - there) <= 0.01 * step)):
            row = int(np.flatnonzero(np.abs(here - there) > 0.01 * step)[0])
            raise CaptureError(
                "the channels have different times, and may be two acquisitions",
                where=table.line(one.first + row),
                found=f"{here[row]:g} s and {there[row]:g} s",
                mend="if they belong together, say which is which with --channels, such as drive=1,output=2",
            )


def _record(table: NumberTable, channel: _Channel, times: Times, *, drive: bool = False) -> Record:
    signal_V, first_row = _samples(table, channel, times, drive=drive)
    return times.axis.record(signal_V, first_row=first_row)


def _samples(table: NumberTable, channel: _Channel, times: Times, *, drive: bool) -> tuple[FloatArray, int]:
    """A channel without the blanks at its ends, and the row of the times in which it begins."""
    unit = table.layout.columns[channel.place].unit or table.axis_unit(Dimension.VOLTAGE)
    if unit is not None and unit.dimension is Dimension.CURRENT and not drive:
        raise CaptureError(
            "the output is not in volts",
            where=f"{table.heading}, {table.called(channel.place)}",
            found=unit.text,
            wanted="volts across the load",
            mend="export it in volts, or say with --channels that it is the drive",
        )
    column = table.values[:, channel.place] * (unit.scale if unit is not None else 1.0)
    first, count = finite_part(table, column, channel.place)
    if first < times.first or first + count > times.first + times.count:
        row = first if first < times.first else times.first + times.count
        raise CaptureError(
            "a sample without its time", where=f"{table.line(row)}, {table.called(channel.place)}", wanted=A_WAVEFORM
        )
    return column[first : first + count], first - times.first


def _refuse_counts(table: NumberTable, channels: Sequence[_Channel]) -> None:
    """Whole numbers without a unit over them are counts of a converter or logic states, not volts."""
    for channel in channels:
        if table.layout.columns[channel.place].unit is not None:
            return
        column = table.values[:, channel.place]
        cells = "".join(row[channel.place] for row in table.layout.sample_rows)
        if re.search(r"[.,eE]", cells) or bool(np.any(column[np.isfinite(column)] % 1)):
            return
    raise CaptureError(
        "counts or logic states, not volts",
        where=f"{table.line(0)}, {table.called(channels[0].place)}",
        found="whole numbers without a unit",
        wanted=A_WAVEFORM,
        mend="export in volts; if they are volts, write the unit in the heading, such as CH1 (V)",
    )
