"""Damaged captures in many layouts, read and measured: a refusal, or numbers that can be stood behind.

No error but darkedge's own, no warning, no hang. Where it is known what the damage may do, a number without a new flag
agrees with that of the undamaged file within 5 standard uncertainties and 3 %. Common practice, no source.
"""

from __future__ import annotations

import gzip
import math
import random
import re
import signal
import traceback
import warnings
from collections import Counter
from collections.abc import Callable, Iterator, Mapping
from contextlib import contextmanager
from dataclasses import dataclass, field, replace
from functools import cache
from pathlib import Path

import numpy as np
import pytest
from captures_to_damage import BLANKS, LAYOUTS, Layout, Signals, Written, pulse, still

from darkedge.analysis.captures import Capture, Kind, Record, Waveform
from darkedge.analysis.errors import DarkedgeError
from darkedge.analysis.files.captures import read_capture
from darkedge.analysis.fixture import UNKNOWN_FIXTURE
from darkedge.analysis.measurement import Estimate, Measurement
from darkedge.analysis.measuring import finish_measuring, measure_one

TIME_LIMIT_S = 5.0
"""Seconds of computing, not of waiting, that one file may take; the slowest of whole files takes 0.2 s."""
LONGEST_MESSAGE = 1000
"""Characters of a refusal that somebody may still read."""
VARIANTS = 12
"""Undamaged captures of each layout."""
EXCUSED_BY_NO_FLAG = {"conditions_missing", "period_unknown", "emitter_unknown", "offset_doubtful"}
"""What is flagged for want of conditions says nothing of a damage."""


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Sample:
    """One undamaged capture."""

    name: str
    layout: Layout
    signals: Signals
    written: Written

    def flat_line(self, rng: random.Random) -> int:
        """A line away from the edges."""
        return self.written.first + int(rng.choice(np.flatnonzero(self.signals.flat).tolist()))

    def line(self, rng: random.Random) -> int:
        return rng.randrange(self.written.first, len(self.written.lines))

    def lines(self) -> list[str]:
        return list(self.written.lines)


@dataclass(frozen=True, slots=True, kw_only=True)
class Damaged:
    """A damaged capture. `known` says that its numbers are to be the undamaged ones, volts times `scale_V`."""

    data: bytes
    known: bool = True
    scale_V: float = 1.0
    same_levels: bool = True
    same_conditions: bool = True


Damage = Callable[[Sample, random.Random], Damaged]


@cache
def undamaged(name: str, variant: int) -> Sample:
    layout = LAYOUTS[name]
    rng = np.random.default_rng([variant, sorted(LAYOUTS).index(name)])
    signals = still(rng) if layout.still else pulse(rng)
    return Sample(name=name, layout=layout, signals=signals, written=layout.write(signals))


def _of(sample: Sample, lines: list[str], *, known: bool = True) -> Damaged:
    return Damaged(data=("\n".join(lines) + "\n").encode(), known=known)


# Rows: what is lost or moved shows in the times, where rows have any.


def drop_row(sample: Sample, rng: random.Random) -> Damaged:
    lines = sample.lines()
    del lines[sample.flat_line(rng)]
    return _of(sample, lines, known=sample.layout.stamped)


def drop_rows(sample: Sample, rng: random.Random) -> Damaged:
    lines = sample.lines()
    first = sample.line(rng)
    del lines[first : first + rng.choice([2, 5, 20, 60])]
    return _of(sample, lines, known=sample.layout.stamped)


def double_row(sample: Sample, rng: random.Random) -> Damaged:
    lines = sample.lines()
    place = sample.flat_line(rng)
    lines[place:place] = [lines[place]] * rng.choice([1, 1, 3])
    return _of(sample, lines, known=sample.layout.stamped)


def swap_rows(sample: Sample, rng: random.Random) -> Damaged:
    lines = sample.lines()
    a, b = sample.flat_line(rng), rng.choice([sample.flat_line(rng), sample.line(rng)])
    lines[a], lines[b] = lines[b], lines[a]
    return _of(sample, lines, known=sample.layout.stamped)


