"""The junction fit, on edges of devices integrated in time: intervals hold, and what the data do not tell is refused."""

import functools
import math
from dataclasses import replace

import numpy as np
import pytest
from scipy import stats

from darkedge.analysis.captures import Conditions, DeviceKind, Kind
from darkedge.analysis.decide.choose import choose
from darkedge.analysis.decide.results import Wish
from darkedge.analysis.errors import FitError
from darkedge.analysis.explain import choose_for_devices, explain_devices
from darkedge.analysis.fixture import UNKNOWN_FIXTURE, Fixture, Load
from darkedge.analysis.junction.fit import capacitance_of, fit_devices, fit_junction
from darkedge.analysis.junction.shortest import shortest_pulses
from darkedge.analysis.measurement import Estimate, Measurement
from darkedge.instruments.virtual.equations import Answer, respond
from darkedge.instruments.virtual.parts import Element, Junction, Socket, Train

BIASES = tuple(float(f"{v:.3g}") for v in np.geomspace(1, 30, 8))
LOADS = (1e3, 1e4)
TRUE = Junction(c_j0_F=100e-12, v_bi_V=0.65, grading=0.42, coupling_ratio=0.002)
PIN = replace(TRUE, full_depletion_V=9.0)
STRAY_F = 14e-12
FIXTURE = Fixture(
    scope_input_ohm=1e6,
    loads=tuple(
        Load(nominal_ohm=r, actual_ohm=r, u_actual_ohm=5e-4 * r, stray_F=STRAY_F, u_stray_F=0.4e-12) for r in LOADS
    ),
)


def true_capacitance(junction: Junction, bias_V: float) -> float:
    return junction.capacitance_F(bias_V) + STRAY_F


@functools.cache
def edges(junction: Junction, bias_V: float, load_ohm: float) -> tuple[float, float, float]:
    """Amplitude, rise and fall of a device integrated in time, read off by plain interpolation."""
    width = 1e-5 * load_ohm / 1e3
    train = Train(high_A=5e-3 * min(1.0, bias_V * 1e4 / load_ohm), width_s=width, period_s=10 * width)
    answer = respond(Element(junction=junction), train, Socket(bias_V=bias_V, load_ohm=load_ohm, stray_F=STRAY_F))
    return _read_off(answer, width)


def _read_off(answer: Answer, width: float) -> tuple[float, float, float]:
    on, off = np.linspace(0, width, 40_001), np.linspace(width, 2 * width, 40_001)
    up, down = answer.output_at(on), answer.output_at(off)
    low, high = up[0], up[-1]
    rise = np.interp([low + 0.1 * (high - low), low + 0.9 * (high - low)], up, on)
    fall = np.interp([-(low + 0.9 * (high - low)), -(low + 0.1 * (high - low))], -down, off)
    return float(high - low), float(rise[1] - rise[0]), float(fall[1] - fall[0])


def measured(
    junction: Junction = TRUE, *, seed: int = 0, u_ratio: float = 0.005, loads: tuple[float, ...] = LOADS,
    biases: tuple[float, ...] = BIASES, kind: DeviceKind = DeviceKind.PHOTODIODE,
) -> list[Measurement]:  # fmt: skip
    rng, found = np.random.default_rng(seed), []
    for load in loads:
        for bias in biases:
            amplitude, rise, fall = edges(junction, bias, load)
            off = 1 + u_ratio * rng.normal(size=2)
            found.append(
                Measurement(
                    capture=f"{load:g}_{bias:g}",
                    element=1,
                    conditions=Conditions(
                        kind=Kind.PULSE,
                        device="d",
                        bias_V=bias,
                        load_ohm=load,
                        input_ohm=1e6,
                        device_kind=kind,
                        pulse_width_s=1e-5 * load / 1e3,
                    ),
                    quantities={
                        "rise_time_s": Estimate(value=rise * off[0], u=rise * u_ratio),
                        "fall_time_s": Estimate(value=fall * off[1], u=fall * u_ratio),
                        "amplitude_V": Estimate(value=amplitude, u=0.002 * amplitude),
                    },
                )
            )
    return found


