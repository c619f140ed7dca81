"""Results as tables for people: rounded to the uncertainty, with the prefixes people say."""

from __future__ import annotations

from collections import Counter
from collections.abc import Sequence
from dataclasses import dataclass

from darkedge.analysis.captures import Kind
from darkedge.analysis.columns import ALL_QUANTITIES
from darkedge.analysis.decide.results import Choice, OperatingPoint, Screening
from darkedge.analysis.explain import ExplainedDevice
from darkedge.analysis.files.intake import Intake
from darkedge.analysis.flags import REGISTRY
from darkedge.analysis.junction.results import PARAMETERS
from darkedge.analysis.measurement import Measurement
from darkedge.analysis.pictures.words import (
    PARAMETER_WORDS,
    QUANTITY_WORDS,
    cell,
    dark_current_words,
    interval,
    limit_words,
)
from darkedge.analysis.quantities import format_quantity, unit_of
from darkedge.analysis.waveform.measure import measure_pulse_capture
from darkedge.analysis.waveform.reference import ReferenceLevels


@dataclass(frozen=True, slots=True, kw_only=True)
class Listing:
    """A table for people: title, headings, cells, and what is to be said below it."""

    title: str
    columns: list[str]
    rows: list[list[str]]
    notes: tuple[str, ...] = ()


_LISTED = (
    "amplitude_V", "rise_time_s", "fall_time_s", "seen_rise_time_s", "seen_fall_time_s", "t_plh_s", "t_phl_s",
    "width_out_s", "duty_cycle_distortion", "on_delay_s", "on_time_s", "storage_time_s", "off_time_s", "dark_current_A",
)  # fmt: skip


def measurement_listing(measurements: Sequence[Measurement]) -> Listing:
    """One row a measurement; a column in which nothing stands is left out."""
    quantities = [q for q in _LISTED if q in ALL_QUANTITIES and any(q in m.quantities for m in measurements)]
    several = len({m.element for m in measurements} - {None}) > 1
    columns = ["capture", *(["element"] if several else []), "bias", "load"]
    columns += [QUANTITY_WORDS[q] for q in quantities] + ["flags"]
    rows = []
    for m in measurements:
        known = m.conditions
        row = [m.capture, *([str(m.element or "–")] if several else [])]
        row += [format_quantity(known.bias_V, "V"), format_quantity(known.load_ohm, "Ω")]
        row += [cell(m.quantities.get(q), q) for q in quantities]
        rows.append([*row, ", ".join(m.flags)])
    return Listing(title="", columns=columns, rows=rows)


def reading_listings(intake: Intake) -> list[Listing]:
    """For each capture how its file was understood, and which conditions are known."""
    refused = {refusal.name for refusal in intake.refusals}
    found = []
    for name in intake.sources:
        if name in refused or intake.reread is None:
            continue
        capture = intake.reread(name)
        rows = [["read as", words] for words in capture.read_as or ("a row of an archive",)]
        known = capture.conditions.known()
        rows += [["conditions", ", ".join(f"{key} = {value}" for key, value in known.items()) or "none known"]]
        rows += [["flags", ", ".join(capture.remarks)]] if capture.remarks else []
        found.append(Listing(title=name, columns=["", "what was understood"], rows=rows))
    return found


def budget_listings(intake: Intake, *, reference: ReferenceLevels) -> list[Listing]:
    """For each pulse capture and element, quantity by quantity, the parts that its standard uncertainty is put together from."""
    refused = {refusal.name for refusal in intake.refusals}
    found = []
    for name in intake.sources:
        if name in refused or intake.reread is None:
            continue
        capture = intake.reread(name)
        if capture.conditions.kind in (Kind.DARK, Kind.OFFSET):
            continue
        rows = measure_pulse_capture(capture, fixture=intake.fixture_for(name), reference=reference, keep_parts=True)
        found += [_budget(row, several=len(rows) > 1) for row in rows]
    return found


def _budget(row: Measurement, *, several: bool) -> Listing:
    title = f"{row.capture}, element {row.element}" if several else row.capture
    cells: list[list[str]] = []
    for quantity, estimate in row.quantities.items():
        parts = sorted(((u, part) for part, u in (estimate.parts or {}).items() if u > 0), reverse=True)
        for place, (u, part) in enumerate(parts):
            named = [QUANTITY_WORDS[quantity], cell(estimate, quantity)] if place == 0 else ["", ""]
            share = f"{100 * u**2 / (estimate.u or 1.0) ** 2:.0f} %"
            cells.append([*named, part, format_quantity(float(f"{u:.2g}"), unit_of(quantity).symbol), share])
    return Listing(
        title=title, columns=["quantity", "value", "part", "standard uncertainty", "of the variance"], rows=cells
    )


def flag_lines(measurements: Sequence[Measurement]) -> list[str]:
    """What each flag that came up means, how often it did, and the mend."""
    counts = Counter(code for m in measurements for code in m.flags)
    return [f"{code} ({counts[code]}): {flag.sentence} {flag.mend}" for code, flag in REGISTRY.items() if counts[code]]


def fit_listings(devices: Sequence[ExplainedDevice]) -> list[Listing]:
    """For each device what could be fitted: parameters, C(V), shortest pulse, dark current."""
    out: list[Listing] = []
    for device in devices:
        out += [listing for listing in (_parameters(device), _capacitance(device)) if listing]
        out += [listing for listing in (_shortest(device), _dark(device)) if listing]
    return out


