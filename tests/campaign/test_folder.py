"""A run folder is a new one, an empty one or one of a run; and one run at a time works in it."""

from __future__ import annotations

import os
import subprocess
import sys
from pathlib import Path

import pytest

from charflow.campaign.folder import LOCK, held, open_folder
from charflow.campaign.store import FILE
from charflow.errors import FolderError


def test_a_folder_is_made_with_those_above_it(tmp_path: Path) -> None:
    assert open_folder(tmp_path / "a" / "b").is_dir()


def test_a_folder_that_holds_something_else_is_refused_and_left_as_it_is(tmp_path: Path) -> None:
    (tmp_path / "thesis.tex").write_text("mine")
    with pytest.raises(FolderError, match=r"not a run \('thesis.tex'\)\n.*nothing was changed"):
        open_folder(tmp_path)
    assert [path.name for path in tmp_path.iterdir()] == ["thesis.tex"]


@pytest.mark.parametrize("name", [FILE, f"{FILE}.damaged-1", "sheet.toml", LOCK])
def test_a_folder_that_a_run_began_is_taken(tmp_path: Path, name: str) -> None:
    (tmp_path / name).touch()
    assert open_folder(tmp_path) == tmp_path


def test_a_file_is_no_folder(tmp_path: Path) -> None:
    (tmp_path / "run").touch()
    with pytest.raises(FolderError, match="this is a file, not a folder"):
        open_folder(tmp_path / "run")


def test_a_folder_below_a_file_cannot_be_written(tmp_path: Path) -> None:
    (tmp_path / "run").touch()
    with pytest.raises(FolderError, match="cannot be written: Not a directory"):
        open_folder(tmp_path / "run" / "deeper")


def test_a_second_holder_is_refused_and_told_the_process(tmp_path: Path) -> None:
    open_folder(tmp_path)
    with (
        held(tmp_path),
        pytest.raises(FolderError, match=rf"another run \(process {os.getpid()}\) is working"),
        held(tmp_path),
    ):
        pass


def test_the_folder_is_free_again_when_its_holder_is_gone_however_it_went(tmp_path: Path) -> None:
    open_folder(tmp_path)
    code = (
        "import os, signal, sys; from pathlib import Path; from charflow.campaign.folder import held\n"
        "with held(Path(sys.argv[1])): print('held', flush=True); os.kill(os.getpid(), signal.SIGKILL)"
    )
    done = subprocess.run(
        [sys.executable, "-c", code, str(tmp_path)], capture_output=True, text=True, check=False
    )
    assert (done.stdout.strip(), done.returncode) == ("held", -9), done.stderr
    with held(tmp_path):
        assert (tmp_path / LOCK).read_text() == f"{os.getpid()}\n"
