"""One pulse capture into its measurements: every quantity against closed forms, and what must not change it."""

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from numpy.typing import NDArray

from darkedge.analysis.captures import (
    Capture,
    Conditions,
    DeviceKind,
    Edge,
    OutputConnection,
    Waveform,
)
from darkedge.analysis.fixture import UNKNOWN_FIXTURE, Fixture, Load
from darkedge.analysis.measurement import Measurement
from darkedge.analysis.waveform.marks import mark_capture
from darkedge.analysis.waveform.measure import measure_pulse_capture

Array = NDArray[np.float64]

DT = 2e-9
T = np.arange(-1000, 9000) * DT
TAU = 100e-9
WIDTH = 10e-6
DELAY = 37e-9
DIODE = {
    "device_kind": DeviceKind.PHOTODIODE, "output_connection": OutputConnection.LOAD_TO_GROUND, "bias_V": 12.0,
    "load_ohm": 1000.0, "drive_period_s": 1e-4,
}  # fmt: skip


def ramp(t: Array, length: float = 20e-9) -> Array:
    """A drive edge that crosses one half at t = 0."""
    return np.clip(t / length + 0.5, 0, 1)


def drive(width: float = WIDTH, t: Array = T) -> Array:
    return 3.0 * (ramp(t) - ramp(t - width))


def response(width: float = WIDTH, *, tau: float = TAU, t: Array = T) -> Array:
    def up(x: Array) -> Array:
        return -np.expm1(-np.clip(x, 0, None) / tau)

    return up(t - DELAY) - up(t - DELAY - width)


def noise(sigma: float, seed: int = 1, n: int = T.size) -> Array:
    return sigma * np.random.default_rng(seed).standard_normal(n)


def capture_of(outputs: dict[int, Array], *, driven: Array | None = None, t: Array = T, **known: object) -> Capture:
    return Capture(
        name="run/captures/0001_pulse.csv",
        drive=None if driven is None else Waveform(signal_V=driven, dt_s=DT, t0_s=float(t[0])),
        outputs={k: Waveform(signal_V=v, dt_s=DT, t0_s=float(t[0])) for k, v in outputs.items()},
        conditions=Conditions(**(DIODE | known)),  # type: ignore[arg-type]
    )


def measured(
    output: Array, *, driven: Array | None = None, fixture: Fixture = UNKNOWN_FIXTURE, t: Array = T, **known: object
) -> Measurement:
    (found,) = measure_pulse_capture(capture_of({1: output}, driven=driven, t=t, **known), fixture=fixture)
    return found


def close(found: Measurement, quantity: str, expected: float, *, sigmas: float = 4.0) -> bool:
    """Whether a quantity is within some of its standard uncertainties of the truth."""
    estimate = found.quantities[quantity]
    assert estimate.value is not None
    assert estimate.u is not None
    return abs(estimate.value - expected) <= sigmas * estimate.u


def test_every_quantity_of_one_photodiode_pulse() -> None:
    """One-pole response of 100 ns, half a volt, 37 ns late, to a 10 us pulse of 100 us period; noise 1 %.

    Source: RC ln 9 for both edges, RC ln 2 for the delay to one half; widths of a settled pulse are those of the drive.
    """
    found = measured(0.2 + 0.5 * response() + noise(0.005), driven=drive() + noise(0.02, 2))
    truth = {
        "low_V": 0.2, "high_V": 0.7, "amplitude_V": 0.5, "photocurrent_A": 0.5e-3,
        "rise_time_s": TAU * np.log(9), "fall_time_s": TAU * np.log(9),
        "t_plh_s": DELAY + TAU * np.log(2), "t_phl_s": DELAY + TAU * np.log(2), "pulse_width_distortion_s": 0.0,
        "width_in_s": WIDTH, "width_out_s": WIDTH, "duty_in": 0.1, "duty_out": 0.1, "duty_cycle_distortion": 0.0,
    }  # fmt: skip
    assert found.quantities.keys() == truth.keys()
    for quantity, value in truth.items():
        assert close(found, quantity, value), quantity
    assert found.quantities["rise_time_s"].u == pytest.approx(0.004 * TAU * np.log(9), rel=0.5)
    assert (found.n_pulses, found.element) == (1, 1)
    assert found.conditions.element == 1


