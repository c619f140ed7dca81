"""The time axis: even, rounded or uneven, from the stamps alone."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from darkedge.analysis.captures import FloatArray, Record, TimedRecord, Waveform
from darkedge.analysis.errors import CaptureError

EVEN_RATIO = 0.01
"""Steps within 1 % of their median are even."""

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


def time_axis(stamps_s: FloatArray, *, quantum_s: float = 0.0, increments_s: Sequence[float] = ()) -> TimeAxis:
    """Judge the stamps of a record.

    Parameters
    ----------
    stamps_s : array, shape (n,), n >= 2, finite
        Times as they stand in the file.
    quantum_s : float
        The coarsest last digit of the stamps, 0 where it is not known.
    increments_s : sequence of float
        Steps that the file may be stating somewhere. One is used only where the stamps were rounded, and only when
        every stamp lies within its rounding of the grid it makes.

    Raises
    ------
    TimeAxisError
        The time falls, or stands still and no stated step explains it.
    """
    steps = np.diff(stamps_s)
    if bool(np.any(steps < 0)):
        raise _fault("the time goes back", stamps_s, int(np.flatnonzero(steps < 0)[0]) + 1)
    middle = float(np.median(steps))
    if middle > 0 and bool(np.all(np.abs(steps - middle) <= EVEN_RATIO * middle)):
        t0_s, dt_s = float(stamps_s[0]), even_step(stamps_s)
        return TimeAxis(t0_s=t0_s, dt_s=dt_s)
    grid = _stated_grid(stamps_s, quantum_s, increments_s)
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


def _stated_grid(stamps_s: FloatArray, quantum_s: float, increments_s: Sequence[float]) -> TimeAxis | None:
    if quantum_s <= 0:
        return None
    index = np.arange(stamps_s.size, dtype=np.float64)
    fitting: list[tuple[float, float]] = []
    for step in increments_s:
        if step <= 0:
            continue
        offsets = stamps_s - index * step
        spread = float(np.max(offsets) - np.min(offsets))
        if spread <= 1.01 * quantum_s:
            fitting.append((step, 0.5 * float(np.max(offsets) + np.min(offsets))))
    if not fitting or any(abs(step / fitting[0][0] - 1) > _SAME_RATIO for step, _ in fitting):
        return None
    step, t0_s = fitting[0]
    return TimeAxis(t0_s=t0_s, dt_s=step)


def _fault(what: str, stamps_s: FloatArray, row: int) -> TimeAxisError:
    fault = TimeAxisError(what, found=f"{stamps_s[row]:.9g} s after {stamps_s[row - 1]:.9g} s")
    fault.row = row
    return fault
