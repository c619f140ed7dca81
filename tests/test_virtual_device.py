"""The device behind the virtual instruments obeys its circuit."""

import math

import numpy as np
import pytest

from darkedge.instruments.virtual.equations import Answer, respond, rest
from darkedge.instruments.virtual.parts import Element, Emitter, Junction, Socket, Train, Transistor

FAST = Emitter(delay_s=0.0, on_s=1e-11, off_s=1e-11)
PULSE = Train(high_A=5e-3, width_s=10e-6, period_s=100e-6)
SWITCHING = Train(high_A=5e-3, width_s=100e-6, period_s=1e-3)
DIODE = Junction(c_j0_F=100e-12, v_bi_V=0.65, grading=0.42, coupling_ratio=2e-4, transit_s=1e-11)


def rise_time_s(answer: Answer, width_s: float) -> float:
    lit = answer.time_s <= width_s
    start, top = answer.output_V[0], answer.output_at(np.array([width_s * 0.999]))[0]
    crossings = np.interp(
        [start + 0.1 * (top - start), start + 0.9 * (top - start)], answer.output_V[lit], answer.time_s[lit]
    )
    return float(crossings[1] - crossings[0])


def switched(transistors: tuple[Transistor, ...], *, high_A: float = 5e-3) -> Answer:
    junction = Junction(c_j0_F=30e-12, v_bi_V=0.65, grading=0.42, coupling_ratio=2e-3)
    element = Element(junction=junction, transistors=transistors)
    train = Train(high_A=high_A, width_s=SWITCHING.width_s, period_s=SWITCHING.period_s)
    return respond(element, train, Socket(bias_V=5, load_ohm=2200, connection="pull_up"))


def test_a_constant_capacitance_charges_as_one_pole() -> None:
    """10-90 % is RC ln 9 where the capacitance does not move. Source: solution of RC v' + v = RI."""
    junction = Junction(c_j0_F=100e-12, v_bi_V=0.65, grading=0.0, transit_s=1e-11)
    socket = Socket(bias_V=12, load_ohm=1000, stray_F=0.0)
    answer = respond(Element(junction=junction, emitter=FAST), PULSE, socket)
    expected = socket.load_ohm * 1e6 / (socket.load_ohm + 1e6) * 100e-12 * math.log(9)
    assert rise_time_s(answer, 10e-6) == pytest.approx(expected, rel=2e-3)  # interpolation of the drawn steps


def test_more_reverse_bias_is_faster_by_the_capacitance_ratio() -> None:
    """Common practice, no source: 12 V beats 5 V. In the small-signal limit the ratio is that of C(V)."""
    times = [
        rise_time_s(
            respond(Element(junction=DIODE, emitter=FAST), PULSE, Socket(bias_V=v, load_ohm=1e3, stray_F=0)), 1e-5
        )
        for v in (5, 12)
    ]
    assert times[1] / times[0] == pytest.approx(((1 + 12 / 0.65) / (1 + 5 / 0.65)) ** -0.42, rel=5e-3)


def test_beyond_full_depletion_more_bias_no_longer_helps() -> None:
    """Common practice, no source."""
    pin = Junction(c_j0_F=100e-12, v_bi_V=0.65, grading=0.42, full_depletion_V=9, coupling_ratio=2e-4, transit_s=1e-11)
    times = [
        rise_time_s(respond(Element(junction=pin, emitter=FAST), PULSE, Socket(bias_V=v, load_ohm=1e3)), 1e-5)
        for v in (12, 25)
    ]
    assert times[0] == pytest.approx(times[1], rel=2e-3)


def test_a_charge_that_went_in_comes_out() -> None:
    """The integral of the load's current over a period is the charge of the light. Source: conservation of charge."""
    junction = Junction(
        c_j0_F=100e-12, v_bi_V=0.65, grading=0.42, coupling_ratio=2e-3, saturation_A=0, generation_A=0, shunt_ohm=1e15
    )
    socket = Socket(bias_V=12, load_ohm=1000)
    answer = respond(Element(junction=junction), PULSE, socket)
    out = np.trapezoid(answer.output_V, answer.time_s) * (1 / socket.load_ohm + 1 / socket.input_ohm)
    light = np.trapezoid(answer.light_A, answer.time_s) * junction.coupling_ratio
    assert out == pytest.approx(light, rel=2e-3)


def test_a_saturated_switch_stores_charge_and_more_overdrive_stores_more() -> None:
    """Common practice, no source: turn-off waits longer the harder the switch was driven."""
    waits = []
    for high_A in (5e-3, 10e-3):
        answer = switched((Transistor(),), high_A=high_A)
        grid = np.linspace(100e-6, 150e-6, 50001)
        waits.append(grid[np.argmax(answer.output_at(grid) > 2.5)] - 100e-6)
    assert 0 < waits[0] < waits[1]


def test_a_compound_pair_is_held_on_by_dark_current_and_one_transistor_is_not() -> None:
    """Common practice, no source: dark current times a gain of some ten thousand keeps the output low."""
    junction = Junction(c_j0_F=30e-12, v_bi_V=0.65, grading=0.42, generation_A=3e-9)
    socket = Socket(bias_V=5, load_ohm=1e4, connection="pull_up", temperature_degC=70)
    pair = (Transistor(base_resistor_ohm=1e9), Transistor(gain=150, base_resistor_ohm=1e8))
    assert rest(Element(junction=junction, transistors=pair), socket) < 1.0
    assert rest(Element(junction=junction, transistors=(Transistor(),)), socket) > 4.5


def test_a_part_in_the_wrong_way_round_conducts() -> None:
    reversed_part = Junction(c_j0_F=100e-12, v_bi_V=0.65, grading=0.42, reversed_in_socket=True)
    assert rest(Element(junction=reversed_part), Socket(bias_V=5, load_ohm=1000)) > 4.0


def test_dark_current_grows_with_bias_and_with_heat() -> None:
    cold, biased, hot = DIODE.dark_A(1.0), DIODE.dark_A(10.0), DIODE.dark_A(1.0, 60.0)
    assert 0 < cold < biased
    assert cold < hot
