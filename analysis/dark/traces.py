"""What a still trace (dark or offset) says: its mean, how well that is known, and what disturbs it."""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np

from darkedge.analysis.captures import Conditions, FloatArray, Record
from darkedge.analysis.dark.mains import find_ripple, without_ripple
from darkedge.analysis.dark.wander import u_of_mean

_FEWEST = 16
_PERIOD_S = 0.02
_BOTH_PERIODS_S = 0.1
"""Whole periods of 50 and of 60 Hz: five and six."""
_DRIFT_U = 20.0
"""Drift from end to end, over what is left of u without it, from which a trace drifts: noise of any colour reaches it in one trace of a
hundred at most (white noise has sqrt 12 at one standard deviation, slower noise less)."""
_DITHERED_CODES = 3.0
_SAME_VALUE_RATIO = 1e-9
"""Values closer than this differ by arithmetic, not by a code."""


@dataclass(frozen=True, slots=True, kw_only=True)
class TraceSummary:
    """What one still trace says.

    `mean_V` is the mean over whole mains periods where the trace is long enough; `u_mean_V` its standard uncertainty from noise of
    any colour and from the codes. `noise_V` is the standard deviation of a sample without drift and ripple. `mains_V` is the
    amplitude of the strongest of mains and its double and `mains_Hz` its frequency; both `None` where none stands out.
    `drift_V` is the change from end to end by a straight line. `step_V` is the code, 0 where it cannot be told.
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

    The uncertainty of the mean is that of white, flicker and random-walk noise together (`u_of_mean`), with what the codes leave: half
    a code as a rectangle where the noise does not dither them (GUM 4.3.7), less as it does. The level of a
    trace that drifts is anywhere between its ends. A mean over whole periods is free of ripple.

    Parameters
    ----------
    record : Record
        `signal_V` of shape (n,).
    conditions : Conditions
        `volts_per_code` and `averages` are used where they are known, `coupling` for the flag.

    Returns
    -------
    TraceSummary
        With the flags `drifting`, `light_leak`, `ac_coupled`, `clipped`, and `noise_unknown` where the trace has fewer than
        16 samples, is shorter than a period of 50 Hz, or never moves although its code is not known.

    References
    ----------
    JCGM 100:2008 (GUM), 4.2 and 4.3. Whole periods null a tone and its harmonics: the sinc response of a mean.
    """
    time, signal = record.time_s, record.signal_V
    duration = float(time[-1] - time[0])
    step = conditions.volts_per_code or _code_step(signal)
    ripple = find_ripple(time, signal) if signal.size >= _FEWEST else None
    rest = without_ripple(time, signal, ripple)
    line = np.polynomial.Polynomial.fit(time, rest, 1)(time)
    drift = float(line[-1] - line[0])
    noise = float(np.std(rest - line))
    kept = _whole_periods(time, record.dt_s, None if ripple is None else ripple.mains_Hz)
    u_noise = u_of_mean(rest) * math.sqrt(signal.size / kept)
    u_codes = _quantisation(step, noise, float(np.ptp(rest)), conditions.averages or 1)
    drifting = abs(drift) > max(_DRIFT_U * u_of_mean(rest - line), step) and signal.size >= _FEWEST
    told = {
        "drifting": drifting,
        "light_leak": ripple is not None,
        "ac_coupled": (conditions.coupling or "").upper() == "AC",
        "clipped": _is_clipped(signal, step),
        "noise_unknown": signal.size < _FEWEST or step == 0.0 or duration + record.dt_s < _PERIOD_S * (1 - 1e-6),
    }
    return TraceSummary(
        mean_V=float(signal[:kept].mean()),
        u_mean_V=math.hypot(u_noise, u_codes, drift / math.sqrt(12) if drifting else 0.0),
        noise_V=noise,
        duration_s=duration,
        samples=signal.size,
        drift_V=drift,
        mains_V=None if ripple is None else ripple.amplitude_V,
        mains_Hz=None if ripple is None else ripple.frequency_Hz,
        step_V=step,
        flags=tuple(flag for flag, true in told.items() if true),
    )


def _whole_periods(time_s: FloatArray, dt_s: float, mains_Hz: float | None) -> int:
    """Samples that fill whole periods of the mains (50 and 60 Hz alike where it is not known); all where there is none."""
    span = float(time_s[-1] - time_s[0]) + dt_s
    for unit_s in (_BOTH_PERIODS_S, _PERIOD_S if mains_Hz is None else 1 / mains_Hz):
        if span >= unit_s * (1 - 1e-6):
            wanted = math.floor(span / unit_s + 1e-6) * unit_s
            return int(np.searchsorted(time_s, time_s[0] + wanted - dt_s / 2))
    return time_s.size


def _code_step(signal_V: FloatArray) -> float:
    """Smallest step between different values of a trace: its code, or rounding in the file; 0 where all are equal."""
    steps = np.diff(np.unique(signal_V))
    steps = steps[steps > _SAME_VALUE_RATIO * float(np.max(np.abs(signal_V)))]
    return float(steps.min()) if steps.size else 0.0


def _quantisation(step_V: float, noise_V: float, spread_V: float, averages: int) -> float:
    """What the codes leave of uncertainty in a mean.

    Noise dithers the codes away: the error left falls as exp(-2 pi^2 s^2), s the noise in codes (first term of the characteristic
    function of a rounded normal variable), s^2 being what is seen less the 1/12 of the codes themselves (Sheppard).
    A trace that moves over fewer than three codes does not show its noise, and counts as not dithered. With averaging in
    the scope the noise that reached the codes is larger by the root of the count.
    """
    if step_V == 0.0:
        return 0.0
    seen = math.sqrt(averages) / step_V
    codes_squared = max((noise_V * seen) ** 2 - 1 / 12, 0.0) if spread_V * seen >= _DITHERED_CODES else 0.0
    return step_V / math.sqrt(12) * math.exp(-2 * math.pi**2 * min(codes_squared, 25.0))


def _is_clipped(signal_V: FloatArray, step_V: float) -> bool:
    """Whether a trace is cut off at an end of the range.

    A third of the samples stand at one extreme, again and again, few at the other, and yet one in twenty is two codes away: noise
    that is not cut off has samples on both sides of where it is densest.
    """
    low, high = float(signal_V.min()), float(signal_V.max())
    if step_V <= 0 or high - low < 2 * step_V:
        return False
    for end, other in ((low, high), (high, low)):
        at_end = np.abs(signal_V - end) < 0.5 * step_V
        visits = int(np.count_nonzero(np.diff(at_end.astype(np.int8)) == 1)) + int(at_end[0])
        away = float(np.mean(np.abs(signal_V - end) > 1.5 * step_V))
        far = float(np.mean(np.abs(signal_V - other) < 1.5 * step_V))
        if float(at_end.mean()) > 0.3 and visits >= 8 and away > 0.05 and far < 0.05:
            return True
    return False
