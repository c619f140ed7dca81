"""The numbers of a text file: many at a time by pyarrow, one line at a time where a fault must be found.

The slow way is the definition, the fast way its shortcut: where pyarrow takes a body, both give the same.
"""

from __future__ import annotations

import csv
import re
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
import pyarrow as pa
import pyarrow.csv as pacsv

from darkedge.analysis.captures import FloatArray
from darkedge.analysis.errors import CaptureError

BLANKS = " "
"""Separator of columns that are aligned with runs of blanks."""

_NUMBER = re.compile(r"[+-]?(?:\d+\.?\d*|\.\d+)(?:[eE][+-]?\d+)?", re.ASCII)
_NUMBER_WITH_COMMA = re.compile(r"[+-]?(?:\d+(?:,\d+)?|,\d+)(?:[eE][+-]?\d+)?", re.ASCII)
_BARE_COMMA = re.compile(rb",(?!\d)")
_NO_NUMBER = re.compile(r"[+-]?(?:nan|1\.#(?:qnan|ind))", re.IGNORECASE)
_INFINITE = re.compile(r"[+-]?(?:inf|infinity|1\.#inf)", re.IGNORECASE)
_QUOTE = '"'
_OUT_OF_RANGE = 9.9e37
"""What instruments write for infinity, and larger (SCPI-1999, volume 1, 7.2.1.4)."""
_SHORTEST_STEP_S, _LONGEST_STEP_S = 1e-18, 1e9


@dataclass(frozen=True, slots=True, kw_only=True)
class Writing:
    """How the numbers are written: the separator of the cells and the decimal mark."""

    separator: str = ","
    decimal: str = "."
    quoted: bool = False

    def cells(self, line: str) -> list[str]:
        """The cells of a line, without blanks around them."""
        if self.separator == BLANKS:
            return line.split()
        if self.quoted and _QUOTE in line:
            return _quoted_cells(line, self.separator)
        return [cell.strip() for cell in line.split(self.separator)]

    def is_number(self, cell: str) -> bool:
        """Whether a cell is a finite number in this writing."""
        return (_NUMBER if self.decimal == "." else _NUMBER_WITH_COMMA).fullmatch(cell) is not None

    def is_missing(self, cell: str) -> bool:
        """Whether a cell says that there is no sample: blank or NaN."""
        return not cell or _NO_NUMBER.fullmatch(cell) is not None

    def number(self, cell: str) -> float:
        """The number in a cell that `is_number`."""
        return float(cell.replace(",", ".") if self.decimal == "," else cell)


@dataclass(frozen=True, slots=True, kw_only=True)
class Body:
    """Where the numbers of a text stand.

    `text` is the whole file, `start` the byte at which the first row of numbers begins, `first_line` that row's line
    number (from 1), `columns` the cells that hold numbers (from 0), `n_cells` how many cells most rows have.
    """

    text: bytes
    start: int
    first_line: int
    writing: Writing
    columns: tuple[int, ...]
    n_cells: int


def is_step(step_s: float) -> bool:
    """Whether a number of seconds can be the step of a record: what is stated may be anything."""
    return _SHORTEST_STEP_S <= step_s <= _LONGEST_STEP_S


def _quoted_cells(line: str, separator: str) -> list[str]:
    try:
        return [cell.strip() for cell in next(csv.reader([line], delimiter=separator, skipinitialspace=True))]
    except csv.Error:  # a quote that is never closed, in a line longer than any cell may be
        return [cell.strip() for cell in line.split(separator)]


def read_numbers(body: Body) -> FloatArray:
    """Read all rows of the body; shape (rows, columns), NaN where a cell is blank or NaN.

    Raises
    ------
    CaptureError
        A row whose cells are no numbers, or too few, or too many; an infinite value. The message says the line.
    """
    fast = read_at_once(body)
    return fast if fast is not None else read_by_line(body)


def line_of_row(body: Body, row: int) -> int:
    """The line number (from 1) of a row of numbers; blank lines are no rows."""
    seen = -1
    for offset, line in enumerate(body.text[body.start :].split(b"\n")):
        seen += not _is_blank(line.decode("utf-8"), body.writing)
        if seen == row:
            return body.first_line + offset
    return body.first_line


