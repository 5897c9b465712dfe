"""Names from sheets, netlists and the file system are data wherever they go, whatever they look like."""

from __future__ import annotations

import json
import os
import re
import sqlite3
from collections.abc import Callable, Iterator
from pathlib import Path
from typing import Any
from xml.etree import ElementTree

import pytest
from click.testing import CliRunner, Result

from charflow.cli import main
from charflow.errors import CharflowError, visible
from charflow.tables.flat import from_csv
from charflow.tables.folder import read_tables

NAMES = [
    "it's",
    'dou"ble',
    "$(touch WITNESS)",
    "`touch WITNESS`",
    "a;touch WITNESS",
    "a|touch WITNESS",
    "<script>document.title='WITNESS'</script>",
    "../up",
    "/absolute",
    "new\nline",
    "new\n.control\nshell touch WITNESS\n.endc",
    "tab\tbed",
    "%n%s%x",
    "x'); DROP TABLE trials; --",
    "-rf",
    "--help",
    "\x1b[31mred\x07",
    "\u202egnp.exe",
    "{{7*7}}",
    "=1+1",
    "# [link](http://x) **bold** | cell |",
    "\\frac{x$",
    "a\\\\",
    "n\u00fcl\u2028l",
    "*",
    "+",
    ".include",
    "~",
    "x" * 250,
]
IDS = [visible(name)[:24] for name in NAMES]
CALM = {"pin": "D", "subckt": "tarn_dffp_1", "corner": "typical", "netlist": "cell.spice", "models": "m.lib"}


def sheet_text(decks: Path, **names: str) -> str:
    """Return a sheet with one point a table whose names are ``names``, quoted as TOML wants them."""
    quoted = {key: json.dumps(value) for key, value in {**CALM, **names}.items()}
    return f"""
[cell]
netlist = {quoted["netlist"]}
subckt = {quoted["subckt"]}
include_folders = [{json.dumps(str(decks))}]
[pins]
CK = {{ role = "clock", active = "rise" }}
{quoted["pin"]} = {{ role = "data" }}
Q = {{ role = "output", shows = "state" }}
QN = {{ role = "output", shows = "!state" }}
VDD = {{ role = "power" }}
VSS = {{ role = "ground" }}
[corners.{quoted["corner"]}]
models = [{json.dumps(names.get("models", CALM["models"]) + ":tt")}]
supply = "1.2 V"
temperature = "25 C"
[axes]
clock_slew = ["50 ps"]
data_slew = ["50 ps"]
load = ["5 fF"]
constraint_load = "5 fF"
[measure]
resolution = "0.5 ps"
"""


def write_files(work: Path, decks: Path, **names: str) -> Path | None:
    """Write sheet, netlist and models with these names; None where the file system has no such name."""
    calm = {**CALM, **names}
    netlist = (decks / "tarn_dffp_1.spice").read_text()
    netlist = re.sub(r"\btarn_dffp_1\b", lambda _: calm["subckt"], netlist)
    netlist = re.sub(r"\bD\b", lambda _: calm["pin"], netlist)
    models = f".lib tt\n.lib '{decks}/tarn130.lib' tt\n.endl\n"
    sheet = work / names.get("sheet", "sheet.toml")
    if sheet.parent != work:  # this names another place, which is the user's to name
        return None
    try:
        for path, text in ((work / calm["netlist"], netlist), (work / calm["models"], models)):
            if not path.exists() and path.parent == work:
                path.write_text(text)
        sheet.write_text(sheet_text(decks, **names), encoding="utf-8")
    except (OSError, ValueError):
        return None
    return sheet


