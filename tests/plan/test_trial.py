"""A trial is a value: the same questions make the same trial, and its key says what decides it."""

from __future__ import annotations

from dataclasses import FrozenInstanceError, replace

import pytest

from charflow.plan.trial import Move, Outcome, Start, Swing, Trial, levels

TRIAL = Trial(
    "typical",
    Start((levels({"CK": False, "D": True}), levels({"CK": False, "D": False}))),
    (Move("CK", True, 0.0, 30e-12), Move("D", True, -40e-12, 60e-12)),
    (("Q", 5e-15),),
    1e-9,
)

CHANGES = [
    {"corner": "slow"},
    {"start": Start((levels({"CK": False, "D": False}),))},
    {"moves": TRIAL.moves[:1]},
    {"moves": (TRIAL.moves[0], replace(TRIAL.moves[1], at=-40.0001e-12))},
    {"moves": (TRIAL.moves[0], replace(TRIAL.moves[1], slew=60.0001e-12))},
    {"moves": (TRIAL.moves[0], replace(TRIAL.moves[1], rising=False))},
    {"loads": (("Q", 5.0001e-15),)},
    {"until": 1.0001e-9},
]


def test_the_same_trial_has_the_same_key_in_every_process() -> None:
    assert replace(TRIAL).key == TRIAL.key
    assert TRIAL.key == "29f32434e38293e466df3f34"  # a change of it makes every stored result unknown


@pytest.mark.parametrize("change", CHANGES)
def test_whatever_changes_the_waveforms_changes_the_key(change: dict[str, object]) -> None:
    assert replace(TRIAL, **change).key != TRIAL.key  # type: ignore[arg-type]


def test_a_trial_cannot_be_changed_and_can_be_a_key() -> None:
    with pytest.raises(FrozenInstanceError):
        TRIAL.until = 2.0  # type: ignore[misc]
    assert {TRIAL: 1}[replace(TRIAL)] == 1


def test_a_longer_trial_differs_in_nothing_but_its_end() -> None:
    longer = TRIAL.longer(2e-9)
    assert longer.until == 2e-9
    assert longer.longer(TRIAL.until) == TRIAL


def test_the_last_vector_is_what_the_inputs_hold() -> None:
    assert TRIAL.start.rest == {"CK": False, "D": False}


@pytest.mark.parametrize(
    ("last", "high", "low"),
    [
        (1.0, True, False),
        (0.96, True, False),
        (0.94, False, False),
        (0.5, False, False),
        (0.04, False, True),
        (-0.1, False, True),
    ],
)
def test_an_output_is_settled_within_five_percent_of_its_rail(last: float, high: bool, low: bool) -> None:
    swing = Swing("Q", 0.0, last, 0.0, 1.0, (), ())
    assert swing.settled(rising=True) is high
    assert swing.settled(rising=False) is low


def test_an_outcome_knows_its_outputs_by_name() -> None:
    swing = Swing("Q", 1.0, 1.0, 1.0, 1.0, (), ())
    assert Outcome((swing,)).of("Q") is swing
    assert swing.starts_high
