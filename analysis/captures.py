"""Captures as types: what the scope returned for one point, with its conditions."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field, fields, replace
from enum import StrEnum

import numpy as np
from numpy.typing import NDArray

from darkedge.analysis.errors import CaptureError

FloatArray = NDArray[np.float64]


class Edge(StrEnum):
    """Which way a signal moves."""

    RISING = "rising"
    FALLING = "falling"


class Kind(StrEnum):
    """What a capture was taken for."""

    PULSE = "pulse"
    DARK = "dark"
    OFFSET = "offset"
    REFERENCE = "reference"


class DeviceKind(StrEnum):
    """Kinds of device that darkedge knows."""

    PHOTODIODE = "photodiode"
    PIN = "pin"
    TRANSISTOR_SWITCH = "transistor_switch"
    OPTOCOUPLER = "optocoupler"


class OutputConnection(StrEnum):
    """Where the output is seen."""

    LOAD_TO_GROUND = "load_to_ground"
    PULL_UP = "pull_up"
    EMITTER_RESISTOR = "emitter_resistor"


class Reference(StrEnum):
    """What stands in the drive channel."""

    VOLTAGE = "voltage"
    CURRENT = "current"
    LIGHT = "light"


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Waveform:
    """One channel of evenly spaced samples.

    `signal_V` has shape (n,), n >= 2, and is a finite read-only copy; `dt_s` > 0; `t0_s` is the time of
    the first sample relative to the trigger.
    """

    signal_V: FloatArray
    dt_s: float
    t0_s: float = 0.0

    def __post_init__(self) -> None:
        signal = _frozen(self.signal_V, "signal")
        if not (np.isfinite(self.dt_s) and self.dt_s > 0):
            raise CaptureError("the time step is not positive", found=f"{self.dt_s} s")
        object.__setattr__(self, "signal_V", signal)

    @property
    def time_s(self) -> FloatArray:
        """Times of the samples, shape (n,); derived, never stored twice."""
        return self.t0_s + self.dt_s * np.arange(self.signal_V.size, dtype=np.float64)


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class TimedRecord:
    """One channel measured on its own times, which rise strictly but not evenly.

    `signal_V` and `time_s` have shape (n,), n >= 2, finite, read-only copies.
    """

    signal_V: FloatArray
    time_s: FloatArray

    def __post_init__(self) -> None:
        signal, time = _frozen(self.signal_V, "signal"), _frozen(self.time_s, "time")
        if signal.size != time.size:
            raise CaptureError("signal and time differ in length", found=f"{signal.size} and {time.size} samples")
        if not bool(np.all(np.diff(time) > 0)):
            raise CaptureError("the time does not rise from sample to sample")
        object.__setattr__(self, "signal_V", signal)
        object.__setattr__(self, "time_s", time)

    @property
    def dt_s(self) -> float:
        """Median time step."""
        return float(np.median(np.diff(self.time_s)))

    @property
    def t0_s(self) -> float:
        """Time of the first sample."""
        return float(self.time_s[0])


Record = Waveform | TimedRecord


def _frozen(values: FloatArray, name: str) -> FloatArray:
    array = np.array(values, dtype=np.float64, copy=True)
    if array.ndim != 1 or array.size < 2:
        raise CaptureError(f"the {name} is not a list of at least two samples", found=f"shape {array.shape}")
    if not bool(np.all(np.isfinite(array))):
        bad = int(np.flatnonzero(~np.isfinite(array))[0])
        raise CaptureError(f"the {name} is not finite", found=f"{array[bad]} at sample {bad}")
    array.setflags(write=False)
    return array


@dataclass(frozen=True, slots=True, kw_only=True)
class Conditions:
    """What is known of how a capture was taken; `None` is not known, and is never guessed.

    The fields are the names of the capture header, in the units they end in.
    """

    run: str | None = None
    point: str | None = None
    kind: Kind | None = None
    device: str | None = None
    lot: str | None = None
    element: int | None = None
    driven_element: int | None = None
    reference: Reference | None = None
    bias_V: float | None = None
    bias_read_V: float | None = None
    load_ohm: float | None = None
    emitter_current_A: float | None = None
    pulse_width_s: float | None = None
    drive_period_s: float | None = None
    temperature_degC: float | None = None
    averages: int | None = None
    coupling: str | None = None
    input_ohm: float | None = None
    bandwidth_limit_Hz: float | None = None
    probe_ratio: float | None = None
    volts_per_code: float | None = None
    taken_utc: str | None = None
    darkedge: str | None = None
    device_kind: DeviceKind | None = None
    output_connection: OutputConnection | None = None

    def merged(self, other: Conditions, *, here: str, there: str) -> Conditions:
        """Join two statements of the conditions.

        Raises
        ------
        CaptureError
            The same condition is given twice and differs; the message names both places, `here` and `there`.
        """
        news: dict[str, object] = {}
        for item in fields(self):
            mine, theirs = getattr(self, item.name), getattr(other, item.name)
            if theirs is None:
                continue
            if mine is not None and not _same(mine, theirs):
                raise CaptureError(
                    f"{item.name} is given twice and differs",
                    found=f"{mine} in {here} and {theirs} in {there}",
                    mend="correct one of them",
                )
            if mine is None:
                news[item.name] = theirs
        return replace(self, **news)  # type: ignore[arg-type]

    def known(self) -> Mapping[str, object]:
        """Return the conditions that are known, by name."""
        return {f.name: getattr(self, f.name) for f in fields(self) if getattr(self, f.name) is not None}


def _same(mine: object, theirs: object) -> bool:
    if isinstance(mine, float | int) and isinstance(theirs, float | int):
        return bool(np.isclose(float(mine), float(theirs), rtol=1e-6, atol=0.0))
    return mine == theirs


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Capture:
    """What the scope returned for one point.

    `name` is the path relative to the argument it was found under, with `/`. `outputs` maps the number
    of an element (1, 2 ...) to its record; `drive` is the reference channel, `None` where there is none.
    `remarks` are flags that the reader could tell from the file alone (codes of the flag registry); `read_as` says in words how a file
    of another program was understood.
    """

    name: str
    outputs: Mapping[int, Record]
    drive: Record | None = None
    conditions: Conditions = field(default_factory=Conditions)
    remarks: tuple[str, ...] = ()
    read_as: tuple[str, ...] = ()

    def __post_init__(self) -> None:
        if not self.outputs:
            raise CaptureError("the capture has no output channel", where=self.name)
        if any(element < 1 for element in self.outputs):
            raise CaptureError("elements are numbered from 1", where=self.name, found=str(min(self.outputs)))
