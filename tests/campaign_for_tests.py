"""What the campaigns share: captures of a known waveform, its true instants, and the figures of what was measured.

Definitions after IEEE Std 181: the amplitude lies between the settled levels of the two states, an edge lasts from its 10 %
to its 90 % instant, and delays and widths are taken at 50 %.
"""

from __future__ import annotations

from collections import Counter
from collections.abc import Callable, Iterable, Mapping
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.special import ndtr

from darkedge.analysis.captures import Capture, Conditions, Waveform
from darkedge.analysis.waveform.measure import measure_pulse_capture

Array = NDArray[np.float64]
Signal = Callable[[Array], Array]

NAMES = ("rise_time_s", "fall_time_s", "t_plh_s", "t_phl_s", "width_out_s")
COUNTING = frozenset({
    "few_samples_on_edge", "never_settles", "shape_free", "noise_unknown", "ringing", "clipped", "droop", "slow_tail",
})  # fmt: skip
"""Flags that say that the numbers are worth less; the others speak of conditions and of the bench."""

MOST_SAMPLES = 60_000
STILL_RATIO, AGREE_RATIO = 3e-3, 1e-3
"""A waveform settles where no state moves more over its last 30 %, as a share of the amplitude, nor the levels differ by
more from pulse to pulse, the rest before the first one among them."""

EXCUSED_SIGMAS = 5.0
"""Errors up to this many of the least standard uncertainties are the noise's; who knows no shape has up to twice the least."""


@dataclass(frozen=True, kw_only=True)
class Pulses:
    """When a train of pulses is switched: `n` pulses, the first switched on at 0, each `on_s` long, then `off_s` of rest."""

    on_s: float
    off_s: float
    n: int

    @property
    def period_s(self) -> float:
        return self.on_s + self.off_s

    @property
    def starts_s(self) -> Array:
        return np.asarray(self.period_s * np.arange(self.n, dtype=np.float64))


@dataclass(frozen=True, kw_only=True)
class Edge:
    """True instants of one edge at 10, 50 and 90 % of its way, and when it was switched."""

    switched_s: float
    at_s: tuple[float, float, float]

    @property
    def lasts_s(self) -> float:
        return self.at_s[2] - self.at_s[0]


@dataclass(frozen=True, kw_only=True)
class Truth:
    """What the waveform without noise is: levels, edges into and out of the pulse, and whether both states settle."""

    rest_V: float
    lit_V: float
    on: tuple[Edge, ...]
    off: tuple[Edge, ...]
    settles: bool

    @property
    def up(self) -> tuple[Edge, ...]:
        return self.on if self.lit_V > self.rest_V else self.off

    @property
    def down(self) -> tuple[Edge, ...]:
        return self.off if self.lit_V > self.rest_V else self.on

    @property
    def amplitude_V(self) -> float:
        return abs(self.lit_V - self.rest_V)

    @property
    def fastest_s(self) -> float:
        return min(edge.lasts_s for edge in (*self.on, *self.off))

    def quantities(self, *, lag_s: float) -> dict[str, float]:
        """Means over the pulses; `lag_s` is how much earlier than the switching instants the drive is."""
        rise, fall = (float(np.mean([edge.lasts_s for edge in edges])) for edges in (self.up, self.down))
        plh, phl = (
            float(np.mean([edge.at_s[1] - edge.switched_s for edge in edges])) + lag_s for edges in (self.up, self.down)
        )
        widths = [off.at_s[1] - on.at_s[1] for on, off in zip(self.on, self.off, strict=True)]
        return dict(zip(NAMES, (rise, fall, plh, phl, float(np.mean(widths))), strict=True))


