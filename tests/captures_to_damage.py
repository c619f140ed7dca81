"""Invented captures in the layouts that saved files come in, for tests that damage them.

Every sample stands in a line of its own; what stands above is heading and preamble. The numbers are a drive and the
output of a detector with one pulse, or a still trace.
"""

from __future__ import annotations

import re
from collections.abc import Callable, Iterator
from dataclasses import dataclass, replace
from itertools import repeat

import numpy as np
from numpy.typing import NDArray

FloatArray = NDArray[np.float64]
BLANKS = " "


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Signals:
    """What a capture holds: times, drive and output, shape (n,), and whether each row is away from the edges."""

    dt_s: float
    time_s: FloatArray
    drive_V: FloatArray
    output_V: FloatArray
    flat: NDArray[np.bool_]

    def rows(self) -> Iterator[tuple[int, float, float, float]]:
        return zip(
            range(self.time_s.size), self.time_s.tolist(), self.drive_V.tolist(), self.output_V.tolist(), strict=True
        )


@dataclass(frozen=True, slots=True, kw_only=True)
class Written:
    """The lines of a capture; rows of numbers begin at `first`. `separator` and `decimal` are those of the rows."""

    lines: tuple[str, ...]
    first: int
    separator: str
    decimal: str

    def text(self) -> str:
        return "\n".join(self.lines) + "\n"

    def with_lines(self, lines: list[str]) -> Written:
        return replace(self, lines=tuple(lines))

    def cells(self, line: int) -> list[str]:
        return self.lines[line].split(None if self.separator == BLANKS else self.separator)

    def joined(self, cells: list[str]) -> str:
        return ("  " if self.separator == BLANKS else self.separator).join(cells)

    def number_cells(self, line: int) -> list[int]:
        return [k for k, cell in enumerate(self.cells(line)) if re.fullmatch(r"\s*[+-]?\d[\d.,eE+-]*\s*", cell)]


@dataclass(frozen=True, slots=True, kw_only=True)
class Layout:
    """One layout: its heading and its rows. `stamped` says that every row has a time or a number of its own."""

    heading: Callable[[Signals], str]
    row: Callable[[int, float, float, float], str]
    separator: str = ","
    decimal: str = "."
    stamped: bool = True
    seconds: bool = True
    """Whether times stand in the rows, not numbers of samples."""
    still: bool = False
    settings: tuple[str, ...] = ()
    """Settings that stand before the first rows."""
    blank: str = ""
    """What stands there in the other rows."""

    def write(self, signals: Signals) -> Written:
        above = self.heading(signals).split("\n")[:-1]
        beside = [*self.settings, *repeat(self.blank, signals.time_s.size)]
        rows = [left + self.row(*values) for left, values in zip(beside, signals.rows(), strict=False)]
        if self.decimal == ",":
            rows = [row.replace(".", ",") for row in rows]
        return Written(lines=(*above, *rows), first=len(above), separator=self.separator, decimal=self.decimal)


def pulse(rng: np.random.Generator) -> Signals:
    """A pulse seen by a detector: an exponential edge, white noise, now and then codes of eight bits."""
    n = int(rng.integers(60, 401))
    dt = float(rng.choice([1e-9, 4e-9, 2e-8, 1e-6]))
    place = np.arange(n) - int(0.25 * n)
    width, tau = int(0.38 * n), float(rng.uniform(0.012, 0.03)) * n
    late = int(rng.integers(0, 4))
    high = float(rng.choice([0.4, 1.7, -0.6]))

    def charged(rows: NDArray[np.int64]) -> FloatArray:
        return np.asarray(1 - np.exp(-np.clip(rows - late, 0, None) / tau), dtype=np.float64)

    output = high * (charged(place) - charged(place - width)) + float(rng.choice([0.0, -0.004, 0.03]))
    output = output + rng.normal(0, 0.006 * abs(high), n)
    if rng.random() < 0.4:
        output = np.round(output / 0.01) * 0.01
    drive = np.where((place >= 0) & (place < width), 3.3, 0.02) + rng.normal(0, 0.01, n)
    settled = late + 8 * tau + 2
    flat = (place < -3) | ((place > settled) & (place < width - 3)) | (place > width + settled)
    flat[:2] = flat[-2:] = False
    return Signals(
        dt_s=dt,
        time_s=np.asarray(dt * place, dtype=np.float64),
        drive_V=np.round(drive, 4),
        output_V=np.round(output, 6),
        flat=flat,
    )


