"""What a worker process does: prepare a corner or solve a row, journalling each transient."""

from __future__ import annotations

import ctypes
import hashlib
import os
import signal
import tempfile
import time
from dataclasses import dataclass, field, replace
from pathlib import Path
from typing import Any

from charflow.campaign.codec import outcome_from, outcome_to, trial_to
from charflow.campaign.journal import Journal
from charflow.campaign.timing import Spell
from charflow.errors import FunctionError, TrialError, WorkerDied
from charflow.plan.circuit import Circuit
from charflow.plan.deck import Settings
from charflow.plan.stimulus import Condition, ramp_time, relaxed
from charflow.plan.trial import Outcome, Trial
from charflow.probe.function import Mismatch
from charflow.probe.picture import draw_mismatch
from charflow.probe.prepare import Prepared, prepare
from charflow.sheet import Axes, Sheet
from charflow.simulate.engine import Engine
from charflow.simulate.proof import Proof, compare
from charflow.simulate.session import Clock, Session
from charflow.solve.accuracy import Accuracy, choose_settings
from charflow.solve.reference import FIRST_WINDOW
from charflow.solve.row import Group, RowResult, groups_of, solve_row


@dataclass(frozen=True)
class Job:
    """One piece of work, called ``name`` to people; its trials are kept under ``label``.

    ``axes`` are the columns to solve, those of the sheet unless given. ``known`` are outcomes (JSON) by
    trial key, ``poisoned`` the keys of trials that killed workers. ``folder`` takes the picture of a
    function that is not what the sheet says. With ``full``, the circuit before its models were pruned,
    the job is to compare the two; it leaves much memory behind.
    """

    label: str
    name: str
    sheet: Sheet
    circuit: Circuit
    accuracy: Accuracy | None = None
    group: Group | None = None
    clock_slew: float = 0.0
    neighbours: tuple[RowResult, ...] = ()
    known: dict[str, Any] = field(default_factory=dict)
    poisoned: frozenset[str] = frozenset()
    folder: str = ""
    axes: Axes | None = None
    full: Circuit | None = None


@dataclass(frozen=True)
class Done:
    """What came of a job: a prepared corner, a solved row or proved models, and where the time went.

    Not ``whole`` where a trial was given up because it kills workers: then the next run shall try again.
    """

    name: str
    clock: Clock
    prepared: Prepared | None = None
    accuracy: Accuracy | None = None
    row: RowResult | None = None
    whole: bool = True
    proof: Proof | None = None
    spell: Spell | None = None


def trial_key(circuit: Circuit, settings: Settings, version: int, trial: Trial) -> str:
    """Return the key of ``trial``: a digest of everything that decides its outcome."""
    facts = (circuit.digest, repr(circuit.rest), repr(settings), str(version), repr(trial))
    return hashlib.sha256("\n".join(facts).encode()).hexdigest()[:24]


_journal: Journal | None = None
_engines: dict[object, Engine] = {}


def begin(folder: str, parent: int) -> None:
    """Set up a fresh worker process: dies with ``parent``, leaves Ctrl-C to it, opens its journal.

    Its temporary files go to ``folder`` too, which the next run empties if this one is killed.
    """
    global _journal  # noqa: PLW0603  # one journal a process
    signal.signal(signal.SIGINT, signal.SIG_IGN)
    ctypes.CDLL(None).prctl(1, signal.SIGKILL)  # PR_SET_PDEATHSIG
    if os.getppid() != parent:  # it ended before that took hold
        os._exit(1)
    tempfile.tempdir = folder
    _journal = Journal(Path(folder))


