"""The scope's front end as arithmetic: bandwidth, noise, codes, clipping, averaging, trigger jitter.

Noise is added before the bandwidth limit, so it passes through it, as in hardware.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.signal import lfilter

FloatArray = NDArray[np.float64]
CODES = 256


@dataclass(frozen=True, slots=True, kw_only=True)
class FrontEnd:
    """What one input does to a signal."""

    range_V: float
    offset_V: float = 0.0
    bandwidth_Hz: float = 100e6
    noise_ratio: float = 0.003
    zero_error_V: float = 0.0
    skew_s: float = 0.0

    @property
    def volts_per_code(self) -> float:
        """Size of one code."""
        return self.range_V / CODES


def limit_bandwidth(signal: FloatArray, dt_s: float, bandwidth_Hz: float) -> FloatArray:
    """Pass a signal through a first-order low pass, started in the state it rests in.

    The discrete filter is the exact step-invariant one, so that edges much slower than a sample come out right and edges faster
    than it do not ring.
    """
    keep = float(np.exp(-2 * np.pi * bandwidth_Hz * dt_s))
    filtered, _ = lfilter([1 - keep], [1, -keep], signal, zi=[keep * signal[0]])
    return np.asarray(filtered, dtype=np.float64)


def to_codes(signal: FloatArray, front: FrontEnd) -> FloatArray:
    """Turn volts into volts on the grid of codes, stuck at the ends of the range."""
    codes = np.clip(np.round((signal - front.offset_V) / front.volts_per_code), -CODES // 2, CODES // 2 - 1)
    return np.asarray(codes * front.volts_per_code + front.offset_V, dtype=np.float64)
