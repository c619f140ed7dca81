"""Verdicts of devices against limits: which captures count, and what the uncertainty leaves undecided."""

from dataclasses import replace

import pytest
from hypothesis import given
from hypothesis import strategies as st

from darkedge.analysis.captures import Conditions, Kind, Reference
from darkedge.analysis.decide.results import Limit, Limits, LimitVerdict, Rule, Screening, Verdict
from darkedge.analysis.decide.verdicts import conformity_probability, judge, screen
from darkedge.analysis.errors import LimitError
from darkedge.analysis.measurement import Estimate, Measurement

RISE = Limit(quantity="rise_time_s", upper=110e-9, when={"bias_V": 12.0, "load_ohm": 1e3})
GOODNESS = {Verdict.FAIL: 0, Verdict.UNDECIDED: 1, Verdict.PASS: 2}


def row(
    value: float | None = 90e-9, *, u: float = 1e-9, device: str | None = "a", element: int = 1, bias_V: float = 12.0,
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


def held(*rows: Measurement, rule: Rule = Rule.GUARDED, limit: Limit = RISE) -> LimitVerdict:
    return screen(rows, Limits(limits=(limit,), rule=rule)).devices[0].limits[0]


@pytest.mark.parametrize(
    ("z", "probability"), [(0.842, 0.80), (1.282, 0.90), (1.645, 0.95), (2.326, 0.99), (3.090, 0.999)]
)
def test_one_sided_probability_of_conforming(z: float, probability: float) -> None:
    """Source: JCGM 106:2012, table 1 (printed to two or three digits; from memory, recomputed as the normal integral)."""
    found = conformity_probability(Estimate(value=-z, u=1.0), Limit(quantity="low_V", upper=0.0))
    assert found == pytest.approx(probability, abs=5e-4)


def test_breakdown_voltage_near_its_limit_conforms_with_92_per_cent() -> None:
    """-5.47 V with u 0.05 V against at most -5.40 V: Phi(1.4) = 0.9192. Source: JCGM 106:2012, 7.3, the Zener diode (from memory, recomputed)."""
    found = conformity_probability(Estimate(value=-5.47, u=0.05), Limit(quantity="low_V", upper=-5.40))
    assert found == pytest.approx(0.9192, abs=5e-5)


@pytest.mark.parametrize("away", [-3.0, -1.0, 0.0, 0.4, 2.0])
def test_both_sides_of_a_limit_add_up_to_certainty(away: float) -> None:
    """What does not conform to "at most" conforms to "at least"."""
    estimate = Estimate(value=away, u=0.7)
    below = conformity_probability(estimate, Limit(quantity="low_V", upper=0.0))
    above = conformity_probability(estimate, Limit(quantity="low_V", lower=0.0))
    assert below + above == pytest.approx(1.0)


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


values = st.builds(Estimate, value=st.floats(-10, 10), u=st.floats(0, 5))
upper_bounds = st.builds(Estimate, hi95=st.floats(-10, 10))
lower_bounds = st.builds(Estimate, lo95=st.floats(-10, 10))
estimates = values | upper_bounds | lower_bounds
confidences = st.floats(0.51, 0.999)


@given(
    estimate=estimates, lower=st.floats(-9, 9) | st.none(), room=st.floats(1e-3, 9), tighter=st.floats(0, 1), lift=st.floats(0, 1),
    rule=st.sampled_from(Rule), confidence=confidences,
)  # fmt: skip
def test_a_tighter_limit_never_improves_a_verdict(
    estimate: Estimate, lower: float | None, room: float, tighter: float, lift: float, rule: Rule, confidence: float
) -> None:
    upper = room if lower is None else lower + room
    wide = Limit(quantity="low_V", lower=lower, upper=upper)
    narrow = Limit(
        quantity="low_V",
        lower=None if lower is None else lower + 0.4 * lift * room,
        upper=upper - 0.4 * tighter * room,
    )
    was = judge(estimate, wide, rule=rule, confidence=confidence)
    becomes = judge(estimate, narrow, rule=rule, confidence=confidence)
    assert GOODNESS[becomes] <= GOODNESS[was]


@given(estimate=estimates, upper=st.floats(-9, 9), confidence=confidences, more=st.floats(0, 1))
def test_more_confidence_wanted_decides_no_more(
    estimate: Estimate, upper: float, confidence: float, more: float
) -> None:
    limit = Limit(quantity="low_V", upper=upper)
    stricter = confidence + more * (0.999 - confidence)
    asked = judge(estimate, limit, rule=Rule.GUARDED, confidence=confidence)
    assert judge(estimate, limit, rule=Rule.GUARDED, confidence=stricter) in (asked, Verdict.UNDECIDED)


@given(value=st.floats(-10, 10), u=st.floats(0, 5), upper=st.floats(-9, 9), confidence=confidences)
def test_what_the_guarded_rule_decides_the_simple_rule_decides_alike(
    value: float, u: float, upper: float, confidence: float
) -> None:
    estimate, limit = Estimate(value=value, u=u), Limit(quantity="low_V", upper=upper)
    guarded = judge(estimate, limit, rule=Rule.GUARDED, confidence=confidence)
    assert guarded in (judge(estimate, limit, rule=Rule.SIMPLE, confidence=confidence), Verdict.UNDECIDED)


def test_a_measurement_too_rough_for_its_limits_fails_nothing() -> None:
    """In the middle of limits a tenth of u apart it conforms with 4 %, and yet proves nothing. Source: ISO 14253-1, non-conformity is outside limits widened by U."""
    limit = Limit(quantity="low_V", lower=-0.05, upper=0.05)
    assert judge(Estimate(value=0.0, u=1.0), limit, rule=Rule.GUARDED, confidence=0.95) is Verdict.UNDECIDED


@pytest.mark.parametrize(
    ("bound", "rule", "confidence", "verdict"),
    [
        (Estimate(hi95=1e-11), Rule.GUARDED, 0.95, Verdict.PASS), (Estimate(hi95=1e-8), Rule.GUARDED, 0.95, Verdict.UNDECIDED),
        (Estimate(hi95=1e-11), Rule.GUARDED, 0.99, Verdict.UNDECIDED), (Estimate(hi95=1e-11), Rule.SIMPLE, 0.99, Verdict.PASS),
        (Estimate(lo95=1e-8), Rule.GUARDED, 0.95, Verdict.FAIL), (Estimate(lo95=1e-11), Rule.GUARDED, 0.95, Verdict.UNDECIDED),
    ],
)  # fmt: skip
def test_a_bound_decides_only_where_it_clears_the_limit_or_lies_beyond_it(
    bound: Estimate, rule: Rule, confidence: float, verdict: Verdict
) -> None:
    """A bound holds with 95 %: more confidence than that it cannot give."""
    limit = Limit(quantity="dark_current_A", upper=5e-9)
    assert judge(bound, limit, rule=rule, confidence=confidence) is verdict


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


@pytest.mark.parametrize("condition", ["reference", "temperature_degC"])
def test_captures_at_another_reference_or_temperature_are_not_repeats(condition: str) -> None:
    """A delay from the current is not one from the voltage, and 70 °C is not 25 °C."""
    pair = {"reference": (Reference.VOLTAGE, Reference.CURRENT), "temperature_degC": (25.0, 70.0)}[condition]
    rows = [
        replace(row(value), conditions=replace(row().conditions, **{condition: at}))
        for value, at in zip((90e-9, 150e-9), pair, strict=True)
    ]
    assert held(*rows).estimate == Estimate(value=150e-9, u=1e-9)


def test_captures_that_name_no_device_may_be_of_several_and_are_not_averaged() -> None:
    unnamed = [row(90e-9, device=None, name="1"), row(150e-9, device=None, name="2")]
    found = held(*unnamed)
    assert (found.verdict, found.captures) == (Verdict.FAIL, ("2",))


def test_rows_that_do_not_state_a_condition_do_not_match_and_that_is_said() -> None:
    silent = replace(row(), conditions=replace(row().conditions, bias_V=None))
    assert held(silent).reason == "no pulse capture at bias_V = 12 V, load_ohm = 1 kΩ; one does not state bias_V"


@pytest.mark.parametrize("kind", [Kind.OFFSET, Kind.REFERENCE])
def test_offset_and_reference_captures_are_of_no_device(kind: Kind) -> None:
    other = Measurement(capture="o", element=1, conditions=Conditions(kind=kind, device="fast detector", lot="L"))
    assert [d.device for d in screen([row(), other], Limits(limits=(RISE,))).devices] == ["a"]


def test_the_dark_current_comes_from_dark_traces_and_the_edges_from_pulses() -> None:
    dark = Measurement(
        capture="dark",
        element=1,
        conditions=Conditions(kind=Kind.DARK, lot="L", device="a", bias_V=12.0, load_ohm=1e3),
        quantities={"dark_current_A": Estimate(value=1e-9, u=1e-11)},
    )
    limits = (RISE, Limit(quantity="dark_current_A", upper=5e-9))
    first, second = screen([row(), dark], Limits(limits=limits)).devices[0].limits
    assert (first.captures, second.captures) == (("x.csv",), ("dark",))


def test_a_device_passes_a_limit_only_where_all_its_limits_do() -> None:
    slow_fall = Limit(quantity="fall_time_s", upper=1e-9)
    found = screen([row()], Limits(limits=(RISE, slow_fall))).devices[0]
    assert [v.verdict for v in found.limits] == [Verdict.PASS, Verdict.UNDECIDED]
    assert found.verdict is Verdict.UNDECIDED
    assert found.limits[1].reason == "the capture does not show this quantity"


def with_refused(*rows: Measurement) -> Screening:
    bad = Measurement(capture="run/bad.csv", element=None, conditions=Conditions(), flags=("refused",))
    return screen([*rows, bad], Limits(limits=(RISE,)))


def test_a_refused_file_keeps_the_whole_from_passing_and_is_named_beside_its_device() -> None:
    assert with_refused(row()).verdict is Verdict.UNDECIDED
    missing = with_refused(row(bias_V=5.0, name="run/good.csv")).devices[0].limits[0]
    assert missing.reason.endswith("; 1 file beside it was refused")


def test_nothing_measured_is_an_error_not_a_pass() -> None:
    with pytest.raises(LimitError, match="no device was measured"):
        screen([], Limits(limits=(RISE,)))


@pytest.mark.parametrize(
    ("limit", "words"),
    [
        (Limit(quantity="rise_time", upper=1.0), "not a quantity of the measurement table; found 'rise_time'"),
        (Limit(quantity="rise_time_s"), "rise_time_s: a limit without a bound; wanted lower, upper, or both"),
        (Limit(quantity="rise_time_s", lower=2.0, upper=1.0), "rise_time_s: lower is not below upper; found 2 and 1"),
        (Limit(quantity="rise_time_s", upper=1.0, when={"bias": 5.0}), "rise_time_s, when: not a condition; found 'bias'; wanted bias_V"),
        (Limit(quantity="rise_time_s", upper=1.0, when={"bias_V": "5 V"}), "bias_V has the wrong kind of value; found '5 V'; wanted a number in V"),
        (Limit(quantity="rise_time_s", upper=1.0, when={"lot": 5.0}), "lot has the wrong kind of value; found 5.0; wanted a word"),
    ],
)  # fmt: skip
def test_a_limit_that_nothing_can_be_held_against_is_refused(limit: Limit, words: str) -> None:
    with pytest.raises(LimitError, match=words):
        screen([row()], Limits(limits=(limit,)))


@pytest.mark.parametrize("confidence", [0.5, 1.0, 0.0, 95.0])
def test_a_confidence_is_between_a_half_and_one(confidence: float) -> None:
    with pytest.raises(LimitError, match=r"confidence is not between 0.5 and 1; found .*; wanted such as 0.95"):
        screen([row()], Limits(limits=(RISE,), confidence=confidence))
