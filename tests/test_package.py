"""What is shipped: the built wheel carries all that a user without the source tree needs."""

from __future__ import annotations

import os
import subprocess
import sys
import tomllib
import zipfile
from pathlib import Path

import pytest

from charflow import __version__

ROOT = Path(__file__).parent.parent


@pytest.fixture(scope="module")
def wheel(tmp_path_factory: pytest.TempPathFactory) -> Path:
    folder = tmp_path_factory.mktemp("dist")
    done = subprocess.run(
        [sys.executable, "-m", "hatchling", "build", "-t", "wheel", "-d", str(folder)],
        cwd=ROOT,
        capture_output=True,
        text=True,
        check=False,
        timeout=120,
    )
    assert done.returncode == 0, done.stderr
    (built,) = folder.glob("*.whl")
    return built


@pytest.fixture(scope="module")
def names(wheel: Path) -> set[str]:
    with zipfile.ZipFile(wheel) as archive:
        return set(archive.namelist())


@pytest.fixture(scope="module")
def unpacked(wheel: Path) -> Path:
    folder = wheel.parent / "site"
    with zipfile.ZipFile(wheel) as archive:
        archive.extractall(folder)
    return folder


def test_the_wheel_has_the_version_of_the_package(wheel: Path) -> None:
    assert wheel.name == f"charflow-{__version__}-py3-none-any.whl"
    assert tomllib.loads((ROOT / "pyproject.toml").read_text())["project"]["version"] == __version__


def test_the_wheel_carries_every_module_the_types_and_the_licence(names: set[str]) -> None:
    modules = {str(path.relative_to(ROOT)) for path in (ROOT / "charflow").rglob("*.py")}
    assert modules - names == set()
    assert "charflow/py.typed" in names
    assert f"charflow-{__version__}.dist-info/licenses/LICENSE" in names


def test_the_wheel_carries_every_cell_model_and_sheet_of_the_demo(names: set[str]) -> None:
    endings = {".spice", ".lib", ".inc", ".toml"}
    decks = {path.name for path in (ROOT / "decks").iterdir() if path.suffix in endings}
    assert {"tarn_dffp_1.spice", "tarn_dffp_1.toml", "tarn130.lib"} <= decks
    assert {f"charflow/decks/{name}" for name in decks} - names == set()


def test_the_wheel_carries_nothing_that_is_not_for_its_user(names: set[str]) -> None:
    folders = {name.partition("/")[0] for name in names}
    assert folders == {"charflow", f"charflow-{__version__}.dist-info"}
    assert not [name for name in names if "__pycache__" in name or name.endswith((".pyc", ".sqlite"))]


def test_the_wheel_says_what_it_needs_and_which_command_it_brings(unpacked: Path) -> None:
    info = unpacked / f"charflow-{__version__}.dist-info"
    metadata = (info / "METADATA").read_text()
    assert "License-Expression: GPL-3.0-or-later" in metadata
    assert "Requires-Python: >=3.11" in metadata
    assert "Requires-Dist: pyspice==1.5" in metadata.lower().replace("requires-dist", "Requires-Dist")
    assert "charflow = charflow.cli:main" in (info / "entry_points.txt").read_text()


def test_the_demo_of_an_installed_wheel_is_its_own(unpacked: Path, tmp_path: Path) -> None:
    code = (
        "import charflow; from charflow.sheet import read_sheet; from charflow.sheet.demo import demo_sheet\n"
        "from charflow.plan.outline import outline\n"
        "print(charflow.__file__, demo_sheet(), outline(read_sheet(demo_sheet()))['points'], sep='\\n')"
    )
    done = subprocess.run(
        [sys.executable, "-P", "-c", code],
        cwd=tmp_path,
        capture_output=True,
        text=True,
        check=False,
        env={**os.environ, "PYTHONPATH": str(unpacked)},
    )
    assert done.returncode == 0, done.stderr
    package, sheet, points = done.stdout.splitlines()
    assert package.startswith(str(unpacked))
    assert sheet == str(unpacked / "charflow" / "decks" / "tarn_dffp_1.toml")
    assert int(points) > 100
