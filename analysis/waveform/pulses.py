"""Pulses: which output edge answers which drive edge, and the delays, widths and distortion that follow."""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np

from darkedge.analysis.captures import FloatArray
from darkedge.analysis.measurement import Estimate
from darkedge.analysis.waveform.channel import Channel
from darkedge.analysis.waveform.edges import IntArray, Transitions
from darkedge.analysis.waveform.intervals import DRIVE, Budget, Instants, Interval, durations, instants

LEAST_PULSES_FOR_JITTER = 3
"""Delays of one kind from which their scatter says anything."""


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Pairing:
    """Which output edge answers which drive edge.

    `drive` and `output` hold indices of edges, shape (n,), pair by pair in time; `inverting` says whether the output
    falls where the drive rises; `left_over` whether edges of either found no partner though the record had room for it.
    """

    drive: IntArray
    output: IntArray
    inverting: bool
    left_over: bool


def pair_edges(drive: Transitions, output: Transitions, *, end_s: float, skew_s: float = 0.0) -> Pairing | None:
    """Pair each drive edge with the output edge that answers it; `None` where nothing pairs.

    Both polarities are tried. Under each, a drive edge is answered by the first output edge of the fitting direction
    that comes after it and before the next drive edge of the same direction. The polarity that pairs clearly more
    edges is taken, else the one whose slower delay is shorter: under the wrong one an edge waits for the other
    end of the pulse.

    Parameters
    ----------
    drive, output : Transitions
        With the 50 % level in the middle column.
    end_s : float
        End of the record, beyond which an answer may lie.
    skew_s : float
        How much later the output channel reads than the drive channel.
    """
    output = replace(output, time_s=output.time_s - skew_s)
    slack = _slack(drive, output)
    tries = [_paired(drive, output, slack, inverting=inverting) for inverting in (False, True)]
    most = max(pairs.shape[0] for pairs in tries)
    if most == 0:
        return None
    good = [k for k in (0, 1) if tries[k].shape[0] > 0.6 * most]
    chosen = min(good, key=lambda k: _slower_delay(drive, output, tries[k]))
    pairs = tries[chosen]
    lag = _slower_delay(drive, output, pairs)
    lonely = np.setdiff1d(np.arange(output.rising.size), pairs[:, 1])
    unasked = output.time_s[lonely, 1] > drive.time_s[0, 1] + lag  # earlier ones answer what came before the record
    unanswered = np.setdiff1d(np.arange(drive.rising.size), pairs[:, 0])
    had_room = drive.time_s[unanswered, 1] + 2 * lag < end_s
    return Pairing(
        drive=pairs[:, 0], output=pairs[:, 1], inverting=bool(chosen),
        left_over=bool(np.any(unasked)) or bool(np.any(had_room)),
    )  # fmt: skip


def _paired(drive: Transitions, output: Transitions, slack: float, *, inverting: bool) -> IntArray:
    found = []
    for rising in (True, False):
        mine = np.flatnonzero(drive.rising == rising)
        theirs = np.flatnonzero(output.rising == (rising != inverting))
        if mine.size == 0 or theirs.size == 0:
            continue
        from_s = drive.time_s[mine, 1] - slack
        place = np.searchsorted(output.time_s[theirs, 1], from_s)
        until_s = np.append(from_s[1:], np.inf)
        answered = place < theirs.size
        partner = theirs[np.minimum(place, theirs.size - 1)]
        answered &= output.time_s[partner, 1] < until_s
        found.append(np.stack((mine[answered], partner[answered]), axis=1))
    if not found:
        return np.empty((0, 2), dtype=np.intp)
    pairs = np.concatenate(found)
    return np.asarray(pairs[np.argsort(pairs[:, 0], kind="stable")], dtype=np.intp)


def middle(values: FloatArray) -> float:
    """Median of a few values."""
    ordered: list[float] = sorted(values.tolist())
    half = len(ordered) // 2
    return ordered[half] if len(ordered) % 2 else 0.5 * (ordered[half - 1] + ordered[half])


def _slack(drive: Transitions, output: Transitions) -> float:
    """How far an answer may seem to come before its drive edge.

    Half the drive edge, a skew that nobody measured, and what the sampling blurs.
    """
    edge = 0.6 * middle(drive.time_s[:, -1] - drive.time_s[:, 0])
    skew = 0.25 * middle(output.time_s[:, -1] - output.time_s[:, 0])
    blur = 4 * middle(np.hypot(drive.u_time_s[:, 1].mean(), output.u_time_s[:, 1]))
    gaps = np.diff(drive.time_s[:, 1])
    longest = 0.4 * float(np.min(gaps)) if gaps.size else np.inf
    return min(edge + skew + blur, longest)


def _slower_delay(drive: Transitions, output: Transitions, pairs: IntArray) -> float:
    lags = output.time_s[pairs[:, 1], 1] - drive.time_s[pairs[:, 0], 1]
    rising = drive.rising[pairs[:, 0]]
    return max(middle(lags[rising == way]) for way in (True, False) if bool(np.any(rising == way)))


def time_edges(transitions: Transitions, which: IntArray, *, budget: Budget) -> dict[str, Estimate]:
    """Rise and fall time of the output: 10 % to 90 %, or between the outer levels asked for, meaned over edges."""
    found = {}
    for name, rising in (("rise_time_s", True), ("fall_time_s", False)):
        edges = which[transitions.rising[which] == rising]
        if edges.size:
            found[name] = budget.estimate(durations(transitions, edges).mean())
    return found


