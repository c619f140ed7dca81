"""Edges with known answers: closed forms and textbook tables, through the whole estimator."""

from collections.abc import Callable

import numpy as np
import pytest
from numpy.typing import NDArray
from scipy.special import gammainc, ndtr
from scipy.stats import exponnorm

from darkedge.analysis.captures import Waveform
from darkedge.analysis.waveform.channel import Channel, measure_channel
from darkedge.analysis.waveform.edges import TEN_NINETY, TWENTY_EIGHTY

Array = NDArray[np.float64]
Shape = Callable[[Array], Array]

EXACT = 5e-4
"""Noise-free and densely sampled: within 0.05 % of the published value."""

NOISY = 0.01
"""Signal-to-noise ratio 100, two hundred samples an edge: the mean of twenty captures within 1 %."""

SAMPLES = 4001


def step_of(f: Shape, start: float, stop: float, *, noise: float = 0.0, seed: int = 0) -> Waveform:
    """A step response sampled from `start` to `stop`, with white noise of the given size."""
    t = np.linspace(start, stop, SAMPLES)
    signal = f(t) + noise * np.random.default_rng(seed).standard_normal(t.size)
    return Waveform(signal_V=signal, dt_s=float(t[1] - t[0]), t0_s=start)


def measured(record: Waveform, fractions: tuple[float, ...] = TEN_NINETY) -> Channel:
    channel = measure_channel(record, fractions=fractions)
    assert channel is not None
    return channel


def duration(channel: Channel, edge: int = 0) -> float:
    times = channel.transitions.time_s[edge]
    return float(times[-1] - times[0])


def one_pole(t: Array) -> Array:
    return -np.expm1(-np.clip(t, 0.0, None))


def poles(n: int) -> Shape:
    """Step through n equal one-pole stages: the regularised incomplete gamma function."""
    return lambda t: gammainc(n, np.clip(t, 0.0, None))


def two_poles(ratio: float) -> Shape:
    def f(t: Array) -> Array:
        t = np.clip(t, 0.0, None)
        return 1 - (np.exp(-t) - ratio * np.exp(-t / ratio)) / (1 - ratio)

    return f


def second_order(damping: float) -> Shape:
    """Step of wn^2 / (s^2 + 2 z wn s + wn^2), wn = 1."""

    def f(t: Array) -> Array:
        t = np.clip(t, 0.0, None)
        if damping < 1:
            wd = np.sqrt(1 - damping**2)
            return 1 - np.exp(-damping * t) * (np.cos(wd * t) + damping / wd * np.sin(wd * t))
        root = np.sqrt(damping**2 - 1)
        fast, slow = damping + root, damping - root
        return 1 - (fast * np.exp(-slow * t) - slow * np.exp(-fast * t)) / (fast - slow)

    return f


def ramped_pole(length: float) -> Shape:
    """One pole driven by a ramp from 0 to 1 of the given length."""

    def f(t: Array) -> Array:
        t = np.clip(t, 0.0, None)
        on_ramp = (np.minimum(t, length) + np.expm1(-np.minimum(t, length))) / length
        return np.where(t > length, 1 - (1 - on_ramp) * np.exp(-(t - length)), on_ramp)

    return f


def with_tail(share: float, ratio: float) -> Shape:
    def f(t: Array) -> Array:
        t = np.clip(t, 0.0, None)
        return 1 - (1 - share) * np.exp(-t) - share * np.exp(-t / ratio)

    return f


def pulse_of(f: Shape, width: float) -> Shape:
    return lambda t: f(t) - f(t - width)


@pytest.mark.parametrize(
    ("fractions", "expected"),
    [(TEN_NINETY, np.log(9)), (TWENTY_EIGHTY, np.log(4)), ((0.05, 0.5, 0.95), np.log(19))],
)
def test_one_pole_takes_the_logarithm_of_the_odds(fractions: tuple[float, ...], expected: float) -> None:
    """10-90 % takes RC ln 9, 20-80 % RC ln 4, 5-95 % RC ln 19.

    Source: 1 - exp(-t / RC) solved at both levels; levels per IEEE Std 181-2011.
    """
    channel = measured(step_of(one_pole, -10, 30), fractions)
    assert duration(channel) == pytest.approx(expected, rel=EXACT)


