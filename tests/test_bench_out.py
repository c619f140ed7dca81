"""The bench taken out of an edge: by the composed step response, with an honest interval."""

import math

import numpy as np
import pytest
from numpy.typing import NDArray
from scipy.optimize import brentq
from scipy.stats import norm

from darkedge.analysis.captures import Capture, Conditions, DeviceKind, OutputConnection, Waveform
from darkedge.analysis.fixture import Fixture, Response
from darkedge.analysis.waveform.bench_out import GAUSSIAN_SHARE, ONE_POLE_SHARE, Seen, Stage, without_bench
from darkedge.analysis.waveform.measure import measure_pulse_capture

Array = NDArray[np.float64]


def two_poles_duration(one: float, other: float) -> tuple[float, float]:
    """10-90 % time of two different poles in a row, and its share before 50 %, by root finding on the closed form."""

    def step(t: float) -> float:
        return 1 - (one * math.exp(-t / one) - other * math.exp(-t / other)) / (one - other)

    t10, t50, t90 = (brentq(lambda t, f=f: step(t) - f, 0, 40 * (one + other)) for f in (0.1, 0.5, 0.9))
    return t90 - t10, (t50 - t10) / (t90 - t10)


@pytest.mark.parametrize(("ratio", "together"), [(0.1, 2.214994), (0.2, 2.272680), (0.5, 2.589609), (0.7, 2.875735)])
def test_a_pole_is_found_behind_a_pole_where_root_sum_square_is_wrong(ratio: float, together: float) -> None:
    """Two poles in a row take less than the root of the sum of squares of their times.

    Source: the step response of two poles solved at 10 and 90 %; W. C. Elmore, J. Appl. Phys. 19, 55 (1948), for stages in a row.
    """
    duration, share = two_poles_duration(1.0, ratio)
    assert duration == pytest.approx(together, rel=1e-6)
    bench = Stage(duration_s=ratio * math.log(9), share=ONE_POLE_SHARE)
    found = without_bench(Seen(duration_s=duration, u_duration_s=1e-3 * duration, share=share, u_share=1e-3), bench)
    assert found.value is not None
    assert found.u is not None
    assert abs(found.value - math.log(9)) < 2 * found.u
    assert found.value == pytest.approx(math.log(9), rel=0.02)


def test_gaussian_stages_come_apart_by_root_sum_square() -> None:
    """For Gaussian stages the variances add. Source: normal distributions."""
    seen = Seen(duration_s=math.hypot(10.0, 6.0), u_duration_s=1e-3, share=GAUSSIAN_SHARE, u_share=1e-3)
    found = without_bench(seen, Stage(duration_s=6.0, share=GAUSSIAN_SHARE))
    assert found.value == pytest.approx(10.0, rel=0.01)


@pytest.mark.parametrize("seen_s", [0.5, 0.99, 1.0, 1.005])
def test_an_edge_no_slower_than_the_bench_gives_an_upper_bound_and_nothing_else(seen_s: float) -> None:
    """Never negative, never complex. Source: a bound where nothing more is known (JCGM 100:2008, F.2.4 in spirit)."""
    found = without_bench(
        Seen(duration_s=seen_s, u_duration_s=0.01, share=0.4, u_share=0.01), Stage(duration_s=1.0, u_duration_s=0.01)
    )
    assert found.value is None
    assert found.hi95 is not None
    assert found.hi95 > 0


def test_the_nearer_to_the_bench_the_wider_the_interval() -> None:
    """Relative uncertainty grows as the device nears the bench's own speed. Source: the slope of the composed time."""
    wide = []
    for ratio in (5.0, 2.0, 1.0, 0.6):
        seen = Seen(duration_s=math.hypot(ratio, 1.0), u_duration_s=0.005, share=GAUSSIAN_SHARE, u_share=0.005)
        found = without_bench(seen, Stage(duration_s=1.0, u_duration_s=0.01, share=GAUSSIAN_SHARE))
        assert found.value is not None
        assert found.u is not None
        wide.append(found.u / found.value)
    assert wide == sorted(wide)


def captured(bench_s: float, device_tau: float, rng: np.random.Generator, noise: float) -> Capture:
    """One pulse of a one-pole device behind a Gaussian bench, 40 ps apart, made by convolving on a fine grid."""
    dt = 0.4
    t = np.arange(-200.0, 1400.0, dt)
    sigma = bench_s / 2.5631031
    pole = np.where(t >= 0, np.exp(-np.maximum(t, 0) / device_tau), 0.0)
    pole /= np.sum(pole)
    light = norm.cdf(t, scale=sigma) - norm.cdf(t - 600, scale=sigma)
    signal = np.convolve(light, pole)[200 * 0 + int(200 / dt) : int(200 / dt) + t.size]
    keep = slice(0, t.size - int(200 / dt))
    noisy = signal[keep] + noise * rng.standard_normal(signal[keep].size)
    return Capture(
        name="one", outputs={1: Waveform(signal_V=noisy, dt_s=dt * 1e-9, t0_s=float(t[0]) * 1e-9)},
        conditions=Conditions(
            device_kind=DeviceKind.PHOTODIODE, output_connection=OutputConnection.LOAD_TO_GROUND, emitter_current_A=5e-3,
            bias_V=5.0, load_ohm=1e3,
        ),
    )  # fmt: skip


@pytest.mark.parametrize("device_over_bench", [5.0, 2.0, 1.0, 0.5])
def test_stated_intervals_cover_the_device_from_five_times_slower_to_twice_as_fast_as_the_bench(
    device_over_bench: float,
) -> None:
    """Forty captures each: the device's own time lies inside its interval, or under its bound.

    Source: a convolution on a fine grid; the share is that of 95 % intervals, at one in a thousand of a binomial.
    """
    rng = np.random.default_rng(4)
    bench_s = 20.0
    tau = device_over_bench * bench_s / math.log(9)
    response = Response(
        rise_time_s=bench_s * 1e-9, fall_time_s=bench_s * 1e-9, u_rise_time_s=0.2e-9, u_fall_time_s=0.2e-9,
        rise_share=0.5, fall_share=0.5, u_rise_share=0.01, u_fall_share=0.01,
    )  # fmt: skip
    inside = 0
    for _ in range(40):
        shifted = Fixture(response=Response(
            rise_time_s=response.rise_time_s + 0.2e-9 * rng.standard_normal(), fall_time_s=response.fall_time_s,
            u_rise_time_s=0.2e-9, u_fall_time_s=0.2e-9, rise_share=0.5, fall_share=0.5, u_rise_share=0.01,
            u_fall_share=0.01,
        ))  # fmt: skip
        (row,) = measure_pulse_capture(captured(bench_s, tau, rng, 0.01), fixture=shifted)
        found = row.quantities["rise_time_s"]
        truth = tau * math.log(9) * 1e-9
        if found.value is not None and found.u is not None:
            inside += abs(found.value - truth) < 1.96 * found.u
        else:
            assert found.hi95 is not None
            inside += truth < found.hi95
        assert row.quantities["seen_rise_time_s"].value is not None
    assert inside >= 33


def test_a_response_at_another_emitter_current_is_not_taken_out() -> None:
    rng = np.random.default_rng(1)
    response = Response(rise_time_s=20e-9, fall_time_s=20e-9, emitter_current_A=20e-3)
    (row,) = measure_pulse_capture(captured(20.0, 30.0, rng, 0.01), fixture=Fixture(response=response))
    assert "emitter_current_differs" in row.flags
    assert "seen_rise_time_s" not in row.quantities
