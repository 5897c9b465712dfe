"""Runs whose workers answer from formulas: the machinery is real, the register is not."""

from __future__ import annotations

import os
import subprocess
import sys
from collections.abc import Callable, Iterator
from pathlib import Path
from typing import Any

import pytest

STANDINS = Path(__file__).parent / "standins"
ROOT = Path(__file__).parent.parent.parent


RunFormula = Callable[..., Any]


def _run(
    sheet: Path,
    out: Path,
    *,
    workers: int = 1,
    corners: tuple[str, ...] | None = None,
    tell: Callable[[Any], None] = lambda progress: None,
    say: Callable[[str], None] = lambda text: None,
    version: int = 39,
    wish: Any = None,
    **faults: object,
) -> Any:
    from charflow.campaign.run import Wish, run_campaign
    from charflow.sheet import read_sheet

    with pytest.MonkeyPatch.context() as patch:
        patch.syspath_prepend(STANDINS)
        import formula_worker

        patch.setattr("charflow.campaign.pool.work", formula_worker.work)
        patch.setattr("charflow.simulate.library.library_version", lambda: version)
        for name, value in {**faults, "version": version}.items():
            patch.setenv(f"FORMULA_{name.upper()}", str(value))
        return run_campaign(read_sheet(sheet), out, workers, corners, tell, say, wish or Wish())


@pytest.fixture(scope="session")
def formula_run_in() -> RunFormula:
    """Run a campaign in this process into a folder; its workers answer from formulas."""
    return _run


@pytest.fixture
def formula_run(tmp_path: Path) -> RunFormula:
    """Run a campaign into a folder below the test's own. Faults go in by keyword."""

    def run(sheet: Path, out: str = "run", **details: Any) -> Any:
        return _run(sheet, tmp_path / out, **details)

    return run


@pytest.fixture(scope="module")
def formula_cli() -> Iterator[Callable[..., subprocess.Popen[str]]]:
    """Start the charflow command with formulas for ngspice, in a process group of its own."""
    begun: list[subprocess.Popen[str]] = []

    def start(*args: object, **faults: object) -> subprocess.Popen[str]:
        env = {**os.environ, "PYTHONPATH": str(ROOT), "NO_COLOR": "1"}
        env |= {f"FORMULA_{name.upper()}": str(value) for name, value in faults.items()}
        begun.append(
            subprocess.Popen(
                [sys.executable, str(STANDINS / "formula_run.py"), *map(str, args)],
                stdout=subprocess.PIPE,
                stderr=subprocess.PIPE,
                text=True,
                env=env,
                stdin=subprocess.DEVNULL,
                start_new_session=True,
            )
        )
        return begun[-1]

    yield start
    for process in begun:
        if process.poll() is None:
            os.killpg(process.pid, 9)
        process.communicate()
