"""Switching times of a transistor output, by the trade's names.

Reference points: the drive's leading edge at 10 % of its way and its trailing edge where it has left 90 % (10 % of
its way back), against the output at 10 % and 90 % of its own transition. This is the delay time of the transistor
standards (input edge at 10 % to output edge at 10 %; JESD77, terms) carried through to the other three times, as the
IEC 60747-5-5 family does for couplers: t_on = t_d + t_r, t_off = t_s + t_f.
"""

from __future__ import annotations

import numpy as np

from darkedge.analysis.measurement import Estimate
from darkedge.analysis.waveform.edges import Transitions
from darkedge.analysis.waveform.intervals import DRIVE, Budget, Interval, instants
from darkedge.analysis.waveform.pulses import Pairing

_TIMES = (
    ("on_delay_s", True, 0),
    ("on_time_s", True, -1),
    ("storage_time_s", False, 0),
    ("off_time_s", False, -1),
)


def switching_times(
    drive: Transitions,
    output: Transitions,
    pairing: Pairing,
    *,
    light_high: bool,
    budget: Budget,
    skew_s: float,
    u_skew_s: float,
) -> dict[str, Estimate]:
    """Delay, turn-on, storage and turn-off time, in seconds.

    - `on_delay_s` (t_d): drive's leading edge at 10 % to output at 10 % of its way into the lit state;
    - `on_time_s` (t_on = t_d + t_r): the same to 90 % of its way;
    - `storage_time_s` (t_s): drive's trailing edge at 10 % of its way back (its 90 % level) to output at 10 %
      of its way back;
    - `off_time_s` (t_off = t_s + t_f): the same to 90 % of its way back.

    Parameters
    ----------
    drive, output : Transitions
        Levels 10, 50, 90 % as progress.
    light_high : bool
        Whether light drives the output high.
    skew_s, u_skew_s : float
        How much later the output channel reads than the drive channel, taken off.
    """
    lit = output.rising[pairing.output] == light_high
    found = {}
    for name, on, column in _TIMES:
        mask = lit == on
        if not bool(np.any(mask)):
            continue
        start = instants(drive, pairing.drive[mask], 0, channel=DRIVE)
        stop = instants(output, pairing.output[mask], column % len(output.fractions))
        mean = stop.since(start).mean()
        delay = Interval(value_s=mean.value_s - skew_s, u_noise_s=mean.u_noise_s, pull=mean.pull)
        found[name] = budget.estimate(delay, u_more_s=u_skew_s)
    return found
