"""Edge times of a junction behind a load, against direct integration in time and closed forms."""

import math

import numpy as np
import pytest
from scipy.integrate import solve_ivp

from darkedge.analysis.decide.choose import shortest_pulse_through
from darkedge.analysis.junction.capacitance import junction_capacitance
from darkedge.analysis.junction.edges import LN9, off_edge_time, on_edge_time, two_pole_edge_time, two_pole_step

R = 1e4


def capacitance(voltage: np.ndarray) -> np.ndarray:
    return 14e-12 + junction_capacitance(voltage, c_j0_F=100e-12, v_bi_V=0.65, grading=0.42)


def one(value: float) -> np.ndarray:
    return np.array([value])


def integrated(bias_V: float, swing_V: float, *, lit: bool) -> float:
    """10-90 % time of the node equation, solved in time."""
    target, start = (swing_V, 0.0) if lit else (0.0, swing_V)
    tau = R * capacitance(one(max(bias_V - swing_V, 0.0)))[0]
    solution = solve_ivp(
        lambda _t, v: (target - v) / (R * capacitance(bias_V - np.clip(v, 0, swing_V))), (0, 12 * tau), [start],
        rtol=1e-10, atol=1e-14, dense_output=True,
    )  # fmt: skip
    time = np.linspace(0, 12 * tau, 400_001)
    progress = solution.sol(time)[0] / swing_V if lit else 1 - solution.sol(time)[0] / swing_V
    low, high = np.interp([0.1, 0.9], progress, time)
    return float(high - low)


@pytest.mark.parametrize(("bias_V", "swing_V"), [(1.0, 0.05), (1.0, 0.5), (12.0, 1.2), (12.0, 6.0)])
@pytest.mark.parametrize("lit", [True, False])
def test_the_integral_is_what_the_node_does_in_time(bias_V: float, swing_V: float, lit: bool) -> None:
    edge = on_edge_time if lit else off_edge_time
    found = edge(capacitance, one(bias_V), one(swing_V), one(R))[0]
    assert found == pytest.approx(integrated(bias_V, swing_V, lit=lit), rel=1e-6)  # of the grid read off


def test_a_small_signal_takes_rc_ln_9_either_way() -> None:
    """Source: solution of one pole; R C ln 9."""
    expected = R * capacitance(one(12.0))[0] * LN9
    for edge in (on_edge_time, off_edge_time):
        assert edge(capacitance, one(12.0), one(1e-6), one(R))[0] == pytest.approx(expected, rel=1e-6)


def test_a_large_signal_makes_the_two_edges_differ() -> None:
    """The junction is slower with the light on, where the output has eaten bias: a few per cent at a third of the bias."""
    on, off = (edge(capacitance, one(12.0), one(4.0), one(R))[0] for edge in (on_edge_time, off_edge_time))
    assert 1.01 < on / off < 1.10


@pytest.mark.parametrize(
    ("ratio", "factor"),
    [(0.1, 2.214994), (0.2, 2.272680), (1 / 3, 2.390892), (0.5, 2.589609), (0.7, 2.875735), (1.0, 3.357909)],
)
def test_two_poles_in_a_row_are_no_sum_of_squares(ratio: float, factor: float) -> None:
    """Source: step response of two one-pole stages solved at 0.1 and 0.9; two equal stages 3.36 RC, not 3.11."""
    assert two_pole_edge_time(one(LN9), one(ratio * LN9))[0] == pytest.approx(factor, abs=2e-6)


def test_two_equal_stages_are_three_times_rc_at_the_edge_of_equality() -> None:
    time = np.linspace(0, 10, 50)
    assert np.allclose(two_pole_step(time, 1.0, 1.0), two_pole_step(time, 1.0, 1.0 + 1e-5), atol=1e-5)


def test_the_shortest_pulse_of_one_pole_reaches_its_amplitude_at_ln_10() -> None:
    """1 - exp(-w/RC) = 0.9 at w = RC ln 10; the width at half height is then within 10 %. Source: one pole."""
    found = shortest_pulse_through((1.0, 0.0), (1.0, 0.0), amplitude_ratio=0.9, width_ratio=0.1)
    assert found == pytest.approx(math.log(10), rel=1e-3)


def test_the_width_excess_of_a_short_pulse_is_that_of_one_pole() -> None:
    """At w = 2 RC the width at half of its own height is 0.1269 RC more: 6.35 %. Source: one pole, solved."""
    found = shortest_pulse_through((1.0, 0.0), (1.0, 0.0), amplitude_ratio=0.5, width_ratio=0.126928 / 2)
    assert found == pytest.approx(2.0, rel=2e-3)
