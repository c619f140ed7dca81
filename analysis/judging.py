"""Judges captures while a sweep runs, so that a bad one is taken again while the device is still in the socket."""

from __future__ import annotations

from darkedge.analysis.captures import Capture, Kind
from darkedge.analysis.dark.traces import summarise_trace
from darkedge.analysis.errors import DarkedgeError
from darkedge.analysis.judgement import Judgement
from darkedge.analysis.waveform.channel import measure_channel
from darkedge.analysis.waveform.flaws import is_clipped


def judge_capture(capture: Capture) -> Judgement:
    """Say whether a capture is worth keeping.

    A clipped pulse is taken again on other ranges, a drifting still trace after some more settling. What the analysis only flags
    (no pulse, a slow tail, ringing) is a finding, and is kept. Never raises: a capture that cannot be judged is kept.
    """
    try:
        if capture.conditions.kind in (Kind.DARK, Kind.OFFSET):
            drifts = any(
                "drifting" in summarise_trace(record, capture.conditions).flags for record in capture.outputs.values()
            )
            return Judgement.RETAKE if drifts else Judgement.KEEP
        step = capture.conditions.volts_per_code
        for record in capture.outputs.values():
            channel = measure_channel(record, volts_per_code=step)
            if channel is not None and is_clipped(record.signal_V, channel):
                return Judgement.ADJUST
    except DarkedgeError:
        return Judgement.KEEP
    return Judgement.KEEP
