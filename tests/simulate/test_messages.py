"""What ngspice says, as one cause a person can act on; provoked in ngspice itself where it can be."""

from __future__ import annotations

import pytest

from charflow.errors import ConvergenceError, LoadError, TrialError
from charflow.simulate.batch import run_deck
from charflow.simulate.messages import load_error, run_error
from charflow.simulate.session import Session

# name, lines of a deck, and words its cause must hold. Each one leaves ngspice able to go on.
NOT_LOADED = [
    ("missing model", ["m1 a a 0 0 nch w=1u l=1u"], "the model 'nch' is used but not defined"),
    ("missing diode model", ["d1 a 0 dio"], "the model 'dio' is used but not defined"),
    ("missing subckt", ["x1 a 0 nosuch"], "a subckt that is not defined: x1 a 0 nosuch"),
    (
        "too many nodes",
        [".subckt inv a b", "r1 a b 1", ".ends", "x1 a 0 a inv"],
        "an instance of 'inv' has more nodes than the subckt has ports",
    ),
    (
        "too few nodes",
        [".subckt inv a b", "r1 a b 1", ".ends", "x1 a inv"],
        "an instance of 'inv' has fewer nodes than the subckt has ports",
    ),
]
STOPPED = [
    ("parallel sources", ["v2 a 0 2", "r1 a 0 1k"], "singular matrix"),
    ("runaway", ["r1 a b 1", "b1 b 0 i=-exp(v(b)*100)", "c1 b 0 1f"], "the time step became too small"),
]
SOURCE = "v1 a 0 pwl(0 0 1n 1)"


@pytest.mark.ngspice
class TestInThisProcess:
    @pytest.mark.parametrize(("name", "lines", "cause"), NOT_LOADED, ids=[case[0] for case in NOT_LOADED])
    def test_a_deck_that_does_not_load_says_why(self, name: str, lines: list[str], cause: str) -> None:
        with pytest.raises(LoadError) as caught:
            Session.here().load(("messages", name), ["* t", SOURCE, *lines, ".end"], None)
        assert cause in caught.value.message
        assert "\n" not in caught.value.message

    @pytest.mark.parametrize(("name", "lines", "cause"), STOPPED, ids=[case[0] for case in STOPPED])
    def test_a_transient_that_stops_early_says_why(self, name: str, lines: list[str], cause: str) -> None:
        session = Session.here()
        session.load(("messages", name), ["* t", SOURCE, *lines, ".end"], None)
        with pytest.raises(ConvergenceError) as caught:
            session.transient(1e-11, 2e-9, ())
        assert cause in caught.value.message


@pytest.mark.ngspice
class TestInTheExecutable:
    @pytest.mark.parametrize(("name", "lines", "cause"), NOT_LOADED, ids=[case[0] for case in NOT_LOADED])
    def test_a_deck_that_does_not_load_says_why(self, name: str, lines: list[str], cause: str) -> None:
        text = "\n".join([f"* {name}", SOURCE, *lines, ".tran 10p 2n", ".end", ""])
        with pytest.raises(LoadError) as caught:
            run_deck(text, None)
        assert cause in caught.value.message

    @pytest.mark.parametrize(("name", "lines", "cause"), STOPPED, ids=[case[0] for case in STOPPED])
    def test_a_transient_that_stops_early_says_why_or_is_short(
        self, name: str, lines: list[str], cause: str
    ) -> None:
        text = "\n".join([f"* {name}", SOURCE, *lines, ".tran 10p 2n", ".end", ""])
        try:
            waves, said = run_deck(text, None)
        except TrialError as error:
            found: TrialError = error
        else:
            assert waves["time"][-1] < 2e-9
            found = run_error(said.splitlines())
        assert isinstance(found, ConvergenceError)
        assert cause in found.message


class TestWords:
    """Lines recorded from ngspice 39, for causes that cannot be provoked without harm to this process."""

    def test_a_parameter_that_is_not_defined_is_named(self) -> None:
        error = load_error(["Original line no.: 2, new internal line no.: 2:", "Undefined parameter [vdd]"])
        assert error.message == "the parameter 'vdd' is used but not defined"
        assert "corner's models" in error.todo

    def test_a_function_that_ngspice_does_not_know_is_named(self) -> None:
        error = load_error(["Error: no such function 'agauss2'"])
        assert error.message == "an expression uses the function 'agauss2', which ngspice does not know"
        assert "compatibility" in error.todo

    def test_the_node_in_trouble_is_named(self) -> None:
        said = 'TRAN:  Timestep too small; time = 1.2e-10, timestep = 1.25e-22: trouble with node "b"'
        assert run_error([said]).message == 'the time step became too small (trouble with node "b")'

    @pytest.mark.parametrize(
        "said",
        ["Transient op failed, timestep too small?", "Warning: source stepping failed", "no convergence"],
    )
    def test_a_missing_operating_point_is_a_failure_to_converge(self, said: str) -> None:
        assert isinstance(run_error([said]), ConvergenceError)

    def test_what_is_not_recognised_is_quoted_at_its_most_alarming(self) -> None:
        said = ["Circuit: x", "Doing analysis", "Error: the moon is full", "Note: done"]
        error = load_error(said)
        assert error.message == "ngspice did not accept the deck; ngspice said: Error: the moon is full"

    def test_silence_is_reported_as_such(self) -> None:
        assert load_error([]).message == "ngspice did not accept the deck"
        assert run_error(["", "  "]).message == "the transient stopped before its end"
