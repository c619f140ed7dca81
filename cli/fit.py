"""`darkedge fit`: capacitance, speed and dark current of each device."""

from __future__ import annotations

import typer

from darkedge.cli.common import (
    Channels,
    ConditionsTable,
    FixtureFile,
    Json,
    Names,
    Paths,
    PlotFolder,
    guarded,
    print_listing,
    save_plots,
    say,
    take_in_paths,
    working,
)


@guarded
def fit(
    paths: Paths,
    *,
    names: Names = None,
    conditions: ConditionsTable = None,
    fixture: FixtureFile = None,
    channels: Channels = None,
    plots: PlotFolder = None,
    json: Json = False,
) -> int:
    """Fit junction capacitance, shortest pulse and dark current of each device, with 95 % intervals.

    Example:

    darkedge fit sample_captures/photodiode --plots plots
    """
    intake = take_in_paths(paths, names=names, conditions=conditions, fixture=fixture, channels=channels)
    from darkedge.analysis.explain import TRANSISTOR_OUTPUTS, explain_devices
    from darkedge.analysis.files.results_json import fits_json
    from darkedge.analysis.pictures.device import fit_figures
    from darkedge.cli.listing import fit_listings

    with working("fitting"):
        found = explain_devices(intake.measurements, fixture_for=intake.fixture_for)
    for error in found.errors:
        say(f"not fitted: {error}")
    for device in found.devices:
        if device.device_kind in TRANSISTOR_OUTPUTS:
            say(
                f"{device.title}: a transistor output does not show the junction's capacitance; no junction was fitted."
            )
    if json:
        typer.echo(fits_json(found.devices))
    else:
        for listing in fit_listings(found.devices):
            print_listing(listing)
    if plots is not None:
        save_plots(plots, fit_figures(found.devices))
    return intake.exit_status or found.exit_status
