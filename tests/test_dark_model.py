"""Dark current against bias: the terms that physics gives, and what is said between and beyond the points."""

import math

import numpy as np
import pytest

from darkedge.analysis.captures import Conditions, DeviceKind, Kind, OutputConnection
from darkedge.analysis.dark.model import fit_dark_current, predict_dark_current
from darkedge.analysis.dark.results import DarkFit, Depletion
from darkedge.analysis.fixture import Fixture, Load
from darkedge.analysis.measurement import Estimate, Measurement

BIASES = [0.5, 1.0, 2.0, 5.0, 10.0, 20.0, 30.0]


def row(
    current: float | Estimate, bias_V: float, *, u: float = 0.01, load_ohm: float = 1.0, temperature_degC: float | None = None,
    flags: tuple[str, ...] = (), device: str = "d",
) -> Measurement:  # fmt: skip
    return Measurement(
        capture=f"{bias_V}.csv",
        element=1,
        conditions=Conditions(
            kind=Kind.DARK, device=device, bias_V=bias_V, load_ohm=load_ohm, temperature_degC=temperature_degC
        ),
        quantities={
            "dark_current_A": current if isinstance(current, Estimate) else Estimate(value=current, u=u * current)
        },
        flags=flags,
    )


def fitted(currents: list[float], biases: list[float] = BIASES, *, u: float = 0.01) -> DarkFit:
    (fit,) = fit_dark_current([row(current, bias, u=u) for current, bias in zip(currents, biases, strict=True)])
    return fit


def generation_A(bias_V: float) -> float:
    return 1e-9 * (math.sqrt(1 + bias_V / 0.6) - 1) / (math.sqrt(1 + 1 / 0.6) - 1)


def test_the_width_of_an_abrupt_junction_grows_as_the_root_of_bias_and_built_in_voltage() -> None:
    """From 0 to 10 V with 0.7 V built in: sqrt(10.7 / 0.7) = 3.910. Source: A. Chilingarov, RD50 note (2011)."""
    width = Depletion(v_bi_V=0.7, grading=0.5).width_ratio(np.array([0.0, 10.0]))
    assert width == pytest.approx([1.0, 3.910], abs=5e-4)


def test_a_fully_depleted_layer_grows_no_further() -> None:
    width = Depletion(v_bi_V=0.6, grading=0.5, full_depletion_V=9.0).width_ratio(np.array([9.0, 12.0]))
    assert width[1] == width[0] == pytest.approx(4.0)


def test_generation_in_the_whole_depleted_width_is_described_to_its_uncertainty() -> None:
    """A current in proportion to sqrt(V + V_bi), whose part at zero bias saturates. Source: A. Chilingarov, RD50 note (2011)."""
    fit = fitted([1e-9 * math.sqrt(1 + v / 0.6) for v in BIASES])
    assert fit.model == "saturation+generation"
    assert fit.parameters["saturation_A"].value == pytest.approx(1e-9, rel=1e-3)
    for bias in (0.7, 3.0, 25.0):
        assert predict_dark_current(fit, bias).value == pytest.approx(1e-9 * math.sqrt(1 + bias / 0.6), rel=1e-3)


def test_generation_follows_the_width_that_the_bias_adds() -> None:
    """Source: P. U. Calzolari and S. Graffi, Solid-State Electron. 15 (1972) 1003 (from memory; the form, not a value)."""
    fit = fitted([generation_A(v) for v in BIASES])
    assert fit.model == "generation"
    assert fit.parameters["generation_A"].value == pytest.approx(1e-9, rel=1e-4)
    assert "V_bi 0.6 V and grading 0.5: stated" in fit.notes[0]


def test_diffusion_does_not_depend_on_a_bias_of_many_kt() -> None:
    """1 - exp(-qV/kT) is one within 1e-8 at half a volt. Source: W. Shockley, Bell Syst. Tech. J. 28 (1949) 435."""
    fit = fitted([2e-9] * len(BIASES))
    assert fit.model == "saturation"
    assert fit.parameters["saturation_A"].value == pytest.approx(2e-9, rel=1e-6)


