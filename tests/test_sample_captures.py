"""The sample captures: small, made by their script, and measured as what they were made with."""

import json
from datetime import date
from pathlib import Path

import pytest

from darkedge.analysis.captures import Kind
from darkedge.analysis.explain import ExplainedDevice, explain_devices
from darkedge.analysis.files.bench_file import read_bench
from darkedge.analysis.files.intake import Intake, take_in
from darkedge.analysis.files.plan_file import read_plan
from darkedge.analysis.measurement import Measurement

ROOT = Path(__file__).resolve().parents[1]
SAMPLES = ROOT / "sample_captures"
TRUTH = json.loads((ROOT / "tests" / "sample_truth.json").read_text(encoding="utf-8"))["runs"]
PINS_FRACTION = 0.02
"""Two per cent, or three standard uncertainties where those are more: edges read at a signal-to-noise ratio near 100."""


@pytest.fixture(scope="module")
def intake() -> Intake:
    return take_in([SAMPLES], today=date(2026, 3, 10))


@pytest.fixture(scope="module")
def devices(intake: Intake) -> dict[str, ExplainedDevice]:
    found = explain_devices(intake.measurements, fixture_for=intake.fixture_for).devices
    return {d.device: d for d in found if d.device and d.element == 1}


def of_run(intake: Intake, run: str) -> list[Measurement]:
    return [m for m in intake.measurements if m.capture.startswith(f"{run}/")]


def test_they_are_under_three_megabytes() -> None:
    assert sum(p.stat().st_size for p in SAMPLES.rglob("*") if p.is_file()) < 3e6


def test_nothing_is_refused(intake: Intake) -> None:
    assert intake.refusals == ()


@pytest.mark.parametrize("quantity", ["rise_time_s", "fall_time_s", "t_plh_s", "t_phl_s"])
def test_edges_and_delays_are_those_of_the_waveform_without_noise(intake: Intake, quantity: str) -> None:
    """Truth: read off the integrated waveform behind the scope's bandwidth, by plain interpolation."""
    checked, off = 0, []
    for m in intake.measurements:
        run, _, name = m.capture.rpartition("/captures/")
        true = TRUTH.get(run, {}).get("captures", {}).get(f"{name}:{m.element}", {}).get(quantity)
        driven = m.conditions.driven_element in (None, m.element)
        if true is None or not driven:
            continue
        estimate = m.quantities[quantity]
        checked += 1
        if abs(estimate.value - true) > max(PINS_FRACTION * true, 3 * estimate.u):
            off.append((m.capture, estimate.value, true))
    assert checked > 50
    assert len(off) <= 1  # three standard uncertainties are left by one in 370


@pytest.mark.parametrize("run", ["photodiode", "pin"])
def test_the_junction_is_what_it_was_made_with(devices: dict[str, ExplainedDevice], run: str) -> None:
    made = TRUTH[run]["elements"][0]
    fit = devices[TRUTH[run]["device"]].junction
    for name in ("c_j0_F", "v_bi_V", "grading", "c_stray_F", "full_depletion_V"):
        if made[name] is not None:
            assert fit.parameters[name].lo95 <= made[name] <= fit.parameters[name].hi95
    assert fit.model == ("full_depletion" if made["full_depletion_V"] else "graded")


def test_capacitance_is_within_three_per_cent_at_every_bias(devices: dict[str, ExplainedDevice]) -> None:
    made = TRUTH["photodiode"]["elements"][0]
    for point in devices["SP-2-21"].junction.capacitance:
        true = made["c_j0_F"] * (1 + point.bias_V / made["v_bi_V"]) ** -made["grading"] + made["c_stray_F"]
        assert point.c_F == pytest.approx(true, rel=0.03)


def test_dark_currents_are_those_of_the_device(intake: Intake) -> None:
    made = TRUTH["photodiode"]["elements"][0]["dark_current_A"]
    seen = 0
    for m in of_run(intake, "photodiode"):
        if m.conditions.kind is Kind.DARK:
            estimate = m.quantities["dark_current_A"]
            assert estimate.value == pytest.approx(made[f"{m.conditions.bias_V:g}"], abs=4 * estimate.u)
            seen += 1
    assert seen == 5


def test_light_leak_and_floor_are_told(intake: Intake) -> None:
    dark = {m.conditions.device: m for m in of_run(intake, "dark_traces") if m.conditions.kind is Kind.DARK}
    assert set(dark["SP-2-22"].flags) == {"low_input_resistance"}
    assert "light_leak" in dark["SP-2-23"].flags
    assert "below_floor" in dark["SP-2-24"].flags
    assert dark["SP-2-24"].value("dark_current_A") is None
    assert dark["SP-2-24"].quantities["dark_current_A"].hi95 > 1e-13


def test_storage_time_grows_with_the_emitter_current(intake: Intake) -> None:
    rows = sorted(of_run(intake, "npn_switch"), key=lambda m: m.conditions.emitter_current_A)
    times = [m.value("storage_time_s") for m in rows]
    assert times == sorted(times)
    assert times[0] > 1e-6


def test_a_switch_is_tested_with_100_us_at_ten_per_cent_and_takes_its_time_either_way(intake: Intake) -> None:
    """Common practice, no source: a transistor output is tested with a 100 us pulse at 10 % duty."""
    for m in of_run(intake, "optocoupler"):
        assert m.value("duty_in") == pytest.approx(0.1, rel=0.01)
        assert m.value("t_phl_s") > 0
        assert m.value("t_plh_s") > 0


def test_a_compound_pair_is_kept_on_by_its_dark_current(intake: Intake) -> None:
    """Common practice, no source: nanoamperes times a gain of some ten thousand hold the output low."""
    pulse, dark = of_run(intake, "compound_transistor")
    assert pulse.value("high_V") < 0.2 * pulse.conditions.bias_V
    assert dark.value("dark_current_A") > 0.8 * 5.0 / 1e4


def test_the_element_that_is_not_driven_shows_no_pulse(intake: Intake) -> None:
    for m in of_run(intake, "dual_optocoupler"):
        assert ("no_pulse" in m.flags) == (m.element != m.conditions.driven_element)


def test_the_shortest_pulse_comes_from_the_sweep_of_widths(devices: dict[str, ExplainedDevice]) -> None:
    (found,) = devices["SP-2-21"].shortest
    assert (found.bias_V, found.load_ohm) == (12, 1e4)
    assert 0.8e-6 < found.shortest_pulse_s.value < 1.0e-6


@pytest.mark.parametrize("plan", sorted(SAMPLES.rglob("plan.toml")), ids=lambda p: p.parent.name)
def test_every_plan_is_valid(plan: Path) -> None:
    assert read_plan(plan).fixture_file is not None


def test_the_bench_file_is_valid() -> None:
    assert read_bench(SAMPLES / "bench.toml").oscilloscope.channels["output2"] == 3
