"""The pictures of one device, by name."""

from __future__ import annotations

from collections.abc import Sequence

from matplotlib.figure import Figure

from darkedge.analysis.decide.results import Choice
from darkedge.analysis.explain import ExplainedDevice
from darkedge.analysis.pictures.choice import plot_choice
from darkedge.analysis.pictures.fits import plot_capacitance, plot_edges
from darkedge.analysis.pictures.trends import plot_dark_current, plot_pulse_widths


def device_figures(device: ExplainedDevice) -> dict[str, Figure]:
    """Pictures of what could be fitted: `edges`, `capacitance`, `pulse widths`, `dark current`."""
    found: dict[str, Figure] = {}
    if device.junction is not None:
        found["edges"] = plot_edges(device.junction, f"{device.title}: edge times against bias")
        found["capacitance"] = plot_capacitance(device.junction, f"{device.title}: capacitance against bias")
    if device.shortest and device.widths:
        found["pulse widths"] = plot_pulse_widths(
            device.widths, device.shortest, f"{device.title}: what short pulses become"
        )
    if device.dark is not None and len(device.dark.points) > 1:
        found["dark current"] = plot_dark_current(device.dark, f"{device.title}: dark current against bias")
    return found


def fit_figures(devices: Sequence[ExplainedDevice]) -> dict[str, Figure]:
    """All pictures of all devices, by a name that is safe to make a file name of."""
    return {f"{device.title} {name}": figure for device in devices for name, figure in device_figures(device).items()}


def choice_figures(choices: Sequence[Choice]) -> dict[str, Figure]:
    """One picture a choice."""
    return {f"{choice.device or 'unnamed'} {choice.element or 1} choice": plot_choice(choice) for choice in choices}