def read_at_once(body: Body) -> FloatArray | None:
    """All rows by pyarrow, as `read_by_line` gives them; `None` where pyarrow does not take them as they are."""
    writing = body.writing
    # pyarrow reads `0,` as 0 where the comma is the decimal mark; here it is a number that lost its digits.
    if writing.quoted or (writing.decimal == "," and _BARE_COMMA.search(body.text, body.start)):
        return None
    data = memoryview(body.text)[body.start :]
    separator = writing.separator
    if separator == BLANKS:
        lines = body.text[body.start :].split(b"\n")
        data = memoryview(b"\n".join([b"\t".join(line.split()) for line in lines]))
        separator = "\t"
    names = [str(cell) for cell in range(body.n_cells)]
    wanted = [names[column] for column in body.columns]
    try:
        table = pacsv.read_csv(
            pa.BufferReader(pa.py_buffer(data)),
            read_options=pacsv.ReadOptions(use_threads=False, column_names=names),
            parse_options=pacsv.ParseOptions(delimiter=separator, quote_char=False),
            convert_options=pacsv.ConvertOptions(
                column_types=dict.fromkeys(names, pa.string()) | dict.fromkeys(wanted, pa.float64()),
                include_columns=wanted,
                null_values=[],
                decimal_point=writing.decimal,
            ),
        )
    except pa.ArrowInvalid:
        return None
    values = np.column_stack([table.column(name).to_numpy() for name in wanted])
    return values if values.size and bool(np.all(np.abs(values) < _OUT_OF_RANGE)) else None


def read_by_line(body: Body) -> FloatArray:
    """All rows one by one; see `read_numbers`."""
    rows: list[list[float]] = []
    lines = body.text[body.start :].decode("utf-8").split("\n")
    last = len(lines) - 1
    for offset, line in enumerate(lines):
        if _is_blank(line, body.writing):
            continue
        rows.append(_row(body, line, body.first_line + offset, unended=offset == last))
    return np.array(rows, dtype=np.float64).reshape(len(rows), len(body.columns))


def _is_blank(line: str, writing: Writing) -> bool:
    return not line.strip(f" \t\x1a{'' if writing.separator == BLANKS else writing.separator}")


def _row(body: Body, line: str, number: int, *, unended: bool) -> list[float]:
    writing = body.writing
    cells = writing.cells(line)
    needed = body.columns[-1] + 1
    filled = sum(1 for cell in cells if cell)
    if len(cells) < needed:
        if unended:
            raise _cut(number, line)
        raise _count(number, filled, len(body.columns), line)
    if any(cells[body.n_cells :]):
        raise _count(number, filled, len(body.columns), line)
    values = []
    for column in body.columns:
        cell = cells[column]
        if writing.is_number(cell):
            values.append(writing.number(cell))
            if abs(values[-1]) < _OUT_OF_RANGE:
                continue
            raise _infinite(number, cell)
        if writing.is_missing(cell):
            if unended and not cell:
                raise _cut(number, line)
            values.append(np.nan)
        elif _INFINITE.fullmatch(cell):
            raise _infinite(number, cell)
        elif unended:
            raise _cut(number, line)
        else:
            raise _no_number(number, cell, writing)
    return values


def _cut(number: int, line: str) -> CaptureError:
    return CaptureError(
        "the file is cut off in its last line",
        where=f"line {number}",
        found=shown(line),
        mend="export or copy it again",
    )


def _count(number: int, found: int, wanted: int, line: str) -> CaptureError:
    return CaptureError(
        "the row has another number of values than the others",
        where=f"line {number}",
        found=f"{found} in {shown(line)}",
        wanted=str(wanted),
        mend="export the file again",
    )


def _infinite(number: int, cell: str) -> CaptureError:
    return CaptureError(
        "a value is infinite: the signal left the range",
        where=f"line {number}",
        found=cell,
        wanted="finite numbers",
        mend="choose a wider range and take the capture again",
    )


def _no_number(number: int, cell: str, writing: Writing) -> CaptureError:
    other = "," if writing.decimal == "." else "."
    if Writing(decimal=other).is_number(cell):
        return CaptureError(
            "two decimal marks in one file",
            where=f"line {number}",
            found=cell,
            wanted=f"numbers with a decimal {'point' if writing.decimal == '.' else 'comma'}, as in the other rows",
        )
    return CaptureError(
        "text among the numbers", where=f"line {number}", found=shown(cell), wanted="a number", mend="remove the line"
    )


def shown(text: str, longest: int = 60) -> str:
    """Text for a message: quoted, and cut where it is long."""
    cut = text.strip()
    return repr(cut if len(cut) <= longest else f"{cut[:longest]}...")


def brief(text: str, longest: int = 400) -> str:
    """What an error quotes from a file, cut where the file has far more than anybody reads."""
    return text if len(text) <= longest else f"{text[:longest]}..."


def text_of(cells: Sequence[str]) -> str:
    """Cells as one line, for a message."""
    return ", ".join(cell for cell in cells if cell)
