"""Dark current from dark traces: what a still trace says, and what is left when the offset is taken off.

The recipe: own sense resistor, DC coupling, high-impedance input, one fixed range, offset traces at zero bias interleaved
on the same range and resistor, averages over whole mains periods, the drop across the resistor taken off the bias.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from scipy import stats

from darkedge.analysis.captures import Conditions, FloatArray, OutputConnection, Record
from darkedge.analysis.fixture import Fixture
from darkedge.analysis.measurement import Estimate

MAINS_Hz = (50.0, 60.0)
_FEWEST = 16
_BLOCKS = 32
_SIGNIFICANT = 1e-4
"""Chance at which noise alone is called drift or mains: one trace in ten thousand."""
_DETECTED = 1.645
"""Standard uncertainties above zero from which a current is called measured (one-sided 95 %)."""


@dataclass(frozen=True, slots=True, kw_only=True)
class TraceSummary:
    """What one still trace says.

    `mean_V` is the mean over whole mains periods where the trace is long enough; `u_mean_V` its standard uncertainty from the
    trace's own slow wander, noise and codes. `mains_V` is the largest amplitude at the mains frequency or its double, and
    `mains_Hz` where it is; both `None` where none stands out. `drift_V` is the change from end to end by a straight line.
    `flags` are those that the trace alone shows.
    """

    mean_V: float
    u_mean_V: float
    noise_V: float
    duration_s: float
    samples: int
    drift_V: float
    mains_V: float | None
    mains_Hz: float | None
    step_V: float
    flags: tuple[str, ...] = ()


def summarise_trace(record: Record, conditions: Conditions) -> TraceSummary:
    """Summarise a still trace (dark or offset).

    The uncertainty of the mean comes from the variance of block means at growing block length (the non-overlapping Allan
    variance): it is that of the longest blocks of which there are enough, so that 1/f noise is not averaged away on
    paper. It is never below the quantisation floor: a quarter code where the noise does not dither the codes (a
    rectangular distribution of half a code has half a code / sqrt 3; GUM 4.3.7), the last of these times what dither leaves.

    Parameters
    ----------
    record : Record
        `signal_V` of shape (n,).
    conditions : Conditions
        `volts_per_code` and `averages` are used where they are known, `coupling` for the flag.

    Returns
    -------
    TraceSummary

    References
    ----------
    D. W. Allan, Proc. IEEE 54 (1966) 221: two-sample variance. JCGM 100:2008 (GUM), 4.2 and 4.3.
    """
    time, signal = record.time_s, record.signal_V
    kept = _whole_periods(time, record.dt_s)
    mean = float(signal[:kept].mean())
    tone_V, tone_Hz, residual = _mains(time, signal)
    slope, u_slope = _slope(time, residual)
    duration = float(time[-1] - time[0])
    step = conditions.volts_per_code or _code_step(signal)
    noise = float(np.std(np.diff(residual)) / math.sqrt(2))
    flags = []
    if _few(signal.size, slope, u_slope) and abs(slope) * duration > max(noise / 2, step / 2):
        flags.append("drifting")
    if tone_Hz is not None:
        flags.append("light_leak")
    if (conditions.coupling or "").upper() == "AC":
        flags.append("ac_coupled")
    if _stuck(signal, step):
        flags.append("clipped")
    u_codes = _quantisation(step, noise, conditions.averages or 1)
    return TraceSummary(
        mean_V=mean,
        u_mean_V=math.hypot(_u_mean(residual), u_codes),
        noise_V=noise,
        duration_s=duration,
        samples=signal.size,
        drift_V=slope * duration,
        mains_V=tone_V,
        mains_Hz=tone_Hz,
        step_V=step,
        flags=tuple(flags),
    )


def dark_current(
    dark: TraceSummary, offsets: Sequence[TraceSummary], *, conditions: Conditions, fixture: Fixture
) -> tuple[Estimate | None, tuple[str, ...]]:
    """Dark current of one dark trace held against its offset traces.

    I = (V_dark - V_offset) / R_eff, R_eff the load with the scope's input across it. The scope's input bias current flows in
    both traces and cancels; where there is no offset trace the fixture's offset and input bias current stand in with their
    uncertainties. For a transistor output with a pull-up it is the collector current, (V_supply - V) / R less what the
    scope draws; the offset is that of the fixture, a zero-bias trace of a pull-up says nothing of it.

    Returns
    -------
    Estimate or None
        Value with u; a bound `hi95` alone where the current does not stand out of the floor; `None` where
        nothing can be said (AC coupling, clipping, load unknown, offset unknown).
    tuple of str
        Flags.
    """
    flags = set(dark.flags) | {f for o in offsets for f in o.flags}
    if {"ac_coupled", "clipped"} & flags:
        return None, tuple(flags)
    if conditions.load_ohm is None or conditions.bias_V is None:
        return None, (*flags, "conditions_missing")
    if conditions.output_connection is OutputConnection.PULL_UP:
        value, u = _pull_up_current(dark, conditions, fixture)
    else:
        offset = _offset(offsets, conditions, fixture)
        if offset is None:
            return None, (*flags, "conditions_missing")
        value, u = _sensed_current(dark, offset, conditions, fixture)
    if conditions.input_ohm is not None and conditions.input_ohm < 100 * conditions.load_ohm:
        flags.add("low_input_resistance")
    if value < _DETECTED * u:
        return Estimate(hi95=_upper_bound(value, u)), (*flags, "below_floor")
    return Estimate(value=value, u=u), tuple(flags)


def junction_bias(bias_V: float, current_A: float, resistance_ohm: float) -> float:
    """Bias across the junction: what is set, less the drop across the sense resistor."""
    return bias_V - current_A * resistance_ohm


def _sensed_current(
    dark: TraceSummary, offset: tuple[float, float], conditions: Conditions, fixture: Fixture
) -> tuple[float, float]:
    assert conditions.load_ohm is not None
    resistance = fixture.effective_load(conditions.load_ohm, conditions.input_ohm)
    assert resistance.value is not None
    assert resistance.u is not None
    difference = dark.mean_V - offset[0]
    u_difference = math.hypot(dark.u_mean_V, offset[1])
    value = difference / resistance.value
    relative = math.hypot(resistance.u / resistance.value, fixture.u_gain_ratio)
    return value, math.hypot(u_difference / resistance.value, value * relative)


def _pull_up_current(dark: TraceSummary, conditions: Conditions, fixture: Fixture) -> tuple[float, float]:
    assert conditions.load_ohm is not None
    assert conditions.bias_V is not None
    known = fixture.load(conditions.load_ohm)
    load, u_load = (known.actual_ohm, known.u_actual_ohm) if known else (conditions.load_ohm, 0.0)
    supply = conditions.bias_read_V if conditions.bias_read_V is not None else conditions.bias_V
    seen = dark.mean_V - fixture.offset_V
    drawn = 0.0 if conditions.input_ohm is None else seen / conditions.input_ohm
    value = (supply - seen) / load - drawn
    u_seen = math.hypot(dark.u_mean_V, fixture.u_offset_V, fixture.u_gain_ratio * seen)
    return value, math.hypot(u_seen / load, (supply - seen) / load * u_load / load)


def _offset(offsets: Sequence[TraceSummary], conditions: Conditions, fixture: Fixture) -> tuple[float, float] | None:
    """Offset and its uncertainty: the mean of the traces around, widened by what they disagree."""
    if offsets:
        means = np.array([o.mean_V for o in offsets])
        u_each = math.sqrt(sum(o.u_mean_V**2 for o in offsets)) / len(offsets)
        moved = float(np.ptp(means)) / math.sqrt(12) if len(offsets) > 1 else 0.0
        return float(means.mean()), math.hypot(u_each, moved)
    if fixture.offset_V == 0.0 and fixture.u_offset_V == 0.0:
        return None
    assert conditions.load_ohm is not None
    resistance = fixture.effective_load(conditions.load_ohm, conditions.input_ohm).value
    assert resistance is not None
    leak, u_leak = fixture.scope_input_bias_A * resistance, fixture.u_scope_input_bias_A * resistance
    return fixture.offset_V + leak, math.hypot(fixture.u_offset_V, u_leak)


def _upper_bound(value: float, u: float) -> float:
    """95 % upper bound of a current that cannot be negative: the normal likelihood cut off at zero.

    The quantile of a normal distribution truncated to positive values (JCGM 106:2012, 6.2, with a prior that is flat above zero).
    """
    below_zero = float(stats.norm.cdf(-value / u))
    return value + u * float(stats.norm.ppf(below_zero + 0.95 * (1 - below_zero)))


def _whole_periods(time: FloatArray, dt_s: float) -> int:
    """Samples that fill whole periods of 50 and 60 Hz (100 ms, else 20 ms); all where the trace is shorter."""
    for unit_s in (0.1, 0.02):
        span = time[-1] - time[0] + dt_s
        if span >= unit_s * (1 - 1e-6):
            wanted = math.floor(span / unit_s + 1e-6) * unit_s
            return int(np.searchsorted(time, time[0] + wanted - dt_s / 2))
    return time.size


def _mains(time: FloatArray, signal: FloatArray) -> tuple[float | None, float | None, FloatArray]:
    """Amplitude and frequency of the strongest of mains and its double that stands out, and the trace without it."""
    best: tuple[float, float] = (0.0, 0.0)
    residual = signal - signal.mean()
    for base in MAINS_Hz:
        for frequency in (base, 2 * base):
            if (time[-1] - time[0]) * frequency < 1 or signal.size < _FEWEST:
                continue
            amplitude, chance = _tone(time, signal, frequency)
            if chance < _SIGNIFICANT and amplitude > best[0]:
                best = (amplitude, frequency)
    if best[1] == 0.0:
        return None, None, residual
    return best[0], best[1], _without(time, signal, best[1])


def _tone(time: FloatArray, signal: FloatArray, frequency_Hz: float) -> tuple[float, float]:
    """Amplitude of a tone by least squares with a straight line, and the chance that noise near it gives as much.

    The noise is taken from the tones beside it, so that 1/f noise does not pass for mains.
    """
    amplitude = _amplitude(time, signal, frequency_Hz)
    width = 1.0 / (time[-1] - time[0])
    beside = [
        _amplitude(time, signal, frequency_Hz + k * width)
        for k in (-4.5, -3.5, -2.5, 2.5, 3.5, 4.5)
        if frequency_Hz + k * width > 1.5 * width
    ]
    power = float(np.mean(np.square(beside))) if beside else 0.0
    if power == 0.0:
        return amplitude, 0.0 if amplitude > 0 else 1.0
    # Each squared amplitude of noise has two degrees of freedom: their ratio follows F(2, 2k).
    return amplitude, float(stats.f.sf(amplitude**2 / power, 2, 2 * len(beside)))


def _amplitude(time: FloatArray, signal: FloatArray, frequency_Hz: float) -> float:
    solved = _tone_fit(time, signal, frequency_Hz)[0]
    return float(math.hypot(solved[2], solved[3]))


def _tone_fit(time: FloatArray, signal: FloatArray, frequency_Hz: float) -> tuple[FloatArray, FloatArray]:
    phase = 2 * math.pi * frequency_Hz * (time - time[0])
    centred = (time - time.mean()) / (time[-1] - time[0])
    design = np.column_stack([np.ones_like(time), centred, np.cos(phase), np.sin(phase)])
    solved = np.linalg.lstsq(design, signal, rcond=None)[0]
    return np.asarray(solved, dtype=np.float64), design


def _without(time: FloatArray, signal: FloatArray, frequency_Hz: float) -> FloatArray:
    cleaned = signal - signal.mean()
    base = frequency_Hz
    for harmonic in (base / 2, base, 2 * base):
        if (time[-1] - time[0]) * harmonic >= 1:
            solved, design = _tone_fit(time, cleaned, harmonic)
            cleaned = cleaned - design[:, 2:] @ solved[2:]
    return np.asarray(cleaned, dtype=np.float64)


def _blocks(signal: FloatArray, count: int) -> FloatArray:
    size = signal.size // count
    return np.asarray(signal[: size * count].reshape(count, size).mean(axis=1), dtype=np.float64)


def _u_mean(residual: FloatArray) -> float:
    """Standard uncertainty of the mean from the Allan variance at growing block length.

    For white noise the Allan variance of blocks of length n/k, over k, is the variance of the mean whatever k; for slower noise it
    grows as k falls. The largest of these is taken, each lowered by its own statistical error so that the
    largest of several noisy figures is not biased high.
    """
    best = 0.0
    count = min(_BLOCKS, residual.size // 2)
    while count >= 4:
        means = _blocks(residual, count)
        allan = float(np.mean(np.diff(means) ** 2) / 2)
        variance = allan / count
        error = math.sqrt(3.0 / count)  # relative, of an Allan variance from count blocks
        best = max(best, variance / (1 + error) if count < min(_BLOCKS, residual.size // 2) else variance)
        count //= 2
    return math.sqrt(best)


def _slope(time: FloatArray, signal: FloatArray) -> tuple[float, float]:
    """Slope and its uncertainty from block means, so that correlated noise is not counted as many samples."""
    count = min(_BLOCKS, signal.size // 2)
    if count < 4:
        return 0.0, math.inf
    times, means = _blocks(time, count), _blocks(signal, count)
    fitted = stats.linregress(times, means)
    return float(fitted.slope), float(fitted.stderr)


def _few(size: int, slope: float, u_slope: float) -> bool:
    """Whether a slope is more than noise would give but once in ten thousand."""
    freedom = min(_BLOCKS, size // 2) - 2
    if freedom < 2 or not math.isfinite(u_slope):
        return False
    if u_slope == 0.0:
        return slope != 0.0
    return bool(2 * stats.t.sf(abs(slope) / u_slope, freedom) < _SIGNIFICANT)


def _code_step(signal: FloatArray) -> float:
    """Smallest step between different values of a trace: its code, or rounding in the file; 0 where all are equal."""
    values = np.unique(signal)
    return float(np.diff(values).min()) if values.size > 1 else 0.0


def _quantisation(step_V: float, noise_V: float, averages: int) -> float:
    """What the codes leave of uncertainty in a mean.

    Noise of half a code or more dithers the codes away (the error left falls as exp(-2 pi^2 s^2), s the noise in codes: the first
    term of the characteristic function of a rounded normal variable). With averaging in the scope
    the noise that reached the codes is larger by the root of the count.
    """
    if step_V == 0.0:
        return 0.0
    in_codes = noise_V * math.sqrt(averages) / step_V
    return step_V / math.sqrt(12) * math.exp(-2 * math.pi**2 * min(in_codes, 5.0) ** 2)


def _stuck(signal: FloatArray, step_V: float) -> bool:
    """Whether a trace sits at the end of the range: many samples equal to its extreme, and others beside it."""
    if step_V <= 0:
        return False
    spread = float(np.ptp(signal)) / step_V
    low, high = float(np.mean(signal == signal.min())), float(np.mean(signal == signal.max()))
    return spread >= 4 and max(low, high) > 0.3
