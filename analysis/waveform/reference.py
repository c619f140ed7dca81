"""Reference levels other than 10, 50 and 90 %: other outer levels for the edges, fixed volts for delays and widths."""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np

from darkedge.analysis.captures import FloatArray, Record
from darkedge.analysis.errors import InputError
from darkedge.analysis.quantities import format_quantity
from darkedge.analysis.waveform.channel import Channel
from darkedge.analysis.waveform.edges import Transitions

NEAREST_TO_LEVEL = 0.03
"""Part of the amplitude that a fixed threshold must keep from either level: nearer to it, noise decides where it is passed."""

BESIDE = 0.02
"""How far beside a threshold, of the amplitude, the slope there is taken."""


@dataclass(frozen=True, slots=True, kw_only=True)
class ReferenceLevels:
    """Where the output's instants are taken.

    `low_ratio` and `high_ratio` bound rise and fall time; delays and widths are at half the amplitude, or at `rising_V` and
    `falling_V` (true volts at the output, the scope's offset taken off) where those are given. The drive is always taken at half its own
    amplitude, switching times always at 10 and 90 %.

    Raises
    ------
    InputError
        Ratios that do not rise between 0 and 1, or one fixed level without the other.
    """

    low_ratio: float = 0.1
    high_ratio: float = 0.9
    rising_V: float | None = None
    falling_V: float | None = None

    def __post_init__(self) -> None:
        if not 0 < self.low_ratio < 0.5 < self.high_ratio < 1:
            raise InputError(
                "the levels do not lie around one half", where="--levels",
                found=f"{100 * self.low_ratio:g} % and {100 * self.high_ratio:g} %", wanted="such as 20 %, 80 %",
            )  # fmt: skip
        if (self.rising_V is None) != (self.falling_V is None):
            raise InputError(
                "a threshold for one edge only", where="--threshold", wanted="one voltage, or one for each edge"
            )

    @property
    def words(self) -> str:
        """What the column `levels` says."""
        outer = f"histogram {100 * self.low_ratio:g}/50/{100 * self.high_ratio:g} %"
        if self.rising_V is None or self.falling_V is None:
            return outer
        fixed = format_quantity(self.rising_V, "V")
        if self.falling_V != self.rising_V:
            fixed += f" rising and {format_quantity(self.falling_V, 'V')} falling"
        return f"{outer}, delays at {fixed}"


TEN_FIFTY_NINETY = ReferenceLevels()


def relocate(
    channel: Channel, record: Record, reference: ReferenceLevels, *, offset_V: float = 0.0, u_volts: float = 0.0
) -> Transitions | None:
    """Instants of a measured channel at other reference levels; `None` where a fixed threshold is not passed.

    Parameters
    ----------
    offset_V : float
        What the record reads above the true voltage.
    u_volts : float
        Standard uncertainty of a voltage of the record, from offset and gain: it moves where a fixed threshold is passed.

    Notes
    -----
    A fixed threshold stands at another share of the amplitude on the way up than on the way down, and does not move with the levels.
    """
    levels = channel.levels
    middles = {True: 0.5, False: 0.5}
    if reference.rising_V is not None and reference.falling_V is not None:
        middles = {
            True: (reference.rising_V + offset_V - levels.low_V) / levels.amplitude_V,
            False: (levels.high_V - reference.falling_V - offset_V) / levels.amplitude_V,
        }
        if not all(NEAREST_TO_LEVEL <= share <= 1 - NEAREST_TO_LEVEL for share in middles.values()):
            return None
    up, down = (
        channel.located(
            record,
            (
                reference.low_ratio,
                middles[rising] - BESIDE,
                middles[rising],
                middles[rising] + BESIDE,
                reference.high_ratio,
            ),
        )
        for rising in (True, False)
    )
    joined = _joined(up, down)
    seconds_per_volt = np.abs(joined.time_s[:, 3] - joined.time_s[:, 1]) / (2 * BESIDE * levels.amplitude_V)
    three = _columns(joined, (0, 2, 4))
    return three if reference.rising_V is None else _fixed_in_volts(three, seconds_per_volt * u_volts)


def _joined(up: Transitions, down: Transitions) -> Transitions:
    """Rising edges of the one, falling edges of the other."""
    rising = up.rising
    return replace(
        up,
        time_s=np.where(rising[:, None], up.time_s, down.time_s),
        covariance_s2=np.where(rising[:, None, None], up.covariance_s2, down.covariance_s2),
        bend_s=np.where(rising[:, None], up.bend_s, down.bend_s),
        pull_s_per_V=np.where(rising[:, None, None], up.pull_s_per_V, down.pull_s_per_V),
        n_samples=np.where(rising, up.n_samples, down.n_samples),
        by_shape=np.where(rising, up.by_shape, down.by_shape),
    )


def _columns(found: Transitions, places: tuple[int, ...]) -> Transitions:
    """Some of the reference levels."""
    keep = list(places)
    return replace(
        found,
        fractions=tuple(found.fractions[k] for k in keep),
        time_s=found.time_s[:, keep],
        covariance_s2=found.covariance_s2[np.ix_(range(found.rising.size), keep, keep)],
        bend_s=found.bend_s[:, keep],
        pull_s_per_V=found.pull_s_per_V[:, keep],
    )


def _fixed_in_volts(found: Transitions, u_s: FloatArray) -> Transitions:
    """The middle instants do not move with the levels; an error of the scope's volts moves them by `u_s`, shape (n,)."""
    pull, bend = found.pull_s_per_V.copy(), found.bend_s.copy()
    pull[:, 1] = 0.0
    bend[:, 1] = np.hypot(bend[:, 1], u_s)
    return replace(found, pull_s_per_V=pull, bend_s=bend)