def still(rng: np.random.Generator) -> Signals:
    """A trace on which nothing happens but noise."""
    n = int(rng.integers(60, 401))
    output = float(rng.choice([2e-3, 5e-3, 0.05])) + rng.normal(0, 1e-3, n)
    flat = np.ones(n, dtype=np.bool_)
    return Signals(
        dt_s=1e-3,
        time_s=np.asarray(1e-3 * np.arange(n), dtype=np.float64),
        drive_V=np.zeros(n),
        output_V=np.round(output, 6),
        flat=flat,
    )


def threes(value: float) -> str:
    """Exponents in multiples of three and an explicit sign: `-880.000E-09`."""
    exponent = 0 if value == 0 else int(np.floor(np.log10(abs(value)) / 3)) * 3
    return f"{value / 10.0**exponent:+.10f}E{exponent:+03d}"


def three_digits(value: float) -> str:
    """An exponent of three digits and a blank before what has no sign: ` 1.25e-004`."""
    mantissa, exponent = f"{value:.12e}".split("e")
    return f"{' ' if value >= 0 else ''}{mantissa}e{exponent[0]}{int(exponent[1:]):03d}"


_BESIDE = (
    "Record Length,400", "Trigger Point,1.0e+02", ",", ",", "Source,IN2", "Vertical Units,V", "Vertical Scale,1.0e-01",
    "Vertical Offset,0.0e+00", "Horizontal Units,s", "Horizontal Scale,2.0e-07", "Pt Fmt,Y", "Yzero,0.0e+00",
    "Probe Atten,1.0e+01", "Model,invented", "Serial,000017", "Firmware,1.04",
)  # fmt: skip
_PREAMBLE = (
    "Model,invented\nFirmware Version,1.04\n\nWaveform Type,ANALOG,,,\nPoint Format,Y,,\nHorizontal Units,s\n"
    "Horizontal Scale,2E-07\nHorizontal Delay,0\n,,,\nVertical Units,V,,V\nVertical Scale,1,,0.1\nLabel,\n"
)
_OWN = (
    "# format = darkedge-capture 1\n# kind = {kind}\n# device = SP-2-03\n# element = 1\n# bias_V = {bias}\n"
    "# load_ohm = 1000.0\n# coupling = DC\n# device_kind = photodiode\n"
)


def _three(k: int, t: float, d: float, o: float) -> str:
    return f"{t:.12g},{d:.6g},{o:.6g}"


def _padded(t: float) -> str:
    return f"{t:.12f}" if t < 0 else f"0{t:.12f}"


def _nothing(_: Signals) -> str:
    return ""


