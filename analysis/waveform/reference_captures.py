"""Reference captures: edges of the bench itself, and both channels on one signal."""

from __future__ import annotations

import math

import numpy as np

from darkedge.analysis.captures import Capture
from darkedge.analysis.fixture import CapturedEdge
from darkedge.analysis.waveform.channel import measure_channel
from darkedge.analysis.waveform.edges import IntArray, Transitions


def share_before_half(transitions: Transitions, edges: IntArray) -> tuple[float, float]:
    """Part of the 10 to 90 % time of some edges that lies before their 50 % point, meaned over them, and its standard uncertainty."""
    early = transitions.time_s[edges, 1] - transitions.time_s[edges, 0]
    whole = transitions.time_s[edges, 2] - transitions.time_s[edges, 0]
    share = early / whole
    # d share = (-(1 - share) dt10 + dt50 - share dt90) / whole
    weights = np.stack((share - 1.0, np.ones_like(share), -share), axis=1) / whole[:, None]
    variance = np.einsum("ek,ekl,el->e", weights, transitions.covariance_s2[edges], weights)
    variance += np.sum((weights * transitions.bend_s[edges]) ** 2, axis=1)
    return float(np.mean(share)), math.sqrt(max(float(np.sum(variance)), 0.0)) / edges.size


def reference_edge(capture: Capture, *, rising: bool) -> CapturedEdge | None:
    """Measure the rising or falling edges of a capture of the bench's own response; `None` where it has none.

    Parameters
    ----------
    capture : Capture
        Its first output is what the fast reference detector, or the reference path, showed.
    """
    channel = measure_channel(capture.outputs[min(capture.outputs)], volts_per_code=capture.conditions.volts_per_code)
    if channel is None:
        return None
    edges = np.flatnonzero(channel.transitions.rising == rising)
    if edges.size == 0:
        return None
    found = channel.transitions
    duration = float(np.mean(found.time_s[edges, 2] - found.time_s[edges, 0]))
    variance = (
        found.covariance_s2[edges, 0, 0] + found.covariance_s2[edges, 2, 2] - 2 * found.covariance_s2[edges, 0, 2]
    )
    variance = variance + found.bend_s[edges, 0] ** 2 + found.bend_s[edges, 2] ** 2
    share, u_share = share_before_half(found, edges)
    return CapturedEdge(
        time_s=duration,
        u_time_s=math.sqrt(max(float(np.sum(variance)), 0.0)) / edges.size,
        share=share,
        u_share=u_share,
    )


def channel_skew(capture: Capture) -> tuple[float, float] | None:
    """By how much the output channel reads later than the drive channel where both see the same signal; `None` where it cannot be told.

    Mean distance of their 50 % instants, edge by edge, with its standard uncertainty.
    """
    if capture.drive is None:
        return None
    drive = measure_channel(capture.drive)
    output = measure_channel(capture.outputs[min(capture.outputs)], volts_per_code=capture.conditions.volts_per_code)
    if drive is None or output is None:
        return None
    one, other = drive.transitions, output.transitions
    if one.rising.size != other.rising.size or not np.array_equal(one.rising, other.rising):
        return None
    apart = other.time_s[:, 1] - one.time_s[:, 1]
    u = np.hypot(one.u_time_s[:, 1], other.u_time_s[:, 1])
    n = apart.size
    scatter = float(np.std(apart, ddof=1)) / math.sqrt(n) if n > 2 else 0.0
    return float(np.mean(apart)), max(math.sqrt(float(np.sum(u**2))) / n, scatter)
