"""What a plan means before it is run: points, hand work, time, what can be resolved, and what looks wrong."""

from __future__ import annotations

import math
from dataclasses import dataclass

from darkedge.analysis.bench import Bench, BiasSource
from darkedge.analysis.captures import Kind
from darkedge.analysis.cautions import Caution, Setting, cautions_for
from darkedge.analysis.fixture import UNKNOWN_FIXTURE, Fixture
from darkedge.analysis.plan import EmitterKind, LoadChange, Plan
from darkedge.analysis.quantities import format_quantity

LARGE_SWING_RATIO = 0.1
"""Swing over bias from which the capacitance changes during the edge (the design's own bound)."""
HAND_WORK_s = 60.0
"""What a change by hand takes (common practice, no source)."""
POINT_OVERHEAD_s = 1.0
"""What a point takes beside its acquisitions: settings, read-back, transfer, disk (common practice, no source)."""
LOOKS_PER_POINT = 2.5
"""Acquisitions for a point: ranging, the whole pulse, its edges; as measured on the virtual bench."""
SCOPE_INPUT_OHM = 1e6
ASSUMED_CODE_V = 10e-3 / 256
"""One of 256 codes of a 10 mV range: what common bench scopes have at their finest (common practice, no source)."""
BENCH_RATIO = 2.0
MAINS_s = (1 / 50, 1 / 60)


@dataclass(frozen=True, slots=True, kw_only=True)
class Outlook:
    """What a plan means. Times in seconds; `smallest_dark_A` is `None` without dark points."""

    pulse_points: int
    still_traces: int
    hand_work: tuple[str, ...]
    time_s: float
    smallest_dark_A: float | None
    notes: tuple[str, ...]
    warnings: tuple[str, ...]
    cautions: tuple[Caution, ...]


def outlook(
    plan: Plan, *, bench: Bench | None = None, fixture: Fixture = UNKNOWN_FIXTURE, code_V: float | None = None
) -> Outlook:
    """Work out what a plan means.

    Parameters
    ----------
    plan : Plan
    bench : Bench, optional
        Says where the bias comes from, how fast it ramps, and how often is averaged.
    fixture : Fixture
        Loads as measured, stray capacitance, response of emitter and scope.
    code_V : float, optional
        Volts of one code at the scope's finest range; else that of a common bench scope is taken.

    Returns
    -------
    Outlook

    Notes
    -----
    The smallest dark current is one code over the effective resistance: averaging a trace goes below that only as far as its noise
    moves it by codes. Edges are
    2.2 R C with the capacitance that is expected, one pole; the swing is the photocurrent that is expected times the effective load.
    """
    steps = plan.steps()
    pulse = [step for step in steps if step.kind is Kind.PULSE]
    hand_work = _hand_work(plan, bench)
    warnings, notes = [*_load_line(plan, fixture), *_edges(plan, fixture), *_mains(plan)], []
    if plan.expected_photocurrent_ratio is None or plan.expected_capacitance_F is None:
        notes.append(
            "Swing and edges cannot be foreseen without [expected] photocurrent_ratio and capacitance_F; roughly known values do."
        )
    smallest = None
    if plan.dark is not None:
        resistance = fixture.effective_load(plan.dark.load_ohm, SCOPE_INPUT_OHM).value or plan.dark.load_ohm
        smallest = (code_V or ASSUMED_CODE_V) / resistance
        if code_V is None:
            notes.append(
                "The smallest dark current is that of a 10 mV range with 256 codes; --bench asks the scope for its own."
            )
    return Outlook(
        pulse_points=len(pulse),
        still_traces=len(steps) - len(pulse),
        hand_work=hand_work,
        time_s=_time_s(plan, bench, len(hand_work)),
        smallest_dark_A=smallest,
        notes=tuple(notes),
        warnings=tuple(warnings),
        cautions=cautions_for(setting_of(plan, bench)),
    )


def setting_of(plan: Plan, bench: Bench | None = None) -> Setting:
    """What a plan does that could hurt somebody."""
    dark = plan.dark.bias_V if plan.dark else ()
    inside = plan.emitter.kind is EmitterKind.INSIDE_DEVICE
    return Setting(
        bias_V=max((*plan.axes.bias_V, *dark)),
        emitter_kind=str(plan.emitter.kind),
        wavelength_m=None if inside else plan.emitter.wavelength_m,
        decoupling_F=None if bench is None else bench.bias.decoupling_F,
        generator_low_V=plan.drive.low_V,
        supply_by_hand=bench is not None and bench.bias.source is BiasSource.BY_HAND,
    )


