"""Other reference levels than 10, 50 and 90 %: held against one pole in closed form."""

import json
from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest
from typer.testing import CliRunner

from darkedge.analysis.captures import Capture, Conditions, DeviceKind, OutputConnection, Waveform
from darkedge.analysis.errors import FitError, InputError
from darkedge.analysis.fixture import Fixture
from darkedge.analysis.junction.edge_data import edge_data
from darkedge.analysis.measurement import Measurement
from darkedge.analysis.waveform.measure import measure_pulse_capture
from darkedge.analysis.waveform.reference import ReferenceLevels
from darkedge.cli.main import app

SAMPLES = Path(__file__).resolve().parents[1] / "sample_captures"
TAU, WIDTH, STEP = 50e-9, 2e-6, 1e-9
TIME = -0.4e-6 + STEP * np.arange(5000)
LOW, HIGH = 0.2, 5.2


def capture(*, noise_V: float = 2e-3, offset_V: float = 0.0, seed: int = 4) -> Capture:
    """One pole of 50 ns between 0.2 and 5.2 V, a drive with edges of one sample."""
    lit = np.where(TIME > 0, -np.expm1(-np.clip(TIME, 0, None) / TAU), 0.0)
    gone = np.where(TIME > WIDTH, -np.expm1(-np.clip(TIME - WIDTH, 0, None) / TAU), 0.0)
    rng = np.random.default_rng(seed)
    output = LOW + (HIGH - LOW) * (lit - gone) + offset_V + rng.normal(0, noise_V, TIME.size)
    drive = np.where((TIME > 0) & (TIME < WIDTH), 3.0, 0.0) + rng.normal(0, 1e-3, TIME.size)
    return Capture(
        name="a", outputs={1: Waveform(signal_V=output, dt_s=STEP, t0_s=TIME[0])},
        drive=Waveform(signal_V=drive, dt_s=STEP, t0_s=TIME[0]),
        conditions=Conditions(
            bias_V=5.0, load_ohm=1e3, element=1, device_kind=DeviceKind.PHOTODIODE,
            output_connection=OutputConnection.LOAD_TO_GROUND, drive_period_s=2e-5,
        ),
    )  # fmt: skip


def measured(reference: ReferenceLevels, fixture: Fixture | None = None, **how: float) -> Measurement:
    return measure_pulse_capture(capture(**how), fixture=fixture or Fixture(), reference=reference)[0]


def near(found: Measurement, quantity: str, wanted: float) -> bool:
    estimate = found.quantities[quantity]
    assert estimate.value is not None
    assert estimate.u is not None
    return abs(estimate.value - wanted) < 4 * estimate.u + 0.3 * STEP


@pytest.mark.parametrize(("low", "high"), [(0.1, 0.9), (0.2, 0.8), (0.05, 0.95)])
def test_edges_are_timed_between_the_levels_asked_for(low: float, high: float) -> None:
    """One pole takes tau ln((1 - low) / (1 - high)) from low to high; 1.386 tau from 20 to 80 %."""
    found = measured(ReferenceLevels(low_ratio=low, high_ratio=high))
    wanted = TAU * np.log((1 - low) / (1 - high))
    assert near(found, "rise_time_s", wanted)
    assert near(found, "fall_time_s", wanted)
    assert found.levels == f"histogram {100 * low:g}/50/{100 * high:g} %"
    assert near(found, "t_plh_s", TAU * np.log(2))  # delays stay at half the amplitude


def test_delays_at_a_fixed_voltage_are_those_of_the_exponential() -> None:
    """On the way up 1.4 V is passed after -tau ln(1 - (1.4 - 0.2) / 5), on the way down after -tau ln((1.4 - 0.2) / 5)."""
    found = measured(ReferenceLevels(rising_V=1.4, falling_V=1.4))
    up, down = -TAU * np.log(1 - 1.2 / 5), -TAU * np.log(1.2 / 5)
    assert near(found, "t_plh_s", up)
    assert near(found, "t_phl_s", down)
    assert near(found, "width_out_s", WIDTH + down - up)
    assert near(found, "rise_time_s", TAU * np.log(9))
    assert found.levels == "histogram 10/50/90 %, delays at 1.4 V"


