"""The work of a run: whatever is ready and not in the store goes to the pool, until all is solved."""

from __future__ import annotations

import hashlib
import time
from collections.abc import Callable, Collection, Iterator
from concurrent.futures import FIRST_COMPLETED, Future, wait
from dataclasses import asdict, replace
from typing import Any

from charflow import __version__
from charflow.campaign.codec import accuracy_from, accuracy_to, row_from, row_to
from charflow.campaign.graph import Node, nodes_of, trial_label
from charflow.campaign.pool import Pool, kill
from charflow.campaign.state import Campaign, ModelsDifferError, Progress
from charflow.campaign.worker import Done, Job
from charflow.errors import CharflowError, InputError, SimulatorError
from charflow.probe.rest import Rest
from charflow.simulate.proof import Proof
from charflow.solve.accuracy import Accuracy
from charflow.solve.between import hints_at
from charflow.solve.row import RowResult, lost_row

__all__ = ["Campaign", "ModelsDifferError", "Progress", "absorb", "drive"]

TRIAL_LIMIT = 120.0  # s without a sign of life from a worker at work on a trial


def drive(campaign: Campaign, make_pool: Callable[[], Pool], stopped: Callable[[], bool]) -> None:
    """Run the graph to its end. Raises :class:`KeyboardInterrupt` once ``stopped()``, between two steps."""
    waiting = _planned(campaign, campaign.first())
    while True:
        for _ in _ready(campaign, waiting):
            pass
        if waiting:
            break
        waiting = _planned(campaign, campaign.more(campaign.rows))
        if not waiting:
            _tell(campaign)
            return
    running: dict[Future[Done], Node] = {}
    seen: dict[int, float] = {}
    campaign.timing.pool = time.monotonic()
    with make_pool() as pool:
        while waiting or running:
            for node in _ready(campaign, waiting):
                if len(running) >= pool.seats:  # a job that waits would not know what others find meanwhile
                    break
                del waiting[node.label]
                running[pool.submit(_job(campaign, node))] = node
            finished, _ = wait(running, timeout=0.2, return_when=FIRST_COMPLETED)
            absorb(campaign, seen)
            for future in finished:
                node = running.pop(future)
                if not _settle(campaign, node, future):
                    waiting[node.label] = node
            _watch(campaign, seen)
            _tell(campaign)
            if stopped():
                raise KeyboardInterrupt
            if not waiting and not running:
                waiting = _planned(campaign, campaign.more(campaign.rows))


def _planned(campaign: Campaign, nodes: list[Node]) -> dict[str, Node]:
    campaign.progress.points_total += sum(node.points for node in nodes)
    return {node.label: node for node in nodes}


def absorb(campaign: Campaign, seen: dict[int, float] | None = None) -> None:
    """Move what the journals say into the store; note in ``seen`` when each process gave a sign of life."""
    with campaign.timing.of("storing"):
        items = _absorbed(campaign, seen)
    if seen is not None:
        campaign.progress.transients += items


def _absorbed(campaign: Campaign, seen: dict[int, float] | None) -> int:
    items = []
    for process, event in campaign.follower.new():
        if seen is not None:
            seen[process] = time.monotonic()
        if "key" in event:
            items.append((event["key"], event["label"], event["trial"], event["outcome"]))
    if items:
        campaign.store.add_trials(items)
    return len(items)


def recall(campaign: Campaign, unproved: Collection[str] = ()) -> list[tuple[Node, bool]]:
    """Return every job of the run and whether the store has what came of it; nothing is run.

    The rows of a corner whose preparation is not in the store are not there either. Raises
    :class:`ModelsDifferError` where the store says so of an ``unproved`` corner.
    """
    found = []
    for node in nodes_of(campaign.sheet, campaign.corners, unproved):
        ready = node.group is None or node.corner in campaign.accuracy
        found.append((node, ready and _from_store(campaign, node)))
    return found


