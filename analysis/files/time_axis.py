"""The time axis: even, rounded or uneven, from the stamps alone."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from darkedge.analysis.captures import FloatArray, Record, TimedRecord, Waveform
from darkedge.analysis.errors import CaptureError

EVEN_RATIO = 0.01
"""Steps within 1 % of their median are even."""

_SHORTEST_STEP_S = 1e-24
"""Below any step of a scope or a simulator; what is divided by it stays a number."""

_LAST_BITS = 64
_SAME_RATIO = 1e-6


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class TimeAxis:
    """The times of the rows: `t0_s` and `dt_s` where they are even, else `stamps_s`, which rise strictly."""

    t0_s: float = 0.0
    dt_s: float = 0.0
    stamps_s: FloatArray | None = None

    def record(self, signal_V: FloatArray, *, first_row: int = 0) -> Record:
        """The record of a channel that begins in row `first_row`, in volts."""
        if self.stamps_s is None:
            return Waveform(signal_V=signal_V, t0_s=self.t0_s + first_row * self.dt_s, dt_s=self.dt_s)
        return TimedRecord(signal_V=signal_V, time_s=self.stamps_s[first_row : first_row + signal_V.size])


class TimeAxisError(CaptureError):
    """Stamps that are no time axis; `row` is where it shows."""

    row: int = 0


def time_axis(
    stamps_s: FloatArray, *, quanta_s: FloatArray | None = None, increments_s: Sequence[float] = ()
) -> TimeAxis:
    """Judge the stamps of a record.

    Parameters
    ----------
    stamps_s : array, shape (n,), n >= 2, finite
        Times as they stand in the file.
    quanta_s : array, shape (n,), optional
        What the last digit of each stamp is worth.
    increments_s : sequence of float
        Steps that the file may be stating somewhere. One is used only where the stamps are uneven, and only where
        rounding explains every one of them: each stamp lies within half its last digit of the grid.

    Raises
    ------
    TimeAxisError
        The time falls, or rises by less than any record's, or stands still and no stated step explains it.
    """
    steps = np.diff(stamps_s)
    least, most = float(np.min(steps)), float(np.max(steps))
    if least >= _SHORTEST_STEP_S and most - least <= EVEN_RATIO * least:  # then all are that near to their median, too
        return TimeAxis(t0_s=float(stamps_s[0]), dt_s=even_step(stamps_s))
    if least < 0:
        raise _fault("the time goes back", stamps_s, int(np.flatnonzero(steps < 0)[0]) + 1)
    short = (steps > 0) & (steps < _SHORTEST_STEP_S)
    if bool(np.any(short)):
        raise _fault("the time steps are shorter than any record's", stamps_s, int(np.flatnonzero(short)[0]) + 1)
    middle = float(np.median(steps))
    if middle > 0 and bool(np.all(np.abs(steps - middle) <= EVEN_RATIO * middle)):
        t0_s, dt_s = float(stamps_s[0]), even_step(stamps_s)
        return TimeAxis(t0_s=t0_s, dt_s=dt_s)
    grid = None if quanta_s is None else _stated_grid(stamps_s, quanta_s, increments_s)
    if grid is not None:
        return grid
    if bool(np.any(steps == 0)):
        raise _fault("the time stands still", stamps_s, int(np.flatnonzero(steps == 0)[0]) + 1)
    return TimeAxis(stamps_s=stamps_s)


def even_step(stamps_s: FloatArray) -> float:
    """Step of even stamps, without the noise of their last digits.

    Of stamps that are printed short, the step is the shortest decimal that gives them all within a few last bits. Of
    stamps that are printed in full it is the one that gives them to the last bit. Where there is none, it is the span
    over the number of steps.
    """
    n = stamps_s.size - 1
    mean = float(stamps_s[-1] - stamps_s[0]) / n
    decimals = [float(f"{mean:.{digits}g}") for digits in range(1, 18)]
    if _printed_in_full(stamps_s):
        # The last stamp is rounded too, by many of the step's last bits where the record starts far from zero.
        last_bit = float(np.spacing(mean))
        for step in [*decimals, *(mean + bits * last_bit for bits in range(-_LAST_BITS, _LAST_BITS + 1))]:
            if _gives(step, stamps_s, 0.0):
                return step
    rounding = 4 * float(np.spacing(np.max(np.abs(stamps_s))))
    for step in decimals:
        if _gives(step, stamps_s, rounding):
            return step
    return mean


def _printed_in_full(stamps_s: FloatArray) -> bool:
    """Whether stamps have more than the 15 digits that a decimal keeps in a float: told from a few of them."""
    few = stamps_s[np.linspace(0, stamps_s.size - 1, 16).astype(np.intp)].tolist()
    return any(float(f"{stamp:.15g}") != stamp for stamp in few)


def _gives(step_s: float, stamps_s: FloatArray, tolerance_s: float) -> bool:
    n, t0_s = stamps_s.size - 1, stamps_s[0]
    # The last stamp first: it decides nearly always, and costs nothing.
    if not abs(t0_s + step_s * n - stamps_s[-1]) <= tolerance_s:
        return False
    grid = t0_s + step_s * np.arange(n + 1, dtype=np.float64)
    return bool(np.all(np.abs(grid - stamps_s) <= tolerance_s))


def _stated_grid(stamps_s: FloatArray, quanta_s: FloatArray, increments_s: Sequence[float]) -> TimeAxis | None:
    """The grid of a stated step that rounds to the stamps; `None` where there is none, or more than one."""
    grids = [grid for step in increments_s if (grid := _rounded_grid(stamps_s, quanta_s, step)) is not None]
    if not grids or any(abs(grid.dt_s / grids[0].dt_s - 1) > _SAME_RATIO for grid in grids):
        return None
    return grids[0]


def _rounded_grid(stamps_s: FloatArray, quanta_s: FloatArray, step_s: float) -> TimeAxis | None:
    if not step_s > 0:
        return None
    # Rounding moves a step by less than the last digit: a row that is lost or doubled is no rounding.
    slack = np.maximum(quanta_s[1:], quanta_s[:-1]) * (1 - _SAME_RATIO)
    if bool(np.any(np.abs(np.diff(stamps_s) - step_s) >= slack)):
        return None
    starts = stamps_s - step_s * np.arange(stamps_s.size, dtype=np.float64)
    half = (0.5 + _SAME_RATIO) * quanta_s
    earliest, latest = float(np.max(starts - half)), float(np.min(starts + half))
    return TimeAxis(t0_s=0.5 * (earliest + latest), dt_s=step_s) if earliest <= latest else None


def _fault(what: str, stamps_s: FloatArray, row: int) -> TimeAxisError:
    fault = TimeAxisError(what, found=f"{stamps_s[row]:.9g} s after {stamps_s[row - 1]:.9g} s")
    fault.row = row
    return fault
