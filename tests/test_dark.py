"""Dark current: what a still trace says, what the offset leaves, and the model against bias."""

import math

import numpy as np
import pytest

from darkedge.analysis.captures import Conditions, Kind, OutputConnection, Waveform
from darkedge.analysis.dark.model import fit_dark_current, predict_dark_current
from darkedge.analysis.dark.traces import TraceSummary, dark_current, junction_bias, summarise_trace
from darkedge.analysis.fixture import UNKNOWN_FIXTURE, Fixture, Load
from darkedge.analysis.measurement import Estimate, Measurement

STEP_V = 4e-5
FIXTURE = Fixture(scope_input_ohm=1e6, loads=(Load(nominal_ohm=1e6, actual_ohm=1e6),))
SENSED = Conditions(bias_V=12.0, load_ohm=1e6, input_ohm=1e6, volts_per_code=STEP_V)
RESISTANCE_OHM = 0.5e6


def trace(
    level_V: float,
    rng: np.random.Generator,
    *,
    noise_V: float = 1e-4,
    extra: np.ndarray | float = 0.0,
    size: int = 2000,
) -> TraceSummary:
    signal = level_V + rng.normal(0.0, noise_V, size) + extra
    return summarise_trace(Waveform(signal_V=np.round(signal / STEP_V) * STEP_V, dt_s=0.2 / size), SENSED)


def test_a_megohm_input_across_a_megohm_load_is_taken_into_account() -> None:
    """Common practice, no source: everybody's first mistake is to divide by the resistor as marked."""
    rng = np.random.default_rng(1)
    current, flags = dark_current(
        trace(2e-9 * RESISTANCE_OHM, rng), [trace(0.0, rng), trace(0.0, rng)], conditions=SENSED, fixture=FIXTURE
    )
    assert current.value == pytest.approx(2e-9, abs=4 * current.u)
    assert "low_input_resistance" in flags


@pytest.mark.parametrize("noise_V", [1e-4, 1e-5], ids=["dithered", "coarser than the noise"])
def test_the_stated_uncertainty_covers_the_scatter(noise_V: float) -> None:
    rng = np.random.default_rng(2)
    scores = []
    for _ in range(200):
        offset_V = rng.uniform(-1e-3, 1e-3)
        dark = trace(offset_V + 2e-9 * RESISTANCE_OHM, rng, noise_V=noise_V)
        offsets = [trace(offset_V, rng, noise_V=noise_V) for _ in range(2)]
        current, _ = dark_current(dark, offsets, conditions=SENSED, fixture=FIXTURE)
        scores.append((current.value - 2e-9) / current.u)
    assert 0.4 < np.std(scores) < 1.2  # codes coarser than the noise are counted at their worst
    assert abs(np.mean(scores)) < 0.3


def test_below_the_floor_a_bound_is_given_that_holds_and_never_zero() -> None:
    rng = np.random.default_rng(3)
    held, bounds = 0, 0
    for _ in range(300):
        current, flags = dark_current(
            trace(5e-13 * RESISTANCE_OHM, rng), [trace(0.0, rng), trace(0.0, rng)], conditions=SENSED, fixture=FIXTURE
        )
        if current.value is None:
            bounds += 1
            held += current.hi95 > 5e-13
            assert "below_floor" in flags
            assert current.hi95 > 0
    assert bounds > 200
    assert held / bounds > 0.95 - 3 * math.sqrt(0.05 * 0.95 / bounds)  # three standard deviations of a count


@pytest.mark.parametrize("frequency_Hz", [50.0, 100.0, 60.0, 120.0])
def test_room_light_is_found_at_the_mains_frequency_and_its_double(frequency_Hz: float) -> None:
    rng = np.random.default_rng(4)
    ripple = 4e-5 * np.cos(2 * np.pi * frequency_Hz * np.arange(2000) * 1e-4 + 1)
    found = trace(0.0, rng, extra=ripple)
    assert found.mains_Hz == frequency_Hz
    assert found.mains_V == pytest.approx(4e-5, rel=0.3)
    assert "light_leak" in found.flags


def test_noise_alone_is_neither_light_nor_drift() -> None:
    rng = np.random.default_rng(5)
    flags = [flag for _ in range(300) for flag in trace(0.0, rng).flags]
    assert len(flags) <= 3  # one trace in a hundred at the most


def test_a_trace_that_wanders_says_so() -> None:
    rng = np.random.default_rng(6)
    assert "drifting" in trace(0.0, rng, extra=np.linspace(0, 3e-4, 2000)).flags


def test_mains_ripple_averages_out_over_whole_periods() -> None:
    """Source: the mean of a sine over whole periods is zero; 100 ms hold 5 periods of 50 Hz and 6 of 60 Hz."""
    for frequency in (50.0, 60.0):
        time = 1e-4 * np.arange(1300)  # 130 ms: 100 ms are used
        signal = 1e-3 * np.cos(2 * np.pi * frequency * time)
        assert summarise_trace(Waveform(signal_V=signal, dt_s=1e-4), SENSED).mean_V == pytest.approx(0, abs=1e-6)


