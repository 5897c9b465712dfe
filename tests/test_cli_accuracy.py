"""The certificate, refining, replaying and timing as commands."""

from __future__ import annotations

import csv
import json
from collections.abc import Callable
from pathlib import Path
from typing import Any

import pytest

from charflow.campaign.timing import PARTS

RunCli = Callable[..., Any]
pytestmark = pytest.mark.ngspice


@pytest.fixture
def sheet(make_sheet: Callable[..., Path]) -> Path:
    return make_sheet(clock_slew='["20 ps", "100 ps"]')


@pytest.mark.slow
def test_a_run_writes_its_certificate_and_says_it_and_a_second_run_changes_no_byte(
    run_cli: RunCli, sheet: Path, tmp_path: Path
) -> None:
    first = run_cli("run", sheet, "--out", "run", "--check", "2", "--timing", "--workers", "2")
    assert first.code == 0, first.stderr
    assert "error of the tables between their points" in first.stdout
    run = tmp_path / "run"
    lines = list(csv.DictReader((run / "certificate.csv").read_text().splitlines()))
    assert {line["quantity"] for line in lines} >= {"clk_to_q", "transition", "setup", "hold"}
    assert len({line["clock_slew_ps"] for line in lines}) == 2
    facts = json.loads((run / "tables.json").read_text())["facts"]
    assert {found["points"] for found in facts["certificate"] if found["quantity"] == "setup"} == {2}
    assert "only along clock slew" in first.stdout
    assert "## Accuracy between the points" in (run / "tables.md").read_text()
    timing = json.loads((run / "timing.json").read_text())
    assert 0 < timing["all workers"]["transients"] < 2 * timing["wall"]
    assert all(worker.keys() == set(PARTS) for worker in timing["workers"].values())
    assert "time in s" in first.stderr
    kept = {
        name: (run / name).read_bytes()
        for name in ("certificate.csv", "tables.csv", "tables.json", "tables.md")
    }
    again = run_cli("run", sheet, "--out", "run", "--check", "2")
    assert "; 0 transients in" in again.stdout
    assert {name: (run / name).read_bytes() for name in kept} == kept
    assert "error of the tables" in run_cli("tables", "run").stdout

    key = lines[0]["key"]
    replayed = run_cli("replay", "run", key[:12])
    assert replayed.code == 0, replayed.stderr
    assert (run / "replay" / f"{key}.cir").exists()
    wrong = run_cli("replay", "run", "nothing")
    assert (wrong.code, "no table entry has the key" in wrong.stderr) == (2, True)

    none = run_cli("run", sheet, "--out", "run", "--check", "0")
    assert "error of the tables" not in none.stdout
    assert not (run / "certificate.csv").exists()


def test_refining_needs_points_to_judge_by(run_cli: RunCli, sheet: Path, tmp_path: Path) -> None:
    done = run_cli("run", sheet, "--out", "run", "--check", "0", "--refine", "1")
    assert done.code == 2
    assert "--refine needs points to judge by" in done.stderr
    assert not (tmp_path / "run").exists()
