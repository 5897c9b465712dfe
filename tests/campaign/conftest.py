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


@pytest.fixture
def formula_run(monkeypatch: pytest.MonkeyPatch, tmp_path: Path) -> Callable[..., Any]:
    """Run a campaign in this process; its workers answer from formulas. Faults go in by keyword."""
    from charflow.campaign.run import run_campaign
    from charflow.sheet import read_sheet

    monkeypatch.syspath_prepend(STANDINS)
    import formula_worker

    monkeypatch.setattr("charflow.campaign.pool.work", formula_worker.work)
    monkeypatch.setattr("charflow.simulate.library.library_version", lambda: 39)

    def run(
        sheet: Path,
        out: str = "run",
        *,
        workers: int = 2,
        corners: tuple[str, ...] | None = None,
        tell: Callable[[Any], None] = lambda progress: None,
        say: Callable[[str], None] = lambda text: None,
        **faults: object,
    ) -> Any:
        with pytest.MonkeyPatch.context() as patch:
            for name, value in faults.items():
                patch.setenv(f"FORMULA_{name.upper()}", str(value))
            return run_campaign(read_sheet(sheet), tmp_path / out, workers, corners, tell, say)

    return run


@pytest.fixture
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