@pytest.fixture
def work(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> Iterator[Path]:
    """A folder to work in; afterwards nobody has left a witness, nor anything beside it."""
    folder = tmp_path / "one" / "two"
    folder.mkdir(parents=True)
    monkeypatch.chdir(folder)
    yield folder
    assert sorted(tmp_path.iterdir()) == [tmp_path / "one"]
    assert sorted((tmp_path / "one").iterdir()) == [folder]
    for where, folders, files in os.walk(folder):
        assert "WITNESS" not in files + folders, where


def called(*words: str | Path) -> Result:
    """Run a command in this process; it ends with a status and says nothing a terminal would obey."""
    result = CliRunner().invoke(main, [str(word) for word in words])
    assert result.exception is None or isinstance(result.exception, SystemExit), result.exception
    assert result.exit_code in (0, 1, 2), result.output
    assert not re.search(r"[\x00-\x08\x0b-\x1f\x7f\u2028\u202e]", result.output), repr(result.output)
    return result


def checked_decks(folder: Path) -> None:
    """Check that decks have plain file names and hold no line that ngspice would run."""
    found = list(folder.iterdir())
    assert found
    for path in found:
        assert path.name == ".spiceinit" or re.fullmatch(r"[\w.+-]+\.cir", path.name)
        lines = [line.strip().lower() for line in path.read_text().splitlines()]
        assert not [line for line in lines if line.startswith((".control", ".include", ".lib", "shell", "`"))]


@pytest.mark.parametrize("place", ["pin", "subckt", "corner", "netlist", "models", "sheet"])
@pytest.mark.parametrize("name", NAMES, ids=IDS)
def test_a_name_is_refused_in_words_or_planned_like_any_other(
    work: Path, tarn: Path, place: str, name: str
) -> None:
    sheet = write_files(work, tarn, **{place: name})
    if sheet is None:
        return
    before = {path.name for path in work.iterdir()}
    result = called("plan", "--decks", "decks", "--", sheet)
    if result.exit_code == 0:
        checked_decks(work / "decks")
    else:
        assert result.exit_code == 2
        assert result.output.startswith("charflow: ")
    assert {path.name for path in work.iterdir()} - before <= {"decks"}


@pytest.mark.parametrize("name", NAMES, ids=IDS)
def test_a_folder_of_any_name_is_written_there_and_nowhere_else(work: Path, tarn: Path, name: str) -> None:
    if name in ("../up", "/absolute"):
        pytest.skip("this names another place, which is the user's to name")
    sheet = write_files(work, tarn)
    assert sheet is not None
    result = called("plan", sheet, "--decks", f"./{name}", "--against", f"./{name}-run")
    assert result.exit_code == 0, result.output
    checked_decks(work / name)


@pytest.mark.parametrize("command", ["compare", "tables", "replay"])
@pytest.mark.parametrize("name", NAMES, ids=IDS)
def test_a_file_that_is_not_there_is_named_without_harm(work: Path, command: str, name: str) -> None:
    more = {"compare": ["nothing.csv"], "tables": [], "replay": ["key"]}[command]
    assert called(command, "--", f"./{name}", *more).exit_code == 2


@pytest.mark.parametrize("name", NAMES, ids=IDS)
def test_names_in_a_table_from_elsewhere_are_printed_and_drawn_as_they_are(work: Path, name: str) -> None:
    import csv

    head = "corner,quantity,pin,pin_edge,related_pin,related_edge,output,output_edge,when,clock_slew_ps,"
    head += "data_slew_ps,load_ff,value_ps,bracket_ps,status,transients,key"
    for side, value in (("old", "20"), ("new", "-25")):
        with (work / f"{side}.csv").open("w", newline="", encoding="utf-8") as file:
            writer = csv.writer(file)
            writer.writerow(head.split(","))
            for slew in ("10", "50"):
                names = [name, "setup", name, "rise", name, "rise", "", "", name]
                writer.writerow([*names, slew, "10", "5", value, "0.1", name, "3", name])
    assert called("compare", "old.csv", "new.csv", "--limit", "2%").exit_code == 1
    facts = json.loads(called("compare", "old.csv", "new.csv", "--json").output)
    assert {change["pin"] for change in facts["changes"]} == {name}
    if not set(name) & set("<$\x1b\n"):  # a picture takes a second
        return
    called("compare", "old.csv", "new.csv", "--picture", "c.svg")
    tree = ElementTree.fromstring((work / "c.svg").read_bytes())
    assert not [node for node in tree.iter() if node.tag.rpartition("}")[2] in ("script", "a", "image")]


HOSTILE = {
    "pin": "D<script>",
    "subckt": "ff<script>..%n$HOME/../../x",
    "corner": "a..b--c+d",
    "netlist": "a'b\"$(touch WITNESS);<script>%n `touch WITNESS`\n\x1b[31m.spice",
    "models": "m'); DROP TABLE trials; -- <b>|*.lib",
    "sheet": "s$(touch WITNESS)\n.toml",
}


@pytest.mark.slow
@pytest.mark.ngspice
def test_hostile_names_go_through_a_whole_run_as_names(
    work: Path, tarn: Path, run_cli: Callable[..., Any]
) -> None:
    sheet = write_files(work, tarn, **HOSTILE)
    assert sheet is not None
    out = work / "out $(touch WITNESS)\n<b>"
    ran = run_cli("run", sheet, "--out", out, "--workers", "1", cwd=work)
    assert ran.code == 0, ran.stderr
    assert "\x1b" not in ran.stdout + ran.stderr

    rows = from_csv((out / "tables.csv").read_text(), "tables.csv")
    assert {row.corner for row in rows} == {HOSTILE["corner"]}
    assert {row.pin for row in rows if row.quantity == "setup"} == {HOSTILE["pin"]}
    assert all(row.value_ps is not None for row in rows)
    assert read_tables(out).cell == HOSTILE["subckt"]

    markdown = (out / "tables.md").read_text()
    assert "<script>" not in markdown
    assert "<b>" not in markdown
    assert "&lt;script&gt;" in markdown

    with sqlite3.connect(f"file:{(out / 'charflow.sqlite').as_posix()}?mode=ro", uri=True) as db:
        pins = {
            move["pin"]
            for (trial,) in db.execute("SELECT trial FROM trials")
            for move in json.loads(trial)["moves"]
        }
    db.close()
    assert pins == {"CK", HOSTILE["pin"]}

    before = {path.name for path in out.iterdir()}
    assert called("compare", out, out / "tables.csv", "--limit", "0%").exit_code == 0
    assert called("plan", sheet, "--against", out, "--decks", "decks").exit_code == 0
    checked_decks(work / "decks")
    assert called("tables", out, "--format", "markdown").output == markdown + "\n"
    called("tables", out, "--format", "liberty")
    key = next(row.key for row in rows if row.key)
    called("replay", out, key)
    new = {path.name for path in out.iterdir()} - before
    assert all(re.fullmatch(r"[\w.+-]+", name) for name in new), new


def test_errors_show_what_does_not_print_as_escapes() -> None:
    error = CharflowError("found \x1b[31m\u202e", where=("a\nb\x00",), todo="Do \r this.\nAnd that.")
    assert str(error) == "a\\nb\\x00: found \\x1b[31m\\u202e\n  Do \\r this.\nAnd that."


def test_what_prints_is_left_as_it_is() -> None:
    assert visible("a \u00e9 \u4e2d $(x) <b>") == "a \u00e9 \u4e2d $(x) <b>"
    assert visible(os.fsdecode(b"\xff")) == "\\udcff"