def test_an_inverting_output_swaps_edges_and_keeps_widths() -> None:
    """A pull-up falls with the light: tPHL ends its answer to the light's start, the width is its low time."""
    known = {"output_connection": OutputConnection.PULL_UP, "device_kind": DeviceKind.TRANSISTOR_SWITCH}
    found = measured(5 - 4.8 * response(12e-6) + noise(0.01), driven=drive(), **known)
    assert close(found, "t_phl_s", DELAY + TAU * np.log(2))
    assert close(found, "t_plh_s", DELAY + TAU * np.log(2) + 2e-6)
    assert close(found, "width_out_s", 12e-6)
    assert close(found, "duty_out", 0.12)
    assert close(found, "duty_cycle_distortion", 0.02)
    assert close(found, "pulse_width_distortion_s", 2e-6)
    assert close(found, "output_low_V", 0.2)


def test_many_pulses_are_meaned_and_their_jitter_bounded() -> None:
    """Twenty pulses of a train: period from the edges, u of the mean below that of one pulse, jitter only bounded."""
    phase = np.mod(T + 0.2e-6, 1e-6)
    output = sum(response(0.3e-6, tau=15e-9, t=phase - k * 1e-6) for k in (-1, 0))
    driven = sum(drive(0.3e-6, t=phase - k * 1e-6) for k in (-1, 0, 1))
    found = measured(np.asarray(output) + noise(0.01), driven=np.asarray(driven) + noise(0.01, 5))
    assert found.n_pulses in (19, 20)
    assert close(found, "rise_time_s", 15e-9 * np.log(9))
    assert close(found, "duty_out", 0.3)
    assert found.quantities["rise_time_s"].u is not None
    assert found.quantities["rise_time_s"].u < 0.01 * 15e-9 * np.log(9)
    assert found.quantities["jitter_s"].value is None
    assert "unpaired" not in found.flags


def test_jitter_beyond_the_noise_is_measured() -> None:
    """Delays that scatter by 4 ns from pulse to pulse."""
    rng = np.random.default_rng(12)
    starts = np.arange(18) * 1e-6
    late = rng.normal(0, 4e-9, starts.size)
    output = sum(response(0.3e-6, tau=15e-9, t=T - s - d) for s, d in zip(starts, late, strict=True))
    driven = sum(drive(0.3e-6, t=T - s) for s in starts)
    found = measured(np.asarray(output) + noise(0.01), driven=np.asarray(driven) + noise(0.01, 5))
    assert found.value("jitter_s") == pytest.approx(float(np.std(late, ddof=1)), rel=0.1)


def test_one_edge_gives_what_one_edge_can() -> None:
    found = measured(response(1.0) + noise(0.01), driven=drive(1.0), drive_period_s=None)
    assert close(found, "rise_time_s", TAU * np.log(9))
    assert close(found, "t_plh_s", DELAY + TAU * np.log(2))
    missing = {"fall_time_s", "t_phl_s", "width_in_s", "width_out_s", "pulse_width_distortion_s", "duty_out"}
    assert not missing & found.quantities.keys()


def test_without_a_drive_there_are_no_delays() -> None:
    found = measured(response() + noise(0.01))
    assert close(found, "width_out_s", WIDTH)
    assert not {"t_plh_s", "t_phl_s", "width_in_s", "duty_in", "jitter_s"} & found.quantities.keys()


def test_a_lone_pulse_is_its_own_proof_of_polarity() -> None:
    """Without drive and connection a record that leaves its rest once can only have left it for the light."""
    up = measured(response() + noise(0.01), output_connection=None)
    down = measured(1 - response() + noise(0.01), output_connection=None)
    assert close(up, "width_out_s", WIDTH)
    assert close(down, "width_out_s", WIDTH)


def test_width_is_left_out_where_polarity_cannot_be_told() -> None:
    """A train without drive and connection may be pulses up or pulses down."""
    phase = np.mod(T, 1e-6)
    output = sum(response(0.4e-6, tau=15e-9, t=phase - k * 1e-6) for k in (-1, 0))
    found = measured(np.asarray(output) + noise(0.01), output_connection=None)
    assert "width_out_s" not in found.quantities
    assert "conditions_missing" in found.flags


