"""The junction behind the edges: one fit over all biases, loads and emitter currents of a device.

Each edge time is predicted by the one-pole integral with C following the voltage, in a row with a second stage that does not depend on
the load (emitter, transit and scope, taken as one pole of its own on the on and on the off edge). Loads and stray capacitance enter as
measured values with their uncertainties. Parameters are fitted by their logarithms, which keeps them positive.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Sequence
from dataclasses import dataclass

import numpy as np
from iminuit import Minuit
from numpy.typing import NDArray
from scipy.optimize import least_squares

from darkedge.analysis.captures import DeviceKind, FloatArray
from darkedge.analysis.errors import FitError
from darkedge.analysis.fixture import UNKNOWN_FIXTURE, Fixture
from darkedge.analysis.junction.capacitance import junction_capacitance
from darkedge.analysis.junction.edge_data import EdgeData, edge_data
from darkedge.analysis.junction.edges import off_edge_time, on_edge_time, two_pole_edge_time
from darkedge.analysis.junction.results import CapacitancePoint, EdgePoint, JunctionFit
from darkedge.analysis.measurement import Estimate, Measurement
from darkedge.analysis.uncertainty import propagate, sensitivities

_ALLOWED = {
    "c_j0_F": (1e-14, 1e-6), "v_bi_V": (0.15, 3.0), "grading": (0.05, 1.2), "c_stray_F": (1e-14, 1e-8),
    "full_depletion_V": (0.2, 1e4), "extra_s": (1e-12, 1e-3),
}  # fmt: skip
"""Physical range of each parameter; a fit that runs into its end says so."""
_MODEL_FLOOR_RATIO = 0.002
"""What the chain of two poles leaves unsaid of an edge time; added to its u in quadrature."""
_WORST_MISFIT = 0.10
"""Residuals beyond this, in the median, are no junction."""
SCAN_POINTS = 25
"""Values at which a full depletion voltage is held while the rest is fitted again."""
CHI2_95, NORMAL_95 = 3.841, 1.960
"""95 % points of chi-squared with one degree of freedom and, two-sided, of the normal distribution."""
_PIN_GAIN = 6.0
"""By how much the corrected Akaike criterion must fall before a device is said to be fully depleted."""


@dataclass(frozen=True, slots=True, kw_only=True)
class _Layout:
    """Which logarithms stand where in the vector of parameters."""

    names: tuple[str, ...]
    full_depletion: bool
    loads: int

    def place(self, name: str) -> int:
        return self.names.index(name)


def fit_junction(measurements: Sequence[Measurement], *, fixture: Fixture = UNKNOWN_FIXTURE) -> JunctionFit:
    """Fit the junction of one device and element.

    Parameters
    ----------
    measurements : sequence of Measurement
        All rows of the device and element; those that cannot be used are left out and counted in the notes.
    fixture : Fixture
        Loads and stray capacitance with their uncertainties, and the response of emitter and scope where known.

    Returns
    -------
    JunctionFit
        Parameters with profile-likelihood intervals (95 %), C(V) at each bias, data and model of each edge. A parameter whose interval
        does not close is left out, and a note says what would close it.

    Raises
    ------
    FitError
        What the data do not carry: too few biases, one load and no known response, flags on every
        capture, edges that get slower with bias, residuals that no junction leaves.

    References
    ----------
    Profile likelihood: F. James, Statistical Methods in Experimental Physics, 2nd ed., 9.3. Choice of model: N. Sugiura, Commun. Stat. A7
    (1978) 13 (corrected Akaike criterion).
    """
    data = edge_data(measurements, fixture)
    plain = _Problem(data, fixture, full_depletion=False)
    best, layout, cost = plain.solve()
    problem = plain
    if data.kind in (DeviceKind.PIN, None):
        depleted = _Problem(data, fixture, full_depletion=True)
        other, other_layout, other_cost = depleted.solve()
        gain = plain.criterion(cost, layout) - depleted.criterion(other_cost, other_layout)
        if gain > _PIN_GAIN and _bend_is_inside(data, other, other_layout):
            problem, best, layout, cost = depleted, other, other_layout, other_cost
    return _Report(problem, best, layout, cost).fit()


def fit_devices(
    measurements: Sequence[Measurement], *, fixture: Fixture = UNKNOWN_FIXTURE
) -> tuple[list[JunctionFit], list[FitError]]:
    """Fit each device and element; never raises for one of them."""
    groups: dict[tuple[str | None, str | None, int | None], list[Measurement]] = {}
    for row in measurements:
        groups.setdefault((row.conditions.lot, row.conditions.device, row.element), []).append(row)
    fits: list[JunctionFit] = []
    errors: list[FitError] = []
    for rows in groups.values():
        try:
            fits.append(fit_junction(rows, fixture=fixture))
        except FitError as error:
            errors.append(error)
    return fits, errors


def capacitance_of(fit: JunctionFit, bias_V: FloatArray, *, stray_F: float | None = None) -> FloatArray:
    """Junction and stray capacitance of a fit at any bias, shape of `bias_V`; `stray_F` replaces the fitted stray.

    Between the biases measured the total is known even where its parts are not; it is taken from the curve that was fitted.

    Raises
    ------
    FitError
        `stray_F` is given, and the fit cannot tell junction and stray apart.
    """
    curve = fit.curve
    stray = curve["c_stray_F"]
    if stray_F is not None:
        if "c_stray_F" not in fit.parameters:
            raise FitError(
                "junction and stray capacitance could not be told apart, so another stray cannot be put in",
                where=fit.device or "unnamed device",
                mend="give the fixture's stray with its uncertainty",
            )
        stray = stray_F
    return stray + junction_capacitance(
        bias_V,
        c_j0_F=curve["c_j0_F"],
        v_bi_V=curve["v_bi_V"],
        grading=curve["grading"],
        full_depletion_V=curve.get("full_depletion_V"),
    )


def _bend_is_inside(data: EdgeData, best: FloatArray, layout: _Layout) -> bool:
    full = math.exp(best[layout.place("full_depletion_V")])
    biases = data.biases_V
    return bool(np.sum(biases > full) >= 2 and np.sum(biases < full) >= 2)


class _Problem:
    """Edge data, the model of them, and what is known beforehand."""

    def __init__(self, data: EdgeData, fixture: Fixture, *, full_depletion: bool) -> None:
        self.data, self.fixture = data, fixture
        names = ["c_j0_F", "v_bi_V", "grading", "c_stray_F"] + (["full_depletion_V"] if full_depletion else [])
        for place in range(len(data.currents_A)):
            names += [f"on_{place}_s", f"off_{place}_s"]
        self.u_s = np.hypot(data.u_s, _MODEL_FLOOR_RATIO * data.time_s)
        free_loads = [k for k, u in enumerate(data.u_loads_ratio) if u > 0]
        self.free_loads = free_loads
        names += [f"load_{k}" for k in free_loads]
        self.layout = _Layout(names=tuple(names), full_depletion=full_depletion, loads=len(free_loads))
        self.stray_F = float(data.strays_F.mean()) if data.u_stray_F is not None else None
        self.stray_shift_F = data.strays_F - data.strays_F.mean()
        self._prior = self._known_beforehand()

    def _known_beforehand(self) -> list[tuple[int, float, float]]:
        """Place, mean and standard deviation of what is known of a parameter, in its logarithm."""
        layout, data, known = self.layout, self.data, []
        if self.stray_F is not None and data.u_stray_F is not None and self.stray_F > 0:
            u = max(data.u_stray_F / self.stray_F, 1e-4)
            known.append((layout.place("c_stray_F"), math.log(self.stray_F), u))
        response = self.fixture.response
        for place, current in enumerate(data.currents_A):
            if response is None or not _same_current(current, response.emitter_current_A):
                continue
            for name, time, u_time in (
                (f"on_{place}_s", response.rise_time_s, response.u_rise_time_s),
                (f"off_{place}_s", response.fall_time_s, response.u_fall_time_s),
            ):
                # The shape of the second stage is not known to be one pole: 5 % of its time stands for that.
                known.append((layout.place(name), math.log(time), math.hypot(u_time / time, 0.05)))
        known += [(layout.place(f"load_{k}"), 0.0, float(data.u_loads_ratio[k])) for k in self.free_loads]
        return known

    def capacitance(self, theta: FloatArray, voltage: FloatArray) -> FloatArray:
        """Junction capacitance at any voltage."""
        layout = self.layout
        full = math.exp(theta[layout.place("full_depletion_V")]) if layout.full_depletion else None
        v_bi = math.exp(theta[layout.place("v_bi_V")])
        return junction_capacitance(
            np.maximum(voltage, -0.9 * v_bi),
            c_j0_F=math.exp(theta[layout.place("c_j0_F")]),
            v_bi_V=v_bi,
            grading=math.exp(theta[layout.place("grading")]),
            full_depletion_V=full,
        )

    def times(self, theta: FloatArray) -> FloatArray:
        """Edge times that the model predicts, shape (n,)."""
        data, layout = self.data, self.layout
        stray = math.exp(theta[layout.place("c_stray_F")]) + self.stray_shift_F
        resistance = data.loads_ohm.copy()
        for k in self.free_loads:
            resistance[k] *= math.exp(theta[layout.place(f"load_{k}")])
        load = resistance[data.load]
        stray_here = stray[data.load]
        rc = np.empty_like(data.time_s)
        for lit, edge in ((True, on_edge_time), (False, off_edge_time)):
            here = data.lit == lit
            capacitance = self._total(theta, stray_here[here])
            rc[here] = edge(capacitance, data.bias_V[here], data.swing_V[here], load[here])
        extra = np.array(
            [[theta[layout.place(f"{edge}_{k}_s")] for k in range(len(data.currents_A))] for edge in ("off", "on")]
        )
        return two_pole_edge_time(rc, np.exp(extra[data.lit.astype(np.intp), data.current]))

    def _total(self, theta: FloatArray, stray_F: FloatArray) -> Callable[[FloatArray], FloatArray]:
        """Junction and stray capacitance of the voltages of several edges, shape (n, nodes)."""
        return lambda voltage: self.capacitance(theta, voltage) + stray_F[:, None]

    def residuals(self, theta: FloatArray) -> FloatArray:
        """Weighted residuals, those of what is known beforehand behind those of the data."""
        of_data = (self.times(theta) - self.data.time_s) / self.u_s
        of_prior = [(theta[place] - mean) / sd for place, mean, sd in self._prior]
        return np.concatenate([of_data, np.asarray(of_prior, dtype=np.float64)])

    def bounds(self) -> tuple[FloatArray, FloatArray]:
        """Ends of the physical range of each logarithm."""
        pairs = []
        for name in self.layout.names:
            if name.startswith("load_"):
                pairs.append((-0.2, 0.2))
                continue
            low, high = _ALLOWED[name if name in _ALLOWED else "extra_s"]
            if name == "full_depletion_V":
                low, high = self.data.biases_V[0], self.data.biases_V[-1]
            pairs.append((math.log(low), math.log(high)))
        return np.array([p[0] for p in pairs]), np.array([p[1] for p in pairs])

    def solve(self) -> tuple[FloatArray, _Layout, float]:
        """Best of several starts: parameters, where they stand, and the sum of squares."""
        best: tuple[float, FloatArray] | None = None
        low, high = self.bounds()
        for start in self._starts():
            inside = np.clip(start, low + 1e-6, high - 1e-6)
            found = least_squares(self.residuals, inside, bounds=(low, high), x_scale=0.1, max_nfev=400)
            if best is None or 2 * found.cost < best[0]:
                best = (float(2 * found.cost), np.asarray(found.x, dtype=np.float64))
        assert best is not None
        return best[1], self.layout, best[0]

    def criterion(self, cost: float, layout: _Layout) -> float:
        """Akaike's criterion, corrected for few points; loads and the like count in both models alike."""
        count, size = self.data.time_s.size, len(layout.names) - layout.loads
        return cost + 2 * size + 2 * size * (size + 1) / max(count - size - 1, 1)

    def _starts(self) -> list[FloatArray]:
        data, layout = self.data, self.layout
        slowest = np.argmax(data.time_s / data.loads_ohm[data.load])
        total = data.time_s[slowest] / data.loads_ohm[data.load][slowest] / math.log(9)
        stray = self.stray_F or 0.1 * total
        response = self.fixture.response
        extra_on = response.rise_time_s if response else 0.3 * data.time_s.min()
        extra_off = response.fall_time_s if response else 0.3 * data.time_s.min()
        starts = []
        middles = np.sqrt(data.biases_V[:-1] * data.biases_V[1:]) if layout.full_depletion else np.array([1.0])
        for grading in (0.33, 0.5):
            for full in middles[1:-1] if middles.size > 3 else middles:
                v_bi = 0.65
                junction = max(total - stray, 0.2 * total) * (1 + data.bias_V[slowest] / v_bi) ** grading
                values = {"c_j0_F": junction, "v_bi_V": v_bi, "grading": grading, "c_stray_F": stray}
                values["full_depletion_V"] = full
                starts.append(
                    np.array(
                        [
                            0.0
                            if name.startswith("load_")
                            else math.log(values.get(name, extra_on if name.startswith("on_") else extra_off))
                            for name in layout.names
                        ]
                    )
                )
        return starts


