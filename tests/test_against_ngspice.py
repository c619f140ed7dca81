"""The measurement and the fit against ngspice, a circuit simulator that shares no code with them.

Stored answers are used, so that the checks run everywhere; where ngspice is installed some are made anew and compared.
"""

import importlib.util
import math
import sys
from pathlib import Path

import numpy as np
import pytest

from darkedge.analysis.captures import Capture, Conditions, DeviceKind, Kind, OutputConnection, Waveform
from darkedge.analysis.fixture import Fixture, Load, Response
from darkedge.analysis.junction.fit import fit_junction
from darkedge.analysis.measurement import Measurement
from darkedge.analysis.waveform.measure import measure_pulse_capture

_SPEC = importlib.util.spec_from_file_location("spice_bench", Path(__file__).with_name("spice_bench.py"))
bench = importlib.util.module_from_spec(_SPEC)
sys.modules["spice_bench"] = bench
_SPEC.loader.exec_module(bench)

SAMPLES = 4000
FIXTURE = Fixture(
    loads=tuple(
        Load(nominal_ohm=r, actual_ohm=r, u_actual_ohm=1e-4 * r, stray_F=bench.STRAY_F, u_stray_F=0.1e-12)
        for r in bench.LOADS_OHM
    ),
    response=Response(rise_time_s=1e-12, fall_time_s=1e-12, u_rise_time_s=1e-13, u_fall_time_s=1e-13),
)


def seeded(name: str) -> np.random.Generator:
    return np.random.default_rng(sum(map(ord, name)))


def measured(circuit: object) -> tuple[Measurement, tuple[np.ndarray, np.ndarray]]:
    """The circuit's waveform with noise at a signal-to-noise ratio of 100 in 8-bit codes, measured."""
    time, _, output = bench.stored(circuit.name)
    grid = np.linspace(time[0], time[-1], SAMPLES)
    rng = seeded(circuit.name)
    step = float(grid[1] - grid[0])
    shown = Waveform(signal_V=bench.digitised(time, output, grid, rng), dt_s=step, t0_s=float(grid[0]))
    # The drive as a generator gives it: an edge of four samples, its middle where the simulated one jumps.
    ramp = np.clip((grid + 2 * step) / (4 * step), 0, 1) - np.clip(
        (grid - circuit.width_s + 2 * step) / (4 * step), 0, 1
    )
    driven = Waveform(signal_V=ramp, dt_s=step, t0_s=float(grid[0]))
    switch = isinstance(circuit, bench.Switch)
    conditions = Conditions(
        kind=Kind.PULSE, device="spice", bias_V=circuit.supply_V if switch else circuit.bias_V, load_ohm=circuit.load_ohm,
        pulse_width_s=circuit.width_s, device_kind=DeviceKind.TRANSISTOR_SWITCH if switch else DeviceKind.PHOTODIODE,
        output_connection=OutputConnection.PULL_UP if switch else OutputConnection.LOAD_TO_GROUND,
    )  # fmt: skip
    capture = Capture(name=circuit.name, outputs={1: shown}, drive=driven, conditions=conditions)
    (row,) = measure_pulse_capture(capture, fixture=FIXTURE)
    return row, (time, output)


@pytest.mark.parametrize("circuit", bench.DIODES, ids=lambda c: c.name)
def test_rise_and_fall_are_within_one_per_cent_of_the_waveform_without_noise(circuit: object) -> None:
    """Source: ngspice; 10-90 % times by plain interpolation of its waveform. Some 350 samples an edge."""
    row, (time, output) = measured(circuit)
    lit = (time > 0) & (time <= circuit.width_s)
    after = time >= circuit.width_s
    top, rest = float(np.interp(circuit.width_s, time, output)), float(output[time < 0][0])
    on = bench.plain_crossings(time[lit], output[lit], rest, top)
    off = bench.plain_crossings(time[after], output[after], top, rest)
    assert row.value("rise_time_s") == pytest.approx(on[2] - on[0], rel=0.01)
    assert row.value("fall_time_s") == pytest.approx(off[2] - off[0], rel=0.01)
    assert row.value("t_plh_s") == pytest.approx(on[1], rel=0.01)  # one sample of drive
    assert row.value("t_phl_s") == pytest.approx(off[1] - circuit.width_s, rel=0.01)