def true_edges(time: Array, signal: Array, pulses: Pulses) -> Truth:
    """A plain evaluation of a waveform without noise that starts where the first pulse does and covers all.

    Levels are means over the last 5 % of each state.
    """
    on_s, starts = pulses.on_s, [float(start) for start in pulses.starts_s]
    lit = [part(time, signal, start, start + on_s) for start in starts]
    rest = [part(time, signal, start + on_s, start + pulses.period_s) for start in starts]
    lit_levels = [late_mean(piece[1]) for piece in lit]
    rest_levels = [float(signal[0]), *(late_mean(piece[1]) for piece in rest)]
    lit_V, rest_V = float(np.mean(lit_levels)), float(np.mean(rest_levels))
    amplitude = abs(lit_V - rest_V)
    moved = max(float(np.ptp(late(piece[1], 0.3))) for piece in (*lit, *rest))
    apart = max(float(np.ptp(lit_levels)), float(np.ptp(rest_levels)))
    return Truth(
        rest_V=rest_V,
        lit_V=lit_V,
        on=tuple(edge_in(piece, rest_V, lit_V, start) for piece, start in zip(lit, starts, strict=True)),
        off=tuple(edge_in(piece, lit_V, rest_V, start + on_s) for piece, start in zip(rest, starts, strict=True)),
        settles=moved < STILL_RATIO * amplitude and apart < AGREE_RATIO * amplitude,
    )


def part(time: Array, signal: Array, start: float, end: float) -> tuple[Array, Array]:
    a, b = np.searchsorted(time, (start, end))
    return time[a:b], signal[a:b]


def late(values: Array, share: float) -> Array:
    return values[-max(round(share * values.size), 1) :]


def late_mean(values: Array) -> float:
    return float(np.mean(late(values, 0.05)))


def edge_in(piece: tuple[Array, Array], start_V: float, end_V: float, switched_s: float) -> Edge:
    """First passage of 50 %, the last of 10 % before it and the first of 90 % after it, by straight lines."""
    time, signal = piece
    progress = (signal - start_V) / (end_V - start_V)
    middle = int(np.argmax(progress >= 0.5))
    below = np.flatnonzero(progress[:middle] < 0.1)
    before = int(below[-1]) + 1 if below.size else 1
    after = middle + int(np.argmax(progress[middle:] >= 0.9))
    at = [passage(time, progress, max(k, 1), level) for k, level in ((before, 0.1), (middle, 0.5), (after, 0.9))]
    return Edge(switched_s=switched_s, at_s=(at[0], at[1], at[2]))


def passage(time: Array, progress: Array, k: int, level: float) -> float:
    share = (level - progress[k - 1]) / (progress[k] - progress[k - 1])
    return float(time[k - 1] + share * (time[k] - time[k - 1]))


@dataclass(frozen=True, kw_only=True)
class Scope:
    """How a waveform is captured: bits over `share` of the range, noise of amplitude over `snr`, samples on the faster edge."""

    snr: float
    per_edge: float
    bits: int = 8
    share: float = 0.8
    lag_s: float = 0.0
    tell_codes: bool = False

    def step_V(self, swing_V: float, noise_V: float) -> float:
        """One code: the whole trace, four standard deviations of noise on either side, fills its share of the codes."""
        return (swing_V + 8 * noise_V) / (self.share * (1 << self.bits))


@dataclass(frozen=True, kw_only=True)
class Case:
    """One capture with what is true of it.

    `scale` is what an error is divided by: the quantity itself for edge times, the edge for delays, the slower edge
    for the width. `least` is the standard uncertainty, so divided, of a reader who knows shape and levels.
    """

    seed: int
    capture: Capture
    truth: Mapping[str, float]
    scale: Mapping[str, float]
    least: Mapping[str, float]
    settles: bool
    words: str


