"""How the verdicts of elements and devices add up to that of a lot."""

from itertools import combinations_with_replacement

import pytest

from darkedge.analysis.decide.results import DeviceVerdict, Verdict
from darkedge.analysis.lot.verdict import lot_verdicts

PASS, FAIL, UNDECIDED = Verdict.PASS, Verdict.FAIL, Verdict.UNDECIDED


def part(verdict: Verdict, device: str | None, *, lot: str | None = "K-0417", element: int = 1) -> DeviceVerdict:
    return DeviceVerdict(lot=lot, device=device, element=element, verdict=verdict, limits=())


@pytest.mark.parametrize("verdicts", list(combinations_with_replacement((PASS, UNDECIDED, FAIL), 3)))
def test_one_failed_device_fails_a_lot_and_one_undecided_leaves_it_undecided(verdicts: tuple[Verdict, ...]) -> None:
    (lot,) = lot_verdicts([part(verdict, str(k)) for k, verdict in enumerate(verdicts)])
    assert lot.verdict is (FAIL if FAIL in verdicts else UNDECIDED if UNDECIDED in verdicts else PASS)
    assert (lot.passed, lot.undecided, lot.failed) == tuple(verdicts.count(v) for v in (PASS, UNDECIDED, FAIL))


def test_an_undecided_device_stays_visible_beside_a_failed_one() -> None:
    (lot,) = lot_verdicts([part(FAIL, "a"), part(UNDECIDED, "b")])
    assert (lot.verdict, lot.undecided) == (FAIL, 1)


def test_a_device_counts_once_and_passes_only_with_all_its_elements() -> None:
    (lot,) = lot_verdicts([part(PASS, "a"), part(FAIL, "a", element=2), part(PASS, "b"), part(PASS, "b", element=2)])
    assert (lot.passed, lot.failed) == (1, 1)


def test_devices_of_the_same_name_in_two_lots_are_two_devices() -> None:
    lots = lot_verdicts([part(PASS, "1", lot="K-0417"), part(FAIL, "1", lot="K-0418")])
    assert [(lot.lot, lot.verdict) for lot in lots] == [("K-0417", PASS), ("K-0418", FAIL)]


def test_devices_without_a_lot_stand_together_and_are_not_left_out() -> None:
    lots = lot_verdicts([part(PASS, "a", lot=None), part(PASS, "b"), part(FAIL, "c", lot=None)])
    assert [(lot.lot, lot.passed, lot.failed) for lot in lots] == [(None, 1, 1), ("K-0417", 1, 0)]


def test_nothing_adds_up_to_no_lot() -> None:
    assert lot_verdicts([]) == ()