def test_the_fixture_s_offset_and_skew_are_taken_off_and_its_uncertainties_join() -> None:
    """Offset 3 mV, skew 0.4 ns, gain to 1 %, time base to 0.1 %. Source: JCGM 100:2008, 5.1.2."""
    fixture = Fixture(
        channel_skew_s=4e-9,
        u_channel_skew_s=1e-9,
        u_gain_ratio=0.01,
        u_timebase_ratio=1e-3,
        offset_V=3e-3,
        u_offset_V=1e-3,
    )
    output = 0.2 + 0.5 * response() + noise(1e-4)
    plain, corrected = measured(output, driven=drive()), measured(output, driven=drive(), fixture=fixture)
    assert (plain.value("low_V") or 0) - (corrected.value("low_V") or 0) == pytest.approx(3e-3)
    assert corrected.quantities["high_V"].u == pytest.approx(np.hypot(1e-3, 0.01 * 0.7), rel=0.01)
    assert corrected.quantities["amplitude_V"].u == pytest.approx(0.01 * 0.5, rel=0.01)
    assert (plain.value("t_plh_s") or 0) - (corrected.value("t_plh_s") or 0) == pytest.approx(4e-9, rel=1e-6)
    assert corrected.quantities["t_plh_s"].u == pytest.approx(1e-9, rel=0.1)
    assert corrected.quantities["width_out_s"].u == pytest.approx(1e-3 * WIDTH, rel=0.01)
    assert (corrected.quantities["duty_out"].u or 1) < 1e-5  # the time base cancels in a ratio


def test_photocurrent_rests_on_the_effective_load() -> None:
    """1 Mohm of scope across a 1 Mohm load halves the resistance: the current is twice what the load alone says.

    Source: two resistors in parallel; relative variances add (JCGM 100:2008, 5.1.6).
    """
    fixture = Fixture(loads=(Load(nominal_ohm=1e6, actual_ohm=1e6, u_actual_ohm=1e4),))
    found = measured(0.5 * response() + noise(1e-5), load_ohm=1e6, input_ohm=1e6, fixture=fixture)
    assert found.value("photocurrent_A") == pytest.approx(0.5 / 0.5e6, rel=1e-4)
    assert found.quantities["photocurrent_A"].u == pytest.approx(0.5 * 0.01 * 1e-6, rel=0.01)


@pytest.mark.parametrize("known", [{"load_ohm": None}, {"device_kind": DeviceKind.OPTOCOUPLER}, {"device_kind": None}])
def test_photocurrent_needs_a_diode_and_its_load(known: dict[str, object]) -> None:
    assert "photocurrent_A" not in measured(0.5 * response() + noise(1e-4), **known).quantities


def test_each_element_has_a_measurement_and_a_dark_neighbour_has_none() -> None:
    """A dual device with one half driven: the other half shows nothing, or a little crosstalk."""
    capture = capture_of({1: response() + noise(0.01), 2: noise(0.01, 9)}, driven=drive(), driven_element=1)
    first, second = measure_pulse_capture(capture)
    assert (first.element, second.element) == (1, 2)
    assert close(first, "rise_time_s", TAU * np.log(9))
    assert "no_pulse" in second.flags
    assert second.quantities.keys() == {"amplitude_V"}
    assert second.quantities["amplitude_V"].value is None
    assert 0.04 < (second.quantities["amplitude_V"].hi95 or 0) < 0.1  # all that noise of 0.01 V moves
    coupled = capture_of({1: response() + noise(0.01), 2: 0.1 * response() + noise(0.002, 9)}, driven=drive())
    assert close(measure_pulse_capture(coupled)[1], "amplitude_V", 0.1)


def test_the_estimator_is_named() -> None:
    """Fitted shape; residuals smoothed where the shape does not hold; straight lines where there are too few samples."""
    assert measured(response() + noise(0.01)).estimator == "edge shape"
    kinked = np.interp(T - DELAY, [0, 60e-9, 400e-9, WIDTH, WIDTH + 60e-9, WIDTH + 400e-9], [0, 0.6, 1, 1, 0.4, 0])
    assert measured(kinked + noise(0.005)).estimator == "local polynomial"
    assert measured(response(tau=0.5e-9) + noise(0.01)).estimator == "straight line"


PROPERTY = settings(max_examples=25, deadline=None, derandomize=True)
SHORT = np.arange(-300, 1700) * DT
TIMES = ("rise_time_s", "fall_time_s", "t_plh_s", "t_phl_s", "width_in_s", "width_out_s", "pulse_width_distortion_s")


def short_pulse(tau: float, seed: int) -> tuple[Array, Array]:
    output = response(1.5e-6, tau=tau, t=SHORT) + noise(0.01, seed, SHORT.size)
    return output, drive(1.5e-6, t=SHORT)


@given(shift=st.floats(-1e-3, 1e-3), tau=st.floats(20e-9, 150e-9), seed=st.integers(0, 999))
@PROPERTY
def test_shifting_the_time_origin_moves_no_duration(shift: float, tau: float, seed: int) -> None:
    output, driven = short_pulse(tau, seed)
    here = measured(output, driven=driven, t=SHORT)
    there = measured(output, driven=driven, t=SHORT + shift)
    for quantity in TIMES:
        assert there.value(quantity) == pytest.approx(here.value(quantity), rel=1e-4, abs=1e-12)


