"""One tree of errors, each with an exit status, each the same on the other side of a process border."""

from __future__ import annotations

import copy
import inspect
import pickle

import pytest

from charflow import errors
from charflow.errors import CharflowError, InputError, SimulatorError, TrialError

EVERY = [
    kind
    for _, kind in inspect.getmembers(errors, inspect.isclass)
    if issubclass(kind, Exception) and kind.__module__ == errors.__name__
]


def test_the_tree_drawn_in_the_docstring_is_the_tree() -> None:
    assert errors.__doc__ is not None
    for kind in EVERY:
        assert kind.__name__ in errors.__doc__


@pytest.mark.parametrize("kind", EVERY)
@pytest.mark.parametrize("protocol", range(pickle.HIGHEST_PROTOCOL + 1))
def test_every_error_survives_pickling_with_its_places_and_advice(
    kind: type[CharflowError], protocol: int
) -> None:
    error = kind("what was found", where=("line 3",), todo="What to do.").at("sheet.toml")
    again = pickle.loads(pickle.dumps(error, protocol))
    assert type(again) is kind
    assert (again.message, again.where, again.todo) == (
        error.message,
        ("line 3", "sheet.toml"),
        "What to do.",
    )
    assert str(again) == str(error)
    assert again.exit_status == error.exit_status


@pytest.mark.parametrize("kind", EVERY)
def test_every_error_survives_copying(kind: type[CharflowError]) -> None:
    assert str(copy.deepcopy(kind("found", where=("a", "b"), todo="Do."))) == "b, a: found\n  Do."


@pytest.mark.parametrize("kind", EVERY)
def test_the_exit_status_follows_the_branch(kind: type[CharflowError]) -> None:
    if issubclass(kind, TrialError):
        assert kind.exit_status == 1
    elif issubclass(kind, SimulatorError):
        assert kind.exit_status == 3
    else:
        assert kind.exit_status == 2
    assert kind is CharflowError or issubclass(kind, InputError | SimulatorError | TrialError)


def test_places_are_named_from_the_outside_in() -> None:
    error = CharflowError("no such pin").at("pins.D").at("sheet.toml")
    assert str(error) == "sheet.toml, pins.D: no such pin"


def test_naming_a_place_leaves_the_first_error_as_it_was() -> None:
    error = InputError("wrong", todo="Right it.")
    outer = error.at("here")
    assert type(outer) is InputError
    assert str(error) == "wrong\n  Right it."
    assert str(outer) == "here: wrong\n  Right it."
