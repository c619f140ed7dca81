"""Other programs' waveforms: from the structure of a file to time, channels and a capture."""

from __future__ import annotations

import re
from collections.abc import Sequence
from dataclasses import dataclass
from itertools import pairwise

import numpy as np

from darkedge.analysis.captures import Capture, FloatArray, Record, TimedRecord
from darkedge.analysis.errors import CaptureError
from darkedge.analysis.files.layout import Layout, find_layout
from darkedge.analysis.files.numbers import line_of_row, read_numbers
from darkedge.analysis.files.roles import ChannelRoles, assign_roles
from darkedge.analysis.files.stated import axis_units, stated_conditions, stated_steps
from darkedge.analysis.files.time_axis import EVEN_RATIO, TimeAxis, TimeAxisError, time_axis
from darkedge.analysis.files.units_written import Dimension, WrittenUnit

LONGEST_BARE_STEP_S = 1e-4
"""Times without a unit are taken as seconds only below this step; above it they may be in any unit."""

_TIME_NAMES = re.compile(r"(?:time|t|tiempo|zeit|temps|tempo|tid|x|x-axis)[ _]?\d*\b", re.IGNORECASE)
_OTHER_NAMES = re.compile(
    r"\b(?:freq|hertz|volt|bias|curr|capac|wavel|temp(?:erat|\b)|dist|posit|angle|cycle|phase|power|leak|dark|load)"
    r"|\b(?:pulse|rise|fall|width|delay|period|jitter|storage)|^[iucfqprgv]$|^[iv]_?[rfdbac]{1,2}$",
    re.IGNORECASE,
)
"""Names of axes that are no time of a record: other quantities, and durations that are results."""
_WAVEFORM = "a waveform: volts against time in seconds"


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class _Table:
    """The numbers of a file, shape (rows, columns), NaN where there is none, and what is known of the columns."""

    layout: Layout
    values: FloatArray

    def line(self, row: int) -> str:
        return f"line {line_of_row(self.layout.body, row)}"

    @property
    def heading(self) -> str:
        return f"line {self.layout.heading_line or self.layout.body.first_line}"

    def axis_unit(self, dimension: Dimension) -> WrittenUnit | None:
        """The unit that the settings give to an axis, where they give one only."""
        units = {unit for _, unit in axis_units(self.layout.settings) if unit.dimension is dimension}
        return units.pop() if len(units) == 1 else None

    def called(self, place: int) -> str:
        name = self.layout.columns[place].name
        return f"column {self.layout.columns[place].cell + 1}{f' ({name})' if name else ''}"


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class _Times:
    """One time axis and the rows it holds for: from `first` on, `count` of them. `place` is `None` for row numbers."""

    place: int | None
    axis: TimeAxis
    first: int
    count: int


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
    0.1 ms and not whole numbers, volts only where not all are whole numbers (those would be counts or logic states).
    Blank samples at the ends of a channel are cut off; between others they are refused. A channel in amperes can be
    the drive, which gives times only.

    Raises
    ------
    CaptureError
        The text is no time-domain waveform, or something in it cannot be decided. The message says line and reason.
    """
    layout = find_layout(text)
    _refuse_spectra(layout)
    table = _Table(layout=layout, values=read_numbers(layout.body))
    _refuse_cut_number(table)
    time_places, counting = _time_places(table)
    found = _channels(table, time_places, counting)
    companions = _companions(table, found)
    found = [channel for place, channel in enumerate(found) if place not in companions]
    roles = assign_roles([channel.name for channel in found], channels)
    outputs = {element: found[index] for element, index in sorted(roles.outputs.items())}
    drive = None if roles.drive is None else found[roles.drive]
    used = [*outputs.values(), *([] if drive is None else [drive])]
    _refuse_counts(table, used)
    times = {place: _times(table, place, counting) for place in {channel.time_place for channel in used}}
    _refuse_unlike_times(table, list(times.values()), stated=channels is not None)
    drive_record = None if drive is None else _record(table, drive, times[drive.time_place], drive=True)
    records = {element: _record(table, c, times[c.time_place]) for element, c in outputs.items()}
    uneven = any(isinstance(record, TimedRecord) for record in (drive_record, *records.values()))
    remarks = {"uneven_time": uneven, "min_max_record": bool(companions)}
    return Capture(
        name=name,
        drive=drive_record,
        outputs=records,
        conditions=stated_conditions(layout.settings),
        remarks=tuple(code for code, true in remarks.items() if true),
    )


def _refuse_spectra(layout: Layout) -> None:
    has_times = any(c.unit is not None and c.unit.dimension is Dimension.TIME for c in layout.columns)
    for line, unit in axis_units(layout.settings):
        if unit.dimension in (Dimension.FREQUENCY, Dimension.LEVEL) and not has_times:
            raise CaptureError(
                "not a waveform: an axis is in the unit of a spectrum", where=f"line {line}", found=unit.text,
                wanted=_WAVEFORM,
            )  # fmt: skip


def _refuse_cut_number(table: _Table) -> None:
    """A last line without its end may have lost digits: then its number is shorter where all others are alike."""
    text, rows = table.layout.body.text, table.layout.sample_rows
    if text.endswith(b"\n") or len(rows) < 3:
        return
    forms = {_form(row[-1]) for row in rows if row != rows[-1]}
    last = _form(rows[-1][-1])
    if len(forms) == 1 and any(have < want for have, want in zip(last, forms.pop(), strict=True)):
        raise CaptureError(
            "the file is cut off in its last line",
            where=table.line(len(table.values) - 1),
            found=rows[-1][-1],
            wanted=f"a number written like {rows[0][-1]}",
            mend="export or copy it again",
        )


def _form(number: str) -> tuple[int, int]:
    """How many digits stand behind the decimal mark and in the exponent."""
    mantissa, _, exponent = number.casefold().partition("e")
    decimals = re.search(r"[.,](\d*)$", mantissa)
    return len(decimals[1]) if decimals else 0, len(exponent.lstrip("+-"))


def _time_places(table: _Table) -> tuple[list[int], list[int]]:
    """Places of the columns of times, and of those that only count the samples."""
    columns = table.layout.columns
    stated = [p for p, c in enumerate(columns) if c.unit is not None and c.unit.dimension is Dimension.TIME]
    counting = [p for p in range(len(columns)) if p not in stated and _counts(table.values[:, p])]
    if stated:
        _refuse_other_names(table, stated)
        return stated, counting
    step_is_stated = table.layout.increment_s is not None or stated_steps(table.layout.settings, only_named=True)
    others = [p for p in range(len(columns)) if p not in counting]
    # Times need a channel beside them: a lone column is that channel, even where it rises.
    bare = [p for p in others if columns[p].unit is None] if len(others) > 1 else []
    times = _even_places(table, bare)
    if not times and not (counting and step_is_stated):
        times = _rising_place(table, bare)
    if not times and not step_is_stated:
        _refuse_other_axes(table, others)
    only_volts = all(c.unit is not None and c.unit.dimension is Dimension.VOLTAGE for c in columns)
    if not times and not counting and not (step_is_stated and (len(columns) == 1 or only_volts)):
        # Beside a step that is stated, a column that is not said to be volts may be times that were damaged.
        raise _no_time(table)
    _refuse_other_names(table, times)
    for place in times:
        # Without a unit, only a place before the channels or a name makes a column that rises a time.
        if columns[place].name and place != others[0] and not _TIME_NAMES.match(columns[place].name):
            raise _other_axis(table, place, columns[place].name) if len(times) == 1 else _several(table, times)
    return times, counting


def _refuse_other_names(table: _Table, places: Sequence[int]) -> None:
    for place in places:
        name = table.layout.columns[place].name
        if _OTHER_NAMES.search(name):
            raise _other_axis(table, place, name)


def _refuse_other_axes(table: _Table, places: Sequence[int]) -> None:
    for place in places:
        unit = table.layout.columns[place].unit
        if unit is not None and _is_rising(table.values[:, place]):
            raise _other_axis(table, place, unit.text)


def _other_axis(table: _Table, place: int, found: str) -> CaptureError:
    return CaptureError(
        "not a waveform: the column that rises is no time",
        where=f"{table.heading}, {table.called(place)}",
        found=found,
        wanted=_WAVEFORM,
    )


def _even_places(table: _Table, places: Sequence[int]) -> list[int]:
    """The column that rises evenly; of several, the one with a name of time, or each block's first."""
    even = [p for p in places if _is_even(table.values[:, p])]
    if len(even) < 2:
        return even
    named = [p for p in even if _TIME_NAMES.match(table.layout.columns[p].name)]
    if len(named) == 1:
        return named
    distances = {b - a for a, b in pairwise(even)}
    if even[0] == 0 and len(distances) == 1 and distances != {1} and even[-1] + 1 < len(table.layout.columns):
        return even
    raise _several(table, even)


