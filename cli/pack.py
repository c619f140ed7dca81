"""`darkedge pack`: many captures into one file."""

from __future__ import annotations

from pathlib import Path
from typing import Annotated

import typer

from darkedge.cli.common import Channels, ConditionsTable, FixtureFile, Names, Paths, guarded, say, working


@guarded
def pack(
    paths: Paths,
    *,
    out: Annotated[
        Path,
        typer.Option("--out", "-o", metavar="FILE", help="The archive to write: .parquet.", show_default=False),
    ],
    names: Names = None,
    conditions: ConditionsTable = None,
    fixture: FixtureFile = None,
    channels: Channels = None,
) -> int:
    """Pack captures, with their conditions and what is known of the bench, into one file that every command reads.

    Samples are kept as 32-bit floats. The captures themselves are left where they are.

    Example:

    darkedge pack sample_captures/photodiode --out photodiode.parquet
    """
    from darkedge.analysis.files.intake import pack as pack_captures

    with working("packing"):
        packed = pack_captures(paths, out, names=names, conditions=conditions, fixture=fixture, channels=channels)
    for refusal in packed.refusals:
        say(f"refused: {refusal.error}")
    say(f"{packed.count} captures")
    typer.echo(f"archive: {out}")
    return 2 if packed.refusals else 0
