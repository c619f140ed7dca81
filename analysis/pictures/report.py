"""The report page: one self-contained HTML file, verdict first."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field
from importlib.resources import files

from jinja2 import Environment, StrictUndefined, select_autoescape
from markupsafe import Markup
from matplotlib.figure import Figure

from darkedge.analysis.captures import Kind
from darkedge.analysis.cautions import Caution
from darkedge.analysis.decide.results import Choice, LimitVerdict, Screening
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
    environment = Environment(autoescape=select_autoescape(default=True), undefined=StrictUndefined, trim_blocks=True)
    template = environment.from_string(files(__package__ or "").joinpath("report.html").read_text(encoding="utf-8"))
    return template.render(
        content=content,
        css=Markup(files(__package__ or "").joinpath("report.css").read_text(encoding="utf-8")),
        verdict=None if content.screening is None else content.screening.verdict.value,
        limit_pictures=_limit_pictures(content),
        device_sections=[_device_section(d) for d in _worth_a_section(content.devices)],
        devices_left_out=max(0, len(_shown(content.devices)) - MOST_DEVICE_PICTURES),
        choice_pictures=[_picture(plot_choice(c), f"Speed against signal of {c.device}") for c in content.choices],
        waveform_pictures=[(_picture(w.figure, w.words), w) for w in content.waveforms],
        tables=_tables(content.measurements),
        rows_left_out=max(0, len(content.measurements) - MOST_ROWS),
        counts=_counts(content.measurements),
        flags=_flags(content.measurements),
        limit_words=limit_words,
        held_cell=_held_cell,
    )


def _picture(figure: Figure, alt: str) -> _Picture:
    return _Picture(uri=Markup(as_data_uri(figure)), alt=alt)


def _limit_pictures(content: ReportContent) -> list[_Picture]:
    screening = content.screening
    if screening is None:
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
            (format_quantity(p.bias_V, "V"), cell(p.current_A, "dark_current_A"), ", ".join(p.flags))
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
    quantities = [q for q in columns if any(q in m.quantities for m in rows)]
    several = len({m.element for m in rows}) > 1
    return {
        "caption": caption,
        "columns": [
            "capture", "device", *(["element"] if several else []), CONDITION_WORDS["bias_V"], CONDITION_WORDS["load_ohm"],
            *(QUANTITY_WORDS[q] for q in quantities),
        ],
        "rows": [
            {
                "cells": [
                    m.capture,
                    m.conditions.device or "–",
                    *([str(m.element or "–")] if several else []),
                    format_quantity(m.conditions.bias_V, "V"),
                    format_quantity(m.conditions.load_ohm, "Ω"),
                    *(cell(m.quantities.get(q), q) for q in quantities),
                ],
                "flags": m.flags,
            }
            for m in rows
        ],
    }  # fmt: skip


def _counts(measurements: Sequence[Measurement]) -> Mapping[str, int]:
    return {
        "captures": len({m.capture for m in measurements}),
        "devices": len({(m.conditions.lot, m.conditions.device) for m in measurements if m.conditions.device}),
        "refused": sum("refused" in m.flags for m in measurements),
    }


def _flags(measurements: Sequence[Measurement]) -> list[tuple[Flag, int]]:
    counts = {code: sum(code in m.flags for m in measurements) for code in REGISTRY}
    return [(REGISTRY[code], count) for code, count in counts.items() if count]
