"""Averages under trigger jitter: how much jitter there is, told from captures of one run, and whether it broadens their edges."""

from __future__ import annotations

import math
from collections.abc import Hashable, Sequence
from dataclasses import replace

import numpy as np

from darkedge.analysis.measurement import Measurement

FEWEST = 8
"""Captures of one kind from which the scatter of their triggers says how much jitter there is."""

TEN_NINETY = 2.5631031310892007
"""10 to 90 % time of a Gaussian edge over its standard deviation."""

MATTERS = 0.3
"""Broadening, in standard uncertainties of the edge's time, from which it matters."""


def flag_jittered(rows: Sequence[Measurement]) -> list[Measurement]:
    """Flag averages whose edges trigger jitter has broadened by more than their uncertainty leaves room for.

    An average of n captures, each shifted by the jitter of its trigger, is shifted by the mean of those: averages of one run scatter
    against their triggers by the jitter over root n. The same jitter broadens each average by its whole self. Where the fixture states
    the jitter it has been taken out already, and nothing is flagged.
    """
    found = list(rows)
    groups: dict[Hashable, list[int]] = {}
    for place, row in enumerate(rows):
        known = row.conditions
        if row.trigger_s is not None and (known.averages or 1) > 1 and "refused" not in row.flags:
            key = (
                row.capture.rpartition("/")[0], known.run, known.averages, known.pulse_width_s, known.drive_period_s,
                known.emitter_current_A, known.driven_element,
            )  # fmt: skip
            groups.setdefault(key, []).append(place)
    for places in groups.values():
        triggers = np.array([rows[k].trigger_s for k in places], dtype=np.float64)
        if np.unique(triggers).size < FEWEST:
            continue
        jitter = float(np.std(triggers, ddof=1)) * math.sqrt(rows[places[0]].conditions.averages or 1)
        for place in places:
            if _is_broadened(rows[place], jitter):
                found[place] = replace(rows[place], flags=(*rows[place].flags, "jittered_average"))
    return found


def _is_broadened(row: Measurement, jitter_s: float) -> bool:
    for name in ("rise_time_s", "fall_time_s"):
        if f"seen_{name}" in row.quantities:
            continue
        edge = row.quantities.get(name)
        if edge is None or not edge.value or not edge.u:
            continue
        own = math.sqrt(max(edge.value**2 - (TEN_NINETY * jitter_s) ** 2, 0.0))
        if edge.value - own > MATTERS * edge.u:
            return True
    return False
