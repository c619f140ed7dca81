"""Verdicts against limits: pass, fail, or undecided where the uncertainty reaches over the limit."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import replace

import numpy as np
from scipy import stats

from darkedge.analysis.captures import Kind
from darkedge.analysis.columns import ALL_QUANTITIES, CONDITIONS, DEVICE
from darkedge.analysis.decide.results import DeviceVerdict, Limit, Limits, LimitVerdict, Rule, Screening, Verdict
from darkedge.analysis.errors import LimitError
from darkedge.analysis.lot.verdict import lot_verdicts
from darkedge.analysis.measurement import Estimate, Measurement
from darkedge.analysis.quantities import format_quantity, unit_of
from darkedge.analysis.uncertainty import coverage_factor

_BOUND_CONFIDENCE = 0.95
_NUMBERS = (*CONDITIONS, "element", "driven_element")
_WORDS = ("run", "kind", "device", "lot", "reference", *DEVICE)
TEN_NINETY_WORDS = "10/50/90 %"
_SAME_TEMPERATURE_K = 5.0
Where = tuple[str | None, str | None, int | None]


def conformity_probability(estimate: Estimate, limit: Limit) -> float | None:
    """Probability that the true value lies within the limit; `None` where only a bound is known.

    The measured quantity is taken as normal about its estimate with its standard uncertainty.

    References
    ----------
    JCGM 106:2012, 7.2 to 7.4: conformity with one-sided and two-sided tolerance intervals.
    """
    if estimate.value is None or estimate.u is None:
        return None
    below, above = _outside(estimate.value, estimate.u, limit)
    return max(0.0, 1.0 - below - above)


def judge(estimate: Estimate, limit: Limit, *, rule: Rule, confidence: float) -> Verdict:
    """Hold one estimate against one limit.

    Simple: by the value alone. Guarded: pass where the probability of conforming is at least `confidence`, fail where that of
    lying beyond one of the limits is, else undecided (so a measurement too rough for a narrow pair of limits fails nothing). A
    bound alone decides only where it clears the limit, or lies beyond it; guarded at up to 95 % confidence, which is that of the bound.

    References
    ----------
    JCGM 106:2012, 8.2 (simple acceptance) and 8.3 (guard bands); ISO 14253-1 (both sides proven).
    """
    probability = conformity_probability(estimate, limit)
    if probability is None:
        return (
            _by_bound(estimate, limit) if rule is Rule.SIMPLE or confidence <= _BOUND_CONFIDENCE else Verdict.UNDECIDED
        )
    assert estimate.value is not None
    assert estimate.u is not None
    if rule is Rule.SIMPLE:
        return Verdict.PASS if _inside(estimate.value, limit) else Verdict.FAIL
    if probability >= confidence:
        return Verdict.PASS
    return Verdict.FAIL if max(_outside(estimate.value, estimate.u, limit)) >= confidence else Verdict.UNDECIDED


def screen(measurements: Sequence[Measurement], limits: Limits) -> Screening:
    """Hold every device and element against every limit.

    A limit applies to the rows whose conditions are those under `when`: numbers within `tolerance_ratio`, words equal; a row that
    lacks the condition does not match, and offset and reference captures never do. Rows that match and agree in all other conditions
    (temperature to about 5 K) are repeats; of several captures of one point the one that tells the quantity best stands for it: their mean is judged, with the larger of their uncertainty and that of their scatter. Rows that differ in
    conditions which the limit leaves open, and rows that name no device (they may be of several), are judged each, and the
    worst counts. No matching row leaves the limit undecided, in words; so does a quantity that could not be had. A refused
    file keeps the whole from passing.

    Raises
    ------
    LimitError
        A limit on something that is no quantity of the measurement table, under something that is no condition, or without
        bounds that leave room; a confidence not between 0.5 and 1; no device at all.

    References
    ----------
    JCGM 106:2012, 8; JCGM 100:2008, 4.2.3 and G.3 for the mean of repeats.
    """
    _check(limits)
    devices = [_device_verdict(where, rows, limits, measurements) for where, rows in _devices(measurements).items()]
    if not devices:
        raise LimitError("no device was measured", wanted="captures of at least one device", mend="check the path")
    lots = lot_verdicts(devices)
    refused = any("refused" in m.flags for m in measurements)
    verdict = Verdict.worst([lot.verdict for lot in lots] + ([Verdict.UNDECIDED] if refused else []))
    return Screening(devices=tuple(devices), lots=lots, verdict=verdict, rule=limits.rule, confidence=limits.confidence)


def _check(limits: Limits) -> None:
    if not 0.5 < limits.confidence < 1:
        raise LimitError("confidence is not between 0.5 and 1", found=f"{limits.confidence:g}", wanted="such as 0.95")
    for limit in limits.limits:
        if limit.quantity not in ALL_QUANTITIES:
            raise LimitError("not a quantity of the measurement table", found=repr(limit.quantity))
        low, high = limit.lower, limit.upper
        if low is None and high is None:
            raise LimitError("a limit without a bound", where=limit.quantity, wanted="lower, upper, or both")
        if low is not None and high is not None and not low < high:
            raise LimitError("lower is not below upper", where=limit.quantity, found=f"{low:g} and {high:g}")
        for key, wanted in limit.when.items():
            _check_condition(limit.quantity, key, wanted)


def _check_condition(quantity: str, key: str, wanted: float | str) -> None:
    where = f"{quantity}, when"
    if key not in _NUMBERS + _WORDS:
        raise LimitError("not a condition", where=where, found=repr(key), wanted=", ".join(_NUMBERS + _WORDS))
    if isinstance(wanted, str) != (key in _WORDS):
        kind = "a word" if key in _WORDS else f"a number in {unit_of(key).symbol}".rstrip()
        raise LimitError(f"{key} has the wrong kind of value", where=where, found=repr(wanted), wanted=kind)


def _inside(value: float, limit: Limit) -> bool:
    return (limit.lower is None or value >= limit.lower) and (limit.upper is None or value <= limit.upper)


def _outside(value: float, u: float, limit: Limit) -> tuple[float, float]:
    """Probabilities of lying below the lower and above the upper limit."""
    if u == 0.0:
        return float(limit.lower is not None and value < limit.lower), float(
            limit.upper is not None and value > limit.upper
        )
    below = 0.0 if limit.lower is None else float(stats.norm.cdf((limit.lower - value) / u))
    above = 0.0 if limit.upper is None else float(stats.norm.cdf((value - limit.upper) / u))
    return below, above


def _by_bound(estimate: Estimate, limit: Limit) -> Verdict:
    low = -math.inf if estimate.lo95 is None else estimate.lo95
    high = math.inf if estimate.hi95 is None else estimate.hi95
    if (limit.upper is not None and low > limit.upper) or (limit.lower is not None and high < limit.lower):
        return Verdict.FAIL
    clears_upper = limit.upper is None or high <= limit.upper
    clears_lower = limit.lower is None or low >= limit.lower
    return Verdict.PASS if clears_upper and clears_lower else Verdict.UNDECIDED


def _devices(measurements: Sequence[Measurement]) -> dict[Where, list[Measurement]]:
    groups: dict[Where, list[Measurement]] = {}
    for row in measurements:
        if "refused" in row.flags or row.conditions.kind in (Kind.OFFSET, Kind.REFERENCE):
            continue
        groups.setdefault((row.conditions.lot, row.conditions.device, row.element), []).append(row)
    return groups


def _device_verdict(
    where: Where, rows: Sequence[Measurement], limits: Limits, everything: Sequence[Measurement]
) -> DeviceVerdict:
    folders = {_folder(row) for row in rows}
    refused = sum("refused" in row.flags and _folder(row) in folders for row in everything)
    held = tuple(_limit_verdict(rows, limit, limits, refused) for limit in limits.limits)
    return DeviceVerdict(
        lot=where[0],
        device=where[1],
        element=where[2],
        verdict=Verdict.worst([v.verdict for v in held]),
        limits=held,
    )


def _folder(row: Measurement) -> str:
    return row.capture.rpartition("/")[0]


def _limit_verdict(rows: Sequence[Measurement], limit: Limit, limits: Limits, refused: int) -> LimitVerdict:
    of_kind = [row for row in rows if _shows(row, limit.quantity)]
    matching = [row for row in of_kind if _matches(row, limit)]
    if not matching:
        reason = _nothing_measured(limit, of_kind)
        if refused:
            reason += (
                f"; {refused} file{'s' if refused > 1 else ''} beside it {'were' if refused > 1 else 'was'} refused"
            )
        return LimitVerdict(
            limit=limit, verdict=Verdict.UNDECIDED, estimate=None, probability_conforming=None, reason=reason
        )
    if (other := _other_levels(matching, limit)) is not None:
        return LimitVerdict(
            limit=limit, verdict=Verdict.UNDECIDED, estimate=None, probability_conforming=None,
            reason=f"timed between other levels than the limit's 10 and 90 %: {other}",
        )  # fmt: skip
    each = [_judge_repeats(repeats, limit, limits) for repeats in _repeats(matching)]
    each = [_without_settling(verdict, limit, matching) for verdict in each]
    order = {Verdict.FAIL: 0, Verdict.UNDECIDED: 1, Verdict.PASS: 2}
    return min(
        each, key=lambda v: (order[v.verdict], 1.0 if v.probability_conforming is None else v.probability_conforming)
    )


def _without_settling(verdict: LimitVerdict, limit: Limit, rows: Sequence[Measurement]) -> LimitVerdict:
    """An edge of a pulse that never settles is timed against its peak, which a limit on the settled edge does not mean."""
    if verdict.verdict is not Verdict.PASS or limit.quantity not in ("rise_time_s", "fall_time_s", "amplitude_V"):
        return verdict
    judged = [row for row in rows if row.capture in verdict.captures]
    if not any("never_settles" in row.flags for row in judged):
        return verdict
    return replace(
        verdict, verdict=Verdict.UNDECIDED,
        reason="the pulse never settles: the edge was timed against its peak; lengthen the pulse, or limit under pulse_width_s",
    )  # fmt: skip


def _other_levels(rows: Sequence[Measurement], limit: Limit) -> str | None:
    """The words of other outer levels than 10 and 90 %, between which a limited edge was timed; `None` where there are none."""
    if limit.quantity not in ("rise_time_s", "fall_time_s"):
        return None
    return next(
        (
            row.levels
            for row in rows
            if row.levels and row.levels.startswith("histogram") and TEN_NINETY_WORDS not in row.levels
        ),
        None,
    )


def _shows(row: Measurement, quantity: str) -> bool:
    """Whether a row is of the kind that can carry a quantity: a dark trace for the dark current, a pulse for all others."""
    if quantity == "dark_current_A":
        return row.conditions.kind is Kind.DARK or quantity in row.quantities
    return row.conditions.kind in (Kind.PULSE, None)


def _judge_repeats(repeats: Sequence[Measurement], limit: Limit, limits: Limits) -> LimitVerdict:
    repeats = _best_of_each_point(repeats, limit.quantity)
    captures = tuple(row.capture for row in repeats)
    estimate = _mean(repeats, limit.quantity)
    if estimate is None:
        flags = sorted({flag for row in repeats if limit.quantity not in row.quantities for flag in row.flags})
        reason = (
            f"not measured: {', '.join(flag.replace('_', ' ') for flag in flags)}"
            if flags
            else "the capture does not show this quantity"
        )
        return LimitVerdict(
            limit=limit, verdict=Verdict.UNDECIDED, estimate=None, probability_conforming=None, captures=captures,
            reason=reason,
        )  # fmt: skip
    verdict = judge(estimate, limit, rule=limits.rule, confidence=limits.confidence)
    probability = conformity_probability(estimate, limit)
    return LimitVerdict(
        limit=limit, verdict=verdict, estimate=estimate, probability_conforming=probability, captures=captures,
        reason=_reason(verdict, estimate, probability, limit, limits),
    )  # fmt: skip


def _best_of_each_point(rows: Sequence[Measurement], quantity: str) -> list[Measurement]:
    """One row for each point of a run: where a point has captures of the whole pulse and of its edges, that which tells best.

    A capture of one edge does not show the other one, and is no reason to call it missing. Captures that do not say their
    point stand for themselves.
    """
    found: dict[tuple[object, ...], Measurement] = {}
    for row in rows:
        known = row.conditions
        key: tuple[object, ...] = (_folder(row), known.run, known.point) if known.point is not None else (row.capture,)
        if key not in found or _roughness(row, quantity) < _roughness(found[key], quantity):
            found[key] = row
    return list(found.values())


def _roughness(row: Measurement, quantity: str) -> tuple[int, float]:
    """Order of rows by how well they tell a quantity: a value by its uncertainty, then a bound, then nothing."""
    estimate = row.quantities.get(quantity)
    if estimate is None:
        return 2, 0.0
    return (1, 0.0) if estimate.u is None else (0, estimate.u)


def _matches(row: Measurement, limit: Limit) -> bool:
    driven = row.conditions.driven_element
    if driven is not None and driven != row.element and "driven_element" not in limit.when:
        return False  # crosstalk: another element was driven
    for key, wanted in limit.when.items():
        found = row.element if key == "element" else getattr(row.conditions, key, None)
        if found is None:
            return False
        if isinstance(wanted, str):
            if str(found) != wanted:
                return False
        elif abs(float(found) - wanted) > limit.tolerance_ratio * abs(wanted) + 1e-12 * abs(wanted):
            return False
    return True


def _repeats(rows: Sequence[Measurement]) -> list[list[Measurement]]:
    """Rows grouped by all conditions that the bench sets; the temperature is not set, and varies a little."""
    groups: dict[tuple[object, ...], list[Measurement]] = {}
    settings = ("device", "driven_element", "reference", *(name for name in CONDITIONS if name != "temperature_degC"))
    for row in rows:
        known = row.conditions
        warm = None if known.temperature_degC is None else round(known.temperature_degC / _SAME_TEMPERATURE_K)
        alone = row.capture if known.device is None else None
        groups.setdefault((*(getattr(known, name) for name in settings), warm, alone), []).append(row)
    return list(groups.values())


def _mean(rows: Sequence[Measurement], quantity: str) -> Estimate | None:
    """Mean of repeats; a bound where one of them is a bound; `None` where one of them has nothing."""
    found = [row.quantities.get(quantity) for row in rows]
    present = [estimate for estimate in found if estimate is not None]
    if len(present) < len(found):
        return None
    values = [(e.value, e.u) for e in present if e.value is not None and e.u is not None]
    if len(values) < len(present):
        return _joint_bound(present)
    numbers, us = np.array([v for v, _ in values]), np.array([u for _, u in values])
    scatter = 0.0
    if len(numbers) > 1:
        # Few repeats tell the scatter badly: widened so that the normal 95 % interval is as wide as Student's.
        widening = coverage_factor(0.95, len(numbers) - 1) / coverage_factor(0.95, math.inf)
        scatter = widening * float(np.std(numbers, ddof=1)) / math.sqrt(len(numbers))
    return Estimate(value=float(numbers.mean()), u=max(float(us.mean()), scatter))


def _joint_bound(estimates: Sequence[Estimate]) -> Estimate | None:
    """The widest of bounds, each value counted with two-sided 95 %."""
    highs = [e.hi95 if e.value is None or e.u is None else e.value + 1.96 * e.u for e in estimates]
    lows = [e.lo95 if e.value is None or e.u is None else e.value - 1.96 * e.u for e in estimates]
    high = None if None in highs else max(h for h in highs if h is not None)
    low = None if None in lows else min(x for x in lows if x is not None)
    return None if high is None and low is None else Estimate(hi95=high, lo95=low)


def _nothing_measured(limit: Limit, rows: Sequence[Measurement]) -> str:
    what = "dark trace" if limit.quantity == "dark_current_A" else "pulse capture"
    when = ", ".join(
        f"{key} = {value if isinstance(value, str) else format_quantity(value, unit_of(key).symbol)}"
        for key, value in limit.when.items()
    )
    silent = [
        f"{count} do not state {key}" if count > 1 else f"one does not state {key}"
        for key in limit.when
        if key != "element" and (count := sum(getattr(row.conditions, key) is None for row in rows))
    ]
    return f"no {what}" + (f" at {when}" if when else "") + "".join(f"; {words}" for words in silent)


def _reason(verdict: Verdict, estimate: Estimate, probability: float | None, limit: Limit, limits: Limits) -> str:
    if verdict is Verdict.PASS:
        return ""
    if probability is None:
        beyond = verdict is Verdict.FAIL
        return (
            "all that is known, a 95 % bound, lies beyond the limit"
            if beyond
            else "only a bound is known, and it does not clear the limit"
        )
    if verdict is Verdict.UNDECIDED:
        return (
            f"the uncertainty reaches over the limit: conforms with {100 * probability:.1f} %, "
            f"wanted {100 * limits.confidence:g} %"
        )
    assert estimate.value is not None
    above = limit.upper is not None and estimate.value > limit.upper
    bound = limit.upper if above else limit.lower
    assert bound is not None
    share = f" ({100 * abs(estimate.value / bound - 1):.0f} %)" if bound else ""
    gap = format_quantity(float(f"{abs(estimate.value - bound):.2g}"), unit_of(limit.quantity).symbol)
    return f"{'above' if above else 'below'} the limit by {gap}{share}"
