"""Mains in a still trace: ripple at 50 or 60 Hz, or at twice that, and the trace without it."""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np

from darkedge.analysis.captures import FloatArray

MAINS_Hz = (50.0, 60.0)
_OFF_RATIO = 0.005
"""How far the mains may be from its nominal frequency (grids hold it within 1 %, mostly within 0.2 %; common practice, no source)."""
_CHANCE = 1e-4
"""Chance at which noise alone is called mains: one trace in ten thousand."""
_BESIDE = np.array([-4.5, -3.5, -2.5, 2.5, 3.5, 4.5])
"""Where the noise beside a tone is looked at, in reciprocal lengths of the trace: clear of the tone itself."""
_THIN_S = 5e-4
"""Samples are averaged to this step before the search: sixteen to a period of 120 Hz."""


@dataclass(frozen=True, slots=True, kw_only=True)
class Ripple:
    """The strongest of mains and its double: amplitude, the frequency found, and the nominal mains frequency behind it."""

    amplitude_V: float
    frequency_Hz: float
    mains_Hz: float


def find_ripple(time_s: FloatArray, signal_V: FloatArray) -> Ripple | None:
    """Find mains ripple that stands out of the noise beside it.

    A sine and a straight line are fitted by least squares, so the trace need not hold whole periods. The squared amplitude is
    held against those of tones beside it, so that slow noise does not pass for mains: their ratio follows F(2, 2k) for k tones beside.

    Parameters
    ----------
    time_s, signal_V : arrays, shape (n,)

    Returns
    -------
    Ripple or None
        `None` where nothing stands out at one in ten thousand, where the trace is shorter than a period, or where its steps are too coarse.

    References
    ----------
    Least squares of a sine: IEEE Std 1057, three-parameter sine fit. The ratio of two mean squares of
    normal noise: the F distribution.
    """
    time, signal = _thinned(time_s, signal_V)
    found = [
        ripple
        for mains in MAINS_Hz
        for nominal in (mains, 2 * mains)
        if _can_show(time, nominal) and (ripple := _ripple_near(time, signal, nominal, mains)) is not None
    ]
    return max(found, key=lambda ripple: ripple.amplitude_V, default=None)


def without_ripple(time_s: FloatArray, signal_V: FloatArray, ripple: Ripple | None) -> FloatArray:
    """The trace less its mean, and less the ripple with its half and its double, shape (n,)."""
    rest: FloatArray = signal_V - signal_V.mean()
    if ripple is None:
        return rest
    for frequency in (ripple.frequency_Hz / 2, ripple.frequency_Hz, 2 * ripple.frequency_Hz):
        if _can_show(time_s, frequency):
            phase = 2 * math.pi * frequency * (time_s - time_s[0])
            tones = np.column_stack([np.ones_like(phase), time_s - time_s.mean(), np.cos(phase), np.sin(phase)])
            rest = rest - tones[:, 2:] @ np.linalg.lstsq(tones, rest, rcond=None)[0][2:]
    return rest


def _thinned(time_s: FloatArray, signal_V: FloatArray) -> tuple[FloatArray, FloatArray]:
    step_s = float(time_s[-1] - time_s[0]) / (time_s.size - 1)
    each = max(1, min(int(_THIN_S / step_s), time_s.size // 2))
    kept = time_s.size // each * each
    return time_s[:kept].reshape(-1, each).mean(axis=1), signal_V[:kept].reshape(-1, each).mean(axis=1)


def _can_show(time_s: FloatArray, frequency_Hz: float) -> bool:
    """Whether a trace holds a period, at steps well under half of one."""
    span = float(time_s[-1] - time_s[0])
    return (
        span * frequency_Hz * time_s.size / (time_s.size - 1) >= 0.999 and (time_s.size - 1) / span > 2.5 * frequency_Hz
    )


def _ripple_near(time_s: FloatArray, signal_V: FloatArray, nominal_Hz: float, mains_Hz: float) -> Ripple | None:
    """The strongest tone about a nominal frequency, `None` where noise may give as much at one of those tried."""
    length = float(time_s[-1] - time_s[0])
    tried = _tried(length, nominal_Hz)
    amplitudes = _amplitudes(time_s, signal_V, tried)
    strongest = int(np.argmax(amplitudes))
    beside = tried[strongest] + _BESIDE / length
    power = float(np.mean(np.square(_amplitudes(time_s, signal_V, beside[beside > 1.5 / length]))))
    if power == 0.0:
        return None
    count = int(np.count_nonzero(beside > 1.5 / length))
    # F(2, 2k) beyond x is (1 + x/k)^-k; tones a quarter of a resolved step apart are one trial in four.
    chance = max(1.0, tried.size / 4) * (1 + float(amplitudes[strongest]) ** 2 / power / count) ** -count
    if chance >= _CHANCE:
        return None
    return Ripple(amplitude_V=float(amplitudes[strongest]), frequency_Hz=float(tried[strongest]), mains_Hz=mains_Hz)


def _tried(length_s: float, nominal_Hz: float) -> FloatArray:
    """Frequencies about the nominal, closer than a quarter of what the trace resolves; the nominal alone in a short one."""
    steps = math.floor(_OFF_RATIO * nominal_Hz * 4 * length_s)
    tried: FloatArray = nominal_Hz + np.arange(-steps, steps + 1) / (4 * length_s)
    return tried


def _amplitudes(time_s: FloatArray, signal_V: FloatArray, frequencies_Hz: FloatArray) -> FloatArray:
    """Amplitude of a sine at each frequency, fitted by least squares together with a straight line; shape of the frequencies."""
    line, _ = np.linalg.qr(np.column_stack([np.ones_like(time_s), time_s - time_s.mean()]))
    phase = 2 * math.pi * np.outer(time_s - time_s[0], frequencies_Hz)
    cosine, sine = np.cos(phase), np.sin(phase)
    cosine -= line @ (line.T @ cosine)
    sine -= line @ (line.T @ sine)
    cc, ss, cs = np.sum(cosine**2, axis=0), np.sum(sine**2, axis=0), np.sum(cosine * sine, axis=0)
    c, s = signal_V @ cosine, signal_V @ sine
    return np.asarray(np.hypot(ss * c - cs * s, cc * s - cs * c) / (cc * ss - cs**2), dtype=np.float64)