def test_one_pole_reaches_half_after_rc_ln_2() -> None:
    """Source: 1 - exp(-t / RC) = 1/2."""
    channel = measured(step_of(one_pole, -10, 30))
    assert channel.transitions.time_s[0, 1] == pytest.approx(np.log(2), rel=EXACT)


@pytest.mark.parametrize(("fractions", "expected"), [(TEN_NINETY, 2.5631031), (TWENTY_EIGHTY, 1.6832425)])
def test_gaussian_edge_takes_the_distance_of_the_normal_quantiles(
    fractions: tuple[float, ...], expected: float
) -> None:
    """Step = Phi(t / sigma): 10-90 % takes 2.5631031 sigma, 20-80 % 1.6832425 sigma.

    Source: quantiles of the normal distribution.
    """
    channel = measured(step_of(ndtr, -15, 20), fractions)
    assert duration(channel) == pytest.approx(expected, rel=EXACT)


@pytest.mark.parametrize(("fractions", "expected"), [(TEN_NINETY, 0.8), (TWENTY_EIGHTY, 0.6)])
def test_rectangular_impulse_response_gives_a_straight_ramp(fractions: tuple[float, ...], expected: float) -> None:
    """A ramp of length T takes 0.8 T from 10 to 90 %, 0.6 T from 20 to 80 %. Source: exact."""
    channel = measured(step_of(lambda t: np.clip(t, 0, 1), -3, 5), fractions)
    assert duration(channel) == pytest.approx(expected, rel=EXACT)


def test_triangular_impulse_response() -> None:
    """Impulse response (2/T)(1 - t/T): 10-90 % takes 0.6324555 T, half is reached at 0.2928932 T.

    Source: 2 t - t^2 solved at the levels: sqrt(0.9) - sqrt(0.1) and 1 - sqrt(0.5).
    """
    channel = measured(step_of(lambda t: np.where(t >= 1, 1.0, 2 * np.clip(t, 0, 1) - np.clip(t, 0, 1) ** 2), -3, 5))
    assert duration(channel) == pytest.approx(0.6324555, rel=EXACT)
    assert channel.transitions.time_s[0, 1] == pytest.approx(0.2928932, rel=EXACT)


def test_trapezoid_has_the_width_of_its_flat_and_half_of_both_ramps() -> None:
    """50 % width = flat + (rise + fall) / 2. Source: geometry of the trapezoid, levels per IEEE Std 181-2011."""
    record = step_of(lambda t: np.clip(t / 2, 0, 1) - np.clip((t - 12) / 4, 0, 1), -5, 25)
    times = measured(record).transitions.time_s
    assert times[1, 1] - times[0, 1] == pytest.approx(10 + (2 + 4) / 2, rel=EXACT)
    assert times[0, 2] - times[0, 0] == pytest.approx(0.8 * 2, rel=EXACT)
    assert times[1, 2] - times[1, 0] == pytest.approx(0.8 * 4, rel=EXACT)


@pytest.mark.parametrize(
    ("damping", "rise"),
    [(0.2, 1.203), (0.3, 1.321), (0.4, 1.463), (0.5, 1.638), (0.6, 1.854), (0.7, 2.126), (0.8, 2.467), (0.9, 2.883)],
)
def test_second_order_rise_times_are_those_of_the_textbook_table(damping: float, rise: float) -> None:
    """Normalised 10-90 % rise time of underdamped systems.

    Source: Nise, Control Systems Engineering, table of normalised rise time for second-order systems.
    """
    channel = measured(step_of(second_order(damping), -10, 60))
    assert duration(channel) == pytest.approx(rise, abs=0.0005 + EXACT * rise)  # half of the last printed digit


