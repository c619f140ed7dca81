"""Verdicts against limits, and how they add up to a lot."""

import pytest
from hypothesis import given
from hypothesis import strategies as st

from darkedge.analysis.captures import Conditions, Kind
from darkedge.analysis.decide.results import Limit, Limits, Rule, Verdict
from darkedge.analysis.decide.verdicts import conformity_probability, judge, screen
from darkedge.analysis.errors import LimitError
from darkedge.analysis.measurement import Estimate, Measurement

RISE = Limit(quantity="rise_time_s", upper=110e-9, when={"bias_V": 12.0, "load_ohm": 1e3})
GOODNESS = {Verdict.FAIL: 0, Verdict.UNDECIDED: 1, Verdict.PASS: 2}


def row(
    value: float | None = 90e-9, *, u: float = 1e-9, device: str = "a", element: int = 1, bias_V: float = 12.0,
    lot: str | None = "L", flags: tuple[str, ...] = (), width_s: float = 1e-6, driven: int | None = None, name: str = "x.csv",
) -> Measurement:  # fmt: skip
    return Measurement(
        capture=name,
        element=element,
        conditions=Conditions(
            kind=Kind.PULSE,
            lot=lot,
            device=device,
            bias_V=bias_V,
            load_ohm=1e3,
            pulse_width_s=width_s,
            driven_element=driven,
        ),
        quantities={} if value is None else {"rise_time_s": Estimate(value=value, u=u)},
        flags=flags,
    )


def held(*rows: Measurement, rule: Rule = Rule.GUARDED, limit: Limit = RISE) -> object:
    return screen(rows, Limits(limits=(limit,), rule=rule)).devices[0].limits[0]


@pytest.mark.parametrize(
    ("z", "probability"), [(0.842, 0.80), (1.282, 0.90), (1.645, 0.95), (2.326, 0.99), (3.090, 0.999)]
)
def test_one_sided_probability_of_conforming(z: float, probability: float) -> None:
    """Source: JCGM 106:2012, table 1 (printed to two or three digits; from memory, recomputed as the normal integral)."""
    found = conformity_probability(Estimate(value=-z, u=1.0), Limit(quantity="low_V", upper=0.0))
    assert found == pytest.approx(probability, abs=5e-4)


def test_two_sided_probability_takes_both_limits() -> None:
    """Source: JCGM 106:2012, 7.4: the integral between both limits; at 1 u either side 68.27 %."""
    limit = Limit(quantity="low_V", lower=-1.0, upper=1.0)
    assert conformity_probability(Estimate(value=0.0, u=1.0), limit) == pytest.approx(0.6827, abs=5e-5)


@pytest.mark.parametrize(("guard", "risk"), [(0.0, 0.50), (0.5, 0.1587), (0.83, 0.0485), (1.0, 0.0228)])
def test_risk_at_the_acceptance_limit_of_a_guard_band(guard: float, risk: float) -> None:
    """Source: ILAC-G8:09/2019, guard band w = r U with U = 2 u: false accept at most Phi(-2r)."""
    at_limit = Estimate(value=-guard * 2.0, u=1.0)
    assert 1 - conformity_probability(at_limit, Limit(quantity="low_V", upper=0.0)) == pytest.approx(risk, abs=5e-5)


@pytest.mark.parametrize(
    ("value", "guarded", "simple"),
    [
        (90e-9, Verdict.PASS, Verdict.PASS), (109e-9, Verdict.UNDECIDED, Verdict.PASS),
        (111e-9, Verdict.UNDECIDED, Verdict.FAIL), (120e-9, Verdict.FAIL, Verdict.FAIL),
    ],
)  # fmt: skip
def test_a_limit_inside_the_uncertainty_is_neither_pass_nor_fail(
    value: float, guarded: Verdict, simple: Verdict
) -> None:
    """Source: JCGM 106:2012, 8; ISO 14253-1."""
    assert held(row(value)).verdict is guarded
    assert held(row(value), rule=Rule.SIMPLE).verdict is simple