class Bench:
    """Evaluates the trials of one job: from what is known, else in ngspice. Counts what the job needed."""

    def __init__(self, job: Job, circuit: Circuit, settings: Settings) -> None:
        self.job = job
        self.circuit = circuit
        self.settings = settings
        self.version = Session.here().version
        self.needed: dict[Trial, Outcome] = {}
        self.whole = True

    def key_of(self, trial: Trial) -> str:
        """Return the key of ``trial``."""
        return trial_key(self.circuit, self.settings, self.version, trial)

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
            self.whole = False
            raise WorkerDied("the simulator died or hung twice on this trial")
        _say(begin=key)
        outcome = _engine(self.circuit, self.settings).run(trial)
        self.job.known[key] = outcome_to(outcome)
        _say(key=key, label=self.job.label, trial=trial_to(trial), outcome=self.job.known[key])
        return outcome


def _engine(circuit: Circuit, settings: Settings) -> Engine:
    identity = (circuit.digest, circuit.rest, settings)
    if identity not in _engines:
        _engines[identity] = Engine(circuit, settings)
    return _engines[identity]


_written = [0.0]  # s spent on the journal


def _say(**event: Any) -> None:
    if _journal is not None:
        began = time.perf_counter()
        _journal.write(**event)
        _written[0] += time.perf_counter() - began


def work(job: Job) -> Done:
    """Do one job in this process."""
    began, written = time.monotonic(), _written[0]
    _say(job=job.name)
    session = Session.here()
    opened = time.monotonic() - began
    before = replace(session.clock)
    if job.full is not None:
        done = _prove(job, job.full, before)
    elif job.group is None or job.accuracy is None:
        done = _prepare(job, before)
    else:
        done = _solve(job, job.group, job.accuracy, before)
    _say(done=job.name)
    spell = Spell(os.getpid(), began, time.monotonic(), opened, _written[0] - written, done.clock)
    return replace(done, spell=spell)


def _solve(job: Job, group: Group, accuracy: Accuracy, before: Clock) -> Done:
    """Solve a row."""
    bench = Bench(job, job.circuit, accuracy.settings)
    row = solve_row(
        bench,
        lambda: len(bench.needed),
        bench.key_of,
        job.sheet,
        group,
        job.circuit.corner,
        job.clock_slew,
        job.neighbours,
        (accuracy.delay_share, accuracy.constraint),
        job.axes,
    )
    return Done(job.name, Session.here().clock - before, row=row, whole=bench.whole)


def _shown(job: Job, mismatch: Mismatch) -> FunctionError:
    """Return the error of a mismatch, with its waveforms drawn into the run folder."""
    error = mismatch.error
    if not job.folder:
        return error
    circuit = job.circuit.rested(mismatch.rest)
    path = Path(job.folder) / f"mismatch_{circuit.corner}.png"
    try:
        waves, _, zero = _engine(circuit, Settings()).waves(mismatch.flip.trial)
        draw_mismatch(path, circuit, mismatch.flip, waves, zero, error.message)
    except (TrialError, OSError):
        return error
    return FunctionError(error.message, where=error.where, todo=f"Waveforms: {path}. {error.todo}".strip())


def _prepare(job: Job, before: Clock) -> Done:
    """Prove the function of a corner and choose its rest time and settings."""
    try:
        prepared = prepare(lambda circuit: Bench(job, circuit, Settings()), job.sheet, job.circuit)
    except Mismatch as mismatch:
        raise _shown(job, mismatch) from None
    rested = prepared.circuit
    accuracy = choose_settings(
        lambda settings: Bench(job, rested, settings), job.sheet, groups_of(job.sheet), rested.corner
    )
    return Done(job.name, Session.here().clock - before, prepared, accuracy)


def _prove(job: Job, full: Circuit, before: Clock) -> Done:
    """Compare the pruned models with the whole library on one relaxed trial."""
    axes = job.sheet.axes
    middle = (axes.clock_slew[len(axes.clock_slew) // 2], axes.data_slew[len(axes.data_slew) // 2])
    arc = groups_of(job.sheet)[0].arcs[0]
    condition = Condition(job.circuit.corner, *middle, axes.constraint_load)
    until = FIRST_WINDOW + ramp_time(max(middle), job.circuit.fractions)
    proof = compare(full, job.circuit, relaxed(job.sheet, arc, condition, until))
    return Done(job.name, Session.here().clock - before, proof=proof)
