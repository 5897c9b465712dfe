"""Run folders made without a simulator: every table of a cell with numbers drawn from a fixed seed.

What is tested is that readers find each number where it belongs, so the numbers need only differ.
"""

from __future__ import annotations

import random
import re
import shutil
import subprocess
from collections.abc import Callable, Mapping, Sequence
from dataclasses import replace
from pathlib import Path

import pytest

from charflow.plan.arcs import DELAYS, WIDTHS, Arc, Kind
from charflow.plan.stimulus import Condition
from charflow.sheet import Sheet, read_sheet
from charflow.solve.answer import answer
from charflow.solve.row import groups_of
from charflow.tables.flat import Row, row_of
from charflow.tables.folder import Tables, keep_sheet, write_tables

CORNER = "typical"
MakeFolder = Callable[..., Path]


def _conditions(sheet: Sheet, arc: Arc) -> list[Condition]:
    axes, load = sheet.axes, sheet.axes.constraint_load
    if arc.kind is Kind.DATA_TO_Q:
        return [Condition(CORNER, None, d, c) for d in axes.data_slew for c in axes.load]
    if arc.kind in DELAYS:
        return [Condition(CORNER, s, None, c) for s in axes.clock_slew for c in axes.load]
    if arc.kind in WIDTHS:
        return [Condition(CORNER, s, None, load) for s in axes.clock_slew]
    return [Condition(CORNER, s, d, load) for s in axes.clock_slew for d in axes.data_slew]


def invented_rows(sheet: Sheet, seed: int) -> tuple[Row, ...]:
    """Return a row for every point of every arc of the cell, its value a number from 5 to 500 ps."""
    draw = random.Random(seed)
    rows = []
    for group in groups_of(sheet):
        for arc in group.arcs:
            kinds = (arc.kind, Kind.TRANSITION) if arc.kind in DELAYS else (arc.kind,)
            for kind in kinds:
                rows += [
                    row_of(answer(arc, at, kind, draw.uniform(5e-12, 500e-12), 1e-13, "pushout", 1, "key"))
                    for at in _conditions(sheet, arc)
                ]
    return tuple(rows)


@pytest.fixture
def make_folder(tmp_path: Path, tarn: Path) -> MakeFolder:
    """Write a run folder of a Tarn cell with invented values; ``change`` edits rows, ``names`` pin names."""

    def make(
        cell: str,
        change: Callable[[Sequence[Row]], Sequence[Row]] = lambda rows: rows,
        sheet_edit: tuple[str, str] = ("", ""),
        names: Mapping[str, str] | None = None,
    ) -> Path:
        text = (tarn / f"{cell}.toml").read_text(encoding="utf-8")
        for old, new in (names or {}).items():
            text = re.sub(rf"^{old}\b", f'"{new}"', text, flags=re.MULTILINE).replace(f'"{old}"', f'"{new}"')
        assert sheet_edit[0] in text
        copied = tmp_path / f"{cell}.toml"
        copied.write_text(text.replace(*sheet_edit), encoding="utf-8")
        sheet = read_sheet(copied)
        rows = change(invented_rows(sheet, len(cell)))
        folder = tmp_path / f"run_{cell}"
        folder.mkdir(exist_ok=True)
        write_tables(folder, Tables(cell, (), {}, tuple(rows)))
        keep_sheet(folder, text.replace(*sheet_edit))
        return folder

    return make


@pytest.fixture(scope="session")
def with_hole() -> Callable[[Sequence[Row]], Sequence[Row]]:
    """Take the value from the first row whose quantity is hold."""

    def change(rows: Sequence[Row]) -> Sequence[Row]:
        first = next(row for row in rows if row.quantity == "hold")
        empty = replace(first, value_ps=None, status="no offset passes")
        return [empty if row is first else row for row in rows]

    return change


def _needs(program: str, package: str) -> str:
    found = shutil.which(program)
    if found is None:
        pytest.skip(f"{package} is not installed (Debian: apt-get install {package}), so it cannot read this")
    return found


@pytest.fixture(scope="session")
def sta() -> Callable[[str, Path], str]:
    """Run a script in the static timing analyser of Debian's package opensta and return what it printed.

    It ends with status 0 after an error, so what it says is looked at.
    """
    program = _needs("sta", "opensta")

    def run(script: str, cwd: Path) -> str:
        (cwd / "script.tcl").write_text(script, encoding="utf-8")
        done = subprocess.run(
            [program, "-no_splash", "-exit", "script.tcl"],
            cwd=cwd,
            capture_output=True,
            text=True,
            check=False,
            timeout=60,
            stdin=subprocess.DEVNULL,
        )
        said = done.stdout + done.stderr
        assert done.returncode == 0, said
        assert "Error" not in said, said
        assert "Warning" not in said, said
        return said

    return run


@pytest.fixture(scope="session")
def yosys() -> Callable[[str, Path], str]:
    """Run commands in Debian's yosys and return what it printed; a warning is a failure."""
    program = _needs("yosys", "yosys")

    def run(commands: str, cwd: Path) -> str:
        done = subprocess.run(
            [program, "-e", ".*", "-p", commands],
            cwd=cwd,
            capture_output=True,
            text=True,
            check=False,
            timeout=60,
            stdin=subprocess.DEVNULL,
        )
        assert done.returncode == 0, done.stdout + done.stderr
        return done.stdout

    return run
