"""The structure of a text file of numbers, told from its lines alone.

Nothing here knows a maker: separator and decimal mark are those under which the last lines read as numbers, the
numbers begin where such lines begin, and what stands above or beside them is heading or setting.
"""

from __future__ import annotations

import math
import re
from collections import Counter
from collections.abc import Iterator, Sequence
from dataclasses import dataclass

from darkedge.analysis.errors import CaptureError
from darkedge.analysis.files.numbers import BLANKS, Body, Writing, is_step, shown
from darkedge.analysis.files.units_written import Dimension, WrittenUnit, read_unit, split_unit

FEWEST_ROWS = 8
"""Rows from which a structure can be told; a waveform of fewer samples has no edge that could be measured."""

_SAMPLE_ROWS = 12
_HEAD_BYTES = 1 << 16
_TAIL_BYTES = 1 << 13
_WRITINGS = tuple(
    Writing(separator=separator, decimal=decimal) for separator in ("\t", ";", ",", BLANKS) for decimal in (".", ",")
)
_DOUBTFUL = Writing(separator=",", decimal=",")
_COMMENT = re.compile(r"\A\s*(?:#|%|//)\s?")
_ONLY_NUMBERS = re.compile(r"[\d\s.,;+\-eE\"]+", re.ASCII)
_NEARLY_A_NUMBER = re.compile(r"[+-]?\d[\d.,]*(?:[eE][+-]?\d+)?[.,]?\s?(?P<unit>[^\W\d]{0,8})")
_DATE = re.compile(r"\d{1,4}\.\d{1,2}\.\d{0,4}")
_MARKS = {".": "point", ",": "comma"}
_LONGEST_HEADING = 4000
"""Characters of a line of headings or settings; what is longer states nothing that could be understood."""
_INDEX_WORDS = {"sequence", "index", "sample", "samples", "point", "points", "no", "no.", "nr", "nr.", "n", "#"}
_INCREMENT_WORDS = ("incr", "step", "interval", "delta", "period")


@dataclass(frozen=True, slots=True, kw_only=True)
class Column:
    """One column of numbers: which cell of a row it is (from 0), and what the headings say of it."""

    cell: int
    name: str = ""
    unit: WrittenUnit | None = None


@dataclass(frozen=True, slots=True, kw_only=True)
class Layout:
    """What was understood of a file.

    `settings` are the cells of every line above the numbers and of everything beside them, blank ones left out, with
    their line numbers (from 1). `start_s` and `increment_s` are those that stand in the row of units. `sample_rows`
    are the cells of the columns in the first and last rows.
    """

    body: Body
    columns: tuple[Column, ...]
    settings: tuple[tuple[int, tuple[str, ...]], ...]
    start_s: float | None = None
    increment_s: float | None = None
    heading_line: int | None = None
    sample_rows: tuple[tuple[str, ...], ...] = ()


def find_layout(text: bytes) -> Layout:
    """Recognise the structure of a text file of numbers.

    Parameters
    ----------
    text : bytes
        UTF-8, lines ending in LF, not blank.

    Raises
    ------
    CaptureError
        No columns of numbers, too few rows, text among the rows, a decimal mark that cannot be told. The message says
        the line.
    """
    tail = _tail_rows(text)
    writing, columns, n_cells = _find_writing(tail, text)
    head = _head_lines(text)
    first = _first_row(head, writing, columns, complete=len(head) - 1 == text.count(b"\n"))
    if first is None:
        head = text.decode("utf-8").split("\n")
        first = _first_row(head, writing, columns, complete=True)
    if first is None:
        raise _too_few(tail, text, columns)
    _refuse_other_numbers_above(head[:first])
    first_cells = [writing.cells(line) for line in _filled(head[first:], writing, _SAMPLE_ROWS)]
    columns = _with_shorter_channels(columns, first_cells, writing)
    n_cells = max(n_cells, columns[-1] + 1)
    body = Body(
        text=text, start=_offset(head, first), first_line=first + 1, writing=writing, columns=columns, n_cells=n_cells
    )
    headings = _Headings.above(head[:first], writing, columns)
    samples = [*first_cells, *(writing.cells(line) for line in tail if _is_row(line, writing, columns))]
    layout = Layout(
        body=body,
        columns=headings.columns,
        settings=tuple(_settings(head, first, writing, columns)),
        start_s=headings.start_s,
        increment_s=headings.increment_s,
        heading_line=headings.line,
        sample_rows=tuple(tuple(row[c] for c in columns) for row in samples if len(row) > columns[-1]),
    )
    _refuse_doubtful_commas(layout, named=headings.n_cells == n_cells)
    return layout