def time_delays(
    drive: Transitions, output: Transitions, pairing: Pairing, *, budget: Budget, skew_s: float, u_skew_s: float
) -> dict[str, Estimate]:
    """Propagation delays from the drive's 50 % to the output's 50 %, their difference, and their jitter.

    `t_plh_s` ends in the output's rising edge and `t_phl_s` in its falling one, whichever way the drive goes.
    `skew_s` is how much later the output channel reads than the drive channel; it is taken off.
    """
    quantities: dict[str, Estimate] = {}
    delays: dict[str, Interval] = {}
    each: list[Instants] = []
    for name, rising in (("t_plh_s", True), ("t_phl_s", False)):
        mask = output.rising[pairing.output] == rising
        if not bool(np.any(mask)):
            continue
        start = instants(drive, pairing.drive[mask], 1, channel=DRIVE)
        lags = instants(output, pairing.output[mask], 1).since(start)
        mean = lags.mean()
        delays[name] = Interval(value_s=mean.value_s - skew_s, u_noise_s=mean.u_noise_s, pull=mean.pull)
        quantities[name] = budget.estimate(delays[name], u_more_s=u_skew_s)
        each.append(lags)
    if len(delays) == 2:
        distortion = budget.estimate(delays["t_phl_s"].minus(delays["t_plh_s"]))
        quantities["pulse_width_distortion_s"] = Estimate(value=abs(distortion.value or 0.0), u=distortion.u)
    jitter = _jitter(each)
    if jitter is not None:
        quantities["jitter_s"] = jitter
    return quantities


def _jitter(each: list[Instants]) -> Estimate | None:
    """Standard deviation of the delays from pulse to pulse beyond their noise.

    The excess variance is sample variance less the mean noise variance; its uncertainty is that of a sample variance,
    s^2 sqrt(2 / dof). Where the excess is not clear of it, only an upper bound (one-sided 95 %) is given.
    """
    groups = [x for x in each if x.time_s.size >= LEAST_PULSES_FOR_JITTER]
    if not groups:
        return None
    dof = sum(x.time_s.size - 1 for x in groups)
    variance = sum(float(np.sum((x.time_s - x.time_s.mean()) ** 2)) for x in groups) / dof
    noise = float(np.mean(np.concatenate([x.u_s**2 + x.bend_s**2 for x in groups])))
    excess, u_excess = variance - noise, max(variance, noise) * float(np.sqrt(2 / dof))
    if excess > 2 * u_excess:
        value = float(np.sqrt(excess))
        return Estimate(value=value, u=u_excess / (2 * value))
    return Estimate(hi95=float(np.sqrt(max(excess, 0.0) + 1.645 * u_excess)))


def pulse_widths(transitions: Transitions, which: IntArray, *, active_high: bool, channel: int) -> Instants | None:
    """Widths of the pulses: 50 % of the edge into the active state to 50 % of the next edge out of it."""
    ordered = np.sort(which)
    first, second = ordered[:-1], ordered[1:]
    whole = (transitions.rising[first] == active_high) & (second == first + 1)
    first, second = first[whole], second[whole]
    if first.size == 0:
        return None
    return instants(transitions, second, 1, channel=channel).since(instants(transitions, first, 1, channel=channel))


def mean_width(
    transitions: Transitions, which: IntArray, *, active_high: bool, channel: int, period_s: float | None
) -> Interval | None:
    """Mean width of the pulses, from whole pulses, else from whole gaps between them where the period is known."""
    pulses = pulse_widths(transitions, which, active_high=active_high, channel=channel)
    if pulses is not None:
        return pulses.mean()
    gaps = pulse_widths(transitions, which, active_high=not active_high, channel=channel)
    if gaps is None or period_s is None or not bool(np.all(gaps.time_s < period_s)):
        return None
    return gaps.mean().short_of(period_s)


def period_of(transitions: Transitions | None) -> Estimate | None:
    """Mean distance of edges of the same direction, with its uncertainty from noise; `None` without two of them."""
    if transitions is None:
        return None
    best: Estimate | None = None
    for rising in (True, False):
        edges = np.flatnonzero(transitions.rising == rising)
        if edges.size < 2:
            continue
        times: FloatArray = transitions.time_s[edges, 1]
        u = float(np.hypot(transitions.u_time_s[edges[0], 1], transitions.u_time_s[edges[-1], 1]))
        found = Estimate(value=float(times[-1] - times[0]) / (edges.size - 1), u=u / (edges.size - 1))
        if best is None or (found.u or 0.0) < (best.u or 0.0):
            best = found
    return best


def light_makes_high(channel: Channel, *, connection_high: bool | None, drive_inverting: bool | None) -> bool | None:
    """Whether light drives the output high; `None` where it cannot be told.

    How the output is connected decides; else the drive, taken to switch the light on when it is high; else
    a record that starts and ends in one state and leaves it once, which can only be a pulse away from rest.
    """
    if connection_high is not None:
        return connection_high
    if drive_inverting is not None:
        return not drive_inverting
    rising = channel.transitions.rising
    if rising.size == 2:
        return bool(rising[0])
    return None
