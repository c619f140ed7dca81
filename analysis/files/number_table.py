"""The numbers of another program's file, with what is known of their columns."""

from __future__ import annotations

import re
from dataclasses import dataclass

import numpy as np

from darkedge.analysis.captures import FloatArray
from darkedge.analysis.errors import CaptureError
from darkedge.analysis.files.layout import Layout
from darkedge.analysis.files.numbers import line_of_row
from darkedge.analysis.files.stated import axis_units
from darkedge.analysis.files.units_written import Dimension, WrittenUnit

A_WAVEFORM = "a waveform: volts against time in seconds"
"""What every refusal here wanted."""


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class NumberTable:
    """The numbers of a file, shape (rows, columns), NaN where there is none, and what is known of the columns."""

    layout: Layout
    values: FloatArray

    def line(self, row: int) -> str:
        """Where a row stands, for a message."""
        return f"line {line_of_row(self.layout.body, row)}"

    @property
    def heading(self) -> str:
        """Where the headings stand, for a message; the first row where there are none."""
        return f"line {self.layout.heading_line or self.layout.body.first_line}"

    def axis_unit(self, dimension: Dimension) -> WrittenUnit | None:
        """The unit that the settings give to an axis, where they give one only."""
        units = {unit for _, unit in axis_units(self.layout.settings) if unit.dimension is dimension}
        return units.pop() if len(units) == 1 else None

    def called(self, place: int) -> str:
        """What to call a column in a message: its number in the file, from 1, and its name."""
        name = self.layout.columns[place].name
        return f"column {self.layout.columns[place].cell + 1}{f' ({name})' if name else ''}"


def finite_part(table: NumberTable, column: FloatArray, place: int) -> tuple[int, int]:
    """First row and number of rows from the first value to the last of a column.

    Raises
    ------
    CaptureError
        Fewer than two values, or one missing between others.
    """
    valid = np.flatnonzero(np.isfinite(column))
    if valid.size < 2:
        raise CaptureError("fewer than two samples", where=table.called(place), wanted=A_WAVEFORM)
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


def digits_behind(number: str) -> tuple[int, int]:
    """How many digits stand behind the decimal mark and in the exponent."""
    mantissa, _, exponent = number.casefold().partition("e")
    decimals = re.search(r"[.,](\d*)$", mantissa)
    return len(decimals[1]) if decimals else 0, len(exponent.lstrip("+-"))
