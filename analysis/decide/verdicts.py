"""Verdicts against limits: pass, fail, or undecided where the uncertainty reaches over the limit."""

from __future__ import annotations

import math
from collections.abc import Sequence

import numpy as np
from scipy import stats

from darkedge.analysis.captures import Kind
from darkedge.analysis.columns import ALL_QUANTITIES, CONDITIONS
from darkedge.analysis.decide.results import DeviceVerdict, Limit, Limits, LimitVerdict, Rule, Screening, Verdict
from darkedge.analysis.errors import LimitError
from darkedge.analysis.lot.verdict import lot_verdicts
from darkedge.analysis.measurement import Estimate, Measurement
from darkedge.analysis.quantities import format_quantity, unit_of
from darkedge.analysis.uncertainty import coverage_factor

_BOUND_CONFIDENCE = 0.95
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
    if estimate.u == 0.0:
        return float(_inside(estimate.value, limit))
    below = 1.0 if limit.upper is None else float(stats.norm.cdf((limit.upper - estimate.value) / estimate.u))
    under = 0.0 if limit.lower is None else float(stats.norm.cdf((limit.lower - estimate.value) / estimate.u))
    return max(0.0, below - under)


def judge(estimate: Estimate, limit: Limit, *, rule: Rule, confidence: float) -> Verdict:
    """Hold one estimate against one limit.

    Simple: by the value alone. Guarded: pass where the probability of conforming is at least `confidence`, fail where that of not
    conforming is, else undecided. A bound alone decides only where it clears the limit, at 95 % confidence.

    References
    ----------
    JCGM 106:2012, 8.2 (simple acceptance) and 8.3 (guard bands); ISO 14253-1 (both sides proven).
    """
    probability = conformity_probability(estimate, limit)
    if probability is None:
        return _by_bound(estimate, limit, confidence)
    assert estimate.value is not None
    if rule is Rule.SIMPLE:
        return Verdict.PASS if _inside(estimate.value, limit) else Verdict.FAIL
    if probability >= confidence:
        return Verdict.PASS
    return Verdict.FAIL if 1 - probability >= confidence else Verdict.UNDECIDED


def screen(measurements: Sequence[Measurement], limits: Limits) -> Screening:
    """Hold every device and element against every limit.

    A limit applies to the rows whose conditions are those under `when`: numbers within `tolerance_ratio`, words equal; a row that
    lacks the condition does not match. Rows that match and agree in all other conditions are repeats: their mean
    is judged, with the larger of their uncertainty and that of their scatter. Rows that differ in conditions which the limit leaves open
    are judged each, and the worst counts. No matching row leaves the limit undecided, in words.

    Raises
    ------
    LimitError
        A limit on something that is no quantity of the measurement table, or without a bound.
    """
    for limit in limits.limits:
        if limit.quantity not in ALL_QUANTITIES or (limit.lower is None and limit.upper is None):
            raise LimitError("not a limit on a quantity", found=limit.quantity)
    devices = [_device_verdict(where, rows, limits) for where, rows in _devices(measurements).items()]
    if not devices:
        raise LimitError("no device was measured", wanted="captures of at least one device", mend="check the path")
    lots = lot_verdicts(devices)
    refused = any("refused" in m.flags for m in measurements)
    verdict = Verdict.worst([lot.verdict for lot in lots] + ([Verdict.UNDECIDED] if refused else []))
    return Screening(devices=tuple(devices), lots=lots, verdict=verdict, rule=limits.rule, confidence=limits.confidence)


def _inside(value: float, limit: Limit) -> bool:
    return (limit.lower is None or value >= limit.lower) and (limit.upper is None or value <= limit.upper)


def _by_bound(estimate: Estimate, limit: Limit, confidence: float) -> Verdict:
    low = -math.inf if estimate.lo95 is None else estimate.lo95
    high = math.inf if estimate.hi95 is None else estimate.hi95
    if (limit.upper is not None and low > limit.upper) or (limit.lower is not None and high < limit.lower):
        return Verdict.FAIL if confidence <= _BOUND_CONFIDENCE else Verdict.UNDECIDED
    clears_upper = limit.upper is None or high <= limit.upper
    clears_lower = limit.lower is None or low >= limit.lower
    if clears_upper and clears_lower and confidence <= _BOUND_CONFIDENCE:
        return Verdict.PASS
    return Verdict.UNDECIDED


def _devices(measurements: Sequence[Measurement]) -> dict[Where, list[Measurement]]:
    groups: dict[Where, list[Measurement]] = {}
    for row in measurements:
        if "refused" in row.flags:
            continue
        groups.setdefault((row.conditions.lot, row.conditions.device, row.element), []).append(row)
    return groups


def _device_verdict(where: Where, rows: Sequence[Measurement], limits: Limits) -> DeviceVerdict:
    held = tuple(_limit_verdict(rows, limit, limits) for limit in limits.limits)
    return DeviceVerdict(
        lot=where[0],
        device=where[1],
        element=where[2],
        verdict=Verdict.worst([v.verdict for v in held]),
        limits=held,
    )


def _limit_verdict(rows: Sequence[Measurement], limit: Limit, limits: Limits) -> LimitVerdict:
    wanted = Kind.DARK if limit.quantity == "dark_current_A" else None
    kinds = (Kind.DARK,) if wanted else (Kind.PULSE, None)
    matching = [row for row in rows if row.conditions.kind in kinds and _matches(row, limit)]
    if not matching:
        return LimitVerdict(
            limit=limit, verdict=Verdict.UNDECIDED, estimate=None, probability_conforming=None,
            reason=_nothing_measured(limit, "dark trace" if wanted else "pulse capture"),
        )  # fmt: skip
    each = [_judge_repeats(repeats, limit, limits) for repeats in _repeats(matching)]
    order = {Verdict.FAIL: 0, Verdict.UNDECIDED: 1, Verdict.PASS: 2}
    return min(
        each, key=lambda v: (order[v.verdict], 1.0 if v.probability_conforming is None else v.probability_conforming)
    )


def _judge_repeats(repeats: Sequence[Measurement], limit: Limit, limits: Limits) -> LimitVerdict:
    captures = tuple(row.capture for row in repeats)
    estimate = _mean(repeats, limit.quantity)
    if estimate is None:
        flags = sorted({flag for row in repeats for flag in row.flags})
        reason = f"not measured: {', '.join(flags)}" if flags else "the capture does not show this quantity"
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
    settings = [name for name in CONDITIONS if name != "temperature_degC"]
    for row in rows:
        key = tuple(getattr(row.conditions, name) for name in settings)
        groups.setdefault((*key, row.conditions.driven_element), []).append(row)
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


def _nothing_measured(limit: Limit, what: str) -> str:
    when = ", ".join(
        f"{key} = {value if isinstance(value, str) else format_quantity(value, unit_of(key).symbol)}"
        for key, value in limit.when.items()
    )
    return f"no {what}" + (f" at {when}" if when else "")


def _reason(verdict: Verdict, estimate: Estimate, probability: float | None, limit: Limit, limits: Limits) -> str:
    if verdict is Verdict.PASS:
        return ""
    if probability is None:
        return "only a bound is known, and it does not clear the limit"
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
    gap = format_quantity(abs(estimate.value - bound), unit_of(limit.quantity).symbol)
    return f"{'above' if above else 'below'} the limit by {gap}{share}"