def trials_kept(campaign: Campaign, corner: str) -> int:
    """Return how many transients of this cell at ``corner`` the store has for the rows of the sheet."""
    nodes = [node for node in nodes_of(campaign.sheet, campaign.corners) if node.corner == corner]
    labels = {trial_label(campaign.circuits[corner], node.group, node.clock_slew) for node in nodes}
    return sum(len(campaign.store.outcomes(label)) for label in labels)


def _ready(campaign: Campaign, waiting: dict[str, Node]) -> Iterator[Node]:
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


def _known(campaign: Campaign, label: str) -> bool:
    return label in campaign.rows or label.removesuffix(": preparing") in campaign.rests


def _from_store(campaign: Campaign, node: Node) -> bool:
    key = _key(campaign, node)
    if node.proves:
        raw = campaign.store.get("meta", key)
        if raw is not None:
            _proved(campaign, node.corner, Proof(**raw))
        return raw is not None
    if node.group is None:
        raw = campaign.store.get("corners", key)
        if raw is None:
            return False
        _prepared(campaign, node.corner, Rest(**raw["rest"]), accuracy_from(raw["accuracy"]))
        return True
    raw = campaign.store.get("rows", key)
    if raw is None:
        return False
    _solved(campaign, node, row_from(raw))
    return True


def _key(campaign: Campaign, node: Node) -> str:
    """Return the store key of a node: a digest of everything its result follows from."""
    sheet = campaign.sheet
    # a newer charflow may search otherwise: its rows are its own, its trials are shared
    facts = [campaign.circuits[node.corner].digest, str(campaign.version), __version__]
    if node.proves:
        facts = ["proof", campaign.whole[node.corner].digest, *facts]
    elif node.group is None:
        facts += [
            "prepare",
            repr(sheet.pins),
            repr(sheet.cell.next_state),
            repr(sheet.axes),
            repr(sheet.measure),
        ]
    else:
        facts += [repr(campaign.circuits[node.corner].rest), repr(campaign.accuracy[node.corner])]
        facts += [repr(node.group), repr(node.clock_slew)]
        facts += [repr(sheet.axes), repr(sheet.measure)]
        facts += [repr(node.axes)] if node.axes else []
        facts += [campaign.row_keys.get(label, "") for label in node.after]
    key = hashlib.sha256("\n".join(facts).encode()).hexdigest()[:32]
    campaign.row_keys[node.label] = key
    return key


def _known_trials(campaign: Campaign, node: Node) -> dict[str, Any]:
    """Return the outcomes (JSON) a job may need: rows repeat trials of the preparation, and of each other."""
    circuit = campaign.circuits[node.corner]
    labels = {trial_label(circuit)}
    if node.group is not None:
        labels |= {trial_label(circuit, group, node.clock_slew) for group in campaign.groups}
    return {key: outcome for name in sorted(labels) for key, outcome in campaign.store.outcomes(name).items()}


def _job(campaign: Campaign, node: Node) -> Job:
    label = trial_label(campaign.circuits[node.corner], node.group, node.clock_slew)
    known_rows = [campaign.rows[name] for name in node.after if name in campaign.rows]
    if node.axes is not None:
        known_rows = [hints_at(known_rows, node.clock_slew, node.axes.data_slew)]
    elif node.corner in campaign.accuracy and node.clock_slew == campaign.sheet.axes.clock_slew[-1]:
        known_rows.append(campaign.accuracy[node.corner].taught)  # found while settings were chosen
    return Job(
        label=label,
        name=node.label,
        sheet=campaign.sheet,
        circuit=campaign.circuits[node.corner],
        accuracy=campaign.accuracy.get(node.corner),
        group=node.group,
        clock_slew=node.clock_slew,
        neighbours=tuple(known_rows),
        known=_known_trials(campaign, node),
        poisoned=frozenset(key for key, count in campaign.deaths.items() if count > 1),
        axes=node.axes,
        full=campaign.whole[node.corner] if node.proves else None,
        folder=str(campaign.store.path.parent.absolute()),
    )


