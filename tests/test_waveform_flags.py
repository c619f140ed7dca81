"""Flags that a trace, its conditions and its fixture raise: each where it is due, and not where it is not."""

import numpy as np
import pytest
from numpy.typing import NDArray

from darkedge.analysis.captures import (
    Capture,
    Conditions,
    DeviceKind,
    OutputConnection,
    TimedRecord,
    Waveform,
)
from darkedge.analysis.fixture import UNKNOWN_FIXTURE, Fixture, Load, Response
from darkedge.analysis.measurement import Measurement
from darkedge.analysis.waveform.channel import measure_channel
from darkedge.analysis.waveform.flaws import is_min_max
from darkedge.analysis.waveform.measure import measure_pulse_capture

Array = NDArray[np.float64]

DT = 1e-9
TAU = 40e-9
T = np.arange(-2000, 8000) * DT
DRIVE = 3.0 * ((T >= 0) & (T < 3e-6))
DIODE = {
    "device_kind": DeviceKind.PHOTODIODE, "output_connection": OutputConnection.LOAD_TO_GROUND, "bias_V": 12.0,
    "load_ohm": 1000.0, "input_ohm": 1e6, "drive_period_s": 1e-4, "coupling": "DC",
}  # fmt: skip
KNOWN = Fixture(response=Response(rise_time_s=3e-9, fall_time_s=3e-9, emitter_current_A=5e-3))


def pulse(width: float = 3e-6, *, tau: float = TAU, t: Array = T) -> Array:
    def up(x: Array) -> Array:
        return -np.expm1(-np.clip(x, 0, None) / tau)

    return up(t) - up(t - width)


def hiss(sigma: float = 0.005, seed: int = 1) -> Array:
    return sigma * np.random.default_rng(seed).standard_normal(T.size)


def measured(output: Array, *, fixture: Fixture = KNOWN, drive: Array | None = DRIVE, **known: object) -> Measurement:
    capture = Capture(
        name="flags.csv",
        drive=None if drive is None else Waveform(signal_V=drive, dt_s=DT, t0_s=float(T[0])),
        outputs={1: Waveform(signal_V=output, dt_s=DT, t0_s=float(T[0]))},
        conditions=Conditions(**(DIODE | known)),  # type: ignore[arg-type]
    )
    (measurement,) = measure_pulse_capture(capture, fixture=fixture)
    return measurement


def test_a_good_capture_raises_no_flag() -> None:
    found = measured(pulse() + hiss())
    assert found.flags == ()
    assert found.estimator == "edge shape"
    assert found.levels == "histogram 10/50/90 %"


@pytest.mark.parametrize("sign", [1.0, -1.0])
def test_clipped_where_noise_stops_at_the_end_of_the_range(sign: float) -> None:
    whole = sign * (pulse() + hiss(0.01))
    assert "clipped" not in measured(whole).flags
    assert "clipped" in measured(np.clip(whole, -0.9, 0.9)).flags


@pytest.mark.parametrize("codes", [50, 200])
def test_a_quiet_coded_record_is_not_called_clipped(codes: int) -> None:
    """All samples of a state may share one code, which is then the extreme of the record."""
    assert "clipped" not in measured(np.round(pulse() * codes) / codes).flags


def test_few_samples_on_edge() -> None:
    assert "few_samples_on_edge" in measured(pulse(tau=1e-9) + hiss()).flags


def test_no_pulse_has_no_quantities_but_a_bound_of_the_amplitude_where_the_drive_did_pulse() -> None:
    found = measured(hiss())
    assert "no_pulse" in found.flags
    assert found.quantities.keys() == {"amplitude_V"}
    assert found.quantities["amplitude_V"].value is None
    assert found.quantities["amplitude_V"].hi95 == pytest.approx(np.ptp(hiss()))
    assert measured(hiss(), drive=None).quantities == {}
    assert measured(0 * hiss()).quantities == {}
    assert found.n_pulses == 0


@pytest.mark.parametrize(("widths", "expected"), [(1.0, True), (3.0, True), (4.0, True), (8.0, False), (20.0, False)])
def test_never_settles_below_five_time_constants(widths: float, expected: bool) -> None:
    found = measured(pulse(widths * 100e-9, tau=100e-9) + hiss(), drive=None)
    assert ("never_settles" in found.flags) is expected


def test_large_signal_and_used_up_bias() -> None:
    """A swing of a tenth of the bias changes the capacitance; one of four fifths leaves the junction without bias."""
    assert not {"large_signal", "bias_used_up"} & set(measured(pulse() + hiss()).flags)
    assert "large_signal" in measured(1.5 * pulse() + hiss()).flags
    assert "bias_used_up" not in measured(5 * pulse() + hiss()).flags
    assert {"large_signal", "bias_used_up"} <= set(measured(10 * pulse() + hiss()).flags)