def _rising_place(table: _Table, places: Sequence[int]) -> list[int]:
    """The column that rises; of several, the one with a name of time."""
    rising = [p for p in places if _is_rising(table.values[:, p])]
    if len(rising) < 2:
        return rising
    named = [p for p in rising if _TIME_NAMES.match(table.layout.columns[p].name)]
    if len(named) != 1:
        raise _several(table, rising)
    return named


def _several(table: _Table, places: Sequence[int]) -> CaptureError:
    return CaptureError(
        "it cannot be told which column is the time",
        where=table.heading,
        found=", ".join(table.called(p) for p in places) + " all rise",
        wanted="one column that rises evenly",
        mend="write the unit in the heading of the time, such as time (s)",
    )


def _no_time(table: _Table) -> CaptureError:
    values = table.values[np.isfinite(table.values)]
    whole = bool(np.all(values == np.round(values)))
    if whole and set(np.unique(values)) <= {0.0, 1.0}:
        return CaptureError("logic states, not a waveform", where=table.line(0), found="0 and 1 only", wanted=_WAVEFORM)
    return CaptureError(
        "nothing says when the samples were taken",
        where=table.line(0),
        found=f"{len(table.layout.columns)} column{'s' * (len(table.layout.columns) > 1)}, of which none rises",
        wanted="a column of times, or a sample interval in the lines above",
        mend="export with time, or add a line such as: # sample interval = 2e-9 s",
    )


