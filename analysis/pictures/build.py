"""From an intake to the content of the report page."""

from __future__ import annotations

from collections.abc import Sequence
from importlib.metadata import version
from pathlib import Path

from darkedge.analysis.captures import Kind
from darkedge.analysis.cautions import Caution, Setting, cautions_for
from darkedge.analysis.decide.results import Limits, Screening, Verdict
from darkedge.analysis.decide.verdicts import screen
from darkedge.analysis.errors import DarkedgeError
from darkedge.analysis.explain import Explained, explain_devices
from darkedge.analysis.files.atomic import write_atomic
from darkedge.analysis.files.intake import Intake
from darkedge.analysis.fixture import Fixture
from darkedge.analysis.measurement import Measurement
from darkedge.analysis.pictures.report import ReportContent, WaveformPicture, render_report
from darkedge.analysis.pictures.waveforms import plot_capture, plot_dark_trace
from darkedge.analysis.quantities import format_quantity
from darkedge.analysis.waveform.marks import mark_capture

MOST_WAVEFORMS = 12
_WORTH_SEEING = frozenset(
    {"no_pulse", "clipped", "ringing", "slow_tail", "droop", "never_settles", "light_leak", "drifting"}
)


_DRAWN = (Kind.PULSE, Kind.DARK, None)


def build_report(
    intake: Intake,
    *,
    paths: Sequence[Path],
    made: str,
    limits: Limits | None = None,
    limits_source: str = "",
    explained: Explained | None = None,
) -> ReportContent:
    """Fit, screen and draw what an intake holds.

    Limits are held against the devices that belong to a lot; where there is no lot, against all devices.

    Parameters
    ----------
    made : str
        When the page was made, as text.
    explained : Explained, optional
        The fits, where they were made already.
    """
    explained = explained or explain_devices(intake.measurements, fixture_for=intake.fixture_for)
    screening = None if limits is None else screen(_of_lots(intake.measurements), limits)
    chosen, left_out = _waveforms(intake, screening)
    tried = [e for e in explained.errors if not _is_lot_device(str(e.where), intake)]
    return ReportContent(
        title=_title(intake, paths),
        made=made,
        version=version("darkedge"),
        sources=tuple(str(path) for path in paths),
        measurements=intake.measurements,
        screening=screening,
        limits_source=limits_source,
        devices=explained.devices,
        fit_errors=tuple(str(e) for e in tried),
        waveforms=chosen,
        waveforms_left_out=left_out,
        refusals=tuple((r.name, str(r.error)) for r in intake.refusals),
        cautions=_cautions(intake),
        fixture_facts=_fixture_facts(intake),
    )


def write_report(content: ReportContent, path: Path) -> None:
    """Write the page; whole or not at all.

    Raises
    ------
    InputError
        The file cannot be written.
    """
    write_atomic(path, render_report(content))


def _of_lots(measurements: Sequence[Measurement]) -> Sequence[Measurement]:
    of_lots = [m for m in measurements if m.conditions.lot is not None]
    return of_lots or measurements


def _is_lot_device(where: str, intake: Intake) -> bool:
    """Devices of a lot are screened at few points; that they carry no fit is no news."""
    return any(m.conditions.lot is not None and m.conditions.device == where for m in intake.measurements)


def _title(intake: Intake, paths: Sequence[Path]) -> str:
    lots = sorted({m.conditions.lot for m in intake.measurements if m.conditions.lot})
    if len(lots) == 1:
        part = next((c.lot.part for c in intake.contexts if c.lot is not None and c.lot.part), None)
        return f"Lot {lots[0]}" + (f", {part}" if part else "")
    return ", ".join(path.resolve().name for path in paths)


