"""The run folder's SQLite file: every trial and every solved row, keyed by what decides its outcome.

Keys are digests of content, so a changed model, netlist, setting or simulator simply has other keys. One
process writes (write-ahead log). Every entry carries a seal over its content: a damaged file is kept aside
and said so, its sound entries are taken over, and nothing damaged is ever used.
"""

from __future__ import annotations

import json
import sqlite3
from collections.abc import Callable, Iterable, Iterator, Sequence
from contextlib import closing
from pathlib import Path
from typing import Any

from charflow.campaign.codec import seal
from charflow.campaign.migrate import bring_up, copied, create, described, is_new, schema_of, statements
from charflow.errors import FolderError

FILE = "charflow.sqlite"
SCHEMA = 1
_COLUMNS = {
    "trials": ("key", "label", "trial", "outcome"),
    "rows": ("key", "row"),
    "corners": ("key", "prepared"),
    "meta": ("name", "value"),
}
_TABLES = """
CREATE TABLE trials (key TEXT PRIMARY KEY, label TEXT NOT NULL, trial TEXT NOT NULL,
    outcome TEXT NOT NULL, seal TEXT NOT NULL) WITHOUT ROWID;
CREATE INDEX trials_by_label ON trials (label);
CREATE TABLE rows (key TEXT PRIMARY KEY, row TEXT NOT NULL, seal TEXT NOT NULL) WITHOUT ROWID;
CREATE TABLE corners (
    key TEXT PRIMARY KEY, prepared TEXT NOT NULL, seal TEXT NOT NULL) WITHOUT ROWID;
CREATE TABLE meta (
    name TEXT PRIMARY KEY, value TEXT NOT NULL, seal TEXT NOT NULL) WITHOUT ROWID;
"""
_TODO_WRITE = "Free some space, or check the permissions; then run the same command again to go on."