def _counts(column: FloatArray) -> bool:
    """Whether a column counts samples: whole numbers that rise by one, more where rows were lost."""
    part = column[np.isfinite(column)]
    steps = np.diff(part)
    whole = bool(np.all(part == np.round(part)))
    return part.size > 2 and whole and bool(np.all(steps >= 1)) and float(np.median(steps)) == 1


def _is_even(column: FloatArray) -> bool:
    steps = np.diff(column[np.isfinite(column)])
    middle = float(np.median(steps)) if steps.size else 0.0
    return middle > 0 and bool(np.all(np.abs(steps - middle) <= EVEN_RATIO * middle))


def _is_rising(column: FloatArray) -> bool:
    part = column[np.isfinite(column)]
    return part.size > 2 and bool(np.all(np.diff(part) >= 0)) and bool(part[-1] > part[0])


def _channels(table: _Table, times: Sequence[int], counting: Sequence[int]) -> list[_Channel]:
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
            wanted=_WAVEFORM,
        )
    return found


def _companions(table: _Table, channels: Sequence[_Channel]) -> set[int]:
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


def _times(table: _Table, place: int | None, counting: Sequence[int]) -> _Times:
    if place is None or place in counting:
        return _counted_times(table, place)
    scale = _time_scale(table, place)
    column = table.values[:, place] * scale
    first, count = _finite_part(table, column, place)
    stamps = column[first : first + count]
    increments = stated_steps(table.layout.settings, only_named=False)
    quanta = _quanta(table, place, stamps / scale) * scale if increments else None
    return _Times(place=place, axis=_axis(table, stamps, first, place, quanta, increments), first=first, count=count)


def _axis(
    table: _Table, stamps: FloatArray, first: int, place: int, quanta: FloatArray | None, increments: Sequence[float]
) -> TimeAxis:
    try:
        return time_axis(stamps, quanta_s=quanta, increments_s=increments)
    except TimeAxisError as fault:
        stands = "still" in fault.what
        raise CaptureError(
            fault.what,
            where=f"{table.line(first + fault.row)}, {table.called(place)}",
            found=fault.found,
            wanted="times that rise from row to row",
            mend=(
                "export the times with more digits, or add a line such as: # sample interval = 2e-9 s"
                if stands
                else "export one acquisition to a file"
            ),
        ) from fault


def _counted_times(table: _Table, place: int | None) -> _Times:
    """Times from the number of the sample, where the file states the step."""
    layout = table.layout
    steps = stated_steps(layout.settings, only_named=True) if layout.increment_s is None else [layout.increment_s]
    if not steps or max(steps) > min(steps) * (1 + 1e-6):
        raise CaptureError(
            "the samples are counted, and nothing says how long one takes" if not steps
            else "the file states more than one sample interval",
            where=table.line(0) if place is None else f"{table.heading}, {table.called(place)}",
            found=", ".join(f"{step:g} s" for step in steps) or "sample numbers",
            wanted="times, or one sample interval",
            mend="export with time, or add a line such as: # sample interval = 2e-9 s",
        )  # fmt: skip
    start_s = layout.start_s or 0.0
    if place is None:
        return _Times(place=None, axis=TimeAxis(t0_s=start_s, dt_s=steps[0]), first=0, count=len(table.values))
    first, count = _finite_part(table, table.values[:, place], place)
    numbers = table.values[first : first + count, place]
    # Samples are counted from 0 or from 1; a larger first number says that rows were cut off above.
    passed = numbers - (numbers[0] if numbers[0] in (0, 1) else 0)
    if bool(np.all(np.diff(numbers) == 1)):
        axis = TimeAxis(t0_s=start_s + steps[0] * float(passed[0]), dt_s=steps[0])
    else:
        axis = TimeAxis(stamps_s=start_s + steps[0] * passed)
    return _Times(place=place, axis=axis, first=first, count=count)


