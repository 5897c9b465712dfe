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
from dataclasses import dataclass, field
from pathlib import Path

from charflow.campaign.benches import keep_bench
from charflow.campaign.beyond import Beyond, Refinement, Wish
from charflow.campaign.facts import remember
from charflow.campaign.folder import JOURNALS, held, open_folder
from charflow.campaign.graph import nodes_of
from charflow.campaign.journal import Follower
from charflow.campaign.pool import LocalPool, Pool
from charflow.campaign.schedule import Campaign, ModelsDifferError, Progress, absorb, drive
from charflow.campaign.store import Store
from charflow.campaign.timing import Timing
from charflow.errors import SheetError
from charflow.plan.arcs import Kind
from charflow.plan.circuit import circuit_of, read_sources
from charflow.probe.rest import Rest
from charflow.sheet import Axes, Sheet
from charflow.simulate.proof import Proof, needless
from charflow.simulate.session import Clock
from charflow.solve.accuracy import Accuracy
from charflow.solve.answer import Answer
from charflow.solve.certificate import Certificate
from charflow.solve.row import groups_of

__all__ = ["Progress", "RunResult", "Wish", "run_campaign"]

NOTHING_BEYOND = Wish()


@dataclass(frozen=True)
class RunResult:
    """The answers of a run in the order of the sheet, what it cost, and whether it was cut short.

    ``benches`` are the ids under which the store keeps each corner's circuit and settings, for replays.
    """

    answers: tuple[Answer, ...]
    transients: int
    seconds: float
    clock: Clock
    rests: dict[str, Rest]
    accuracy: dict[str, Accuracy]
    version: int
    interrupted: bool = False
    axes: Axes | None = None
    certificates: tuple[Certificate, ...] = ()
    refinement: Refinement | None = None
    proofs: dict[str, Proof] = field(default_factory=dict)
    benches: dict[str, str] = field(default_factory=dict)
    timing: Timing | None = None

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
    wish: Wish = NOTHING_BEYOND,
) -> RunResult:
    """Measure every point of ``sheet`` into the run folder and return the answers.

    ``wish`` says what to measure beyond: points between, further axis points.
    ``tell`` hears of progress about five times a second, ``say`` of one-line notices. A run in the same
    folder goes on where an earlier one stopped. Ctrl-C ends it cleanly: the result then holds what was
    done. Raises :class:`CharflowError` where nothing can be measured at all.
    """
    from charflow.simulate.library import library_version

    timing = Timing(time.monotonic())
    wanted = _wanted(sheet, corners)
    with timing.of("reading"):
        sources = read_sources(sheet, wanted)
        circuits = {name: circuit_of(sheet, sources, name) for name in wanted}
        whole = {name: circuit_of(sheet, sources, name, pruned=False) for name in wanted}
        groups_of(sheet)
    version = library_version()
    open_folder(folder)
    with held(folder):
        store = Store(folder, say)
        try:
            follower = Follower(folder / JOURNALS)
            proofs: dict[str, Proof] = {}
            while True:
                settled = {name: needless(whole[name], circuits[name]) for name in wanted} | proofs
                unproved = [name for name, proof in settled.items() if proof is None]
                beyond = Beyond(sheet, wanted, wish, nodes_of(sheet, wanted, unproved))
                campaign = Campaign(
                    sheet,
                    wanted,
                    dict(circuits),
                    store,
                    follower,
                    version,
                    tell,
                    timing.began,
                    whole=whole,
                    proofs={name: proof for name, proof in settled.items() if proof is not None},
                    timing=timing,
                    first=beyond.first,
                    more=beyond.more,
                )
                try:
                    interrupted = _driven(campaign, lambda: LocalPool(workers, folder / JOURNALS))
                except ModelsDifferError as error:
                    proofs[error.corner] = campaign.proofs[error.corner]
                    circuits[error.corner] = whole[error.corner]
                    say(f"corner {error.corner}: {proofs[error.corner].words}")
                else:
                    remember(campaign)
                    return _result(campaign, beyond, interrupted)
        finally:
            store.close()


def _driven(campaign: Campaign, make_pool: Callable[[], Pool]) -> bool:
    """Run the campaign to its end and return whether it was interrupted; what was measured is stored."""
    absorb(campaign)
    campaign.follower.remove()
    interrupted = False
    try:
        with _interruptible() as stopped:
            drive(campaign, make_pool, stopped)
    except KeyboardInterrupt:
        interrupted = True
    finally:
        campaign.follower.again()  # an interrupt may have struck between reading and storing
        absorb(campaign)
    campaign.follower.remove()
    return interrupted


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


def _result(campaign: Campaign, beyond: Beyond, interrupted: bool) -> RunResult:
    order = {corner: i for i, corner in enumerate(campaign.sheet.corners)}
    kinds = {kind: i for i, kind in enumerate(Kind)}

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

    answers = tuple(sorted(beyond.answers(campaign.rows), key=place))
    return RunResult(
        answers=answers,
        transients=campaign.clock.transients,
        seconds=time.monotonic() - campaign.began,
        clock=campaign.clock,
        rests=dict(campaign.rests),
        accuracy=dict(campaign.accuracy),
        version=campaign.version,
        interrupted=interrupted,
        axes=beyond.axes,
        certificates=beyond.certificates(campaign.rows),
        refinement=beyond.refinement,
        proofs=dict(campaign.proofs),
        benches={
            corner: keep_bench(campaign.store, campaign.circuits[corner], accuracy.settings, campaign.version)
            for corner, accuracy in campaign.accuracy.items()
        },
        timing=campaign.timing,
    )
