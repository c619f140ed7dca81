"""The lot file: what was received together."""

from __future__ import annotations

from dataclasses import dataclass
from datetime import date
from pathlib import Path

from darkedge.analysis.errors import InputError
from darkedge.analysis.files.toml_checks import Checked, check, read_toml

FORMAT = "darkedge-lot 1"
NAME = "lot.toml"


@dataclass(frozen=True, slots=True, kw_only=True)
class Lot:
    """Devices bought or made together."""

    lot: str
    part: str | None = None
    received: date | None = None
    size: int | None = None


class _Lot(Checked):
    format: str
    lot: str
    part: str | None = None
    received: date | None = None
    size: int | None = None


def read_lot(path: Path) -> Lot:
    """Read a lot file.

    Raises
    ------
    InputError
        Every fault of the file at once.
    """
    stated = check(read_toml(path, InputError), _Lot, where=str(path), word=FORMAT, error_class=InputError)
    if stated.size is not None and stated.size < 1:
        raise InputError("size is not a number of devices", where=str(path), found=str(stated.size))
    return Lot(**stated.model_dump(exclude={"format"}))
