"""The flag registry: what an expert would have noticed, each with its sentence and its mend.

A flag never changes a number; it says what the number is worth. Codes are only ever added.
"""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass


@dataclass(frozen=True, slots=True, kw_only=True)
class Flag:
    """One thing worth knowing about a measurement."""

    code: str
    sentence: str
    mend: str


_ALL = (
    Flag(
        code="clipped",
        sentence="The signal runs into the end of the digitiser's range; levels and times near it are lost.",
        mend="Choose a wider vertical range and take the capture again.",
    ),
    Flag(
        code="few_samples_on_edge",
        sentence="Fewer than five samples lie on an edge; its time is little better than the sample step.",
        mend="Sample faster or shorten the time span.",
    ),
    Flag(
        code="no_pulse",
        sentence="No pulse stands out from the noise.",
        mend="Check light, trigger and channel; raise the emitter current or average more.",
    ),
    Flag(
        code="never_settles",
        sentence="The top or base is never reached within the pulse; levels and times are those of the peak.",
        mend="Lengthen the pulse to five time constants or more, or lower the load.",
    ),
    Flag(
        code="bias_used_up",
        sentence="The signal's drop across the load has eaten the reverse bias; the junction is barely biased.",
        mend="Lower the load or the light, or raise the bias.",
    ),
    Flag(
        code="large_signal",
        sentence="The swing is more than a tenth of the bias; the capacitance changes during the edge.",
        mend="Halve the light and compare; or lower the load.",
    ),
    Flag(
        code="bench_limited",
        sentence="The edge seen is not clearly slower than emitter and scope: what is left for the device is little, or only a bound.",
        mend="Use a faster emitter or scope, or read the value as an upper bound.",
    ),
    Flag(
        code="emitter_unknown",
        sentence="The response of emitter and scope is not known, so it is still in the edge times.",
        mend="Measure it with a fast reference detector and give it in the fixture file.",
    ),
    Flag(
        code="slow_tail",
        sentence="The edge ends in a slow tail: carriers that diffuse in from undepleted material.",
        mend="Raise the bias to deplete deeper, use a shorter wavelength, or shade the rim of the chip.",
    ),
    Flag(
        code="droop",
        sentence="The top or base slopes: AC coupling or a supply that sags.",
        mend="Use DC coupling and a stiff supply, or shorten the pulse.",
    ),
    Flag(
        code="ringing",
        sentence="The edge overshoots and rings.",
        mend="Shorten the leads and the ground clip, and terminate the cable.",
    ),
    Flag(
        code="light_leak",
        sentence="The dark trace moves at the mains frequency or its double: room light reaches the device.",
        mend="Cover the device and take the dark trace again.",
    ),
    Flag(
        code="below_floor",
        sentence="The dark current is below what this resistor, range and time can resolve; a bound is given.",
        mend="Use a larger sense resistor, a finer range or a longer trace.",
    ),
    Flag(
        code="drifting",
        sentence="The trace drifts by more than its noise: it had not settled, or the temperature moves.",
        mend="Wait longer after a change of bias or light, and hold the temperature.",
    ),
    Flag(
        code="unpaired",
        sentence="An output edge has no drive edge it clearly belongs to, or no partner; it was left out.",
        mend="Capture whole periods, and check the trigger.",
    ),
    Flag(
        code="period_unknown",
        sentence="The period is not in the capture nor stated; duty is left out.",
        mend="Capture two edges of the same kind, or state drive_period_s.",
    ),
    Flag(
        code="conditions_missing",
        sentence="Conditions of the capture are not known; it cannot be used where they matter.",
        mend="State them with --names or --conditions.",
    ),
    Flag(
        code="refused",
        sentence="The file was refused; nothing was measured.",
        mend="Read the message for this file.",
    ),
    Flag(
        code="shape_free",
        sentence="No known edge shape fits; times were read from the trace without assuming one.",
        mend="Look at the plot; the uncertainty is wider.",
    ),
    Flag(
        code="noise_unknown",
        sentence="The flat parts, or a still trace, are too short or too still to tell the noise; uncertainties are rough.",
        mend="Capture more of the flat parts before and after the edge; still traces over 100 ms, on a finer range.",
    ),
    Flag(
        code="probe_doubtful",
        sentence="The probe's ratio or compensation is doubtful: the levels or the corner do not add up.",
        mend="Compensate the probe, and check that its ratio is set the same at probe and scope.",
    ),
    Flag(
        code="ac_coupled",
        sentence="The channel was AC coupled; levels and dark current have no meaning.",
        mend="Use DC coupling.",
    ),
    Flag(
        code="low_input_resistance",
        sentence="The scope's input resistance loads the resistor by more than 1 %; it was taken into account.",
        mend="Use a high-impedance input where the load must be as marked.",
    ),
    Flag(
        code="bandwidth_limited",
        sentence="A bandwidth limit was on that is not ten times faster than the edge.",
        mend="Switch the limit off.",
    ),
    Flag(
        code="uneven_time",
        sentence="The time steps are not even; the record was measured on its own times.",
        mend="Export evenly sampled data where the scope can.",
    ),
    Flag(
        code="min_max_record",
        sentence="The record holds minimum and maximum pairs, not samples; noise and crossings are biased.",
        mend="Use normal sampling, not peak detection.",
    ),
    Flag(
        code="jittered_average",
        sentence="The average was taken under trigger jitter, which broadens the edge.",
        mend="Trigger on the drive, not on the noisy output, or capture single shots; or state trigger_jitter_s in the fixture file.",
    ),
    Flag(
        code="fixture_expired",
        sentence="The fixture file is older than it says it may be.",
        mend="Measure the fixture again and date the file.",
    ),
    Flag(
        code="emitter_current_differs",
        sentence="The emitter current is not that at which the bench response was taken; the bench is still in the edge times.",
        mend="Take the bench response at this emitter current.",
    ),
    Flag(
        code="offset_doubtful",
        sentence="The offset of the dark trace is not known, or does not belong to it: what is left is below zero, or saw more light.",
        mend="Take offset traces at zero bias with the same load and range, between the dark traces; check the channel's polarity.",
    ),
    Flag(
        code="threshold_missed",
        sentence="The output does not clearly pass the stated threshold; delays and widths there are left out.",
        mend="State a threshold between the output's levels, or raise the light.",
    ),
    Flag(
        code="time_unit_assumed",
        sentence="The file states no unit of time; the numbers were read as seconds.",
        mend="Write the unit in the heading, such as time (us), or state it with --channels time=us.",
    ),
)

REGISTRY: dict[str, Flag] = {flag.code: flag for flag in _ALL}


def join_flags(codes: Iterable[str]) -> tuple[str, ...]:
    """Return the codes without repeats, in the order of the registry.

    Raises
    ------
    KeyError
        A code that is not in the registry: a mistake in darkedge, not in the input.
    """
    wanted = set(codes)
    unknown = wanted - REGISTRY.keys()
    if unknown:
        msg = f"flags not in the registry: {sorted(unknown)}"
        raise KeyError(msg)
    return tuple(code for code in REGISTRY if code in wanted)
