"""Bringing a store's schema up to date, one step at a time.

:data:`STEPS` maps a schema to what turns it into the next one; a store takes every step from its own schema
on. Each step is one transaction that ends with the new number, so a store killed on the way stands between
two whole schemas and goes on from there. A step says everything itself in SQL and uses no code that a later
schema may change: what it does to an old store must stay the same for ever. It never begins or ends a
transaction (nor calls ``executescript``, which does).

To change the schema: raise ``SCHEMA`` in :mod:`charflow.campaign.store`, add the step from the number before,
and a test that builds a store as the old charflow did. The number 0 is SQLite's own for a new file.
"""

from __future__ import annotations

import sqlite3
from collections.abc import Callable, Mapping

from charflow.errors import FolderError

Step = Callable[[sqlite3.Connection], None]
STEPS: dict[int, Step] = {}  # schema 1 is the first


def schema_of(db: sqlite3.Connection) -> int:
    """Return the schema number the file states."""
    return int(db.execute("PRAGMA user_version").fetchone()[0])


def is_new(db: sqlite3.Connection) -> bool:
    """Whether the file holds nothing at all yet."""
    return schema_of(db) == 0 and db.execute("SELECT count(*) FROM sqlite_master").fetchone()[0] == 0


def create(db: sqlite3.Connection, tables: str, schema: int) -> None:
    """Make the ``tables`` (SQL statements, each ended by a semicolon) of ``schema``, all or none."""
    _at_once(db, lambda: [db.execute(statement) for statement in statements(tables)], schema)


def statements(tables: str) -> list[str]:
    """Return the SQL statements in ``tables`` in order, white space squeezed."""
    return [text for part in tables.split(";") if (text := _squeezed(part))]


def described(db: sqlite3.Connection) -> list[str]:
    """Return the statements that made everything in the file, sorted, white space squeezed."""
    try:
        found = db.execute("SELECT sql FROM sqlite_master WHERE sql IS NOT NULL").fetchall()
    except sqlite3.OperationalError as error:  # what cannot be decoded is damage
        raise sqlite3.DatabaseError(str(error)) from None
    return sorted(_squeezed(str(sql)) for (sql,) in found)


def _squeezed(sql: str) -> str:
    return " ".join(sql.split()).replace("( ", "(")


def bring_up(db: sqlite3.Connection, schema: int, steps: Mapping[int, Step] | None = None) -> None:
    """Take every step from the file's schema to ``schema``; nothing if it is there.

    Raises :class:`FolderError` where the file is newer, or so old that a step is missing, and
    :class:`sqlite3.DatabaseError` where it states a schema no charflow wrote; the file is then as it was.
    """
    steps = STEPS if steps is None else steps
    found = schema_of(db)
    if found > schema:
        raise FolderError(
            f"the store has schema {found}, this charflow knows up to {schema}",
            todo="Use the charflow that wrote it, or a newer one.",
        )
    if found < 1 and found not in steps:
        raise sqlite3.DatabaseError(f"it states schema {found}, which no charflow wrote")
    missing = [number for number in range(found, schema) if number not in steps]
    if missing:
        raise FolderError(
            f"the store has schema {found}; this charflow can bring up those from {missing[-1] + 1} on",
            todo="Use a charflow between the two once on this folder, or run into a new folder.",
        )
    for number in range(found, schema):
        _at_once(db, lambda step=steps[number]: step(db), number + 1)  # type: ignore[misc]  # bound at once


def _at_once(db: sqlite3.Connection, change: Callable[[], object], schema: int) -> None:
    db.execute("BEGIN IMMEDIATE")
    try:
        change()
        db.execute(f"PRAGMA user_version={int(schema)}")
    except BaseException:
        db.rollback()
        raise
    db.commit()


def copied(db: sqlite3.Connection) -> sqlite3.Connection:
    """Return the content of ``db`` in memory, for bringing up what may not be written."""
    copy = sqlite3.connect(":memory:")
    try:
        db.backup(copy)
    except BaseException:
        copy.close()
        raise
    return copy
