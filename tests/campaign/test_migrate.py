"""A store of an older schema opens with all it held, step by step, or is refused as it is."""

from __future__ import annotations

import json
import sqlite3
from collections.abc import Callable, Mapping
from pathlib import Path

import pytest

from charflow.campaign import migrate, store
from charflow.campaign.codec import seal
from charflow.campaign.migrate import STEPS, bring_up, create, is_new, schema_of
from charflow.campaign.store import FILE, SCHEMA, Store
from charflow.errors import FolderError

TRIALS = {f"key{n}": [[0.1 * n, None], "standard"] for n in range(50)}


def old_store(folder: Path, schema: int = 0) -> Path:
    """Write a store of an artificial older schema: no seals, outcomes under another name, no meta."""
    folder.mkdir(exist_ok=True)
    with sqlite3.connect(folder / FILE) as db:
        db.execute("CREATE TABLE results (key TEXT PRIMARY KEY, label TEXT, trial TEXT, result TEXT)")
        db.executemany(
            "INSERT INTO results VALUES (?, 'label', '{}', ?)",
            [(key, json.dumps(value, separators=(",", ":"))) for key, value in TRIALS.items()],
        )
        db.execute(f"PRAGMA user_version={schema}")
    db.close()
    return folder / FILE


def step_from_old(db: sqlite3.Connection) -> None:
    """Bring the artificial schema to the first real one."""
    for table, columns in {
        "trials": "key TEXT PRIMARY KEY, label TEXT NOT NULL, trial TEXT NOT NULL, outcome TEXT NOT NULL",
        "rows": "key TEXT PRIMARY KEY, row TEXT NOT NULL",
        "corners": "key TEXT PRIMARY KEY, prepared TEXT NOT NULL",
        "meta": "name TEXT PRIMARY KEY, value TEXT NOT NULL",
    }.items():
        db.execute(f"CREATE TABLE {table} ({columns}, seal TEXT NOT NULL) WITHOUT ROWID")
    db.execute("CREATE INDEX trials_by_label ON trials (label)")
    for values in db.execute("SELECT key, label, trial, result FROM results").fetchall():
        db.execute("INSERT INTO trials VALUES (?, ?, ?, ?, ?)", (*values, seal(*values)))
    db.execute("DROP TABLE results")


@pytest.fixture
def with_steps(monkeypatch: pytest.MonkeyPatch) -> Callable[[Mapping[int, migrate.Step]], None]:
    return lambda steps: monkeypatch.setattr(migrate, "STEPS", steps)


Steps = Callable[[Mapping[int, migrate.Step]], None]


@pytest.mark.parametrize("readonly", [False, True])
def test_an_old_store_opens_with_everything_it_held(
    tmp_path: Path, with_steps: Steps, readonly: bool
) -> None:
    path = old_store(tmp_path)
    before = path.read_bytes()
    with_steps({0: step_from_old})
    said: list[str] = []
    opened = Store(tmp_path, said.append, readonly=readonly)
    assert opened.outcomes("label") == TRIALS
    assert said == []
    if readonly:
        assert path.read_bytes() == before
        assert [p.name for p in tmp_path.iterdir()] == [FILE]
    else:
        opened.put("meta", "new", 1)
    opened.close()
    with sqlite3.connect(path) as db:
        assert schema_of(db) == (0 if readonly else SCHEMA)
    db.close()


def test_a_store_takes_every_step_once_and_in_order() -> None:
    taken: list[int] = []
    steps = {number: lambda db, n=number: taken.append(n) for number in range(7)}
    with sqlite3.connect(":memory:") as db:
        db.execute("CREATE TABLE t (a)")
        db.execute("PRAGMA user_version=2")
        bring_up(db, 6, steps)  # type: ignore[arg-type]
        assert (taken, schema_of(db)) == ([2, 3, 4, 5], 6)
        bring_up(db, 6, steps)  # type: ignore[arg-type]
        assert taken == [2, 3, 4, 5]
    db.close()


