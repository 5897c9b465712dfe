"""Reading outcomes: an output captures only if it leaves its old rail and is at the new one at the end."""

from __future__ import annotations

import pytest

from charflow.errors import TrialError
from charflow.plan.arcs import Arc, Kind
from charflow.plan.trial import Outcome, Start, Swing
from charflow.solve.verdict import NotSettled, Reference, delay_of, pushout

PS = 1e-12
START = Start(((("CK", False), ("D", True)),))
ARC = Arc(Kind.SETUP, "D", True, "CK", True, (("Q", True), ("QN", False)), START, START)
REFERENCE = Reference({"Q": 100 * PS, "QN": 80 * PS}, {"Q": 20 * PS, "QN": 20 * PS}, 1e-9)


def swing(pin: str, first: float, last: float, *crossings: float) -> Swing:
    return Swing(pin, first, last, 0.0, 1.0, crossings, (20 * PS,) * len(crossings))


Q = swing("Q", 0.0, 1.0, 105 * PS)
QN = swing("QN", 1.0, 0.0, 82 * PS)


def test_the_latest_output_relative_to_its_reference_decides() -> None:
    assert pushout(ARC, Outcome((Q, QN)), REFERENCE) == pytest.approx(0.05)
    late = swing("QN", 1.0, 0.0, 96 * PS)
    assert pushout(ARC, Outcome((Q, late)), REFERENCE) == pytest.approx(0.2)
    assert pushout(ARC, Outcome((late, Q)), REFERENCE) == pytest.approx(0.2)


@pytest.mark.parametrize("which", ["Q", "QN"])
def test_one_output_that_stays_is_no_capture(which: str) -> None:
    still = {"Q": swing("Q", 0.0, 0.0), "QN": swing("QN", 1.0, 1.0)}[which]
    others = [s for s in (Q, QN) if s.pin != which]
    assert pushout(ARC, Outcome((still, *others)), REFERENCE) is None


def test_an_output_that_captures_and_loses_the_value_is_no_capture() -> None:
    lost = swing("Q", 0.0, 0.0, 105 * PS, 400 * PS)
    assert pushout(ARC, Outcome((lost, QN)), REFERENCE) is None


def test_an_output_between_the_rails_at_the_end_says_nothing_yet() -> None:
    for last in (0.06, 0.5, 0.94):
        with pytest.raises(NotSettled):
            pushout(ARC, Outcome((swing("Q", 0.0, last, 105 * PS), QN)), REFERENCE)


def test_an_output_that_moves_twice_is_as_late_as_its_last_crossing() -> None:
    assert delay_of(swing("Q", 0.0, 1.0, 90 * PS, 120 * PS, 150 * PS), rising=True) == 150 * PS


def test_a_falling_output_is_read_the_other_way_round() -> None:
    assert delay_of(QN, rising=False) == 82 * PS
    assert delay_of(QN, rising=True) is None


def test_an_output_at_the_right_rail_from_the_beginning_has_no_delay() -> None:
    assert delay_of(swing("Q", 1.0, 1.0), rising=True) is None


def test_a_glitch_that_never_reaches_half_of_supply_is_not_a_move() -> None:
    assert delay_of(Swing("Q", 0.0, 0.0, 0.0, 0.45, (), ()), rising=True) is None


@pytest.mark.parametrize("first", [0.15, 0.5, 1.0])
def test_an_output_that_does_not_begin_at_its_old_rail_says_nothing(first: float) -> None:
    with pytest.raises(TrialError, match=rf"Q should begin low, but begins at {first:.3f} of supply"):
        pushout(ARC, Outcome((swing("Q", first, 1.0, 105 * PS), QN)), REFERENCE)


def test_an_output_a_little_off_its_rail_still_counts_as_at_it() -> None:
    assert pushout(ARC, Outcome((swing("Q", -0.05, 1.04, 105 * PS), QN)), REFERENCE) == pytest.approx(0.05)


def test_a_delay_shorter_than_the_reference_is_a_negative_pushout() -> None:
    early = Outcome((swing("Q", 0.0, 1.0, 95 * PS), swing("QN", 1.0, 0.0, 76 * PS)))
    assert pushout(ARC, early, REFERENCE) == pytest.approx(-0.05)


def test_an_output_that_nobody_watches_is_not_found() -> None:
    with pytest.raises(KeyError, match="QN"):
        Outcome((Q,)).of("QN")
