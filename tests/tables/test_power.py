"""``power.csv``: columns, units, damage; ``charflow power``; and what Liberty makes of it."""

from __future__ import annotations

from collections.abc import Callable
from pathlib import Path
from typing import Any

import pytest

from charflow.errors import FolderError, InputError
from charflow.sheet import read_sheet
from charflow.solve.power import Power
from charflow.tables.power import COLUMNS, power_csv, power_row, read_power, rests_of, write_power

SOME = (
    Power("typical", "capacitance", "D", "rise", slew=50e-12, value=2.0e-15, low=1.9e-15, high=2.1e-15),
    Power("typical", "energy", "CK", "rise", "Q", "fall", slew=10e-12, load=5e-15, value=-6.1e-15),
    Power("typical", "energy", "D", "fall", when="!CK", slew=10e-12, status="no, not today"),
    Power("typical", "leakage", when="CK & !D & Q", value=6.5e-10),
)


def test_values_carry_the_unit_their_quantity_has() -> None:
    rows = [power_row(power) for power in SOME]
    assert [(row.value, row.unit) for row in rows] == [(2.0, "fF"), (-6.1, "fJ"), (None, "fJ"), (650.0, "pW")]
    assert (rows[0].slew_ps, rows[1].load_ff) == (50.0, 5.0)


def test_rows_come_back_as_they_were_written(tmp_path: Path) -> None:
    rows = tuple(power_row(power) for power in SOME)
    write_power(tmp_path, rows)
    assert read_power(tmp_path) == rows


def test_a_folder_without_power_has_no_rows(tmp_path: Path) -> None:
    assert read_power(tmp_path) == ()


@pytest.mark.parametrize(
    ("text", "says"),
    [
        ("", "columns of power.csv"),
        ("a,b\n", "columns of power.csv"),
        (",".join(COLUMNS) + "\n1,2\n", r"power\.csv:2: 2 columns"),
        (power_csv([power_row(SOME[0])]).replace("fF", "fF,x"), "16 columns"),
        (power_csv([power_row(SOME[0])]).replace(",2,", ",two,"), "two"),
        (power_csv([power_row(SOME[0])]).replace(",2,", ",nan,"), "finite"),
        (power_csv([power_row(SOME[0])]).replace("capacitance", "weight"), "weight"),
    ],
)
def test_a_damaged_file_is_refused_with_its_place(text: str, says: str, tmp_path: Path) -> None:
    (tmp_path / "power.csv").write_text(text, encoding="utf-8")
    with pytest.raises(InputError, match=says):
        read_power(tmp_path)


@pytest.mark.slow
@pytest.mark.ngspice
def test_the_command_measures_a_finished_run_and_liberty_takes_it(
    tiny_sheet: Path, run_cli: Callable[..., Any], tmp_path: Path
) -> None:
    early = run_cli("power", tiny_sheet, "--out", tmp_path / "none")
    assert early.code == 2
    assert "charflow run" in early.stderr
    assert run_cli("run", tiny_sheet, "--out", tmp_path / "run", "--check", "0").code == 0

    done = run_cli("power", tiny_sheet, "--out", tmp_path / "run", "--workers", "1")

    assert done.code == 0, done.stderr
    assert "capacitance of CK, rise" in done.stdout
    rows = read_power(tmp_path / "run")
    assert {row.quantity for row in rows} >= {"capacitance", "energy", "leakage", "leakage_mean"}
    assert run_cli("tables", tmp_path / "run", "--format", "liberty").code == 0
    text = next((tmp_path / "run").glob("*.lib")).read_text(encoding="utf-8")
    mean = next(row.value for row in rows if row.quantity == "leakage_mean")
    assert f"cell_leakage_power : {mean:.10g};" in text
    for word in (
        "rise_capacitance",
        "max_transition",
        "max_capacitance",
        "internal_power",
        "leakage_power ()",
    ):
        assert word in text


def test_the_run_of_another_cell_is_refused(tiny_sheet: Path, make_folder_of: Callable[[str], Path]) -> None:
    with pytest.raises(FolderError, match="a run of 'other'"):
        rests_of(make_folder_of("other"), read_sheet(tiny_sheet))


@pytest.fixture
def make_folder_of(tmp_path: Path) -> Callable[[str], Path]:
    """Write an empty run folder of a cell."""
    from charflow.tables.folder import Tables, write_tables

    def make(cell: str) -> Path:
        folder = tmp_path / cell
        folder.mkdir()
        write_tables(folder, Tables(cell, (), {}, ()))
        return folder

    return make
