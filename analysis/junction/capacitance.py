"""Capacitance of a reverse-biased junction, and what it says of doping and depletion.

Constants of a material that textbooks print differently (intrinsic density, permittivity, thermal voltage) are arguments; the defaults are
those of silicon at 300 K as named below.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from scipy import constants

from darkedge.analysis.captures import FloatArray

ELEMENTARY_CHARGE_C = constants.e
VACUUM_F_per_m = constants.epsilon_0
SILICON_PERMITTIVITY_RATIO = 11.7
"""Relative permittivity of silicon (S. M. Sze and K. K. Ng print 11.9, D. A. Neamen 11.7)."""


def junction_capacitance(
    bias_V: FloatArray, *, c_j0_F: float, v_bi_V: float, grading: float, full_depletion_V: float | None = None
) -> FloatArray:
    """C_j(V) = C_j0 / (1 + V/V_bi)^m, constant beyond full depletion.

    Parameters
    ----------
    bias_V : array, shape (...)
        Reverse bias, V > -V_bi.
    c_j0_F, v_bi_V, grading : float
        Zero-bias capacitance, built-in voltage, grading exponent m (1/2 abrupt, 1/3 linearly graded).
    full_depletion_V : float, optional
        Beyond it the whole width is depleted and C stays eps A / W.

    Returns
    -------
    array, shape (...)
        Farad.

    References
    ----------
    D. A. Neamen, Semiconductor Physics and Devices, ch. 7 (abrupt and graded junctions).
    """
    effective = bias_V if full_depletion_V is None else np.minimum(bias_V, full_depletion_V)
    return np.asarray(c_j0_F * (1.0 + effective / v_bi_V) ** -grading, dtype=np.float64)


def built_in_voltage(
    acceptors_per_m3: float, donors_per_m3: float, *, intrinsic_per_m3: float, thermal_V: float
) -> float:
    """V_bi = (kT/q) ln(N_a N_d / n_i^2). Source: D. A. Neamen, Semiconductor Physics and Devices, eq. (7.10)."""
    return float(thermal_V * np.log(acceptors_per_m3 * donors_per_m3 / intrinsic_per_m3**2))


@dataclass(frozen=True, slots=True, kw_only=True)
class Depletion:
    """The depleted region of an abrupt junction: whole width, the part on each side, and the largest field."""

    width_m: float
    into_p_m: float
    into_n_m: float
    peak_field_V_per_m: float


def depletion(
    acceptors_per_m3: float,
    donors_per_m3: float,
    *,
    v_bi_V: float,
    bias_V: float = 0.0,
    permittivity_F_per_m: float = SILICON_PERMITTIVITY_RATIO * VACUUM_F_per_m,
    charge_C: float = ELEMENTARY_CHARGE_C,
) -> Depletion:
    """W = sqrt(2 eps (V_bi + V) (1/N_a + 1/N_d) / q) of an abrupt junction.

    Source: D. A. Neamen, Semiconductor Physics and Devices, eq. (7.31) to (7.36).
    """
    both = 1 / acceptors_per_m3 + 1 / donors_per_m3
    width = float(np.sqrt(2 * permittivity_F_per_m * (v_bi_V + bias_V) * both / charge_C))
    total = acceptors_per_m3 + donors_per_m3
    return Depletion(
        width_m=width,
        into_p_m=width * donors_per_m3 / total,
        into_n_m=width * acceptors_per_m3 / total,
        peak_field_V_per_m=2 * (v_bi_V + bias_V) / width,
    )


def plate_capacitance(
    area_m2: float, width_m: float, *, permittivity_F_per_m: float = SILICON_PERMITTIVITY_RATIO * VACUUM_F_per_m
) -> float:
    """C = eps A / W of a region depleted through its width."""
    return permittivity_F_per_m * area_m2 / width_m


def doping_from_slope(
    bias_V: FloatArray,
    capacitance_F: FloatArray,
    *,
    area_m2: float,
    permittivity_F_per_m: float = SILICON_PERMITTIVITY_RATIO * VACUUM_F_per_m,
    charge_C: float = ELEMENTARY_CHARGE_C,
) -> tuple[float, float]:
    """Doping of the lighter side and built-in voltage from the straight line 1/C^2 against V.

    N = 2 / (q eps A^2 d(1/C^2)/dV); the line meets zero at V = -V_bi.

    Parameters
    ----------
    bias_V, capacitance_F : array, shape (n,)
        n >= 2, of a one-sided abrupt junction, stray capacitance taken off.

    Returns
    -------
    float, float
        N in 1/m^3, V_bi in volts.

    References
    ----------
    D. A. Neamen, Semiconductor Physics and Devices, section 7.3.3.
    """
    slope, intercept = np.polyfit(bias_V, capacitance_F**-2.0, 1)
    doping = 2 / (charge_C * permittivity_F_per_m * area_m2**2 * slope)
    return float(doping), float(intercept / slope)


def one_sided_doping(
    capacitance_F: float,
    *,
    area_m2: float,
    v_bi_V: float,
    bias_V: float,
    permittivity_F_per_m: float = SILICON_PERMITTIVITY_RATIO * VACUUM_F_per_m,
    charge_C: float = ELEMENTARY_CHARGE_C,
) -> float:
    """Doping of the lighter side from one capacitance: N = 2 C^2 (V_bi + V) / (q eps A^2), in 1/m^3."""
    return 2 * capacitance_F**2 * (v_bi_V + bias_V) / (charge_C * permittivity_F_per_m * area_m2**2)
