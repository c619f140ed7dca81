"""Depletion, doping and capacitance against worked examples of textbooks and a published table."""

import numpy as np
import pytest

from darkedge.analysis.errors import FitError
from darkedge.analysis.junction.capacitance import (
    VACUUM_F_per_m,
    built_in_voltage,
    depletion,
    doping_from_slope,
    junction_capacitance,
    one_sided_doping,
    plate_capacitance,
)
from darkedge.analysis.junction.table import fit_capacitance_table

PER_CM3, CM = 1e6, 1e-2
NEAMEN = {"permittivity_F_per_m": 11.7 * 8.85e-14 / CM, "charge_C": 1.6e-19}
PF = 1e-12

# T. P. Pearsall, Photonics Essentials, table 4.1: InP p-n diode, reverse bias 0 to 1 V in steps of 0.05 V, pF.
INP_PF = np.array(
    [
        48.64, 47.20, 45.78, 44.46, 43.21, 42.07, 41.03, 40.06, 39.15, 38.32, 37.58, 36.87, 36.18, 35.53, 34.93, 34.38,
        33.83, 33.37, 32.88, 32.43, 32.00,
    ]
)  # fmt: skip
INP_V = 0.05 * np.arange(21)


@pytest.mark.parametrize(("acceptors", "printed"), [(1e18, 0.754), (1e16, 0.635)])
def test_built_in_voltage(acceptors: float, printed: float) -> None:
    """Source: D. A. Neamen, Semiconductor Physics and Devices, example 7.1."""
    found = built_in_voltage(acceptors * PER_CM3, 1e15 * PER_CM3, intrinsic_per_m3=1.5e10 * PER_CM3, thermal_V=0.0259)
    assert found == pytest.approx(printed, abs=6e-4)


def test_depletion_width_and_field_at_zero_bias() -> None:
    """Source: D. A. Neamen, Semiconductor Physics and Devices, example 7.2."""
    found = depletion(1e16 * PER_CM3, 1e15 * PER_CM3, v_bi_V=0.635, **NEAMEN)
    assert found.width_m == pytest.approx(0.951e-6, abs=5e-10)
    assert (found.into_n_m, found.into_p_m) == (pytest.approx(0.864e-6, abs=6e-10), pytest.approx(0.0864e-6, abs=6e-11))
    assert found.peak_field_V_per_m == pytest.approx(1.34e6, abs=5e3)


def test_depletion_width_under_reverse_bias_and_its_capacitance() -> None:
    """Source: D. A. Neamen, Semiconductor Physics and Devices, examples 7.3 and (unit area) 7.5."""
    found = depletion(1e16 * PER_CM3, 1e15 * PER_CM3, v_bi_V=0.635, bias_V=5.0, **NEAMEN)
    assert found.width_m == pytest.approx(2.83e-6, abs=5e-9)
    area = 1e-4 * CM**2
    found_F = plate_capacitance(area, found.width_m, permittivity_F_per_m=NEAMEN["permittivity_F_per_m"])
    assert found_F == pytest.approx(0.366 * PF, abs=5e-16)


def test_one_sided_doping_from_one_capacitance() -> None:
    """Source: D. A. Neamen, Semiconductor Physics and Devices, exercise TYU 7.6."""
    found = one_sided_doping(0.105 * PF, area_m2=1e-5 * CM**2, v_bi_V=0.765, bias_V=3.0, **NEAMEN)
    assert found / PER_CM3 == pytest.approx(5.01e15, rel=2e-3)


def test_doping_and_built_in_voltage_from_the_slope() -> None:
    """Source: D. A. Neamen, Semiconductor Physics and Devices, end-of-chapter problem: 1.138, 0.521, 0.389 pF."""
    bias, measured = np.array([0.0, 3.0, 6.0]), np.array([1.138, 0.521, 0.389]) * PF
    doping, v_bi = doping_from_slope(bias, measured, area_m2=5e-5 * CM**2, **NEAMEN)
    assert doping / PER_CM3 == pytest.approx(4.96e15, rel=5e-3)
    assert v_bi == pytest.approx(0.79, abs=6e-3)


@pytest.mark.parametrize(("bias_V", "printed"), [(1.0, 0.312), (5.0, 0.168)])
def test_abrupt_capacitance_under_reverse_bias(bias_V: float, printed: float) -> None:
    """Source: D. A. Neamen, Electronic Circuit Analysis and Design, example 1.4."""
    found = junction_capacitance(np.array([bias_V]), c_j0_F=0.5 * PF, v_bi_V=0.637, grading=0.5)
    assert found[0] == pytest.approx(printed * PF, abs=5e-16)


def test_ninety_nine_volt_is_a_tenth_at_one_volt_built_in() -> None:
    """Source: GATE Electronics and Communication 1991, question 1.16."""
    assert junction_capacitance(np.array([99.0]), c_j0_F=1e-9, v_bi_V=1.0, grading=0.5)[0] == pytest.approx(1e-10)