def _parameters(device: ExplainedDevice) -> Listing | None:
    fit = device.junction
    if fit is None:
        return None
    rows = [
        [PARAMETER_WORDS[name], cell(fit.parameters[name], name), interval(fit.parameters[name], name)]
        for name in PARAMETERS
        if name in fit.parameters
    ]
    return Listing(
        title=f"{device.title}: junction, model {fit.model}",
        columns=["parameter", "value", "95 % interval"],
        rows=rows,
        notes=fit.notes,
    )


def _capacitance(device: ExplainedDevice) -> Listing | None:
    if device.junction is None or not device.junction.capacitance:
        return None
    rows = [
        [format_quantity(p.bias_V, "V"), format_quantity(p.c_F, "F", u=p.u_c_F)] for p in device.junction.capacitance
    ]
    return Listing(title=f"{device.title}: junction and stray capacitance", columns=["bias", "C"], rows=rows)


def _shortest(device: ExplainedDevice) -> Listing | None:
    if not device.shortest:
        return None
    rows = [
        [
            format_quantity(p.bias_V, "V"),
            format_quantity(p.load_ohm, "Ω"),
            cell(p.shortest_pulse_s, "shortest_pulse_s"),
            cell(p.highest_rate_Hz, "highest_rate_Hz"),
        ]
        for p in device.shortest
    ]
    columns = ["bias", "load", "shortest pulse", "highest rate"]
    return Listing(title=f"{device.title}: shortest pulse", columns=columns, rows=rows)


def _dark(device: ExplainedDevice) -> Listing | None:
    fit = device.dark
    if fit is None or not fit.points:
        return None
    rows = [
        [format_quantity(p.bias_V, "V"), cell(p.current_A, "dark_current_A"), ", ".join(p.flags)] for p in fit.points
    ]
    title = f"{device.title}: {dark_current_words(device.device_kind)}" + (f", model {fit.model}" if fit.model else "")
    return Listing(title=title, columns=["bias", "dark current", "flags"], rows=rows, notes=fit.notes)


def choice_listings(choices: Sequence[Choice]) -> list[Listing]:
    """For each device the best pair or the nearest miss, and beside it what each other bias offers."""
    return [_choice(choice) for choice in choices]


def _choice(choice: Choice) -> Listing:
    element = f", element {choice.element}" if choice.element not in (None, 1) else ""
    shown = choice.best or choice.nearest
    rows = [
        [
            ">" if point is shown else "",
            format_quantity(point.bias_V, "V"),
            format_quantity(point.load_ohm, "Ω"),
            cell(point.signal_V, "signal_V"),
            cell(point.rise_time_s, "rise_time_s"),
            cell(point.shortest_pulse_s, "shortest_pulse_s"),
            cell(point.dark_current_A, "dark_current_A"),
            "; ".join(point.misses),
        ]
        for point in best_at_each_bias(choice)
    ]
    verdict = "the best pair is marked" if choice.best else "no pair meets every wish; the nearest miss is marked"
    wish = choice.wish
    criterion = (
        f"The shortest pulse keeps {100 * wish.amplitude_ratio:g} % of its amplitude and its width to "
        f"{100 * wish.distortion_ratio:g} %. Rise, shortest pulse and dark current are what the fits predict."
    )
    return Listing(
        title=f"{choice.device or 'unnamed device'}{element}, for a pulse of {format_quantity(wish.pulse_width_s, 's')}: {verdict}",
        columns=["", "bias", "load", "signal", "rise", "shortest pulse", "dark current", "what it misses"],
        rows=rows,
        notes=(criterion, *choice.notes),
    )


def best_at_each_bias(choice: Choice) -> list[OperatingPoint]:
    """At each bias the feasible load with the most signal, else the load with the fewest misses and the shortest pulse."""
    shown = choice.best or choice.nearest
    at: dict[float, list[OperatingPoint]] = {}
    for point in choice.candidates:
        at.setdefault(point.bias_V, []).append(point)
    return [shown if shown in points else min(points, key=_rank) for points in at.values() if shown is not None]


def _rank(point: OperatingPoint) -> tuple[int, float]:
    if point.misses:
        return len(point.misses), point.shortest_pulse_s.value or 0.0
    return 0, -(point.signal_V.value or 0.0) if point.signal_V else 0.0


def screening_listings(screening: Screening) -> list[Listing]:
    """Device by device and limit by limit, then the lots."""
    rows = [
        [
            device.lot or "–",
            device.device or "–",
            str(device.element or "–"),
            limit_words(held.limit),
            cell(held.estimate, held.limit.quantity),
            held.verdict.value.upper(),
            held.reason,
        ]
        for device in screening.devices
        for held in device.limits
    ]
    lots = [
        [lot.lot or "–", lot.verdict.value.upper(), str(lot.passed), str(lot.failed), str(lot.undecided)]
        for lot in screening.lots
    ]
    rule = f"rule {screening.rule.value}, confidence {100 * screening.confidence:g} %"
    columns = ["lot", "device", "element", "limit", "measured", "verdict", "why"]
    return [
        Listing(title=f"Devices ({rule})", columns=columns, rows=rows),
        Listing(title="Lots", columns=["lot", "verdict", "devices passed", "failed", "undecided"], rows=lots),
    ]
