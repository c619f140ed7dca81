"""Edges: how many there are, where they cross, and how well that is known."""

from collections.abc import Callable

import numpy as np
import pytest
from numpy.typing import NDArray
from scipy.special import ndtr
from scipy.stats import exponnorm

from darkedge.analysis.captures import TimedRecord, Waveform
from darkedge.analysis.waveform.channel import Channel, measure_channel
from darkedge.analysis.waveform.edges import TWENTY_EIGHTY, find_changes, rough_crossings
from darkedge.analysis.waveform.levels import StateLevels
from darkedge.analysis.waveform.shapes import EdgeShapes, fit_shapes, shape_and_slope

Array = NDArray[np.float64]
Shape = Callable[[Array], Array]


def one_pole(x: Array) -> Array:
    """One-pole step whose 10-90 % time is 1."""
    return -np.expm1(-np.clip(x, 0, None) * np.log(9))


def gaussian(x: Array) -> Array:
    """Gaussian step whose 10-90 % time is 1."""
    return np.asarray(ndtr(x * 2.5631031))


def mixed(x: Array) -> Array:
    """One pole behind a Gaussian of half its time constant, 10-90 % time 1."""
    return np.asarray(exponnorm.cdf(x * 2.589081, 2, 0, 0.5))


def pulse(shape: Shape, per_edge: float, *, seed: int = 0, noise: float = 0.0, band: int = 1) -> Array:
    """A pulse twelve edge times wide, sampled `per_edge` times an edge at a random phase, with noise."""
    rng = np.random.default_rng(seed)
    t = np.arange(-6 * per_edge, 26 * per_edge) + rng.random()
    hiss = rng.standard_normal(t.size + 200)
    if band > 1:
        hiss = np.convolve(hiss, np.full(band, band**-0.5), mode="same")
    return shape(t / per_edge) - shape(t / per_edge - 12) + noise * hiss[100:-100]


def measured(signal: Array, **how: object) -> Channel:
    channel = measure_channel(Waveform(signal_V=signal, dt_s=1.0), **how)  # type: ignore[arg-type]
    assert channel is not None
    return channel


def durations(channel: Channel) -> Array:
    times = channel.transitions.time_s
    return np.asarray(times[:, -1] - times[:, 0])


def stated(channel: Channel) -> Array:
    """Standard uncertainty of each duration, from noise, sampling and levels."""
    edges, levels = channel.transitions, channel.levels
    covariance = edges.covariance_s2
    variance = covariance[:, 0, 0] + covariance[:, 2, 2] - 2 * covariance[:, 0, 2]
    variance = variance + edges.bend_s[:, 0] ** 2 + edges.bend_s[:, 2] ** 2
    pull = edges.pull_s_per_V[:, 2] - edges.pull_s_per_V[:, 0]
    return np.asarray(np.sqrt(variance + (pull[:, 0] * levels.u_low_V) ** 2 + (pull[:, 1] * levels.u_high_V) ** 2))


@pytest.mark.parametrize("snr", [10, 30, 100])
@pytest.mark.parametrize("per_edge", [6, 60, 600])
def test_noise_on_an_edge_makes_no_second_one(per_edge: int, snr: float) -> None:
    for seed in range(3):
        channel = measured(pulse(one_pole, per_edge, noise=1 / snr, seed=seed))
        assert channel.transitions.rising.tolist() == [True, False]


def test_a_signal_keeps_its_state_until_it_is_clearly_in_the_other() -> None:
    """Between 30 and 70 % nothing changes, so a dip to the middle makes no edge."""
    signal = np.concatenate((np.zeros(50), np.ones(50), np.full(5, 0.4), np.ones(50), np.zeros(50)))
    changes = find_changes(signal, StateLevels(low_V=0.0, high_V=1.0))
    assert changes.index.tolist() == [50, 155]