def _hand_work(plan: Plan, bench: Bench | None) -> tuple[str, ...]:
    work: list[str] = []
    loads = list(dict.fromkeys(step.load_ohm for step in plan.steps()))
    if plan.axes.load_change is LoadChange.ASK:
        work += [f"put in {format_quantity(load, 'Ω')}" for load in loads]
    if plan.dark is not None:
        work.append("cover the device for the dark traces")
    if bench is not None and bench.bias.source is BiasSource.BY_HAND:
        biases = [step.bias_V for step in plan.steps()]
        changes = sum(a != b for a, b in zip([0.0, *biases], biases, strict=False))
        work += ["set the rail"] * (changes + len(loads))
    return tuple(work)


def _time_s(plan: Plan, bench: Bench | None, hand_work: int) -> float:
    averages = 16 if bench is None else bench.oscilloscope.averages
    ramp = 20.0 if bench is None else bench.bias.ramp_V_per_s
    total, bias = hand_work * HAND_WORK_s, 0.0
    for step in plan.steps():
        total += POINT_OVERHEAD_s + abs(step.bias_V - bias) / ramp
        bias = step.bias_V
        if step.pulse_width_s is not None:
            total += LOOKS_PER_POINT * averages * 2 * plan.drive.period_for(step.pulse_width_s)
        elif plan.dark is not None:
            total += plan.dark.settle_s + plan.dark.duration_s
    return total


def _load_line(plan: Plan, fixture: Fixture) -> list[str]:
    """Swing against bias: how much of the bias the signal eats at each load."""
    ratio = plan.expected_photocurrent_ratio
    if ratio is None or plan.has_transistor:
        return []
    found = []
    lowest = min((bias for bias in plan.axes.bias_V if bias > 0), default=None)
    current = max(plan.axes.emitter_current_A)
    if lowest is None:
        return []
    for load in plan.axes.load_ohm:
        swing = ratio * current * (fixture.effective_load(load, SCOPE_INPUT_OHM).value or load)
        if swing <= LARGE_SWING_RATIO * lowest:
            continue
        proposed = current * LARGE_SWING_RATIO * lowest / swing
        words = "would eat the whole bias" if swing >= lowest else f"is {100 * swing / lowest:.0f} % of the bias"
        found.append(
            f"at {format_quantity(load, 'Ω')} and {format_quantity(lowest, 'V')} the swing of {format_quantity(swing, 'V')} {words}; "
            f"an emitter current of {format_quantity(float(f'{proposed:.2g}'), 'A')} keeps it to a tenth"
        )
    return found


def _edges(plan: Plan, fixture: Fixture) -> list[str]:
    """Edges that the bench would hide, and pulses too short to settle."""
    capacitance = plan.expected_capacitance_F
    if capacitance is None or plan.has_transistor:
        return []
    found = []
    response = fixture.response
    for load in plan.axes.load_ohm:
        resistance = fixture.effective_load(load, SCOPE_INPUT_OHM).value or load
        known = fixture.load(load)
        stray = known.stray_F if known is not None and known.stray_F is not None else 0.0
        edge = math.log(9) * resistance * (capacitance + stray)
        bench = None if response is None else max(response.rise_time_s, response.fall_time_s)
        if bench is not None and edge < BENCH_RATIO * bench:
            found.append(
                f"at {format_quantity(load, 'Ω')} edges near {format_quantity(edge, 's')} are not clearly slower than emitter and "
                f"scope ({format_quantity(bench, 's')}); a larger load shows the junction"
            )
        short = [width for width in plan.axes.pulse_width_s if width < 2.3 * edge]
        if len(short) == len(plan.axes.pulse_width_s):
            found.append(
                f"at {format_quantity(load, 'Ω')} no pulse is long enough to settle (edges near {format_quantity(edge, 's')}); "
                f"add one of {format_quantity(5 * edge, 's')} or more"
            )
    return found


def _mains(plan: Plan) -> list[str]:
    if plan.dark is None:
        return []
    whole = [abs(plan.dark.duration_s / period - round(plan.dark.duration_s / period)) < 1e-6 for period in MAINS_s]
    if any(whole) and plan.dark.duration_s >= min(MAINS_s):
        return []
    words = (
        f"dark.duration_s of {format_quantity(plan.dark.duration_s, 's')} is not a whole number of mains periods; "
        "100 ms or 200 ms is, at 50 Hz and at 60 Hz"
    )
    return [words]
