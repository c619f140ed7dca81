"""Bias and load for a wanted pulse: what is fast enough, with the most signal and the least dark current."""

from __future__ import annotations

import math
from collections.abc import Callable, Sequence
from dataclasses import dataclass, replace

import numpy as np

from darkedge.analysis.captures import FloatArray, Kind
from darkedge.analysis.dark.model import predict_dark_current
from darkedge.analysis.dark.results import DarkFit
from darkedge.analysis.decide.results import Choice, OperatingPoint, Wish
from darkedge.analysis.errors import FitError
from darkedge.analysis.fixture import UNKNOWN_FIXTURE, Fixture
from darkedge.analysis.junction.edges import LN9, off_edge_time, on_edge_time, two_pole_edge_time, two_pole_step
from darkedge.analysis.junction.fit import capacitance_of
from darkedge.analysis.junction.results import JunctionFit
from darkedge.analysis.measurement import Estimate, Measurement
from darkedge.analysis.quantities import format_quantity

E12 = (1.0, 1.2, 1.5, 1.8, 2.2, 2.7, 3.3, 3.9, 4.7, 5.6, 6.8, 8.2)
"""Preferred values (IEC 60063)."""
ONE_SIDED_95 = 1.645
"""Standard uncertainties by which a prediction has to clear a wish, so that it does with 95 %."""
MOST_SWING_RATIO = 0.5
"""Swing over bias beyond which the load line has eaten the bias and nothing predicted from C(V) holds."""
_SPOILED = frozenset({"refused", "no_pulse", "clipped", "never_settles"})


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class _Light:
    """Photocurrent against bias at one emitter current."""

    emitter_A: float | None
    bias_V: FloatArray
    photo_A: FloatArray
    u_ratio: float

    def photo_at(self, bias_V: float) -> float:
        return float(np.interp(bias_V, self.bias_V, self.photo_A))


def choose(
    fit: JunctionFit,
    *,
    measurements: Sequence[Measurement],
    wish: Wish,
    dark: DarkFit | None = None,
    fixture: Fixture = UNKNOWN_FIXTURE,
) -> Choice:
    """Choose bias and load for one device and element.

    Candidates are the rails and loads of the wish, else the biases measured and the E12 values between the loads measured. Each is predicted from
    the fit: the large-signal edges in a row with the second stage, the shortest pulse by the response of that chain to a pulse, the
    signal from the photocurrent measured at this light, the dark current from its own fit. A wish counts as met where the
    prediction clears it with 95 %. The best of the feasible has the most signal, and the lower bias where signals are equal.

    Raises
    ------
    FitError
        No photocurrent was measured at this light, or no rail lies within the biases measured.
    """
    light = _light(fit, measurements, fixture, wish)
    low, high = float(light.bias_V[0]), float(light.bias_V[-1])
    rails = wish.rails_V or tuple(float(b) for b in np.unique(light.bias_V))
    allowed = [r for r in rails if wish.max_bias_V is None or r <= wish.max_bias_V]
    inside = [r for r in allowed if low * 0.98 <= r <= high * 1.02]
    notes = [
        f"{format_quantity(r, 'V')} lies outside the biases measured ({low:g} to {high:g} V) and was not judged."
        for r in allowed
        if r not in inside
    ]
    if len(allowed) < len(rails):
        notes.append(f"Biases beyond {format_quantity(wish.max_bias_V, 'V')} were left out, as asked.")
    if not inside:
        raise FitError(
            "no rail lies within the biases measured",
            where=fit.device or "unnamed device",
            found=", ".join(f"{r:g} V" for r in allowed) or "no rail within the rating given",
            wanted=f"{low:g} to {high:g} V",
            mend="measure at the rails that exist",
        )
    loads = wish.loads_ohm or _series(fit)
    judged = [_judged(fit, dark, light, wish, bias, load) for bias in inside for load in loads]
    feasible = [point for point, _ in judged if not point.misses]
    best = max(feasible, key=lambda p: (_value(p.signal_V), -p.bias_V)) if feasible else None
    nearest = None if best is not None else min(judged, key=lambda pair: pair[1])[0]
    if light.emitter_A is not None:
        notes.append(f"Signal is that at an emitter current of {format_quantity(light.emitter_A, 'A')}.")
    return Choice(
        device=fit.device,
        element=fit.element,
        wish=replace(wish, rails_V=tuple(inside), loads_ohm=tuple(loads), emitter_current_A=light.emitter_A),
        candidates=tuple(point for point, _ in judged),
        best=best,
        nearest=nearest,
        notes=tuple(notes),
    )


