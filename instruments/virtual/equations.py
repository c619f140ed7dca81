"""The device's equations, integrated in time: light, carriers, node voltages and the charge of transistors.

Rise times and delays are whatever comes out; no formula of the analysis is used. Transistors are the charge-storing transport
model (Ebers and Moll's currents with the charges of both junctions), stamped node by node.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.integrate import solve_ivp

from darkedge.instruments.virtual.parts import THERMAL_V, Element, Socket, Train, Transistor

FloatArray = NDArray[np.float64]
_LIGHT, _PROMPT, _TAIL, _NODES = 0, 1, 2, 3
_MOST_PERIODS = 12


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Answer:
    """What an element does over one period in steady state, from the start of the pulse: output and light (as A)."""

    time_s: FloatArray
    output_V: FloatArray
    light_A: FloatArray
    period_s: float

    def output_at(self, time_s: FloatArray) -> FloatArray:
        """Output at any times, the period repeated."""
        values: FloatArray = np.interp(np.mod(time_s, self.period_s), self.time_s, self.output_V)
        return values

    def light_at(self, time_s: FloatArray) -> FloatArray:
        """Light at any times, the period repeated."""
        values: FloatArray = np.interp(np.mod(time_s, self.period_s), self.time_s, self.light_A)
        return values


@dataclass(frozen=True, slots=True, kw_only=True)
class _Circuit:
    """Nodes and what hangs on them: capacitors and currents as functions of the voltages.

    `slopes(voltages, diode_A)` gives the time derivatives of the free nodes.
    """

    free: int
    output: int
    start: tuple[float, ...]
    slopes: Callable[[FloatArray, float], FloatArray]


def respond(element: Element, train: Train, socket: Socket, *, light_ratio: float = 1.0) -> Answer:
    """Integrate one element through its pulses until a period repeats the one before.

    Parameters
    ----------
    element : Element
    train : Train
    socket : Socket
    light_ratio : float
        Share of the light that arrives: less than 1 for what leaks over from another element, 0 in the dark.

    Returns
    -------
    Answer
        The last period.
    """
    circuit = _circuit(element, socket)
    state = np.array([train.low_A, 0.0, 0.0, *circuit.start])
    scale = _scale(element, train, socket, circuit)
    state = _settle_in_the_dark(element, train, socket, circuit, state, scale, light_ratio)
    for _ in range(_MOST_PERIODS):
        answer, after = _period(element, train, socket, circuit, state, scale, light_ratio)
        repeats = bool(np.all(np.abs(after - state) < 2e-4 * scale))
        state = after
        if repeats:
            break
    return answer


def rest(element: Element, socket: Socket) -> float:
    """Output with no light, settled: what a dark trace shows."""
    train = Train(high_A=0.0, width_s=1e-6, period_s=1e-3)
    circuit = _circuit(element, socket)
    state = np.array([0.0, 0.0, 0.0, *circuit.start])
    scale = _scale(element, train, socket, circuit)
    settled = _settle_in_the_dark(element, train, socket, circuit, state, scale * 1e-3, 0.0)
    return float(settled[_NODES + circuit.output])


def _scale(element: Element, train: Train, socket: Socket, circuit: _Circuit) -> FloatArray:
    photo = max(element.junction.coupling_ratio * train.high_A, 1e-10)
    volts = min(max(photo * socket.load_ohm, 1e-4), max(socket.bias_V, 0.1)) if not element.transistors else 0.1
    return np.array([max(train.high_A, 1e-6), photo, photo, *[volts] * circuit.free])


def _settle_in_the_dark(
    element: Element,
    train: Train,
    socket: Socket,
    circuit: _Circuit,
    state: FloatArray,
    scale: FloatArray,
    ratio: float,
) -> FloatArray:
    slopes = _slopes(element, train, socket, circuit, train.low_A, ratio)
    slowest = max(1e-3, 20 * socket.load_ohm * (socket.stray_F + element.junction.c_j0_F))
    solution = solve_ivp(slopes, (0.0, 20 * slowest), state, method="LSODA", rtol=1e-7, atol=1e-6 * scale)
    settled: FloatArray = solution.y[:, -1]
    return settled


def _period(
    element: Element,
    train: Train,
    socket: Socket,
    circuit: _Circuit,
    state: FloatArray,
    scale: FloatArray,
    ratio: float,
) -> tuple[Answer, FloatArray]:
    """One period in pieces between the jumps of the delayed drive."""
    width, period = train.width_s, train.period_s
    delay = min(element.emitter.delay_s, 0.5 * (period - width))
    times, columns = [np.zeros(1)], [state[:, None]]
    for left, right, current in (
        (0.0, delay, train.low_A),
        (delay, width + delay, train.high_A),
        (width + delay, period, train.low_A),
    ):
        if right <= left:
            continue
        slopes = _slopes(element, train, socket, circuit, current, ratio)
        solution = solve_ivp(
            slopes, (left, right), state, method="LSODA", rtol=1e-6, atol=1e-6 * scale, dense_output=True
        )
        assert solution.sol is not None  # asked for by dense_output
        grid = _refined(solution.t)
        times.append(grid[1:])
        columns.append(solution.sol(grid[1:]))
        state = solution.y[:, -1]
    values = np.concatenate(columns, axis=1)
    answer = Answer(
        time_s=np.concatenate(times),
        output_V=values[_NODES + circuit.output],
        light_A=values[_LIGHT],
        period_s=period,
    )
    return answer, state


def _refined(steps: FloatArray) -> FloatArray:
    """The integrator's steps, each cut into four."""
    parts = np.linspace(steps[:-1], steps[1:], 4, endpoint=False).T.ravel()
    return np.append(parts, steps[-1])