def test_the_bias_read_back_goes_before_the_one_set() -> None:
    assert "large_signal" in measured(pulse() + hiss(), bias_read_V=5.0).flags


def test_a_transistor_output_may_swing_over_its_whole_supply() -> None:
    found = measured(11.5 - 11 * pulse() + hiss(), device_kind=DeviceKind.TRANSISTOR_SWITCH,
                     output_connection=OutputConnection.PULL_UP)  # fmt: skip
    assert not {"large_signal", "bias_used_up"} & set(found.flags)


def test_bench_limited_where_the_edge_is_not_clearly_slower_than_the_bench() -> None:
    """The limit is one and a half times the bench's own rise or fall time; this edge takes 88 ns."""
    for own, expected in ((50e-9, False), (65e-9, True)):
        fixture = Fixture(response=Response(rise_time_s=own, fall_time_s=1e-9))
        assert ("bench_limited" in measured(pulse() + hiss(), fixture=fixture).flags) is expected


def test_the_bench_is_held_against_the_edge_that_the_light_makes() -> None:
    """With a pull-up the light's on-edge is the output's falling one."""
    slow_on = Fixture(response=Response(rise_time_s=65e-9, fall_time_s=1e-9))
    t = np.clip(T, 0, None)
    off = np.clip(T - 3e-6, 0, None)
    down, up = -np.expm1(-t / 300e-9), -np.expm1(-off / 40e-9)
    output = 5 - 4 * (down - up) + hiss()
    switch = {"device_kind": DeviceKind.TRANSISTOR_SWITCH, "output_connection": OutputConnection.PULL_UP}
    assert "bench_limited" not in measured(output, fixture=slow_on, **switch).flags
    slow_off = Fixture(response=Response(rise_time_s=1e-9, fall_time_s=65e-9))
    assert "bench_limited" in measured(output, fixture=slow_off, **switch).flags


def test_emitter_unknown_without_a_bench_response() -> None:
    assert measured(pulse() + hiss(), fixture=UNKNOWN_FIXTURE).flags == ("emitter_unknown",)


@pytest.mark.parametrize(("current", "expected"), [(5e-3, False), (5.4e-3, False), (8e-3, True)])
def test_emitter_current_differs(current: float, expected: bool) -> None:
    assert ("emitter_current_differs" in measured(pulse() + hiss(), emitter_current_A=current).flags) is expected


def test_slow_tail_of_a_photodiode() -> None:
    """A tenth of the charge arriving ten times later stretches the last part of the edge."""
    slow = 0.9 * pulse(tau=TAU) + 0.1 * pulse(tau=10 * TAU)
    assert "slow_tail" in measured(slow + hiss()).flags
    assert "slow_tail" not in measured(pulse() + hiss()).flags


def test_a_transistor_s_slow_recovery_is_no_diffusion_tail() -> None:
    slow = 0.9 * pulse(tau=TAU) + 0.1 * pulse(tau=10 * TAU)
    found = measured(slow + hiss(), device_kind=DeviceKind.TRANSISTOR_SWITCH)
    assert "slow_tail" not in found.flags


def test_droop_of_an_ac_coupled_top() -> None:
    sagging = pulse() * np.exp(-np.clip(T, 0, None) / 30e-6)
    assert "droop" in measured(sagging + hiss()).flags


def test_a_settling_top_is_not_called_droop() -> None:
    assert "droop" not in measured(pulse(tau=300e-9) + hiss()).flags


def test_ringing_is_overshoot_of_more_than_five_per_cent() -> None:
    """Second order with damping 0.5 overshoots by 16.3 %, with 0.8 by 1.5 %. Source: 100 exp(-pi z / sqrt(1 - z^2))."""

    def second_order(damping: float) -> Array:
        x = np.clip(T, 0, None) / 20e-9
        root = np.sqrt(1 - damping**2)
        return 1 - np.exp(-damping * x) * (np.cos(root * x) + damping / root * np.sin(root * x))

    assert "ringing" in measured(second_order(0.5) + hiss()).flags
    assert "ringing" not in measured(second_order(0.8) + hiss()).flags


def test_ringing_is_seen_on_a_plateau_that_rings_from_end_to_end() -> None:
    """The ringing must not pass for the noise that bounds it."""
    x = np.clip(T, 0, None)
    output = (1 + 0.3 * np.exp(-x / 3e-6) * np.sin(x / 60e-9)) * (T > 0)
    assert "ringing" in measured(np.convolve(output, np.full(9, 1 / 9), mode="same") + hiss(0.002), drive=None).flags


