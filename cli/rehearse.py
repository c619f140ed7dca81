"""`darkedge rehearse`: the whole job on the virtual bench, from plan to report, through the same code and sockets as a real one."""

from __future__ import annotations

import time
from pathlib import Path
from typing import TYPE_CHECKING, Annotated

import typer

from darkedge.cli.bench_talk import SweepBar
from darkedge.cli.common import guarded, print_listing, say, take_in_paths, working

if TYPE_CHECKING:
    from collections.abc import Callable, Sequence

    from darkedge.analysis.decide.results import Screening
    from darkedge.analysis.explain import Explained
    from darkedge.analysis.fixture import Fixture
    from darkedge.analysis.measurement import Measurement
    from darkedge.cli.listing import Listing
    from darkedge.instruments.virtual.lots import Fault
    from darkedge.instruments.virtual.parts import Device
    from darkedge.instruments.virtual.rehearsal import Rehearsal


AVERAGES = 8


@guarded
def rehearse(
    *,
    kind: Annotated[
        str,
        typer.Option(
            "--kind", metavar="KIND", help="photodiode, pin, transistor_switch, optocoupler or dual_optocoupler."
        ),
    ] = "photodiode",
    out: Annotated[Path, typer.Option("--out", "-o", metavar="FOLDER", help="Where the lot and its report go.")] = Path(
        "darkedge-rehearsal"
    ),
    seed: Annotated[int, typer.Option("--seed", metavar="N", help="The same seed gives the same run.", min=0)] = 1,
    words: Annotated[
        str, typer.Option("--words", metavar="WORDS", help="What the instruments speak: scpi-1999, or own.")
    ] = "scpi-1999",
) -> int:
    """Rehearse the whole job on invented parts: plan check, sweep, measure, fit, choose, screen, report.

    Six devices, among them a slow, a leaky and a dead one, are put on instruments in software that answer on sockets of this
    machine. Nothing else is needed. The exit status is 0 when every verdict is what the part was made to be.

    Example:

    darkedge rehearse
    """
    from darkedge.analysis.decide.verdicts import screen
    from darkedge.analysis.explain import explain_devices
    from darkedge.analysis.files.limits_file import read_limits
    from darkedge.analysis.pictures.build import build_report, write_report
    from darkedge.cli.listing import screening_listings
    from darkedge.instruments.virtual.rehearsal import Rehearsal, read_kind

    begun = time.monotonic()
    job = Rehearsal(kind=read_kind(kind), seed=seed)
    folder = _lay_out(job, out, words)
    lot = folder / f"lot_{job.lot}"
    devices = _sweep_lot(job, folder, lot, words)
    intake = take_in_paths([lot], names=None, conditions=None, fixture=None, channels=None)
    with working("fitting"):
        explained = explain_devices(intake.measurements, fixture_for=intake.fixture_for)
    for error in explained.errors:
        say(f"not fitted: {error}")
    for found in explained.devices:
        if found.junction is None and job.wish is not None:
            say(f"{found.title}: no edges, so no junction is fitted")
    for listing in _truth_listings(explained, devices) + _choices(job, intake.measurements, intake.fixture_for):
        print_listing(listing)
    limits = read_limits(folder / "limits.toml")
    screening = screen(intake.measurements, limits)
    for listing in screening_listings(screening):
        print_listing(listing)
    with working("drawing the report"):
        content = build_report(
            intake,
            paths=[lot],
            made="in a rehearsal, on invented parts,",
            limits=limits,
            limits_source=str(folder / "limits.toml"),
            explained=explained,
        )
        write_report(content, folder / "report.html")
    wrong = _wrong_verdicts(screening, devices)
    for text in wrong:
        say(f"error: {text}")
    typer.echo(
        "Every verdict is right: good parts pass, and the slow, the leaky and the dead part fail."
        if not wrong
        else "Not every verdict is right."
    )
    typer.echo(f"report: {(folder / 'report.html').resolve()}")
    say(
        f"took {time.monotonic() - begun:.0f} s; the parts are invented, the code and the sockets are those of a real bench"
    )
    return intake.exit_status or (1 if wrong else 0)


def _lay_out(job: Rehearsal, out: Path, words: str) -> Path:
    """Write plan, fixture, limits and lot file into a folder that is new, or was made by a rehearsal before."""
    import shutil

    from darkedge.analysis.errors import InputError
    from darkedge.analysis.files.atomic import write_atomic
    from darkedge.instruments.virtual.rehearsal import NOTICE, NOTICE_NAME, OWN_WORDS, OWN_WORDS_NAME

    if out.exists() and not out.is_dir():
        raise InputError("not a folder", where=str(out), mend="give another --out")
    if out.is_dir() and any(out.iterdir()) and not (out / NOTICE_NAME).is_file():
        raise InputError(
            "the folder holds something that no rehearsal made",
            where=str(out),
            mend="give another --out; nothing was touched",
        )
    try:
        out.mkdir(parents=True, exist_ok=True)
        for stale in out.glob("lot_*"):
            shutil.rmtree(stale)
        (out / f"lot_{job.lot}").mkdir()
    except OSError as error:
        raise InputError("the folder cannot be made", where=str(out), found=error.strerror or "") from error
    write_atomic(out / NOTICE_NAME, NOTICE)
    write_atomic(out / "plan.toml", job.plan_toml())
    write_atomic(out / "fixture.toml", job.fixture_toml())
    write_atomic(out / "limits.toml", job.limits_toml())
    write_atomic(out / f"lot_{job.lot}" / "lot.toml", job.lot_toml())
    if words == "own":
        write_atomic(out / OWN_WORDS_NAME, OWN_WORDS.read_bytes())
    return out


