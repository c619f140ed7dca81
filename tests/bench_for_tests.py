"""A virtual bench behind real sockets, a plan on disk, and a sweep of it, for the tests of the acquisition side."""

from __future__ import annotations

from collections.abc import Callable, Iterator
from contextlib import contextmanager
from dataclasses import dataclass, field
from pathlib import Path

from darkedge.analysis.bench import Bench
from darkedge.analysis.files.bench_file import read_bench
from darkedge.analysis.files.plan_file import read_plan
from darkedge.analysis.plan import Plan
from darkedge.instruments.live_bench import LiveBench, OpenLink, Time, open_bench, open_visa
from darkedge.instruments.running import Course, Ran, run_plan
from darkedge.instruments.taking import Naming
from darkedge.instruments.virtual.instrument import Handler, ScpiInstrument
from darkedge.instruments.virtual.lots import CATALOGUE, Fault, PartKind, make_device
from darkedge.instruments.virtual.rehearsal import FLAWS, OWN_WORDS, OWN_WORDS_NAME, STRAY_F, VirtualHands, VirtualTime
from darkedge.instruments.virtual.serving import VirtualBench, actual_ohm
from darkedge.instruments.virtual.wiring import Wiring

PLAN = """format = "darkedge-plan 1"
title = "test"
[device]
kind = "photodiode"
[ratings]
reverse_bias_V = 32
emitter_peak_current_A = "100 mA"
emitter_mean_current_A = "20 mA"
[emitter]
kind = "led"
wavelength_m = "850 nm"
series_ohm = 220
forward_V = 1.5
[axes]
load_ohm = {loads}
load_change = "{change}"
bias_V = {biases}
emitter_current_A = "5 mA"
pulse_width_s = {widths}
[drive]
duty = 0.1
{dark}
"""
DARK = """[dark]
load_ohm = "1 Mohm"
bias_V = [5, 12]
settle_s = 2
duration_s = "200 ms"
"""


def plan_text(
    *, loads: str = '["1 kohm"]', change: str = "ask", biases: str = "[5]", widths: str = '["1 us"]', dark: str = ""
) -> str:
    return PLAN.format(loads=loads, change=change, biases=biases, widths=widths, dark=dark)


def override(instrument: ScpiInstrument, pattern: str, handler: Handler) -> None:
    """Let a command of an instrument do something else, as a faulty one would."""
    instrument.add(pattern, handler)
    instrument._commands.insert(0, instrument._commands.pop())


@dataclass
class Desk:
    """Everything a test needs to run a plan on a virtual bench."""

    virtual: VirtualBench
    folder: Path
    hands: VirtualHands
    time: VirtualTime = field(default_factory=VirtualTime)
    heard: list[tuple[str, str]] = field(default_factory=list)
    left_on: list[str] | None = None
    open_link: OpenLink = open_visa

    def bench(self, text: str | None = None, **how: object) -> Bench:
        own = self.virtual.words == "own"
        roles = ("oscilloscope", "function_generator", "bias") if own else ()
        made = self.virtual.bench_toml(dialects=dict.fromkeys(roles, OWN_WORDS_NAME), averages=4, **how)  # type: ignore[arg-type]
        (self.folder / "bench.toml").write_text(text or made)
        if own:
            (self.folder / OWN_WORDS_NAME).write_bytes(OWN_WORDS.read_bytes())
        return read_bench(self.folder / "bench.toml")

    def plan(self, text: str) -> Plan:
        (self.folder / "plan.toml").write_text(text)
        return read_plan(self.folder / "plan.toml")

    def course(self, **more: object) -> Course:
        return Course(
            hands=self.hands,
            clock=Time(wait=self.time.wait),
            utc=self.time.utc,
            heard=lambda role, text: self.heard.append((role, text)),
            left_on=self._note_left_on,
            open_link=self.open_link,
            **more,  # type: ignore[arg-type]
        )

    def run(
        self, plan: Plan, *, bench: Bench | None = None, name: str = "SP-2-01", resume: bool = False, **more: object
    ) -> Ran:
        return run_plan(
            plan,
            bench or self.bench(),
            self.folder / name,
            Naming(run=name, device=name),
            course=self.course(**more),
            resume=resume,
            bench_folder=self.folder,
        )

    @contextmanager
    def live(self, plan: Plan, bench: Bench | None = None) -> Iterator[LiveBench]:
        with open_bench(
            bench or self.bench(), plan, hands=self.hands, folder=self.folder, clock=Time(wait=self.time.wait),
            open_link=self.open_link, heard=lambda role, text: self.heard.append((role, text)), left_on=self._note_left_on,
        ) as live:  # fmt: skip
            yield live

    def _note_left_on(self, words: object) -> None:
        self.left_on = list(words)  # type: ignore[call-overload]

    def everything_is_off(self) -> bool:
        world = self.virtual.world
        return not any(drive.on for drive in world.drives) and world.bias_V == 0.0


@contextmanager
def desk(
    folder: Path,
    *,
    kind: PartKind = PartKind.PHOTODIODE,
    fault: Fault = Fault.NONE,
    words: str = "scpi-1999",
    seed: int = 1,
    prepare: Callable[[VirtualBench], None] = lambda _bench: None,
) -> Iterator[Desk]:
    wiring = Wiring(load_ohm=actual_ohm(1e3), stray_F=STRAY_F, connection=CATALOGUE[kind].connection)
    device = make_device(kind, seed=seed, number=1, fault=fault)
    with VirtualBench(device, wiring=wiring, seed=seed, words=words, flaws=FLAWS) as virtual:
        prepare(virtual)
        yield Desk(virtual=virtual, folder=folder, hands=VirtualHands(virtual.world))
