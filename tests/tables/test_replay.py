"""A table entry replayed in plain ngspice gives the number in the table, from a deck that stands alone."""

from __future__ import annotations

import csv
import json
import subprocess
from collections.abc import Callable
from contextlib import closing
from pathlib import Path
from typing import Any

import pytest

from charflow.campaign.run import Wish, run_campaign
from charflow.campaign.store import Store
from charflow.errors import FolderError, InputError, RefusedError
from charflow.sheet import read_sheet
from charflow.simulate.batch import printed_measures
from charflow.simulate.library import find_executable
from charflow.tables.folder import keep_sheet, read_tables, tables_of, write_tables
from charflow.tables.replay import replay, words

pytestmark = pytest.mark.ngspice

SHEET = """
[cell]
netlist = "{decks}/tarn_dffp_1.spice"
subckt = "tarn_dffp_1"
[pins]
CK  = {{ role = "clock", active = "rise" }}
D   = {{ role = "data" }}
Q   = {{ role = "output", shows = "state" }}
QN  = {{ role = "output", shows = "!state" }}
VDD = {{ role = "power" }}
VSS = {{ role = "ground" }}
[corners.typical]
models = ["{decks}/tarn130.lib:tt"]
supply = "1.2 V"
temperature = "25 C"
[axes]
clock_slew = ["20 ps", "100 ps"]
data_slew = ["50 ps"]
load = ["5 fF"]
constraint_load = "5 fF"
"""


@pytest.fixture(scope="module")
def folder(tmp_path_factory: pytest.TempPathFactory, tarn: Path) -> Path:
    """A run folder of the demo cell, two clock slews, one check a table."""
    place = tmp_path_factory.mktemp("replay")
    path = place / "cell.toml"
    path.write_text(SHEET.format(decks=tarn), encoding="utf-8")
    sheet, out = read_sheet(path), place / "run"
    result = run_campaign(sheet, out, 2, wish=Wish(1))
    write_tables(out, tables_of(sheet, result), result.certificates)
    keep_sheet(out, path.read_text(encoding="utf-8"))
    return out


def key_of(folder: Path, quantity: str) -> str:
    return next(row.key for row in read_tables(folder).rows if row.quantity == quantity and row.key)


@pytest.mark.parametrize("quantity", ["clk_to_q", "setup", "hold"])
def test_the_executable_measures_what_the_session_measured(folder: Path, quantity: str) -> None:
    found = replay(folder, key_of(folder, quantity)[:14])
    delays = [reading for reading in found.readings if reading.quantity == "delay"]
    assert {reading.output for reading in delays} == {"Q", "QN"}
    for reading in delays:
        assert reading.executable == pytest.approx(reading.session, abs=0.02e-12)
        assert reading.printed == pytest.approx(reading.session, abs=0.1e-12)  # .measure is linear
    for reading in found.readings:
        assert reading.printed == pytest.approx(reading.session, rel=5e-3)
    assert {row.quantity for row in found.rows} >= {quantity}
    if quantity == "clk_to_q":
        row = found.rows[0]
        assert row.value_ps is not None
        assert any(r.session == pytest.approx(row.value_ps * 1e-12, abs=1e-16) for r in delays)
    else:
        assert max(found.pushouts.values()) == pytest.approx(0.1, abs=0.02)
    text = "\n".join(words(found))
    assert found.key in text
    assert str(found.deck) in text


def test_the_deck_needs_nothing_but_ngspice(folder: Path, tmp_path: Path) -> None:
    found = replay(folder, key_of(folder, "setup"))
    text = found.deck.read_text()
    assert ".include" not in text
    assert ".lib" not in text
    (tmp_path / "alone.cir").write_text(text)
    done = subprocess.run(
        [find_executable(), "-b", "alone.cir"], cwd=tmp_path, capture_output=True, text=True, check=False
    )
    printed = printed_measures(done.stdout)
    assert {r.printed for r in found.readings} <= set(printed.values())


def test_a_check_between_the_points_can_be_replayed_too(folder: Path) -> None:
    with (folder / "certificate.csv").open(newline="") as file:
        key = next(line["key"] for line in csv.DictReader(file) if line["quantity"] == "clk_to_q")
    found = replay(folder, key)
    assert found.rows == ()
    assert found.readings


def test_unknown_and_ambiguous_keys_are_told_with_what_is_near(folder: Path) -> None:
    key = key_of(folder, "setup")
    wrong = key[:-1] + ("0" if key[-1] != "0" else "1")
    with pytest.raises(InputError, match=f"no table entry has the key '{wrong}'(.|\n)*nearest is {key}"):
        replay(folder, wrong)
    first = {row.key[0] for row in read_tables(folder).rows if row.key}
    crowded = max(first, key=lambda c: sum(row.key.startswith(c) for row in read_tables(folder).rows))
    with pytest.raises(InputError, match="keys begin with"):
        replay(folder, crowded)
    with pytest.raises(InputError, match="no table entry"):
        replay(folder, "")


def tampered(folder: Path, change: Callable[[dict[str, Any]], None]) -> Callable[[], None]:
    """Change what the store keeps as the circuit of the corner; return what undoes it."""
    name = read_tables(folder).facts["corners"]["typical"]["bench"]
    with closing(Store(folder)) as store:
        kept = store.get("meta", name)
        other = json.loads(json.dumps(kept))
        change(other)
        store.put("meta", name, other)

    def undo() -> None:
        with closing(Store(folder)) as store:
            store.put("meta", name, kept)

    return undo


def set_field(part: str, name: str, value: object) -> Callable[[dict[str, Any]], None]:
    def change(kept: dict[str, Any]) -> None:
        kept[part][name] = value

    return change


@pytest.mark.parametrize(
    ("change", "error"),
    [
        (set_field("circuit", "digest", "another"), FolderError),
        (set_field("settings", "reltol", 1e-3), FolderError),
        (set_field("circuit", "netlist", "x\n.control\nshell touch harm\n.endc\n"), RefusedError),
        (set_field("circuit", "models", "*\n.include /etc/passwd\n"), RefusedError),
        (set_field("circuit", "netlist", ".subckt tarn_dffp_1 D CK Q QN VDD VSS\n.ends\n"), FolderError),
        (set_field("circuit", "temperature", 125.0), FolderError),
        (set_field("circuit", "compatibility", "hsa\nshell touch harm"), FolderError),
        (set_field("circuit", "corner", "a\n.control"), FolderError),
        (set_field("circuit", "supply", "1\n.control"), FolderError),
        (set_field("circuit", "ports", ["D"]), FolderError),
        (set_field("circuit", "outputs", None), FolderError),
    ],
)
def test_a_kept_circuit_that_is_not_the_one_measured_or_not_harmless_is_refused(
    folder: Path, change: Callable[[dict[str, Any]], None], error: type[Exception]
) -> None:
    key = key_of(folder, "hold")
    undo = tampered(folder, change)
    try:
        with pytest.raises(error):
            replay(folder, key)
    finally:
        undo()
    assert not (folder / "replay" / "harm").exists()


def test_a_folder_without_a_run_is_told(tmp_path: Path) -> None:
    with pytest.raises(FolderError, match="no tables"):
        replay(tmp_path, "abc")
