"""A run: every corner prepared, every row solved, over worker processes, resumable at any moment.

Rows form a graph: at each corner and group of arcs the middle clock slew comes first and teaches the rows
next to it. The graph depends on the sheet alone, so the same sheet gives the same answers whatever the
number of workers and however often the run was interrupted.
"""

from __future__ import annotations

import hashlib
import time
from collections.abc import Callable, Iterator
from concurrent.futures import FIRST_COMPLETED, Future, wait
from dataclasses import asdict, dataclass, field, replace
from pathlib import Path

from charflow.campaign.codec import row_from, row_to
from charflow.campaign.folder import JOURNALS, held, open_folder
from charflow.campaign.journal import Follower
from charflow.campaign.pool import LocalPool, Pool, kill
from charflow.campaign.store import Store
from charflow.campaign.worker import Done, Job
from charflow.errors import CharflowError, InputError, SheetError, SimulatorError, WorkerDied
from charflow.plan.circuit import Circuit, circuit_of, read_sources
from charflow.plan.deck import Settings
from charflow.probe.rest import Rest
from charflow.sheet import Sheet
from charflow.simulate.session import Clock
from charflow.solve.answer import Answer
from charflow.solve.row import Group, RowResult, groups_of, lost_row

TRIAL_LIMIT = 120.0  # s without a sign of life from a worker at work on a trial


@dataclass
class Progress:
    """How far a run is; times in seconds. ``left`` is None until there is something to judge by."""

    points: int = 0
    points_total: int = 0
    transients: int = 0
    elapsed: float = 0.0
    left: float | None = None
    doing: str = ""


@dataclass(frozen=True)
class RunResult:
    """The answers of a run in the order of the sheet, what it cost, and whether it was cut short."""

    answers: tuple[Answer, ...]
    transients: int
    seconds: float
    clock: Clock
    rests: dict[str, Rest]
    version: int
    interrupted: bool = False

    @property
    def failed(self) -> int:
        """How many answers have no value."""
        return sum(answer.value is None for answer in self.answers)


@dataclass
class _Node:
    """One job of the graph: its label, what must be solved before it, and how often it was lost."""

    label: str
    corner: str
    group: Group | None
    clock_slew: float
    after: tuple[str, ...]
    points: int
    losses: int = 0


@dataclass
class _Campaign:
    sheet: Sheet
    corners: tuple[str, ...]
    circuits: dict[str, Circuit]
    settings: Settings
    store: Store
    follower: Follower
    tell: Callable[[Progress], None]
    progress: Progress = field(default_factory=Progress)
    clock: Clock = field(default_factory=Clock)
    rests: dict[str, Rest] = field(default_factory=dict)
    rows: dict[str, RowResult] = field(default_factory=dict)
    deaths: dict[str, int] = field(default_factory=dict)
    row_keys: dict[str, str] = field(default_factory=dict)
    version: int = 0


