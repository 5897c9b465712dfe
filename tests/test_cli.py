"""The command line as a user meets it: helpful, quick to answer, and never a traceback."""

from __future__ import annotations

import csv
import io
import json
import os
import re
import shutil
import subprocess
import sys
from collections.abc import Callable
from pathlib import Path
from types import SimpleNamespace
from typing import Any

import click
import pytest
from click.testing import CliRunner

from charflow import __version__
from charflow.cli import main
from charflow.tables.flat import from_csv

MakeSheet = Callable[..., Path]
RunCli = Callable[..., Any]
COMMANDS = sorted(main.commands)
HEAVY = ("numpy", "scipy", "matplotlib", "xarray", "pandas", "PySpice", "pydantic", "quantiphy", "sqlite3")


@pytest.fixture(scope="module")
def finished_run(tmp_path_factory: pytest.TempPathFactory, make_sheet_at: MakeSheet) -> Path:
    """A folder with ``tiny.toml`` and its finished run in ``run``; not to be changed."""
    folder = tmp_path_factory.mktemp("finished")
    make_sheet_at(folder / "tiny.toml")
    words = [sys.executable, "-m", "charflow.cli", "run", "tiny.toml", "--out", "run"]
    root = Path(__file__).parent.parent
    done = subprocess.run(
        words,
        cwd=folder,
        capture_output=True,
        text=True,
        check=False,
        timeout=120,
        env={**os.environ, "PYTHONPATH": str(root), "NO_COLOR": "1"},
    )
    assert done.returncode == 0, done.stderr
    (folder / "stdout").write_text(done.stdout)
    (folder / "stderr").write_text(done.stderr)
    return folder