def _tail_rows(text: bytes) -> list[str]:
    """The last lines that are not blank."""
    size = _TAIL_BYTES
    while True:
        lines = text[-size:].decode("utf-8", errors="replace").split("\n")
        if size < len(text):
            lines = lines[1:]
        rows = [line for line in lines if re.search(r"\w", line)][-_SAMPLE_ROWS:]
        if len(rows) >= _SAMPLE_ROWS or size >= len(text):
            return rows
        size *= 8


def _head_lines(text: bytes) -> list[str]:
    head = text[:_HEAD_BYTES]
    if len(head) < len(text):
        head = head[: head.rfind(b"\n") + 1] or text
    return head.decode("utf-8").split("\n")


def _last_line(text: bytes) -> int:
    return text.rstrip(b"\n").count(b"\n") + 1


def _offset(lines: Sequence[str], first: int) -> int:
    return sum(len(line.encode("utf-8")) + 1 for line in lines[:first])


def _find_writing(rows: Sequence[str], text: bytes) -> tuple[Writing, tuple[int, ...], int]:
    """The writing under which most of the rows are the same columns of numbers."""
    best: tuple[tuple[int, int, int], Writing, tuple[int, ...]] | None = None
    quoted = any('"' in row for row in rows)
    writings = [Writing(separator=w.separator, decimal=w.decimal, quoted=quoted) for w in _WRITINGS]
    for writing in writings:
        if writing.separator == writing.decimal and not quoted:
            continue
        pure, mixed = _patterns(rows, writing)
        if not mixed:
            continue
        columns, count = (pure or mixed).most_common(1)[0]
        score = (pure[columns], count, len(columns))
        if best is None or score > best[0]:
            best = score, writing, columns
    if best is None:
        raise CaptureError(
            "no columns of numbers",
            where=f"line {_last_line(text)}",
            found=shown(rows[-1]) if rows else "nothing",
            wanted="rows of time and volts",
        )
    _, writing, columns = best
    if writing.separator == "," and writing.decimal == "." and not quoted:
        _refuse_varying_commas(rows, writing, text)
    _refuse_other_writing(rows, writing, text)
    n_cells = Counter(len(writing.cells(row)) for row in rows if _numeric(row, writing)[0] == columns)
    return writing, columns, n_cells.most_common(1)[0][0]


def _patterns(rows: Sequence[str], writing: Writing) -> tuple[Counter[tuple[int, ...]], Counter[tuple[int, ...]]]:
    """How often which cells are numbers: in rows of nothing else, and in all rows."""
    pure: Counter[tuple[int, ...]] = Counter()
    mixed: Counter[tuple[int, ...]] = Counter()
    for row in rows:
        columns, alone = _numeric(row, writing)
        if columns:
            mixed[columns] += 1
            if alone:
                pure[columns] += 1
    return pure, mixed


def _numeric(row: str, writing: Writing) -> tuple[tuple[int, ...], bool]:
    """The cells that are numbers, and whether the others are blank."""
    cells = writing.cells(row)
    numbers = [writing.is_number(cell) for cell in cells]
    columns = tuple(c for c, number in enumerate(numbers) if number)
    return columns, all(number or writing.is_missing(cell) for number, cell in zip(numbers, cells, strict=True))