def captured(
    seed: int, rng: np.random.Generator, signal: Signal, truth: Truth, pulses: Pulses, scope: Scope,
    conditions: Conditions, words: str,
) -> Case:  # fmt: skip
    """Capture a waveform, given as a function of time that is at rest before 0."""
    lead = rng.uniform(0.15, 0.5) * pulses.off_s
    total = lead + pulses.n * pulses.period_s
    dt = max(truth.fastest_s / scope.per_edge, total / MOST_SAMPLES)
    grid: Array = -lead + rng.random() * dt + dt * np.arange(int(total / dt) - 1, dtype=np.float64)
    clean = signal(grid)
    noise_V = truth.amplitude_V / scope.snr
    step = scope.step_V(float(np.ptp(clean)), noise_V)
    shown = in_codes(clean, noise_V, step, rng)
    edge = min(float(rng.uniform(5, 12)) * dt, 0.5 * truth.fastest_s)
    drive = driven(grid + scope.lag_s, pulses, edge)
    driven_codes = in_codes(2 * drive, 0.02, 3.0 / 256, rng)
    capture = Capture(
        name=f"seed_{seed}",
        outputs={1: Waveform(signal_V=shown, dt_s=dt, t0_s=float(grid[0]))},
        drive=Waveform(signal_V=driven_codes, dt_s=dt, t0_s=float(grid[0])),
        conditions=with_codes(conditions, step if scope.tell_codes else None),
    )
    quantities = truth.quantities(lag_s=scope.lag_s)
    rise, fall = quantities["rise_time_s"], quantities["fall_time_s"]
    said = (
        f"{words}, snr {scope.snr:.0f}, {scope.bits} bits, {pulses.n} pulses, {rise / dt:.0f}/{fall / dt:.0f} samples"
    )
    return Case(
        seed=seed, capture=capture, truth=quantities, scale=scales(rise, fall), settles=truth.settles,
        least=least_uncertainties(grid, clean, truth, pulses, float(np.hypot(noise_V, step / np.sqrt(12)))),
        words=f"{said}, on for {pulses.on_s / rise:.1f} rise times",
    )  # fmt: skip


def with_codes(conditions: Conditions, step_V: float | None) -> Conditions:
    return conditions.merged(Conditions(volts_per_code=step_V), here="the circuit", there="the scope")


def in_codes(clean: Array, noise_V: float, step_V: float, rng: np.random.Generator) -> Array:
    place = rng.random()
    return np.asarray((np.round((clean + rng.normal(0.0, noise_V, clean.size)) / step_V + place) - place) * step_V)


def driven(time: Array, pulses: Pulses, edge_s: float) -> Array:
    """The drive: edges of an error integral, 10 to 90 % in `edge_s`, their middle where the train is switched."""
    stretch = 2.5631031 / edge_s
    on = sum(ndtr((time - start) * stretch) for start in pulses.starts_s)
    return np.asarray(on - sum(ndtr((time - start - pulses.on_s) * stretch) for start in pulses.starts_s))


def scales(rise_s: float, fall_s: float) -> dict[str, float]:
    return dict(zip(NAMES, (rise_s, fall_s, rise_s, fall_s, max(rise_s, fall_s)), strict=True))


def least_uncertainties(grid: Array, clean: Array, truth: Truth, pulses: Pulses, noise_V: float) -> dict[str, float]:
    """Least standard uncertainties that the noise of the output allows: the bound of Cramer and Rao, from memory.

    The shape and the levels are taken as known, and only where the edge stands and how far it is stretched as not.
    """
    slope = np.gradient(clean, grid) / noise_V
    on = least_of_edge(grid, slope, truth.on[0], truth.on[0].switched_s + pulses.on_s)
    off = least_of_edge(grid, slope, truth.off[0], truth.off[0].switched_s + pulses.off_s)
    up, down = (on, off) if truth.lit_V > truth.rest_V else (off, on)
    rise, fall = truth.up[0].lasts_s, truth.down[0].lasts_s
    width = np.hypot(up[0], down[0]) / max(rise, fall)
    found = (up[1], down[1], up[0] / rise, down[0] / fall, float(width))
    return {name: u / float(np.sqrt(pulses.n)) for name, u in zip(NAMES, found, strict=True)}


def least_of_edge(grid: Array, slope: Array, edge: Edge, until_s: float) -> tuple[float, float]:
    """Of the middle, in seconds, and of the duration, as a share of it."""
    a, b = np.searchsorted(grid, (edge.switched_s, until_s))
    part = slope[a:b]
    parts = np.stack((part * edge.lasts_s, part * (grid[a:b] - edge.at_s[1])))
    variance = np.linalg.inv(parts @ parts.T)
    return edge.lasts_s * float(np.sqrt(variance[0, 0])), float(np.sqrt(variance[1, 1]))


