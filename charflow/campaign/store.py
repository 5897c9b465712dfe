"""The run folder's SQLite file: every trial and every solved row, keyed by what decides its outcome.

Keys are digests of content, so a changed model, netlist, setting or simulator simply has other keys. One
process writes (write-ahead log); a damaged file is kept aside and said so, never silently used.
"""

from __future__ import annotations

import json
import sqlite3
from collections.abc import Callable, Iterable
from pathlib import Path
from typing import Any

from charflow.errors import FolderError

FILE = "charflow.sqlite"
SCHEMA = 1
_TABLES = """
CREATE TABLE IF NOT EXISTS trials (
    key TEXT PRIMARY KEY, label TEXT NOT NULL, trial TEXT NOT NULL, outcome TEXT NOT NULL) WITHOUT ROWID;
CREATE INDEX IF NOT EXISTS trials_by_label ON trials (label);
CREATE TABLE IF NOT EXISTS rows (key TEXT PRIMARY KEY, row TEXT NOT NULL) WITHOUT ROWID;
CREATE TABLE IF NOT EXISTS corners (key TEXT PRIMARY KEY, prepared TEXT NOT NULL) WITHOUT ROWID;
CREATE TABLE IF NOT EXISTS meta (name TEXT PRIMARY KEY, value TEXT NOT NULL) WITHOUT ROWID;
"""


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
            say(
                f"{self.path} is damaged ({error}); it is kept as {self._set_aside().name} and a new one begun"
            )
            self._db = self._open()

    def _open(self) -> sqlite3.Connection:
        if self.readonly:
            db = sqlite3.connect(f"{self.path.absolute().as_uri()}?mode=ro", uri=True)
        else:
            db = sqlite3.connect(self.path)
        try:
            version = db.execute("PRAGMA user_version").fetchone()[0]
            if db.execute("PRAGMA quick_check(1)").fetchone()[0] != "ok":
                raise sqlite3.DatabaseError("its pages do not add up")
            if version > SCHEMA:
                raise FolderError(
                    f"the store has schema {version}, this charflow knows up to {SCHEMA}",
                    where=(str(self.path),),
                    todo="Use the charflow that wrote it, or a newer one.",
                )
            if not self.readonly:
                db.execute("PRAGMA journal_mode=WAL")
                db.execute("PRAGMA synchronous=NORMAL")
                db.executescript(_TABLES)
                db.execute(f"PRAGMA user_version={SCHEMA}")
        except BaseException:
            db.close()
            raise
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

    def add_trials(self, items: Iterable[tuple[str, str, Any, Any]]) -> None:
        """Keep (key, label, trial, outcome) tuples; trial and outcome are JSON values."""
        self._write(
            "INSERT OR IGNORE INTO trials VALUES (?, ?, ?, ?)",
            [(key, label, _dump(trial), _dump(outcome)) for key, label, trial, outcome in items],
        )

    def outcomes(self, label: str) -> dict[str, Any]:
        """Return the outcomes (JSON values) of all trials kept under ``label``, by key."""
        found = self._db.execute("SELECT key, outcome FROM trials WHERE label = ?", (label,))
        return {key: json.loads(outcome) for key, outcome in found}

    def trial(self, key: str) -> tuple[Any, Any] | None:
        """Return trial and outcome (JSON values) of ``key``, or None."""
        found = self._db.execute("SELECT trial, outcome FROM trials WHERE key = ?", (key,)).fetchone()
        return (json.loads(found[0]), json.loads(found[1])) if found else None

    def count_trials(self) -> int:
        """Return how many trials are kept."""
        return int(self._db.execute("SELECT count(*) FROM trials").fetchone()[0])

    def put(self, table: str, key: str, value: Any) -> None:
        """Keep ``value`` (JSON) under ``key`` in ``rows``, ``corners`` or ``meta``."""
        self._write(f"INSERT OR REPLACE INTO {_known(table)} VALUES (?, ?)", [(key, _dump(value))])

    def get(self, table: str, key: str) -> Any:
        """Return the JSON value under ``key``, or None."""
        column = {"rows": "row", "corners": "prepared", "meta": "value"}[table]
        field = "name" if table == "meta" else "key"
        found = self._db.execute(f"SELECT {column} FROM {_known(table)} WHERE {field} = ?", (key,)).fetchone()
        return json.loads(found[0]) if found else None

    def _write(self, statement: str, items: list[tuple[Any, ...]]) -> None:
        try:
            with self._db:
                self._db.executemany(statement, items)
        except sqlite3.OperationalError as error:
            raise FolderError(
                f"the store cannot be written: {error}",
                where=(str(self.path),),
                todo="Free some space, or check the permissions; then run the same command again to go on.",
            ) from None

    def close(self) -> None:
        """Close the file."""
        self._db.close()


def _known(table: str) -> str:
    if table not in ("rows", "corners", "meta"):
        raise ValueError(table)
    return table


def _dump(value: Any) -> str:
    return json.dumps(value, separators=(",", ":"))
