"""Pulses: which output edge answers which drive edge, and the trade's arithmetic on their times."""

import numpy as np
import pytest

from darkedge.analysis.waveform.edges import TEN_NINETY, Transitions
from darkedge.analysis.waveform.intervals import Budget, durations
from darkedge.analysis.waveform.pulses import (
    mean_width,
    pair_edges,
    period_of,
    pulse_widths,
    time_delays,
    time_edges,
)

SURE = Budget(u_levels_V=(0.0, 0.0, 0.0, 0.0))


def edges(times: list[float], *, first: bool = True, rise: float = 0.0, u: float = 0.0) -> Transitions:
    """Edges that cross 50 % at the given times, in turn rising and falling, 10-90 % time `rise`, noise `u` each."""
    middle = np.asarray(times, dtype=np.float64)
    rising = (np.arange(middle.size) % 2 == 0) == first
    return Transitions(
        fractions=TEN_NINETY,
        rising=rising,
        time_s=middle[:, None] + rise * np.array([-0.5, 0.0, 0.5]),
        covariance_s2=np.broadcast_to(u**2 * np.eye(3), (middle.size, 3, 3)),
        bend_s=np.zeros((middle.size, 3)),
        pull_s_per_V=np.zeros((middle.size, 3, 2)),
        n_samples=np.full(middle.size, 50),
        by_shape=np.ones(middle.size, dtype=np.bool_),
    )


def train(first_s: float, width_s: float, period_s: float, n: int) -> list[float]:
    return [first_s + k * period_s + part for k in range(n) for part in (0.0, width_s)]


def test_a_delay_is_named_after_the_edge_of_the_output() -> None:
    """tPLH ends in the output's rise, tPHL in its fall, whichever way the drive goes.

    Source: trade data sheets of couplers, propagation delay times.
    """
    drive = edges(train(0, 100, 1000, 3))
    same = pair_edges(drive, edges(train(3, 107, 1000, 3)), end_s=3000)
    assert same is not None
    assert not same.inverting
    delays = time_delays(drive, edges(train(3, 107, 1000, 3)), same, budget=SURE, skew_s=0.0, u_skew_s=0.0)
    assert (delays["t_plh_s"].value, delays["t_phl_s"].value) == pytest.approx((3, 10))
    inverted = edges(train(3, 107, 1000, 3), first=False)
    other = pair_edges(drive, inverted, end_s=3000)
    assert other is not None
    assert other.inverting
    delays = time_delays(drive, inverted, other, budget=SURE, skew_s=0.0, u_skew_s=0.0)
    assert (delays["t_plh_s"].value, delays["t_phl_s"].value) == pytest.approx((10, 3))


def test_pulse_width_distortion_is_the_difference_of_the_delays() -> None:
    """tPLH 420 ns and tPHL 185 ns give 235 ns, 23.5 % of a shortest pulse of 1 us.

    Source: trade data sheets of couplers: PWD = |tPHL - tPLH|.
    """
    drive = edges([0.0, 5e-6])
    output = edges([420e-9, 5e-6 + 185e-9])
    pairing = pair_edges(drive, output, end_s=20e-6)
    assert pairing is not None
    found = time_delays(drive, output, pairing, budget=SURE, skew_s=0.0, u_skew_s=0.0)
    assert found["pulse_width_distortion_s"].value == pytest.approx(235e-9)
    assert (found["pulse_width_distortion_s"].value or 0.0) / 1e-6 == pytest.approx(0.235)


def test_output_width_is_the_drive_width_plus_what_the_delays_differ() -> None:
    """w + tPHL - tPLH over the period: 5 us in 50 us with 420 ns and 185 ns gives 9.53 %.

    Source: arithmetic of the definitions; the trade's usual test pulse of 10 % duty at 20 kHz.
    """
    output = edges(train(420e-9, 5e-6 - 235e-9, 50e-6, 2))
    widths = pulse_widths(output, np.arange(4), active_high=True, channel=0)
    assert widths is not None
    assert widths.mean().value_s / 50e-6 == pytest.approx(0.0953, abs=5e-5)


