"""What the commands that use the bench say while they do: who answered, how far they are, what is left on."""

from __future__ import annotations

from collections.abc import Callable, Iterator, Sequence
from contextlib import contextmanager
from pathlib import Path
from typing import TYPE_CHECKING, TextIO

from darkedge.analysis.errors import InputError
from darkedge.cli.common import say

if TYPE_CHECKING:
    from darkedge.analysis.plan import Step
    from darkedge.instruments.live_bench import LiveBench
    from darkedge.instruments.sweep import Progress


def check_device_name(device: str) -> str:
    """A device name that can be a folder's.

    Raises
    ------
    InputError
        It cannot.
    """
    name = device.strip()
    if not name or name in (".", "..") or any(sign in name for sign in '/\\:*?"<>|\n\r\t') or name.startswith("."):
        raise InputError(
            "the device's name cannot be that of a folder", where="--device", found=repr(device),
            wanted="letters, digits, dashes, such as SP-2-01",
        )  # fmt: skip
    return name


def say_met(live: LiveBench) -> None:
    """Say who answered, and what their dialects lack."""
    for known in live.identities:
        say(f"{known.role.replace('_', ' ')}: {known.identity}")
        for what, how in live.sessions[known.role].dialect.lacking().items():
            if what.section == known.role:
                say(f"  no {what.name.replace('_', ' ')}: {how.consequence}")


def say_left_on(words: Sequence[str]) -> None:
    """Say what could not be switched off; all being off is said too."""
    for text in words:
        say(f"CAUTION: {text}")
    if not words:
        say("outputs off")


def step_words(step: Step) -> str:
    """A point in a few words."""
    from darkedge.analysis.quantities import format_quantity

    parts = [step.name, str(step.kind), format_quantity(step.load_ohm, "Ω"), format_quantity(step.bias_V, "V")]
    if step.pulse_width_s is not None:
        parts += [format_quantity(step.emitter_current_A, "A"), format_quantity(step.pulse_width_s, "s")]
    return "  ".join(parts)


class SweepBar:
    """A bar on stderr with the point being taken and the time left; it steps aside while somebody is asked."""

    def __init__(self, prefix: str = "") -> None:
        from rich.console import Console
        from rich.progress import BarColumn, MofNCompleteColumn, Progress, TextColumn

        self._prefix = prefix
        self._bar = Progress(
            TextColumn("{task.description}"),
            BarColumn(bar_width=24),
            MofNCompleteColumn(),
            TextColumn("{task.fields[left]}"),
            console=Console(stderr=True),
            transient=True,
        )
        self._task = self._bar.add_task("sweeping", total=None, left="")

    def __enter__(self) -> SweepBar:
        self._bar.start()
        return self

    def __exit__(self, *_how: object) -> None:
        self._bar.stop()

    def tell(self, news: Progress) -> None:
        """Show how far the sweep is."""
        left = "" if news.left_s is None else f"{duration_words(news.left_s)} left"
        words = "done" if news.step is None else step_words(news.step)
        self._bar.update(
            self._task, completed=news.done, total=news.total, description=f"{self._prefix}{words}", left=left
        )

    @contextmanager
    def aside(self) -> Iterator[None]:
        """Make room for a question."""
        self._bar.stop()
        try:
            yield
        finally:
            self._bar.start()


def duration_words(seconds: float) -> str:
    """A duration as people say it."""
    if seconds < 90:
        return f"{seconds:.0f} s"
    return f"{seconds / 60:.0f} min" if seconds < 5400 else f"{seconds / 3600:.1f} h"


@contextmanager
def heard_in(path: Path | None) -> Iterator[Callable[[str, str], None]]:
    """Keep every message in a file, where one is given.

    Raises
    ------
    InputError
        The file cannot be written.
    """
    if path is None:
        yield lambda _role, _text: None
        return
    try:
        stream = path.open("a", encoding="utf-8")
    except OSError as error:
        raise InputError(
            "the log cannot be written",
            where=f"--log {path}",
            found=error.strerror or "",
            mend="give a file in a folder that is there",
        ) from error
    with stream:
        yield lambda role, text: _keep(stream, role, text)


def _keep(stream: TextIO, role: str, text: str) -> None:
    stream.write(f"{role}\t{text}\n")
    stream.flush()
