"""The report page: one self-contained HTML file, verdict first."""

from __future__ import annotations

from collections import Counter
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field
from importlib.resources import files

from jinja2 import Environment, StrictUndefined, select_autoescape
from markupsafe import Markup
from matplotlib.figure import Figure

from darkedge.analysis.captures import Kind
from darkedge.analysis.cautions import Caution
from darkedge.analysis.decide.results import Choice, DeviceVerdict, LimitVerdict, Screening, Verdict
from darkedge.analysis.explain import ExplainedDevice
from darkedge.analysis.flags import REGISTRY, Flag
from darkedge.analysis.junction.results import PARAMETERS
from darkedge.analysis.measurement import Measurement
from darkedge.analysis.pictures.choice import plot_choice
from darkedge.analysis.pictures.device import device_figures
from darkedge.analysis.pictures.lots import plot_limit
from darkedge.analysis.pictures.saving import as_data_uri
from darkedge.analysis.pictures.words import (
    CONDITION_WORDS,
    PARAMETER_WORDS,
    QUANTITY_WORDS,
    cell,
    dark_current_words,
    interval,
    limit_words,
)
from darkedge.analysis.quantities import format_quantity

MOST_ROWS = 400
"""Rows of the measurement table on the page; the saved table holds all of them."""
MOST_DEVICE_PICTURES = 12
_PULSE_COLUMNS = (
    "amplitude_V", "rise_time_s", "fall_time_s", "t_plh_s", "t_phl_s", "width_out_s", "duty_cycle_distortion",
)  # fmt: skip
_SWITCH_COLUMNS = (
    "output_low_V", "rise_time_s", "fall_time_s", "t_plh_s", "t_phl_s", "on_delay_s", "on_time_s", "storage_time_s",
    "off_time_s",
)  # fmt: skip


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class WaveformPicture:
    """One annotated capture: its figure, what it shows in words, and its flags."""

    capture: str
    figure: Figure
    words: str
    flags: tuple[str, ...] = ()


@dataclass(frozen=True, slots=True, kw_only=True)
class ReportContent:
    """Everything that goes onto the page. `made` and `sources` are text, given by whoever knows the clock and the paths."""

    title: str
    made: str
    version: str
    sources: tuple[str, ...]
    measurements: tuple[Measurement, ...]
    screening: Screening | None = None
    limits_source: str = ""
    devices: tuple[ExplainedDevice, ...] = ()
    fit_errors: tuple[str, ...] = ()
    choices: tuple[Choice, ...] = ()
    waveforms: Sequence[WaveformPicture] = field(default_factory=tuple)
    waveforms_left_out: int = 0
    refusals: tuple[tuple[str, str], ...] = ()
    cautions: tuple[Caution, ...] = ()
    fixture_facts: tuple[str, ...] = ()


@dataclass(frozen=True, slots=True, kw_only=True)
class _Picture:
    uri: Markup
    alt: str


def render_report(content: ReportContent) -> str:
    """Return the page as HTML: no network, no script, everything inside; names from outside are escaped."""
    environment = Environment(
        autoescape=select_autoescape(default=True), undefined=StrictUndefined, trim_blocks=True, finalize=_printable
    )
    template = environment.from_string(files(__package__ or "").joinpath("report.html").read_text(encoding="utf-8"))
    screening = content.screening
    return template.render(
        content=content,
        css=Markup(files(__package__ or "").joinpath("report.css").read_text(encoding="utf-8")),
        sentences={code: f"{flag.sentence} {flag.mend}" for code, flag in REGISTRY.items()},
        limits=[] if screening is None or not screening.devices else [v.limit for v in screening.devices[0].limits],
        held_devices=[] if screening is None else sorted(screening.devices, key=lambda d: _GRAVITY[d.verdict]),
        not_passed=[] if screening is None else _not_passed(screening),
        limit_pictures=_limit_pictures(content),
        device_sections=[_device_section(d) for d in _worth_a_section(content.devices)],
        devices_left_out=max(0, len(_shown(content.devices)) - MOST_DEVICE_PICTURES),
        choice_pictures=[
            _picture(plot_choice(c), f"Speed against signal of {c.device or 'unnamed device'}") for c in content.choices
        ],
        waveform_pictures=[(_picture(w.figure, w.words), w) for w in content.waveforms],
        tables=_tables(content.measurements),
        rows_left_out=max(0, len(content.measurements) - MOST_ROWS),
        counts=_counts(content.measurements),
        summary=_summary(content.measurements),
        methods=_methods(content.measurements),
        flags=_flags(content.measurements),
        limit_words=limit_words,
        held_cell=_held_cell,
        name_of=_name_of,
    )