@given(scale=st.floats(1e-3, 1e3), tau=st.floats(20e-9, 150e-9), seed=st.integers(0, 999))
@PROPERTY
def test_scaling_volts_scales_no_time(scale: float, tau: float, seed: int) -> None:
    output, driven = short_pulse(tau, seed)
    plain = measured(output, driven=driven, t=SHORT)
    scaled = measured(scale * output, driven=driven, t=SHORT)
    assert scaled.value("amplitude_V") == pytest.approx(scale * (plain.value("amplitude_V") or 0), rel=1e-6)
    for quantity in TIMES:
        assert scaled.value(quantity) == pytest.approx(plain.value(quantity), rel=1e-4, abs=1e-12)


@given(offset=st.floats(-2.0, 2.0), tau=st.floats(20e-9, 150e-9), seed=st.integers(0, 999))
@PROPERTY
def test_an_offset_moves_levels_and_nothing_else(offset: float, tau: float, seed: int) -> None:
    output, driven = short_pulse(tau, seed)
    plain = measured(output, driven=driven, t=SHORT)
    moved = measured(offset + output, driven=driven, t=SHORT)
    assert (moved.value("low_V") or 0) - (plain.value("low_V") or 0) == pytest.approx(offset, abs=1e-6)
    for quantity in ("amplitude_V", *TIMES):
        assert moved.value(quantity) == pytest.approx(plain.value(quantity), rel=1e-4, abs=1e-12)


@given(tau=st.floats(20e-9, 150e-9), seed=st.integers(0, 999))
@PROPERTY
def test_reversing_polarity_swaps_the_edges(tau: float, seed: int) -> None:
    output, driven = short_pulse(tau, seed)
    plain = measured(output, driven=driven, t=SHORT, output_connection=None)
    turned = measured(-output, driven=driven, t=SHORT, output_connection=None)
    for mine, theirs in (("rise_time_s", "fall_time_s"), ("t_plh_s", "t_phl_s"), ("width_out_s", "width_out_s")):
        assert turned.value(theirs) == pytest.approx(plain.value(mine), rel=1e-4, abs=1e-12)
        assert turned.value(mine) == pytest.approx(plain.value(theirs), rel=1e-4, abs=1e-12)


@given(
    signal=st.lists(st.floats(-10, 10, width=32), min_size=2, max_size=60),
    driven=st.one_of(st.none(), st.lists(st.sampled_from([0.0, 1.0, 3.0]), min_size=2, max_size=60)),
)
@settings(max_examples=150, deadline=None, derandomize=True)
def test_no_list_of_numbers_is_too_odd_to_be_measured_or_declined(
    signal: list[float], driven: list[float] | None
) -> None:
    """Whatever the samples, there is a measurement: finite numbers, or `no_pulse` and at most a bound."""
    found = measured(np.asarray(signal), driven=None if driven is None else np.asarray(driven))
    assert ("no_pulse" in found.flags) == all(estimate.value is None for estimate in found.quantities.values())


def test_marks_lie_on_the_trace() -> None:
    """Each mark of a noise-free trace is where the trace is, at the fraction it names."""
    capture = capture_of({1: 0.2 + 0.5 * response()}, driven=drive())
    marks = mark_capture(capture)
    assert marks.output is not None
    assert marks.drive is not None
    assert [(c.edge, round(c.fraction, 3)) for c in marks.output.crossings] == [
        (Edge.RISING, 0.1), (Edge.RISING, 0.5), (Edge.RISING, 0.9),
        (Edge.FALLING, 0.9), (Edge.FALLING, 0.5), (Edge.FALLING, 0.1),
    ]  # fmt: skip
    for crossing in marks.output.crossings:
        assert np.interp(crossing.time_s, T, 0.2 + 0.5 * response()) == pytest.approx(crossing.level_V, abs=1e-3)
    assert (marks.output.low_V, marks.output.high_V) == pytest.approx((0.2, 0.7), abs=1e-4)


def test_marks_stop_after_two_pulses() -> None:
    phase = np.mod(T, 1e-6)
    output = sum(response(0.4e-6, tau=15e-9, t=phase - k * 1e-6) for k in (-1, 0))
    marks = mark_capture(capture_of({1: np.asarray(output)}))
    assert marks.output is not None
    assert len(marks.output.crossings) == 12
    assert marks.drive is None


def test_there_is_nothing_to_mark_on_a_flat_trace() -> None:
    assert mark_capture(capture_of({1: noise(0.01)})).output is None
    with pytest.raises(KeyError):
        mark_capture(capture_of({1: noise(0.01)}), element=2)