@pytest.mark.parametrize(
    ("bias_V", "printed_um", "half_digit"), [(0.0, 0.949, 5e-4), (10.0, 3.89, 5e-3), (100.0, 12.0, 5e-2)]
)
def test_depletion_width_over_two_decades(bias_V: float, printed_um: float, half_digit: float) -> None:
    """Source: R. C. Jaeger and T. N. Blalock, Microelectronic Circuit Design, problem 3.37 (V_T 25 mV, n_i 1e10)."""
    v_bi = built_in_voltage(1e16 * PER_CM3, 1e15 * PER_CM3, intrinsic_per_m3=1e10 * PER_CM3, thermal_V=0.025)
    found = depletion(1e16 * PER_CM3, 1e15 * PER_CM3, v_bi_V=v_bi, bias_V=bias_V, **NEAMEN)
    assert v_bi == pytest.approx(0.633, abs=5e-4)
    assert found.width_m * 1e6 == pytest.approx(printed_um, abs=half_digit)


def test_silicon_plate() -> None:
    """1 mm2 at 10 um is 10.36 pF, not 1.036: eps_r 11.7, eps_0 of CODATA."""
    assert plate_capacitance(1e-6, 10e-6) == pytest.approx(10.359 * PF, rel=1e-4)
    assert pytest.approx(8.8541878128e-12, rel=1e-9) == VACUUM_F_per_m


def test_constant_doping_gives_itself_back() -> None:
    """A junction of constant doping has a straight 1/C^2, whose slope is that doping."""
    bias = np.linspace(0, 20, 9)
    widths = [depletion(1e25, 3e21, v_bi_V=0.7, bias_V=v).width_m for v in bias]
    doping, _ = doping_from_slope(bias, np.array([plate_capacitance(1e-6, w) for w in widths]), area_m2=1e-6)
    assert doping == pytest.approx(3e21, rel=1e-3)  # both sides deplete a little


@pytest.mark.parametrize(
    ("model", "values", "uncertainties", "rms_pF"),
    [
        ("abrupt", {"c_j0_F": 48.643 * PF, "v_bi_V": 0.7485}, {"c_j0_F": 0.051 * PF, "v_bi_V": 0.0043}, 0.0857),
        (
            "graded", {"c_j0_F": 48.782 * PF, "v_bi_V": 0.638, "grading": 0.4493},
            {"c_j0_F": 0.045 * PF, "v_bi_V": 0.020, "grading": 0.0092}, 0.0555,
        ),
        (
            "abrupt_with_stray", {"c_j0_F": 45.94 * PF, "v_bi_V": 0.670, "c_stray_F": 2.84 * PF},
            {"c_j0_F": 0.47 * PF, "v_bi_V": 0.014, "c_stray_F": 0.50 * PF}, 0.0531,
        ),
    ],
)  # fmt: skip
def test_a_published_table_gives_its_fits(model: str, values: dict, uncertainties: dict, rms_pF: float) -> None:
    """Source: T. P. Pearsall, Photonics Essentials, table 4.1; fits recomputed unweighted by an independent routine."""
    fit = fit_capacitance_table(INP_V, INP_PF * PF, model=model)
    for name, value in values.items():
        assert fit.parameters[name].value == pytest.approx(value, rel=1e-3)
        assert fit.parameters[name].u == pytest.approx(uncertainties[name], rel=0.03)
    assert fit.rms_F == pytest.approx(rms_pF * PF, rel=2e-3)


def test_a_linearly_graded_junction_does_not_fit_that_table() -> None:
    """Source: as above; m = 1/3 leaves 0.2296 pF, four times the free grading's residual."""
    assert fit_capacitance_table(INP_V, INP_PF * PF, model="linearly_graded").rms_F == pytest.approx(
        0.2296 * PF, rel=2e-3
    )


def test_what_one_volt_of_bias_cannot_tell_apart_is_refused() -> None:
    """Source: as above; with m and a parallel capacitance both free the parameters correlate beyond 0.99."""
    with pytest.raises(
        FitError, match=r"do not tell .* apart; found correlation .*measure to several times the built-in"
    ):
        fit_capacitance_table(INP_V, INP_PF * PF, model="graded_with_stray")


@pytest.mark.parametrize(
    ("bias", "capacitance", "words"),
    [
        (INP_V[:3], INP_PF[:3], "too few rows"),
        (INP_V, INP_PF[::-1], "does not fall with reverse bias"),
        (INP_V, np.where(INP_V == 0, np.nan, INP_PF), "not a positive number"),
    ],
)
def test_a_table_that_is_no_junction_is_refused(bias: np.ndarray, capacitance: np.ndarray, words: str) -> None:
    with pytest.raises(FitError, match=words):
        fit_capacitance_table(bias, capacitance * PF)
