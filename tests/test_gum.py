"""Propagation against the worked examples of the Guide (JCGM 100:2008, annex H)."""

import numpy as np
import pytest

from darkedge.analysis.uncertainty import coverage_factor, propagate

IMPEDANCE = np.array([4.999, 19.661e-3, 1.04446])
U_IMPEDANCE = np.array([3.2e-3, 9.5e-6, 7.5e-4])
R_IMPEDANCE = np.array([[1, -0.36, 0.86], [-0.36, 1, -0.65], [0.86, -0.65, 1]])


def impedance(x: np.ndarray) -> np.ndarray:
    volts, amperes, phase = x
    return np.array([volts * np.cos(phase) / amperes, volts * np.sin(phase) / amperes, volts / amperes])


def test_end_gauge_combines_to_32_nm() -> None:
    """Source: JCGM 100:2008, H.1: components 25, 9.7, 2.9 and 16.6 nm; unrounded 31.66 nm."""
    alpha, temperature = 11.5e-6, -0.1

    def length(x: np.ndarray) -> np.ndarray:
        standard, difference, d_alpha, d_theta, a, theta = x
        return np.array([standard + difference - standard * (d_alpha * theta + a * d_theta)])

    at = np.array([50.000623e-3, 215e-9, 0.0, 0.0, alpha, temperature])
    u = np.array([25e-9, 9.7e-9, 0.58e-6, 0.029, 1.2e-6, 0.41])
    value, covariance = propagate(length, at, np.diag(u**2))
    assert value[0] == pytest.approx(50.000838e-3, abs=0.5e-9)
    assert np.sqrt(covariance[0, 0]) == pytest.approx(31.66e-9, abs=0.5e-9)  # half a unit of the printed 32 nm


def test_resistance_reactance_and_impedance_of_correlated_readings() -> None:
    """Source: JCGM 100:2008, H.2, table H.3: 127.732(70), 219.85(30), 254.26(24) ohm."""
    covariance = np.outer(U_IMPEDANCE, U_IMPEDANCE) * R_IMPEDANCE
    value, spread = propagate(impedance, IMPEDANCE, covariance)
    u = np.sqrt(np.diag(spread))
    assert value == pytest.approx([127.732, 219.847, 254.260], abs=6e-4)  # half a unit of the last digit
    assert u == pytest.approx([0.070, 0.30, 0.24], abs=5e-3)
    assert u[0] == pytest.approx(0.070, abs=1e-3)
    assert spread[0, 1] / u[0] / u[1] == pytest.approx(-0.59, abs=0.015)  # printed -0.588 from unrounded inputs


def test_leaving_correlation_out_gives_another_answer() -> None:
    """Source: JCGM 100:2008, H.2: dropping the correlations triples the uncertainty of the resistance."""
    _, spread = propagate(impedance, IMPEDANCE, np.diag(U_IMPEDANCE**2))
    assert np.sqrt(spread[0, 0]) == pytest.approx(0.1945, abs=2e-3)


def test_a_calibration_line_predicts_with_its_correlation() -> None:
    """Source: JCGM 100:2008, H.3: b(30) = -0.1494 with u 0.0041, from y1 -0.1712(29), y2 0.00218(67), r -0.930."""
    u = np.array([0.0029, 0.00067])
    covariance = np.outer(u, u) * np.array([[1, -0.930], [-0.930, 1]])
    value, spread = propagate(lambda x: np.array([x[0] + 10 * x[1]]), np.array([-0.1712, 0.00218]), covariance)
    assert value[0] == pytest.approx(-0.1494, abs=5e-5)
    assert np.sqrt(spread[0, 0]) == pytest.approx(0.0041, abs=5e-5)


def test_a_calibration_line_without_its_correlation_gives_nearly_twice_the_uncertainty() -> None:
    """Source: JCGM 100:2008, H.3, whose 0.0041 becomes 0.0073 where the correlation of -0.930 is dropped (recomputed)."""
    _, spread = propagate(
        lambda x: np.array([x[0] + 10 * x[1]]), np.array([-0.1712, 0.00218]), np.diag([0.0029**2, 0.00067**2])
    )
    assert np.sqrt(spread[0, 0]) == pytest.approx(0.0073, abs=5e-5)


FREEDOMS = (1, 2, 3, 5, 8, 10, 16, 20, 50, np.inf)
TABLE_G2 = {
    0.6827: (1.84, 1.32, 1.20, 1.11, 1.07, 1.05, 1.03, 1.03, 1.01, 1.000),
    0.95: (12.71, 4.30, 3.18, 2.57, 2.31, 2.23, 2.12, 2.09, 2.01, 1.960),
    0.9545: (13.97, 4.53, 3.31, 2.65, 2.37, 2.28, 2.17, 2.13, 2.05, 2.000),
    0.99: (63.66, 9.92, 5.84, 4.03, 3.36, 3.17, 2.92, 2.85, 2.68, 2.576),
    0.9973: (235.78, 19.21, 9.22, 5.51, 4.28, 3.96, 3.54, 3.42, 3.16, 3.000),
}


@pytest.mark.parametrize("probability", TABLE_G2)
def test_coverage_factors_are_those_of_table_g2(probability: float) -> None:
    """Source: JCGM 100:2008, table G.2."""
    found = [coverage_factor(probability, freedom) for freedom in FREEDOMS]
    assert found == pytest.approx(TABLE_G2[probability], abs=5e-3)  # half a unit of the last digit printed
