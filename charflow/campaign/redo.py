"""What a run into a folder would still have to do, and why: its store asked with the keys of that run."""

from __future__ import annotations

from dataclasses import asdict, dataclass
from pathlib import Path
from typing import Any

from charflow import __version__
from charflow.campaign.facts import causes, facts_of, remembered
from charflow.campaign.folder import JOURNALS
from charflow.campaign.graph import Node, nodes_of
from charflow.campaign.journal import Follower
from charflow.campaign.schedule import Campaign, ModelsDifferError, recall, trials_kept
from charflow.campaign.store import FILE, Store
from charflow.errors import FolderError, visible
from charflow.plan.circuit import circuit_of, read_sources
from charflow.sheet import Sheet

UNPROVED = "what pruning left of the models is not yet compared with the whole library"


@dataclass(frozen=True)
class CornerRedo:
    """One corner: rows and values in all and in the store, transients that can serve again, and why not all.

    ``causes`` is empty where everything is there.
    """

    corner: str
    rows: int
    rows_kept: int
    points: int
    points_kept: int
    trials_kept: int
    causes: tuple[str, ...]


def redo(sheet: Sheet, folder: Path) -> list[CornerRedo]:
    """Return for each corner of ``sheet`` what a run into ``folder`` would find done and would do again.

    Writes nothing. Raises :class:`CharflowError` where the files, the folder or the simulator cannot be used.
    """
    from charflow.simulate.library import library_version
    from charflow.simulate.proof import needless

    sources = read_sources(sheet)
    corners = tuple(sheet.corners)
    circuits = {name: circuit_of(sheet, sources, name) for name in corners}
    whole = {name: circuit_of(sheet, sources, name, pruned=False) for name in corners}
    store = _store(folder)
    if store is None:
        return [_all_new(sheet, corner) for corner in corners]
    try:
        version = library_version()
        while True:
            follower = Follower(folder / JOURNALS)
            campaign = Campaign(
                sheet, corners, dict(circuits), store, follower, version, lambda progress: None, whole=whole
            )
            unproved = [name for name in corners if needless(whole[name], circuits[name]) is None]
            try:
                return _corners(campaign, recall(campaign, unproved))
            except ModelsDifferError as error:  # the store knows that this corner needs the whole library
                circuits[error.corner] = whole[error.corner]
    finally:
        store.close()


def _store(folder: Path) -> Store | None:
    try:
        if folder.exists() and not folder.is_dir():
            raise FolderError("this is a file, not a folder", where=(str(folder),))
        return Store(folder, readonly=True) if (folder / FILE).exists() else None
    except OSError as error:
        raise FolderError(f"the folder cannot be read: {error.strerror}", where=(str(folder),)) from None


def _all_new(sheet: Sheet, corner: str) -> CornerRedo:
    nodes = [node for node in nodes_of(sheet, (corner,)) if node.group is not None]
    points = sum(node.points for node in nodes)
    return CornerRedo(corner, len(nodes), 0, points, 0, 0, ("nothing was measured in this folder",))


def _corners(campaign: Campaign, jobs: list[tuple[Node, bool]]) -> list[CornerRedo]:
    facts = {
        corner: facts_of(campaign.sheet, circuit, campaign.version)
        for corner, circuit in campaign.circuits.items()
    }
    found = []
    for corner in campaign.corners:
        rows = [(node, kept) for node, kept in jobs if node.corner == corner and node.group is not None]
        kept = [node for node, there in rows if there]
        before = remembered(campaign.store, corner)
        proved = all(there for node, there in jobs if node.corner == corner and node.proves)
        why = () if len(kept) == len(rows) else _why(before, facts[corner], some=bool(kept))
        same_simulator = before is None or before.get("ngspice") == campaign.version
        found.append(
            CornerRedo(
                corner=corner,
                rows=len(rows),
                rows_kept=len(kept),
                points=sum(node.points for node, _ in rows),
                points_kept=sum(node.points for node in kept),
                trials_kept=trials_kept(campaign, corner) if same_simulator else 0,
                causes=why if proved else (*why, UNPROVED),
            )
        )
    return found


def _why(before: dict[str, Any] | None, now: dict[str, Any], *, some: bool) -> tuple[str, ...]:
    if some:  # the corner is prepared as it is asked for now: it was on the way
        return ("an earlier run was interrupted, or points of these rows were given up",)
    if before is None:
        return ("no run finished this corner",)
    found = causes(before, now)
    if not found and before.get("charflow") != __version__:
        found = [f"charflow was version {before.get('charflow')}, is {__version__}, and asks differently"]
    return tuple(found or ["an earlier run was interrupted"])


def redo_facts(found: list[CornerRedo]) -> list[dict[str, Any]]:
    """Return the outcome as JSON values."""
    return [asdict(corner) for corner in found]


def redo_text(found: list[CornerRedo], folder: Path) -> str:
    """Return the outcome in words, a few lines a corner."""
    lines = [f"a run into {visible(str(folder))} would:"]
    for corner in found:
        missing = corner.points - corner.points_kept
        if not missing:
            lines.append(f"  {corner.corner}: take all {corner.points} values from the store")
            lines += [f"    but: {cause}" for cause in corner.causes]
            continue
        lines.append(f"  {corner.corner}: solve {missing} of {corner.points} values, because")
        lines += [f"    {cause}" for cause in corner.causes]
        if corner.trials_kept:
            lines.append(
                f"    {corner.trials_kept} transients of this cell and these models are kept and serve again "
                "where they fit"
            )
    return "\n".join(lines)
