"""The timing questions of a register follow from its function, in words a person can check."""

from __future__ import annotations

from collections import Counter
from collections.abc import Callable

import pytest

from charflow.errors import SheetError
from charflow.plan.arcs import DELAYS, Kind
from charflow.plan.behaviour import behaviour_of
from charflow.plan.derive import arcs_of
from charflow.sheet import Sheet

MakeSheet = Callable[..., Sheet]


def words(sheet: Sheet, *kinds: Kind) -> list[str]:
    return [arc.words for arc in arcs_of(sheet) if arc.kind in kinds]


def test_a_flip_flop_has_a_delay_for_each_output_edge_and_setup_and_hold_for_each_data_edge(
    sheet_of: MakeSheet,
) -> None:
    sheet = sheet_of("flip-flop")
    assert sorted(words(sheet, *DELAYS)) == [
        "delay and transition: CK rise until Q falls",
        "delay and transition: CK rise until Q rises",
        "delay and transition: CK rise until QN falls",
        "delay and transition: CK rise until QN rises",
    ]
    assert words(sheet, Kind.SETUP, Kind.HOLD) == [
        "setup: D rise this long before CK rise; Q rises, QN falls",
        "setup: D fall this long before CK rise; Q falls, QN rises",
        "hold: D rise this long after CK rise; Q falls, QN rises",
        "hold: D fall this long after CK rise; Q rises, QN falls",
    ]


def test_a_falling_edge_clock_is_the_reference_of_its_arcs(sheet_of: MakeSheet) -> None:
    arcs = arcs_of(sheet_of("falling flip-flop"))
    found = [arc for arc in arcs if arc.kind in (Kind.SETUP, Kind.HOLD, Kind.CLK_TO_Q)]
    assert found
    assert {(arc.related, arc.related_rising) for arc in found} == {("CKN", False)}


def test_the_data_of_an_enable_flip_flop_counts_only_when_enabled(sheet_of: MakeSheet) -> None:
    found = [arc for arc in arcs_of(sheet_of("enable flip-flop")) if arc.pin == "D"]
    constraints = [arc for arc in found if arc.kind in (Kind.SETUP, Kind.HOLD)]
    assert len(constraints) == 4
    assert {arc.when for arc in constraints} == {(("E", True),)}


def test_the_enable_itself_has_setup_and_hold_under_each_level_of_the_data(sheet_of: MakeSheet) -> None:
    assert [text for text in words(sheet_of("enable flip-flop"), Kind.SETUP, Kind.HOLD) if ": E" in text] == [
        "setup: E rise this long before CK rise; Q rises, when D",
        "setup: E rise this long before CK rise; Q falls, when !D",
        "setup: E fall this long before CK rise; Q stays 0, when D",
        "setup: E fall this long before CK rise; Q stays 1, when !D",
        "hold: E rise this long after CK rise; Q stays 0, when D",
        "hold: E rise this long after CK rise; Q stays 1, when !D",
        "hold: E fall this long after CK rise; Q rises, when D",
        "hold: E fall this long after CK rise; Q falls, when !D",
    ]


def test_scan_data_counts_in_scan_and_data_out_of_it(sheet_of: MakeSheet) -> None:
    constraints = [arc for arc in arcs_of(sheet_of("scan flip-flop")) if arc.kind in (Kind.SETUP, Kind.HOLD)]
    for arc in constraints:
        side = dict(arc.when)
        if arc.pin == "D":
            assert side["SE"] is False
        elif arc.pin == "SI":
            assert side["SE"] is True
        else:
            assert side["D"] is not side["SI"]
    assert Counter(arc.pin for arc in constraints) == {"D": 8, "SI": 8, "SE": 8}


@pytest.mark.parametrize("kind", ["flip-flop", "falling flip-flop", "enable flip-flop", "scan flip-flop"])
def test_what_an_arc_observes_is_what_its_function_says(sheet_of: MakeSheet, kind: str) -> None:
    sheet = sheet_of(kind)
    cell = behaviour_of(sheet)
    for arc in arcs_of(sheet):
        if arc.kind not in (Kind.SETUP, Kind.HOLD):
            continue
        rest = arc.start.rest
        assert rest[arc.pin] is not arc.rising
        assert rest[arc.related] is not arc.related_rising
        moved = rest | {arc.pin: arc.rising}
        right, wrong = (moved, rest) if arc.kind is Kind.SETUP else (rest, moved)
        states = [state for state in cell.states() if cell.reach(state, rest) == arc.start]
        (old,) = states
        new, other = cell.captured(old, right), cell.captured(old, wrong)
        assert new != other
        for pin, rising in arc.observed:
            assert cell.shown(old, rest)[pin] is not rising
            assert cell.shown(new, rest)[pin] is rising
            assert cell.shown(other, rest)[pin] is not rising
        for pin, level in arc.quiet:
            assert cell.shown(old, rest)[pin] is level
            assert cell.shown(new, rest)[pin] is level
            assert cell.shown(other, rest)[pin] is not level


@pytest.mark.parametrize("kind", ["flip-flop", "enable flip-flop", "scan flip-flop"])
def test_the_relaxed_rest_holds_the_right_data_and_the_same_state(sheet_of: MakeSheet, kind: str) -> None:
    sheet = sheet_of(kind)
    cell = behaviour_of(sheet)
    for arc in arcs_of(sheet):
        if arc.kind is Kind.SETUP:
            assert arc.relaxed.rest == arc.start.rest | {arc.pin: arc.rising}
        elif arc.kind is Kind.HOLD:
            assert arc.relaxed == arc.start
        for state in cell.states():
            if cell.reach(state, arc.start.rest) == arc.start and arc.kind is Kind.SETUP:
                assert cell.reach(state, arc.relaxed.rest) == arc.relaxed


@pytest.mark.parametrize(
    "kind", ["flip-flop", "enable flip-flop", "scan flip-flop", "clear flip-flop", "latch"]
)
def test_no_two_arcs_ask_the_same(sheet_of: MakeSheet, kind: str) -> None:
    texts = Counter(arc.words for arc in arcs_of(sheet_of(kind)))
    assert [text for text, times in texts.items() if times > 1] == []


def test_an_output_that_nothing_moves_leaves_nothing_to_measure(sheet_of: MakeSheet) -> None:
    pins = {
        "CK": {"role": "clock", "active": "rise"},
        "D": {"role": "data"},
        "Q": {"role": "output", "shows": "1"},
    }
    with pytest.raises(SheetError, match="nothing to measure") as caught:
        arcs_of(sheet_of(pins))
    assert caught.value.where == ("cell.toml",)


def test_a_divider_without_data_has_delays_but_no_setup(sheet_of: MakeSheet) -> None:
    # its state cannot be known from outside, so no arc can begin from it: it must not be measured as if
    pins = {"CK": {"role": "clock", "active": "rise"}, "Q": {"role": "output", "shows": "state"}}
    with pytest.raises(SheetError, match="nothing to measure"):
        arcs_of(sheet_of(pins, next_state="!state"))
