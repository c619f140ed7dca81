"""Which measurements a junction fit can use, as arrays; and in words, why it cannot."""

from __future__ import annotations

from collections import Counter
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy import stats

from darkedge.analysis.captures import DeviceKind, FloatArray, Kind
from darkedge.analysis.errors import FitError
from darkedge.analysis.fixture import Fixture
from darkedge.analysis.measurement import Measurement

SPOILING_FLAGS = frozenset(
    {
        "refused",
        "no_pulse",
        "clipped",
        "never_settles",
        "few_samples_on_edge",
        "bias_used_up",
        "min_max_record",
        "slow_tail",
    }
)
"""Flags with which an edge time says nothing of the capacitance."""
FEWEST_BIASES = 4
TEN_NINETY_WORDS = "histogram 10/50/90 %"
LOAD_RATIO = 4.0
"""Loads this far apart tell the RC part from what does not depend on the load (design of experiments by Fisher information)."""


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class EdgeData:
    """Edge times of one device and element, shape (n,) each.

    `load` and `current` are places in `loads_ohm` (effective), `u_loads_ratio` and `currents_A`; `rising` says with the light coming on.
    """

    captures: tuple[str, ...]
    quantities: tuple[str, ...]
    bias_V: FloatArray
    nominal_ohm: FloatArray
    swing_V: FloatArray
    time_s: FloatArray
    u_s: FloatArray
    lit: NDArray[np.bool_]
    load: NDArray[np.intp]
    current: NDArray[np.intp]
    loads_ohm: FloatArray
    u_loads_ratio: FloatArray
    strays_F: FloatArray
    u_stray_F: float | None
    currents_A: tuple[float | None, ...]
    device: str | None
    element: int | None
    kind: DeviceKind | None
    left_out: tuple[str, ...] = ()

    @property
    def biases_V(self) -> FloatArray:
        """The different biases, ascending."""
        return np.unique(self.bias_V)


def edge_data(measurements: Sequence[Measurement], fixture: Fixture) -> EdgeData:
    """Collect what can be used.

    Raises
    ------
    FitError
        Nothing can be used, too few biases, or edges that contradict a junction; each with the mend.
    """
    where = _name(measurements)
    rows = [m for m in measurements if m.conditions.kind in (Kind.PULSE, None)]
    driven = [m for m in rows if m.conditions.driven_element in (None, m.element)]
    if any(m.conditions.device_kind in (DeviceKind.TRANSISTOR_SWITCH, DeviceKind.OPTOCOUPLER) for m in driven):
        raise FitError(
            "the edges of a transistor output do not show the junction's capacitance",
            where=where,
            mend="measure the diode alone, with its load to ground",
        )
    spoiled = Counter(flag for m in driven for flag in m.flags if flag in SPOILING_FLAGS)
    usable = [m for m in driven if not SPOILING_FLAGS & set(m.flags)]
    if other := sorted(
        {m.levels for m in usable if m.levels is not None and not m.levels.startswith(TEN_NINETY_WORDS)}
    ):
        raise FitError(
            "the edges are not timed between 10 and 90 %",
            where=where,
            found=", ".join(other),
            wanted="rise and fall times from 10 to 90 %",
            mend="measure again without --levels",
        )
    stated = [m for m in usable if m.conditions.bias_V is not None and m.conditions.load_ohm is not None]
    if not stated:
        raise FitError(
            "no edge can be used for a fit",
            where=where,
            found=_why_none(len(rows), len(driven), spoiled, len(usable)),
            wanted="pulse captures that settle, with bias and load stated",
            mend="state the conditions with --names or --conditions, and see the flags of the captures",
        )
    data = _arrays(stated, fixture, spoiled)
    _check(data, fixture, where)
    return data


def _name(measurements: Sequence[Measurement]) -> str:
    if not measurements:
        return "unnamed device"
    first = measurements[0]
    element = f", element {first.element}" if first.element not in (None, 1) else ""
    return f"{first.conditions.device or 'unnamed device'}{element}"


def _why_none(rows: int, driven: int, spoiled: Counter[str], usable: int) -> str:
    if not rows:
        return "no pulse capture"
    if not driven:
        return f"{rows} captures in which another element was driven"
    if not usable:
        return "flags " + ", ".join(f"{flag} ({count})" for flag, count in spoiled.items())
    return f"{usable} captures without bias or load"


