"""Results as tables for people: rounded to the uncertainty, with the prefixes people say."""

from __future__ import annotations

from collections import Counter
from collections.abc import Sequence

from darkedge.analysis.columns import ALL_QUANTITIES
from darkedge.analysis.decide.results import Choice, LimitVerdict, OperatingPoint, Screening
from darkedge.analysis.explain import ExplainedDevice
from darkedge.analysis.flags import REGISTRY
from darkedge.analysis.junction.results import PARAMETERS
from darkedge.analysis.measurement import Estimate, Measurement
from darkedge.analysis.quantities import format_quantity, unit_of

Listing = tuple[str, list[str], list[list[str]]]
_HEADINGS = {
    "low_V": "low", "high_V": "high", "amplitude_V": "amplitude", "rise_time_s": "rise", "fall_time_s": "fall",
    "t_plh_s": "tPLH", "t_phl_s": "tPHL", "width_in_s": "width in", "width_out_s": "width out",
    "pulse_width_distortion_s": "PWD", "duty_in": "duty in", "duty_out": "duty out",
    "duty_cycle_distortion": "DCD", "jitter_s": "jitter", "dark_current_A": "dark current",
    "on_delay_s": "td", "on_time_s": "ton", "storage_time_s": "ts", "off_time_s": "toff",
    "current_transfer_ratio": "CTR", "output_low_V": "out low", "photocurrent_A": "photocurrent",
    "responsivity_A_per_W": "responsivity",
}  # fmt: skip
_LISTED = (
    "amplitude_V", "rise_time_s", "fall_time_s", "t_plh_s", "t_phl_s", "width_out_s", "duty_cycle_distortion",
    "on_delay_s", "on_time_s", "storage_time_s", "off_time_s", "dark_current_A",
)  # fmt: skip
_PARAMETER_WORDS = {
    "c_j0_F": "junction capacitance at zero bias", "v_bi_V": "built-in voltage", "grading": "grading exponent",
    "c_stray_F": "stray capacitance", "full_depletion_V": "full depletion at", "transit_s": "transit time",
}  # fmt: skip


def cell(estimate: Estimate | None, name: str) -> str:
    """A value with its uncertainty, a bound as a bound, a dash for what could not be had."""
    unit = unit_of(name).symbol
    if estimate is None:
        return "–"
    if estimate.value is not None:
        return format_quantity(estimate.value, unit, u=estimate.u)
    if estimate.hi95 is not None and estimate.lo95 is None:
        return f"< {format_quantity(estimate.hi95, unit)}"
    if estimate.lo95 is not None and estimate.hi95 is None:
        return f"> {format_quantity(estimate.lo95, unit)}"
    return f"{format_quantity(estimate.lo95, unit)} … {format_quantity(estimate.hi95, unit)}"


def interval(estimate: Estimate, name: str) -> str:
    """The 95 % interval, a dash where there is none."""
    if estimate.lo95 is None and estimate.hi95 is None:
        return "–"
    unit = unit_of(name).symbol
    return f"{format_quantity(estimate.lo95, unit)} … {format_quantity(estimate.hi95, unit)}"


def measurement_listing(measurements: Sequence[Measurement]) -> Listing:
    """One row a measurement; a column in which nothing stands is left out."""
    quantities = [q for q in _LISTED if q in ALL_QUANTITIES and any(q in m.quantities for m in measurements)]
    several = len({m.element for m in measurements} - {None}) > 1
    columns = ["capture", *(["element"] if several else []), "bias", "load"]
    columns += [_HEADINGS[q] for q in quantities] + ["flags"]
    rows = []
    for m in measurements:
        known = m.conditions
        row = [m.capture, *([str(m.element or "–")] if several else [])]
        row += [format_quantity(known.bias_V, "V"), format_quantity(known.load_ohm, "Ω")]
        row += [cell(m.quantities.get(q), q) for q in quantities]
        rows.append([*row, ", ".join(m.flags)])
    return "", columns, rows


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
        [_PARAMETER_WORDS[name], cell(fit.parameters[name], name), interval(fit.parameters[name], name)]
        for name in PARAMETERS
        if name in fit.parameters
    ]
    rows += [["note", note, ""] for note in fit.notes]
    return f"{device.title}: junction, model {fit.model}", ["parameter", "value", "95 % interval"], rows


def _capacitance(device: ExplainedDevice) -> Listing | None:
    if device.junction is None or not device.junction.capacitance:
        return None
    rows = [
        [format_quantity(p.bias_V, "V"), format_quantity(p.c_F, "F", u=p.u_c_F)] for p in device.junction.capacitance
    ]
    return f"{device.title}: junction and stray capacitance", ["bias", "C"], rows


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
    return f"{device.title}: shortest pulse", ["bias", "load", "shortest pulse", "highest rate"], rows


def _dark(device: ExplainedDevice) -> Listing | None:
    fit = device.dark
    if fit is None or not fit.points:
        return None
    rows = [
        [format_quantity(p.bias_V, "V"), cell(p.current_A, "dark_current_A"), ", ".join(p.flags)] for p in fit.points
    ]
    rows += [["note", note, ""] for note in fit.notes]
    title = f"{device.title}: dark current" + (f", model {fit.model}" if fit.model else "")
    return title, ["bias at the junction", "dark current", "flags"], rows


def choice_listings(choices: Sequence[Choice]) -> list[Listing]:
    """For each device the best pair or the nearest miss, then all candidates."""
    out: list[Listing] = []
    for choice in choices:
        name = ", ".join(
            str(x) for x in (choice.device or "unnamed device", choice.element and f"element {choice.element}") if x
        )
        shown = choice.best or choice.nearest
        verdict = (
            "no bias and load meets every wish; the nearest miss is marked" if choice.best is None else "best marked"
        )
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
            for point in _worth_showing(choice, shown)
        ]
        rows += [["", "note", note, "", "", "", "", ""] for note in choice.notes]
        columns = ["", "bias", "load", "signal", "rise", "shortest pulse", "dark current", "misses"]
        out.append((f"{name}: {verdict}", columns, rows))
    return out


def _worth_showing(choice: Choice, shown: OperatingPoint | None) -> Sequence[OperatingPoint]:
    feasible = [p for p in choice.candidates if not p.misses or p is shown]
    return feasible or choice.candidates


def screening_listings(screening: Screening) -> list[Listing]:
    """Device by device and limit by limit, then the lots."""
    rows = [
        [
            device.lot or "–",
            device.device or "–",
            str(device.element or "–"),
            _limit_words(held),
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
    return [
        (f"Devices ({rule})", ["lot", "device", "element", "limit", "measured", "verdict", "why"], rows),
        ("Lots", ["lot", "verdict", "passed", "failed", "undecided"], lots),
    ]


def _limit_words(held: LimitVerdict) -> str:
    limit = held.limit
    unit = unit_of(limit.quantity).symbol
    bounds = [f"≥ {format_quantity(limit.lower, unit)}"] if limit.lower is not None else []
    bounds += [f"≤ {format_quantity(limit.upper, unit)}"] if limit.upper is not None else []
    when = ", ".join(
        f"{key} {value if isinstance(value, str) else format_quantity(value, unit_of(key).symbol)}"
        for key, value in limit.when.items()
    )
    name = _HEADINGS.get(limit.quantity, limit.quantity)
    return f"{name} {' and '.join(bounds)}" + (f" at {when}" if when else "")