def shortest_pulse_through(
    on_s: tuple[float, float], off_s: tuple[float, float], *, amplitude_ratio: float, width_ratio: float
) -> float:
    """Shortest pulse that a chain of two one-pole stages passes, in seconds.

    Parameters
    ----------
    on_s, off_s : pair of float
        Time constants of the two stages with the light coming on, and going off.
    amplitude_ratio : float
        Least part of the settled amplitude to be reached.
    width_ratio : float
        Largest relative change of the width at half of its own height.

    Notes
    -----
    The response to a pulse is the step response up to its end, and from there the off response of what was reached. Both
    conditions hold from some width on; it is found by bisection on the logarithm of the width.
    """
    scale = sum(on_s) + sum(off_s)

    def passes(width: float) -> bool:
        reached, out = _pulse_through(width, on_s, off_s)
        return reached >= amplitude_ratio and abs(out / width - 1) <= width_ratio

    short, long = math.log(1e-3 * scale), math.log(1e3 * scale)
    for _ in range(40):
        middle = (short + long) / 2
        if passes(math.exp(middle)):
            long = middle
        else:
            short = middle
    return math.exp(long)


def _pulse_through(width: float, on_s: tuple[float, float], off_s: tuple[float, float]) -> tuple[float, float]:
    """Amplitude reached by the end of a pulse, and its width at half of that."""
    rise = np.linspace(0.0, width, 800)
    up = two_pole_step(rise, *on_s)
    reached = float(up[-1])
    if reached <= 0:
        return 0.0, 0.0
    fall = np.linspace(0.0, 12 * sum(off_s), 800)
    down = 1 - two_pole_step(fall, *off_s)
    start = float(np.interp(reached / 2, up, rise))
    end = float(np.interp(-0.5, -down, fall))
    return reached, width + end - start


def _light(fit: JunctionFit, measurements: Sequence[Measurement], fixture: Fixture, wish: Wish) -> _Light:
    rows = [m for m in measurements if _shows_light(m)]
    currents = sorted({m.conditions.emitter_current_A for m in rows}, key=lambda c: c or 0.0)
    wanted = wish.emitter_current_A
    if wanted is not None:
        currents = [c for c in currents if c is not None and abs(c / wanted - 1) < 0.05]
    if not currents:
        raise FitError(
            "no photocurrent was measured at this light",
            where=fit.device or "unnamed device",
            found="" if wanted is None else format_quantity(wanted, "A"),
            wanted="settled pulses with bias, load and emitter current stated",
        )
    current = currents[-1]
    here = [m for m in rows if m.conditions.emitter_current_A == current]
    bias = np.array([m.conditions.bias_V for m in here], dtype=np.float64)
    photo = np.array([_photo_A(m, fixture) for m in here])
    ratios = [(m.quantities["amplitude_V"].u or 0.0) / abs(m.value("amplitude_V") or 1.0) for m in here]
    unique = np.unique(bias)
    return _Light(
        emitter_A=current,
        bias_V=unique,
        photo_A=np.array([np.median(photo[bias == b]) for b in unique]),
        u_ratio=float(np.median(ratios)),
    )


def _shows_light(m: Measurement) -> bool:
    known = m.conditions
    return (
        known.kind in (Kind.PULSE, None)
        and known.driven_element in (None, m.element)
        and known.bias_V is not None
        and known.load_ohm is not None
        and bool(m.value("amplitude_V"))
        and not _SPOILED & set(m.flags)
    )


def _photo_A(m: Measurement, fixture: Fixture) -> float:
    assert m.conditions.load_ohm is not None
    resistance = fixture.effective_load(m.conditions.load_ohm, m.conditions.input_ohm).value or m.conditions.load_ohm
    return abs(m.value("amplitude_V") or 0.0) / resistance


def _series(fit: JunctionFit) -> tuple[float, ...]:
    """Preferred values between the loads measured, those included."""
    loads = [edge.load_ohm for edge in fit.edges]
    low, high = min(loads), max(loads)
    decades = range(math.floor(math.log10(low)), math.ceil(math.log10(high)) + 1)
    series = {float(f"{value * 10.0**d:.3g}") for d in decades for value in E12}
    return tuple(sorted({x for x in series if low <= x <= high} | {low, high}))