@pytest.mark.parametrize(("damping", "half"), [(0.5, 1.2940), (0.7, 1.4281), (1.0001, 1.6783), (2.0, 2.8649)])
def test_second_order_delay_to_half(damping: float, half: float) -> None:
    """Source: the second-order step response solved numerically at one half."""
    channel = measured(step_of(second_order(damping), -10, 60))
    assert channel.transitions.time_s[0, 1] == pytest.approx(half, abs=5e-4)


@pytest.mark.parametrize(
    ("n", "rise", "half"),
    [
        (1, 2.197225, 0.693147), (2, 3.357909, 1.678347), (3, 4.220255, 2.674060), (4, 4.936014, 3.672061),
        (5, 5.560999, 4.670909), (6, 6.122776, 5.670161),
    ],
)  # fmt: skip
def test_cascades_of_equal_poles_are_slower_than_the_root_sum_of_squares_says(n: int, rise: float, half: float) -> None:
    """n equal stages: 2.197, 3.358, 4.220 ... RC, where root-sum-square would say sqrt(n) ln 9.

    Source: quantiles of the gamma distribution, which is the step response of the cascade.
    """
    channel = measured(step_of(poles(n), -10, 40))
    assert duration(channel) == pytest.approx(rise, rel=EXACT)
    assert channel.transitions.time_s[0, 1] == pytest.approx(half, rel=EXACT)


@pytest.mark.parametrize(
    ("ratio", "rise"), [(0.1, 2.214994), (0.2, 2.272680), (1 / 3, 2.390892), (0.5, 2.589609), (0.7, 2.875735)]
)
def test_two_unequal_poles(ratio: float, rise: float) -> None:
    """Source: the two-exponential step response solved numerically at 10 and 90 %."""
    assert duration(measured(step_of(two_poles(ratio), -10, 40))) == pytest.approx(rise, rel=EXACT)


@pytest.mark.parametrize(
    ("sigma", "rise"), [(0.1, 2.206711), (0.2, 2.261143), (0.5, 2.589081), (1.0, 3.452208), (2.0, 5.671917)]
)
def test_one_pole_behind_a_gaussian_front_end(sigma: float, rise: float) -> None:
    """Source: the distribution of a normal plus an exponential variable solved numerically at 10 and 90 %."""
    channel = measured(step_of(lambda t: exponnorm.cdf(t, 1 / sigma, 0, sigma), -12, 40))
    assert duration(channel) == pytest.approx(rise, rel=EXACT)


@pytest.mark.parametrize(("length", "rise"), [(0.5, 2.229170), (1.0, 2.360727), (2.0, 2.757264), (4.0, 3.847710)])
def test_one_pole_driven_by_a_ramp(length: float, rise: float) -> None:
    """Source: the ramp response of one pole solved numerically at 10 and 90 %."""
    assert duration(measured(step_of(ramped_pole(length), -10, 40))) == pytest.approx(rise, rel=EXACT)


@pytest.mark.parametrize(
    ("share", "ratio", "fall", "half"),
    [(0.1, 10, 3.316758, 0.792071), (0.2, 10, 6.874517, 0.923674), (0.05, 20, 2.709952, 0.743170)],
)
def test_slow_tails_stretch_the_last_part_of_the_edge(share: float, ratio: float, fall: float, half: float) -> None:
    """(1 - a) exp(-t) + a exp(-t / r): 90-10 % time and time to half.

    Source: the sum of two exponentials solved numerically at the levels.
    """
    channel = measured(step_of(with_tail(share, ratio), -20, 12 * ratio))
    assert duration(channel) == pytest.approx(fall, rel=EXACT)
    assert channel.transitions.time_s[0, 1] == pytest.approx(half, abs=EXACT * fall)


