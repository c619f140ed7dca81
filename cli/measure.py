"""`darkedge measure`: captures into the measurement table."""

from __future__ import annotations

from pathlib import Path
from typing import TYPE_CHECKING, Annotated

import typer

from darkedge.cli.common import (
    Channels,
    Cluster,
    ConditionsTable,
    FixtureFile,
    Jobs,
    Json,
    Names,
    Paths,
    guarded,
    print_listing,
    say,
    take_in_paths,
)

if TYPE_CHECKING:
    from darkedge.analysis.waveform.reference import ReferenceLevels

Out = Annotated[
    Path | None,
    typer.Option(
        "--out",
        "-o",
        metavar="FILE",
        help="Save the table: .csv, .json or .parquet. Every other command reads it back.",
        show_default=False,
    ),
]


@guarded
def measure(
    paths: Paths,
    *,
    names: Names = None,
    conditions: ConditionsTable = None,
    fixture: FixtureFile = None,
    channels: Channels = None,
    out: Out = None,
    jobs: Jobs = 1,
    cluster: Cluster = None,
    levels: Annotated[
        str | None,
        typer.Option(
            "--levels",
            metavar="LIST",
            help="Between which levels edges are timed: '20 %, 80 %'; else 10 and 90 %.",
            show_default=False,
        ),
    ] = None,
    threshold: Annotated[
        str | None,
        typer.Option(
            "--threshold",
            metavar="LIST",
            help="Volts at which delays and widths of the output are taken: '1.4 V', or '2 V, 0.8 V' rising and falling; else 50 %.",
            show_default=False,
        ),
    ] = None,
    budget: Annotated[
        bool, typer.Option("--budget", help="Show what the uncertainty of each quantity is put together from.")
    ] = False,
    explain: Annotated[
        bool, typer.Option("--explain", help="Show how each file was understood, and measure nothing more.")
    ] = False,
    json: Json = False,
) -> int:
    """Measure captures: levels, rise and fall time, delays, widths, dark current, each with its uncertainty.

    Example:

    darkedge measure sample_captures/foreign --names '{device}_{bias_V}V_{load_ohm}ohm'
    """
    intake = take_in_paths(
        paths,
        names=names,
        conditions=conditions,
        fixture=fixture,
        channels=channels,
        jobs=jobs,
        cluster=cluster,
        reference=_reference(levels, threshold),
    )
    from darkedge.analysis.files.tables import table_json, write_table
    from darkedge.cli.listing import budget_listings, flag_lines, measurement_listing, reading_listings

    if out is not None:
        write_table(intake.measurements, out)
        say(f"table: {out}")
    if budget:
        for listing in budget_listings(intake, reference=_reference(levels, threshold)):
            print_listing(listing)
    elif explain:
        for listing in reading_listings(intake):
            print_listing(listing)
    elif json:
        typer.echo(table_json(intake.measurements))
    elif out is None:
        print_listing(measurement_listing(intake.measurements))
        for line in flag_lines(intake.measurements):
            say(line)
    return intake.exit_status


def _reference(levels: str | None, threshold: str | None) -> ReferenceLevels:
    from darkedge.analysis.errors import InputError
    from darkedge.analysis.quantities import parse_list
    from darkedge.analysis.waveform.reference import ReferenceLevels

    outer = parse_list(levels, "levels_ratio") if levels is not None else (0.1, 0.9)
    fixed = parse_list(threshold, "threshold_V") if threshold is not None else ()
    if len(outer) != 2:
        raise InputError("wanted two levels", where="--levels", found=repr(levels), wanted="such as 20 %, 80 %")
    if len(fixed) > 2 or (threshold is not None and not fixed):
        raise InputError(
            "wanted one voltage or two", where="--threshold", found=repr(threshold), wanted="1.4 V, or 2 V, 0.8 V"
        )
    return ReferenceLevels(
        low_ratio=outer[0],
        high_ratio=outer[1],
        rising_V=fixed[0] if fixed else None,
        falling_V=fixed[-1] if fixed else None,
    )
