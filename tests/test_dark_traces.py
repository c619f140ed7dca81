"""Dark current: what a still trace says, and what is left of it when the offset is taken off."""

import math
from dataclasses import replace

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from darkedge.analysis.captures import Capture, Conditions, FloatArray, Kind, OutputConnection, TimedRecord, Waveform
from darkedge.analysis.dark.current import dark_current, junction_bias
from darkedge.analysis.dark.mains import find_ripple
from darkedge.analysis.dark.traces import TraceSummary, summarise_trace
from darkedge.analysis.dark.wander import u_of_mean
from darkedge.analysis.fixture import UNKNOWN_FIXTURE, Fixture, Load
from darkedge.analysis.flags import join_flags
from darkedge.analysis.measurement import Estimate
from darkedge.analysis.measuring import measure_captures

STEP_V = 4e-5
SIZE = 1000
SPAN_S = 0.2
TIME_S = SPAN_S / SIZE * np.arange(SIZE)
FIXTURE = Fixture(scope_input_ohm=1e6, loads=(Load(nominal_ohm=1e6, actual_ohm=1e6),))
SENSED = Conditions(bias_V=12.0, load_ohm=1e6, input_ohm=1e6, volts_per_code=STEP_V)
PULLED_UP = Conditions(
    bias_V=5.0, load_ohm=1e4, input_ohm=1e6, output_connection=OutputConnection.PULL_UP, volts_per_code=STEP_V
)
RESISTANCE_OHM = 0.5e6
NOISE_V = 1e-4


def coded(signal_V: FloatArray) -> FloatArray:
    return np.round(signal_V / STEP_V) * STEP_V


def summary(signal_V: FloatArray, conditions: Conditions = SENSED) -> TraceSummary:
    return summarise_trace(Waveform(signal_V=coded(signal_V), dt_s=SPAN_S / SIZE), conditions)


def still(
    rng: np.random.Generator, level_V: float = 0.0, *, noise_V: float = NOISE_V, extra: FloatArray | float = 0.0
) -> TraceSummary:
    return summary(level_V + rng.normal(0.0, noise_V, SIZE) + extra)