def _arrays(rows: Sequence[Measurement], fixture: Fixture, spoiled: Counter[str]) -> EdgeData:
    found = [
        (m, quantity, time, m.quantities["amplitude_V"])
        for m in rows
        for quantity in ("rise_time_s", "fall_time_s")
        # The fit composes the bench itself, so it takes edges as the scope showed them.
        if (time := m.quantities.get(f"seen_{quantity}", m.quantities.get(quantity))) is not None
        and time.value and time.u and m.value("amplitude_V")
    ]  # fmt: skip
    nominal = sorted({m.conditions.load_ohm or 0.0 for m, *_ in found})
    currents = sorted({m.conditions.emitter_current_A for m, *_ in found}, key=lambda c: c or 0.0)
    inputs = [m.conditions.input_ohm for m, *_ in found]
    effective = [fixture.effective_load(load, next((i for i in inputs if i is not None), None)) for load in nominal]
    known = [fixture.load(load) for load in nominal]
    strays = [load.stray_F for load in known if load is not None and load.stray_F is not None]
    complete = bool(nominal) and len(strays) == len(nominal)
    u_strays = [load.u_stray_F for load in known if load is not None and load.u_stray_F is not None]
    left_out = tuple(f"{count} captures left out: {flag}" for flag, count in spoiled.items())
    return EdgeData(
        captures=tuple(m.capture for m, *_ in found),
        quantities=tuple(quantity for _, quantity, *_ in found),
        bias_V=np.array([m.conditions.bias_V for m, *_ in found], dtype=np.float64),
        nominal_ohm=np.array([m.conditions.load_ohm for m, *_ in found], dtype=np.float64),
        swing_V=np.array([abs(a.value or 0.0) for *_, a in found], dtype=np.float64),
        time_s=np.array([t.value for _, _, t, _ in found], dtype=np.float64),
        u_s=np.array([t.u for _, _, t, _ in found], dtype=np.float64),
        lit=np.array([quantity == "rise_time_s" for _, quantity, *_ in found], dtype=np.bool_),
        load=np.array([nominal.index(m.conditions.load_ohm or 0.0) for m, *_ in found], dtype=np.intp),
        current=np.array([currents.index(m.conditions.emitter_current_A) for m, *_ in found], dtype=np.intp),
        loads_ohm=np.array([e.value for e in effective], dtype=np.float64),
        u_loads_ratio=np.array([(e.u or 0.0) / (e.value or 1.0) for e in effective], dtype=np.float64),
        strays_F=np.array(strays if complete else np.zeros(len(nominal)), dtype=np.float64),
        u_stray_F=(max(u_strays) if u_strays else 0.0) if complete else None,
        currents_A=tuple(currents),
        device=rows[0].conditions.device,
        element=rows[0].element,
        kind=next((m.conditions.device_kind for m in rows if m.conditions.device_kind is not None), None),
        left_out=left_out,
    )


def _check(data: EdgeData, fixture: Fixture, where: str) -> None:
    biases = data.biases_V
    if biases.size < FEWEST_BIASES:
        raise FitError(
            "too few biases to see how the capacitance bends",
            where=where,
            found=f"{biases.size} ({', '.join(f'{b:g} V' for b in biases)})"
            if biases.size
            else "no edge with an uncertainty",
            wanted=f"at least {FEWEST_BIASES}",
            mend="measure at more biases, spread evenly on a log scale from about the built-in voltage up",
        )
    ratio = float(data.loads_ohm.max() / data.loads_ohm.min())
    if ratio < LOAD_RATIO and fixture.response is None:
        raise FitError(
            "one load only: the RC part cannot be told from emitter and transit",
            where=where,
            found=", ".join(f"{r:g} ohm" for r in np.unique(data.nominal_ohm)),
            mend="add a load at least 4 x different, or give the response of emitter and scope in the fixture file",
        )
    rising_with_bias = [_trend(data, load, lit) for load in range(data.loads_ohm.size) for lit in (True, False)]
    if any(rising_with_bias):
        raise FitError(
            "the edges get slower with more reverse bias, which no junction does",
            where=where,
            mend="check the sign and the column of the bias, and the conditions of the captures",
        )


def _trend(data: EdgeData, load: int, lit: bool) -> bool:
    """Whether edge times at one load rise with bias beyond what chance and uncertainty give."""
    here = (data.load == load) & (data.lit == lit)
    if np.unique(data.bias_V[here]).size < FEWEST_BIASES:
        return False
    rank = stats.spearmanr(data.bias_V[here], data.time_s[here])
    low, high = data.time_s[here][np.argmin(data.bias_V[here])], data.time_s[here][np.argmax(data.bias_V[here])]
    return bool(rank.statistic > 0.7 and high - low > 5 * float(np.median(data.u_s[here])))
