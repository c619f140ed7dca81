"""Which columns of another program's file are its times, and what they say."""

from __future__ import annotations

import re
from collections.abc import Sequence
from dataclasses import dataclass
from itertools import pairwise

import numpy as np

from darkedge.analysis.captures import FloatArray
from darkedge.analysis.errors import CaptureError
from darkedge.analysis.files.number_table import A_WAVEFORM, NumberTable, digits_behind, finite_part
from darkedge.analysis.files.stated import stated_steps
from darkedge.analysis.files.time_axis import EVEN_RATIO, TimeAxis, TimeAxisError, time_axis
from darkedge.analysis.files.units_written import Dimension

LONGEST_BARE_STEP_S = 1e-4
"""Times without a unit are taken as seconds only below this step; above it they may be in any unit."""

_SAME_STEP_RATIO = 0.01

_MENDS = (
    ("still", "export the times with more digits, or add a line such as: # sample interval = 2e-9 s"),
    ("shorter", "check the unit of the time"),
)

_TIME_NAMES = re.compile(r"(?:time|t|tiempo|zeit|temps|tempo|tid|x|x-axis)[ _]?\d*\b", re.IGNORECASE)
_OTHER_NAMES = re.compile(
    r"\b(?:freq|hertz|volt|bias|curr|capac|wavel|temp(?:erat|\b)|dist|posit|angle|cycle|phase|power|leak|dark|load)"
    r"|\b(?:pulse|rise|fall|width|delay|period|jitter|storage)|^[iucfqprgv]$|^[iv]_?[rfdbac]{1,2}$",
    re.IGNORECASE,
)
"""Names of axes that are no time of a record: other quantities, and durations that are results."""


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Times:
    """One time axis and the rows it holds for: from `first` on, `count` of them. `place` is `None` for row numbers.

    `unit_assumed` says that the file states no unit, and that plain decimals were taken for seconds.
    """

    place: int | None
    axis: TimeAxis
    first: int
    count: int
    unit_assumed: bool = False

    @property
    def stamps_s(self) -> FloatArray:
        """The times, shape (count,)."""
        if self.axis.stamps_s is not None:
            return self.axis.stamps_s
        return self.axis.t0_s + self.axis.dt_s * np.arange(self.count, dtype=np.float64)


def time_places(table: NumberTable) -> tuple[list[int], list[int]]:
    """Places of the columns of times, and of those that only count the samples.

    A column whose heading states a unit of time is one. Else it is, among the columns without a unit, the one that
    rises evenly, or the one that rises; names of time decide between several.

    Raises
    ------
    CaptureError
        No column of times and no step stated, several that could be, or one that is another axis.
    """
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


def times_of(table: NumberTable, place: int | None, counting: Sequence[int], told: float | None = None) -> Times:
    """The time axis in a column of times or of sample numbers, or, with `place` `None`, in the number of the row.

    `told` is seconds in one unit of the times, as the user says.

    Raises
    ------
    CaptureError
        Times that fall or stand still, that may not be seconds, or sample numbers without a step.
    """
    if place is None or place in counting:
        return _counted_times(table, place)
    scale, assumed = _time_scale(table, place, told)
    column = table.values[:, place] * scale
    first, count = finite_part(table, column, place)
    stamps = column[first : first + count]
    increments = stated_steps(table.layout.settings, only_named=False)
    quanta = _quanta(table, place, stamps / scale) * scale if increments else None
    return Times(
        place=place,
        axis=_axis(table, stamps, first, place, quanta, increments),
        first=first,
        count=count,
        unit_assumed=assumed,
    )


def _refuse_other_names(table: NumberTable, places: Sequence[int]) -> None:
    for place in places:
        name = table.layout.columns[place].name
        if _OTHER_NAMES.search(name):
            raise _other_axis(table, place, name)


def _refuse_other_axes(table: NumberTable, places: Sequence[int]) -> None:
    for place in places:
        unit = table.layout.columns[place].unit
        if unit is not None and _is_rising(table.values[:, place]):
            raise _other_axis(table, place, unit.text)


def _other_axis(table: NumberTable, place: int, found: str) -> CaptureError:
    return CaptureError(
        "not a waveform: the column that rises is no time",
        where=f"{table.heading}, {table.called(place)}",
        found=found,
        wanted=A_WAVEFORM,
    )


def _even_places(table: NumberTable, places: Sequence[int]) -> list[int]:
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


def _rising_place(table: NumberTable, places: Sequence[int]) -> list[int]:
    """The column that rises; of several, the one with a name of time."""
    rising = [p for p in places if _is_rising(table.values[:, p])]
    if len(rising) < 2:
        return rising
    named = [p for p in rising if _TIME_NAMES.match(table.layout.columns[p].name)]
    if len(named) != 1:
        raise _several(table, rising)
    return named