class Store:
    """The open store of a run folder. ``say`` receives one-line notices for the user."""

    def __init__(
        self, folder: Path, say: Callable[[str], None] = lambda text: None, *, readonly: bool = False
    ) -> None:
        self.path = folder / FILE
        self.readonly = readonly
        if readonly and not self.path.exists():
            raise FolderError(
                "the folder holds no run", where=(str(folder),), todo="Make one with charflow run."
            )
        try:
            self._db = self._open()
        except sqlite3.DatabaseError as error:
            if readonly or isinstance(error, sqlite3.OperationalError):
                raise FolderError(f"the store cannot be opened: {error}", where=(str(self.path),)) from None
            self._begin_again(str(error), say)

    def _begin_again(self, reason: str, say: Callable[[str], None]) -> None:
        try:
            aside = self._set_aside()
            self._db = self._open()
            kept = self._take_over(aside)
        except (OSError, sqlite3.Error) as error:
            raise FolderError(
                f"the store is damaged ({reason}) and cannot be set aside: {error}", where=(str(self.path),)
            ) from None
        say(f"{self.path} is damaged ({reason}); it is kept as {aside.name}, {kept} sound entries taken over")

    def _open(self) -> sqlite3.Connection:
        if self.readonly:
            # with all in the main file SQLite needs no others beside it, and the folder may be read-only
            whole = not self.path.with_name(f"{FILE}-wal").exists()
            address = f"{self.path.absolute().as_uri()}?mode=ro{'&immutable=1' if whole else ''}"
            db = sqlite3.connect(address, uri=True)
        else:
            if self.path.is_file() and not self.path.stat().st_size:
                raise sqlite3.DatabaseError("it is empty")
            db = sqlite3.connect(self.path)
        try:
            if db.execute("PRAGMA integrity_check(1)").fetchone()[0] != "ok":
                raise sqlite3.DatabaseError("its pages and indexes do not add up")
            db = self._up_to_date(db)
            if described(db) != sorted(statements(_TABLES)):
                raise sqlite3.DatabaseError(f"its tables are not those of schema {SCHEMA}")
            for table in _COLUMNS:
                for _, sound in _entries(db, table):
                    if not sound:
                        raise sqlite3.DatabaseError(f"an entry of {table} does not fit its seal")
        except UnicodeDecodeError:  # the sqlite3 module makes one of a complaint that quotes damage
            db.close()
            raise sqlite3.DatabaseError("its description is not text") from None
        except BaseException:
            db.close()
            raise
        return db

    def _up_to_date(self, db: sqlite3.Connection) -> sqlite3.Connection:
        """Return the store with the schema of today: itself, or a copy in memory where it is only read."""
        if self.readonly and schema_of(db) < SCHEMA:
            with closing(db) as file:
                db = copied(file)
        try:
            new = is_new(db)
            if not new:
                bring_up(db, SCHEMA)
        except FolderError as error:
            raise error.at(str(self.path)) from None
        if not self.readonly:
            db.execute("PRAGMA journal_mode=WAL")
            db.execute("PRAGMA synchronous=NORMAL")
            if new:
                create(db, _TABLES, SCHEMA)
        return db

    def _set_aside(self) -> Path:
        number = 1
        while (aside := self.path.with_name(f"{FILE}.damaged-{number}")).exists():
            number += 1
        self.path.rename(aside)
        for tail in ("-wal", "-shm"):
            other = self.path.with_name(FILE + tail)
            if other.exists():
                other.rename(aside.with_name(aside.name + tail))
        return aside

    def _take_over(self, aside: Path) -> int:
        """Copy the entries of a damaged store that fit their seals, as far as it can be read."""
        kept = 0
        with closing(sqlite3.connect(f"{aside.absolute().as_uri()}?mode=ro", uri=True)) as old:
            for table in _COLUMNS:
                try:
                    for values, sound in _entries(old, table):
                        if sound:
                            self._insert(table, [values], "IGNORE")
                            kept += 1
                except sqlite3.DatabaseError:
                    continue
        return kept

    def add_trials(self, items: Iterable[tuple[str, str, Any, Any]]) -> None:
        """Keep (key, label, trial, outcome) tuples; trial and outcome are JSON values."""
        values = [(key, label, _dump(trial), _dump(outcome)) for key, label, trial, outcome in items]
        self._insert("trials", values, "IGNORE")

    def outcomes(self, label: str) -> dict[str, Any]:
        """Return the outcomes (JSON values) of all trials kept under ``label``, by key."""
        found = self._db.execute("SELECT key, outcome FROM trials WHERE label = ?", (label,))
        return {key: json.loads(outcome) for key, outcome in found}

    def trial(self, key: str) -> tuple[Any, Any] | None:
        """Return trial and outcome (JSON values) of ``key``, or None."""
        found = self._db.execute("SELECT trial, outcome FROM trials WHERE key = ?", (key,)).fetchone()
        return (json.loads(found[0]), json.loads(found[1])) if found else None

    def trials(self) -> Iterator[tuple[Any, Any]]:
        """Yield trial and outcome (JSON values) of all that are kept."""
        for trial, outcome in self._db.execute("SELECT trial, outcome FROM trials ORDER BY key"):
            yield json.loads(trial), json.loads(outcome)

    def count_trials(self) -> int:
        """Return how many trials are kept."""
        return int(self._db.execute("SELECT count(*) FROM trials").fetchone()[0])

    def put(self, table: str, key: str, value: Any) -> None:
        """Keep ``value`` (JSON) under ``key`` in ``rows``, ``corners`` or ``meta``."""
        self._insert(table, [(key, _dump(value))], "REPLACE")

    def get(self, table: str, key: str) -> Any:
        """Return the JSON value under ``key``, or None."""
        name, column = _COLUMNS[table]
        found = self._db.execute(f"SELECT {column} FROM {table} WHERE {name} = ?", (key,)).fetchone()
        return json.loads(found[0]) if found else None

    def _insert(self, table: str, items: Sequence[tuple[str, ...]], otherwise: str) -> None:
        marks = ", ".join("?" * (len(_COLUMNS[table]) + 1))
        try:
            with self._db:
                self._db.executemany(
                    f"INSERT OR {otherwise} INTO {table} VALUES ({marks})",
                    [(*values, seal(*values)) for values in items],
                )
        except sqlite3.DatabaseError as error:
            raise FolderError(
                f"the store cannot be written: {error}", where=(str(self.path),), todo=_TODO_WRITE
            ) from None

    def close(self) -> None:
        """Close the file."""
        self._db.close()


def _entries(db: sqlite3.Connection, table: str) -> Iterator[tuple[tuple[str, ...], bool]]:
    """Yield the entries of a table without their seals, and whether each fits its own."""
    try:
        for *values, stated in db.execute(f"SELECT {', '.join(_COLUMNS[table])}, seal FROM {table}"):
            yield tuple(values), stated == seal(*values)
    except (sqlite3.OperationalError, UnicodeDecodeError) as error:  # no text, or other columns: damage too
        raise sqlite3.DatabaseError(str(error)) from None


def _dump(value: Any) -> str:
    return json.dumps(value, separators=(",", ":"))
