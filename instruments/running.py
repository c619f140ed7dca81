"""One plan carried out on one device: the bench opened, the run folder begun or gone on with, the sweep, everything off."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass, field
from pathlib import Path

from darkedge.analysis.bench import Bench
from darkedge.analysis.files.run_folder import JournalRow, RunFolder, alone_in
from darkedge.analysis.plan import Plan
from darkedge.instruments.hands import Hands
from darkedge.instruments.live_bench import LiveBench, OpenLink, Time, ends_on_terminate, open_bench, open_visa
from darkedge.instruments.oscilloscope import Window
from darkedge.instruments.sweep import Judge, Progress, Propose, Swept, bench_record, in_plan_order, keep_all, sweep
from darkedge.instruments.taking import Naming, PointTaker, Utc, utc_now


@dataclass(frozen=True, slots=True, kw_only=True)
class Course:
    """How a run is carried out: what is passed in from outside.

    `left_on` is told on the way out what could not be switched off, an empty list included.
    """

    hands: Hands
    judge: Judge = keep_all
    propose: Propose | None = None
    progress: Callable[[Progress], None] = lambda _progress: None
    met: Callable[[LiveBench], None] = lambda _bench: None
    heard: Callable[[str, str], None] = lambda _role, _text: None
    left_on: Callable[[Sequence[str]], None] = lambda _words: None
    clock: Time = field(default_factory=Time)
    utc: Utc = utc_now
    open_link: OpenLink = open_visa


@dataclass(frozen=True, slots=True, kw_only=True)
class Ran:
    """A run that came to its end."""

    folder: Path
    swept: Swept


def run_plan(
    plan: Plan,
    bench: Bench,
    folder: Path,
    naming: Naming,
    *,
    course: Course,
    resume: bool = False,
    bench_folder: Path | None = None,
) -> Ran:
    """Carry out a plan on one device.

    Parameters
    ----------
    folder : Path
        The run folder, made here, or gone on with where `resume` says so.
    naming : Naming
        What the captures say of the device.
    course : Course
        Hands, judgement, clock.
    bench_folder : Path, optional
        Where dialect files named in the bench file stand.

    Raises
    ------
    InputError
        The request is wrong; nothing was opened.
    BenchError
        The bench failed. Its outputs are off as far as they can be reached; everything taken is safe.
    KeyboardInterrupt
        Ctrl-C, or the end of the program asked for from outside, with the same said.
    """
    with ends_on_terminate(), alone_in(folder):
        known = RunFolder.go_on(folder, plan) if resume else None
        if known is None:
            RunFolder.check_new(folder, plan)
        with open_bench(
            bench, plan, hands=course.hands, folder=bench_folder, clock=course.clock, open_link=course.open_link,
            heard=course.heard, left_on=course.left_on,
        ) as live:  # fmt: skip
            course.met(live)
            run = known or RunFolder.create(folder, plan, bench_record(live, plan))
            taker = PointTaker(
                live, plan, naming, course.hands, clock=course.clock, utc=course.utc, dark_window=_dark_window(run.rows)
            )
            swept = sweep(
                taker,
                run,
                propose=course.propose or in_plan_order(plan),
                judge=course.judge,
                total=len(plan.steps()),
                progress=course.progress,
            )
    return Ran(folder=folder, swept=swept)


def _dark_window(rows: Sequence[JournalRow]) -> Window | None:
    """The window of a dark series that was begun before: its traces belong together only on one range."""
    for row in reversed(rows):
        if row.range_V is not None:
            return Window(range_V=row.range_V, offset_V=row.range_offset_V or 0.0)
    return None
