"""A worker that answers trials from formulas instead of ngspice, and fails as the environment says.

``FORMULA_PACE`` [s] is slept at each trial. ``FORMULA_FAULT`` is what happens at the trials named by
``FORMULA_LOAD`` (the load of Q in fF, of trials in which the clock alone moves): ``die``, ``abort``,
``exit``, ``hang``, ``error`` or ``odd``. With
``FORMULA_ONCE`` (a file) it happens only while that does not exist; ``FORMULA_COUNT`` (a file) grows by a
byte each time.
``FORMULA_SLOWER`` [s] is added to every delay. ``FORMULA_VERSION`` is the simulator's.
``FORMULA_BENT`` [1/s] times the square of the clock slew is added to every delay. ``FORMULA_APART`` [V] is
how far pruned models are from the whole library.
"""

from __future__ import annotations

import os
import signal
import time
from dataclasses import replace
from pathlib import Path
from typing import Any

from charflow.campaign import worker
from charflow.plan.arcs import Kind
from charflow.plan.behaviour import behaviour_of
from charflow.plan.trial import Outcome, Trial
from charflow.sheet import Sheet
from charflow.simulate.proof import Proof
from charflow.simulate.session import Clock, Session
from charflow.solve.fake import Curve, FakeOutput, FakeRegister


class FormulaSession:
    """What a worker asks of a session."""

    def __init__(self) -> None:
        self.clock = Clock()
        self.version = int(os.environ.get("FORMULA_VERSION", "39"))


class FormulaEngine:
    """Answers trials of the cell of ``sheet``; the supply makes a corner faster or slower."""

    def __init__(self, sheet: Sheet, supply: float, session: FormulaSession) -> None:
        delay = 120e-12 / supply + float(os.environ.get("FORMULA_SLOWER", "0"))
        outputs = tuple(
            FakeOutput(pin, delay + 5e-12 * number, 30e-12, per_farad=2e3)
            for number, pin in enumerate(sheet.outputs)
        )
        curves = {
            (kind, "D", rising): Curve(knee=sign * 30e-12, tau=8e-12, per_data_slew=sign * 0.2)
            for kind, sign in ((Kind.SETUP, 1), (Kind.HOLD, -1))
            for rising in (True, False)
        }
        self.register = FakeRegister(behaviour_of(sheet), outputs, curves)
        self.session = session

    def run(self, trial: Trial) -> Outcome:
        """Return what ``trial`` shows, or fail."""
        self.session.clock.transients += 1
        time.sleep(float(os.environ.get("FORMULA_PACE", "0")))
        if _strikes(trial):
            _fail(os.environ["FORMULA_FAULT"])
        return replace(self._bent(trial)(trial), rung="standard")

    def _bent(self, trial: Trial) -> FakeRegister:
        bend = float(os.environ.get("FORMULA_BENT", "0")) * next(
            (move.slew**2 for move in trial.moves if move.at == 0.0), 0.0
        )
        outputs = tuple(replace(output, delay=output.delay + bend) for output in self.register.outputs)
        return replace(self.register, outputs=outputs)


def _strikes(trial: Trial) -> bool:
    load = os.environ.get("FORMULA_LOAD")
    if load is None or len(trial.moves) != 1 or trial.moves[0].pin != "CK":
        return False
    if abs(dict(trial.loads)["Q"] - float(load) * 1e-15) > 1e-20:
        return False
    once = os.environ.get("FORMULA_ONCE")
    if once is None:
        return True
    try:
        Path(once).touch(exist_ok=False)
    except FileExistsError:
        return False
    return True


class Odd(Exception):
    """An error that does not survive its way to another process."""

    def __init__(self, reason: str) -> None:
        super().__init__(reason)
        self.reason = lambda: reason


def _fail(how: str) -> None:
    if count := os.environ.get("FORMULA_COUNT"):
        with Path(count).open("ab") as file:
            file.write(b".")
    match how:
        case "die":
            os.kill(os.getpid(), signal.SIGKILL)
        case "abort":
            os.abort()
        case "exit":
            os._exit(0)
        case "hang":
            time.sleep(3600)
        case "error":
            raise ValueError("an index out of its range")
        case "odd":
            raise Odd("unforeseen")


def work(job: worker.Job) -> worker.Done:
    """Do ``job`` as :func:`charflow.campaign.worker.work` does, with formulas for ngspice."""
    held: Any = Session
    held._only = held._only or FormulaSession()
    engines: Any = worker
    engines._engine = lambda circuit, settings: FormulaEngine(job.sheet, circuit.supply, held._only)
    apart = float(os.environ.get("FORMULA_APART", "0"))
    engines.compare = lambda full, pruned, trial: Proof(100, apart, not apart)
    return worker.work(job)
