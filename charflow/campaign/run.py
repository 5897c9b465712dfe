"""A run: every corner prepared, every row solved, over worker processes, resumable at any moment.

The same sheet gives the same answers whatever the number of workers and however often the run was
interrupted: :mod:`charflow.campaign.graph` says why.
"""

from __future__ import annotations

import signal
import threading
import time
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from dataclasses import dataclass
from pathlib import Path

from charflow.campaign.folder import JOURNALS, held, open_folder
from charflow.campaign.graph import nodes_of
from charflow.campaign.journal import Follower
from charflow.campaign.pool import LocalPool
from charflow.campaign.schedule import Campaign, Progress, absorb, drive
from charflow.campaign.store import Store
from charflow.errors import SheetError
from charflow.plan.circuit import circuit_of, read_sources
from charflow.probe.rest import Rest
from charflow.sheet import Sheet
from charflow.simulate.session import Clock
from charflow.solve.accuracy import Accuracy
from charflow.solve.answer import Answer
from charflow.solve.row import groups_of

__all__ = ["Progress", "RunResult", "run_campaign"]


@dataclass(frozen=True)
class RunResult:
    """The answers of a run in the order of the sheet, what it cost, and whether it was cut short."""

    answers: tuple[Answer, ...]
    transients: int
    seconds: float
    clock: Clock
    rests: dict[str, Rest]
    accuracy: dict[str, Accuracy]
    version: int
    interrupted: bool = False

    @property
    def failed(self) -> int:
        """How many answers have no value."""
        return sum(answer.value is None for answer in self.answers)


def run_campaign(
    sheet: Sheet,
    folder: Path,
    workers: int,
    corners: tuple[str, ...] | None = None,
    tell: Callable[[Progress], None] = lambda progress: None,
    say: Callable[[str], None] = lambda text: None,
) -> RunResult:
    """Measure every point of ``sheet`` into the run folder and return the answers.

    ``tell`` hears of progress about five times a second, ``say`` of one-line notices. A run in the same
    folder goes on where an earlier one stopped. Ctrl-C ends it cleanly: the result then holds what was
    done. Raises :class:`CharflowError` where nothing can be measured at all.
    """
    from charflow.simulate.library import library_version

    began = time.monotonic()
    wanted = _wanted(sheet, corners)
    sources = read_sources(sheet, wanted)
    circuits = {name: circuit_of(sheet, sources, name) for name in wanted}
    groups_of(sheet)
    open_folder(folder)
    with held(folder):
        store = Store(folder, say)
        try:
            follower = Follower(folder / JOURNALS)
            version = library_version()
            campaign = Campaign(sheet, wanted, circuits, store, follower, version, tell, began)
            absorb(campaign)
            follower.remove()
            interrupted = False
            try:
                with _interruptible() as stopped:
                    drive(campaign, lambda: LocalPool(workers, folder / JOURNALS), stopped)
            except KeyboardInterrupt:
                interrupted = True
            finally:
                follower.again()  # an interrupt may have struck between reading and storing
                absorb(campaign)
            follower.remove()
            return _result(campaign, interrupted)
        finally:
            store.close()


def _wanted(sheet: Sheet, corners: tuple[str, ...] | None) -> tuple[str, ...]:
    for name in corners or ():
        if name not in sheet.corners:
            raise SheetError(
                f"the sheet has no corner {name!r}",
                where=(str(sheet.path),),
                todo=f"It has {', '.join(sheet.corners)}.",
            )
    return tuple(name for name in sheet.corners if not corners or name in corners)


@contextmanager
def _interruptible() -> Iterator[Callable[[], bool]]:
    """Turn a first Ctrl-C or SIGTERM into a question to ask between two steps; a second one acts at once."""
    if threading.current_thread() is not threading.main_thread():
        yield lambda: False
        return
    asked = threading.Event()

    def note(number: int, frame: object) -> None:
        if asked.is_set():
            raise KeyboardInterrupt
        asked.set()

    before = {number: signal.getsignal(number) for number in (signal.SIGINT, signal.SIGTERM)}
    try:
        for number, handler in before.items():
            if handler is not signal.SIG_IGN:
                signal.signal(number, note)
        yield asked.is_set
    finally:
        for number, handler in before.items():
            signal.signal(number, handler)


def _result(campaign: Campaign, interrupted: bool) -> RunResult:
    rows = [
        campaign.rows[n.label] for n in nodes_of(campaign.sheet, campaign.corners) if n.label in campaign.rows
    ]
    order = {corner: i for i, corner in enumerate(campaign.sheet.corners)}
    answers = [answer for row in rows for answer in row.answers]
    kinds = {kind: i for i, kind in enumerate(type(answers[0].quantity))} if answers else {}

    def place(answer: Answer) -> tuple[object, ...]:
        arc = (answer.pin, answer.pin_edge, answer.output, answer.output_edge, answer.when)
        return (
            order[answer.corner],
            kinds[answer.quantity],
            *arc,
            answer.clock_slew or 0.0,
            answer.data_slew or 0.0,
            answer.load,
        )

    return RunResult(
        answers=tuple(sorted(answers, key=place)),
        transients=campaign.clock.transients,
        seconds=time.monotonic() - campaign.began,
        clock=campaign.clock,
        rests=dict(campaign.rests),
        accuracy=dict(campaign.accuracy),
        version=campaign.version,
        interrupted=interrupted,
    )