def cut_start(sample: Sample, rng: random.Random) -> Damaged:
    """Rows lost at the start: less of the flat part, nothing else."""
    lines = sample.lines()
    flat = int(np.flatnonzero(~sample.signals.flat[3:])[0]) + 3 if not sample.layout.still else 30
    del lines[sample.written.first : sample.written.first + rng.randrange(1, max(flat // 2, 2))]
    return _of(sample, lines, known=not sample.layout.settings)


def cut_end(sample: Sample, rng: random.Random) -> Damaged:
    lines = sample.lines()
    return _of(sample, lines[: sample.line(rng)])


def cut_bytes(sample: Sample, rng: random.Random) -> Damaged:
    data = sample.written.text().encode()
    return Damaged(data=data[: rng.randrange(len(data) // 3, len(data))])


def put_in_line(sample: Sample, rng: random.Random) -> Damaged:
    lines = sample.lines()
    note = ["# a note", "", "  ", ",,,", ";", "\t", "text", "Event 2,", '"', "0", "1,2,3,4,5,6,7,8", "x" * 200_000]
    again = sample.written.lines[: sample.written.first] or ("-- 2 --",)
    place = sample.line(rng)
    lines[place:place] = rng.choice([*[[n] for n in note], list(again), [again[-1]]])
    return _of(sample, lines)


# Cells


GARBAGE = ["NaN", "nan", "inf", "-inf", "1e999", "1e30", "-1e9", "1e6", "", "x", "overload", "0", "--", "1,5", "1.5.2", "5.",
           "0x1f", "1_0", "9" * 400, "1e-400", "1e308", "-9.9e37", '"', '"1"', '"1,2"', '"a""b"', "'0'", "#", "1e", "1d3", "٣", "\x00", "−1"]  # fmt: skip


def _replace(sample: Sample, rng: random.Random, which: int | None) -> Damaged:
    lines, written = sample.lines(), sample.written
    place = sample.flat_line(rng)
    cells, numbers = written.cells(place), written.number_cells(place)
    if sample.layout.settings:
        numbers = [n for n in numbers if n >= 3]
    cells[numbers[0] if which == 0 else rng.choice(numbers)] = rng.choice(GARBAGE)
    lines[place] = written.joined(cells)
    return _of(sample, lines)


def replace_value(sample: Sample, rng: random.Random) -> Damaged:
    return _replace(sample, rng, None)


def replace_time(sample: Sample, rng: random.Random) -> Damaged:
    return _replace(sample, rng, 0)


def replace_values(sample: Sample, rng: random.Random) -> Damaged:
    """One column has something else from a row on, or in a few rows."""
    lines, written = sample.lines(), sample.written
    first = sample.line(rng)
    column, new = rng.choice(written.number_cells(first)), rng.choice(GARBAGE)
    for place in range(first, min(first + rng.choice([3, 20, 1000]), len(lines))):
        cells = written.cells(place)
        if column < len(cells):
            cells[column] = new
        lines[place] = written.joined(cells)
    return _of(sample, lines, known=False)


def flip_in_flat_row(sample: Sample, rng: random.Random) -> Damaged:
    lines = sample.lines()
    place = sample.flat_line(rng)
    row = lines[place].encode()
    at = rng.randrange(len(row))
    new = rng.choice([rng.randrange(256), rng.choice(b"0123456789.,;e+- \t")])
    row = row[:at] + bytes([new]) + row[at + 1 :]
    above, below = ("\n".join(part).encode() for part in (lines[:place], lines[place + 1 :]))
    return Damaged(data=above + b"\n" * bool(place) + row + b"\n" + below + b"\n")


def move_cells(sample: Sample, rng: random.Random) -> Damaged:
    """In one row a cell is lost, doubled, or changes places with another."""
    lines, written = sample.lines(), sample.written
    place = sample.flat_line(rng)
    cells = written.cells(place)
    a, b = rng.randrange(len(cells)), rng.randrange(len(cells))
    match rng.randrange(3):
        case 0:
            del cells[a]
        case 1:
            cells.insert(a, cells[b])
        case _:
            cells[a], cells[b] = cells[b], cells[a]
    lines[place] = written.joined(cells)
    return _of(sample, lines)


def drop_column(sample: Sample, rng: random.Random) -> Damaged:
    lines, written = sample.lines(), sample.written
    column, to = rng.randrange(8), rng.choice([None, 0, 1, 5])
    for place in range(rng.choice([0, 0, written.first, sample.line(rng)]), len(lines)):
        cells = lines[place].split(None if written.separator == BLANKS else written.separator)
        if column < len(cells):
            cell = cells.pop(column)
            if to is not None:
                cells.insert(to, cell)
        lines[place] = written.joined(cells)
    return _of(sample, lines, known=False)


# Separators, quotes, encodings


def change_separator(sample: Sample, rng: random.Random) -> Damaged:
    old = sample.written.separator
    new = rng.choice([c for c in (",", ";", "\t", "|", "  ", ":") if c != old])
    begin = rng.choice([0, 0, 0, sample.written.first, sample.line(rng)])
    lines = sample.lines()
    for place in range(begin, len(lines)):
        if old != BLANKS:
            lines[place] = lines[place].replace(old, new)
        else:
            lines[place] = re.sub(r"(?<=\S)\s+", new, lines[place])
    return _of(sample, lines)


def change_decimal(sample: Sample, rng: random.Random) -> Damaged:
    old, new = sample.written.decimal, "," if sample.written.decimal == "." else "."
    lines = sample.lines()
    begin = rng.choice([sample.written.first, sample.written.first, sample.line(rng)])
    separator = sample.written.separator
    for place in range(begin, min(len(lines), begin + rng.choice([1, 3, 1000, 1000]))):
        row = lines[place]
        if separator == "," and rng.random() < 0.7:
            row = row.replace(",", ";")
        lines[place] = row.replace(old, new)
    return _of(sample, lines)


def quote(sample: Sample, rng: random.Random) -> Damaged:
    lines, written = sample.lines(), sample.written
    begin, mark = rng.choice([0, written.first, sample.line(rng)]), rng.choice(['"', '"', '""', "'"])
    end = rng.choice([begin + 1, len(lines), len(lines)])
    for place in range(begin, min(end, len(lines))):
        lines[place] = written.joined(
            [f"{mark}{cell.strip()}{mark}" if cell else cell for cell in written.cells(place)]
        )
    return _of(sample, lines)


def encode(sample: Sample, rng: random.Random) -> Damaged:
    text = sample.written.text()
    return Damaged(
        data=text.encode(rng.choice(["utf-16", "utf-16-le", "utf-16-be", "utf-8-sig", "utf-32", "cp1252"]), "replace")
    )


def break_encoding(sample: Sample, rng: random.Random) -> Damaged:
    lines = sample.lines()
    bad = rng.choice([b"\xff", b"\xc3", b"\xe2\x82", b"\x00", b"\xed\xa0\x80", b"\xa0", b"\xc2\xa0", b"\xe2\x80\xa8", b"\x85",
                      b"\x0c", b"\x1c", b"\x1a", b"\xef\xbb\xbf", b"\x0b", b"\xfe\xff"])  # fmt: skip
    data = "\n".join(lines).encode() + b"\n"
    place = len("\n".join(lines[: sample.flat_line(rng)]).encode())
    place += rng.choice([0, 1, 1, rng.randrange(8)])
    place = rng.choice([place, 0, len(data)])
    return Damaged(data=data[:place] + bad + data[place:])


def change_line_ends(sample: Sample, rng: random.Random) -> Damaged:
    ends = rng.choice(
        [["\r\n"], ["\r"], ["\n", "\r\n"], ["\r\n", "\r"], ["\n\n"], ["\r\r\n"], [" \n"], [",\n"], ["\n\r"]]
    )
    return Damaged(data="".join(line + rng.choice(ends) for line in sample.written.lines).encode())


def pack(sample: Sample, rng: random.Random) -> Damaged:
    data = gzip.compress(sample.written.text().encode(), mtime=0)
    match rng.randrange(4):
        case 0:
            return Damaged(data=data)
        case 1:
            return Damaged(data=data[: rng.randrange(2, len(data))])
        case 2:
            return Damaged(data=data + rng.choice([b"\x00" * 8, b"more", data[:30], gzip.compress(b"", mtime=0)]))
        case _:
            place = rng.randrange(2, len(data))
            return Damaged(data=data[:place] + bytes([data[place] ^ (1 << rng.randrange(8))]) + data[place + 1 :])


# Times


def restart(sample: Sample, rng: random.Random) -> Damaged:
    """The record again, or a part of it, behind or before itself."""
    lines, first = sample.lines(), sample.written.first
    rows = lines[first:]
    part = rows[rng.randrange(len(rows)) :]
    new = rng.choice([rows + rows, rows + part, part + rows, rows[::-1], rows + rows[::-1], lines + lines])
    return _of(sample, lines[:first] + new, known=sample.layout.stamped and not sample.layout.settings)


def hold_time(sample: Sample, rng: random.Random) -> Damaged:
    """The same time in a few rows."""
    lines, written = sample.lines(), sample.written
    begin = sample.line(rng)
    column = written.number_cells(len(lines) - 1)[0]
    held = written.cells(begin)[column] if column < len(written.cells(begin)) else "0"
    for place in range(begin, min(begin + rng.choice([2, 10, 1000]), len(lines))):
        cells = written.cells(place)
        cells[column] = held
        lines[place] = written.joined(cells)
    return _of(sample, lines, known=sample.layout.stamped)


def round_time(sample: Sample, rng: random.Random) -> Damaged:
    lines, written = sample.lines(), sample.written
    column, digits = written.number_cells(len(lines) - 1)[0], rng.choice([1, 2, 3, 4, 5])
    for place in range(written.first, len(lines)):
        cells = written.cells(place)
        number = float(cells[column].replace(",", "."))
        text = f"{number:.{digits}g}"
        cells[column] = text.replace(".", written.decimal)
        lines[place] = written.joined(cells)
    return _of(sample, lines, known=sample.layout.stamped)


def thin_out(sample: Sample, rng: random.Random) -> Damaged:
    """Every second or third row only; or every row twice."""
    lines, first = sample.lines(), sample.written.first
    rows = lines[first:]
    new = rng.choice([rows[::2], rows[1::2], rows[::3], [row for row in rows for _ in range(2)]])
    return _of(sample, lines[:first] + new, known=sample.layout.stamped and not sample.layout.settings)


def shuffle_rows(sample: Sample, rng: random.Random) -> Damaged:
    """Rows sorted by their text or their volts, or in any order, as a spreadsheet leaves them by accident."""
    lines, first = sample.lines(), sample.written.first
    rows = lines[first:]
    match rng.randrange(3):
        case 0:
            rows.sort()
        case 1:
            rows.sort(key=lambda row: row[::-1])
        case _:
            rng.shuffle(rows)
    return _of(sample, lines[:first] + rows, known=sample.layout.stamped and not sample.layout.settings)


def append_other(sample: Sample, rng: random.Random) -> Damaged:
    """Another capture behind this one, with its headings or without."""
    other = undamaged(rng.choice([sample.name, rng.choice(sorted(LAYOUTS))]), rng.randrange(VARIANTS)).written
    more = other.lines[rng.choice([0, other.first]) :]
    return _of(sample, [*sample.written.lines, *more], known=sample.layout.stamped and not sample.layout.settings)


def break_rows(sample: Sample, rng: random.Random) -> Damaged:
    """A line end too many or too few."""
    lines = sample.lines()
    place = min(sample.flat_line(rng), len(lines) - 2)
    row = lines[place]
    at = rng.randrange(1, len(row))
    lines[place : place + 1] = [row[:at], row[at:]] if rng.random() < 0.5 else [row + lines.pop(place + 1)]
    return _of(sample, lines, known=sample.layout.stamped)


def shift_time(sample: Sample, rng: random.Random) -> Damaged:
    by = rng.choice([1e-6, -1e-6, 1e-3, -1e-3, 1.0, -1.0, 60.0, 1e4, 1e9, 1e300])
    moved = replace(sample.signals, time_s=sample.signals.time_s + by)
    return Damaged(data=sample.layout.write(moved).text().encode())


# Volts


def scale_volts(sample: Sample, rng: random.Random) -> Damaged:
    scale = rng.choice([0.5, 2.0, 10.0, 1e3, 1e6])
    signals = sample.signals
    scaled = replace(signals, drive_V=signals.drive_V * scale, output_V=signals.output_V * scale)
    return Damaged(data=sample.layout.write(scaled).text().encode(), scale_V=scale)


def move_volts(sample: Sample, rng: random.Random) -> Damaged:
    signals = sample.signals
    moved = replace(signals, output_V=signals.output_V + rng.choice([-5.0, 0.1, 1.0, 100.0]))
    text = sample.layout.write(moved).text()
    return Damaged(data=text.encode(), same_levels=False, known=not sample.layout.still)


def round_volts(sample: Sample, rng: random.Random) -> Damaged:
    """Coarser codes: 40 of them over the swing, or more."""
    signals = sample.signals
    code = float(np.ptp(signals.output_V)) / rng.choice([40, 100, 250])
    rounded = np.round(np.round(signals.output_V / code) * code, 9)
    return Damaged(data=sample.layout.write(replace(signals, output_V=rounded)).text().encode())


def spoil_ends(sample: Sample, rng: random.Random) -> Damaged:
    """The first or the last sample is none: zero, or far off."""
    output = sample.signals.output_V.copy()
    output[rng.choice([0, -1])] = rng.choice([0.0, 5.0, -5.0, 1e6, float(output[output.size // 2])])
    return Damaged(data=sample.layout.write(replace(sample.signals, output_V=output)).text().encode())


# Headings and preambles


def drop_heading(sample: Sample, rng: random.Random) -> Damaged:
    lines, first = sample.lines(), sample.written.first
    if first == 0:
        return _of(sample, lines)
    begin = rng.randrange(first)
    del lines[begin : begin + rng.choice([1, 1, 2, first])]
    return replace(_of(sample, lines, known=_numbers_stay(sample)), same_conditions=False)


def edit_heading(sample: Sample, rng: random.Random) -> Damaged:
    """A word of a heading becomes another that is no unit."""
    lines, first = sample.lines(), sample.written.first
    if first == 0:
        return _of(sample, lines)
    place = rng.randrange(first)
    words = re.findall(r"[^\W\d]{2,}", lines[place])
    if words:
        new = rng.choice(["xyz", "", "Signal", "ünit", "kanal", "a,b", '"'])
        lines[place] = lines[place].replace(rng.choice(words), new, 1)
    known = _numbers_stay(sample) and "mV" not in sample.written.text()
    return replace(_of(sample, lines, known=known), same_conditions=False)


def edit_preamble_number(sample: Sample, rng: random.Random) -> Damaged:
    lines, written = sample.lines(), sample.written
    places = [n for n in range(len(written.lines)) if re.search(r"\d", lines[n])]
    places = [n for n in places if n < written.first or (sample.layout.settings and n < len(sample.layout.settings))]
    if not places:
        return _of(sample, lines)
    place = rng.choice(places)
    head, comma, rest = lines[place].partition(",,") if sample.layout.settings else (lines[place], "", "")
    new = rng.choice(["0", "-1", "1e999", "nan", "3", "1e-9", "2e-9", "1e30", "", "1e308", "٣", "5e-9", "10", "1e-320"])
    head = re.sub(r"[+-]?\d+\.?\d*(?:[eE][+-]?\d+)?", new, head, count=1)
    lines[place] = head + comma + rest
    return replace(_of(sample, lines, known=_numbers_stay(sample)), same_conditions=False)


def _numbers_stay(sample: Sample) -> bool:
    """Whether the numbers hold without what stands above: in seconds and volts, a time in every row."""
    return sample.layout.seconds and not sample.layout.still


def any_bytes(sample: Sample, rng: random.Random) -> Damaged:
    """Bytes flipped, cut out and put in anywhere, several times."""
    data = bytearray(sample.written.text().encode())
    for _ in range(rng.choice([1, 1, 2, 5, 30])):
        at = rng.randrange(len(data))
        match rng.randrange(4):
            case 0:
                data[at] ^= 1 << rng.randrange(8)
            case 1:
                data[at] = rng.choice(b'0123456789.,;e+- \t\n\r"#')
            case 2:
                del data[at : at + rng.randrange(1, 40)]
            case _:
                data[at:at] = rng.choice(
                    [b",", b"\n", b'"', b"# bias_V = 5\n", b"9" * 400, b"\r", b"e", b"1e999", b"-" * 3]
                )
        data = data or bytearray(b" ")
    return Damaged(data=bytes(data), known=False)


def long_line(sample: Sample, rng: random.Random) -> Damaged:
    lines = sample.lines()
    piece = rng.choice(["x", "1,", "0;", "1 ", '"', "#", "\t", "[", "a b ", "1.5e-3,", "(", "-", "1e", "in ", "/", "_"])
    place = rng.choice([0, 0, sample.written.first, sample.line(rng), len(lines)])
    lines[place:place] = [piece * rng.choice([2_000, 70_000])]
    return _of(sample, lines, known=sample.layout.seconds)


DAMAGES: tuple[Damage, ...] = (
    drop_row, drop_rows, double_row, swap_rows, cut_start, cut_end, cut_bytes, put_in_line, thin_out, shuffle_rows,
    append_other, break_rows, round_volts, spoil_ends, replace_value, replace_time,
    replace_values, flip_in_flat_row, move_cells, drop_column, change_separator, change_decimal, quote, encode,
    break_encoding, change_line_ends, pack, restart, hold_time, round_time, shift_time, scale_volts, move_volts,
    drop_heading, edit_heading, edit_preamble_number, any_bytes, long_line,
)  # fmt: skip


# What must hold


class TooSlow(BaseException):
    """The time limit of one file is over."""


@contextmanager
def time_limit(seconds: float) -> Iterator[None]:
    """Break off what computes for too long; waiting for others on a busy machine does not count."""

    def stop(_number: int, _frame: object) -> None:
        raise TooSlow

    before = signal.signal(signal.SIGPROF, stop)
    signal.setitimer(signal.ITIMER_PROF, seconds)
    try:
        yield
    finally:
        signal.setitimer(signal.ITIMER_PROF, 0)
        signal.signal(signal.SIGPROF, before)


@dataclass(frozen=True, slots=True, kw_only=True)
class Failure:
    """One damaged file that failed, with what repeats it: `take_case(folder, number, seed)`."""

    number: int
    layout: str
    damage: str
    what: str


@dataclass(slots=True, kw_only=True)
class Tally:
    """What became of the damaged files."""

    cases: int = 0
    measured: int = 0
    compared: int = 0
    failures: list[Failure] = field(default_factory=list)

    def told(self) -> str:
        kinds = Counter((f.what.split("\n")[-1][:60], f.damage) for f in self.failures)
        first = {(f.what.split("\n")[-1][:60], f.damage): f for f in reversed(self.failures)}
        lines = [f"{self.cases} cases, {self.measured} measured, {self.compared} compared, {len(self.failures)} failed"]
        lines += [f"{n} x {damage}: {first[what, damage]}" for (what, damage), n in kinds.most_common(40)]
        return "\n".join(lines)


def measured(capture: Capture) -> list[Measurement]:
    """A pulse by itself; a dark trace with an offset trace beside it."""
    found = list(measure_one(capture, UNKNOWN_FIXTURE))
    if capture.conditions.kind is Kind.DARK:
        conditions = replace(capture.conditions, kind=Kind.OFFSET)
        offset = Capture(name="offset", drive=None, outputs={1: _OFFSET}, conditions=conditions)
        found += measure_one(offset, UNKNOWN_FIXTURE)
    return finish_measuring(found, fixture_for=lambda _: UNKNOWN_FIXTURE)[: len(capture.outputs)]


_OFFSET = Waveform(signal_V=np.random.default_rng(3).normal(0, 1e-3, 200), dt_s=1e-3)


@cache
def reference(folder: Path, name: str, variant: int) -> tuple[Capture, Mapping[int | None, Measurement]]:
    path = folder / "undamaged.csv"
    path.write_bytes(undamaged(name, variant).written.text().encode())
    capture = read_capture(path, name="x")
    return capture, {row.element: row for row in measured(capture)}


def same_record(one: Record | None, other: Record | None) -> bool:
    if one is None or other is None:
        return one is other
    return (
        type(one) is type(other)
        and np.array_equal(one.signal_V, other.signal_V)
        and one.dt_s == other.dt_s
        and np.array_equal(one.time_s, other.time_s)
    )


def same_capture(one: Capture, other: Capture) -> bool:
    """Whether two captures hold the same, so that measuring the second gives nothing new."""
    return (
        one.conditions == other.conditions
        and one.remarks == other.remarks
        and one.outputs.keys() == other.outputs.keys()
        and same_record(one.drive, other.drive)
        and all(same_record(one.outputs[k], other.outputs[k]) for k in one.outputs)
    )


def disagreement(damaged: Damaged, row: Measurement, base: Measurement) -> str | None:
    """A number that differs from the undamaged one, where no flag is new; `None` where all agree."""
    if set(row.flags) - set(base.flags) - EXCUSED_BY_NO_FLAG:
        return None
    swing = abs(base.value("amplitude_V") or 0.0) * damaged.scale_V
    for name, estimate in row.quantities.items():
        level = name in ("low_V", "high_V")
        if (level and not damaged.same_levels) or (name.endswith("_A") and not damaged.same_conditions):
            continue
        scale = damaged.scale_V if name.endswith(("_V", "_A")) else 1.0
        there = base.quantities.get(name)
        if there is None or there.value is None or there.u is None:
            continue
        value, u = there.value * scale, there.u * scale
        if not agrees(estimate, value, u, 0.03 * (swing if level else abs(value))):
            return f"number: {name} {estimate} instead of {value:.6g} +- {u:.2g}, flags {row.flags}"
    return None


def agrees(estimate: Estimate, value: float, u: float, slack: float) -> bool:
    if estimate.value is None or estimate.u is None:
        low = -math.inf if estimate.lo95 is None else estimate.lo95
        high = math.inf if estimate.hi95 is None else estimate.hi95
        return low - 5 * u - slack <= value <= high + 5 * u + slack
    return abs(estimate.value - value) <= 5 * math.hypot(estimate.u, u) + slack


def damaged_case(number: int, seed: int, variants: int = VARIANTS) -> tuple[str, int, str, Damaged]:
    rng = random.Random(f"{seed} {number}")
    name, variant = rng.choice(sorted(LAYOUTS)), rng.randrange(variants)
    damage = rng.choice(DAMAGES)
    found = damage(undamaged(name, variant), rng)
    if rng.random() < 0.05:
        found = replace(found, data=gzip.compress(found.data, mtime=0))
    return name, variant, damage.__name__, found


def take_case(folder: Path, number: int, seed: int, tally: Tally, variants: int = VARIANTS) -> None:
    """Damage, read, measure and compare one file; what fails goes into the tally."""
    name, variant, damage, damaged = damaged_case(number, seed, variants)
    capture, base = reference(folder, name, variant)
    path = folder / "damaged.csv"
    path.write_bytes(damaged.data)
    tally.cases += 1
    rows: list[Measurement] = []
    what: str | None = None
    try:
        with warnings.catch_warnings(), time_limit(TIME_LIMIT_S):
            warnings.simplefilter("error")
            found = read_capture(path, name="x")
            if same_capture(found, capture):
                return
            rows = measured(found)
    except DarkedgeError as error:
        if len(str(error)) > LONGEST_MESSAGE:
            what = f"message of {len(str(error))} characters: {str(error)[:200]}"
    except TooSlow:
        what = f"hang: {traceback.format_exc(limit=-4)}hang"
    except Exception as error:  # noqa: BLE001
        what = f"{traceback.format_exc(limit=-4)}{error!r}"
    tally.measured += bool(rows)
    for row in rows:
        if damaged.known and what is None and row.element in base:
            tally.compared += 1
            what = disagreement(damaged, row, base[row.element])
    if what is not None:
        tally.failures.append(Failure(number=number, layout=name, damage=damage, what=what))


def run_cases(folder: Path, *, count: int, seed: int, first: int = 0, variants: int = VARIANTS) -> Tally:
    """Damage, read, measure and compare so many files; each is drawn from the seed and its number."""
    tally = Tally()
    for number in range(first, first + count):
        take_case(folder, number, seed, tally, variants)
    return tally


@pytest.fixture(scope="module")
def folder(tmp_path_factory: pytest.TempPathFactory) -> Path:
    return tmp_path_factory.mktemp("damaged")


@pytest.mark.parametrize("name", LAYOUTS)
def test_the_undamaged_captures_are_measured(folder: Path, name: str) -> None:
    _, rows = reference(folder, name, 0)
    assert ("dark_current_A" if LAYOUTS[name].still else "rise_time_s") in rows[1].quantities


def test_150_damaged_captures_are_refused_or_measured_right(folder: Path) -> None:
    tally = run_cases(folder, count=150, seed=5, variants=1)
    assert not tally.failures, tally.told()
    assert tally.compared > 20


@pytest.mark.campaign
def test_campaign_of_20_000_damaged_captures(folder: Path) -> None:
    """Drawn by a seeded generator; `run_cases` takes another seed and another count."""
    tally = run_cases(folder, count=20_000, seed=2026)
    print(tally.told())
    assert not tally.failures, tally.told()
    assert tally.compared > 2_000