@dataclass(frozen=True, kw_only=True)
class Figure:
    """One quantity of one case: its error over the scale (`None` where it was left out), over its u, and what was said."""

    seed: int
    name: str
    error: float | None
    sigmas: float
    flags: frozenset[str]
    least: float
    words: str

    @property
    def flagged(self) -> bool:
        return bool(self.flags & COUNTING)

    def beyond(self, bound: float) -> bool:
        return self.error is None or abs(self.error) > bound

    @property
    def excused(self) -> bool:
        """Whether noise alone may be the reason of the error."""
        return self.error is not None and abs(self.error) <= EXCUSED_SIGMAS * self.least


def figures_of(case: Case) -> list[Figure]:
    (row,) = measure_pulse_capture(case.capture)
    found = []
    for name in NAMES:
        estimate = row.quantities.get(name)
        error, sigmas = None, float("nan")
        if estimate is not None and estimate.value is not None and estimate.u is not None:
            error = (estimate.value - case.truth[name]) / case.scale[name]
            sigmas = (estimate.value - case.truth[name]) / max(estimate.u, 1e-6 * case.scale[name])
        found.append(
            Figure(
                seed=case.seed, name=name, error=error, sigmas=sigmas, flags=frozenset(row.flags),
                least=case.least[name], words=f"{case.words}; {row.estimator}",
            )
        )  # fmt: skip
    return found


@dataclass(frozen=True, kw_only=True)
class Outcome:
    """What a campaign found: figures of cases that settle, and of those that do not, whose levels are a matter of choice."""

    figures: tuple[Figure, ...]
    unsettled: tuple[Figure, ...]

    def of(self, name: str) -> list[Figure]:
        return [figure for figure in self.figures if figure.name == name]

    def beyond(self, bound: float, *, excused: bool) -> list[Figure]:
        """Beyond the bound without a flag, the worst first: those that noise excuses, or those that it does not."""
        found = [f for f in self.figures if not f.flagged and f.beyond(bound) and f.excused is excused]
        return sorted(found, key=lambda f: -abs(np.inf if f.error is None else f.error))

    def least_honest(self, most: int = 8) -> list[Figure]:
        """Without a flag, and furthest from the truth in their stated uncertainties."""
        found = [f for f in self.figures if not f.flagged and f.error is not None]
        return sorted(found, key=lambda f: -abs(f.sigmas))[:most]

    def medians(self) -> dict[str, float]:
        return {name: percentiles(self.of(name))[0] for name in NAMES}


def run(build: Callable[[int, int], Case], seeds: Iterable[int]) -> Outcome:
    settled: list[Figure] = []
    others: list[Figure] = []
    for seed in seeds:
        case = build(seed, 0)
        (settled if case.settles else others).extend(figures_of(case))
    return Outcome(figures=tuple(settled), unsettled=tuple(others))


def percentiles(figures: list[Figure]) -> tuple[float, float, float]:
    errors = [abs(figure.error) for figure in figures if figure.error is not None]
    found = np.percentile(errors, (50, 90, 99)) if errors else np.full(3, np.nan)
    return float(found[0]), float(found[1]), float(found[2])