def _sweep_lot(job: Rehearsal, folder: Path, lot: Path, words: str) -> list[tuple[Fault, Device]]:
    """Check the plan, then sweep every device of the lot, over real sockets."""
    from darkedge.analysis.files.atomic import write_atomic
    from darkedge.analysis.files.bench_file import read_bench
    from darkedge.analysis.files.fixture_file import read_fixture
    from darkedge.analysis.files.plan_file import read_plan
    from darkedge.analysis.judging import judge_capture
    from darkedge.analysis.planning import outlook
    from darkedge.cli.plan import outlook_listing
    from darkedge.instruments.live_bench import Time
    from darkedge.instruments.running import Course, run_plan
    from darkedge.instruments.taking import Naming
    from darkedge.instruments.virtual.rehearsal import OWN_WORDS_NAME, TEMPERATURE_degC, VirtualHands, VirtualTime

    devices = job.devices()
    with job.bench(words=words) as virtual:
        dialects = (
            dict.fromkeys(("oscilloscope", "function_generator", "bias"), OWN_WORDS_NAME) if words == "own" else {}
        )
        write_atomic(folder / "bench.toml", virtual.bench_toml(dialects=dialects, averages=AVERAGES))
        plan, bench = read_plan(folder / "plan.toml"), read_bench(folder / "bench.toml")
        found = outlook(plan, bench=bench, fixture=read_fixture(folder / "fixture.toml"))
        print_listing(outlook_listing(plan.title, found))
        for text in found.warnings:
            say(f"warning: {text}")
        for caution in found.cautions:
            say(f"caution: {caution.text}")
        hands, clock = VirtualHands(virtual.world), VirtualTime()
        for _, device in devices:
            hands.mount(device)
            with SweepBar(f"{device.name}  ") as bar:
                ran = run_plan(
                    plan,
                    bench,
                    lot / device.name,
                    Naming(run=device.name, device=device.name, lot=job.lot, temperature_degC=TEMPERATURE_degC),
                    course=Course(
                        hands=hands,
                        judge=judge_capture,
                        progress=bar.tell,
                        clock=Time(wait=clock.wait),
                        utc=clock.utc,
                    ),
                    bench_folder=folder,
                )
            say(f"{device.name}: {len(ran.swept.rows)} points, outputs off")
    return devices


def _choices(
    job: Rehearsal, measurements: Sequence[Measurement], fixture_for: Callable[[str], Fixture]
) -> list[Listing]:
    """Bias and load for the first device of the lot, where a rehearsal of this kind chooses them."""
    from darkedge.analysis.decide.results import Wish
    from darkedge.analysis.explain import choose_for_devices
    from darkedge.analysis.quantities import parse_list, parse_quantity
    from darkedge.cli.listing import choice_listings

    if job.wish is None:
        return []
    width, rails = job.wish
    wish = Wish(pulse_width_s=parse_quantity(width, "pulse_width_s"), rails_V=parse_list(rails, "rails_V"))
    first = job.devices()[0][1].name
    of_first = [m for m in measurements if m.conditions.device == first]
    found = choose_for_devices(of_first, wish=wish, fixture_for=fixture_for)
    for error in found.errors:
        say(f"no choice: {error}")
    return choice_listings(found.choices)


def _truth_listings(explained: Explained, devices: list[tuple[Fault, Device]]) -> list[Listing]:
    """What was fitted beside what each part was made with."""
    from darkedge.analysis.measurement import Estimate
    from darkedge.analysis.pictures.words import PARAMETER_WORDS, cell, interval
    from darkedge.cli.listing import Listing

    made = {device.name: (fault, device) for fault, device in devices}
    rows = []
    for found in explained.devices:
        if found.junction is None or found.device not in made:
            continue
        fault, device = made[found.device]
        junction = device.elements[(found.element or 1) - 1].junction
        for name, estimate in found.junction.parameters.items():
            truth = getattr(junction, name, None)
            if truth is None or estimate.lo95 is None or estimate.hi95 is None:
                continue
            inside = "inside" if estimate.lo95 <= truth <= estimate.hi95 else "OUTSIDE"
            cells = [cell(estimate, name), interval(estimate, name), cell(Estimate(value=truth, u=0.0), name), inside]
            rows.append([found.device, made_words(fault), PARAMETER_WORDS[name], *cells])
    if not rows:
        return []
    columns = ["device", "made", "parameter", "fitted", "95 % interval", "made with", ""]
    return [Listing(title="Fitted, beside what the parts were made with", columns=columns, rows=rows)]


def made_words(fault: Fault) -> str:
    """What a part was made to be."""
    return "good" if fault == "none" else str(fault)


def _wrong_verdicts(screening: Screening, devices: list[tuple[Fault, Device]]) -> list[str]:
    """Devices whose verdict is not what they were made to be."""
    made = {device.name: fault for fault, device in devices}
    found = []
    for held in screening.devices:
        fault = made.get(held.device or "")
        if fault is None:
            continue
        wanted = "pass" if fault == "none" else "fail"
        if held.verdict != wanted:
            found.append(
                f"{held.device}, element {held.element}: made {made_words(fault)}, the verdict is {held.verdict}, not {wanted}"
            )
    judged = {held.device for held in screening.devices}
    found += [f"{name}: no verdict at all" for name in made if name not in judged]
    return found