LAYOUTS: dict[str, Layout] = {
    "settings beside": Layout(
        heading=_nothing, row=lambda k, t, d, o: f",, {_padded(t)},  {o:.6f},", settings=_BESIDE, blank=","
    ),
    "settings beside, heading by hand": Layout(
        heading=lambda _: ",,,time,volt,\n", row=lambda k, t, d, o: f",, {_padded(t)},  {o:.6f},", settings=_BESIDE,
        blank=",",
    ),
    "two blocks side by side": Layout(
        heading=_nothing, row=lambda k, t, d, o: f",,{threes(t)},{threes(d)},,,,,{threes(t)},{threes(o)}",
        settings=_BESIDE, blank=",",
    ),
    "preamble above": Layout(heading=lambda s: f"{_PREAMBLE}Sample Interval,{s.dt_s:g}\n\nTIME,CH1,CH2\n", row=_three),
    "minimum and maximum": Layout(
        heading=lambda _: f"{_PREAMBLE}TIME,CH1,CH1 Peak Detect,CH2,CH2 Peak Detect\n",
        row=lambda k, t, d, o: f"{t:.12g},{d:.6g},{d + 0.02:.6g},{o:.6g},{o + 0.003:.6g}",
    ),
    "names only": Layout(heading=lambda _: "TIME,CH2\n", row=lambda k, t, d, o: f"{t:.12g},{o:.6g}"),
    "rounded stamps": Layout(
        heading=lambda s: f"Sample Interval,{s.dt_s:g}\nRecord Length,400\n\nTIME,CH1\n",
        row=lambda k, t, d, o: f"{t:.8f},{o:.6g}",
    ),
    "numbers over units": Layout(
        heading=lambda _: "x-axis,1,3,F1\nsecond,Volt,Volt,Volt\n",
        row=lambda k, t, d, o: f"{threes(t)},{threes(d)},{threes(o)},{threes(d - o)}",
    ),
    "three digits of exponent": Layout(
        heading=lambda _: "x-axis,3\nsecond,Volt\n",
        row=lambda k, t, d, o: f"{three_digits(t).strip()},{three_digits(o)}",
    ),
    "a current as drive": Layout(heading=lambda _: "x-axis,1,2\nsecond,Ampere,Volt\n", row=_three),
    "start and increment": Layout(
        heading=lambda s: f"X,CH1,CH2,Start,Increment,\nSequence,Volt,Volt,{s.time_s[0]:.6e},{s.dt_s:.6e}\n",
        row=lambda k, t, d, o: f"{k},{d:.6g},{o:.6g},", seconds=False,
    ),
    "commas behind the headings": Layout(
        heading=lambda _: "Time,X(CH1),\nSecond,Volt,\n", row=lambda k, t, d, o: f"{t:.12g},{o:.6g}"
    ),
    "units in words": Layout(
        heading=lambda _: "in s,C1 in V,C2 in V\n", row=lambda k, t, d, o: f"{t:.9E},{d:.5E},{o:.5E}"
    ),
    "pairs under a marker": Layout(
        heading=lambda _: "Memory Length,400,\nVertical Scale,0.1,\nTrigger Level,0.2,\nWaveform Data,\n",
        row=lambda k, t, d, o: f"{t:.9e},{o:.6e},",
    ),
    "volts under an interval": Layout(
        heading=lambda s: f"Memory Length,400,\nSampling Period,{s.dt_s:e},\nWaveform Data,\n",
        row=lambda k, t, d, o: f"{o:.6e},", stamped=False, seconds=False,
    ),
    "comment lines": Layout(
        heading=lambda s: "#Device: invented box\n#Date Time: 2026-03-03 09:14\n"
        f"#Sample rate: {1 / s.dt_s:.0f}Hz\n\nTime (s),Channel 1 (V),Channel 2 (V)\n",
        row=lambda k, t, d, o: f"{t:.17g},{d:.17g},{o:.17g}",
    ),
    "pairs in tabs": Layout(
        heading=lambda s: f"Sample interval\t{s.dt_s:g} s\nTime - Plot 0\tAmplitude - Plot 0\tTime - Plot 1\t"
        "Amplitude - Plot 1\t\n",
        row=lambda k, t, d, o: f"{k}\t{d:.6f}\t{k}\t{o:.6f}\t", separator="\t", seconds=False,
    ),
    "tabs": Layout(heading=lambda _: "t   V\n", row=lambda k, t, d, o: f"{t:.9f}\t{o:.6f}", separator="\t"),
    "aligned": Layout(
        heading=_nothing, row=lambda k, t, d, o: f"  {t:.9e}   {d:10.6f}  {o:10.6f}", separator=BLANKS
    ),
    "nothing above": Layout(heading=_nothing, row=_three),
    "units in the names": Layout(
        heading=lambda _: "t/us,U1/mV,U2/mV\n",
        row=lambda k, t, d, o: f"{t * 1e6:.12g},{d * 1e3:.12g},{o * 1e3:.12g}",
    ),
    "other language": Layout(heading=lambda _: "tiempo,tension\n", row=lambda k, t, d, o: f"{t:.12g},{o:.12g}"),
    "decimal commas": Layout(
        heading=lambda _: "03.03.2026 09:14:02;Prüfling 3\nZeit [µs];Ansteuerung [V];Prüfling [mV]\n",
        row=lambda k, t, d, o: f"{t * 1e6:.6f};{d:.6f};{o * 1e3:.6f}", separator=";", decimal=",",
    ),
    "decimal commas and empty columns": Layout(
        heading=lambda _: "Window;1;;;;;;\nTrace;1;;;;;;\n", row=lambda k, t, d, o: f"{t:.9f};{o:.6f};;;;;;",
        separator=";", decimal=",",
    ),
    "own": Layout(heading=lambda _: _OWN.format(kind="pulse", bias="12.0") + "time_s,drive_V,output_V\n", row=_three),
    "own, dark": Layout(
        heading=lambda _: _OWN.format(kind="dark", bias="12.0") + "time_s,output_V\n",
        row=lambda k, t, d, o: f"{t:.12g},{o:.6g}", still=True,
    ),
    "comment lines, dark": Layout(
        heading=lambda _: "# kind = dark\n# bias_V = 12\n# load_ohm = 1000\n# device = SP-2-03\nTime (s),CH2 (V)\n",
        row=lambda k, t, d, o: f"{t:.9e},{o:.6e}", still=True,
    ),
}  # fmt: skip
