"""How the verdicts of devices add up to that of a lot."""

from __future__ import annotations

from collections.abc import Sequence

from darkedge.analysis.decide.results import DeviceVerdict, LotVerdict, Verdict


def lot_verdicts(devices: Sequence[DeviceVerdict]) -> tuple[LotVerdict, ...]:
    """Add up devices to lots, in the order in which the lots first appear.

    A device passes where all its elements do; a lot where all its devices do. One failed device fails the lot, one undecided
    device leaves it undecided. Devices that name no lot count together as the lot `None`.
    """
    lots: dict[str | None, dict[str | None, list[Verdict]]] = {}
    for device in devices:
        lots.setdefault(device.lot, {}).setdefault(device.device, []).append(device.verdict)
    return tuple(_lot(lot, parts) for lot, parts in lots.items())


def _lot(lot: str | None, parts: dict[str | None, list[Verdict]]) -> LotVerdict:
    whole = [Verdict.worst(elements) for elements in parts.values()]
    return LotVerdict(
        lot=lot,
        verdict=Verdict.worst(whole),
        passed=whole.count(Verdict.PASS),
        failed=whole.count(Verdict.FAIL),
        undecided=whole.count(Verdict.UNDECIDED),
    )
