"""charflow's own cost: whole runs, watched from outside, with every transient accounted for."""

from __future__ import annotations

import json
import resource
import sqlite3
import tempfile
import time
from collections import Counter
from collections.abc import Iterator
from concurrent.futures import Future
from contextlib import closing, contextmanager
from dataclasses import dataclass, field
from pathlib import Path

from charflow.campaign import run as campaign_run
from charflow.campaign.pool import LocalPool
from charflow.campaign.run import RunResult, run_campaign
from charflow.campaign.store import FILE
from charflow.campaign.worker import Done, Job
from charflow.plan.arcs import Kind
from charflow.sheet import Sheet
from charflow.solve.answer import Answer

CONSTRAINTS = (Kind.SETUP, Kind.HOLD)


@dataclass
class Watch:
    """What went through the pool: when the first job was given out, and each job with what came of it."""

    first: float = 0.0
    done: list[tuple[Job, Done, float]] = field(default_factory=list)

    def note(self, job: Job, future: Future[Done]) -> None:
        """Note that ``job`` has come to its end."""
        if future.exception() is None:
            self.done.append((job, future.result(), time.perf_counter()))


@contextmanager
def watched() -> Iterator[Watch]:
    """Watch the pool of the run inside."""
    watch = Watch()

    class WatchedPool(LocalPool):
        def submit(self, job: Job) -> Future[Done]:
            watch.first = watch.first or time.perf_counter()
            future = super().submit(job)
            future.add_done_callback(lambda future: watch.note(job, future))
            return future

    campaign_run.LocalPool = WatchedPool  # type: ignore[misc]
    try:
        yield watch
    finally:
        campaign_run.LocalPool = LocalPool  # type: ignore[misc]


@dataclass(frozen=True)
class Run:
    """One run: its result, wall and processor time [s] of all its processes, and where the transients went.

    ``starting`` [s] is until the first job was given out, ``rows`` [s] from the end of the last preparation.
    ``by_purpose`` counts transients; ``settling`` are those that bring a cell to rest, with the second tries
    of transients that did not converge, in the preparation and in the tables. ``parts`` is where the time
    [s] of all workers together went, by the run's own account.
    """

    result: RunResult
    wall: float
    processor: float
    starting: float
    rows: float
    by_purpose: dict[str, int]
    most: int
    parts: dict[str, float]

    @property
    def constraints(self) -> list[Answer]:
        """The setup and hold values."""
        return [answer for answer in self.result.answers if answer.quantity in CONSTRAINTS]

    @property
    def overhead(self) -> float:
        """The share of one worker's wall time, model load apart, in which no transient ran."""
        return 1 - self.result.clock.transient / (self.wall - self.result.clock.load)

    @property
    def shared_references(self) -> int:
        """References that a delay asked for first, though setup and hold need them too."""
        seen = [a for a in self.result.answers if a.quantity is Kind.CLK_TO_Q]
        outputs = {a.output for a in seen}
        load = self.constraints[0].load
        return sum(a.transients for a in seen if a.load == load) if len(outputs) == 1 else 0

    @property
    def charged(self) -> int:
        """Transients that setup and hold needed: their own, their references, settling in the tables."""
        own = sum(answer.transients for answer in self.constraints)
        return own + self.shared_references + self.by_purpose["settling_tables"]

    @property
    def transients_mean(self) -> float:
        """Transients a setup or hold value; reference and settling in, preparation of the corner not."""
        return self.charged / len(self.constraints)

    @property
    def transients_mean_all_in(self) -> float:
        """The same with as large a share of the preparation as of the tables."""
        return self.share * self.result.transients / len(self.constraints)

    @property
    def transients_max(self) -> int:
        """The most transients of one value, as if it had also paid for its start's settling and reference."""
        return self.most + (1 if self.shared_references else 0)

    @property
    def share(self) -> float:
        """The share of the transients in the tables that setup and hold are charged with."""
        tables = sum(answer.transients for answer in self.result.answers) + self.by_purpose["settling_tables"]
        return self.charged / tables

    @property
    def seconds_per_value(self) -> float:
        """Wall time a setup or hold value: their share of the whole run, process start and preparation in."""
        return self.share * self.wall / len(self.constraints)

    @property
    def processor_per_value(self) -> float:
        """The same in processor time, which other work on the machine disturbs less."""
        return self.share * self.processor / len(self.constraints)


