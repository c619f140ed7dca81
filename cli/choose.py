"""`darkedge choose`: bias and load for a wanted pulse."""

from __future__ import annotations

from typing import TYPE_CHECKING, Annotated

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

if TYPE_CHECKING:
    from darkedge.analysis.decide.results import Wish


def _wish(*, rails: str | None, loads: str | None, **texts: str | None) -> Wish:
    from darkedge.analysis.decide.results import Wish
    from darkedge.analysis.quantities import parse_list, parse_quantity

    keys = {
        "pulse_width": "pulse_width_s",
        "distortion": "distortion_ratio",
        "amplitude": "amplitude_ratio",
        "dark_current": "dark_current_A",
        "min_signal": "min_signal_V",
        "max_bias": "max_bias_V",
        "stray": "board_stray_F",
        "emitter_current": "emitter_current_A",
    }
    numbers = {keys[name]: parse_quantity(text, keys[name]) for name, text in texts.items() if text is not None}
    return Wish(rails_V=parse_list(rails or "", "rails_V"), loads_ohm=parse_list(loads or "", "loads_ohm"), **numbers)


def _wish_option(flag: str, metavar: str, text: str) -> object:
    return typer.Option(flag, metavar=metavar, help=text, show_default=False)


@guarded
def choose(
    paths: Paths,
    *,
    pulse_width: Annotated[
        str, _wish_option("--pulse-width", "TIME", "The shortest pulse that must come through, such as '2 us'.")
    ],
    distortion: Annotated[
        str,
        typer.Option("--distortion", metavar="RATIO", help="Largest change of the pulse's width, of the width."),
    ] = "10 %",
    amplitude: Annotated[
        str,
        typer.Option("--amplitude", metavar="RATIO", help="Least part of the settled amplitude to be reached."),
    ] = "90 %",
    dark_current: Annotated[
        str | None, _wish_option("--dark-current", "CURRENT", "Largest dark current, such as '5 nA'.")
    ] = None,
    min_signal: Annotated[
        str | None, _wish_option("--min-signal", "VOLTAGE", "Least settled signal, such as '50 mV'.")
    ] = None,
    rails: Annotated[
        str | None, _wish_option("--rails", "LIST", "Supplies that exist, such as '5 V, 12 V'; else those measured.")
    ] = None,
    loads: Annotated[
        str | None, _wish_option("--loads", "LIST", "Loads to consider, such as '1 kohm, 4.7 kohm'; else a series.")
    ] = None,
    max_bias: Annotated[
        str | None, _wish_option("--max-bias", "VOLTAGE", "Rated reverse voltage, not to be exceeded.")
    ] = None,
    stray: Annotated[
        str | None,
        _wish_option("--stray", "CAPACITANCE", "Stray capacitance on the target board; else that of the fixture."),
    ] = None,
    emitter_current: Annotated[
        str | None,
        _wish_option("--emitter-current", "CURRENT", "Light level, as one of the emitter currents measured."),
    ] = None,
    names: Names = None,
    conditions: ConditionsTable = None,
    fixture: FixtureFile = None,
    channels: Channels = None,
    plots: PlotFolder = None,
    json: Json = False,
) -> int:
    """Choose bias and load: fast enough for the pulse, with the most signal, inside the other wishes.

    The exit status is 0 when every device has such a pair and 1 when one has none; the nearest miss is shown then.

    Example:

    darkedge choose sample_captures/photodiode --pulse-width '2 us' --rails '5 V, 12 V' --dark-current '5 nA'
    """
    from darkedge.analysis.explain import choose_for_devices
    from darkedge.analysis.files.results_json import choices_json
    from darkedge.analysis.pictures.device import choice_figures
    from darkedge.cli.listing import choice_listings

    wish = _wish(
        pulse_width=pulse_width,
        distortion=distortion,
        amplitude=amplitude,
        dark_current=dark_current,
        min_signal=min_signal,
        rails=rails,
        loads=loads,
        max_bias=max_bias,
        stray=stray,
        emitter_current=emitter_current,
    )
    intake = take_in_paths(paths, names=names, conditions=conditions, fixture=fixture, channels=channels)
    with working("fitting and choosing"):
        found = choose_for_devices(intake.measurements, wish=wish, fixture_for=intake.fixture_for)
    for error in found.errors:
        say(f"no choice: {error}")
    if json:
        typer.echo(choices_json(found.choices))
    else:
        for listing in choice_listings(found.choices):
            print_listing(listing)
    if plots is not None:
        save_plots(plots, choice_figures(found.choices))
    return intake.exit_status or found.exit_status