@pytest.mark.parametrize(
    ("width", "peak", "excess", "rise"),
    [
        (1, 0.632121, 0.313262, 0.776137), (2, 0.864665, 0.126928, 1.415536), (3, 0.950213, 0.048587, 1.832500),
        (5, 0.993262, 0.006715, 2.139099),
    ],
)  # fmt: skip
def test_short_pulses_are_measured_against_their_own_peak(
    width: float, peak: float, excess: float, rise: float
) -> None:
    """A pulse of width w through one pole peaks at 1 - exp(-w), is wider than w at half of its own peak, and rises faster.

    Source: 1 - exp(-t) up to w and its decay after it, solved at 10, 50 and 90 % of the peak; the fall stays ln 9.
    """
    channel = measured(step_of(pulse_of(one_pole, width), -5, 20))
    times = channel.transitions.time_s
    assert channel.levels.high_V == pytest.approx(peak, abs=1e-3)
    assert times[1, 1] - times[0, 1] - width == pytest.approx(excess, abs=2e-3)  # a third of the sample step of 6e-3
    assert duration(channel, 0) == pytest.approx(rise, rel=3e-3)
    assert duration(channel, 1) == pytest.approx(np.log(9), rel=EXACT)


@pytest.mark.parametrize(
    ("duty", "period", "peak", "trough"), [(0.5, 1.0, 0.622459, 0.377541), (0.1, 10.0, 0.632149, 7.8e-5)]
)
def test_periodic_drive_goes_between_its_own_peak_and_trough(
    duty: float, period: float, peak: float, trough: float
) -> None:
    """Steady state of one pole under a square drive: peak (1 - e^-DT) / (1 - e^-T), trough peak e^-(1-D)T.

    Source: continuity of the response over one period.
    """
    t = np.linspace(0, 8 * period, 8001) + 0.6 * period
    phase = np.mod(t, period)
    lit = 1 - (1 - trough) * np.exp(-phase)
    dark = peak * np.exp(-(phase - duty * period))
    channel = measured(Waveform(signal_V=np.where(phase < duty * period, lit, dark), dt_s=float(t[1] - t[0])))
    assert channel.levels.high_V == pytest.approx(peak, abs=1e-3)
    assert channel.levels.low_V == pytest.approx(trough, abs=1e-3)


NOISY_CASES: list[tuple[str, Shape, float, float, float]] = [
    ("one pole", one_pole, -10, 30, float(np.log(9))),
    ("Gaussian", ndtr, -12, 20, 2.5631031),
    ("two equal poles", poles(2), -10, 40, 3.357909),
    ("four equal poles", poles(4), -10, 40, 4.936014),
    ("pole behind Gaussian", lambda t: exponnorm.cdf(t, 2, 0, 0.5), -10, 30, 2.589081),
    ("pole driven by a ramp", ramped_pole(2), -10, 30, 2.757264),
    ("second order", second_order(0.8), -10, 40, 2.467),
]


@pytest.mark.parametrize(("name", "shape", "start", "stop", "rise"), NOISY_CASES, ids=[c[0] for c in NOISY_CASES])
def test_published_rise_times_come_out_of_noise_too(
    name: str, shape: Shape, start: float, stop: float, rise: float
) -> None:
    """At a signal-to-noise ratio of 100 the mean of twenty captures is within 1 % of the noise-free value."""
    found = [duration(measured(step_of(shape, start, stop, noise=0.01, seed=seed))) for seed in range(20)]
    assert np.mean(found) == pytest.approx(rise, rel=NOISY)


@pytest.mark.parametrize("per_edge", [10, 20, 50, 200])
@pytest.mark.parametrize(("name", "shape", "rise"), [("pole", one_pole, np.log(9)), ("Gaussian", ndtr, 2.5631031)])
def test_sampling_leaves_no_bias_from_ten_samples_an_edge(name: str, shape: Shape, rise: float, per_edge: int) -> None:
    """Over all phases of the sampling the bias of one-pole and Gaussian edges is below 0.3 %.

    Straight lines between samples would be up to 0.7 % long with eleven samples on a one-pole edge.
    """
    dt = rise / per_edge
    found = []
    for phase in np.linspace(0, 1, 7, endpoint=False):
        t = np.arange(-int(8 / dt), int(25 / dt)) * dt + phase * dt
        found.append(duration(measured(Waveform(signal_V=shape(t), dt_s=dt, t0_s=float(t[0])))))
    assert np.max(np.abs(np.asarray(found) / rise - 1)) < 3e-3