def test_rough_crossings_are_not_early_where_the_first_sample_past_the_level_is() -> None:
    """Noise makes the first sample past 90 % come early; parting the samples in two errs neither way.

    A slow ramp with a tenth of noise: the first sample is early by more than a tenth of the edge.
    """
    levels = StateLevels(low_V=0.0, high_V=1.0)
    ramp = np.clip((np.arange(3000) - 1000) / 1000, 0, 1)
    first, parted = [], []
    for seed in range(40):
        signal = ramp + 0.1 * np.random.default_rng(seed).standard_normal(ramp.size)
        changes = find_changes(signal, levels, smooth=16)
        first.append(float(np.argmax(signal > 0.9)))
        parted.append(rough_crossings(np.arange(3000.0), signal, levels=levels, changes=changes)[0, 2])
    assert np.mean(first) < 1900 - 100
    assert np.mean(parted) == pytest.approx(1900, abs=20)  # three standard deviations of the mean of forty


@pytest.mark.parametrize("shape", [one_pole, gaussian, mixed])
@pytest.mark.parametrize("per_edge", [50, 200])
def test_edge_times_are_within_one_per_cent_at_a_signal_to_noise_ratio_of_100(shape: Shape, per_edge: int) -> None:
    """Root mean square error below 1 %, and below 1.5 times the Cramer-Rao bound of the shape with known levels.

    Bound for stretch and delay unknown: the inverse of the Fisher matrix of dF/dt and t dF/dt, sampled as the record is.
    """
    found = np.concatenate([durations(measured(pulse(shape, per_edge, noise=0.01, seed=s))) for s in range(40)])
    rms = float(np.sqrt(np.mean((found / per_edge - 1) ** 2)))
    x = np.linspace(-3, 6, 9001)
    slope = np.gradient(shape(x), x)
    fisher = np.array([[slope @ slope, slope @ (x * slope)], [slope @ (x * slope), (x * slope) @ (x * slope)]])
    bound = 0.01 * np.sqrt(np.linalg.inv(fisher * (x[1] - x[0]) * per_edge)[1, 1])
    assert rms < 0.01
    assert rms < 1.5 * bound


@pytest.mark.parametrize("band", [1, 6], ids=["white", "band-limited"])
@pytest.mark.parametrize("shape", [one_pole, gaussian, mixed])
def test_stated_uncertainty_covers_the_scatter_of_edge_times(shape: Shape, band: int) -> None:
    """Sixty captures, two edges each: scatter over stated uncertainty between 0.7 and 1.4."""
    errors, uncertainties = [], []
    for seed in range(60):
        channel = measured(pulse(shape, 60, noise=0.02, seed=seed, band=band))
        errors.append(durations(channel) - 60)
        uncertainties.append(stated(channel))
    ratio = np.sqrt(np.mean(np.square(errors))) / np.sqrt(np.mean(np.square(uncertainties)))
    assert 0.7 < ratio < 1.4


def test_an_edge_no_shape_describes_is_still_read_from_its_trace() -> None:
    """Two slopes, the break at 60 %: within 1 % of the noise-free crossings at a signal-to-noise ratio of 100."""

    def two_slopes(x: Array) -> Array:
        return np.interp(x, [0, 0.3, 1.5], [0, 0.6, 1])

    truth = float(np.interp(0.9, [0.6, 1.0], [0.3, 1.5])) - 0.05
    found = [durations(measured(pulse(two_slopes, 200, noise=0.01, seed=s)))[0] / 200 for s in range(20)]
    assert np.mean(found) == pytest.approx(truth, rel=0.01)
    assert not measured(pulse(two_slopes, 200, noise=0.01)).transitions.by_shape.any()


def test_twenty_eighty_takes_other_levels() -> None:
    """RC ln 4 against RC ln 9."""
    channel = measured(pulse(one_pole, 200), fractions=TWENTY_EIGHTY)
    assert durations(channel) / 200 == pytest.approx(np.log(4) / np.log(9), rel=1e-3)


def test_a_step_between_two_samples_is_known_to_the_sample_step() -> None:
    """All there is to know: dt / sqrt(12), the standard deviation of a place anywhere between two samples."""
    edges = measured(np.repeat([0.0, 1.0, 0.0], 200)).transitions
    assert edges.n_samples.tolist() == [0, 0]
    assert edges.time_s[:, 1] == pytest.approx([199.5, 399.5])
    assert edges.u_time_s[:, 1] == pytest.approx(12**-0.5, rel=1e-6)


