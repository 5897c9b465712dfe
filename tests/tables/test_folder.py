"""Tables are written whole or not at all, and read back or explained."""

from __future__ import annotations

import json
import os
from collections.abc import Callable
from pathlib import Path
from typing import Any

import pytest
from hypothesis import given
from hypothesis import strategies as st

from charflow.errors import CharflowError, FolderError
from charflow.tables.flat import Row, from_csv
from charflow.tables.folder import Tables, failures, keep_sheet, read_tables, to_json, write_tables
from charflow.tables.text import CAUTION

MakeRow = Callable[..., Row]
FACTS = {"charflow": "0.1.0", "ngspice": 39, "pushout": 0.1}


@pytest.fixture(scope="session")
def tables(make_row: MakeRow) -> Tables:
    rows = (make_row(), make_row(load_ff=5.0, value_ps=None, status="no"), make_row(setup=True))
    return Tables("tarn_dffp_1", ("corner typical: tt, 1.2 V",), dict(FACTS), rows)


def test_tables_come_back_as_they_were(tmp_path: Path, tables: Tables) -> None:
    write_tables(tmp_path, tables)
    assert read_tables(tmp_path) == tables


def test_csv_and_json_hold_the_same_rows(tmp_path: Path, tables: Tables) -> None:
    write_tables(tmp_path, tables)
    assert from_csv((tmp_path / "tables.csv").read_text(), "tables.csv") == tables.rows
    raw = json.loads((tmp_path / "tables.json").read_text())
    assert [Row(**row) for row in raw["rows"]] == list(tables.rows)
    assert (raw["format"], raw["facts"], raw["caution"]) == (1, FACTS, CAUTION)


def test_three_files_are_written_and_no_fourth_left(tmp_path: Path, tables: Tables) -> None:
    write_tables(tmp_path, tables)
    assert sorted(p.name for p in tmp_path.iterdir()) == ["tables.csv", "tables.json", "tables.md"]


def test_the_old_table_stays_where_the_new_one_cannot_be_written(
    tmp_path: Path, tables: Tables, monkeypatch: pytest.MonkeyPatch
) -> None:
    write_tables(tmp_path, tables)
    before = {p.name: p.read_bytes() for p in tmp_path.iterdir()}

    def full(*_: object) -> None:
        raise OSError(28, "No space left on device")

    monkeypatch.setattr(os, "replace", full)
    with pytest.raises(
        FolderError, match=r"tables\.csv: the file cannot be written: No space left on device"
    ):
        write_tables(tmp_path, Tables("other", (), {}, ()))
    assert {p.name: p.read_bytes() for p in tmp_path.iterdir()} == before


def test_the_sheet_is_kept_as_it_was_read(tmp_path: Path) -> None:
    keep_sheet(tmp_path, "# März\r\n[cell]\n")
    assert (tmp_path / "sheet.toml").read_bytes().decode() == "# März\r\n[cell]\n"


def test_rows_without_a_value_are_counted(tables: Tables) -> None:
    assert failures(tables.rows) == 1


def test_a_folder_without_tables_says_how_to_make_them(tmp_path: Path) -> None:
    with pytest.raises(FolderError, match=r"holds no tables\n.*charflow run SHEET --out DIR"):
        read_tables(tmp_path)


def edited(tables: Tables, *path: Any, value: Any) -> str:
    raw: Any = json.loads(to_json(tables))
    inner = raw
    for step in path[:-1]:
        inner = inner[step]
    inner[path[-1]] = value
    return json.dumps(raw)


@pytest.mark.parametrize(
    ("path", "value", "message"),
    [
        (("format",), 2, "tables of format 2, this charflow reads 1"),
        (("rows", 0, "value_ps"), "fast", "row 1: value_ps: 'fast' is not a number"),
        (("rows", 1, "value_ps"), True, "row 2: value_ps: True is not a number"),
        (("rows", 1, "load_ff"), None, "row 2: load_ff is empty"),
        (("rows", 2, "quantity"), "speed", "row 3: quantity: 'speed' is not known"),
        (("rows", 2, "pin"), 7, "row 3: pin: 7 is not text"),
        (("rows",), 3, "cannot be read"),
        (("rows", 0), "text", "cannot be read"),
        (("conditions",), None, "cannot be read"),
    ],
)
def test_a_table_with_a_wrong_entry_is_refused_and_the_entry_named(
    tmp_path: Path, tables: Tables, path: tuple[Any, ...], value: Any, message: str
) -> None:
    (tmp_path / "tables.json").write_text(edited(tables, *path, value=value))
    with pytest.raises(CharflowError, match=rf"tables\.json.*{message}"):
        read_tables(tmp_path)


@pytest.mark.parametrize(
    "content", [b"", b"{", b"[]", b"null", b"\xff\xfe", b"[" * 100_000, b'{"format": 1}']
)
def test_what_is_no_table_is_a_charflow_error(tmp_path: Path, content: bytes) -> None:
    (tmp_path / "tables.json").write_bytes(content)
    with pytest.raises(FolderError, match=r"tables\.json: the tables cannot be read"):
        read_tables(tmp_path)


@given(data=st.data())
def test_any_damage_to_a_table_is_seen_as_such_or_harmless(
    tmp_path_factory: pytest.TempPathFactory, tables: Tables, data: st.DataObject
) -> None:
    folder = tmp_path_factory.mktemp("damaged")
    content = bytearray(to_json(tables).encode())
    place = data.draw(st.integers(0, len(content) - 1))
    content[place] = data.draw(st.integers(0, 255))
    (folder / "tables.json").write_bytes(content)
    try:
        found = read_tables(folder)
    except CharflowError:
        return
    assert len(found.rows) == len(tables.rows)
    assert all(row.value_ps is None or abs(row.value_ps) < 1e15 for row in found.rows)
