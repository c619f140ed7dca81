"""Circuits for the circuit simulator ngspice, what it said of them, and the waveforms digitised as a scope would.

    python tests/spice_bench.py tests/spice

runs every circuit anew and stores the answers in tests/spice/answers.npz. The netlists stand beside it, one a circuit.
"""

from __future__ import annotations

import shutil
import subprocess
import sys
import tempfile
from dataclasses import dataclass
from pathlib import Path

import numpy as np

FOLDER = Path(__file__).with_name("spice")
ANSWERS = FOLDER / "answers.npz"
STRAY_F = 14e-12


@dataclass(frozen=True)
class Card:
    """A junction's model card, in the names that SPICE gives them."""

    name: str
    cjo_F: float
    vj_V: float
    m: float

    def capacitance_F(self, bias_V: float) -> float:
        return self.cjo_F * (1 + bias_V / self.vj_V) ** -self.m + STRAY_F


@dataclass(frozen=True)
class Diode:
    """One junction circuit: a card at a bias behind a load, lit to a tenth of its bias at the most."""

    card: Card
    bias_V: float
    load_ohm: float

    @property
    def name(self) -> str:
        return f"{self.card.name}_{self.bias_V:g}V_{self.load_ohm:g}ohm"

    @property
    def photo_A(self) -> float:
        return min(20e-6, 0.1 * self.bias_V / self.load_ohm)

    @property
    def width_s(self) -> float:
        """Twelve time constants: the top settles to 1e-5."""
        return float(f"{12 * self.load_ohm * self.card.capacitance_F(0.85 * self.bias_V):.2g}")

    @property
    def netlist(self) -> str:
        width, period = self.width_s, 4 * self.width_s
        return "\n".join(
            [
                f"* photodiode {self.name}: light as a current from cathode to anode",
                f"Vbias rail 0 DC {self.bias_V:g}",
                "Dpd out rail pd",
                f"Iph rail out PULSE(0 {self.photo_A:g} {0.2 * width:g} {width / 1e5:g} {width / 1e5:g} {width:g} {period:g})",
                f"Rload out 0 {self.load_ohm:g}",
                f"Cstray out 0 {STRAY_F:g}",
                f".model pd D(IS=1e-16 CJO={self.card.cjo_F:g} VJ={self.card.vj_V:g} M={self.card.m:g} TT=0 RS=0 FC=0.5)",
                ".options reltol=1e-4 abstol=1e-13 vntol=1e-8",
                f".tran {width / 2000:g} {2.4 * width:g} 0 {width / 2000:g}",
                "",
            ]
        )


@dataclass(frozen=True)
class Switch:
    """A photocurrent into the base of an NPN with a pull-up: a 100 us pulse at 10 % duty, the second period kept."""

    name: str
    photo_A: float
    load_ohm: float = 4700.0
    supply_V: float = 5.0
    width_s: float = 100e-6
    period_s: float = 1e-3

    @property
    def netlist(self) -> str:
        return "\n".join(
            [
                f"* transistor switch {self.name}",
                f"Vcc vcc 0 DC {self.supply_V:g}",
                f"Vdrive drive 0 PULSE(0 2 20u 10n 10n {self.width_s:g} {self.period_s:g})",
                f"Gph vcc base drive 0 {self.photo_A / 2:g}",
                f"Rc vcc out {self.load_ohm:g}",
                "Q1 out base 0 npn",
                "Rbe base 0 1meg",
                f"Cstray out 0 {STRAY_F:g}",
                ".model npn NPN(IS=1e-14 BF=200 BR=2 TF=0.6n TR=1u CJC=5p CJE=8p VJC=0.7 VJE=0.7 MJC=0.4 MJE=0.4)",
                ".options reltol=1e-4 abstol=1e-12 vntol=1e-7",
                f".tran 50n {self.period_s + 220e-6:g} {self.period_s:g} 50n",
                "",
            ]
        )


