"""The zero-delay model of a register: what it stores, what it shows, and how each state is reached."""

from __future__ import annotations

from collections.abc import Callable
from itertools import pairwise

import pytest

from charflow.errors import SheetError
from charflow.plan.behaviour import MOST_LEVELS, Behaviour, Bits, behaviour_of
from charflow.plan.trial import Start
from charflow.sheet import Sheet

MakeSheet = Callable[..., Sheet]
EVERY_KIND = [
    "flip-flop",
    "falling flip-flop",
    "enable flip-flop",
    "scan flip-flop",
    "clear flip-flop",
    "clear and preset flip-flop",
    "latch",
]


def replayed(cell: Behaviour, start: Start) -> Bits:
    """Return the state after the vectors of ``start``, applied to a cell nothing is known of."""
    vectors = [dict(vector) for vector in start.vectors]
    state = cell.after(cell.unknown, vectors[0], vectors[0])
    for before, now in pairwise(vectors):
        assert sum(before[pin] != now[pin] for pin in cell.inputs) == 1
        state = cell.after(state, before, now)
    return state


@pytest.mark.parametrize("kind", EVERY_KIND)
def test_every_way_to_a_state_leads_there_one_input_at_a_time(sheet_of: MakeSheet, kind: str) -> None:
    cell = behaviour_of(sheet_of(kind))
    ways = 0
    for state in cell.states():
        for vector in cell.vectors():
            start = cell.reach(state, vector)
            if start is not None:
                ways += 1
                assert start.rest == vector
                assert replayed(cell, start) == state
    assert ways >= len(cell.vectors())


@pytest.mark.parametrize("kind", ["flip-flop", "falling flip-flop", "enable flip-flop", "scan flip-flop"])
def test_a_flip_flop_reaches_every_state_under_every_input(sheet_of: MakeSheet, kind: str) -> None:
    cell = behaviour_of(sheet_of(kind))
    for state in cell.states():
        for vector in cell.vectors():
            assert cell.reach(state, vector) is not None


def test_an_open_latch_cannot_store_what_its_data_does_not_say(sheet_of: MakeSheet) -> None:
    cell = behaviour_of(sheet_of("latch"))
    assert cell.reach((True,), {"G": True, "D": False}) is None
    assert cell.reach((True,), {"G": False, "D": False}) is not None


def test_a_cleared_cell_cannot_store_a_one(sheet_of: MakeSheet) -> None:
    cell = behaviour_of(sheet_of("clear flip-flop"))
    for clock in (False, True):
        assert cell.reach((True,), {"CK": clock, "D": True, "RN": False}) is None
        assert cell.reach((False,), {"CK": clock, "D": True, "RN": False}) is not None


def test_the_shortest_way_is_taken(sheet_of: MakeSheet) -> None:
    cell = behaviour_of(sheet_of("flip-flop"))
    start = cell.reach((True,), {"CK": True, "D": True})
    assert start is not None
    assert len(start.vectors) == 2  # the data is there from the beginning, then the clock rises


def test_the_gate_of_a_latch_moves_once_before_it_is_open_at_rest(sheet_of: MakeSheet) -> None:
    cell = behaviour_of(sheet_of("latch"))
    start = cell.reach((True,), {"G": True, "D": True})
    assert start is not None
    assert [dict(vector)["G"] for vector in start.vectors] == [True, False, True]


class TestFlipFlop:
    def test_it_stores_at_the_active_edge_only(self, sheet_of: MakeSheet) -> None:
        cell = behaviour_of(sheet_of("flip-flop"))
        for old in (False, True):
            for data in (False, True):
                low, high = {"CK": False, "D": data}, {"CK": True, "D": data}
                assert cell.after((old,), low, high) == (data,)
                assert cell.after((old,), high, low) == (old,)
                assert cell.after((old,), high, {"CK": True, "D": not data}) == (old,)
                assert cell.after((old,), low, {"CK": False, "D": not data}) == (old,)

    def test_it_stores_what_the_data_was_before_the_edge(self, sheet_of: MakeSheet) -> None:
        cell = behaviour_of(sheet_of("flip-flop"))
        assert cell.after((False,), {"CK": False, "D": True}, {"CK": True, "D": False}) == (True,)

    def test_one_that_triggers_on_the_falling_edge_ignores_the_rising_one(self, sheet_of: MakeSheet) -> None:
        cell = behaviour_of(sheet_of("falling flip-flop"))
        assert cell.after((False,), {"CKN": True, "D": True}, {"CKN": False, "D": True}) == (True,)
        assert cell.after((False,), {"CKN": False, "D": True}, {"CKN": True, "D": True}) == (False,)

    def test_its_outputs_show_the_state_and_its_complement(self, sheet_of: MakeSheet) -> None:
        cell = behaviour_of(sheet_of("flip-flop"))
        inputs = {"CK": False, "D": False}
        assert cell.shown((True,), inputs) == {"Q": True, "QN": False}
        assert cell.shown((None,), inputs) == {"Q": None, "QN": None}


