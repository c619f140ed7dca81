"""Noise of a record: its size, its memory, and what the codes of the digitiser leave."""

import numpy as np
import pytest
from numpy.typing import NDArray
from scipy.signal import lfilter

from darkedge.analysis.waveform.noise import code_step_V, difference_sigma, flat_noise, u_quantised_V

Array = NDArray[np.float64]


def white(n: int, *, seed: int = 1) -> Array:
    return np.random.default_rng(seed).standard_normal(n)


def one_pole_noise(n: int, memory: float, *, seed: int) -> Array:
    """Noise of unit variance whose correlation falls by `memory` from sample to sample."""
    driven = lfilter([1.0], [1.0, -memory], white(n + 1000, seed=seed))[1000:]
    return np.asarray(driven * np.sqrt(1 - memory**2))


def test_differences_tell_white_noise() -> None:
    """Source: median absolute deviation of normal noise, 0.6745 sigma; differences have sqrt(2) sigma."""
    assert difference_sigma(0.02 * white(5000)) == pytest.approx(0.02, rel=0.04)  # two standard deviations of it


def test_edges_and_drift_do_not_enter_the_differences() -> None:
    t = np.linspace(0, 1, 5000)
    signal = 0.02 * white(5000) + 3 * (t > 0.4) + 0.5 * t
    assert difference_sigma(signal) == pytest.approx(0.02, rel=0.05)


def test_noise_below_one_code_is_still_told() -> None:
    """Most differences are zero then; the root mean square of the small ones counts the flips."""
    noise = np.round(0.4 * white(5000))
    assert difference_sigma(noise + 100.0 * (np.arange(5000) > 2500)) == pytest.approx(np.std(noise), rel=0.1)


def test_a_clean_logic_trace_has_no_noise() -> None:
    assert difference_sigma(np.repeat([0.0, 1.0, 0.0, 1.0], 50)) == 0.0


def test_flat_parts_tell_size_and_memory_of_noise() -> None:
    """A mean of n samples of one-pole noise has (1 + a) / (1 - a) times the variance of white noise over n.

    Source: Bartlett (1946), variance of the mean of a first-order autoregressive series.
    """
    memory = np.exp(-2 * np.pi / 10)  # noise bandwidth a tenth of the sampling rate
    found = [flat_noise([one_pole_noise(2000, memory, seed=s)], fallback_V=9.0) for s in range(20)]
    assert np.mean([noise.sigma_V for noise in found]) == pytest.approx(1.0, rel=0.02)
    expected = (1 + memory) / (1 - memory)
    assert np.mean([noise.inflation(2000) for noise in found]) == pytest.approx(expected, rel=0.15)


def test_white_noise_is_not_taken_for_correlated() -> None:
    found = [flat_noise([white(2000, seed=s)], fallback_V=9.0).inflation(2000) for s in range(20)]
    assert np.mean(found) == pytest.approx(1.0, abs=0.1)


def test_uncertainty_of_a_mean_covers_its_scatter_whatever_the_memory() -> None:
    """Means of 500 samples scatter as `u_mean_V` says, for white noise and for noise of a thirtieth of the rate."""
    for memory in (0.0, float(np.exp(-2 * np.pi / 30))):
        means, promised = [], []
        for seed in range(200):
            signal = one_pole_noise(500, memory, seed=seed)
            means.append(np.mean(signal))
            promised.append(flat_noise([signal], fallback_V=9.0).u_mean_V(500))
        ratio = np.std(means) / np.sqrt(np.mean(np.square(promised)))
        assert 0.7 < ratio < 1.4


def test_flat_parts_too_short_leave_the_noise_unknown() -> None:
    noise = flat_noise([white(5)], fallback_V=0.3)
    assert not noise.known
    assert noise.sigma_V == 0.3


def test_code_step_is_seen_where_all_differences_are_whole_multiples() -> None:
    signal = np.round(np.sin(np.linspace(0, 20, 3000)) * 100) * 0.0025
    assert code_step_V(signal) == pytest.approx(0.0025)


def test_no_code_step_is_seen_in_unrounded_numbers() -> None:
    assert code_step_V(np.sin(np.linspace(0, 20, 3000)) + 0.01 * white(3000)) == 0.0


def test_stated_code_step_goes_before_the_one_seen() -> None:
    assert code_step_V(white(100), stated_V=0.004) == 0.004


def test_codes_leave_a_twelfth_root_where_noise_does_not_dither_them() -> None:
    """step / sqrt(12) without noise, next to nothing once the noise is a code.

    Source: Widrow and Kollar, Quantization Noise: the error of the mean falls as exp(-2 pi^2 sigma^2 / step^2).
    """
    assert u_quantised_V(0.0, 0.01) == pytest.approx(0.01 / np.sqrt(12))
    assert u_quantised_V(0.01, 0.01) < 1e-8
    assert u_quantised_V(0.01, 0.0) == 0.0