def test_absolute_thresholds_of_one_pole_delay_the_edges_unequally() -> None:
    """Threshold x of the full swing: PWD = RC |ln(x / (1 - x))|, 0.847298 RC at 0.3 and 0.7, 2.197225 RC at 0.1 and 0.9.

    Source: tPLH = -RC ln(1 - x), tPHL = -RC ln x.
    """
    for x, expected in ((0.5, 0.0), (0.3, 0.847298), (0.7, 0.847298), (0.1, 2.197225), (0.9, 2.197225)):
        drive = edges([0.0, 50.0])
        output = edges([-np.log(1 - x), 50.0 - np.log(x)])
        pairing = pair_edges(drive, output, end_s=100)
        assert pairing is not None
        found = time_delays(drive, output, pairing, budget=SURE, skew_s=0.0, u_skew_s=0.0)
        assert found["pulse_width_distortion_s"].value == pytest.approx(expected, abs=5e-7)


def test_an_output_pulse_that_begins_after_the_drive_pulse_ended_is_paired_right() -> None:
    """Short pulses through a slow path do not overlap; the polarity that lets an edge wait least is the right one."""
    drive = edges(train(0, 1, 100, 4))
    straight = pair_edges(drive, edges(train(2, 1, 100, 4)), end_s=400)
    assert straight is not None
    assert not straight.inverting
    stored = pair_edges(
        drive, edges([t for k in range(4) for t in (100 * k + 0.5, 100 * k + 31.0)], first=False), end_s=400
    )
    assert stored is not None
    assert stored.inverting


def test_edges_pair_across_periods_whatever_the_record_cuts_off() -> None:
    """The record starts in a pulse and ends in one; what lies beyond its ends is no fault."""
    drive = edges([40.0, 100.0, 140.0, 200.0], first=False)
    output = edges([50.0, 103.0, 150.0], first=False)
    pairing = pair_edges(drive, output, end_s=202.0)
    assert pairing is not None
    assert pairing.drive.tolist() == [0, 1, 2]
    assert not pairing.left_over


def test_a_missing_answer_is_left_over() -> None:
    drive = edges(train(0, 10, 100, 5))
    output = edges([t for k in (0, 1, 3, 4) for t in (100 * k + 2.0, 100 * k + 13.0)])
    pairing = pair_edges(drive, output, end_s=500)
    assert pairing is not None
    assert pairing.left_over
    assert pairing.drive.size == 8


def test_an_output_edge_nobody_asked_for_is_left_over() -> None:
    drive = edges(train(0, 10, 100, 3))
    output = edges([2.0, 13.0, 50.0, 55.0, 102.0, 113.0, 202.0, 213.0])
    pairing = pair_edges(drive, output, end_s=300)
    assert pairing is not None
    assert pairing.left_over
    assert output.time_s[pairing.output, 1] == pytest.approx([2, 13, 102, 113, 202, 213])


def test_nothing_pairs_where_nothing_answers() -> None:
    assert pair_edges(edges([50.0, 60.0]), edges([1.0, 2.0]), end_s=100) is None


def test_skew_is_taken_off_delays_and_its_uncertainty_kept() -> None:
    """The output channel reads 4 later than the drive channel: a delay of 10 is one of 6; the distortion is untouched."""
    drive, output = edges([0.0, 100.0]), edges([10.0, 113.0])
    pairing = pair_edges(drive, output, end_s=300, skew_s=4.0)
    assert pairing is not None
    found = time_delays(drive, output, pairing, budget=SURE, skew_s=4.0, u_skew_s=0.5)
    assert (found["t_plh_s"].value, found["t_plh_s"].u) == pytest.approx((6, 0.5))
    assert (found["pulse_width_distortion_s"].value, found["pulse_width_distortion_s"].u) == pytest.approx((3, 0))


def test_an_output_that_reads_earlier_than_its_drive_pairs_once_the_skew_is_known() -> None:
    drive, output = edges(train(20, 10, 100, 3)), edges(train(17, 10, 100, 3))
    pairing = pair_edges(drive, output, end_s=300, skew_s=-5.0)
    assert pairing is not None
    assert not pairing.inverting
    assert not pairing.left_over


def test_the_mean_of_many_pulses_is_known_better() -> None:
    """u of the mean falls with the square root of their number. Source: JCGM 100:2008, 4.2.3."""
    few, many = edges([0.0], rise=5, u=0.3), edges([0.0, *range(1, 33)], rise=5, u=0.3)
    one = time_edges(few, np.arange(1), budget=SURE)["rise_time_s"]
    mean = time_edges(many, np.arange(33), budget=SURE)["rise_time_s"]
    assert (one.u or 0) / (mean.u or 1) == pytest.approx(np.sqrt(17), rel=1e-9)


