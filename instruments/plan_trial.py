"""Holds a plan against the instruments themselves: every setting it will need is made with the outputs off, and read back."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

from darkedge.analysis.bench import BiasSource
from darkedge.analysis.errors import BenchError, RefusedByInstrument
from darkedge.analysis.plan import Plan
from darkedge.analysis.quantities import format_quantity
from darkedge.instruments.dialect import BIAS, GENERATOR
from darkedge.instruments.live_bench import LiveBench, signals
from darkedge.instruments.oscilloscope import Window
from darkedge.instruments.ranging import LEAST_RANGE_V
from darkedge.instruments.session import Setting


@dataclass(frozen=True, slots=True, kw_only=True)
class Trial:
    """What the instruments said: facts, what is wrong, and the worth of a code at the finest range."""

    facts: tuple[str, ...]
    faults: tuple[str, ...]
    finest_code_V: float | None


def try_plan(live: LiveBench, plan: Plan) -> Trial:
    """Make every setting that a plan needs, with all outputs off.

    Nothing is driven: the generator's outputs and the supply stay off. A `BenchError` of one setting becomes a fault in words.
    """
    facts = [f"{known.role.replace('_', ' ')}: {known.identity} ({known.dialect})" for known in live.identities]
    faults: list[str] = []

    def attempt(make: Callable[[], str]) -> None:
        try:
            facts.append(make())
        except BenchError as error:
            faults.append(str(error))

    live.generator.off()
    attempt(lambda: _impedance(live, plan))
    attempt(lambda: _pulses(live, plan))
    if live.bench.bias.source is BiasSource.SUPPLY:
        attempt(lambda: _supply(live, plan))
    code: list[float] = []
    attempt(lambda: _scope(live, plan, code))
    return Trial(facts=tuple(facts), faults=tuple(faults), finest_code_V=code[0] if code else None)


def _impedance(live: LiveBench, plan: Plan) -> str:
    ratios = {e: live.generator.stated_ratio(live.generator.channel(e)) for e in plan.axes.element}
    words = {1.0: "a high impedance"}
    stated = {words.get(ratio, f"a load that makes {ratio:g} of the open level") for ratio in ratios.values()}
    return f"the generator states its levels into {' and '.join(sorted(stated))}"


def _pulses(live: LiveBench, plan: Plan) -> str:
    session, generator = live.generator.session, live.generator
    channel = generator.channel(plan.axes.element[0])
    ratio = generator.stated_ratio(channel)
    for width in plan.axes.pulse_width_s:
        period = plan.drive.period_for(width)
        generator.set_time(channel, width, period)
        _held(session.read_number(GENERATOR["pulse_width"], channel=channel), width, "pulse width", "s")
        _held(session.read_number(GENERATOR["period"], channel=channel), period, "period", "s")
    for current in plan.axes.emitter_current_A:
        level = generator.open_level_V(current, plan)
        generator.set_levels(channel, level * ratio, plan.drive.low_V * ratio)
        found = session.read_number(GENERATOR["high"], channel=channel)
        _held(None if found is None else found / ratio, level, "level", "V")
    return f"the generator can make all {len(plan.axes.pulse_width_s)} widths and {len(plan.axes.emitter_current_A)} levels"


def _supply(live: LiveBench, plan: Plan) -> str:
    session = live.sessions["bias"]
    dark = plan.dark.bias_V if plan.dark else ()
    highest = max((*plan.axes.bias_V, *dark))
    session.settle([Setting(what=BIAS["output"], value="off")])
    (level,) = session.settle([Setting(what=BIAS["level"], value=highest)])
    session.settle([Setting(what=BIAS["level"], value=0.0)])
    _held(level.value if isinstance(level.value, float) else None, highest, "bias", "V")
    return f"the supply takes {format_quantity(highest, 'V')} (output off)"


def _scope(live: LiveBench, plan: Plan, code: list[float]) -> str:
    scope = live.oscilloscope
    scope.prepare(signals(plan))
    finest = scope.show("output", Window(range_V=LEAST_RANGE_V))
    state = scope.state("output")
    if state.volts_per_code is not None:
        code.append(state.volts_per_code)
    width = min(plan.axes.pulse_width_s)
    scope.time(start_s=-0.2 * width, span_s=2.4 * width, points=scope.link.points, averages=scope.link.averages)
    step = scope.span_s / max(scope.points, 1)
    return (
        f"the scope's finest range is {format_quantity(finest.range_V, 'V')}; the shortest pulse is sampled every "
        f"{format_quantity(float(f'{step:.3g}'), 's')}, averaged {scope.averages} times"
    )


def _held(found: float | None, wanted: float, what: str, unit: str) -> None:
    if found is not None and abs(found - wanted) > 0.02 * abs(wanted) + 1e-12:
        raise RefusedByInstrument(
            f"another {what} was set than asked for",
            found=format_quantity(found, unit),
            wanted=format_quantity(wanted, unit),
        )