@pytest.mark.parametrize("card", bench.CARDS, ids=lambda c: c.name)
def test_capacitance_is_within_three_per_cent_of_the_model_card_at_every_bias(card: object) -> None:
    """Source: ngspice diode model, junction capacitance CJO (1 + V/VJ)^-M; swing up to a tenth of the bias."""
    rows = [measured(circuit)[0] for circuit in bench.DIODES if circuit.card is card]
    fit = fit_junction(rows, fixture=FIXTURE)
    assert len(fit.capacitance) == len(bench.BIASES_V)
    for point in fit.capacitance:
        assert point.c_F == pytest.approx(card.capacitance_F(point.bias_V), rel=0.03)
    for name, made in (("c_j0_F", card.cjo_F), ("v_bi_V", card.vj_V), ("grading", card.m)):
        estimate = fit.parameters[name]
        assert abs(math.log(estimate.value / made)) < 4 * estimate.u / estimate.value


@pytest.mark.parametrize("circuit", bench.SWITCHES, ids=lambda c: c.name)
def test_switching_times_are_those_of_the_simulated_transistor(circuit: object) -> None:
    """Source: ngspice bipolar model; 100 us at 10 % duty. On delay, on time, storage and off time by plain interpolation."""
    row, (time, output) = measured(circuit)
    rest, low = float(output[time < 0][0]), float(np.interp(circuit.width_s * 0.98, time, output))
    lit, after = (time > 0) & (time <= circuit.width_s), time >= circuit.width_s
    on = bench.plain_crossings(time[lit], output[lit], rest, low)
    off = bench.plain_crossings(time[after], output[after], low, rest)
    step = (time[-1] - time[0]) / (SAMPLES - 1)
    early = 0.4 * 4 * step  # the drive's 10 % point going up, and its 90 % point going down, before their middle
    tolerance = {"rel": 0.01, "abs": step}  # or one sample
    assert row.value("on_delay_s") == pytest.approx(on[0] + early, **tolerance)
    assert row.value("on_time_s") == pytest.approx(on[2] + early, **tolerance)
    assert row.value("storage_time_s") == pytest.approx(off[0] - circuit.width_s + early, **tolerance)
    assert row.value("off_time_s") == pytest.approx(off[2] - circuit.width_s + early, **tolerance)
    assert row.value("fall_time_s") == pytest.approx(on[2] - on[0], **tolerance)
    assert row.value("rise_time_s") == pytest.approx(off[2] - off[0], **tolerance)


def test_more_overdrive_stores_longer_in_the_simulator_too() -> None:
    """Common practice, no source."""
    mild, hard = (measured(circuit)[0].value("storage_time_s") for circuit in bench.SWITCHES)
    assert mild < hard


@pytest.mark.skipif(not bench.has_ngspice(), reason="ngspice is not installed; the stored answers are used")
@pytest.mark.parametrize("circuit", [bench.DIODES[0], bench.DIODES[17], bench.SWITCHES[1]], ids=lambda c: c.name)
def test_the_stored_answers_are_what_ngspice_says(circuit: object) -> None:
    time, _, output = bench.stored(circuit.name)
    now, _, again = bench.simulate(circuit)
    inside = np.interp(now, time, output)
    assert np.median(np.abs(again - inside)) < 1e-3 * np.ptp(output)  # versions step differently


def test_the_netlists_kept_are_those_that_were_run() -> None:
    for circuit in (*bench.DIODES, *bench.SWITCHES):
        assert (bench.FOLDER / f"{circuit.name}.cir").read_text(encoding="utf-8") == circuit.netlist