def measure(sheet: Sheet, workers: int) -> Run:
    """Run ``sheet`` with ``workers`` into a folder that is thrown away."""
    with tempfile.TemporaryDirectory() as name, watched() as watch:
        folder = Path(name) / "run"
        before, began = _processor(), time.perf_counter()
        result = run_campaign(sheet, folder, workers)
        ended, after, finished = time.perf_counter(), _processor(), time.monotonic()
        stored = _stored(folder)
    prepared = [(job, done, at) for job, done, at in watch.done if done.prepared is not None]
    labels = {job.label for job, _, _ in prepared}
    preparing = [trial for label, trial in stored if label in labels]
    purposes = {"function_proof": 0, "rest": 0, "settings": 0} | Counter(
        _purpose(t, sheet) for t in preparing
    )
    settled, most = _settled(watch, Counter(label for label, _ in stored))
    by_quantity: Counter[str] = Counter()
    for answer in result.answers:
        name = "setup_hold" if answer.quantity in CONSTRAINTS else "delays" if _delay(answer) else "others"
        by_quantity[name] += answer.transients
    in_preparation = sum(done.clock.transients for _, done, _ in prepared)
    others = (done for _, done, _ in watch.done if done.prepared is None and done.row is None)
    settling = {
        "settling_preparation": in_preparation - len(preparing),
        "settling_tables": settled,
        "model_proof": sum(done.clock.transients for done in others),
    }
    return Run(
        result,
        ended - began,
        after - before,
        watch.first - began,
        ended - max(at for _, _, at in prepared),
        {**by_quantity, **purposes, **settling},
        most,
        _parts(result, finished),
    )


def _parts(result: RunResult, finished: float) -> dict[str, float]:
    if result.timing is None:
        return {}
    report = result.timing.report(finished)
    parts: dict[str, float] = report["all workers"] | report["main"]
    return parts


def _delay(answer: Answer) -> bool:
    return answer.quantity is Kind.TRANSITION or answer.quantity.value.endswith("_to_q")


def _processor() -> float:
    """Return the processor time [s] of this process and of those it has waited for."""
    used = [resource.getrusage(who) for who in (resource.RUSAGE_SELF, resource.RUSAGE_CHILDREN)]
    return sum(usage.ru_utime + usage.ru_stime for usage in used)


def _stored(folder: Path) -> list[tuple[str, dict[str, object]]]:
    with closing(sqlite3.connect(folder / FILE)) as db:
        return [(label, json.loads(trial)) for label, trial in db.execute("SELECT label, trial FROM trials")]


def _purpose(trial: dict[str, object], sheet: Sheet) -> str:
    """Return why the preparation ran ``trial``: each part of it has a clock slew of its own."""
    moves = trial["moves"]
    assert isinstance(moves, list)
    slews, clock = sheet.axes.clock_slew, max(move["slew"] for move in moves)
    return {slews[0]: "function_proof", slews[len(slews) // 2]: "rest"}.get(clock, "settings")


def _settled(watch: Watch, stored: Counter[str]) -> tuple[int, int]:
    """Return how many transients for setup and hold are no trials, and the most one value may have cost.

    Such transients settle the cell or repeat what did not converge. They are counted for each start and clock
    slew, and all of them are charged to the dearest setup or hold value there.
    """
    extra: Counter[str] = Counter({label: -count for label, count in stored.items()})
    dearest: Counter[str] = Counter()
    for job, done, _ in watch.done:
        if done.row is None:
            continue
        extra[job.label] += done.clock.transients
        own = (a.transients for a in done.row.answers if a.quantity in CONSTRAINTS)
        dearest[job.label] = max(dearest[job.label], *own, 0)
    labels = [label for label, most in dearest.items() if most]
    return sum(extra[label] for label in labels), max(dearest[label] + extra[label] for label in labels)