def _time_scale(table: _Table, place: int) -> float:
    """Seconds in one unit of a column of times."""
    unit = table.layout.columns[place].unit or table.axis_unit(Dimension.TIME)
    if unit is not None:
        return unit.scale
    column = table.values[:, place][np.isfinite(table.values[:, place])]
    step = float(column[-1] - column[0]) / (column.size - 1)
    whole = bool(np.all(column == np.round(column)))
    if whole or step >= LONGEST_BARE_STEP_S:
        raise CaptureError(
            "the unit of the time is not stated, and it may not be seconds",
            where=f"{table.heading}, {table.called(place)}",
            found=f"steps of {step:g}",
            wanted=f"a stated unit, or steps below {LONGEST_BARE_STEP_S:g} s",
            mend="write the unit in the heading, such as time (us)",
        )
    return 1.0


def _quanta(table: _Table, place: int, stamps: FloatArray) -> FloatArray:
    """What the last digit of each stamp is worth, in the column's unit; told from the first and the last rows.

    Stamps are rounded to so many decimals, or to so many digits: the finest decimal and the most digits seen are
    those, for zeros at the end may have been left out.
    """
    writing = table.layout.body.writing
    cells = [row[place] for row in table.layout.sample_rows if writing.is_number(row[place])]
    finest = min(map(_last_digit, cells))
    most = max(len(re.sub(r"[eE].*|\D", "", cell).lstrip("0")) for cell in cells)
    with np.errstate(divide="ignore"):
        leading = np.floor(np.log10(np.abs(stamps)) + 1e-9)
    return np.maximum(10.0**finest, 10.0 ** (leading - most + 1))


def _last_digit(number: str) -> int:
    """The power of ten of a number's last digit."""
    decimals, _ = _form(number)
    exponent = re.search(r"[eE]([+-]?\d{1,3})$", number)
    return (int(exponent[1]) if exponent else 0) - decimals


def _finite_part(table: _Table, column: FloatArray, place: int) -> tuple[int, int]:
    """First row and number of rows from the first value to the last; none may be missing between."""
    valid = np.flatnonzero(np.isfinite(column))
    if valid.size < 2:
        raise CaptureError("fewer than two samples", where=table.called(place), wanted=_WAVEFORM)
    first, count = int(valid[0]), int(valid[-1] - valid[0]) + 1
    if valid.size != count:
        row = int(valid[np.flatnonzero(np.diff(valid) > 1)[0]]) + 1
        raise CaptureError(
            "a sample is missing among the others",
            where=f"{table.line(row)}, {table.called(place)}",
            found="nothing or NaN",
            wanted="a number in every row",
            mend="export again, or cut the record there",
        )
    return first, count


def _refuse_unlike_times(table: _Table, times: Sequence[_Times], *, stated: bool) -> None:
    """Channels with times of their own belong together where the times are the same, or the user says so."""
    one = times[0]
    for other in times[1:]:
        n = min(one.count, other.count)
        here, there = (_stamps(table, t)[:n] for t in (one, other))
        step = float(here[-1] - here[0]) / (n - 1)
        if not stated and not bool(np.all(np.abs(here - there) <= 0.01 * step)):
            row = int(np.flatnonzero(np.abs(here - there) > 0.01 * step)[0])
            raise CaptureError(
                "the channels have different times, and may be two acquisitions",
                where=table.line(one.first + row),
                found=f"{here[row]:g} s and {there[row]:g} s",
                mend="if they belong together, say which is which with --channels, such as drive=1,output=2",
            )


def _stamps(table: _Table, times: _Times) -> FloatArray:
    if times.axis.stamps_s is not None:
        return times.axis.stamps_s
    return times.axis.t0_s + times.axis.dt_s * np.arange(times.count, dtype=np.float64)


def _record(table: _Table, channel: _Channel, times: _Times, *, drive: bool = False) -> Record:
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
    first, count = _finite_part(table, column, channel.place)
    if first < times.first or first + count > times.first + times.count:
        row = first if first < times.first else times.first + times.count
        raise CaptureError(
            "a sample without its time", where=f"{table.line(row)}, {table.called(channel.place)}", wanted=_WAVEFORM
        )
    return times.axis.record(column[first : first + count], first_row=first - times.first)


def _refuse_counts(table: _Table, channels: Sequence[_Channel]) -> None:
    """Whole numbers without a unit are counts of a converter or logic states, not volts."""
    if table.axis_unit(Dimension.VOLTAGE) is not None:
        return
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
        wanted=_WAVEFORM,
        mend="export in volts; if they are volts, write the unit in the heading, such as CH1 (V)",
    )