def table(outcome: Outcome, *, bound: float) -> str:
    """The figures as text; shares in per cent."""
    head = f"{'':12} {'cases':>5} {'left out':>8} {'flagged':>7} {'median':>7} {'90th':>7} {'99th':>7} {'worst unflagged':>15}"
    lines = [f"{head} {'beyond':>6} {'excused':>8} {'inside 95 %':>11} {'unflagged':>9}"]
    lines += [line_of(name, outcome.of(name), bound) for name in NAMES]
    lines.append(f"seeds by flag: {flags_of(outcome.figures)}")
    lines.append(
        f"not settled: {len({f.seed for f in outcome.unsettled})}, of these without a flag, and how far off at most:"
    )
    lines.append(f"  {unsaid(outcome)}")
    lines.append(f"beyond {bound:.0%} without a flag, by more than noise excuses:")
    lines += [words_of(figure) for figure in outcome.beyond(bound, excused=False)]
    lines.append(f"beyond {bound:.0%} without a flag, by no more than {EXCUSED_SIGMAS:.0f} times the least u:")
    lines.append(f"  {[(f.seed, f.name, f'{f.error:+.1%}') for f in outcome.beyond(bound, excused=True)]}")
    lines.append("furthest from the truth in stated u, without a flag:")
    lines += [words_of(figure) for figure in outcome.least_honest()]
    return "\n".join(lines)


def again(build: Callable[[int, int], Case], seed: int, times: int = 16) -> str:
    """One seed captured many times with other noise: what of its errors is a bias, and what scatters."""
    rows = [figures_of(build(seed, noise)) for noise in range(times)]
    lines = [f"{seed}: {rows[0][0].words}; flagged {sum(row[0].flagged for row in rows)} of {times}"]
    for figures in zip(*rows, strict=True):
        seen = [(f.error, f.sigmas) for f in figures if f.error is not None]
        if not seen:
            continue
        error, sigmas = np.array(seen).T
        lines.append(
            f"  {figures[0].name:12} median error {np.median(error):+.2%}, scatter {np.std(error):.2%}, least"
            f" {figures[0].least:.2%}; in stated u: median {np.median(sigmas):+.1f}, scatter {np.std(sigmas):.1f}"
        )
    return "\n".join(lines)


def flags_of(figures: Iterable[Figure]) -> dict[str, int]:
    counts = Counter(code for f in figures if f.name == NAMES[0] for code in f.flags & COUNTING)
    return dict(counts.most_common())


def unsaid(outcome: Outcome) -> dict[int, str]:
    """Seeds that do not settle and say nothing, each with its largest error."""
    worst: dict[int, float] = {}
    for f in outcome.unsettled:
        if not f.flagged:
            worst[f.seed] = max(worst.get(f.seed, 0.0), np.inf if f.error is None else abs(f.error))
    return {seed: f"{error:.1%}" for seed, error in worst.items()}


def line_of(name: str, figures: list[Figure], bound: float) -> str:
    median, ninety, most = percentiles(figures)
    bare = [figure for figure in figures if not figure.flagged]
    worst = max((abs(f.error) for f in bare if f.error is not None), default=float("nan"))
    beyond = [f for f in bare if f.beyond(bound)]
    excused = sum(f.excused for f in beyond)
    out, flagged = sum(f.error is None for f in figures), len(figures) - len(bare)
    return (
        f"{name:12} {len(figures):5} {out:8} {flagged:7} {median:7.2%} {ninety:7.2%} {most:7.2%} {worst:15.2%}"
        f" {len(beyond):6} {excused:8} {coverage(figures):11.1%} {coverage(bare):9.1%}"
    )


def coverage(figures: list[Figure]) -> float:
    """Share of stated 95 % intervals, value +- 1.96 u, that hold the truth."""
    inside = [abs(figure.sigmas) <= 1.96 for figure in figures if figure.error is not None]
    return float(np.mean(inside)) if inside else float("nan")


def words_of(figure: Figure) -> str:
    error = "left out" if figure.error is None else f"{figure.error:+.1%}, {figure.sigmas:+.1f} u"
    others = ", ".join(sorted(figure.flags - {"emitter_unknown", "period_unknown"}))
    return f"  {figure.seed} {figure.name} {error}, least u {figure.least:.2%}: {figure.words}; {others}"


def log_uniform(rng: np.random.Generator, low: float, high: float) -> float:
    return float(np.exp(rng.uniform(np.log(low), np.log(high))))


def pulses_that_fit(wanted: int, period_s: float, step_s: float) -> int:
    """At most the number of pulses wanted, so that the record does not grow too long."""
    return max(min(wanted, int(MOST_SAMPLES * step_s / period_s)), 1)
