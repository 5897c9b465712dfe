"""A table entry again: which trial decided it, on which circuit, and what plain ngspice says of it."""

from __future__ import annotations

import csv
import difflib
from collections.abc import Iterator
from contextlib import closing, suppress
from dataclasses import dataclass
from pathlib import Path

from charflow.campaign.benches import Kept, kept_reference, kept_trial
from charflow.campaign.store import Store
from charflow.errors import CharflowError, InputError
from charflow.plan.trial import Trial
from charflow.sheet import read_sheet
from charflow.simulate.replay import Reading, run_again, write_deck
from charflow.tables.flat import Row
from charflow.tables.folder import Tables, read_tables

FOLDER = "replay"


@dataclass(frozen=True)
class Replay:
    """A replayed trial: its deck, its table entries (none for a check between the grid), and the readings.

    ``pushouts`` are the fractions by which each output came later than with the data relaxed, of a
    constraint's trial.
    """

    key: str
    deck: Path
    rows: tuple[Row, ...]
    kept: Kept
    readings: tuple[Reading, ...]
    pushouts: dict[str, float]


def replay(folder: Path, key: str) -> Replay:
    """Write the deck of the deciding trial ``key`` into ``folder``/replay and run it in the executable.

    ``key`` may be shortened to its first characters, if no other entry's key begins so. Raises
    :class:`InputError` for a key that is unknown or not unique.
    """
    tables = read_tables(folder)
    whole = _whole(key, folder, tables)
    rows = tuple(row for row in tables.rows if row.key == whole)
    with closing(Store(folder, readonly=True)) as store:
        kept = _kept(store, tables, whole, _permissions(folder))
        pushouts = _pushouts(store, kept)
    path = write_deck(folder / FOLDER, whole, kept.circuit, kept.trial, kept.settings)
    readings = run_again(path, kept.circuit, kept.trial, kept.settings, kept.outcome)
    return Replay(whole, path, rows, kept, tuple(readings), pushouts)


def _permissions(folder: Path) -> frozenset[str]:
    """Return the permissions of the sheet the run was made from; none where its copy cannot be read."""
    with suppress(CharflowError):
        return read_sheet(folder / "sheet.toml").cell.allow
    return frozenset()


def _kept(store: Store, tables: Tables, key: str, allow: frozenset[str]) -> Kept:
    found = store.trial(key)
    corner = str(found[0].get("corner")) if found else ""
    facts = tables.facts["corners"].get(corner, {})
    return kept_trial(store, str(facts.get("bench", "")), key, allow)


def _pushouts(store: Store, kept: Kept) -> dict[str, float]:
    relaxed = kept_reference(store, kept)
    if relaxed is None:
        return {}
    pairs = ((swing, relaxed.of(swing.pin)) for swing in kept.outcome.swings)
    return {a.pin: a.crossings[-1] / b.crossings[-1] - 1 for a, b in pairs if a.crossings and b.crossings}


def _whole(key: str, folder: Path, tables: Tables) -> str:
    """Return the only key that begins with ``key``."""
    keys = dict.fromkeys(row.key for row in tables.rows if row.key)
    keys |= dict.fromkeys(_checked(folder))
    found = [whole for whole in keys if whole == key] or [
        whole for whole in keys if key and whole.startswith(key.lower())
    ]
    if len(found) == 1:
        return found[0]
    if found:
        shown = ", ".join(found[:4]) + (" ..." if len(found) > 4 else "")
        raise InputError(f"{len(found)} keys begin with {key!r}: {shown}", todo="Give more characters.")
    near = difflib.get_close_matches(key, list(keys), n=1, cutoff=0.3)
    nearest = f" The nearest is {near[0]}." if near else ""
    raise InputError(
        f"no table entry has the key {key!r}",
        where=(str(folder),),
        todo=f"Keys are in the last column of tables.csv and certificate.csv.{nearest}",
    )


def _checked(folder: Path) -> Iterator[str]:
    """Yield the keys of the checks between the grid."""
    with suppress(OSError, csv.Error, UnicodeError), (folder / "certificate.csv").open(newline="") as file:
        yield from (line["key"] for line in csv.DictReader(file) if line.get("key"))


def words(found: Replay) -> list[str]:
    """Return lines that tell what was replayed, and the numbers side by side."""
    lines = [f"trial {found.key} at corner {found.kept.trial.corner}: {_moves(found.kept.trial)}"]
    if found.kept.outcome.rung != "standard":
        lines.append(f"  on settings {found.kept.outcome.rung!r}, as standard ones did not converge")
    entries = [f"  decides {_entry(row)}" for row in found.rows]
    lines += entries or ["  a check between the points of the tables"]
    lines.append(f"{'':20}{'session':>12}{'executable':>12}{'.measure':>12}{'difference':>12}  ps")
    for reading in found.readings:
        numbers = (reading.session, reading.executable, reading.printed)
        cells = "".join(f"{_ps(n):>12}" for n in (*numbers, _apart(reading)))
        lines.append(f"{reading.output + ' ' + reading.quantity:20}{cells}")
    for pin, push in found.pushouts.items():
        lines.append(f"{pin} is {push:.2%} later than with the data relaxed")
    return [*lines, f"deck: {found.deck}"]


def _apart(reading: Reading) -> float | None:
    if reading.session is None or reading.printed is None:
        return None
    return reading.printed - reading.session


def _ps(seconds: float | None) -> str:
    return "-" if seconds is None else f"{seconds * 1e12:.4f}"


def _entry(row: Row) -> str:
    ends = (f"{row.pin} {row.pin_edge}", f"{row.output} {row.output_edge}")
    name = " ".join([row.quantity, *(end for end in ends if end.strip())])
    place = [f"{row.clock_slew_ps:g} ps clock"] if row.clock_slew_ps is not None else []
    place += [f"{row.data_slew_ps:g} ps data"] if row.data_slew_ps is not None else []
    place.append(f"{row.load_ff:g} fF")
    value = "no value" if row.value_ps is None else f"{row.value_ps:.4f} ps"
    return f"{name} at {', '.join(place)}: {value} ({row.status})"


def _moves(trial: Trial) -> str:
    return ", ".join(
        f"{move.pin} {'rises' if move.rising else 'falls'} at {move.at * 1e12:.4f} ps" for move in trial.moves
    )