def test_capacitance_is_found_at_every_bias_within_one_per_cent() -> None:
    fit = fit_junction(measured(), fixture=FIXTURE)
    for point in fit.capacitance:
        assert point.c_F == pytest.approx(true_capacitance(TRUE, point.bias_V), rel=0.01)
    assert fit.model == "graded"


def test_intervals_hold_what_the_device_was_made_with() -> None:
    """95 % intervals over 30 seeds: the count that holds is consistent with 95 % at 1 % significance."""
    made = {"c_j0_F": TRUE.c_j0_F, "v_bi_V": TRUE.v_bi_V, "grading": TRUE.grading}
    held = dict.fromkeys(made, 0)
    for seed in range(30):
        fit = fit_junction(measured(seed=seed), fixture=FIXTURE)
        for name, value in made.items():
            estimate = fit.parameters[name]
            held[name] += estimate.lo95 <= value <= estimate.hi95
    for name, count in held.items():
        assert stats.binomtest(count, 30, 0.95).pvalue > 0.01, name


def test_full_depletion_of_a_pin_is_found_within_its_interval() -> None:
    fit = fit_junction(measured(PIN, kind=DeviceKind.PIN), fixture=FIXTURE)
    full = fit.parameters["full_depletion_V"]
    assert fit.model == "full_depletion"
    assert full.lo95 <= 9.0 <= full.hi95


def test_a_plain_junction_called_a_pin_in_the_plan_is_not_found_depleted() -> None:
    found = [fit_junction(measured(seed=s, kind=DeviceKind.PIN), fixture=FIXTURE).model for s in range(6)]
    assert found.count("full_depletion") == 0


def test_an_rc_time_predicted_at_a_bias_between_is_right() -> None:
    fit = fit_junction(measured(), fixture=FIXTURE)
    assert capacitance_of(fit, np.array([5.0]))[0] == pytest.approx(true_capacitance(TRUE, 5.0), rel=0.01)
    board = capacitance_of(fit, np.array([5.0]), stray_F=3e-12)[0]
    assert board == pytest.approx(TRUE.capacitance_F(5.0) + 3e-12, rel=0.02)


def test_one_load_only_is_refused_with_the_mend() -> None:
    with pytest.raises(FitError, match=r"one load only: the RC part cannot be told.*Add a load at least 4 x different"):
        fit_junction(measured(loads=(1e3,)), fixture=FIXTURE)


def test_three_biases_are_refused_with_the_mend() -> None:
    with pytest.raises(FitError, match=r"too few biases.*found 3.*at least 4.*log scale"):
        fit_junction(measured(biases=BIASES[:3]), fixture=FIXTURE)


def test_edges_that_get_slower_with_bias_are_refused() -> None:
    rows = measured()
    turned = [replace(row, conditions=replace(row.conditions, bias_V=31.0 - row.conditions.bias_V)) for row in rows]
    with pytest.raises(FitError, match="slower with more reverse bias"):
        fit_junction(turned, fixture=FIXTURE)


def test_contradicting_conditions_never_give_a_converged_looking_fit() -> None:
    rows = measured()
    rng = np.random.default_rng(3)
    loads = rng.permutation([row.conditions.load_ohm for row in rows])
    mixed = [replace(r, conditions=replace(r.conditions, load_ohm=float(x))) for r, x in zip(rows, loads, strict=True)]
    with pytest.raises(FitError, match=r"do not follow a junction|slower with more"):
        fit_junction(mixed, fixture=FIXTURE)


@pytest.mark.parametrize("flag", ["clipped", "never_settles", "no_pulse", "slow_tail"])
def test_captures_that_say_nothing_of_the_capacitance_are_left_out_and_named(flag: str) -> None:
    with pytest.raises(FitError, match=f"no edge can be used.*flags {flag} \\(16\\)"):
        fit_junction([replace(row, flags=(flag,)) for row in measured()], fixture=FIXTURE)


