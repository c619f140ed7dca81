"""`darkedge sweep`: a plan carried out on a device."""

from __future__ import annotations

from pathlib import Path
from typing import Annotated

import typer

from darkedge.cli.bench_talk import SweepBar, check_device_name, heard_in, say_left_on, say_met
from darkedge.cli.common import guarded, say

BenchFile = Annotated[
    Path,
    typer.Option("--bench", metavar="FILE", help="Which instruments, and what is wired to what.", show_default=False),
]
PlanFile = Annotated[Path, typer.Argument(metavar="PLAN", help="The plan file.", show_default=False)]


@guarded
def sweep(
    plan: PlanFile,
    *,
    bench: BenchFile,
    device: Annotated[
        str,
        typer.Option("--device", metavar="NAME", help="Serial number of the device in the socket.", show_default=False),
    ],
    into: Annotated[
        Path,
        typer.Option("--into", metavar="FOLDER", help="Where the run folder is made; a lot folder holds lot.toml."),
    ] = Path(),
    temperature: Annotated[
        str | None,
        typer.Option("--temperature", metavar="TEMP", help="Ambient, such as '23.5 degC'.", show_default=False),
    ] = None,
    resume: Annotated[
        bool, typer.Option("--resume", help="Go on with a run that stopped: exactly what is missing.")
    ] = False,
    log: Annotated[
        Path | None,
        typer.Option("--log", metavar="FILE", help="Keep every message sent to the bench.", show_default=False),
    ] = None,
) -> int:
    """Carry out a plan: bias ramped, scope ranged, every point saved as it is taken, everything off at the end.

    The run folder is INTO/DEVICE. However the run ends, every output that can be switched off is off, and what was taken
    is safe.

    Example:

    darkedge sweep plan.toml --bench bench.toml --device SP-2-01
    """
    from darkedge.analysis.files.bench_file import read_bench
    from darkedge.analysis.files.lot_file import NAME as LOT_NAME
    from darkedge.analysis.files.lot_file import read_lot
    from darkedge.analysis.files.plan_file import read_plan
    from darkedge.analysis.judging import judge_capture
    from darkedge.analysis.planning import outlook
    from darkedge.analysis.quantities import parse_quantity
    from darkedge.cli.hands import PersonAtTheBench
    from darkedge.instruments.running import Course, run_plan
    from darkedge.instruments.taking import Naming

    wanted, wired = read_plan(plan), read_bench(bench)
    degrees = None if temperature is None else parse_quantity(temperature, "temperature_degC")
    lot = read_lot(into / LOT_NAME).lot if (into / LOT_NAME).is_file() else None
    name = check_device_name(device)
    for caution in outlook(wanted, bench=wired).cautions:
        say(f"caution: {caution.text}")
    with SweepBar() as bar, heard_in(log) as heard:
        ran = run_plan(
            wanted,
            wired,
            into / name,
            Naming(run=name, device=name, lot=lot, temperature_degC=degrees),
            course=Course(
                hands=PersonAtTheBench(bar.aside),
                judge=judge_capture,
                progress=bar.tell,
                heard=heard,
                left_on=say_left_on,
                met=say_met,
            ),
            resume=resume,
            bench_folder=bench.parent,
        )
    again = f", {ran.swept.retaken} of them taken again" if ran.swept.retaken else ""
    say(f"{ran.swept.taken} points taken{again}; {len(ran.swept.rows)} in the run")
    typer.echo(f"run: {ran.folder}")
    return 0