def test_an_enable_that_is_off_keeps_the_state(sheet_of: MakeSheet) -> None:
    cell = behaviour_of(sheet_of("enable flip-flop"))
    for old in (False, True):
        for data in (False, True):
            values = {"CK": False, "D": data, "E": False}
            assert cell.captured((old,), values) == (old,)
            assert cell.captured((old,), values | {"E": True}) == (data,)


def test_a_scan_enable_chooses_between_scan_data_and_data(sheet_of: MakeSheet) -> None:
    cell = behaviour_of(sheet_of("scan flip-flop"))
    for vector in cell.vectors():
        wanted = vector["SI"] if vector["SE"] else vector["D"]
        assert cell.captured((None,), vector) == (wanted,)


def test_clear_and_preset_act_at_any_time_and_together_leave_nothing_known(sheet_of: MakeSheet) -> None:
    cell = behaviour_of(sheet_of("clear and preset flip-flop"))
    rest = {"CK": False, "D": True, "RN": True, "S": False}
    assert cell.after((True,), rest, rest | {"RN": False}) == (False,)
    assert cell.after((False,), rest, rest | {"S": True}) == (True,)
    assert cell.after((False,), rest | {"S": True}, rest | {"S": True, "RN": False}) == (None,)
    assert cell.after((False,), rest | {"RN": False}, rest) == (False,)


def test_a_latch_follows_its_data_while_open_and_holds_while_closed(sheet_of: MakeSheet) -> None:
    cell = behaviour_of(sheet_of("latch"))
    assert cell.after((False,), {"G": True, "D": False}, {"G": True, "D": True}) == (True,)
    assert cell.after((True,), {"G": True, "D": True}, {"G": False, "D": True}) == (True,)
    assert cell.after((True,), {"G": False, "D": True}, {"G": False, "D": False}) == (True,)


def test_a_function_may_be_given_in_words(sheet_of: MakeSheet) -> None:
    pins = {
        "CK": {"role": "clock", "active": "rise"},
        "A": {"role": "data"},
        "B": {"role": "data"},
        "Q": {"role": "output", "shows": "state"},
    }
    cell = behaviour_of(sheet_of(pins, next_state="A & !B"))
    for vector in cell.vectors():
        assert cell.captured((None,), vector) == (vector["A"] and not vector["B"],)
    assert cell.data_pins == ("A", "B")


def test_a_cell_of_two_bits_has_four_states(sheet_of: MakeSheet) -> None:
    pins = {
        "CK": {"role": "clock", "active": "rise"},
        "D0": {"role": "data"},
        "D1": {"role": "data"},
        "Q0": {"role": "output", "shows": "s0"},
        "Q1": {"role": "output", "shows": "s1"},
    }
    cell = behaviour_of(sheet_of(pins, next_state={"s0": "D0", "s1": "D1"}))
    assert len(cell.states()) == 4
    assert cell.captured((None, None), {"CK": False, "D0": True, "D1": False}) == (True, False)


class TestWrong:
    @pytest.mark.parametrize(
        ("change", "cell", "said"),
        [
            ({"CK": {"role": "data"}}, {}, "one pin of role 'clock' (edge) or 'gate' (level), found none"),
            ({"CK2": {"role": "clock", "active": "rise"}}, {}, "found CK, CK2"),
            ({"D2": {"role": "data"}}, {}, "more than one pin has the role 'data' (D, D2)"),
            ({"D": {"role": "enable"}}, {}, "none has the role 'data'"),
            ({"SI": {"role": "scan_data"}}, {}, "scan_data and scan_enable come together"),
            ({"Q": {"role": "output", "shows": "stat"}}, {}, "names 'stat', which is not one of"),
            ({}, {"next_state": "D & X"}, "names 'X', which is not one of"),
            ({}, {"next_state": "D &"}, "the expression ends where a name was expected"),
            ({}, {"next_state": "D & CK"}, "names 'CK', which is not one of D, state"),
            ({}, {"next_state": {"D": "D"}}, "the state 'D' has the name of a pin"),
        ],
    )
    def test_roles_that_do_not_add_up_are_explained(
        self,
        sheet_of: MakeSheet,
        change: dict[str, dict[str, str]],
        cell: dict[str, object],
        said: str,
    ) -> None:
        pins = {
            "CK": {"role": "clock", "active": "rise"},
            "D": {"role": "data"},
            "Q": {"role": "output", "shows": "state"},
        }
        with pytest.raises(SheetError) as caught:
            behaviour_of(sheet_of(pins | change, **cell))
        assert said in caught.value.message
        assert caught.value.where[-1] == "cell.toml"


def test_more_inputs_and_bits_than_can_be_worked_through_are_refused_at_once(sheet_of: MakeSheet) -> None:
    pins = {f"D{n}": {"role": "data"} for n in range(40)}
    rest = {"CK": {"role": "clock", "active": "rise"}, "Q": {"role": "output", "shows": "state"}}
    with pytest.raises(SheetError, match=rf"41 inputs and 1 stored bits; at most {MOST_LEVELS} together"):
        behaviour_of(sheet_of(pins | rest, next_state=" & ".join(pins)))