_GRAVITY = {Verdict.FAIL: 0, Verdict.UNDECIDED: 1, Verdict.PASS: 2}


def _printable(value: object) -> object:
    """Text as a page can hold it: control characters, halves of surrogate pairs and the like are shown as unreadable."""
    if not isinstance(value, str) or isinstance(value, Markup):
        return value
    return "".join(c if c.isprintable() else " " if c in "\n\t" else "\N{REPLACEMENT CHARACTER}" for c in value)


def _not_passed(screening: Screening) -> list[tuple[DeviceVerdict, LimitVerdict]]:
    """Every limit that a device does not pass, failures first."""
    found = [(d, v) for d in screening.devices for v in d.limits if v.verdict is not Verdict.PASS]
    return sorted(found, key=lambda pair: _GRAVITY[pair[1].verdict])


def _name_of(device: DeviceVerdict) -> str:
    element = f", element {device.element}" if device.element not in (None, 1) else ""
    return f"{device.device or 'unnamed device'}{element}"


def _summary(measurements: Sequence[Measurement]) -> list[tuple[str, ...]]:
    """For each device what was measured of it: captures, and the span of bias and load."""
    groups: dict[tuple[str | None, str | None], list[Measurement]] = {}
    for m in measurements:
        if "refused" not in m.flags:
            groups.setdefault((m.conditions.lot, m.conditions.device), []).append(m)
    return [
        (
            ", ".join(x for x in (lot, device or "unnamed device") if x),
            _kind_words(rows),
            _span([m.conditions.bias_V for m in rows], "V"),
            _span([m.conditions.load_ohm for m in rows], "Ω"),
            str(len({flag for m in rows for flag in m.flags}) or "none"),
        )
        for (lot, device), rows in groups.items()
    ]


def _kind_words(rows: Sequence[Measurement]) -> str:
    counts = Counter((m.conditions.kind or Kind.PULSE).value for m in {m.capture: m for m in rows}.values())
    return ", ".join(f"{count} {kind}" for kind, count in counts.items())


def _span(values: Sequence[float | None], unit: str) -> str:
    known = sorted({v for v in values if v is not None})
    if not known:
        return "–"
    ends = [format_quantity(v, unit) for v in (known[0], known[-1])]
    return ends[0] if len(known) == 1 else f"{ends[0]} … {ends[1]}"


def _methods(measurements: Sequence[Measurement]) -> list[tuple[str, str, int]]:
    """Which levels and which estimator made the rows, and how many."""
    counts = Counter((m.levels, m.estimator) for m in measurements if m.quantities)
    return [(levels or "–", estimator or "–", count) for (levels, estimator), count in counts.most_common()]


def _picture(figure: Figure, alt: str) -> _Picture:
    return _Picture(uri=Markup(as_data_uri(figure)), alt=alt)


def _limit_pictures(content: ReportContent) -> list[_Picture]:
    screening = content.screening
    if screening is None or not screening.devices:
        return []
    found = []
    for place, held in enumerate(screening.devices[0].limits):
        shown = [d for d in screening.devices if d.limits[place].estimate is not None]
        if shown:
            words = limit_words(held.limit)
            found.append(_picture(plot_limit(shown, place, words), f"All devices against the limit {words}"))
    return found


def _held_cell(held: LimitVerdict) -> str:
    return cell(held.estimate, held.limit.quantity)


def _shown(devices: Sequence[ExplainedDevice]) -> list[ExplainedDevice]:
    return [d for d in devices if d.junction or (d.shortest and d.widths) or (d.dark and len(d.dark.points) > 1)]