def _slopes(
    element: Element, train: Train, socket: Socket, circuit: _Circuit, current_A: float, ratio: float
) -> Callable[[float, FloatArray], FloatArray]:
    emitter, junction = element.emitter, element.junction
    peak = max(train.high_A, train.low_A)
    on_s, off_s = emitter.lag_s(peak, rising=True), emitter.lag_s(peak, rising=False)
    coupling = junction.coupling_ratio * ratio
    tail_share = junction.tail_share(socket.bias_V)

    def slopes(_time: float, state: FloatArray) -> FloatArray:
        light = state[_LIGHT]
        arriving = coupling * light
        derivative = np.empty_like(state)
        derivative[_LIGHT] = (current_A - light) / (on_s if current_A > light else off_s)
        derivative[_PROMPT] = ((1.0 - tail_share) * arriving - state[_PROMPT]) / junction.transit_s
        derivative[_TAIL] = (tail_share * arriving - state[_TAIL]) / junction.tail_s
        derivative[_NODES:] = circuit.slopes(state[_NODES:], state[_PROMPT] + state[_TAIL])
        return derivative

    return slopes


def _circuit(element: Element, socket: Socket) -> _Circuit:
    if element.transistors:
        return _transistor_circuit(element, socket)
    return _diode_circuit(element, socket)


def _diode_circuit(element: Element, socket: Socket) -> _Circuit:
    """The diode from the bias rail into the load, or forward when it sits the wrong way round."""
    junction, sense = element.junction, -1.0 if element.junction.reversed_in_socket else 1.0
    conductance = 1.0 / socket.load_ohm + 1.0 / socket.input_ohm

    def slopes(volts: FloatArray, light_A: float) -> FloatArray:
        reverse = sense * (socket.bias_V - volts[0])
        current = sense * (light_A + junction.dark_A(reverse, socket.temperature_degC))
        capacitance = junction.capacitance_F(reverse) + socket.stray_F
        return np.array([(current - volts[0] * conductance) / capacitance])

    return _Circuit(free=1, output=0, start=(0.0,), slopes=slopes)


def _transistor_circuit(element: Element, socket: Socket) -> _Circuit:
    """The diode from the supply into the base; one transistor or a compound pair; pull-up or emitter resistor."""
    junction, transistors = element.junction, element.transistors
    bases = len(transistors)
    output = bases  # free nodes: the bases, then the output
    pull_up = socket.connection != "emitter_resistor"
    scope_share = 1.0 / socket.input_ohm

    def slopes(volts: FloatArray, light_A: float) -> FloatArray:
        matrix = np.zeros((bases + 1, bases + 1))
        inflow = np.zeros(bases + 1)
        matrix[output, output] += socket.stray_F
        supply = socket.bias_V
        if pull_up:
            inflow[output] = (supply - volts[output]) / socket.load_ohm - volts[output] * scope_share
        else:
            inflow[output] = -volts[output] / socket.load_ohm - volts[output] * scope_share
        reverse = supply - volts[0]
        inflow[0] += light_A + junction.dark_A(reverse, socket.temperature_degC)
        matrix[0, 0] += junction.capacitance_F(reverse)
        for index, transistor in enumerate(transistors):
            last = index == bases - 1
            emitter_node = index + 1 if not last else (None if pull_up else output)
            collector_node = output if pull_up else None
            emitter_V = 0.0 if emitter_node is None else float(volts[emitter_node])
            collector_V = float(volts[output]) if pull_up else supply
            _stamp(
                transistor, index, emitter_node, collector_node, float(volts[index]), emitter_V, collector_V,
                matrix, inflow,
            )  # fmt: skip
        return np.asarray(np.linalg.solve(matrix, inflow), dtype=np.float64)

    start = (*[0.0] * bases, socket.bias_V if pull_up else 0.0)
    return _Circuit(free=bases + 1, output=output, start=start, slopes=slopes)


def _stamp(
    transistor: Transistor,
    base: int,
    emitter: int | None,
    collector: int | None,
    base_V: float,
    emitter_V: float,
    collector_V: float,
    matrix: FloatArray,
    inflow: FloatArray,
) -> None:
    """Add one transistor's currents and charge slopes to the node equations."""
    forward = math.exp(min((base_V - emitter_V) / THERMAL_V, 45.0))
    reverse = math.exp(min((base_V - collector_V) / THERMAL_V, 45.0))
    transport = transistor.transport_A * (forward - reverse)
    into_emitter = transistor.transport_A / transistor.gain * (forward - 1.0)
    into_collector = transistor.transport_A / transistor.reverse_gain * (reverse - 1.0)
    drain = (base_V - emitter_V) / transistor.base_resistor_ohm
    _add(inflow, [(base, -into_emitter - into_collector - drain)])
    _add(inflow, [(collector, into_collector - transport), (emitter, transport + into_emitter + drain)])
    stored = transistor.transport_A / THERMAL_V
    _capacitor(matrix, base, emitter, transistor.emitter_F + transistor.forward_transit_s * stored * forward)
    _capacitor(matrix, base, collector, transistor.collector_F + transistor.reverse_transit_s * stored * reverse)


def _add(inflow: FloatArray, parts: Sequence[tuple[int | None, float]]) -> None:
    for node, current in parts:
        if node is not None:
            inflow[node] += current


def _capacitor(matrix: FloatArray, one: int, other: int | None, farad: float) -> None:
    matrix[one, one] += farad
    if other is not None:
        matrix[other, other] += farad
        matrix[one, other] -= farad
        matrix[other, one] -= farad