def _judged(
    fit: JunctionFit, dark: DarkFit | None, light: _Light, wish: Wish, bias_V: float, load_ohm: float
) -> tuple[OperatingPoint, float]:
    """One candidate with its misses, and how far it is from being feasible (0 where it is)."""
    swing = light.photo_at(bias_V) * load_ohm
    on_s, off_s = _edges(fit, wish, bias_V, min(swing, 0.9 * bias_V), load_ohm)
    u_ratio = _u_ratio(fit, bias_V)
    shortest = shortest_pulse_through(
        on_s, off_s, amplitude_ratio=wish.amplitude_ratio, width_ratio=wish.distortion_ratio
    )
    rise = float(two_pole_edge_time(np.array([on_s[0] * LN9]), np.array([on_s[1] * LN9]))[0])
    point = OperatingPoint(
        bias_V=bias_V,
        load_ohm=load_ohm,
        signal_V=Estimate(value=swing, u=swing * light.u_ratio),
        rise_time_s=Estimate(value=rise, u=rise * u_ratio),
        shortest_pulse_s=Estimate(value=shortest, u=shortest * u_ratio),
        dark_current_A=None if dark is None else predict_dark_current(dark, bias_V),
    )
    misses = _misses(point, wish)
    return replace(point, misses=tuple(text for text, _ in misses)), sum(gap for _, gap in misses)


def _edges(
    fit: JunctionFit, wish: Wish, bias_V: float, swing_V: float, load_ohm: float
) -> tuple[tuple[float, float], tuple[float, float]]:
    """Time constants of RC part and second stage, on and off."""

    def capacitance(voltage: FloatArray) -> FloatArray:
        return capacitance_of(fit, np.maximum(voltage, 0.0), stray_F=wish.board_stray_F)

    arrays = (np.array([bias_V]), np.array([swing_V]), np.array([load_ohm]))
    times: list[Callable[..., FloatArray]] = [on_edge_time, off_edge_time]
    on_rc, off_rc = (float(edge(capacitance, *arrays)[0]) / LN9 for edge in times)
    return (on_rc, _value(fit.extra_rise_s) / LN9), (off_rc, _value(fit.extra_fall_s) / LN9)


def _u_ratio(fit: JunctionFit, bias_V: float) -> float:
    """Relative uncertainty of a time constant: that of the capacitance at the nearest biases, and of the load by a per cent resistor."""
    biases = [p.bias_V for p in fit.capacitance]
    ratios = [p.u_c_F / p.c_F for p in fit.capacitance]
    return math.hypot(float(np.interp(bias_V, biases, ratios)), 0.01 / math.sqrt(3))


def _misses(point: OperatingPoint, wish: Wish) -> list[tuple[str, float]]:
    """Each wish that is not met, in words, and by how much (a logarithm, so that gaps add up)."""
    found: list[tuple[str, float]] = []
    shortest = _value(point.shortest_pulse_s) + ONE_SIDED_95 * (point.shortest_pulse_s.u or 0.0)
    if shortest > wish.pulse_width_s:
        found.append(
            (f"passes pulses from {format_quantity(shortest, 's')} on", math.log(shortest / wish.pulse_width_s))
        )
    signal = _value(point.signal_V)
    if wish.min_signal_V is not None and signal < wish.min_signal_V:
        found.append((f"signal {format_quantity(signal, 'V')}", math.log(wish.min_signal_V / max(signal, 1e-12))))
    if signal > MOST_SWING_RATIO * point.bias_V:
        found.append(("the signal uses up the bias", math.log(signal / (MOST_SWING_RATIO * point.bias_V))))
    return found + _dark_miss(point, wish)


def _dark_miss(point: OperatingPoint, wish: Wish) -> list[tuple[str, float]]:
    if wish.dark_current_A is None:
        return []
    dark = point.dark_current_A
    if dark is None:
        return [("dark current not known here", 5.0)]
    highest = dark.hi95 if dark.value is None or dark.u is None else dark.value + ONE_SIDED_95 * dark.u
    if highest is None:
        return [("dark current not known here", 5.0)]
    if highest <= wish.dark_current_A:
        return []
    return [(f"dark current up to {format_quantity(highest, 'A')}", math.log(highest / wish.dark_current_A))]


def _value(estimate: Estimate | None) -> float:
    return 0.0 if estimate is None or estimate.value is None else estimate.value