def test_min_max_record_of_peak_detection() -> None:
    pairs = (pulse() + hiss(0.02)).reshape(-1, 2)
    spread = np.abs(hiss(0.02, seed=3).reshape(-1, 2))
    pairs = np.stack((pairs.min(axis=1) - spread[:, 0], pairs.max(axis=1) + spread[:, 1]), axis=1).ravel()
    assert "min_max_record" in measured(pairs).flags
    assert is_min_max(pairs[1:])
    assert not is_min_max(pulse() + hiss(0.02))


def test_unpaired_where_an_answer_is_missing() -> None:
    twice = 3.0 * (((T >= 0) & (T < 1e-6)) | ((T >= 4e-6) & (T < 5e-6)))
    found = measured(pulse(1e-6) + hiss(), drive=np.asarray(twice))
    assert "unpaired" in found.flags
    assert found.n_pulses == 1


def test_unpaired_where_nothing_answers() -> None:
    late = 3.0 * ((T >= 6e-6) & (T < 7e-6))
    found = measured(pulse(1e-6) + hiss(), drive=np.asarray(late))
    assert "unpaired" in found.flags
    assert found.value("t_plh_s") is None


def test_period_unknown_leaves_the_duty_out() -> None:
    found = measured(pulse() + hiss(), drive_period_s=None)
    assert "period_unknown" in found.flags
    assert not {"duty_in", "duty_out", "duty_cycle_distortion"} & found.quantities.keys()
    assert found.value("width_out_s") == pytest.approx(3e-6, rel=1e-3)


@pytest.mark.parametrize("missing", ["bias_V", "load_ohm"])
def test_conditions_missing(missing: str) -> None:
    assert "conditions_missing" in measured(pulse() + hiss(), **{missing: None}).flags


def test_ac_coupled() -> None:
    assert "ac_coupled" in measured(pulse() + hiss(), coupling="AC").flags


@pytest.mark.parametrize(("load", "expected"), [(9e3, False), (11e3, True), (1e6, True)])
def test_low_input_resistance_beyond_one_per_cent(load: float, expected: bool) -> None:
    """1 Mohm across 1 Mohm halves the reading; across 10 kohm it takes 1 %."""
    assert ("low_input_resistance" in measured(pulse() + hiss(), load_ohm=load).flags) is expected


@pytest.mark.parametrize(("limit", "expected"), [(None, False), (100e6, False), (20e6, True)])
def test_bandwidth_limited_where_the_limit_is_not_ten_times_faster(limit: float | None, expected: bool) -> None:
    """88 ns edges want 0.35 / B below 8.8 ns, B above 40 MHz. Source: one pole, t_r B = ln 9 / (2 pi)."""
    assert ("bandwidth_limited" in measured(pulse() + hiss(), bandwidth_limit_Hz=limit).flags) is expected


def test_uneven_time() -> None:
    rng = np.random.default_rng(6)
    time = np.cumsum(rng.uniform(0.3e-9, 1.7e-9, T.size)) - 2e-6
    record = TimedRecord(signal_V=pulse(t=time) + hiss(), time_s=time)
    capture = Capture(name="uneven.csv", outputs={1: record}, conditions=Conditions(**DIODE))  # type: ignore[arg-type]
    (found,) = measure_pulse_capture(capture, fixture=KNOWN)
    assert "uneven_time" in found.flags
    assert found.value("rise_time_s") == pytest.approx(TAU * np.log(9), rel=0.02)


def test_noise_unknown_on_short_flats() -> None:
    t = np.arange(-4, 14) * 1.0
    channel = measure_channel(Waveform(signal_V=np.clip(t / 3, 0, 1) - np.clip((t - 7) / 3, 0, 1), dt_s=1.0))
    assert channel is not None
    assert not channel.noise.known


def test_remarks_of_the_reader_are_kept() -> None:
    capture = Capture(
        name="remarked.csv",
        outputs={1: Waveform(signal_V=pulse() + hiss(), dt_s=DT)},
        conditions=Conditions(**DIODE),  # type: ignore[arg-type]
        remarks=("probe_doubtful",),
    )
    (found,) = measure_pulse_capture(capture, fixture=KNOWN)
    assert "probe_doubtful" in found.flags


def test_a_load_of_the_fixture_is_still_checked_against_the_input() -> None:
    fixture = Fixture(response=KNOWN.response, loads=(Load(nominal_ohm=1000, actual_ohm=998.7, u_actual_ohm=0.5),))
    assert measured(pulse() + hiss(), fixture=fixture).flags == ()
