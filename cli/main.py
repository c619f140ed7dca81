"""The command `darkedge`."""

from __future__ import annotations

import sys
from importlib.metadata import version
from typing import Annotated, Any

import typer
from typer.core import TyperGroup

from darkedge.cli import bench, choose, fit, measure, pack, plan, rehearse, report, screen, sweep


class _InOrder(TyperGroup):
    """Lists the commands in the order of the work."""

    def list_commands(self, ctx: Any) -> list[str]:  # noqa: ANN401 - the library keeps its type private
        """Names in order."""
        order = ("rehearse", "bench", "plan", "sweep", "measure", "pack", "fit", "choose", "screen", "report")
        return [*order, *(name for name in self.commands if name not in order)]


app = typer.Typer(
    name="darkedge",
    cls=_InOrder,
    help=(
        "Measure, explain, choose and screen fast light detectors: photodiodes, PINs, "
        "photodiode-plus-transistor switches, optocouplers."
    ),
    no_args_is_help=True,
    add_completion=False,
    pretty_exceptions_enable=False,
    rich_markup_mode=None,
)
app.command("rehearse", short_help="The whole job on invented parts, start to finish.")(rehearse.rehearse)
app.add_typer(
    plan.app,
    name="plan",
    short_help="Write a plan; hold one against ratings and instruments.",
    help="Write a plan, and hold one against ratings and instruments.",
)
app.add_typer(
    bench.app,
    name="bench",
    short_help="What answers; self-check; virtual instruments.",
    help="What answers, self-check, and virtual instruments on loopback.",
)
app.command("sweep", short_help="Carry out a plan on a device.")(sweep.sweep)
app.command("measure", short_help="Captures into the measurement table.")(measure.measure)
app.command("pack", short_help="Many captures into one file.")(pack.pack)
app.command("fit", short_help="Junction capacitance, shortest pulse, dark current.")(fit.fit)
app.command("choose", short_help="Bias and load for a wanted pulse.")(choose.choose)
app.command("screen", short_help="Verdicts for devices and lots.")(screen.screen)
app.command("report", short_help="One self-contained HTML page.")(report.report)


def _version(wanted: bool) -> None:
    if wanted:
        typer.echo(f"darkedge {version('darkedge')}")
        raise typer.Exit


@app.callback()
def main(
    *,
    show_version: Annotated[
        bool, typer.Option("--version", callback=_version, is_eager=True, help="Print the version and stop.")
    ] = False,
) -> None:
    """Measure, explain, choose and screen fast light detectors."""


def run() -> None:
    """Entry point: a console that cannot show a letter shows a question mark, never a traceback."""
    for stream in (sys.stdout, sys.stderr):
        reconfigure = getattr(stream, "reconfigure", None)
        if reconfigure is not None:
            reconfigure(errors="replace")
    app()
