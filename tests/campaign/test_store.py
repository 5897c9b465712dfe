"""The store gives back what was put in, or says that it cannot."""

from __future__ import annotations

import random
import sqlite3
from pathlib import Path

import pytest

from charflow.campaign.store import FILE, SCHEMA, Store
from charflow.errors import FolderError

TRIALS = [(f"key{n}", f"label{n % 3}", {"n": n}, [[1.1 * n, None], "standard"]) for n in range(200)]


def filled(folder: Path) -> Path:
    """Make a closed store with 200 trials and a few rows, all in the main file."""
    store = Store(folder)
    store.add_trials(TRIALS)
    for n in range(20):
        store.put("rows", f"row{n}", {"value": 2.2 * n})
    store.close()
    return folder / FILE


def content(store: Store) -> dict[str, object]:
    found: dict[str, object] = {}
    for label in ("label0", "label1", "label2"):
        found |= store.outcomes(label)
    return found | {f"row{n}": row for n in range(20) if (row := store.get("rows", f"row{n}")) is not None}


EXPECTED: dict[str, object] = {key: outcome for key, _, _, outcome in TRIALS}
EXPECTED |= {f"row{n}": {"value": 2.2 * n} for n in range(20)}


def test_trials_come_back_by_label_and_by_key(tmp_path: Path) -> None:
    filled(tmp_path)
    store = Store(tmp_path)
    assert store.outcomes("label1") == {key: o for key, label, _, o in TRIALS if label == "label1"}
    assert store.trial("key7") == ({"n": 7}, [[1.1 * 7, None], "standard"])
    assert store.trial("key1000") is None
    assert store.count_trials() == len(TRIALS)
    store.close()


def test_the_first_outcome_of_a_trial_stays(tmp_path: Path) -> None:
    store = Store(tmp_path)
    store.add_trials([("k", "l", {}, [1])])
    store.add_trials([("k", "l", {}, [2])])
    assert store.outcomes("l") == {"k": [1]}
    store.close()


@pytest.mark.parametrize("table", ["rows", "corners", "meta"])
def test_other_tables_keep_the_last_value_of_a_key(tmp_path: Path, table: str) -> None:
    store = Store(tmp_path)
    assert store.get(table, "k") is None
    store.put(table, "k", [1.5])
    store.put(table, "k", {"a": None})
    assert store.get(table, "k") == {"a": None}
    store.close()


def test_names_are_data_to_sql(tmp_path: Path) -> None:
    hostile = "x'); DROP TABLE trials; --"
    store = Store(tmp_path)
    store.add_trials([(hostile, hostile, {"pin": hostile}, [hostile])])
    assert store.outcomes(hostile) == {hostile: [hostile]}
    assert store.count_trials() == 1
    store.close()


def test_a_store_of_a_newer_charflow_is_refused_untouched(tmp_path: Path) -> None:
    path = filled(tmp_path)
    with sqlite3.connect(path) as db:
        db.execute(f"PRAGMA user_version={SCHEMA + 1}")
    db.close()
    before = path.read_bytes()
    with pytest.raises(FolderError, match=f"schema {SCHEMA + 1}, this charflow knows up to {SCHEMA}"):
        Store(tmp_path)
    assert path.read_bytes() == before


def test_reading_a_folder_without_a_store_is_refused_and_makes_none(tmp_path: Path) -> None:
    with pytest.raises(FolderError, match="holds no run"):
        Store(tmp_path, readonly=True)
    assert list(tmp_path.iterdir()) == []


def opened_after_damage(folder: Path, damaged: bytes) -> tuple[dict[str, object], list[str]]:
    """Write a damaged store, open it, and return what it then holds and what was said."""
    (folder / FILE).write_bytes(damaged)
    said: list[str] = []
    store = Store(folder, said.append)
    found = content(store)
    store.close()
    return found, said


def truly_kept(found: dict[str, object]) -> bool:
    return all(EXPECTED.get(key) == value for key, value in found.items())


def test_a_store_cut_short_anywhere_is_said_to_be_and_kept_aside(tmp_path: Path) -> None:
    whole = filled(tmp_path).read_bytes()
    for number, part in enumerate((0.0, 0.001, 0.01, 0.3, 0.6, 0.99), start=1):
        cut = whole[: int(len(whole) * part)]
        found, said = opened_after_damage(tmp_path, cut)
        assert len(said) == 1, (part, said)
        assert f"damaged-{number}" in said[0]
        assert (tmp_path / f"{FILE}.damaged-{number}").read_bytes()[: len(cut)] == cut
        assert truly_kept(found)