def test_the_time_base_adds_its_share() -> None:
    """A time-base error of 1 % is 1 % of every time; it does not average out."""
    budget = Budget(u_levels_V=(0.0, 0.0, 0.0, 0.0), u_timebase_ratio=0.01)
    found = time_edges(edges([0.0], rise=5), np.arange(1), budget=budget)["rise_time_s"]
    assert found.u == pytest.approx(0.05)


def test_level_errors_do_not_average_over_pulses() -> None:
    """Every edge is pulled alike by an error of its channel's level."""
    base = edges(train(0, 10, 100, 8), rise=5)
    pulled = Transitions(
        fractions=base.fractions, rising=base.rising, time_s=base.time_s, covariance_s2=base.covariance_s2,
        bend_s=base.bend_s, n_samples=base.n_samples, by_shape=base.by_shape,
        pull_s_per_V=np.broadcast_to(np.array([[0.0, 1.0], [0.0, 2.0], [0.0, 6.0]]), (16, 3, 2)),
    )  # fmt: skip
    found = time_edges(pulled, np.arange(16), budget=Budget(u_levels_V=(9.0, 0.1, 9.0, 9.0)))["rise_time_s"]
    assert found.u == pytest.approx(0.1 * (6 - 1))
    assert durations(pulled, np.arange(16)).pull[0].tolist() == [0.0, 5.0, 0.0, 0.0]


def test_jitter_is_what_the_delays_scatter_beyond_their_noise() -> None:
    """Scatter of 2 with noise of 1 leaves sqrt(4 - 1). Source: variances of independent causes add."""
    rng = np.random.default_rng(8)
    n = 400
    drive = edges(train(0, 500, 1000, n))
    answer = np.asarray(train(50, 500, 1000, n)) + 2.0 * rng.standard_normal(2 * n)
    output = edges(answer.tolist(), u=1.0)
    pairing = pair_edges(drive, output, end_s=1000.0 * n)
    assert pairing is not None
    jitter = time_delays(drive, output, pairing, budget=SURE, skew_s=0.0, u_skew_s=0.0)["jitter_s"]
    assert jitter.value is not None
    assert jitter.value == pytest.approx(np.sqrt(3), abs=3 * (jitter.u or 0))
    assert (jitter.u or 1) < 0.1


def test_jitter_within_the_noise_is_only_bounded() -> None:
    rng = np.random.default_rng(9)
    drive = edges(train(0, 500, 1000, 20))
    answer = np.asarray(train(50, 500, 1000, 20)) + rng.standard_normal(40)
    output = edges(answer.tolist(), u=1.0)
    pairing = pair_edges(drive, output, end_s=20000.0)
    assert pairing is not None
    jitter = time_delays(drive, output, pairing, budget=SURE, skew_s=0.0, u_skew_s=0.0)["jitter_s"]
    assert jitter.value is None
    assert jitter.hi95 is not None
    assert 0 < jitter.hi95 < 1.5


def test_two_pulses_say_nothing_of_jitter() -> None:
    drive, output = edges(train(0, 10, 100, 2)), edges(train(2, 10, 100, 2))
    pairing = pair_edges(drive, output, end_s=200)
    assert pairing is not None
    assert "jitter_s" not in time_delays(drive, output, pairing, budget=SURE, skew_s=0.0, u_skew_s=0.0)


def test_the_period_is_that_of_edges_of_one_kind() -> None:
    found = period_of(edges(train(3, 40, 250, 5), u=0.1))
    assert found is not None
    assert found.value == pytest.approx(250)
    assert found.u == pytest.approx(0.1 * np.sqrt(2) / 4)
    assert period_of(edges([0.0, 10.0])) is None


def test_a_gap_and_the_period_give_the_width_of_pulses_that_the_record_cuts() -> None:
    """At 90 % duty a record often holds no whole pulse: period less gap."""
    cut = edges([30.0, 40.0], first=False)
    width = mean_width(cut, np.arange(2), active_high=True, channel=0, period_s=100.0)
    assert width is not None
    assert width.value_s == pytest.approx(90)
    assert mean_width(cut, np.arange(2), active_high=True, channel=0, period_s=None) is None


def test_widths_skip_edges_that_were_left_out() -> None:
    """A pulse whose second edge did not count has no width; it is not joined to the next one."""
    output = edges(train(0, 10, 100, 3))
    widths = pulse_widths(output, np.array([0, 1, 2, 4, 5]), active_high=True, channel=0)
    assert widths is not None
    assert widths.time_s == pytest.approx([10, 10])