def test_a_transistor_output_is_refused() -> None:
    with pytest.raises(FitError, match=r"transistor output do not show the junction.*Measure the diode alone"):
        fit_junction(measured(kind=DeviceKind.TRANSISTOR_SWITCH), fixture=FIXTURE)


def test_without_a_known_stray_its_parts_are_badly_told_and_the_total_is_known_all_the_same() -> None:
    """Junction and stray are told apart only by the bend of C(V)."""
    unknown, known = (fit_junction(measured(seed=2), fixture=f) for f in (Fixture(scope_input_ohm=1e6), FIXTURE))
    for name in ("c_j0_F", "grading"):
        if name in unknown.parameters:
            assert unknown.parameters[name].u > 2 * known.parameters[name].u
        else:
            assert any("give the fixture's stray capacitance" in note for note in unknown.notes)
    for point in unknown.capacitance:
        assert point.c_F == pytest.approx(true_capacitance(TRUE, point.bias_V), rel=0.015)


def test_one_bad_device_does_not_cost_the_others_their_fit() -> None:
    bad = [replace(row, conditions=replace(row.conditions, device="e")) for row in measured(loads=(1e3,))]
    fits, errors = fit_devices([*measured(), *bad], fixture=FIXTURE)
    assert [f.device for f in fits] == ["d"]
    assert [e.where for e in errors] == ["e"]


def widths(time_constant_s: float, inputs: list[float]) -> list[Measurement]:
    """Pulses of one pole read off closed forms: what comes out of each input width."""
    found = []
    for width in inputs:
        peak = 1 - math.exp(-width / time_constant_s)
        excess = -time_constant_s * math.log(0.5) + time_constant_s * math.log(1 - peak / 2)
        found.append(
            Measurement(
                capture=f"{width}", element=1,
                conditions=Conditions(kind=Kind.PULSE, bias_V=12.0, load_ohm=1e4, pulse_width_s=width),
                quantities={
                    "width_in_s": Estimate(value=width, u=1e-4 * width),
                    "width_out_s": Estimate(value=width + excess, u=1e-4 * width),
                    "amplitude_V": Estimate(value=peak, u=1e-4),
                },
                flags=() if width > 5 * time_constant_s else ("never_settles",),
            )
        )  # fmt: skip
    return found


def test_the_shortest_pulse_of_one_pole_is_rc_ln_10() -> None:
    """1 - exp(-w/RC) = 0.9 at w = 2.303 RC. Source: one pole."""
    tau = 1e-6
    (found,), points = shortest_pulses(widths(tau, [0.5e-6, 1e-6, 1.5e-6, 2e-6, 2.5e-6, 3e-6, 10e-6]))
    assert found.shortest_pulse_s.value == pytest.approx(tau * math.log(10), rel=0.01)
    assert found.highest_rate_Hz.value == pytest.approx(0.5 / found.shortest_pulse_s.value)
    assert len(points) == 7


def test_where_even_the_shortest_pulse_comes_through_only_a_bound_is_given() -> None:
    (found,), _ = shortest_pulses(widths(1e-6, [6e-6, 10e-6]))
    assert (found.shortest_pulse_s.value, found.shortest_pulse_s.hi95) == (None, 6e-6)


def test_a_closer_look_at_one_edge_does_not_count_as_a_pulse_that_was_lost() -> None:
    """Captures of the edges of a pulse show no width; the capture of the whole pulse does."""
    whole = widths(1e-6, [1e-6, 2e-6, 3e-6, 10e-6])
    edge = replace(whole[-1], capture="edge", quantities={"amplitude_V": whole[-1].quantities["amplitude_V"]})
    plain = shortest_pulses(whole)
    assert shortest_pulses([*whole, edge]) == plain
    assert shortest_pulses([edge, *whole]) == plain


def test_a_sweep_whose_longest_pulse_does_not_settle_says_nothing() -> None:
    assert shortest_pulses(widths(1e-6, [1e-6, 2e-6]))[0] == []


WISH = Wish(pulse_width_s=1e-6)


