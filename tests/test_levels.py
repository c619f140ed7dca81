"""State levels: the histogram method, and what is refined from the plateaus."""

import numpy as np
import pytest
from numpy.typing import NDArray

from darkedge.analysis.captures import Waveform
from darkedge.analysis.waveform.channel import Channel, measure_channel
from darkedge.analysis.waveform.levels import histogram_levels, running_mean

Array = NDArray[np.float64]


def pulse(t: Array, *, width: float, tau: float = 1.0) -> Array:
    """One pulse from 0 to 1 through one pole, starting at 0."""

    def up(x: Array) -> Array:
        return -np.expm1(-np.clip(x, 0, None) / tau)

    return up(t) - up(t - width)


def measured(signal: Array, dt: float = 1.0) -> Channel:
    channel = measure_channel(Waveform(signal_V=signal, dt_s=dt))
    assert channel is not None
    return channel


def noise(n: int, seed: int) -> Array:
    return np.random.default_rng(seed).standard_normal(n)


def test_levels_are_the_modes_of_the_two_halves() -> None:
    """Overshoot and undershoot are no part of the states. Source: the mode, as in IEEE Std 181-2011 (from memory)."""
    signal = np.concatenate((np.full(500, 0.2), [1.6, 1.4, 1.3], np.full(300, 1.2), [0.0, 0.1], np.full(500, 0.2)))
    levels = histogram_levels(signal)
    assert levels is not None
    assert (levels.low_V, levels.high_V) == pytest.approx((0.2, 1.2))


def test_a_flat_record_has_no_levels() -> None:
    assert histogram_levels(np.full(100, 0.7)) is None
    assert histogram_levels(np.full(100, 0.7) + 1e-16 * noise(100, 0)) is None


def test_a_half_without_a_mode_has_its_extreme_for_level() -> None:
    """A pulse too short to settle spends no time at its top."""
    t = np.arange(-5, 15, 0.01)
    levels = histogram_levels(pulse(t, width=0.5))
    assert levels is not None
    assert levels.high_V == pytest.approx(1 - np.exp(-0.5), rel=1e-3)


@pytest.mark.parametrize("sign", [1.0, -1.0])
@pytest.mark.parametrize("duty", [0.01, 0.02, 0.1, 0.5, 0.9, 0.98, 0.99])
def test_levels_hold_from_one_to_ninety_nine_per_cent_duty(duty: float, sign: float) -> None:
    """Both polarities, three pulses of ten thousand samples, noise 1 %: levels within their stated uncertainty."""
    n, period = 30000, 10000
    t = np.arange(n, dtype=np.float64)
    width = duty * period
    signal = sum(pulse(t - (k + 0.3) * period, width=width, tau=min(duty, 1 - duty) * 600) for k in range(-1, 3))
    levels = measured(sign * np.asarray(signal) + 0.01 * noise(n, 3)).levels
    assert abs(levels.amplitude_V - 1) < 4 * levels.u_amplitude_V
    assert levels.u_amplitude_V < 3e-3


@pytest.mark.parametrize("codes", [40, 100, 250])
def test_levels_of_coded_records_are_right_to_their_uncertainty(codes: int) -> None:
    """Without noise nothing averages between codes: u is about a code over the square root of twelve."""
    t = np.arange(-500, 3000, dtype=np.float64)
    step = 1.3 / codes
    signal = np.round((0.77 * step + 1.3 * pulse(t, width=1500, tau=40)) / step) * step
    levels = measured(signal).levels
    assert levels.u_high_V == pytest.approx(step / np.sqrt(12), rel=0.3)  # the tail's last codes dither a little
    assert abs(levels.low_V - 0.77 * step) <= step / 2
    assert abs(levels.high_V - (0.77 * step + 1.3)) <= step / 2


@pytest.mark.parametrize("white", [True, False], ids=["white", "band-limited"])
def test_stated_uncertainty_covers_the_scatter_of_the_amplitude(white: bool) -> None:
    """Two hundred captures: scatter over stated uncertainty between 0.7 and 1.4."""
    t = np.arange(-300, 1100, dtype=np.float64)
    found, stated = [], []
    for seed in range(200):
        hiss = noise(t.size + 200, seed)
        if not white:
            hiss = np.convolve(hiss, np.full(8, 8**-0.5), mode="same")
        levels = measured(pulse(t, width=500, tau=25) + 0.02 * hiss[100:-100]).levels
        found.append(levels.amplitude_V)
        stated.append(levels.u_amplitude_V)
    ratio = np.sqrt(np.mean((np.asarray(found) - 1) ** 2)) / np.sqrt(np.mean(np.square(stated)))
    assert 0.7 < ratio < 1.4


def test_the_level_of_a_settling_pulse_is_where_it_got_to() -> None:
    """Ten time constants: the tail is fitted along, so that the level is not that of the plateau's mean."""
    t = np.arange(-5, 30, 0.02)
    assert measured(pulse(t, width=10), 0.02).levels.high_V == pytest.approx(1 - np.exp(-10), abs=2e-5)


def test_ringing_does_not_reach_the_level() -> None:
    """A plateau of a badly damped system: the level comes from where the ringing has died."""
    t = np.arange(-10, 60, 0.02)
    up = np.clip(t, 0, None)
    wd = np.sqrt(1 - 0.15**2)
    signal = 1 - np.exp(-0.15 * up) * (np.cos(wd * up) + 0.15 / wd * np.sin(wd * up))
    assert measured(np.where(t < 0, 0.0, signal), 0.02).levels.high_V == pytest.approx(1.0, abs=1e-3)


def test_a_base_that_is_still_falling_when_the_record_starts_is_not_taken_for_rest() -> None:
    """The head of the record is the tail of a pulse before it; the state is where plateaus settle to."""
    t = np.arange(0, 40, 0.01)
    signal = 0.4 * np.exp(-t / 2) + pulse(t - 8, width=10)
    assert measured(signal, 0.01).levels.low_V == pytest.approx(0.0, abs=1e-3)


def test_running_mean_keeps_shape_and_level() -> None:
    signal = 5.0 + np.arange(50, dtype=np.float64)
    smooth = running_mean(signal, 7)
    assert smooth.shape == signal.shape
    assert smooth[10:40] == pytest.approx(signal[10:40])