@given(
    value=st.floats(-10, 10), u=st.floats(0, 5), upper=st.floats(-9, 9), tighter=st.floats(0, 5),
    rule=st.sampled_from(Rule), confidence=st.floats(0.51, 0.999),
)  # fmt: skip
def test_a_tighter_limit_never_improves_a_verdict(
    value: float, u: float, upper: float, tighter: float, rule: Rule, confidence: float
) -> None:
    estimate = Estimate(value=value, u=u)
    wide = judge(estimate, Limit(quantity="low_V", upper=upper), rule=rule, confidence=confidence)
    narrow = judge(estimate, Limit(quantity="low_V", upper=upper - tighter), rule=rule, confidence=confidence)
    assert GOODNESS[narrow] <= GOODNESS[wide]


def test_a_bound_below_the_limit_passes_and_one_above_it_decides_nothing() -> None:
    limit = Limit(quantity="dark_current_A", upper=5e-9)
    assert judge(Estimate(hi95=1e-11), limit, rule=Rule.GUARDED, confidence=0.95) is Verdict.PASS
    assert judge(Estimate(hi95=1e-8), limit, rule=Rule.GUARDED, confidence=0.95) is Verdict.UNDECIDED
    assert judge(Estimate(hi95=1e-11), limit, rule=Rule.GUARDED, confidence=0.99) is Verdict.UNDECIDED


def test_a_limit_without_a_matching_capture_is_undecided_in_words() -> None:
    found = held(row(bias_V=5.0))
    assert found.verdict is Verdict.UNDECIDED
    assert found.reason == "no pulse capture at bias_V = 12 V, load_ohm = 1 kΩ"


def test_a_quantity_that_could_not_be_had_is_undecided_with_its_flags() -> None:
    found = held(row(None, flags=("clipped",)))
    assert (found.verdict, found.reason) == (Verdict.UNDECIDED, "not measured: clipped")


def test_conditions_match_within_the_stated_tolerance() -> None:
    assert held(row(bias_V=12.2)).verdict is Verdict.PASS
    assert held(row(bias_V=12.3)).verdict is Verdict.UNDECIDED


def test_repeats_are_averaged_and_their_scatter_counts() -> None:
    """Two repeats tell the scatter badly: Student's factor of one degree of freedom is 12.7 (JCGM 100:2008, table G.2)."""
    steady = held(row(100e-9, name="1"), row(100e-9, name="2")).estimate
    scattered = held(row(90e-9, name="1"), row(110e-9, name="2")).estimate
    assert steady.u == pytest.approx(1e-9)
    assert scattered.value == pytest.approx(100e-9)
    assert scattered.u == pytest.approx(10e-9 * 12.706 / 1.960, rel=1e-3)


def test_captures_that_differ_in_open_conditions_are_judged_each_and_the_worst_counts() -> None:
    found = held(row(90e-9, width_s=1e-6), row(150e-9, width_s=1e-5, name="slow.csv"))
    assert (found.verdict, found.captures) == (Verdict.FAIL, ("slow.csv",))


def test_crosstalk_captures_are_not_held_against_the_limits_of_the_element() -> None:
    assert held(row(90e-9, driven=1), row(None, driven=2, flags=("no_pulse",), name="y")).verdict is Verdict.PASS


def test_a_lot_fails_with_one_device_and_is_undecided_with_one_undecided() -> None:
    limits = Limits(limits=(RISE,))
    good, slow, near = row(device="a"), row(130e-9, device="b"), row(109.5e-9, device="c")
    assert screen([good, slow, near], limits).lots[0].verdict is Verdict.FAIL
    lot = screen([good, near], limits).lots[0]
    assert (lot.verdict, lot.passed, lot.undecided) == (Verdict.UNDECIDED, 1, 1)
    assert screen([good], limits).verdict is Verdict.PASS


def test_a_device_passes_only_with_all_its_elements() -> None:
    lot = screen([row(element=1), row(150e-9, element=2)], Limits(limits=(RISE,))).lots[0]
    assert (lot.passed, lot.failed) == (0, 1)


def test_a_refused_file_keeps_the_whole_from_passing() -> None:
    refused = Measurement(capture="bad.csv", element=None, conditions=Conditions(), flags=("refused",))
    assert screen([row(), refused], Limits(limits=(RISE,))).verdict is Verdict.UNDECIDED


def test_nothing_measured_is_an_error_not_a_pass() -> None:
    with pytest.raises(LimitError, match="no device was measured"):
        screen([], Limits(limits=(RISE,)))