def run_campaign(
    sheet: Sheet,
    folder: Path,
    workers: int,
    corners: tuple[str, ...] | None = None,
    tell: Callable[[Progress], None] = lambda progress: None,
    say: Callable[[str], None] = lambda text: None,
    settings: Settings | None = None,
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
            campaign = _Campaign(sheet, wanted, circuits, settings or Settings(), store, follower, tell)
            campaign.version = library_version()
            _absorb(campaign)
            follower.remove()
            interrupted = False
            try:
                _drive(campaign, workers, began, lambda: LocalPool(workers, folder / JOURNALS))
            except KeyboardInterrupt:
                interrupted = True
            finally:
                _absorb(campaign)
            follower.remove()
            return _result(campaign, began, interrupted)
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


def nodes_of(sheet: Sheet, corners: tuple[str, ...]) -> list[_Node]:
    """Return the jobs of a run: one preparation a corner, then its rows, neighbours before they are needed."""
    slews = sheet.axes.clock_slew
    middle = len(slews) // 2
    order = sorted(range(len(slews)), key=lambda i: (abs(i - middle), i))
    nodes = []
    for position, corner in enumerate(corners):
        prepare = f"{corner}: preparing"
        nodes.append(_Node(prepare, corner, None, 0.0, (), 0))
        for number, group in enumerate(groups_of(sheet)):
            points = len(group.delays) * len(sheet.axes.load) * 2
            points += len(group.constraints) * len(sheet.axes.data_slew)
            for index in order:
                near = [i for i in order[: order.index(index)]]
                near.sort(key=lambda i: (abs(i - index), i))
                before = [_label(corner, number, slews[i]) for i in near[:2]]
                if not before and position:
                    before = [_label(corners[0], number, slews[index])]
                label = _label(corner, number, slews[index])
                nodes.append(_Node(label, corner, group, slews[index], (prepare, *before), points))
    return nodes


def _label(corner: str, group: int, clock_slew: float) -> str:
    return f"{corner}: group {group + 1}, clock slew {clock_slew * 1e12:g} ps"


def _drive(campaign: _Campaign, workers: int, began: float, make_pool: Callable[[], Pool]) -> None:
    """Run the graph: whatever is ready and not in the store goes to the pool, until all is solved."""
    waiting = {node.label: node for node in nodes_of(campaign.sheet, campaign.corners)}
    campaign.progress.points_total = sum(node.points for node in waiting.values())
    for node in _ready(campaign, waiting):
        pass
    if not waiting:
        _tell(campaign, began)
        return
    running: dict[Future[Done], _Node] = {}
    seen: dict[int, float] = {}
    with make_pool() as pool:
        while waiting or running:
            for node in _ready(campaign, waiting):
                del waiting[node.label]
                running[pool.submit(_job(campaign, node))] = node
            finished, _ = wait(running, timeout=0.2, return_when=FIRST_COMPLETED)
            _absorb(campaign, seen)
            for future in finished:
                node = running.pop(future)
                if not _settle(campaign, node, future):
                    waiting[node.label] = node
            _watch(campaign, seen)
            _tell(campaign, began)


def _ready(campaign: _Campaign, waiting: dict[str, _Node]) -> Iterator[_Node]:
    """Yield the nodes that can start; those already in the store are taken from it instead."""
    again = True
    while again:
        again = False
        for node in list(waiting.values()):
            if not all(_known(campaign, label) for label in node.after):
                continue
            if _from_store(campaign, node):
                del waiting[node.label]
                again = True
            elif not again:
                yield node


def _known(campaign: _Campaign, label: str) -> bool:
    return label in campaign.rows or label.removesuffix(": preparing") in campaign.rests


def _from_store(campaign: _Campaign, node: _Node) -> bool:
    key = _key(campaign, node)
    if node.group is None:
        raw = campaign.store.get("corners", key)
        if raw is None:
            return False
        _rested(campaign, node.corner, Rest(**raw))
        return True
    raw = campaign.store.get("rows", key)
    if raw is None:
        return False
    _solved(campaign, node, row_from(raw))
    return True


def _key(campaign: _Campaign, node: _Node) -> str:
    """Return the store key of a node: a digest of everything its result follows from."""
    sheet = campaign.sheet
    facts = [campaign.circuits[node.corner].digest, str(campaign.version), repr(campaign.settings)]
    if node.group is None:
        facts += [
            "prepare",
            repr(sheet.pins),
            repr(sheet.cell.next_state),
            repr(sheet.axes),
            repr(sheet.measure),
        ]
    else:
        facts += [repr(campaign.circuits[node.corner].rest), repr(node.group), repr(node.clock_slew)]
        facts += [repr(sheet.axes.load), repr(sheet.axes.data_slew), repr(sheet.axes.constraint_load)]
        facts += [repr(sheet.measure), *(campaign.row_keys.get(label, "") for label in node.after)]
    key = hashlib.sha256("\n".join(facts).encode()).hexdigest()[:32]
    campaign.row_keys[node.label] = key
    return key


def _trial_label(campaign: _Campaign, node: _Node) -> str:
    """Return the label trials are kept under: what stays the same when axes or pushout change."""
    facts = (
        campaign.circuits[node.corner].digest,
        repr(node.group and node.group.start),
        repr(node.clock_slew),
    )
    return hashlib.sha256("\n".join(facts).encode()).hexdigest()[:24]


def _job(campaign: _Campaign, node: _Node) -> Job:
    label = _trial_label(campaign, node)
    return Job(
        label=label,
        name=node.label,
        sheet=campaign.sheet,
        circuit=campaign.circuits[node.corner],
        settings=campaign.settings,
        group=node.group,
        clock_slew=node.clock_slew,
        neighbours=tuple(campaign.rows[name] for name in node.after if name in campaign.rows),
        known=campaign.store.outcomes(label),
        poisoned=frozenset(key for key, count in campaign.deaths.items() if count > 1),
    )


def _settle(campaign: _Campaign, node: _Node, future: Future[Done]) -> bool:
    """Take the result of a finished job; return False if it must run again."""
    try:
        done = future.result()
    except (InputError, SimulatorError):
        raise
    except CharflowError as error:
        if node.group is None:
            raise error.at(str(campaign.sheet.path)) from None
        raise
    except Exception as error:  # the worker died: pebble reports it in several ways
        return _lost(campaign, node, error)
    campaign.clock = campaign.clock + done.clock
    key = campaign.row_keys[node.label]
    if done.prepared is not None:
        campaign.store.put("corners", key, asdict(done.prepared.rest))
        _rested(campaign, node.corner, done.prepared.rest)
    if done.row is not None:
        if not any(answer.status.startswith(WorkerDied.__name__) for answer in done.row.answers):
            campaign.store.put("rows", key, row_to(done.row))
        _solved(campaign, node, done.row)
    return True


def _lost(campaign: _Campaign, node: _Node, error: Exception) -> bool:
    """Note which trial a dead worker was at; the job runs again, the trial at most once more."""
    node.losses += 1
    culprit = next((trial for job, trial in campaign.follower.busy.values() if job == node.label), "")
    campaign.follower.busy = {p: v for p, v in campaign.follower.busy.items() if v[0] != node.label}
    if culprit:
        campaign.deaths[culprit] = campaign.deaths.get(culprit, 0) + 1
        return False
    if node.losses < 2:
        return False
    if node.group is None:
        raise SimulatorError(
            f"the worker process died twice while preparing corner {node.corner!r} ({error})",
            todo="Try charflow doctor; a model may crash ngspice.",
        )
    reason = "the worker process died twice on this row"
    _solved(campaign, node, lost_row(campaign.sheet, node.group, node.corner, node.clock_slew, reason))
    return True


def _rested(campaign: _Campaign, corner: str, rest: Rest) -> None:
    campaign.rests[corner] = rest
    campaign.circuits[corner] = campaign.circuits[corner].rested(rest.seconds)


def _solved(campaign: _Campaign, node: _Node, row: RowResult) -> None:
    campaign.rows[node.label] = row
    campaign.progress.points += node.points


def _absorb(campaign: _Campaign, seen: dict[int, float] | None = None) -> None:
    """Move what the journals say into the store."""
    items = []
    for process, event in campaign.follower.new():
        if seen is not None:
            seen[process] = time.monotonic()
        if "key" in event:
            items.append((event["key"], event["label"], event["trial"], event["outcome"]))
    campaign.progress.transients += len(items)
    if items:
        campaign.store.add_trials(items)


def _watch(campaign: _Campaign, seen: dict[int, float]) -> None:
    """End workers that have been silent at a trial for longer than the limit."""
    now = time.monotonic()
    for process in list(campaign.follower.busy):
        if now - seen.get(process, now) > TRIAL_LIMIT:
            seen[process] = now
            kill(process)


def _tell(campaign: _Campaign, began: float) -> None:
    progress = campaign.progress
    progress.elapsed = time.monotonic() - began
    share = progress.points / progress.points_total if progress.points_total else 1.0
    progress.left = progress.elapsed * (1 / share - 1) if share > 0.05 else None
    campaign.tell(replace(progress))


def _result(campaign: _Campaign, began: float, interrupted: bool) -> RunResult:
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
            answer.clock_slew,
            answer.data_slew or 0.0,
            answer.load,
        )

    return RunResult(
        answers=tuple(sorted(answers, key=place)),
        transients=campaign.clock.transients,
        seconds=time.monotonic() - began,
        clock=campaign.clock,
        rests=dict(campaign.rests),
        version=campaign.version,
        interrupted=interrupted,
    )