def test_generation_and_shunt_are_told_apart() -> None:
    fit = fitted([generation_A(v) + v / 1e9 for v in BIASES])
    assert fit.model == "generation+shunt"
    shunt = fit.parameters["shunt_ohm"]
    assert shunt.value == pytest.approx(1e9, rel=0.05)
    assert shunt.lo95 < 1e9 < shunt.hi95
    assert predict_dark_current(fit, 7.0).value == pytest.approx(generation_A(7.0) + 7e-9, rel=0.01)


def test_parameters_lie_in_their_intervals_nineteen_times_in_twenty() -> None:
    """Of 200 fits, no more than 19 outside: three standard deviations of a count above 5 %."""
    rng = np.random.default_rng(1)
    true = np.array([generation_A(v) + v / 1e9 for v in BIASES])
    outside = seen = 0
    for _ in range(200):
        fit = fitted(list(true * (1 + 0.02 * rng.normal(size=true.size))), u=0.02)
        if fit.model == "generation+shunt":
            seen += 1
            generation = fit.parameters["generation_A"]
            outside += not generation.lo95 <= 1e-9 <= generation.hi95
    assert seen > 150
    assert outside <= 19


def test_a_gain_error_is_shared_by_all_points_and_not_averaged_away() -> None:
    """Every point is wrong by the same factor, so the parameter is too. Source: JCGM 100:2008, 5.2.2, correlated inputs."""
    rows = [row(generation_A(v), v, u=0.01) for v in BIASES]
    (fit,) = fit_dark_current(rows, fixture=Fixture(u_gain_ratio=0.03))
    generation = fit.parameters["generation_A"]
    assert generation.u / generation.value == pytest.approx(math.hypot(0.03, 0.01 / math.sqrt(7)), rel=0.02)


def test_a_current_that_follows_no_model_is_shown_without_one() -> None:
    fit = fitted([1e-9, 5e-9, 1e-9, 8e-9, 1e-9, 9e-9, 2e-9])
    assert fit.model == ""
    assert len(fit.points) == 7
    assert "without a model" in fit.notes[0]


def test_breakdown_at_the_highest_bias_is_not_fitted_away() -> None:
    """A current that multiplies near breakdown, M = 1 / (1 - (V/V_B)^3), bends up as none of the terms does. Source: S. L. Miller, Phys. Rev. 99 (1955) 1234."""
    fit = fitted([generation_A(v) / (1 - (v / 31.0) ** 3) for v in BIASES])
    assert fit.model == ""
    assert "breakdown" in fit.notes[0]


def test_the_junction_sees_the_bias_less_the_drop_across_load_and_input_in_parallel() -> None:
    measured = row(2e-6, 12.0, load_ohm=1e6)
    (fit,) = fit_dark_current([measured], fixture=Fixture(scope_input_ohm=1e6))
    assert fit.points[0].bias_V == pytest.approx(12.0 - 2e-6 * 0.5e6)


def test_few_points_carry_no_model_and_nothing_is_said_beyond_them() -> None:
    fit = fitted([1e-9, 2e-9], [5.0, 12.0])
    assert "a model wants at least 4" in fit.notes[0]
    assert predict_dark_current(fit, 30.0) is None
    assert predict_dark_current(fit, 4.0) is None


def test_between_points_without_a_model_the_way_of_interpolating_counts_as_uncertainty() -> None:
    """The two straight lines, of current and of its logarithm, stand for a rectangle between them (JCGM 100:2008, 4.3.7)."""
    fit = fitted([1e-9, 2e-9], [5.0, 12.0])
    middle = predict_dark_current(fit, 8.5)
    assert middle.value == pytest.approx(math.sqrt(2) * 1e-9, rel=1e-3)
    assert middle.u == pytest.approx(
        math.hypot(0.01 * middle.value, (1.5 - math.sqrt(2)) * 1e-9 / math.sqrt(3)), rel=0.01
    )


