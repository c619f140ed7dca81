"""The pictures of one device, by name."""

from __future__ import annotations

from collections.abc import Sequence

from matplotlib.figure import Figure

from darkedge.analysis.decide.results import Choice
from darkedge.analysis.explain import ExplainedDevice
from darkedge.analysis.pictures.choice import plot_choice
from darkedge.analysis.pictures.fits import plot_capacitance, plot_edges
from darkedge.analysis.pictures.trends import plot_dark_current, plot_pulse_widths, plot_times

_EDGES = ("rise_time_s", "fall_time_s")
_SWITCHING = ("on_delay_s", "on_time_s", "storage_time_s", "off_time_s")


def device_figures(device: ExplainedDevice) -> dict[str, Figure]:
    """Pictures of what was fitted, and of the trends where nothing was.

    Names: `edges`, `capacitance`, or `edge times` where there is no junction fit; `switching times`, `pulse widths`,
    `dark current`.
    """
    found: dict[str, Figure | None] = {}
    if device.junction is not None:
        found["edges"] = plot_edges(device.junction, f"{device.title}: edge times against bias")
        if device.junction.capacitance:
            found["capacitance"] = plot_capacitance(device.junction, f"{device.title}: capacitance against bias")
    else:
        found["edge times"] = plot_times(
            device.measurements, "bias_V", _EDGES, f"{device.title}: edge times against bias"
        )
    found["switching times"] = plot_times(
        device.measurements, "emitter_current_A", _SWITCHING, f"{device.title}: switching times"
    )
    if device.shortest and device.widths:
        found["pulse widths"] = plot_pulse_widths(
            device.widths, device.shortest, f"{device.title}: what short pulses become"
        )
    if device.dark is not None and len(device.dark.points) > 1:
        found["dark current"] = plot_dark_current(device.dark, f"{device.title}: dark current against bias")
    return {name: figure for name, figure in found.items() if figure is not None}


def fit_figures(devices: Sequence[ExplainedDevice]) -> dict[str, Figure]:
    """All pictures of all devices, by a name that is safe to make a file name of."""
    return {f"{device.title} {name}": figure for device in devices for name, figure in device_figures(device).items()}


def choice_figures(choices: Sequence[Choice]) -> dict[str, Figure]:
    """One picture a choice."""
    return {f"{choice.device or 'unnamed'} {choice.element or 1} choice": plot_choice(choice) for choice in choices}