@pytest.fixture
def invoke(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> RunCli:
    """Run one charflow command in this process, in a folder of its own: for mistakes found at once."""
    monkeypatch.chdir(tmp_path)

    def run(*words: str | Path) -> Any:
        result = CliRunner().invoke(main, [str(word) for word in words], prog_name="charflow")
        assert result.exception is None or isinstance(result.exception, SystemExit), result.exception
        return SimpleNamespace(code=result.exit_code, stdout=result.stdout, stderr=result.stderr)

    return run


# ---------------------------------------------------------------- help


@pytest.mark.parametrize("name", COMMANDS)
def test_the_help_of_every_command_says_what_it_does_and_shows_an_example(name: str) -> None:
    command = main.commands[name]
    text = command.get_help(click.Context(command, info_name=f"charflow {name}"))
    assert command.help
    assert re.search(rf"Example: charflow {name}\b", text)


def test_the_example_in_each_help_is_one_the_command_understands() -> None:
    for name in COMMANDS:
        command = main.commands[name]
        example = re.search(r"Example: charflow (.*?)(?: > .*)?$", command.help or "", re.MULTILINE)
        assert example
        words = [word.strip('"') for word in re.findall(r'"[^"]*"|\S+', example[1])]
        assert words[0] == name
        command.make_parser(click.Context(command)).parse_args(words[1:])


def test_the_main_help_lists_the_commands_and_the_exit_statuses(invoke: RunCli) -> None:
    ran = invoke("--help")
    assert ran.code == 0
    for name in COMMANDS:
        assert re.search(rf"^  {name} +\w", ran.stdout, re.MULTILINE)
    assert "Exit status: 0 done; 1 done, but points failed; 2 the input is wrong" in ran.stdout


def test_help_answers_at_once_because_no_heavy_library_is_imported() -> None:
    done = subprocess.run(
        [sys.executable, "-X", "importtime", "-m", "charflow.cli", "--help"],
        capture_output=True,
        text=True,
        check=True,
        env={**os.environ, "PYTHONPATH": str(Path(__file__).parent.parent)},
    )
    imported = {line.rpartition("|")[2].strip().partition(".")[0] for line in done.stderr.splitlines()}
    assert "click" in imported
    assert imported.isdisjoint(HEAVY)


def test_the_version_is_told(invoke: RunCli) -> None:
    assert invoke("--version").stdout == f"charflow, version {__version__}\n"


def test_an_unknown_command_or_option_is_the_users_mistake(invoke: RunCli) -> None:
    for words in (
        ("characterise",),
        ("run", "--outt", "x"),
        ("run",),
        ("run", "x.toml", "--out", "r", "--workers", "0"),
    ):
        ran = invoke(*words)
        assert ran.code == 2
        assert "Usage: " in ran.stderr


# ---------------------------------------------------------------- what is wrong with the input


WRONG_SHEETS = {
    "netlist that is not there": (
        ("/tarn_dffp_1.spice", "/nothere.spice"),
        r"nothere\.spice: there is no such file",
    ),
    "model file that is not there": (
        ("tarn130.lib:tt", "nolib.lib:tt"),
        r"corner 'typical', .*nolib\.lib: there is no such file",
    ),
    "section that is not there": (
        (".lib:tt", ".lib:typ"),
        r"tarn130\.lib: there is no section 'typ'; there are: tt, ss, ff, sf, fs",
    ),
    "subckt that is not there": (
        ('subckt = "tarn_dffp_1"', 'subckt = "tarn_dfp_1"'),
        r"no subckt is called 'tarn_dfp_1'; nearest: tarn_dffp_1",
    ),
    "port without a pin": (
        ('QN  = { role = "output", shows = "!state" }\n', ""),
        r"tarn_dffp_1\.spice:\d+: .*no pin is given for port QN\n.*The ports are: D CK Q QN VDD VSS",
    ),
    "pin that is no port": (
        ("D   =", 'E = { role = "data" }\nD   ='),
        r"pins and ports of subckt 'tarn_dffp_1' differ: pin 'E' is no port",
    ),
    "pin named twice": (
        ("D   =", 'd = { role = "data" }\nD   ='),
        r"'d' and 'D' are one name to SPICE|'D' and 'd' are one name to SPICE",
    ),
    "pin named twice in one case": (
        ("D   =", 'D = { role = "data" }\nD   ='),
        r"this is not TOML: .*line 9",
    ),
    "slew without a unit": (
        ('clock_slew = ["50 ps"]', 'clock_slew = ["10"]'),
        r"tiny\.toml:\d+: axes\.clock_slew\.0: '10' has no unit; expected a time in seconds\..*\"10 ps\"",
    ),
    "slew that is a bare number": (
        ('clock_slew = ["50 ps"]', "clock_slew = [10]"),
        r"clock_slew\.0: 10 has no unit; write it as quoted text",
    ),
    "load in volts": (
        ('load = ["5 fF"]', 'load = ["5 V"]'),
        r"axes\.load\.0: '5 V' is in 'V'; expected a capacitance in farads",
    ),
    "slew that is no number": (
        ('clock_slew = ["50 ps"]', 'clock_slew = ["nan s"]'),
        r"'nan s' is not finite",
    ),
    "slew a thousand times too long": (
        ('clock_slew = ["50 ps"]', 'clock_slew = ["50 us"]'),
        r"clock_slew of 5e-05 is beyond 1e-06: check the prefix",
    ),
    "empty axis": (
        ('clock_slew = ["50 ps"]', "clock_slew = []"),
        r"tiny\.toml:\d+: axes\.clock_slew is empty; it needs at least one entry",
    ),
    "unsorted axis": (
        ('data_slew = ["50 ps"]', 'data_slew = ["50 ps", "10 ps"]'),
        r"data_slew must rise from entry to entry; 1e-11 comes after 5e-11\. Sort",
    ),
    "repeated entry": (
        ('load = ["5 fF"]', 'load = ["5 fF", "5 fF"]'),
        r"load must rise from entry to entry; 5e-15 comes after 5e-15\. .*remove repeats",
    ),
    "misspelled table": (("[axes]", "[axis]"), r"unknown table 'axis'\n.*Did you mean 'axes'\?"),
    "misspelled key": (("resolution", "resolutoin"), r"measure\.resolutoin'\n.*Did you mean 'resolution'\?"),
    "misspelled role": (
        ('role = "clock"', 'role = "clok"'),
        r"unknown role 'clok'\n.*Did you mean 'clock'\?",
    ),
    "clock without an edge": ((', active = "rise"', ""), r"pins\.CK.*needs active = 'rise' or 'fall'"),
    "supply below zero": (('"1.2 V"', '"-1.2 V"'), r"corners\.typical\.supply: .*greater than 0"),
    "kelvin": (('"25 C"', '"300 K"'), r"'300 K' is in 'K'; expected a temperature in degrees Celsius"),
    "unset variable": (
        ("models = [", 'models = ["${CHARFLOW_NO_SUCH}/x.lib:tt", '),
        r"no variable 'CHARFLOW_NO_SUCH'.*\n.*export CHARFLOW_NO_SUCH=",
    ),
}


@pytest.mark.parametrize("what", WRONG_SHEETS)
def test_a_wrong_sheet_is_explained_before_anything_is_written(
    invoke: RunCli, make_sheet: MakeSheet, tmp_path: Path, what: str
) -> None:
    edit, message = WRONG_SHEETS[what]
    ran = invoke("run", make_sheet(edit=edit), "--out", tmp_path / "out")
    assert (ran.code, ran.stdout) == (2, "")
    assert re.search(message, ran.stderr), ran.stderr
    assert ran.stderr.startswith("charflow: ")
    assert not (tmp_path / "out").exists()


@pytest.mark.parametrize(
    ("content", "message"),
    [
        (None, r"no\.toml: there is no such sheet"),
        (b"", r"the table cell is missing"),
        (b"\xff\xfe\x00junk", r"not UTF-8"),
        (b"netlist = tarn.spice", r"this is not TOML"),
        (b"a = " + b"[" * 5000, r"this nests too deeply|not TOML"),
    ],
)
@pytest.mark.parametrize("command", ["run", "plan"])
def test_a_file_that_is_no_sheet_is_explained(
    invoke: RunCli, tmp_path: Path, content: bytes | None, message: str, command: str
) -> None:
    if content is not None:
        (tmp_path / "no.toml").write_bytes(content)
    words = ("--out", "out") if command == "run" else ()
    ran = invoke(command, "no.toml", *words)
    assert (ran.code, ran.stdout) == (2, "")
    assert re.search(message, ran.stderr), ran.stderr


@pytest.mark.ngspice
def test_a_clock_that_does_not_clock_is_refused_with_the_vector_and_what_the_output_did(
    run_cli: RunCli, make_sheet: MakeSheet
) -> None:
    ran = run_cli("run", make_sheet(active="fall"), "--out", "out")
    assert (ran.code, ran.stdout) == (2, "")
    assert re.search(
        r"corner 'typical', stored state=[01], D=[01]: CK (rises|falls): "
        r"expected QN?=[01] afterwards, saw \d\.\d\d of supply",
        ran.stderr,
    ), ran.stderr
    assert "Check the pins' roles, 'active' and 'shows'" in ran.stderr


@pytest.mark.ngspice
def test_an_output_that_shows_the_opposite_is_refused(run_cli: RunCli, make_sheet: MakeSheet) -> None:
    edit = ('Q   = { role = "output", shows = "state" }', 'Q   = { role = "output", shows = "!state" }')
    ran = run_cli("run", make_sheet(edit=edit), "--out", "out")
    assert ran.code == 2
    assert re.search(r"stored state=[01].*: (Q should show|expected Q=)", ran.stderr), ran.stderr


def test_an_unknown_corner_is_named_with_those_there_are(invoke: RunCli, tiny_sheet: Path) -> None:
    ran = invoke("run", tiny_sheet, "--out", "out", "--corner", "slow")
    assert ran.code == 2
    assert re.search(r"no corner 'slow'\n.*typical", ran.stderr)


# ---------------------------------------------------------------- where the results go


def test_a_folder_that_holds_something_else_is_refused_and_left_as_it_is(
    invoke: RunCli, tiny_sheet: Path, tmp_path: Path
) -> None:
    (tmp_path / "out").mkdir()
    (tmp_path / "out" / "thesis.tex").write_text("mine")
    for words in (
        ("run", tiny_sheet, "--out", "out"),
        ("plan", tiny_sheet, "--decks", "out"),
        ("demo", "--out", "out"),
    ):
        ran = invoke(*words)
        assert (ran.code, ran.stdout) == (2, "")
        assert re.search(r"'thesis\.tex'\)\n.*nothing was changed", ran.stderr)
    assert [path.name for path in (tmp_path / "out").iterdir()] == ["thesis.tex"]


def test_a_file_where_a_folder_should_be_is_refused(invoke: RunCli, tiny_sheet: Path, tmp_path: Path) -> None:
    (tmp_path / "out").write_text("mine")
    ran = invoke("run", tiny_sheet, "--out", "out")
    assert ran.code == 2
    assert "out: this is a file, not a folder" in ran.stderr
    assert (tmp_path / "out").read_text() == "mine"


def test_a_folder_that_may_not_be_written_is_refused(
    invoke: RunCli, tiny_sheet: Path, tmp_path: Path
) -> None:
    if os.geteuid():
        (tmp_path / "closed").mkdir(mode=0o500)
        place = tmp_path / "closed"
    else:  # root may write where modes forbid it, but not here
        place = Path("/proc")
    for words in (
        ("run", tiny_sheet, "--out", place / "out"),
        ("plan", tiny_sheet, "--decks", place / "out"),
    ):
        ran = invoke(*words)
        assert (ran.code, ran.stdout) == (2, "")
        assert re.search(r"out: the folder cannot be written: \w", ran.stderr), ran.stderr


def test_a_standard_output_that_is_full_is_told_without_a_traceback(tiny_sheet: Path) -> None:
    if not Path("/dev/full").exists():
        pytest.skip("this system has no /dev/full")
    root = Path(__file__).parent.parent
    with Path("/dev/full").open("w") as full:
        done = subprocess.run(
            [sys.executable, "-m", "charflow.cli", "plan", str(tiny_sheet)],
            stdout=full,
            stderr=subprocess.PIPE,
            text=True,
            check=False,
            env={**os.environ, "PYTHONPATH": str(root)},
        )
    assert done.returncode == 1
    assert done.stderr.splitlines() == ["charflow: cannot go on: [Errno 28] No space left on device"]


# ---------------------------------------------------------------- the simulator


@pytest.mark.ngspice
def test_doctor_measures_a_known_circuit_in_library_and_executable(run_cli: RunCli) -> None:
    ran = run_cli("doctor")
    assert ran.code == 0, ran.stderr
    for what in ("library", "executable"):
        found = re.search(rf"^{what}: delay .* (\d+\.\d+) ps, known 36\.7236 ps$", ran.stdout, re.MULTILINE)
        assert found
        assert abs(float(found[1]) - 36.7236) < 0.01
    assert ran.stdout.splitlines()[-1] == "sound"


MISSING: dict[str, tuple[dict[str, str | None], str]] = {
    "library named wrongly": (
        {"NGSPICE_LIBRARY_PATH": "/nowhere/libngspice.so"},
        r"NGSPICE_LIBRARY_PATH names '/nowhere/libngspice\.so', which is not there\n.*Correct it or unset it",
    ),
    "library that is none": (
        {"NGSPICE_LIBRARY_PATH": __file__},
        r"the ngspice library .*does not load as libngspice: .*",
    ),
}


@pytest.mark.parametrize("what", MISSING)
@pytest.mark.parametrize("command", ["doctor", "run"])
def test_without_the_library_every_command_that_needs_it_says_so_with_status_3(
    run_cli: RunCli, tiny_sheet: Path, what: str, command: str
) -> None:
    env, message = MISSING[what]
    words = {"doctor": (), "run": (tiny_sheet, "--out", "out")}[command]
    ran = run_cli(command, *words, env=env)
    assert ran.code == 3
    assert re.search(message, ran.stderr), ran.stderr


@pytest.mark.ngspice
@pytest.mark.parametrize(
    ("env", "message"),
    [
        ({"PATH": "/nowhere"}, r"the ngspice executable was not found\n.*apt-get install ngspice"),
        ({"NGSPICE_EXECUTABLE": "ngspise"}, r"NGSPICE_EXECUTABLE names 'ngspise', which was not found"),
        ({"NGSPICE_EXECUTABLE": "true"}, r"true does not tell its version"),
    ],
)
def test_without_the_executable_doctor_says_so_with_status_3(
    run_cli: RunCli, env: dict[str, str | None], message: str
) -> None:
    ran = run_cli("doctor", env=env)
    assert ran.code == 3
    assert re.search(message, ran.stderr), ran.stderr


def test_planning_needs_no_simulator(run_cli: RunCli, tiny_sheet: Path) -> None:
    env = {"PATH": "/nowhere", "NGSPICE_LIBRARY_PATH": "/nowhere"}
    assert run_cli("plan", tiny_sheet, "--decks", "decks", env=env).code == 0


# ---------------------------------------------------------------- plan


def test_the_plan_tells_arcs_points_transients_and_time(invoke: RunCli, make_sheet: MakeSheet) -> None:
    sheet = make_sheet(clock_slew='["10 ps", "50 ps"]', data_slew='["10 ps", "50 ps", "90 ps"]')
    ran = invoke("plan", sheet)
    assert ran.code == 0
    assert "setup: D rise this long before CK rise; Q rises, QN falls  (6 values a corner)" in ran.stdout
    assert "delay and transition: CK rise until QN falls  (4 values a corner)" in ran.stdout
    assert re.search(
        r"^\d+ values, about \d+ transients, about [\d.]+ s on one core$", ran.stdout, re.MULTILINE
    )


def test_the_plan_as_json_says_the_same(invoke: RunCli, tiny_sheet: Path) -> None:
    facts = json.loads(invoke("plan", tiny_sheet, "--json").stdout)
    assert facts["cell"] == "tarn_dffp_1"
    assert facts["points"] == sum(item["points"] for item in facts["arcs"]) > 11
    assert facts["trials_about"] > facts["points"]
    assert facts["seconds_on_one_core_about"] > 0


@pytest.mark.ngspice
def test_the_plan_counts_the_points_that_the_run_measures(invoke: RunCli, finished_run: Path) -> None:
    facts = json.loads(invoke("plan", finished_run / "tiny.toml", "--json").stdout)
    rows = from_csv((finished_run / "run" / "tables.csv").read_text(), "tables.csv")
    assert facts["points"] == len(rows)


def _measured(deck: Path) -> dict[str, float]:
    """Run a deck with plain ngspice in its own folder and return what its .measure lines print [ps]."""
    done = subprocess.run(
        ["ngspice", "-b", deck.name],
        cwd=deck.parent,
        env={**os.environ, "OMP_NUM_THREADS": "1"},
        capture_output=True,
        text=True,
        check=False,
        timeout=120,
    )
    found = re.findall(r"^clk_to_(\w+) += +([-+.\de]+)", done.stdout, re.MULTILINE)
    return {name: float(value) * 1e12 for name, value in found}


@pytest.mark.ngspice
def test_decks_run_by_themselves_and_agree_with_the_table_within_0_05_ps(
    invoke: RunCli, finished_run: Path, tmp_path: Path
) -> None:
    assert invoke("plan", finished_run / "tiny.toml", "--decks", "decks").code == 0
    rows = from_csv((finished_run / "run" / "tables.csv").read_text(), "tables.csv")
    delays = {(row.output, row.output_edge): row.value_ps for row in rows if row.quantity == "clk_to_q"}
    assert len(delays) == 4
    for edge, other in (("rise", "fall"), ("fall", "rise")):
        (deck,) = (tmp_path / "decks").glob(f"*clk_to_q_*_Q_{edge}_*.cir")
        assert ".control" not in deck.read_text().lower()
        found = _measured(deck)
        assert found["q"] == pytest.approx(delays["Q", edge], abs=0.05)
        assert found["qn"] == pytest.approx(delays["QN", other], abs=0.05)


@pytest.mark.ngspice
def test_decks_at_safe_offsets_show_the_relaxed_delay_and_nearer_ones_more(
    invoke: RunCli, finished_run: Path, tmp_path: Path
) -> None:
    assert invoke("plan", finished_run / "tiny.toml", "--decks", "decks").code == 0
    rows = from_csv((finished_run / "run" / "tables.csv").read_text(), "tables.csv")
    (relaxed,) = (
        r.value_ps for r in rows if (r.quantity, r.output, r.output_edge) == ("clk_to_q", "Q", "rise")
    )
    assert relaxed is not None
    decks = {
        int(found[1]): path
        for path in (tmp_path / "decks").glob("*setup_D_rise*.cir")
        if (found := re.search(r"offset([+-]\d+)ps", path.name))
    }
    assert max(decks) > 300
    assert min(decks) < 0
    assert _measured(decks[max(decks)])["q"] == pytest.approx(relaxed, rel=1e-3)
    just_safe = min(offset for offset in decks if offset > 36)  # the setup time is 35 ps
    assert relaxed < _measured(decks[just_safe])["q"] < 1.1 * relaxed


def test_decks_are_text_that_any_copy_of_the_folder_can_run(
    invoke: RunCli, tiny_sheet: Path, tmp_path: Path, tarn: Path
) -> None:
    assert invoke("plan", tiny_sheet, "--decks", "decks").code == 0
    decks = list((tmp_path / "decks").iterdir())
    assert len(decks) > 8
    for deck in decks:
        text = deck.read_text().lower()
        assert ".include" not in text
        assert ".lib" not in text
        assert str(tarn).lower() not in text


# ---------------------------------------------------------------- run and tables


@pytest.mark.ngspice
def test_a_run_prints_tables_and_a_caution_and_keeps_progress_out_of_them(finished_run: Path) -> None:
    out, err = (finished_run / "stdout").read_text(), (finished_run / "stderr").read_text()
    assert out.startswith("tarn_dffp_1\n  corner typical: tarn130.lib:tt, 1.2 V, 25 C\n")
    assert "typical: setup of D fall before CK rise [ps]" in out
    assert re.search(
        r"^\d+ values, 0 without an answer; \d+ transients in [\d.]+ s\. Written to run/$", out, re.MULTILINE
    )
    assert "Sign-off belongs to the foundry's qualified flow" in out
    assert not re.search(r"\d+ of \d+ points", out)
    assert re.search(r"^(\d+) of \1 points, \d+ transients", err, re.MULTILINE)


@pytest.mark.ngspice
def test_a_run_folder_holds_the_sheet_the_store_and_the_tables(finished_run: Path) -> None:
    names = {path.name for path in (finished_run / "run").iterdir() if not path.name.startswith(".")}
    assert names >= {"sheet.toml", "charflow.sqlite", "tables.csv", "tables.json", "tables.md"}
    assert (finished_run / "run" / "sheet.toml").read_bytes() == (finished_run / "tiny.toml").read_bytes()


@pytest.mark.ngspice
def test_tables_prints_in_each_format_what_the_run_wrote(invoke: RunCli, finished_run: Path) -> None:
    folder = finished_run / "run"
    for form, name in (("csv", "tables.csv"), ("json", "tables.json"), ("markdown", "tables.md")):
        ran = invoke("tables", folder, "--format", form)
        assert ran.code == 0
        assert ran.stdout.rstrip("\n") == (folder / name).read_text().rstrip("\n")
    assert "typical: hold of D rise after CK rise [ps]" in invoke("tables", folder).stdout


@pytest.mark.ngspice
def test_tables_with_a_hole_end_in_status_1(invoke: RunCli, finished_run: Path, tmp_path: Path) -> None:
    folder = shutil.copytree(finished_run / "run", tmp_path / "run")
    raw = json.loads((folder / "tables.json").read_text())
    raw["rows"][0].update(value_ps=None, status="no offset passes")
    (folder / "tables.json").write_text(json.dumps(raw))
    ran = invoke("tables", folder)
    assert ran.code == 1
    assert "no value: clk_to_q Q at typical: no offset passes" in ran.stdout
    assert invoke("tables", folder, "--format", "csv").code == 1


@pytest.mark.parametrize("content", [None, b"", b"[]", b"{}", b'{"format": 1, "rows": [[]]}'])
def test_tables_of_what_is_no_run_are_explained(
    invoke: RunCli, tmp_path: Path, content: bytes | None
) -> None:
    (tmp_path / "run").mkdir()
    if content is not None:
        (tmp_path / "run" / "tables.json").write_bytes(content)
    ran = invoke("tables", "run")
    assert (ran.code, ran.stdout) == (2, "")
    assert re.search("holds no tables|cannot be read|row 1: the column corner is missing", ran.stderr)


# ---------------------------------------------------------------- the demo


@pytest.mark.slow
@pytest.mark.ngspice
def test_the_demo_characterizes_its_cell_end_to_end_in_a_fresh_folder(
    run_cli: RunCli, tmp_path: Path
) -> None:
    ran = run_cli("demo")
    assert ran.code == 0, ran.stderr
    assert re.search(
        r"^\d+ values, 0 without an answer; .* Written to charflow-demo/$", ran.stdout, re.MULTILINE
    )
    folder = tmp_path / "charflow-demo"
    rows = list(csv.DictReader(io.StringIO((folder / "tables.csv").read_text())))
    assert len(rows) > 100
    assert all(row["value_ps"] for row in rows)
    edges = {(row["output"], row["output_edge"]) for row in rows if row["quantity"] == "clk_to_q"}
    assert edges == {("Q", "rise"), ("Q", "fall"), ("QN", "rise"), ("QN", "fall")}
    # common practice: low-to-high and high-to-low differ
    by_edge = {
        edge: [
            float(row["value_ps"])
            for row in rows
            if (row["quantity"], row["output"], row["output_edge"]) == ("clk_to_q", "Q", edge)
        ]
        for edge in ("rise", "fall")
    }
    assert all(abs(a - b) > 1 for a, b in zip(by_edge["rise"], by_edge["fall"], strict=True))
    again = run_cli("demo")
    assert " 0 transients in " in again.stdout