def test_uneven_records_are_measured_on_their_own_times() -> None:
    rng = np.random.default_rng(4)
    time = np.cumsum(rng.uniform(0.2, 1.8, 4000)) - 600
    signal = one_pole(time / 150) - one_pole(time / 150 - 10)
    channel = measure_channel(TimedRecord(signal_V=signal, time_s=time))
    assert channel is not None
    assert durations(channel) == pytest.approx(150, rel=1e-3)


def test_a_drift_is_no_edge() -> None:
    """A ramp from end to end leaves no state in which it was at rest; nor does a decay from the first sample on."""
    t = np.linspace(0, 1, 1000)
    hiss = 0.01 * np.random.default_rng(2).standard_normal(t.size)
    assert measure_channel(Waveform(signal_V=t + hiss, dt_s=1.0)) is None
    assert measure_channel(Waveform(signal_V=np.exp(-5 * t) + hiss, dt_s=1.0)) is None


@pytest.mark.parametrize("n", [50, 1000, 10000])
def test_noise_is_no_pulse(n: int) -> None:
    rng = np.random.default_rng(n)
    assert measure_channel(Waveform(signal_V=rng.standard_normal(n), dt_s=1.0)) is None
    assert measure_channel(Waveform(signal_V=np.round(0.6 * rng.standard_normal(n)), dt_s=1.0)) is None


def test_a_spike_of_one_sample_is_no_pulse() -> None:
    signal = 0.01 * np.random.default_rng(0).standard_normal(1000)
    signal[500] += 1.0
    assert measure_channel(Waveform(signal_V=signal, dt_s=1.0)) is None


def fitted(x: Array, progress: Array) -> EdgeShapes:
    quarter = np.interp([0.1, 0.5, 0.9], progress, x)[None]
    return fit_shapes(
        x[None], progress[None], np.ones((1, x.size)), quarter=quarter, cut_short=np.zeros(1, dtype=np.bool_)
    )


def test_the_edge_shape_is_the_distribution_of_a_normal_and_an_exponential_variable() -> None:
    """Source: scipy.stats.exponnorm, which is that distribution."""
    x = np.linspace(-3, 8, 400)
    for s in (0.05, 0.3, 2.0):
        value, _ = shape_and_slope(x, np.array(0.2), np.array(0.7), np.array(s))
        assert value == pytest.approx(exponnorm.cdf(x, 0.7 / s, 0.2, s), abs=1e-12)


def test_the_slope_of_the_edge_shape_is_its_derivative() -> None:
    x = np.linspace(-2, 5, 50)
    arguments = (np.array(0.1), np.array(0.6), np.array(0.3))
    _, rest = shape_and_slope(x, *arguments)
    numeric = (shape_and_slope(x + 1e-6, *arguments)[0] - shape_and_slope(x - 1e-6, *arguments)[0]) / 2e-6
    assert rest / 0.6 == pytest.approx(numeric, abs=1e-8)


def test_derivatives_by_the_parameters_are_those_of_the_shape() -> None:
    """Central differences of the shape by x0, ln tau and ln s."""
    x = np.linspace(-1, 4, 60)
    shapes = fitted(np.linspace(-1.3, 2.2, 120), mixed(np.linspace(-1.3, 2.2, 120)))
    gradient = shapes.gradient(x[None])[0]
    base = shapes.parameters[0]
    for k in range(3):
        shift = np.zeros(4)
        shift[k] = 1e-6
        ahead, behind = (shape_and_slope(x, p[0], np.exp(p[1]), np.exp(p[2]))[0] for p in (base + shift, base - shift))
        assert gradient[k] == pytest.approx((ahead - behind) / 2e-6, abs=1e-7)


@pytest.mark.parametrize("s", [0.05, 0.2, 0.5, 1.0])
def test_fitting_the_shape_gives_back_its_parameters(s: float) -> None:
    x = np.linspace(-4 * s, 6, 300)
    found = fitted(x, exponnorm.cdf(x, 1 / s, 0.3, s)).parameters[0]
    assert (found[0], np.exp(found[1]), np.exp(found[2])) == pytest.approx((0.3, 1.0, s), rel=2e-3)
