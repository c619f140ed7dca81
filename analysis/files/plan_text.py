"""The text of a new plan, each key explained; what `read_plan` reads back."""

from __future__ import annotations

from dataclasses import dataclass

_COLUMN = 54
KINDS = ("photodiode", "pin", "transistor_switch", "optocoupler")


@dataclass(frozen=True, slots=True, kw_only=True)
class _Example:
    """What differs between the kinds in a first plan."""

    connection: str
    ratings: tuple[str, ...]
    emitter: str
    loads: str
    biases: str
    currents: str
    widths: str
    dark: tuple[str, ...]


_DIODE = _Example(
    connection="load_to_ground",
    ratings=("reverse_bias_V = 32 # of the data sheet; nothing goes beyond it",),
    emitter='kind = "led" # led | laser | inside_device',
    loads='["1 kohm", "10 kohm"] # two, at least 4x apart, tell the junction from the rest',
    biases='{ from = 1, to = 30, points = 8, spacing = "log" }',
    currents='["5 mA"]',
    widths='["1 us", "10 us"]',
    dark=(
        "[dark] # leave the section out for none",
        'load_ohm = "1 Mohm" # sense resistor; the scope\'s input is in parallel with it',
        "bias_V = [1, 5, 12, 30]",
        "settle_s = 2 # wait after each change of bias",
        'duration_s = "200 ms" # of each trace: whole mains periods',
        "",
    ),
)
_SWITCH = _Example(
    connection="pull_up",
    ratings=(
        "collector_emitter_V = 30 # of the data sheet; nothing goes beyond it",
        'collector_current_A = "50 mA"',
    ),
    emitter='kind = "led" # led | laser | inside_device',
    loads='["1 kohm", "4.7 kohm"] # the pull-up',
    biases="[5] # the collector supply",
    currents='["5 mA", "10 mA", "20 mA"] # storage time grows with overdrive',
    widths='["100 us"]',
    dark=(),
)


def plan_text(kind: str, *, title: str = "First look", elements: int = 1) -> str:
    """A plan for a kind of device, ready to be changed.

    Parameters
    ----------
    kind : str
        One of `KINDS`.
    """
    example = _SWITCH if kind in ("transistor_switch", "optocoupler") else _DIODE
    emitter = 'kind = "inside_device" # led | laser | inside_device' if kind == "optocoupler" else example.emitter
    lines = [
        'format = "darkedge-plan 1"',
        f'title = "{title}"',
        "",
        '# A number is in the unit its key ends in; a string may carry a unit: 5, "5 V" and "5000 mV" are the same bias_V.',
        "",
        "[device]",
        f'kind = "{kind}"' + " # photodiode | pin | transistor_switch | optocoupler",
        f"elements = {elements}" + " # a dual part has 2",
        f'output_connection = "{example.connection}"' + " # load_to_ground | pull_up | emitter_resistor",
        "",
        "[ratings] # one that the plan needs and lacks is refused",
        *example.ratings,
        'emitter_peak_current_A = "100 mA"',
        'emitter_mean_current_A = "20 mA"',
        "# emitter_reverse_V = 5 # needed where drive.low_V is below zero",
        "# bias_above_60_V = true # the explicit word, for qualified people only",
        "",
        "[emitter] # kind and wavelength are mandatory: cautions depend on them",
        emitter,
        'wavelength_m = "850 nm"',
        "series_ohm = 220 # between generator and emitter",
        "forward_V = 1.5 # of the emitter at the current used",
        'reference = "voltage" # what the drive channel shows: voltage | current | light',
        "",
        "[axes] # every combination is measured; outermost first",
        f"load_ohm = {example.loads}",
        'load_change = "ask" # fixed | ask | switched',
        f"element = {list(range(1, elements + 1))}" + " # which emitters are driven, one after another",
        f"bias_V = {example.biases}",
        f"emitter_current_A = {example.currents}",
        f"pulse_width_s = {example.widths}",
        "repeats = 1",
        "",
        "[drive]",
        "duty = 0.10 # or period_s: two different sweeps",
        "low_V = 0 # below zero the emitter sees it in reverse",
        "",
        *example.dark,
        "# [expected] # roughly; `plan check` foresees swing and edges from it",
        "# photocurrent_ratio = 0.002 # photocurrent over emitter current",
        '# capacitance_F = "50 pF" # of the junction in the middle of the bias range',
        "",
        "# [fixture] # what is true of the bench: loads, stray, skew, response",
        '# file = "fixture.toml"',
        "",
    ]
    return "\n".join(_lined_up(line) for line in lines)


def _lined_up(line: str) -> str:
    """The comment behind a key in its column."""
    start = line[:2] if line.startswith("# ") else ""
    key, mark, comment = line.removeprefix(start).partition(" # ")
    return f"{start}{key.rstrip()}".ljust(_COLUMN) + f" # {comment}" if mark else line