def _refuse_varying_commas(rows: Sequence[str], writing: Writing, text: bytes) -> None:
    """Commas between the cells and in the numbers: then the rows differ in their cells and no point is anywhere."""
    counts = Counter(len(writing.cells(row)) for row in rows)
    odd = len(rows) - counts.most_common(1)[0][1]
    if odd >= max(2, len(rows) // 4) and not any("." in row for row in rows):
        raise _undecided_comma(f"line {_last_line(text)}", rows[-1])


def _refuse_other_writing(rows: Sequence[str], writing: Writing, text: bytes) -> None:
    """A column of numbers in another writing, such as `0,5,` or `0.5 V`, is no text that may be left aside."""
    cells = [writing.cells(row) for row in rows]
    for column in range(min(map(len, cells))):
        if all(_nearly_a_number(row[column], writing) for row in cells):
            raise CaptureError(
                "a column of numbers that cannot be read", where=f"line {_last_line(text)}, column {column + 1}",
                found=shown(cells[-1][column]), wanted=f"numbers with a decimal {_MARKS[writing.decimal]} and nothing else",
                mend="export again, with the unit in the heading",
            )  # fmt: skip


def _nearly_a_number(cell: str, writing: Writing) -> bool:
    """Whether a cell that is no number was meant as one; a date was not."""
    match = _NEARLY_A_NUMBER.fullmatch(cell)
    if match is None or writing.is_number(cell) or _DATE.fullmatch(cell):
        return False
    return not match["unit"] or read_unit(match["unit"]) is not None


def _refuse_doubtful_commas(layout: Layout, *, named: bool) -> None:
    """Whole numbers between commas could be the two halves of numbers with a decimal comma."""
    writing = layout.body.writing
    if writing.separator != "," or writing.quoted or named or len(layout.columns) < 2:
        return
    if not any("." in cell for row in layout.sample_rows for cell in row):
        raise _undecided_comma(f"line {layout.body.first_line}", ",".join(layout.sample_rows[0]))


def _undecided_comma(where: str, row: str) -> CaptureError:
    return CaptureError(
        "the comma may separate the values or be their decimal mark",
        where=where,
        found=shown(row),
        wanted="decimal points, or another separator than the comma",
        mend="export with decimal points, or with semicolons between the columns",
    )


def _too_few(rows: Sequence[str], text: bytes, columns: tuple[int, ...]) -> CaptureError:
    last = _last_line(text)
    if len(columns) > 4 * FEWEST_ROWS:
        return CaptureError(
            "each line holds a whole record, and no time", where=f"line {last}", found=f"{len(columns)} values a line",
            wanted="columns of time and volts", mend="export one row a sample, with time",
        )  # fmt: skip
    return CaptureError(
        "too few rows of numbers for a waveform", where=f"line {last}", found=shown(rows[-1]),
        wanted=f"{FEWEST_ROWS} rows or more of the same columns",
    )  # fmt: skip


def _first_row(lines: Sequence[str], writing: Writing, columns: tuple[int, ...], *, complete: bool) -> int | None:
    """The line in which the rows of numbers begin: the first of a run; `None` where no run is long enough."""
    begin, run = None, 0
    above: list[tuple[int, int]] = []
    for number, line in enumerate(lines):
        if not line.strip(" \t,;"):
            continue
        if _is_row(line, writing, columns):
            begin = number if begin is None else begin
            run += 1
            if run >= FEWEST_ROWS:
                _refuse_rows_above(lines, above, writing, columns)
                return begin
            continue
        if begin is not None:
            above.append((begin, run))
        begin, run = None, 0
    return None


def _is_row(line: str, writing: Writing, columns: tuple[int, ...]) -> bool:
    cells = writing.cells(line)
    if len(cells) <= columns[-1]:
        return False
    row = [cells[c] for c in columns]
    return any(map(writing.is_number, row)) and all(writing.is_number(c) or writing.is_missing(c) for c in row)


def _refuse_rows_above(
    lines: Sequence[str], above: Sequence[tuple[int, int]], writing: Writing, columns: tuple[int, ...]
) -> None:
    """A few rows of the same numbers above other text are samples too, and must not be lost without a word."""
    for begin, run in above:
        if len(columns) < 2 or (run < 2 and any(line.strip() for line in lines[:begin])):
            continue
        text = next(
            n for n in range(begin, len(lines)) if lines[n].strip(" \t,;") and not _is_row(lines[n], writing, columns)
        )
        raise CaptureError(
            "text among the numbers", where=f"line {text + 1}", found=shown(lines[text]), wanted="a row of numbers",
            mend="remove the line, or export again",
        )  # fmt: skip


def _refuse_other_numbers_above(above: Sequence[str]) -> None:
    """Rows of numbers in another layout above these are another capture, no heading."""
    run = 0
    for number, line in enumerate(above, start=1):
        if not line.strip(" \t,;"):
            continue
        run = run + 1 if _ONLY_NUMBERS.fullmatch(line) and re.search(r"\d", line) else 0
        if run >= FEWEST_ROWS:
            raise CaptureError(
                "rows of numbers in two layouts", where=f"line {number}", found=shown(line),
                wanted="one capture in a file", mend="split the file where the second begins",
            )  # fmt: skip


def _filled(lines: Sequence[str], writing: Writing, count: int) -> list[str]:
    rows: list[str] = []
    for line in lines:
        if line.strip(" \t,;"):
            rows.append(line)
            if len(rows) == count:
                break
    return rows


def _with_shorter_channels(
    columns: tuple[int, ...], first_rows: Sequence[Sequence[str]], writing: Writing
) -> tuple[int, ...]:
    """Add the columns that end earlier than the others: numbers in every one of the first rows."""
    width = min(len(row) for row in first_rows)
    also = [c for c in range(width) if all(writing.is_number(row[c]) for row in first_rows)]
    return tuple(sorted({*columns, *also}))


def _settings(
    lines: Sequence[str], first: int, writing: Writing, columns: tuple[int, ...]
) -> Iterator[tuple[int, tuple[str, ...]]]:
    for number, line in enumerate(lines[:first], start=1):
        if len(line) > _LONGEST_HEADING:
            continue
        bare = _COMMENT.sub("", line, count=1)
        split = re.split(r"\s*[:=]\s+|\s*=\s*|\t|,", bare) if _COMMENT.match(line) else writing.cells(bare)
        if len(split) == 1:
            split = re.split(r"\s*[:=,;\t]\s*", bare, maxsplit=1)
        cells = tuple(cell.strip(' "') for cell in split if cell.strip(' "'))
        if cells:
            yield number, cells
    if columns[0] == 0 and len(columns) == columns[-1] + 1:
        return
    for number, line in enumerate(lines[first:], start=first + 1):
        if len(line) > _LONGEST_HEADING:
            continue
        cells = tuple(cell for c, cell in enumerate(writing.cells(line)) if cell and c not in columns)
        if cells:
            yield number, cells


@dataclass(frozen=True, slots=True, kw_only=True)
class _Headings:
    """What the rows just above the numbers say of the columns."""

    columns: tuple[Column, ...]
    start_s: float | None = None
    increment_s: float | None = None
    line: int | None = None
    n_cells: int = 0

    @classmethod
    def above(cls, lines: Sequence[str], writing: Writing, columns: tuple[int, ...]) -> _Headings:
        filled = [(number, line) for number, line in enumerate(lines, start=1) if line.strip(" \t,;")]
        nearest = [(n, _heading_cells(line, writing, columns)) for n, line in filled[-2:]][::-1]
        nothing = tuple(Column(cell=c) for c in columns)
        if not nearest or nearest[0][1] is None:
            return cls(columns=nothing)
        (line, row), upper = nearest[0], nearest[1][1] if len(nearest) > 1 else None
        assert row is not None
        if _is_unit_row(row, columns):
            return cls._of_two(row, upper, columns, line)
        if not _is_name_row(row, columns):
            return cls(columns=nothing)
        named = [split_unit(_at(row, c)) for c in columns]
        return cls(
            columns=tuple(Column(cell=c, name=name, unit=unit) for c, (name, unit) in zip(columns, named, strict=True)),
            line=line,
            n_cells=len(_stripped(row)),
        )

    @classmethod
    def _of_two(
        cls, units: Sequence[str], names: Sequence[str] | None, columns: tuple[int, ...], line: int
    ) -> _Headings:
        named = [_at(names, c) if names is not None else "" for c in columns]
        written = [read_unit(_at(units, c)) for c in columns]
        start_s, increment_s = _start_and_increment(units, names, columns)
        return cls(
            columns=tuple(
                Column(cell=c, name=name or (_at(units, c) if unit is None else ""), unit=unit)
                for c, name, unit in zip(columns, named, written, strict=True)
            ),
            start_s=start_s,
            increment_s=increment_s,
            line=line,
            n_cells=len(_stripped(units)) - 2 * (increment_s is not None),
        )


def _heading_cells(line: str, writing: Writing, columns: tuple[int, ...]) -> list[str] | None:
    """The cells of a heading, each at the place of its column, where the line can be split so."""
    if len(line) > _LONGEST_HEADING:
        return None
    bare = _COMMENT.sub("", line, count=1).strip("\n")
    if writing.separator != BLANKS and writing.separator in bare:
        return [cell.strip('"') for cell in writing.cells(bare)]
    for pattern in (r"\t", r"\s{2,}", r"[,;]", r"\s+"):
        cells = [cell.strip(' "') for cell in re.split(pattern, bare.strip())]
        if len(cells) == len(columns) and not (_COMMENT.match(line) and re.search(r"[:=]", bare)):
            placed = [""] * (columns[-1] + 1)
            for column, cell in zip(columns, cells, strict=True):
                placed[column] = cell
            return placed
    return None


def _is_index_word(text: str) -> bool:
    """Whether a heading says that a column counts samples."""
    return text.strip().casefold() in _INDEX_WORDS


def _is_unit_row(row: Sequence[str], columns: tuple[int, ...]) -> bool:
    cells = [_at(row, c) for c in columns if _at(row, c)]
    units = [read_unit(cell) for cell in cells]
    if not any(units) or "unit" in row[0].casefold():
        return False
    first_is_time = units[0] is not None and units[0].dimension in (Dimension.TIME, Dimension.FREQUENCY)
    return all(unit or _is_index_word(cell) for unit, cell in zip(units, cells, strict=True)) or (
        first_is_time and len(cells) == len(columns)
    )


def _is_name_row(row: Sequence[str], columns: tuple[int, ...]) -> bool:
    cells = [_at(row, c) for c in columns]
    filled = [cell for cell in cells if cell]
    return (
        2 * len(filled) > len(cells)
        and bool(cells[0])
        and not any(_is_plain_number(cell) for cell in filled)
        and "unit" not in row[0].casefold()
    )


def _start_and_increment(
    units: Sequence[str], names: Sequence[str] | None, columns: tuple[int, ...]
) -> tuple[float | None, float | None]:
    """Two numbers behind the units: start and increment, in the order their names say, else in this one."""
    numbers = {c: float(cell) for c, cell in enumerate(units) if c > columns[-1] and _is_plain_number(cell)}
    if len(numbers) != 2 or not all(map(math.isfinite, numbers.values())):
        return None, None
    first, second = numbers
    over_first = _at(names, first).casefold() if names is not None else ""
    if any(word in over_first for word in _INCREMENT_WORDS):
        first, second = second, first
    return (numbers[first], numbers[second]) if is_step(numbers[second]) else (None, None)


def _is_plain_number(cell: str) -> bool:
    return Writing().is_number(cell)


def _at(row: Sequence[str] | None, column: int) -> str:
    return row[column] if row is not None and column < len(row) else ""


def _stripped(row: Sequence[str]) -> list[str]:
    cells = list(row)
    while cells and not cells[-1]:
        cells.pop()
    return cells