def test_a_store_full_of_noise_is_said_to_be_damaged_and_kept_aside(tmp_path: Path) -> None:
    noise = random.Random(1).randbytes(50_000)
    found, said = opened_after_damage(tmp_path, noise)
    assert found == {}
    assert "is damaged" in said[0]
    assert (tmp_path / f"{FILE}.damaged-1").read_bytes() == noise


@pytest.mark.parametrize("seed", range(30))
def test_noise_in_a_store_never_changes_what_it_answers(tmp_path: Path, seed: int) -> None:
    chance = random.Random(seed)
    damaged = bytearray(filled(tmp_path).read_bytes())
    begin = chance.randrange(100, len(damaged) - 64)
    damaged[begin : begin + 64] = chance.randbytes(64)
    found, said = opened_after_damage(tmp_path, bytes(damaged))
    assert truly_kept(found)
    assert said or found == EXPECTED


def test_one_flipped_digit_of_a_kept_number_is_noticed_and_costs_that_entry_only(tmp_path: Path) -> None:
    whole = filled(tmp_path).read_bytes()
    old = b'{"value":11.0}'
    assert whole.count(old) == 1
    found, said = opened_after_damage(tmp_path, whole.replace(old, b'{"value":19.0}'))
    assert "does not fit its seal" in said[0]
    assert f"{len(EXPECTED) - 1} sound entries" in said[0]
    assert found == {key: value for key, value in EXPECTED.items() if key != "row5"}


@pytest.mark.parametrize(
    ("old", "new"),
    [
        (b"meta (name TEXT PRIMARY KEY, value TEXT", b"meta (name TEXT PRIMARY KEY, value TEXU"),
        (b"meta (name TEXT PRIMARY KEY, value TEXT", b"meta (name TEXT PRIMARY KEY, value TEX\xb1"),
        (b"trials_by_label ON trials (label)", b"trials_by_label ON trials (trial)"),
    ],
)
def test_tables_that_would_take_or_find_entries_otherwise_are_not_used(
    tmp_path: Path, old: bytes, new: bytes
) -> None:
    whole = filled(tmp_path).read_bytes()
    assert whole.count(old) == 1
    found, said = opened_after_damage(tmp_path, whole.replace(old, new))
    assert "is damaged" in said[0]
    assert found == EXPECTED


def test_an_index_that_leads_to_the_wrong_trials_is_damage(tmp_path: Path) -> None:
    whole = filled(tmp_path).read_bytes()
    at = whole.index(b"label0key0")  # an entry of the index; the tables have a column in between
    found, said = opened_after_damage(tmp_path, whole[:at] + b"label2" + whole[at + 6 :])
    assert "do not add up" in said[0]
    assert found == EXPECTED


@pytest.mark.parametrize("schema", [-1, -2_000_000_000, 0])
def test_a_schema_below_the_first_is_damage_and_costs_no_entry(tmp_path: Path, schema: int) -> None:
    path = filled(tmp_path)
    with sqlite3.connect(path) as db:
        db.execute(f"PRAGMA user_version={schema}")
    db.close()
    found, said = opened_after_damage(tmp_path, path.read_bytes())
    assert f"states schema {schema}" in said[0]
    assert found == EXPECTED


@pytest.mark.parametrize("readonly", [False, True])
def test_damage_that_sqlite_cannot_even_quote_is_damage(tmp_path: Path, readonly: bool) -> None:
    whole = filled(tmp_path).read_bytes()
    damaged = whole.replace(b"CREATE TABLE trials", b"CREATE TABLE tri\x88\xff ", 1)
    if readonly:
        (tmp_path / FILE).write_bytes(damaged)
        with pytest.raises(FolderError, match="cannot be opened"):
            Store(tmp_path, readonly=True)
    else:
        found, said = opened_after_damage(tmp_path, damaged)
        assert "is damaged" in said[0]
        assert truly_kept(found)


def test_what_was_not_yet_checkpointed_survives_the_process(tmp_path: Path) -> None:
    store = Store(tmp_path)
    store.add_trials(TRIALS)
    copy = tmp_path / "copy"
    copy.mkdir()
    for path in tmp_path.glob(f"{FILE}*"):
        (copy / path.name).write_bytes(path.read_bytes())
    again = Store(copy)
    assert again.count_trials() == len(TRIALS)
    again.close()
    store.close()


def test_a_store_that_cannot_grow_says_so_and_keeps_what_it_has(tmp_path: Path) -> None:
    store = Store(tmp_path)
    store.add_trials(TRIALS[:50])
    pages = store._db.execute("PRAGMA page_count").fetchone()[0]
    store._db.execute(f"PRAGMA max_page_count={pages + 1}")
    with pytest.raises(FolderError, match=r"cannot be written: database or disk is full\n.*go on"):
        store.add_trials(TRIALS[50:])
    store.close()
    again = Store(tmp_path)
    assert again.count_trials() == 50
    again.close()
