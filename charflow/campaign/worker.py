"""What a worker process does: prepare a corner or solve a row, journalling each transient."""

from __future__ import annotations

import ctypes
import hashlib
import signal
from dataclasses import dataclass, field, replace
from pathlib import Path
from typing import Any

from charflow.campaign.codec import outcome_from, outcome_to, trial_to
from charflow.campaign.journal import Journal
from charflow.errors import WorkerDied
from charflow.plan.circuit import Circuit
from charflow.plan.deck import Settings
from charflow.plan.trial import Outcome, Trial
from charflow.probe.prepare import Prepared, prepare
from charflow.sheet import Sheet
from charflow.simulate.engine import Engine
from charflow.simulate.session import Clock, Session
from charflow.solve.row import Group, RowResult, solve_row


@dataclass(frozen=True)
class Job:
    """One piece of work, called ``name`` to people; its trials are kept under ``label``. ``known`` are outcomes (JSON) by trial key, ``poisoned`` trials that killed workers."""

    label: str
    name: str
    sheet: Sheet
    circuit: Circuit
    settings: Settings
    group: Group | None = None
    clock_slew: float = 0.0
    neighbours: tuple[RowResult, ...] = ()
    known: dict[str, Any] = field(default_factory=dict)
    poisoned: frozenset[str] = frozenset()


@dataclass(frozen=True)
class Done:
    """What came of a job: a prepared corner or a solved row, and where the time went."""

    name: str
    clock: Clock
    prepared: Prepared | None = None
    row: RowResult | None = None


def trial_key(circuit: Circuit, settings: Settings, version: int, trial: Trial) -> str:
    """Return the key of ``trial``: a digest of everything that decides its outcome."""
    facts = (circuit.digest, repr(circuit.rest), repr(settings), str(version), repr(trial))
    return hashlib.sha256("\n".join(facts).encode()).hexdigest()[:24]


_journal: Journal | None = None
_engines: dict[object, Engine] = {}


def begin(folder: str | None) -> None:
    """Set up a fresh worker process: dies with its parent, leaves Ctrl-C to it, opens its journal."""
    global _journal  # noqa: PLW0603  # one journal a process
    signal.signal(signal.SIGINT, signal.SIG_IGN)
    ctypes.CDLL(None).prctl(1, signal.SIGKILL)  # PR_SET_PDEATHSIG
    if folder is not None:
        _journal = Journal(Path(folder))


class Bench:
    """Evaluates the trials of one job: from what is known, else in ngspice. Counts what the job needed."""

    def __init__(self, job: Job, circuit: Circuit) -> None:
        self.job = job
        self.circuit = circuit
        self.version = Session.here().version
        self.needed: dict[Trial, Outcome] = {}

    def key_of(self, trial: Trial) -> str:
        """Return the key of ``trial``."""
        return trial_key(self.circuit, self.job.settings, self.version, trial)

    def __call__(self, trial: Trial) -> Outcome:
        """Return the outcome of ``trial``."""
        if trial not in self.needed:
            self.needed[trial] = self._outcome(trial)
        return self.needed[trial]

    def _outcome(self, trial: Trial) -> Outcome:
        key = self.key_of(trial)
        if key in self.job.known:
            return outcome_from(self.job.known[key])
        if key in self.job.poisoned:
            raise WorkerDied("the simulator died or hung twice on this trial")
        _say(begin=key)
        outcome = _engine(self.circuit, self.job.settings).run(trial)
        _say(key=key, label=self.job.label, trial=trial_to(trial), outcome=outcome_to(outcome))
        return outcome


def _engine(circuit: Circuit, settings: Settings) -> Engine:
    identity = (circuit.digest, circuit.rest, settings)
    if identity not in _engines:
        _engines[identity] = Engine(circuit, settings)
    return _engines[identity]


def _say(**event: Any) -> None:
    if _journal is not None:
        _journal.write(**event)


def work(job: Job) -> Done:
    """Do one job in this process."""
    _say(job=job.name)
    session = Session.here()
    before = replace(session.clock)
    prepared = row = None
    if job.group is None:
        prepared = prepare(lambda circuit: Bench(job, circuit), job.sheet, job.circuit)
    else:
        bench = Bench(job, job.circuit)
        row = solve_row(
            bench,
            lambda: len(bench.needed),
            bench.key_of,
            job.sheet,
            job.group,
            job.circuit.corner,
            job.clock_slew,
            job.neighbours,
        )
    _say(done=job.name)
    return Done(job.name, session.clock - before, prepared, row)