def test_slow_noise_is_not_averaged_away_on_paper() -> None:
    """The uncertainty of a mean of 1/f noise is that of its slow part. Source: D. W. Allan, Proc. IEEE 54 (1966) 221."""
    rng = np.random.default_rng(7)
    spectrum = rng.normal(size=1001) + 1j * rng.normal(size=1001)
    spectrum[1:] /= np.sqrt(np.arange(1, 1001))
    pink = np.fft.irfft(spectrum, 2000)
    pink *= 1e-4 / pink.std()
    assert trace(0.0, rng, noise_V=0.0, extra=pink).u_mean_V > 3 * 1e-4 / math.sqrt(2000)


@pytest.mark.parametrize(
    ("conditions", "flag"),
    [
        (Conditions(bias_V=12.0, load_ohm=1e6, coupling="AC"), "ac_coupled"),
        (Conditions(bias_V=12.0), "conditions_missing"),
        (Conditions(load_ohm=1e6), "conditions_missing"),
    ],
)
def test_what_cannot_be_known_is_left_out_and_flagged(conditions: Conditions, flag: str) -> None:
    rng = np.random.default_rng(8)
    signal = Waveform(signal_V=1e-3 + rng.normal(0, 1e-4, 2000), dt_s=1e-4)
    still = summarise_trace(signal, conditions)
    current, flags = dark_current(still, [still], conditions=conditions, fixture=UNKNOWN_FIXTURE)
    assert current is None
    assert flag in flags


def test_without_offset_trace_and_fixture_there_is_no_current() -> None:
    rng = np.random.default_rng(9)
    current, flags = dark_current(trace(1e-3, rng), [], conditions=SENSED, fixture=UNKNOWN_FIXTURE)
    assert current is None
    assert "conditions_missing" in flags


def test_a_pull_up_shows_the_collector_current_less_what_the_scope_draws() -> None:
    rng = np.random.default_rng(10)
    conditions = Conditions(
        bias_V=5.0, load_ohm=1e4, input_ohm=1e6, output_connection=OutputConnection.PULL_UP, volts_per_code=STEP_V
    )
    still = summarise_trace(Waveform(signal_V=0.8 + rng.normal(0, 1e-4, 2000), dt_s=1e-4), conditions)
    current, _ = dark_current(still, [], conditions=conditions, fixture=UNKNOWN_FIXTURE)
    assert current.value == pytest.approx(4.2 / 1e4 - 0.8e-6, rel=1e-4)


def test_the_drop_across_the_resistor_comes_off_the_bias() -> None:
    assert junction_bias(12.0, 2e-6, 0.5e6) == 11.0


def rows(current_A: list[float], bias_V: list[float], *, u: float = 0.01) -> list[Measurement]:
    return [
        Measurement(
            capture=f"{k}.csv",
            element=1,
            conditions=Conditions(kind=Kind.DARK, device="d", bias_V=bias, load_ohm=1.0),
            quantities={"dark_current_A": Estimate(value=current, u=u * current)},
        )
        for k, (current, bias) in enumerate(zip(current_A, bias_V, strict=True))
    ]


BIASES = [0.5, 1.0, 2.0, 5.0, 10.0, 20.0, 30.0]


def generation_A(bias_V: float) -> float:
    return 1e-9 * (math.sqrt(1 + bias_V / 0.6) - 1) / (math.sqrt(1 + 1 / 0.6) - 1)


def test_generation_follows_the_depletion_width() -> None:
    """Source: A. Chilingarov, RD50 note (2011): I in proportion to W, sqrt(V + V_bi) for an abrupt junction."""
    (fit,) = fit_dark_current(rows([generation_A(v) for v in BIASES], BIASES))
    assert fit.model == "generation"
    assert fit.parameters["generation_A"].value == pytest.approx(1e-9, rel=1e-4)


def test_generation_and_shunt_are_told_apart() -> None:
    (fit,) = fit_dark_current(rows([generation_A(v) + v / 1e9 for v in BIASES], BIASES))
    assert fit.model == "generation+shunt"
    assert fit.parameters["shunt_ohm"].value == pytest.approx(1e9, rel=0.05)
    predicted = predict_dark_current(fit, 7.0)
    assert predicted.value == pytest.approx(generation_A(7.0) + 7e-9, rel=0.01)


def test_a_current_that_follows_no_model_is_shown_without_one() -> None:
    (fit,) = fit_dark_current(rows([1e-9, 5e-9, 1e-9, 8e-9, 1e-9, 9e-9, 2e-9], BIASES))
    assert fit.model == ""
    assert "without a model" in fit.notes[0]


def test_few_points_carry_no_model_and_nothing_is_said_far_beyond_them() -> None:
    (fit,) = fit_dark_current(rows([1e-9, 2e-9], [5.0, 12.0]))
    assert "a model wants at least 4" in fit.notes[0]
    assert predict_dark_current(fit, 8.0).value == pytest.approx(math.sqrt(2) * 1e-9, rel=0.1)
    assert predict_dark_current(fit, 30.0) is None


def test_a_bound_predicts_a_bound() -> None:
    row = Measurement(
        capture="a", element=1, conditions=Conditions(kind=Kind.DARK, bias_V=12.0, load_ohm=1e6),
        quantities={"dark_current_A": Estimate(hi95=1e-11)},
    )  # fmt: skip
    (fit,) = fit_dark_current([row])
    assert predict_dark_current(fit, 12.0).hi95 == 1e-11
    assert predict_dark_current(fit, 20.0) is None