def _worth_a_section(devices: Sequence[ExplainedDevice]) -> list[ExplainedDevice]:
    return _shown(devices)[:MOST_DEVICE_PICTURES]


def _device_section(device: ExplainedDevice) -> Mapping[str, object]:
    junction = device.junction
    parameters = []
    if junction is not None:
        parameters = [
            (PARAMETER_WORDS[n], cell(junction.parameters[n], n), interval(junction.parameters[n], n))
            for n in PARAMETERS
            if n in junction.parameters
        ]
    notes = (*(junction.notes if junction else ()), *(device.dark.notes if device.dark else ()))
    return {
        "title": device.title,
        "model": "" if junction is None else junction.model.replace("_", " "),
        "parameters": parameters,
        "shortest": [
            (
                format_quantity(p.bias_V, "V"),
                format_quantity(p.load_ohm, "Ω"),
                cell(p.shortest_pulse_s, "shortest_pulse_s"),
                cell(p.highest_rate_Hz, "highest_rate_Hz"),
            )
            for p in device.shortest
        ],
        "dark_words": dark_current_words(device.device_kind),
        "dark": [
            (format_quantity(p.bias_V, "V"), cell(p.current_A, "dark_current_A"), p.flags)
            for p in (device.dark.points if device.dark else ())
        ],
        "notes": notes,
        "pictures": [_picture(f, f"{device.title}: {name}") for name, f in device_figures(device).items()],
    }


def _tables(measurements: Sequence[Measurement]) -> list[Mapping[str, object]]:
    """Pulses in a load, transistor outputs and dark traces each in a table with the columns that matter to them."""
    shown = measurements[:MOST_ROWS]
    still = [m for m in shown if m.conditions.kind is Kind.DARK]
    pulses = [m for m in shown if m.conditions.kind not in (Kind.DARK, Kind.OFFSET)]
    switches = [m for m in pulses if "on_delay_s" in m.quantities or "storage_time_s" in m.quantities]
    others = [m for m in pulses if m not in switches]
    groups = (
        ("Pulses", others, _PULSE_COLUMNS),
        ("Transistor outputs", switches, _SWITCH_COLUMNS),
        ("Dark traces", still, ("dark_current_A",)),
    )
    return [_table(caption, rows, columns) for caption, rows, columns in groups if rows]


def _table(caption: str, rows: Sequence[Measurement], columns: Sequence[str]) -> Mapping[str, object]:
    """One table, its rows gathered under the device and the folder that they share."""
    quantities = [q for q in columns if any(q in m.quantities for m in rows)]
    several = len({m.element for m in rows}) > 1
    groups: dict[str, list[Mapping[str, object]]] = {}
    for m in rows:
        folder, _, name = m.capture.rpartition("/")
        lot = f"lot {m.conditions.lot}" if m.conditions.lot else ""
        heading = " · ".join(x for x in (m.conditions.device or "unnamed device", lot, folder) if x)
        cells = [
            *([str(m.element or "–")] if several else []),
            format_quantity(m.conditions.bias_V, "V"),
            format_quantity(m.conditions.load_ohm, "Ω"),
            *(cell(m.quantities.get(q), q) for q in quantities),
        ]
        groups.setdefault(heading, []).append({"name": name, "cells": cells, "flags": m.flags})
    heads = ["capture", *(["element"] if several else []), CONDITION_WORDS["bias_V"], CONDITION_WORDS["load_ohm"]]
    return {"caption": caption, "columns": heads + [QUANTITY_WORDS[q] for q in quantities], "groups": groups}


def _counts(measurements: Sequence[Measurement]) -> Mapping[str, int]:
    return {
        "captures": len({m.capture for m in measurements}),
        "devices": len({(m.conditions.lot, m.conditions.device) for m in measurements if m.conditions.device}),
        "refused": sum("refused" in m.flags for m in measurements),
    }


def _flags(measurements: Sequence[Measurement]) -> list[tuple[Flag, int]]:
    counts = {code: sum(code in m.flags for m in measurements) for code in REGISTRY}
    return [(REGISTRY[code], count) for code, count in counts.items() if count]