def _waveforms(intake: Intake, screening: Screening | None) -> tuple[list[WaveformPicture], int]:
    """Captures worth a picture: those behind a verdict that is no pass, those with flags one can see, then one of each device."""
    if intake.reread is None:
        return [], 0
    drawn = [m for m in intake.measurements if m.conditions.kind in _DRAWN and m.capture in intake.sources]
    drawn = [m for m in drawn if "refused" not in m.flags]
    failing = set() if screening is None else _failing_captures(screening)
    order: dict[tuple[str, int | None], Measurement] = {}
    for some in (
        [m for m in drawn if m.capture in failing],
        _one_of_each([m for m in drawn if m.quantities and m.conditions.kind is not Kind.DARK]),
        [m for m in drawn if _WORTH_SEEING & set(m.flags)],
    ):
        order |= {(m.capture, m.element): m for m in some if (m.capture, m.element) not in order}
    pictures = [p for m in list(order.values())[:MOST_WAVEFORMS] if (p := _waveform(intake, m)) is not None]
    return pictures, len(drawn) - len(pictures)


def _failing_captures(screening: Screening) -> set[str]:
    return {
        capture
        for device in screening.devices
        for held in device.limits
        if held.verdict is not Verdict.PASS
        for capture in held.captures
    }


def _one_of_each(pulses: Sequence[Measurement]) -> list[Measurement]:
    """The middle capture of each run and element, devices outside lots first."""
    groups: dict[tuple[object, ...], list[Measurement]] = {}
    for m in sorted(pulses, key=lambda m: m.conditions.lot is not None):
        groups.setdefault((m.conditions.run, m.conditions.device, m.element), []).append(m)
    return [rows[len(rows) // 2] for rows in groups.values()]


def _waveform(intake: Intake, m: Measurement) -> WaveformPicture | None:
    assert intake.reread is not None
    try:
        capture = intake.reread(m.capture)
    except DarkedgeError:
        return None  # changed since it was measured; the table still shows what was measured
    element = m.element or 1
    if m.conditions.kind is Kind.DARK:
        figure = plot_dark_trace(capture, element=element, measured=m)
        words = f"Dark trace {m.capture}, element {element}, with its mean"
    else:
        marks = mark_capture(capture, element=element, fixture=intake.fixture_for(m.capture))
        figure = plot_capture(capture, marks, element=element, measured=m)
        words = f"Waveform of {m.capture}, element {element}, with its levels and its 10, 50 and 90 % points"
    return WaveformPicture(capture=m.capture, figure=figure, words=words, flags=m.flags)


def _cautions(intake: Intake) -> tuple[Caution, ...]:
    settings = [Setting(bias_V=m.conditions.bias_V) for m in intake.measurements]
    for context in intake.contexts:
        if context.plan is not None:
            plan = context.plan
            settings.append(
                Setting(
                    bias_V=max(plan.axes.bias_V),
                    emitter_kind=plan.emitter.kind.value,
                    wavelength_m=plan.emitter.wavelength_m,
                    generator_low_V=plan.drive.low_V,
                )
            )
    found = {caution.code: caution for setting in settings for caution in cautions_for(setting)}
    return tuple(found.values())


def _fixture_facts(intake: Intake) -> tuple[str, ...]:
    facts: list[str] = []
    for fixture in dict.fromkeys(intake.fixtures.values()):
        facts += _facts(fixture)
    return tuple(dict.fromkeys(facts))


def _facts(fixture: Fixture) -> list[str]:
    facts = []
    if fixture.measured is not None:
        valid = "" if fixture.valid_days is None else f", valid for {fixture.valid_days:g} days"
        facts.append(f"Fixture measured {fixture.measured}{valid}.")
    for load in fixture.loads:
        stray = (
            "" if load.stray_F is None else f" with {format_quantity(load.stray_F, 'F', u=load.u_stray_F)} across it"
        )
        facts.append(
            f"Load {format_quantity(load.nominal_ohm, 'Ω')}: {format_quantity(load.actual_ohm, 'Ω', u=load.u_actual_ohm)}{stray}."
        )
    if fixture.response is not None:
        response = fixture.response
        facts.append(
            f"Emitter and scope: rise {format_quantity(response.rise_time_s, 's', u=response.u_rise_time_s)}, "
            f"fall {format_quantity(response.fall_time_s, 's', u=response.u_fall_time_s)}."
        )
    return facts