CARDS = (
    Card("abrupt", 100e-12, 0.70, 0.5), Card("graded", 200e-12, 0.55, 0.33), Card("middle", 60e-12, 0.65, 0.42),
)  # fmt: skip
BIASES_V = (1.0, 2.0, 4.0, 8.0, 16.0, 30.0)
LOADS_OHM = (1e3, 1e4)
DIODES = tuple(Diode(card, bias, load) for card in CARDS for load in LOADS_OHM for bias in BIASES_V)
SWITCHES = (Switch("mild", 10e-6), Switch("hard", 40e-6))


def has_ngspice() -> bool:
    return shutil.which("ngspice") is not None


def simulate(circuit: Diode | Switch) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """Run ngspice on one circuit; returns time, drive (light, or drive voltage) and output."""
    signals = "v(out) v(drive)" if isinstance(circuit, Switch) else "v(out)"
    with tempfile.TemporaryDirectory() as place:
        folder = Path(place)
        control = f".control\nset wr_singlescale\nset wr_vecnames\nset numdgt=9\nrun\nwrdata out.txt {signals}\nquit\n.endc\n.end\n"
        (folder / "circuit.cir").write_text(circuit.netlist + control, encoding="utf-8")
        subprocess.run(["ngspice", "-b", "circuit.cir"], cwd=folder, check=True, capture_output=True, timeout=20)
        rows = [line.split() for line in (folder / "out.txt").read_text(encoding="utf-8").splitlines()[1:]]
    table = np.array(rows, dtype=np.float64)
    time, output = table[:, 0], table[:, 1]
    if isinstance(circuit, Switch):
        return time - circuit.period_s - 20e-6 - 5e-9, table[:, 2], output
    start = 0.2 * circuit.width_s
    lit = ((time >= start) & (time < start + circuit.width_s)).astype(np.float64)
    return time - start, lit, output


def stored(name: str) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """What ngspice said of a circuit when the answers were stored."""
    with np.load(ANSWERS) as answers:
        table = answers[name].astype(np.float64)
    return table[0], table[1], table[2]


def plain_crossings(time: np.ndarray, signal: np.ndarray, start: float, end: float) -> tuple[float, float, float]:
    """First times at 10, 50 and 90 % of the way between two settled levels, by interpolation on the noise-free waveform."""
    progress = (signal - start) / (end - start)
    found = []
    for level in (0.1, 0.5, 0.9):
        k = int(np.argmax(progress >= level))
        share = (level - progress[k - 1]) / (progress[k] - progress[k - 1])
        found.append(float(time[k - 1] + share * (time[k] - time[k - 1])))
    return found[0], found[1], found[2]


def digitised(
    time: np.ndarray, signal: np.ndarray, grid: np.ndarray, rng: np.random.Generator, *, snr: float = 100.0
) -> np.ndarray:
    """Samples on a grid with white noise of amplitude over `snr`, in 8-bit codes over 1.25 times the swing."""
    clean = np.interp(grid, time, signal)
    swing = float(np.ptp(signal))
    step = 1.25 * swing / 256
    return np.round((clean + rng.normal(0.0, swing / snr, grid.size)) / step) * step


def thin(time: np.ndarray, drive: np.ndarray, output: np.ndarray, most: int = 1200) -> np.ndarray:
    """Keep what linear interpolation needs: points where output or drive moved, evenly in arc length."""
    scaled = np.hypot(np.diff(time) / np.ptp(time), np.diff(output) / np.ptp(output)) + np.abs(np.diff(drive)) / np.ptp(
        drive
    )
    length = np.concatenate([[0.0], np.cumsum(scaled)])
    keep = np.unique(np.searchsorted(length, np.linspace(0, length[-1], most)).clip(0, time.size - 1))
    jumps = np.flatnonzero(np.abs(np.diff(drive)) > 0)
    keep = np.unique(np.concatenate([keep, jumps, jumps + 1, [0, time.size - 1]]))
    return np.stack([time[keep], drive[keep], output[keep]])


def main(folder: Path) -> None:
    found = {}
    for circuit in (*DIODES, *SWITCHES):
        (folder / f"{circuit.name}.cir").write_text(circuit.netlist, encoding="utf-8", newline="\n")
        found[circuit.name] = thin(*simulate(circuit))
    np.savez_compressed(folder / "answers.npz", **found)


if __name__ == "__main__":
    main(Path(sys.argv[1]))