def flicker(rng: np.random.Generator, size: int) -> FloatArray:
    """Noise with a 1/f spectrum and a standard deviation of one; the spectrum runs far below one trace's length."""
    spectrum = rng.normal(size=size // 2 + 1) + 1j * rng.normal(size=size // 2 + 1)
    spectrum[0] = 0.0
    spectrum[1:] /= np.sqrt(np.arange(1, size // 2 + 1))
    noise = np.fft.irfft(spectrum, size)
    return np.asarray(noise / noise.std())


NOISES = {
    "white": lambda rng, n: NOISE_V * rng.normal(size=n),
    "flicker": lambda rng, n: NOISE_V * flicker(rng, n),
    "white and flicker": lambda rng, n: NOISE_V * (rng.normal(size=n) + 0.3 * flicker(rng, n)),
    "correlated over 30 samples": lambda rng, n: NOISE_V * np.convolve(rng.normal(size=n + 29), np.ones(30), "valid") / 5.5,
    "random walk": lambda rng, n: NOISE_V * (np.cumsum(rng.normal(0.0, 0.01, n)) + 0.1 * rng.normal(size=n)),
    "coarser codes than noise": lambda rng, n: 0.2 * STEP_V * rng.normal(size=n),
}  # fmt: skip


def measured(rng: np.random.Generator, noise: FloatArray, current_A: float) -> tuple[Estimate | None, tuple[str, ...]]:
    """An offset, a dark and an offset trace cut from one long noise, with gaps between."""
    base_V = rng.uniform(-1e-3, 1e-3)
    before, dark, after = (noise[k * SIZE : (k + 1) * SIZE] + base_V for k in (0, 2, 4))
    return dark_current(
        summary(dark + current_A * RESISTANCE_OHM),
        [summary(before), summary(after)],
        conditions=SENSED,
        fixture=FIXTURE,
    )


@pytest.mark.parametrize("colour", NOISES)
def test_the_stated_uncertainty_covers_the_scatter_whatever_the_colour_of_the_noise(colour: str) -> None:
    """Of 100 triples of traces cut from one noise, no more than 11 outside 95 %: three standard deviations of a count above 5."""
    rng = np.random.default_rng(11)
    scores = []
    for _ in range(100):
        current, _ = measured(rng, NOISES[colour](rng, 16 * SIZE), 2e-9)
        assert current is not None
        if current.value is not None:
            scores.append((current.value - 2e-9) / current.u)
    assert len(scores) > 90
    assert np.sum(np.abs(scores) > 1.96) <= 11
    assert abs(np.mean(scores)) < 0.3


def test_white_noise_is_known_to_within_twice_what_the_samples_allow() -> None:
    """The least u of a mean of n white samples is s / sqrt n (JCGM 100:2008, 4.2.3); slower noise that cannot be excluded widens it."""
    rng = np.random.default_rng(12)
    us = [u_of_mean(rng.normal(size=SIZE)) * math.sqrt(SIZE) for _ in range(200)]
    assert 0.9 < np.median(us) < 2.0


def test_flicker_noise_is_not_averaged_away_on_paper() -> None:
    """A mean of 1/f noise is known no better from ten times the samples. Source: D. W. Allan, Proc. IEEE 54 (1966) 221."""
    rng = np.random.default_rng(13)
    noise = flicker(rng, 400_000)
    short = np.median([u_of_mean(part) for part in noise.reshape(-1, 400)[:200]])
    long = np.median([u_of_mean(part) for part in noise.reshape(-1, 4000)])
    assert long == pytest.approx(short, rel=0.25)  # medians of 100 figures, each known to half


@pytest.mark.parametrize("colour", ["white", "flicker", "coarser codes than noise"])
@pytest.mark.parametrize("share", [0.0, 0.6])
def test_below_the_floor_a_bound_is_given_that_holds_and_never_zero(colour: str, share: float) -> None:
    """The bound is below the truth in 5 % at most: of 80, no more than 9 (three standard deviations of a count)."""
    rng = np.random.default_rng(14)
    floor_A = {"white": 1.5e-11, "flicker": 3e-10, "coarser codes than noise": 6e-11}[colour]
    bounds = []
    for _ in range(80):
        current, flags = measured(rng, NOISES[colour](rng, 16 * SIZE), share * floor_A)
        if current is not None and current.value is None:
            assert "below_floor" in flags
            bounds.append(current.hi95)
        elif current is not None:
            assert current.value > 2 * current.u
    assert len(bounds) > 40
    assert min(bounds) > 0
    assert sum(bound < share * floor_A for bound in bounds) <= 9


@pytest.mark.parametrize(("noise_in_codes", "left"), [(0.05, 1.0), (3.0, 0.0)])
def test_codes_count_as_a_rectangle_until_noise_dithers_them(noise_in_codes: float, left: float) -> None:
    """A quantum q leaves q / sqrt 12. Source: JCGM 100:2008, F.2.2.1."""
    rng = np.random.default_rng(15)
    found = still(rng, 0.3 * STEP_V, noise_V=noise_in_codes * STEP_V)
    noise_V = u_of_mean(coded(0.3 * STEP_V + np.random.default_rng(15).normal(0.0, noise_in_codes * STEP_V, SIZE)))
    assert math.sqrt(found.u_mean_V**2 - noise_V**2) == pytest.approx(left * STEP_V / math.sqrt(12), abs=1e-6 * STEP_V)


def test_averaging_in_the_scope_hides_the_dither_but_not_its_effect() -> None:
    """The noise that reached the codes of an average of 256 is sixteen times what the average shows."""
    rng = np.random.default_rng(16)
    signal = np.mean(coded(rng.normal(0.3 * STEP_V, STEP_V, (256, SIZE))), axis=0)
    record = Waveform(signal_V=signal, dt_s=SPAN_S / SIZE)
    averaged = summarise_trace(record, Conditions(volts_per_code=STEP_V, averages=256))
    single = summarise_trace(record, Conditions(volts_per_code=STEP_V, averages=1))
    assert averaged.u_mean_V < 0.05 * STEP_V
    assert single.u_mean_V > 0.25 * STEP_V


@pytest.mark.parametrize("frequency_Hz", [50.0, 100.0, 60.0, 120.0])
def test_room_light_is_found_at_the_mains_frequency_and_its_double(frequency_Hz: float) -> None:
    rng = np.random.default_rng(17)
    found = still(rng, extra=4e-5 * np.cos(2 * np.pi * frequency_Hz * TIME_S + 1))
    assert found.mains_Hz == frequency_Hz
    assert found.mains_V == pytest.approx(4e-5, rel=0.35)  # three standard deviations, NOISE_V sqrt(2 / SIZE)
    assert "light_leak" in found.flags


def test_ripple_is_found_in_a_long_trace_although_the_mains_is_off_its_frequency() -> None:
    """Common practice, no source: grids stay within some tenths of a per cent, and ten seconds resolve a tenth of a hertz."""
    rng = np.random.default_rng(18)
    time = 1e-3 * np.arange(10_000)
    found = find_ripple(time, rng.normal(0.0, NOISE_V, time.size) + 2e-5 * np.cos(2 * np.pi * 99.83 * time))
    assert found is not None
    assert (found.mains_Hz, found.frequency_Hz) == (50.0, pytest.approx(99.83, abs=0.05))
    assert found.amplitude_V == pytest.approx(2e-5, rel=0.25)


def test_steps_too_coarse_for_the_mains_show_none() -> None:
    """Sampled at 10 a second, 50 Hz looks like a level: an offset must not pass for light."""
    rng = np.random.default_rng(19)
    record = Waveform(signal_V=1e-3 + rng.normal(0.0, NOISE_V, 200), dt_s=0.1)
    assert summarise_trace(record, SENSED).flags == ()


@pytest.mark.parametrize("colour", ["white", "flicker", "random walk"])
def test_noise_alone_is_neither_light_nor_drift(colour: str) -> None:
    """One trace in a hundred at the most; of 100, no more than four (three standard deviations of a count)."""
    rng = np.random.default_rng(20)
    flags = [flag for _ in range(100) for flag in summary(NOISES[colour](rng, 16 * SIZE)[:SIZE]).flags]
    assert len(flags) <= 4


def test_a_trace_that_wanders_says_so() -> None:
    rng = np.random.default_rng(21)
    found = still(rng, extra=1e-3 * TIME_S / SPAN_S)
    assert "drifting" in found.flags
    assert found.drift_V == pytest.approx(1e-3, rel=0.05)
    assert found.u_mean_V > 1e-3 / math.sqrt(12)  # the level is anywhere between the ends


@pytest.mark.parametrize(("mains_Hz", "span_s"), [(50.0, 0.13), (60.0, 0.13), (50.0, 0.035), (60.0, 0.035)])
def test_ripple_averages_out_over_whole_periods(mains_Hz: float, span_s: float) -> None:
    """The mean of a sine over whole periods is zero; 100 ms hold five periods of 50 Hz and six of 60 Hz. Source: sinc(f T) = 0."""
    time = np.arange(0, span_s, 1e-4)
    signal = 1e-3 * np.cos(2 * np.pi * mains_Hz * time + 0.7)
    found = summarise_trace(Waveform(signal_V=signal, dt_s=1e-4), Conditions())
    assert found.mean_V == pytest.approx(0.0, abs=1e-3 * 6e-3)  # half a sample at the end of a period of 167


@pytest.mark.parametrize(("off", "rejection_dB"), [(0.01, 40.1), (0.001, 60.0)])
def test_mains_off_its_frequency_is_rejected_as_one_over_the_error(off: float, rejection_dB: float) -> None:
    """A mean over T rejects f by |sinc(f T)|: 40 dB at 1 %, 60 dB at 0.1 % off, and more periods do not help. Source: sinc response of a mean."""
    worst = 0.0
    for phase in np.linspace(0, np.pi, 8):
        time = np.arange(0, 0.1, 1e-4)
        signal = np.cos(2 * np.pi * 50.0 * (1 + off) * time + phase)
        worst = max(worst, abs(summarise_trace(Waveform(signal_V=signal, dt_s=1e-4), Conditions()).mean_V))
    assert -20 * math.log10(worst) == pytest.approx(rejection_dB, abs=0.6)  # phases tried are not quite the worst


def test_a_record_on_its_own_times_is_summarised_on_them() -> None:
    rng = np.random.default_rng(22)
    time = TIME_S + rng.uniform(0, 0.4 * SPAN_S / SIZE, SIZE)
    signal = rng.normal(0.0, NOISE_V, SIZE) + 1e-4 * np.cos(2 * np.pi * 100.0 * time)
    assert summarise_trace(TimedRecord(signal_V=signal, time_s=time), SENSED).mains_Hz == 100.0


def test_a_megohm_input_across_a_megohm_load_is_taken_into_account() -> None:
    """Common practice, no source: everybody's first mistake is to divide by the resistor as marked."""
    rng = np.random.default_rng(23)
    current, flags = dark_current(
        still(rng, 2e-9 * RESISTANCE_OHM), [still(rng), still(rng)], conditions=SENSED, fixture=FIXTURE
    )
    assert current.value == pytest.approx(2e-9, abs=4 * current.u)
    assert "low_input_resistance" in flags


def test_gain_and_load_count_in_proportion_to_the_current() -> None:
    """The relative uncertainties add in quadrature. Source: JCGM 100:2008, 5.1.6."""
    rng = np.random.default_rng(24)
    fixture = Fixture(u_gain_ratio=0.03, loads=(Load(nominal_ohm=1e6, actual_ohm=1e6, u_actual_ohm=4e4),))
    conditions = Conditions(bias_V=12.0, load_ohm=1e6, volts_per_code=STEP_V)
    current, _ = dark_current(still(rng, 1.0), [still(rng), still(rng)], conditions=conditions, fixture=fixture)
    assert current.u / current.value == pytest.approx(0.05, rel=1e-3)


def test_offset_traces_that_disagree_widen_the_uncertainty() -> None:
    rng = np.random.default_rng(25)
    dark, near, far = still(rng, 1e-2), still(rng, 0.0), still(rng, 2e-3)
    steady, _ = dark_current(dark, [near, near], conditions=SENSED, fixture=FIXTURE)
    moved, _ = dark_current(dark, [near, far], conditions=SENSED, fixture=FIXTURE)
    assert moved.value == pytest.approx(steady.value - 1e-3 / RESISTANCE_OHM, rel=1e-3)
    assert moved.u > 2e-3 / math.sqrt(12) / RESISTANCE_OHM > 5 * steady.u


def test_light_adds_current_so_only_an_upper_bound_is_left() -> None:
    rng = np.random.default_rng(26)
    ripple = 2e-4 * np.cos(2 * np.pi * 100.0 * TIME_S)
    lit = still(rng, (2e-9 + 4e-10) * RESISTANCE_OHM, extra=ripple)
    current, flags = dark_current(lit, [still(rng), still(rng)], conditions=SENSED, fixture=FIXTURE)
    assert "light_leak" in flags
    assert current.value is None
    assert current.hi95 > 2.4e-9


def test_ripple_far_below_the_signal_leaves_the_value() -> None:
    """Common practice, no source: a lamp on the mains flickers by a tenth or more, so 0.2 % of ripple is at most 2 % of light."""
    rng = np.random.default_rng(27)
    lit = still(rng, 1e-7 * RESISTANCE_OHM, extra=1e-4 * np.cos(2 * np.pi * 100.0 * TIME_S))
    current, flags = dark_current(lit, [still(rng), still(rng)], conditions=SENSED, fixture=FIXTURE)
    assert "light_leak" in flags
    assert current.value == pytest.approx(1e-7, rel=0.01)


def test_light_in_the_offset_traces_alone_leaves_nothing() -> None:
    """What such an offset takes off is too much, and even an upper bound would be too low."""
    rng = np.random.default_rng(28)
    lit = still(rng, 1e-3, extra=1e-3 * np.cos(2 * np.pi * 100.0 * TIME_S))
    current, flags = dark_current(still(rng, 1e-3), [lit, lit], conditions=SENSED, fixture=FIXTURE)
    assert current is None
    assert {"light_leak", "offset_doubtful"} <= set(flags)


def test_a_current_plainly_below_zero_is_no_current() -> None:
    """An inverted channel, or offset traces of another range: no number, and no bound either."""
    rng = np.random.default_rng(29)
    current, flags = dark_current(still(rng, -2e-3), [still(rng), still(rng)], conditions=SENSED, fixture=FIXTURE)
    assert current is None
    assert "offset_doubtful" in flags


@pytest.mark.parametrize(
    ("conditions", "flag"),
    [
        (Conditions(bias_V=12.0, load_ohm=1e6, coupling="AC"), "ac_coupled"),
        (Conditions(bias_V=12.0), "conditions_missing"),
        (Conditions(load_ohm=1e6), "conditions_missing"),
    ],
)
def test_what_cannot_be_known_is_left_out_and_flagged(conditions: Conditions, flag: str) -> None:
    rng = np.random.default_rng(30)
    trace = summary(rng.normal(1e-3, NOISE_V, SIZE), conditions)
    current, flags = dark_current(trace, [trace], conditions=conditions, fixture=UNKNOWN_FIXTURE)
    assert current is None
    assert flag in flags


def test_without_offset_trace_and_fixture_there_is_no_current() -> None:
    rng = np.random.default_rng(31)
    current, flags = dark_current(still(rng, 1e-3), [], conditions=SENSED, fixture=UNKNOWN_FIXTURE)
    assert current is None
    assert "offset_doubtful" in flags


def test_the_fixture_stands_in_for_offset_traces_with_offset_and_input_bias_current() -> None:
    """A nanoampere of input bias current makes half a millivolt in the load with the input across it."""
    rng = np.random.default_rng(32)
    fixture = Fixture(
        scope_input_ohm=1e6, offset_V=1e-3, u_offset_V=1e-4, scope_input_bias_A=1e-9, u_scope_input_bias_A=4e-10
    )
    level = 5e-9 * RESISTANCE_OHM + 1e-3 + 1e-9 * RESISTANCE_OHM
    current, _ = dark_current(still(rng, level), [], conditions=SENSED, fixture=fixture)
    assert current.value == pytest.approx(5e-9, rel=0.02)
    assert current.u == pytest.approx(math.hypot(1e-4 / RESISTANCE_OHM, 4e-10), rel=0.05)


@pytest.mark.parametrize(
    "signal_V", [np.full(SIZE, 1e-3), np.array([0.0, 1e-3, 2e-3, 1e-3])], ids=["all equal", "four samples"]
)
def test_a_trace_that_cannot_show_its_noise_gives_no_current(signal_V: FloatArray) -> None:
    """All samples equal and no word of the code: the value could be off by any step that the file was rounded to."""
    rng = np.random.default_rng(33)
    trace = summarise_trace(Waveform(signal_V=signal_V, dt_s=1e-4), Conditions())
    current, flags = dark_current(trace, [still(rng)], conditions=SENSED, fixture=FIXTURE)
    assert current is None
    assert "noise_unknown" in flags


def test_a_quiet_trace_of_known_code_is_known_to_its_code() -> None:
    quiet, zero = summary(np.full(SIZE, 50 * STEP_V)), summary(np.zeros(SIZE))
    current, _ = dark_current(quiet, [zero, zero], conditions=SENSED, fixture=FIXTURE)
    assert current.value == pytest.approx(50 * STEP_V / RESISTANCE_OHM)
    assert current.u == pytest.approx(math.sqrt(1.5) * STEP_V / math.sqrt(12) / RESISTANCE_OHM)


@pytest.mark.parametrize("centre_V", [1e-3, 1.1e-3])
def test_noise_cut_off_at_the_end_of_the_range_is_clipped(centre_V: float) -> None:
    rng = np.random.default_rng(34)
    cut = summary(np.minimum(rng.normal(centre_V, 2e-4, SIZE), 1e-3))
    assert "clipped" in cut.flags
    assert dark_current(cut, [still(rng)], conditions=SENSED, fixture=FIXTURE)[0] is None


def test_a_dark_trace_that_stands_still_while_its_offsets_show_noise_is_at_the_end_of_the_range() -> None:
    rng = np.random.default_rng(35)
    current, flags = dark_current(
        summary(np.full(SIZE, 5e-3)), [still(rng), still(rng)], conditions=SENSED, fixture=FIXTURE
    )
    assert current is None
    assert "clipped" in flags


def test_ripple_and_quiet_noise_are_not_taken_for_clipping() -> None:
    rng = np.random.default_rng(36)
    for amplitude in np.arange(0.6, 5.0, 0.2) * STEP_V:
        assert "clipped" not in still(rng, noise_V=0.2 * STEP_V, extra=amplitude * np.cos(628.0 * TIME_S)).flags
    for noise_V in np.arange(0.1, 3.0, 0.1) * STEP_V:
        assert "clipped" not in still(rng, rng.uniform(0, STEP_V), noise_V=noise_V).flags


def test_a_pull_up_shows_the_collector_current_less_what_the_scope_draws() -> None:
    """I = V_supply / R - V (1 / R + 1 / R_in): Kirchhoff at the collector. The supply counts with 1 % / sqrt 3 (JCGM 100:2008, 4.3.7)."""
    rng = np.random.default_rng(37)
    trace = summary(rng.normal(0.8, NOISE_V, SIZE), PULLED_UP)
    current, _ = dark_current(trace, [], conditions=PULLED_UP, fixture=UNKNOWN_FIXTURE)
    assert current.value == pytest.approx(4.2 / 1e4 - 0.8e-6, rel=1e-4)
    assert current.u == pytest.approx(5.0 * 0.01 / math.sqrt(3) / 1e4, rel=0.01)


def test_a_pull_up_near_its_supply_gives_a_bound_as_the_supply_is_not_known_better() -> None:
    rng = np.random.default_rng(38)
    trace = summary(rng.normal(4.95, NOISE_V, SIZE), PULLED_UP)
    current, flags = dark_current(trace, [], conditions=PULLED_UP, fixture=UNKNOWN_FIXTURE)
    assert current.value is None
    assert 4e-6 < current.hi95 < 6e-6
    assert "below_floor" in flags


def test_a_scope_input_that_is_not_known_may_draw_all_of_it() -> None:
    rng = np.random.default_rng(39)
    conditions = Conditions(bias_V=5.0, load_ohm=1e4, output_connection=OutputConnection.PULL_UP)
    trace = summary(rng.normal(0.8, NOISE_V, SIZE), conditions)
    current, flags = dark_current(trace, [], conditions=conditions, fixture=UNKNOWN_FIXTURE)
    assert current.value is None
    assert current.hi95 > 4.2e-4
    assert "conditions_missing" in flags


def test_the_drop_across_the_resistor_comes_off_the_bias_and_is_flagged_where_it_eats_half() -> None:
    rng = np.random.default_rng(40)
    assert junction_bias(12.0, 2e-6, 0.5e6) == 11.0
    _, small = dark_current(still(rng, 1.0), [still(rng)], conditions=SENSED, fixture=FIXTURE)
    _, large = dark_current(still(rng, 7.0), [still(rng)], conditions=SENSED, fixture=FIXTURE)
    assert "bias_used_up" not in small
    assert "bias_used_up" in large


voltages = st.floats(-1e3, 1e3, allow_subnormal=False)
shapes = st.lists(voltages, min_size=2, max_size=60) | st.builds(
    lambda level, pattern: [level + x for x in pattern] * 9,
    voltages,
    st.lists(st.sampled_from([0.0, 1e-3, 2e-3]), min_size=2),
)


@given(
    dark=shapes, offset=shapes, dt_s=st.sampled_from([1e-6, 1e-3, 5e-3, 1.0]), code_V=st.sampled_from([None, 1e-3]),
    connection=st.sampled_from([None, *OutputConnection]), input_ohm=st.sampled_from([None, 50.0, 1e6]),
)  # fmt: skip
def test_whatever_the_trace_a_current_is_a_value_above_its_uncertainty_a_bound_above_zero_or_nothing(
    dark: list[float],
    offset: list[float],
    dt_s: float,
    code_V: float | None,
    connection: OutputConnection | None,
    input_ohm: float | None,
) -> None:
    conditions = Conditions(
        bias_V=12.0, load_ohm=1e6, input_ohm=input_ohm, volts_per_code=code_V, output_connection=connection
    )
    traces = [summarise_trace(Waveform(signal_V=np.array(x), dt_s=dt_s), conditions) for x in (dark, offset)]
    current, flags = dark_current(traces[0], traces[1:], conditions=conditions, fixture=UNKNOWN_FIXTURE)
    join_flags(flags)  # all are in the registry
    if current is None:
        assert flags
    elif current.value is None:
        assert current.hi95 > 0
    else:
        assert current.value > current.u > 0


def test_offset_traces_are_those_just_before_and_after_on_the_same_range() -> None:
    """Points count as numbers, 10 after 9; an offset trace on another range is none of this trace."""
    rng = np.random.default_rng(41)

    def capture(point: str, kind: Kind, level_V: float, code_V: float = STEP_V) -> Capture:
        return Capture(
            name=f"captures/{point}.csv",
            outputs={1: Waveform(signal_V=coded(rng.normal(level_V, NOISE_V, SIZE)), dt_s=SPAN_S / SIZE)},
            conditions=replace(SENSED, kind=kind, point=point, volts_per_code=code_V),
        )

    captures = [
        capture("2", Kind.OFFSET, 0.3),
        capture("8", Kind.OFFSET, 0.1),
        capture("9", Kind.DARK, 0.101),
        capture("9a", Kind.OFFSET, 0.7, 2 * STEP_V),
        capture("10", Kind.OFFSET, 0.1),
        capture("11", Kind.OFFSET, 0.5),
    ]
    measurements, _ = measure_captures(captures)
    assert measurements[2].value("dark_current_A") == pytest.approx(1e-3 / RESISTANCE_OHM, rel=0.05)
