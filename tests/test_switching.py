"""Switching times of transistor outputs: the trade's names and reference points."""

import numpy as np
import pytest

from darkedge.analysis.captures import (
    Capture,
    Conditions,
    DeviceKind,
    OutputConnection,
    Waveform,
)
from darkedge.analysis.measurement import Measurement
from darkedge.analysis.waveform.measure import measure_pulse_capture

DT = 20e-9


def measured(drive: np.ndarray, output: np.ndarray, **known: object) -> Measurement:
    conditions = Conditions(
        **{  # type: ignore[arg-type]
            "device_kind": DeviceKind.TRANSISTOR_SWITCH, "output_connection": OutputConnection.PULL_UP,
            "bias_V": 5.0, "load_ohm": 1000.0, "drive_period_s": 1e-3,
        } | known
    )  # fmt: skip
    capture = Capture(
        name="switch.csv",
        drive=Waveform(signal_V=drive, dt_s=DT),
        outputs={1: Waveform(signal_V=output, dt_s=DT)},
        conditions=conditions,
    )
    (measurement,) = measure_pulse_capture(capture)
    return measurement


def ramps(t: np.ndarray, corners: list[tuple[float, float]]) -> np.ndarray:
    times, values = zip(*corners, strict=True)
    return np.interp(t, times, values)


T = np.arange(0, 400e-6, DT)
DRIVE = ramps(T, [(0, 0), (50e-6, 0), (52e-6, 3), (150e-6, 3), (154e-6, 0), (400e-6, 0)])
FALLING = [(0, 4.8), (60e-6, 4.8), (70e-6, 0.2), (180e-6, 0.2), (200e-6, 4.8), (400e-6, 4.8)]


def test_an_inverting_switch_is_timed_by_its_own_way_down_and_back() -> None:
    """t_d from the drive's 10 % to the output's first tenth; t_on to nine tenths; t_s and t_f the same on the way back.

    Drive ramps 50-52 us and 150-154 us, output 60-70 us down and 180-200 us up. Source: input edge at 10 % to output
    edge at 10 % (JESD77 terms, delay time); t_on = t_d + t_r, t_off = t_s + t_f (IEC 60747-5 family, from memory).
    """
    found = measured(DRIVE, np.asarray(ramps(T, FALLING)))
    expected = {
        "on_delay_s": 61e-6 - 50.2e-6, "on_time_s": 69e-6 - 50.2e-6,
        "storage_time_s": 182e-6 - 150.4e-6, "off_time_s": 198e-6 - 150.4e-6,
    }  # fmt: skip
    for name, value in expected.items():
        assert found.value(name) == pytest.approx(value, abs=DT)  # one sample step
    assert found.value("output_low_V") == pytest.approx(0.2, abs=1e-6)
    assert found.value("width_out_s") == pytest.approx(190e-6 - 65e-6, abs=DT)


def test_an_emitter_resistor_is_timed_on_its_way_up() -> None:
    rising = [(t, 5 - v) for t, v in FALLING]
    found = measured(DRIVE, np.asarray(ramps(T, rising)), output_connection=OutputConnection.EMITTER_RESISTOR)
    assert found.value("on_delay_s") == pytest.approx(10.8e-6, abs=DT)
    assert found.value("storage_time_s") == pytest.approx(31.6e-6, abs=DT)
    assert found.value("output_low_V") is None


def test_on_and_off_times_are_delay_and_edge_together() -> None:
    """t_on = t_d + t_r and t_off = t_s + t_f: arithmetic of the definitions (IEC 60747-5 family, from memory)."""
    found = measured(DRIVE, np.asarray(ramps(T, FALLING)))
    on, delay, fall = (found.value(n) or 0.0 for n in ("on_time_s", "on_delay_s", "fall_time_s"))
    off, storage, rise = (found.value(n) or 0.0 for n in ("off_time_s", "storage_time_s", "rise_time_s"))
    assert on == pytest.approx(delay + fall, rel=1e-9)
    assert off == pytest.approx(storage + rise, rel=1e-9)


def test_a_photodiode_has_no_switching_times() -> None:
    found = measured(DRIVE, np.asarray(ramps(T, FALLING)), device_kind=DeviceKind.PHOTODIODE)
    assert not {"on_delay_s", "on_time_s", "storage_time_s", "off_time_s"} & found.quantities.keys()


def test_turn_on_alone_gives_turn_on_alone() -> None:
    """A record that ends before the light goes off has no storage and no off time."""
    early = T < 120e-6
    found = measured(DRIVE[early], np.asarray(ramps(T, FALLING))[early])
    assert found.value("on_delay_s") == pytest.approx(10.8e-6, abs=DT)
    assert not {"storage_time_s", "off_time_s", "rise_time_s", "width_out_s"} & found.quantities.keys()


def test_a_saturated_coupler_has_only_a_lower_bound_of_its_transfer_ratio() -> None:
    """4.6 V over 1 kohm from 10 mA is 0.46, but more light would show no more: collector over emitter current."""
    kind = {"device_kind": DeviceKind.OPTOCOUPLER, "emitter_current_A": 0.01}
    ratio = measured(DRIVE, np.asarray(ramps(T, FALLING)), **kind).quantities["current_transfer_ratio"]
    assert ratio.value is None
    assert ratio.lo95 == pytest.approx(0.46, abs=1e-3)


def test_an_unsaturated_coupler_has_its_transfer_ratio() -> None:
    """2.3 V over 1 kohm from 10 mA: 0.23, with 2.5 V left across the transistor."""
    half = [(t, 2.5 + v / 2 - 0.1) for t, v in FALLING]
    kind = {"device_kind": DeviceKind.OPTOCOUPLER, "emitter_current_A": 0.01}
    ratio = measured(DRIVE, np.asarray(ramps(T, half)), **kind).quantities["current_transfer_ratio"]
    assert ratio.value == pytest.approx(0.23, abs=1e-4)


def test_the_dark_half_of_a_dual_coupler_has_no_transfer_ratio() -> None:
    kind = {"device_kind": DeviceKind.OPTOCOUPLER, "emitter_current_A": 0.01, "driven_element": 2}
    assert "current_transfer_ratio" not in measured(DRIVE, np.asarray(ramps(T, FALLING)), **kind).quantities