def test_a_model_is_trusted_a_fifth_of_its_span_beyond_its_points() -> None:
    fit = fitted([generation_A(v) for v in BIASES])
    assert predict_dark_current(fit, 35.0).value == pytest.approx(generation_A(35.0), rel=1e-3)
    assert predict_dark_current(fit, 37.0) is None


def test_repeats_that_disagree_widen_the_prediction() -> None:
    biases = [5.0, 5.0, 12.0, 12.0]
    steady, scattered = fitted([1e-9, 1e-9, 2e-9, 2e-9], biases), fitted([0.9e-9, 1.1e-9, 2e-9, 2e-9], biases)
    assert len(scattered.points) == 4
    assert predict_dark_current(scattered, 5.0).value == pytest.approx(1e-9, rel=1e-3)
    assert predict_dark_current(scattered, 5.0).u > 5 * predict_dark_current(steady, 5.0).u


def test_points_at_another_temperature_are_shown_and_not_mixed_in() -> None:
    """Common practice, no source: dark current doubles in ten kelvin."""
    cool = [row(generation_A(v), v, temperature_degC=25.0) for v in BIASES]
    hot = [row(2 * generation_A(v), v, temperature_degC=35.0) for v in BIASES[:3]]
    (fit,) = fit_dark_current([*cool, *hot])
    assert len(fit.points) == 10
    assert fit.parameters["generation_A"].value == pytest.approx(1e-9, rel=1e-3)
    assert any("between 25 and 35 °C" in note for note in fit.notes)


def test_points_that_drift_are_shown_and_not_fitted() -> None:
    settled = [row(generation_A(v), v) for v in BIASES]
    (fit,) = fit_dark_current([*settled, row(5e-8, 3.0, flags=("drifting",))])
    assert fit.model == "generation"
    assert any("drift" in note and "1 of 8" in note for note in fit.notes)


def test_a_bound_predicts_a_bound_below_its_bias_and_nothing_above() -> None:
    (fit,) = fit_dark_current([row(Estimate(hi95=1e-11), 12.0)])
    assert predict_dark_current(fit, 12.0).hi95 == predict_dark_current(fit, 5.0).hi95 == 1e-11
    assert predict_dark_current(fit, 20.0) is None


def test_the_current_of_a_transistor_is_called_so_and_not_taken_for_a_junction_across_the_load() -> None:
    measured = Measurement(
        capture="a",
        element=1,
        conditions=Conditions(
            kind=Kind.DARK, bias_V=5.0, load_ohm=1e4, device_kind=DeviceKind.TRANSISTOR_SWITCH,
            output_connection=OutputConnection.PULL_UP,
        ),
        quantities={"dark_current_A": Estimate(value=4e-4, u=1e-6)},
    )  # fmt: skip
    (fit,) = fit_dark_current([measured])
    assert fit.points[0].bias_V == 5.0
    assert any("collector current with the emitter off" in note for note in fit.notes)


def test_each_device_and_element_has_its_own_fit_and_other_kinds_of_capture_none() -> None:
    pulse = Measurement(capture="p", element=1, conditions=Conditions(kind=Kind.PULSE, device="c", bias_V=1.0))
    fits = fit_dark_current([row(1e-9, 5.0, device="a"), row(2e-9, 5.0, device="b"), pulse])
    assert [fit.device for fit in fits] == ["a", "b"]


def test_a_fixture_that_knows_the_load_corrects_the_bias_with_its_true_value() -> None:
    fixture = Fixture(loads=(Load(nominal_ohm=1e6, actual_ohm=0.99e6),))
    (fit,) = fit_dark_current([row(1e-6, 12.0, load_ohm=1e6)], fixture=fixture)
    assert fit.points[0].bias_V == pytest.approx(12.0 - 0.99)