def test_the_best_pair_passes_the_pulse_with_the_most_signal() -> None:
    rows = measured()
    choice = choose(fit_junction(rows, fixture=FIXTURE), measurements=rows, wish=WISH, fixture=FIXTURE)
    feasible = [p for p in choice.candidates if not p.misses]
    assert choice.best in feasible
    assert all(p.signal_V.value <= choice.best.signal_V.value for p in feasible)
    assert choice.best.shortest_pulse_s.value <= 1e-6


def test_where_nothing_does_it_the_nearest_miss_says_what_binds() -> None:
    rows = measured()
    wish = Wish(pulse_width_s=1e-8)
    choice = choose(fit_junction(rows, fixture=FIXTURE), measurements=rows, wish=wish, fixture=FIXTURE)
    assert choice.best is None
    assert choice.nearest.load_ohm == 1e3
    assert "passes pulses from" in choice.nearest.misses[0]


def test_a_rating_is_never_exceeded_and_unmeasured_rails_are_not_judged() -> None:
    rows = measured()
    wish = Wish(pulse_width_s=1e-6, rails_V=(5.0, 12.0, 24.0, 48.0), max_bias_V=13.0)
    choice = choose(fit_junction(rows, fixture=FIXTURE), measurements=rows, wish=wish, fixture=FIXTURE)
    assert {p.bias_V for p in choice.candidates} == {5.0, 12.0}
    assert any("beyond 13 V were left out" in note for note in choice.notes)
    with pytest.raises(FitError, match="no rail lies within the biases measured"):
        choose(
            fit_junction(rows, fixture=FIXTURE),
            measurements=rows,
            wish=Wish(pulse_width_s=1e-6, rails_V=(48.0,)),
            fixture=FIXTURE,
        )


def test_an_unknown_dark_current_is_not_taken_for_small() -> None:
    rows = measured()
    wish = Wish(pulse_width_s=1e-6, dark_current_A=1e-9)
    choice = choose(fit_junction(rows, fixture=FIXTURE), measurements=rows, wish=wish, fixture=FIXTURE)
    assert choice.best is None
    assert all("dark current not known here" in p.misses for p in choice.candidates)


def test_devices_are_explained_one_by_one() -> None:
    explained = explain_devices(measured(), fixture_for=lambda _: FIXTURE)
    assert [d.device for d in explained.devices] == ["d"]
    assert explained.exit_status == 0
    assert choose_for_devices([], wish=WISH).exit_status == 2


def test_captures_of_one_device_under_two_fixtures_are_not_mixed() -> None:
    rows = measured()
    explained = explain_devices(rows, fixture_for=lambda name: FIXTURE if name == rows[0].capture else UNKNOWN_FIXTURE)
    assert "different fixtures" in str(explained.errors[0])


def test_twelve_volt_is_faster_than_five() -> None:
    """Common practice, no source: more reverse bias, wider depletion, less capacitance."""
    assert edges(TRUE, 12.0, 1e4)[1] < edges(TRUE, 5.0, 1e4)[1]


def test_a_pin_is_faster_than_a_plain_junction_of_the_same_area() -> None:
    """Common practice, no source: its wide intrinsic layer has less capacitance at every bias of the same area."""
    plain = replace(TRUE, c_j0_F=100e-12)
    pin = replace(TRUE, c_j0_F=40e-12, full_depletion_V=5.0)
    for bias in (1.0, 5.0, 12.0):
        assert edges(pin, bias, 1e3)[1] < edges(plain, bias, 1e3)[1]


def test_more_area_gives_more_signal_and_is_slower() -> None:
    """Common practice, no source: photocurrent and capacitance both in proportion to area."""
    small, large = TRUE, replace(TRUE, c_j0_F=2 * TRUE.c_j0_F, coupling_ratio=2 * TRUE.coupling_ratio)
    (signal, rise, _), (more, slower, _) = (edges(part, 12.0, 1e3) for part in (small, large))
    assert more == pytest.approx(2 * signal, rel=1e-3)
    assert slower > 1.3 * rise