def test_the_two_edges_can_have_thresholds_of_their_own() -> None:
    """Some data sheets take 2.0 V on the way up and 0.8 V on the way down."""
    found = measured(ReferenceLevels(rising_V=2.0, falling_V=0.8))
    assert near(found, "t_plh_s", -TAU * np.log(1 - 1.8 / 5))
    assert near(found, "t_phl_s", -TAU * np.log(0.6 / 5))
    assert found.levels == "histogram 10/50/90 %, delays at 2 V rising and 800 mV falling"


def test_a_fixed_threshold_is_in_true_volts() -> None:
    """An offset of the scope that the fixture states is taken off before the threshold is held against the record."""
    fixture = Fixture(offset_V=0.3, u_offset_V=0.001)
    found = measured(ReferenceLevels(rising_V=1.4, falling_V=1.4), fixture, offset_V=0.3)
    assert near(found, "t_plh_s", -TAU * np.log(1 - 1.2 / 5))


def test_an_uncertain_voltage_makes_a_fixed_threshold_uncertain_by_the_slope() -> None:
    """At 1.4 V the edge rises by (5.2 - 1.4) V / 50 ns: 50 mV are 0.66 ns."""
    reference = ReferenceLevels(rising_V=1.4, falling_V=1.4)
    sharp, blunt = (measured(reference, Fixture(u_offset_V=u)).quantities["t_plh_s"].u for u in (0.0, 0.05))
    assert sharp is not None
    assert blunt is not None
    assert np.sqrt(blunt**2 - sharp**2) == pytest.approx(0.05 * TAU / 3.8, rel=0.1)


@pytest.mark.parametrize("volts", [0.1, 0.25, 5.15, 7.0])
def test_a_threshold_that_is_not_clearly_passed_leaves_delays_out_and_flags_it(volts: float) -> None:
    found = measured(ReferenceLevels(rising_V=volts, falling_V=volts))
    assert "threshold_missed" in found.flags
    assert not {"t_plh_s", "t_phl_s", "width_out_s"} & found.quantities.keys()
    assert near(found, "rise_time_s", TAU * np.log(9))


def test_the_uncertainty_covers_the_scatter_at_other_levels() -> None:
    """Twenty records with new noise: the scatter is what is stated, within what twenty tell."""
    reference = ReferenceLevels(low_ratio=0.2, high_ratio=0.8, rising_V=1.4, falling_V=1.4)
    rows = [measured(reference, noise_V=0.02, seed=seed) for seed in range(20)]
    for name in ("rise_time_s", "fall_time_s"):  # delays rest on the drive's edge of one sample, which is no noise
        values = [row.quantities[name].value for row in rows]
        us = [row.quantities[name].u for row in rows]
        assert 0.5 < np.std(values) / np.mean(us) < 1.6


@pytest.mark.parametrize("levels", [(0.0, 0.8), (0.8, 0.2), (0.2, 1.0), (0.6, 0.8)])
def test_levels_that_are_none_are_refused(levels: tuple[float, float]) -> None:
    with pytest.raises(InputError, match="the levels do not lie around one half"):
        ReferenceLevels(low_ratio=levels[0], high_ratio=levels[1])


def test_edges_between_other_levels_are_not_fitted_as_ten_to_ninety() -> None:
    row = measured(ReferenceLevels(low_ratio=0.2, high_ratio=0.8))
    row = replace(row, flags=())
    with pytest.raises(FitError, match=r"not timed between 10 and 90 %; found histogram 20/50/80 %"):
        edge_data([row], Fixture())


def test_the_command_takes_levels_and_thresholds() -> None:
    capture_file = SAMPLES / "npn_switch" / "captures" / "0001_pulse.csv"
    words = ["measure", str(capture_file), "--levels", "20 %, 80 %", "--threshold", "2 V, 0.8 V", "--json"]
    result = CliRunner().invoke(app, words)
    (row,) = json.loads(result.stdout)
    assert row["levels"] == "histogram 20/50/80 %, delays at 2 V rising and 800 mV falling"
    assert row["storage_time_s"] > 0
    for bad in (
        ["--levels", "20 %"],
        ["--levels", "80 %, 20 %"],
        ["--threshold", "1 V, 2 V, 3 V"],
        ["--threshold", "5 mA"],
    ):
        result = CliRunner().invoke(app, ["measure", str(capture_file), *bad])
        assert result.exit_code == 2
        assert "Traceback" not in result.output