def _settle(campaign: Campaign, node: Node, future: Future[Done]) -> bool:
    """Take the result of a finished job; return False if it must run again."""
    try:
        done = future.result()
    except (InputError, SimulatorError):
        raise
    except CharflowError as error:
        raise error.at(str(campaign.sheet.path)) from None
    except Exception as error:
        return _lost(campaign, node, error)
    campaign.clock = campaign.clock + done.clock
    if done.spell is not None:
        campaign.timing.spells.append(done.spell)
    if done.proof is not None:
        if done.proof.difference is not None:
            campaign.store.put("meta", campaign.row_keys[node.label], asdict(done.proof))
        _proved(campaign, node.corner, done.proof)
        return True
    key = campaign.row_keys[node.label]
    if done.prepared is not None and done.accuracy is not None:
        rest, accuracy = done.prepared.rest, done.accuracy
        campaign.store.put("corners", key, {"rest": asdict(rest), "accuracy": accuracy_to(accuracy)})
        _prepared(campaign, node.corner, rest, accuracy)
    if done.row is not None:
        if done.whole:
            campaign.store.put("rows", key, row_to(done.row))
        _solved(campaign, node, done.row)
    return True


def _lost(campaign: Campaign, node: Node, error: Exception) -> bool:
    """Note which trial a dead worker was at; the job runs again, the trial at most once more.

    A job that lost its worker between trials runs again as long as it gets further each time.
    """
    known = len(_known_trials(campaign, node))
    node.losses = 1 if known > node.trials else node.losses + 1
    node.trials = known
    culprit = next((trial for job, trial in campaign.follower.busy.values() if job == node.label), "")
    campaign.follower.busy = {p: v for p, v in campaign.follower.busy.items() if v[0] != node.label}
    if culprit:
        campaign.deaths[culprit] = campaign.deaths.get(culprit, 0) + 1
        return False
    if node.losses < 2:
        return False
    if node.proves:
        _proved(campaign, node.corner, Proof(reason=f"as the worker process died twice on it ({error})"))
        return True
    if node.group is None:
        raise SimulatorError(
            f"the worker process died twice while preparing corner {node.corner!r} ({error})",
            todo="Try charflow doctor; a model may crash ngspice.",
        )
    reason = f"the worker process died twice on this row ({error})"
    row = lost_row(campaign.sheet, node.group, node.corner, node.clock_slew, reason, node.axes)
    _solved(campaign, node, row)
    return True


def _proved(campaign: Campaign, corner: str, proof: Proof) -> None:
    campaign.proofs[corner] = proof
    if proof.differs:
        raise ModelsDifferError(corner)


def _prepared(campaign: Campaign, corner: str, rest: Rest, accuracy: Accuracy) -> None:
    campaign.rests[corner], campaign.accuracy[corner] = rest, accuracy
    campaign.circuits[corner] = campaign.circuits[corner].rested(rest.seconds)


def _solved(campaign: Campaign, node: Node, row: RowResult) -> None:
    campaign.rows[node.label] = row
    campaign.progress.points += node.points


def _watch(campaign: Campaign, seen: dict[int, float]) -> None:
    """End workers that have been silent at a trial for longer than the limit."""
    now = time.monotonic()
    for process in list(campaign.follower.busy):
        if now - seen.get(process, now) > TRIAL_LIMIT:
            seen[process] = now
            kill(process)


def _tell(campaign: Campaign) -> None:
    progress = campaign.progress
    progress.elapsed = time.monotonic() - campaign.began
    share = progress.points / progress.points_total if progress.points_total else 1.0
    progress.left = progress.elapsed * (1 / share - 1) if share > 0.05 else None
    campaign.tell(replace(progress))