def test_a_step_that_fails_half_way_leaves_the_schema_before_it_whole(
    tmp_path: Path, with_steps: Steps
) -> None:
    def full(db: sqlite3.Connection) -> None:
        step_from_old(db)
        raise sqlite3.OperationalError("database or disk is full")

    path = old_store(tmp_path)
    with_steps({0: full})
    with pytest.raises(FolderError, match="disk is full"):
        Store(tmp_path)
    with sqlite3.connect(path) as db:
        assert schema_of(db) == 0
        assert db.execute("SELECT count(*) FROM results").fetchone() == (len(TRIALS),)
        assert db.execute("SELECT count(*) FROM sqlite_master WHERE name = 'trials'").fetchone() == (0,)
    db.close()
    with_steps({0: step_from_old})
    again = Store(tmp_path)
    assert again.outcomes("label") == TRIALS
    again.close()


def test_the_steps_before_the_one_that_fails_stay_taken() -> None:
    def fail(db: sqlite3.Connection) -> None:
        raise sqlite3.OperationalError("no")

    with sqlite3.connect(":memory:") as db:
        db.execute("CREATE TABLE t (a)")
        db.execute("PRAGMA user_version=1")
        steps = {1: lambda db: db.execute("ALTER TABLE t ADD COLUMN b"), 2: fail}
        with pytest.raises(sqlite3.OperationalError):
            bring_up(db, 3, steps)  # type: ignore[arg-type]
        assert schema_of(db) == 2
        db.execute("SELECT a, b FROM t")
    db.close()


@pytest.mark.parametrize("readonly", [False, True])
def test_a_store_too_old_to_be_brought_up_is_refused_untouched(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch, readonly: bool
) -> None:
    monkeypatch.setattr(store, "SCHEMA", 4)
    monkeypatch.setattr(migrate, "STEPS", {3: step_from_old})
    path = old_store(tmp_path, schema=1)
    before = path.read_bytes()
    with pytest.raises(FolderError, match=r"has schema 1; .*those from 3 on\n.*or run into a new folder"):
        Store(tmp_path, readonly=readonly)
    assert path.read_bytes() == before
    assert [p.name for p in tmp_path.iterdir()] == [FILE]


def test_a_number_no_charflow_wrote_is_damage_and_kept_aside(tmp_path: Path) -> None:
    before = old_store(tmp_path).read_bytes()
    said: list[str] = []
    opened = Store(tmp_path, said.append)
    assert opened.count_trials() == 0
    opened.close()
    assert "states schema 0, which no charflow wrote" in said[0]
    assert (tmp_path / f"{FILE}.damaged-1").read_bytes() == before


def test_every_schema_since_the_first_has_its_step() -> None:
    assert sorted(STEPS) == list(range(1, SCHEMA))


def test_a_new_store_is_made_whole_or_not_at_all() -> None:
    with sqlite3.connect(":memory:") as db:
        assert is_new(db)
        with pytest.raises(sqlite3.OperationalError):
            create(db, "CREATE TABLE a (x); CREATE TABLE nonsense", 1)
        assert is_new(db)
        create(db, "CREATE TABLE a (x); CREATE TABLE b (x);", 1)
        assert (is_new(db), schema_of(db)) == (False, 1)
    db.close()


def test_a_store_in_a_folder_that_may_not_be_written_can_be_read(tmp_path: Path) -> None:
    written = Store(tmp_path)
    written.add_trials([("k", "l", {}, [1])])
    written.close()
    tmp_path.chmod(0o500)
    try:
        opened = Store(tmp_path, readonly=True)
        assert opened.outcomes("l") == {"k": [1]}
        opened.close()
        assert [p.name for p in tmp_path.iterdir()] == [FILE]
    finally:
        tmp_path.chmod(0o700)