def _several(table: NumberTable, places: Sequence[int]) -> CaptureError:
    return CaptureError(
        "it cannot be told which column is the time",
        where=table.heading,
        found=", ".join(table.called(p) for p in places) + " all rise",
        wanted="one column that rises evenly",
        mend="write the unit in the heading of the time, such as time (s)",
    )


def _no_time(table: NumberTable) -> CaptureError:
    values = table.values[np.isfinite(table.values)]
    whole = bool(np.all(values == np.round(values)))
    if whole and set(np.unique(values)) <= {0.0, 1.0}:
        return CaptureError(
            "logic states, not a waveform", where=table.line(0), found="0 and 1 only", wanted=A_WAVEFORM
        )
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


def _axis(
    table: NumberTable,
    stamps: FloatArray,
    first: int,
    place: int,
    quanta: FloatArray | None,
    increments: Sequence[float],
) -> TimeAxis:
    try:
        return time_axis(stamps, quanta_s=quanta, increments_s=increments)
    except TimeAxisError as fault:
        raise CaptureError(
            fault.what,
            where=f"{table.line(first + fault.row)}, {table.called(place)}",
            found=fault.found,
            wanted="times that rise from row to row",
            mend=next((mend for word, mend in _MENDS if word in fault.what), "export one acquisition to a file"),
        ) from fault


def _counted_times(table: NumberTable, place: int | None) -> Times:
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
    if float(np.spacing(abs(start_s))) > EVEN_RATIO * steps[0]:
        raise CaptureError(
            "the samples cannot be told apart so far from 0 s", where=table.heading,
            found=f"a start at {start_s:g} s, steps of {steps[0]:g} s", wanted="a start and a step of one record",
        )  # fmt: skip
    if place is None:
        return Times(place=None, axis=TimeAxis(t0_s=start_s, dt_s=steps[0]), first=0, count=len(table.values))
    first, count = finite_part(table, table.values[:, place], place)
    numbers = table.values[first : first + count, place]
    # Samples are counted from 0 or from 1; a larger first number says that rows were cut off above.
    passed = numbers - (numbers[0] if numbers[0] in (0, 1) else 0)
    if bool(np.all(np.diff(numbers) == 1)):
        axis = TimeAxis(t0_s=start_s + steps[0] * float(passed[0]), dt_s=steps[0])
    else:
        axis = TimeAxis(stamps_s=start_s + steps[0] * passed)
    return Times(place=place, axis=axis, first=first, count=count)


def _time_scale(table: NumberTable, place: int, told: float | None) -> tuple[float, bool]:
    """Seconds in one unit of a column of times, and whether that was assumed.

    The heading says it, else the user, else a sample interval that the file states with its unit, else the numbers: exponents
    are what scopes write seconds with, plain decimals may be anything.
    """
    unit = table.layout.columns[place].unit or table.axis_unit(Dimension.TIME)
    if unit is not None:
        if told is not None and abs(told / unit.scale - 1) > 1e-9:
            raise CaptureError(
                "the unit of the time is given twice and differs", where=f"{table.heading}, {table.called(place)}",
                found=f"{unit.text} in the file, {told:g} s with --channels",
            )  # fmt: skip
        return unit.scale, False
    if told is not None:
        return told, False
    column = table.values[:, place][np.isfinite(table.values[:, place])]
    step = float(column[-1] - column[0]) / (column.size - 1)
    if (scale := _scale_of_stated_step(table, step)) is not None:
        return scale, False
    whole = bool(np.all(column == np.round(column)))
    if whole or step >= LONGEST_BARE_STEP_S:
        raise CaptureError(
            "the unit of the time is not stated, and it may not be seconds",
            where=f"{table.heading}, {table.called(place)}",
            found=f"steps of {step:g}",
            wanted=f"a stated unit, or steps below {LONGEST_BARE_STEP_S:g} s",
            mend="write the unit in the heading, such as time (us), or state it with --channels time=us",
        )
    plain = not any("e" in row[place].casefold() for row in table.layout.sample_rows)
    return 1.0, plain


def _scale_of_stated_step(table: NumberTable, step: float) -> float | None:
    """Seconds in one unit of the times, from a sample interval that the file names; `None` where it names none, or several."""
    stated = stated_steps(table.layout.settings, only_named=True)
    if len(stated) != 1 or step <= 0:
        return None
    for scale in (1.0, 1e-3, 1e-6, 1e-9):
        if abs(step * scale / stated[0] - 1) < _SAME_STEP_RATIO:
            return scale
    return None


def _quanta(table: NumberTable, place: int, stamps: FloatArray) -> FloatArray:
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
    decimals, _ = digits_behind(number)
    exponent = re.search(r"[eE]([+-]?\d{1,3})$", number)
    return (int(exponent[1]) if exponent else 0) - decimals