class _Report:
    """From the best parameters to values, intervals, C(V) and words."""

    def __init__(self, problem: _Problem, best: FloatArray, layout: _Layout, cost: float) -> None:
        self.problem, self.best, self.layout, self.cost = problem, best, layout, cost
        self.free = len(layout.names) - len(problem._prior)
        count = problem.data.time_s.size
        self.freedom = max(count - self.free, 1)
        self.scale = max(1.0, cost / self.freedom)
        self.notes = list(problem.data.left_out)

    def fit(self) -> JunctionFit:
        problem, data = self.problem, self.problem.data
        model_s = problem.times(self.best)
        misfit = float(np.median(np.abs(model_s / data.time_s - 1)))
        if misfit > _WORST_MISFIT:
            raise FitError(
                "the edges do not follow a junction's capacitance",
                where=data.device or "unnamed device",
                found=f"residuals of {100 * misfit:.0f} % in the median",
                wanted="a few per cent",
                mend="check that bias and load of each capture are what they say, and look for slow tails",
            )
        covariance = self._covariance()
        parameters = self._parameters(covariance)
        self._say_what_is_lacking(parameters)
        given = [("c_stray_F", problem.stray_F is not None)]
        extra = self._extra(covariance)
        return JunctionFit(
            device=data.device,
            element=data.element,
            model="full_depletion" if self.layout.full_depletion else "graded",
            parameters=parameters,
            correlation=self._correlation(covariance, tuple(parameters)),
            fixed=tuple(name for name, known in given if known),
            extra_rise_s=extra[0],
            extra_fall_s=extra[1],
            capacitance=self._capacitance(covariance),
            edges=tuple(
                EdgePoint(
                    capture=data.captures[k],
                    quantity=data.quantities[k],
                    bias_V=float(data.bias_V[k]),
                    load_ohm=float(data.nominal_ohm[k]),
                    measured_s=float(data.time_s[k]),
                    u_s=float(problem.u_s[k]),
                    model_s=float(model_s[k]),
                )
                for k in range(data.time_s.size)
            ),
            chi2_per_dof=self.cost / self.freedom,
            notes=tuple(self.notes),
            curve=self._curve(),
        )

    def _curve(self) -> dict[str, float]:
        names = ("c_j0_F", "v_bi_V", "grading", "c_stray_F", "full_depletion_V")
        return {n: math.exp(self.best[self.layout.place(n)]) for n in names if n in self.layout.names}

    def _covariance(self) -> FloatArray:
        # The parameters are logarithms, so one step fits all.
        jacobian = sensitivities(self.problem.residuals, self.best, steps=np.full(self.best.size, 1e-5))
        information = jacobian.T @ jacobian / self.scale
        # A direction that the data do not see has a variance as large as its whole physical range, not an infinite one.
        low, high = self.problem.bounds()
        information += np.diag(12.0 / (high - low) ** 2)
        return np.asarray(np.linalg.inv(information), dtype=np.float64)

    def _parameters(self, covariance: FloatArray) -> dict[str, Estimate]:
        wanted = [n for n in ("c_j0_F", "v_bi_V", "grading", "c_stray_F", "full_depletion_V") if n in self.layout.names]
        found = {}
        # Where a junction is fully depleted and the stray is not known, C(V) is a bend between two flat parts: amplitude, bend and stray
        # trade against each other in several valleys, and a profile that follows one of them is too narrow (measured: it covers half of
        # what it claims). The bend itself is told by a scan; the rest is left out.
        torn = self.layout.full_depletion and self.problem.stray_F is None
        profiles = {"full_depletion_V": self._scanned_bend()} if torn else self._profiles(wanted)
        for name, (low, high) in profiles.items():
            if low is None or high is None:
                continue
            place = self.layout.place(name)
            value = math.exp(self.best[place])
            u = value * (0.5 * (high - low) / NORMAL_95 if torn else math.sqrt(covariance[place, place]))
            found[name] = Estimate(value=value, u=u, lo95=math.exp(low), hi95=math.exp(high))
        return found

    def _scanned_bend(self) -> tuple[float | None, float | None]:
        """Ends of the 95 % interval of the logarithm of the full depletion voltage, by refitting all else at values held fixed.

        The interval reaches to the first value on either side that is excluded; `None` where no such value lies within the biases measured.
        """
        place = self.layout.place("full_depletion_V")
        low, high = self.problem.bounds()
        grid = np.linspace(low[place], high[place], SCAN_POINTS)
        free = np.arange(self.best.size) != place
        start = self.best.copy()
        allowed = []
        order = np.argsort(np.abs(grid - self.best[place]))
        ends: dict[bool, FloatArray] = {True: start, False: start}
        for k in order:
            above = bool(grid[k] >= self.best[place])
            theta, cost = self._refitted(ends[above], place, float(grid[k]), free)
            ends[above] = theta
            allowed.append((float(grid[k]), cost))
        least = min(self.cost, *(cost for _, cost in allowed))
        excluded = [value for value, cost in allowed if (cost - least) / self.scale > CHI2_95]
        below = [value for value in excluded if value < self.best[place]]
        above_it = [value for value in excluded if value > self.best[place]]
        inside = [value for value, cost in allowed if (cost - least) / self.scale <= CHI2_95]
        lowest, highest = min([*inside, self.best[place]]), max([*inside, self.best[place]])
        return (
            max((value for value in below if value < lowest), default=None),
            min((value for value in above_it if value > highest), default=None),
        )

    def _refitted(
        self, start: FloatArray, place: int, value: float, free: NDArray[np.bool_]
    ) -> tuple[FloatArray, float]:
        """All parameters but one fitted again."""
        low, high = self.problem.bounds()
        theta = start.copy()
        theta[place] = value

        def residuals(some: FloatArray) -> FloatArray:
            whole = theta.copy()
            whole[free] = some
            return self.problem.residuals(whole)

        inside = np.clip(theta[free], low[free] + 1e-6, high[free] - 1e-6)
        found = least_squares(residuals, inside, bounds=(low[free], high[free]), x_scale=0.1, max_nfev=60)
        theta[free] = found.x
        return theta, float(2 * found.cost)

    def _profiles(self, names: Sequence[str]) -> dict[str, tuple[float | None, float | None]]:
        """Ends of the 95 % profile-likelihood interval of each logarithm; `None` where an end is not reached."""
        problem, low, high = self.problem, *self.problem.bounds()
        minuit = Minuit(
            lambda theta: float(np.sum(problem.residuals(np.asarray(theta)) ** 2)) / self.scale,
            self.best,
            name=self.layout.names,
        )
        minuit.errordef = Minuit.LEAST_SQUARES
        minuit.limits = list(zip(low, high, strict=True))
        minuit.strategy = 1
        minuit.errors = list(np.minimum(np.sqrt(np.diag(self._covariance())), 0.3))
        minuit.migrad(ncall=4000)
        found: dict[str, tuple[float | None, float | None]] = {}
        for name in names:
            place = self.layout.place(name)
            ends: tuple[float | None, float | None] = (None, None)
            try:
                minuit.minos(name, cl=0.95)
                error = minuit.merrors[name]
                value = minuit.values[name]
                ends = (
                    value + error.lower if error.lower_valid and value + error.lower > low[place] + 1e-3 else None,
                    value + error.upper if error.upper_valid and value + error.upper < high[place] - 1e-3 else None,
                )
            except RuntimeError:
                pass  # the minimum is not one that a profile can start from: the interval does not close
            found[name] = ends
        return found

    def _correlation(self, covariance: FloatArray, names: tuple[str, ...]) -> dict[tuple[str, str], float]:
        sd = np.sqrt(np.diag(covariance))
        places = [self.layout.place(n) for n in names]
        return {
            (a, b): float(covariance[i, j] / sd[i] / sd[j])
            for k, (a, i) in enumerate(zip(names, places, strict=True))
            for b, j in list(zip(names, places, strict=True))[k + 1 :]
        }

    def _capacitance(self, covariance: FloatArray) -> tuple[CapacitancePoint, ...]:
        biases = self.problem.data.biases_V

        def total(theta: FloatArray) -> FloatArray:
            stray = math.exp(theta[self.layout.place("c_stray_F")])
            return self.problem.capacitance(theta, biases) + stray

        values, spread = propagate(total, self.best, covariance)
        variances = np.diag(spread)
        return tuple(
            CapacitancePoint(bias_V=float(b), c_F=float(c), u_c_F=float(math.sqrt(max(v, 0.0))))
            for b, c, v in zip(biases, values, variances, strict=True)
        )

    def _extra(self, covariance: FloatArray) -> tuple[Estimate, Estimate]:
        """On and off time of the second stage at the highest emitter current measured."""
        last = len(self.problem.data.currents_A) - 1
        found = []
        for edge in ("on", "off"):
            place = self.layout.place(f"{edge}_{last}_s")
            value = math.exp(self.best[place])
            found.append(Estimate(value=value, u=value * math.sqrt(covariance[place, place])))
        return found[0], found[1]

    def _say_what_is_lacking(self, parameters: dict[str, Estimate]) -> None:
        missing = [n for n in ("c_j0_F", "v_bi_V", "grading", "c_stray_F") if n not in parameters]
        if missing:
            mend = (
                "give the fixture's stray capacitance with its uncertainty, a fully depleted point, or a wider bias range"
                if self.problem.stray_F is None
                else "measure over a wider range of bias, from below one volt up"
            )
            self.notes.append(
                f"These data do not tell {', '.join(missing)} (the 95 % interval does not close): {mend}. "
                "The capacitance at each bias is known all the same."
            )
        if self.scale > 1.5:
            self.notes.append(
                f"The residuals are {math.sqrt(self.scale):.1f} times what the uncertainties say; the intervals were widened by that."
            )


def _same_current(one: float | None, other: float | None) -> bool:
    if one is None or other is None:
        return one is None and other is None
    return abs(one / other - 1) < 0.05
