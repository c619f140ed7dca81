"""The error tree: every error says what, where, what was found, what was wanted, and the mend."""

from __future__ import annotations

from typing import ClassVar


class DarkedgeError(Exception):
    """The root of every error that darkedge raises on purpose.

    Parameters
    ----------
    what : str
        What is wrong, in a few words.
    where : str
        File, line, key, channel or instrument. Empty when the caller adds it on the way up (`at`).
    found, wanted : str
        What stands there, and what should.
    mend : str
        What to do about it.
    """

    exit_status: ClassVar[int] = 2

    def __init__(self, what: str, *, where: str = "", found: str = "", wanted: str = "", mend: str = "") -> None:
        self.what = what
        self.where = where
        self.found = found
        self.wanted = wanted
        self.mend = mend
        super().__init__(str(self))

    def __str__(self) -> str:
        text = f"{self.where}: {self.what}" if self.where else self.what
        if self.found:
            text += f"; found {self.found}"
        if self.wanted:
            text += f"; wanted {self.wanted}"
        if self.mend:
            text += f". {self.mend[0].upper()}{self.mend[1:]}"
        return text if text.endswith((".", "?", "!")) else text + "."

    def __reduce__(self) -> tuple[object, ...]:
        """Pickle by fields, so that an error crosses to another process whole."""
        state = {"where": self.where, "found": self.found, "wanted": self.wanted, "mend": self.mend}
        return _rebuild, (type(self), self.what, state)

    def at(self, where: str) -> DarkedgeError:
        """Return the same error with `where` put before the address it already has."""
        joined = f"{where}, {self.where}" if self.where else where
        return type(self)(self.what, where=joined, found=self.found, wanted=self.wanted, mend=self.mend)


def _rebuild(kind: type[DarkedgeError], what: str, fields: dict[str, str]) -> DarkedgeError:
    return kind(what, **fields)


class InputError(DarkedgeError):
    """The input or the request is wrong; nothing was started."""

    exit_status = 2


class CaptureError(InputError):
    """A file that is no capture, or a capture that cannot be measured."""


class PlanError(InputError):
    """A plan that contradicts itself, its ratings or its device."""


class BenchFileError(InputError):
    """A bench file that does not describe a bench."""


class LimitError(InputError):
    """A limit file, or a limit that no measurement can be held against."""


class FixtureError(InputError):
    """A fixture file that is wrong, or lacks what is needed."""


class DialectError(InputError):
    """A dialect file that does not say how an operation is done."""


class BenchError(DarkedgeError):
    """The bench failed while it was in use."""

    exit_status = 3


class LinkError(BenchError):
    """An instrument does not answer, or the connection is gone."""


class RefusedByInstrument(BenchError):  # noqa: N818 - the name is the contract, and says it better
    """An instrument answered, and refused."""


class RatingError(BenchError):
    """Something would go beyond a rating, or was read back beyond one."""


class FitError(DarkedgeError):
    """A fit that the data do not carry; the message says what to add."""

    exit_status = 2
