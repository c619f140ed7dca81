"""The sweep: one loop that takes point after point, keeps what it is told to keep, and leaves everything off and whole.

What to do with a capture and which point comes next is not decided here: the two callables `judge` and `propose` say so.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping, Sequence
from dataclasses import asdict, dataclass
from importlib.metadata import version

from darkedge.analysis.captures import Capture, Kind
from darkedge.analysis.files.run_folder import JournalRow, RunFolder
from darkedge.analysis.judgement import Judgement
from darkedge.analysis.plan import Plan, Step
from darkedge.instruments.live_bench import LiveBench
from darkedge.instruments.taking import PointTaker, Taken

MOST_ATTEMPTS = 3


Judge = Callable[[Capture], Judgement]
Propose = Callable[[Sequence[JournalRow]], "Step | None"]
"""Given what is safe on disk, the next point, or `None` to stop."""


@dataclass(frozen=True, slots=True, kw_only=True)
class Progress:
    """How far a sweep is; `left_s` is `None` until one point was taken."""

    done: int
    total: int
    step: Step | None
    left_s: float | None


@dataclass(frozen=True, slots=True, kw_only=True)
class Swept:
    """What a sweep did."""

    taken: int
    retaken: int
    rows: tuple[JournalRow, ...]


def in_plan_order(plan: Plan) -> Propose:
    """The next point of the plan that is not safe yet: what a plain sweep and a resumed one both need."""
    steps = plan.steps()

    def propose(rows: Sequence[JournalRow]) -> Step | None:
        safe = {row.point for row in rows}
        return next((step for step in steps if step.name not in safe), None)

    return propose


def keep_all(_capture: Capture) -> Judgement:
    """Keep whatever comes."""
    return Judgement.KEEP


def sweep(
    taker: PointTaker,
    run: RunFolder,
    *,
    propose: Propose,
    judge: Judge = keep_all,
    total: int,
    progress: Callable[[Progress], None] = lambda _progress: None,
) -> Swept:
    """Take point after point until `propose` says stop.

    A point that `judge` wants again is taken at most three times; the last is kept, with a remark in the journal. A point is
    safe when its captures are on disk and its line is in the journal.

    Raises
    ------
    BenchError
        The bench failed. Everything taken before is safe.
    InputError
        Hand work was not confirmed, or the disk is full.
    """
    now = taker.clock.now
    begun, taken, retaken = now(), 0, 0
    if (step := propose(run.rows)) is None:
        return Swept(taken=0, retaken=0, rows=tuple(run.rows))
    taker.prepare()
    while step is not None:
        left = None if taken == 0 else (now() - begun) / taken * max(total - len(run.rows), 1)
        progress(Progress(done=len(run.rows), total=total, step=step, left_s=left))
        found, attempts, remark = _take(taker, step, judge)
        run.keep(found.captures, _row(step, found, attempts, remark))
        taken += 1
        retaken += attempts - 1
        step = propose(run.rows)
    progress(Progress(done=len(run.rows), total=total, step=None, left_s=0.0))
    return Swept(taken=taken, retaken=retaken, rows=tuple(run.rows))


def bench_record(bench: LiveBench, plan: Plan) -> Mapping[str, object]:
    """What the bench was, for the run folder: who answered, in which dialect, what it lacks, how it is wired."""
    return {
        "darkedge": version("darkedge"),
        **{known.role: asdict(known) for known in bench.identities},
        "absent": {
            known.role: {
                str(what): how.consequence
                for what, how in bench.sessions[known.role].dialect.lacking().items()
                if what.section in (known.role, "common")
            }
            for known in bench.identities
        },
        "bias_source": str(bench.bench.bias.source),
        "channels": dict(bench.bench.oscilloscope.channels),
        "probe_ratio": dict(bench.bench.oscilloscope.probe_ratio),
        "source_ohm": bench.bench.function_generator.source_ohm,
        "emitter_channels": list(bench.bench.function_generator.emitter_channels),
        "points": len(plan.steps()),
    }


def _take(taker: PointTaker, step: Step, judge: Judge) -> tuple[Taken, int, str]:
    for attempt in range(1, MOST_ATTEMPTS + 1):
        found = taker.take(step)
        verdicts = [judge(capture) for capture in found.captures]
        if all(verdict is Judgement.KEEP for verdict in verdicts):
            return found, attempt, "" if attempt == 1 else "taken again"
        if Judgement.ADJUST in verdicts and step.kind is Kind.PULSE:
            taker.forget_ranges()
    return found, MOST_ATTEMPTS, f"kept although the last of {MOST_ATTEMPTS} attempts was not good"


def _row(step: Step, found: Taken, attempts: int, remark: str) -> JournalRow:
    window = found.window
    return JournalRow(
        point=step.name,
        capture=";".join(capture.name for capture in found.captures),
        kind=step.kind,
        element=step.element,
        driven_element=step.element if step.kind is Kind.PULSE else None,
        load_ohm=step.load_ohm,
        bias_V=step.bias_V,
        emitter_current_A=step.emitter_current_A,
        pulse_width_s=step.pulse_width_s,
        repeat=step.repeat,
        taken_utc=found.taken_utc,
        attempts=attempts,
        range_V=None if window is None else window.range_V,
        range_offset_V=None if window is None else window.offset_V,
        remark=remark,
    )
