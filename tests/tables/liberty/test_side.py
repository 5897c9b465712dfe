"""``charflow compare`` with a Liberty file on either side."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import replace
from pathlib import Path
from typing import Any

import pytest

from charflow.errors import InputError
from charflow.tables.flat import to_csv
from charflow.tables.folder import read_tables
from charflow.tables.liberty.library import library_texts
from charflow.tables.liberty.side import read_sides

pytest.importorskip("liberty", reason="the package liberty-parser is not installed")


@pytest.fixture
def both(make_folder: Callable[..., Path], tmp_path: Path) -> tuple[Path, Path]:
    """A run folder and the library written from it."""
    folder = make_folder("tarn_dffcsp_1")
    (library,) = library_texts([folder], "x")
    path = tmp_path / "x.lib"
    path.write_text(library.text, encoding="utf-8")
    return folder, path


@pytest.mark.parametrize("library_first", [True, False])
def test_a_run_held_against_its_own_library_has_not_moved(
    both: tuple[Path, Path], library_first: bool, run_cli: Callable[..., Any]
) -> None:
    sides = tuple(reversed(both)) if library_first else both
    done = run_cli("compare", *sides, "--limit", "0.001%")
    assert done.code == 0, done.stdout + done.stderr


def test_a_value_that_moved_is_found(both: tuple[Path, Path], run_cli: Callable[..., Any]) -> None:
    folder, path = both
    table = folder / "other.csv"
    rows = read_tables(folder).rows
    changed = [replace(r, value_ps=2 * (r.value_ps or 0)) if r.quantity == "removal" else r for r in rows]
    table.write_text(to_csv(changed), encoding="utf-8")
    done = run_cli("compare", path, table, "--limit", "1%")
    assert done.code == 1
    assert "removal" in done.stdout


def test_two_libraries_are_read_as_they_are(both: tuple[Path, Path]) -> None:
    old, new = read_sides(both[1], both[1])
    assert old.rows == new.rows
    assert old.rows


def test_a_library_without_the_cell_of_the_other_side_is_refused(
    both: tuple[Path, Path], make_folder: Callable[..., Path]
) -> None:
    with pytest.raises(InputError, match="no cell 'tarn_latp_1'"):
        read_sides(both[1], make_folder("tarn_latp_1"))
