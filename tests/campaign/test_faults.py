"""The whole command, killed, starved and interrupted from outside: nothing measured is lost or changed."""

from __future__ import annotations

import os
import random
import re
import resource
import shutil
import signal
import subprocess
import sys
import tempfile
import time
from collections.abc import Callable, Iterator
from contextlib import suppress
from pathlib import Path

import pytest

from charflow.campaign.journal import Follower
from charflow.campaign.store import FILE, Store

pytestmark = pytest.mark.slow

AXES = {
    "clock_slew": '["10 ps", "50 ps", "200 ps"]',
    "data_slew": '["10 ps", "50 ps"]',
    "load": '["1 fF", "10 fF", "25 fF"]',
}
TABLES = ("tables.csv", "tables.json", "tables.md")
Start = Callable[..., subprocess.Popen[str]]


def finished(process: subprocess.Popen[str], limit: float = 120) -> tuple[int, str, str]:
    out, err = process.communicate(timeout=limit)
    assert "Traceback" not in out + err, err
    return process.returncode, out, err


def tables_of(folder: Path) -> dict[str, bytes]:
    return {name: (folder / name).read_bytes() for name in TABLES}


def kept_trials(folder: Path) -> set[str]:
    """Return the keys of all finished trials that a stopped run left, in its store or in its journals."""
    keys: set[str] = set()
    if (folder / FILE).is_file() and (folder / FILE).stat().st_size:
        with tempfile.TemporaryDirectory() as name:
            copy = shutil.copytree(folder, Path(name) / "copy")
            store = Store(copy)
            keys |= {key for (key,) in store._db.execute("SELECT key FROM trials")}
            store.close()
    if (folder / ".journals").is_dir():
        keys |= {event["key"] for _, event in Follower(folder / ".journals").new() if "key" in event}
    return keys


def trials_reported(said: str) -> int:
    """Return how many transients the last line of progress counts."""
    return int(re.findall(r"(\d+) transients", said)[-1])


def gone(find: Callable[[str], list[int]], mark: str, patience: float = 5.0) -> bool:
    until = time.monotonic() + patience
    while time.monotonic() < until:
        if not find(mark):
            return True
        time.sleep(0.05)
    return False


@pytest.fixture
def sheet(make_sheet: Callable[..., Path]) -> Path:
    return make_sheet(**AXES)


@pytest.fixture
def few_points(make_sheet: Callable[..., Path]) -> Path:
    return make_sheet(clock_slew='["10 ps", "100 ps"]', load='["1 fF", "10 fF", "25 fF"]')


@pytest.fixture(scope="module")
def undisturbed(
    formula_cli: Start, make_sheet_at: Callable[..., Path], tmp_path_factory: pytest.TempPathFactory
) -> Path:
    """The folder of a run that nothing disturbed; not to be changed."""
    folder = tmp_path_factory.mktemp("undisturbed")
    sheet = make_sheet_at(folder / "tiny.toml", **AXES)
    code, _, err = finished(formula_cli("run", sheet, "--out", folder / "run"))
    assert code == 0, err
    return folder / "run"


ONE = ("--workers", "1")  # of two, both may at once run a trial that their rows share


# ---------------------------------------------------------------- killed


def survive(
    start: Callable[[], subprocess.Popen[str]], folder: Path, moments: list[float]
) -> tuple[int, int]:
    """Kill a run at each moment [s], then let it end; return how many trials were kept and then added."""
    for moment in moments:
        process = start()
        try:
            process.wait(moment)
        except subprocess.TimeoutExpired:
            os.kill(process.pid, signal.SIGKILL)
        process.communicate(timeout=30)
    kept = kept_trials(folder)
    code, _, err = finished(start())
    assert code == 0, err
    return len(kept), trials_reported(err)


def test_a_run_killed_at_random_moments_ends_in_the_same_bytes_and_repeats_no_trial(
    formula_cli: Start, sheet: Path, tmp_path: Path, undisturbed: Path
) -> None:
    chance = random.Random(20)
    moments = [chance.uniform(0.5, 3.0) for _ in range(3)]
    folder = tmp_path / "run"
    kept, added = survive(
        lambda: formula_cli("run", sheet, "--out", folder, *ONE, pace=0.01), folder, moments
    )
    assert tables_of(folder) == tables_of(undisturbed)
    assert kept > 0
    assert kept + added == len(kept_trials(undisturbed))


@pytest.mark.slow
@pytest.mark.ngspice
def test_a_run_in_ngspice_killed_at_20_random_moments_ends_in_the_same_bytes_and_repeats_no_trial(
    start_cli: Start, few_points: Path, tmp_path: Path
) -> None:
    sheet = few_points
    began = time.monotonic()
    code, _, err = finished(start_cli("run", sheet, "--out", tmp_path / "undisturbed"))
    assert code == 0, err
    length = time.monotonic() - began
    chance = random.Random(20)
    for attempt in range(4):
        folder = tmp_path / f"run{attempt}"
        moments = [chance.uniform(0.1, 0.7 * length) for _ in range(5)]
        kept, added = survive(
            lambda folder=folder: start_cli("run", sheet, "--out", folder, *ONE), folder, moments
        )
        assert tables_of(folder) == tables_of(tmp_path / "undisturbed")
        assert kept + added == len(kept_trials(tmp_path / "undisturbed"))


def test_no_process_outlives_a_killed_run(
    formula_cli: Start, sheet: Path, tmp_path: Path, processes_with: Callable[[str], list[int]]
) -> None:
    mark = f"FORMULA_MARK=orphan-{time.monotonic_ns()}"
    process = formula_cli("run", sheet, "--out", tmp_path / "run", "--workers", 2, mark=mark[13:], pace=0.05)
    journals = tmp_path / "run" / ".journals"
    until = time.monotonic() + 30
    while len(list(journals.glob("*.journal"))) < 1 and time.monotonic() < until:
        time.sleep(0.05)
    assert len(processes_with(mark)) >= 2
    os.kill(process.pid, signal.SIGKILL)
    process.wait(10)
    assert gone(processes_with, mark)


@pytest.mark.slow
@pytest.mark.ngspice
def test_a_worker_in_ngspice_killed_again_and_again_changes_no_byte(
    start_cli: Start, few_points: Path, tmp_path: Path
) -> None:
    sheet = few_points
    code, _, err = finished(start_cli("run", sheet, "--out", tmp_path / "undisturbed"))
    assert code == 0, err
    process = start_cli("run", sheet, "--out", tmp_path / "run")
    killed: set[int] = set()
    chance = random.Random(7)
    follower = Follower(tmp_path / "run" / ".journals")
    while process.poll() is None and len(killed) < 4:
        working = {number for number, event in follower.new() if "key" in event} - killed
        if working and follower.folder.is_dir():
            time.sleep(chance.uniform(0.0, 0.5))
            killed.add(min(working))
            with suppress(ProcessLookupError):
                os.kill(min(working), signal.SIGKILL)
        time.sleep(0.02)
    code, _, err = finished(process)
    assert code == 0, err
    assert len(killed) >= 2
    assert tables_of(tmp_path / "run") == tables_of(tmp_path / "undisturbed")


# ---------------------------------------------------------------- interrupted


@pytest.mark.parametrize("number", [signal.SIGINT, pytest.param(signal.SIGTERM, marks=pytest.mark.slow)])
def test_ctrl_c_to_the_whole_group_ends_cleanly_with_what_is_done_written(
    formula_cli: Start,
    sheet: Path,
    tmp_path: Path,
    undisturbed: Path,
    processes_with: Callable[[str], list[int]],
    number: signal.Signals,
) -> None:
    mark = f"FORMULA_MARK=interrupt-{time.monotonic_ns()}"
    folder = tmp_path / "run"
    process = formula_cli("run", sheet, "--out", folder, mark=mark[13:], pace=0.02)
    until = time.monotonic() + 30
    while time.monotonic() < until and not _rows_in(folder):
        time.sleep(0.05)
    os.killpg(process.pid, number)
    code, _, err = finished(process, 20)
    assert code == 1, err
    assert "the same command goes on from here" in err
    assert gone(processes_with, mark)
    part = (folder / "tables.csv").read_text().splitlines()
    whole = (undisturbed / "tables.csv").read_text().splitlines()
    assert 1 < len(part) < len(whole)
    assert set(part) <= set(whole)
    code, _, err = finished(formula_cli("run", sheet, "--out", folder))
    assert code == 0, err
    assert tables_of(folder) == tables_of(undisturbed)


def _rows_in(folder: Path) -> int:
    if not (folder / FILE).is_file():
        return 0
    code = (
        "import sqlite3, sys; db = sqlite3.connect(f'file:{sys.argv[1]}?mode=ro', uri=True, timeout=5)\n"
        "print(db.execute('SELECT count(*) FROM rows').fetchone()[0])"
    )
    done = subprocess.run(
        [sys.executable, "-c", code, str(folder / FILE)], capture_output=True, text=True, check=False
    )
    return int(done.stdout) if done.returncode == 0 else 0


@pytest.mark.ngspice
def test_ctrl_c_in_the_first_moments_leaves_no_traceback_and_no_process(
    start_cli: Start, sheet: Path, tmp_path: Path, processes_with: Callable[[str], list[int]]
) -> None:
    for number, moment in enumerate((0.2, 0.6, 1.2)):
        mark = f"FORMULA_MARK=early-{time.monotonic_ns()}"
        process = start_cli("run", sheet, "--out", tmp_path / f"run{number}", env={"FORMULA_MARK": mark[13:]})
        time.sleep(moment)
        os.killpg(process.pid, signal.SIGINT)
        out, err = process.communicate(timeout=20)
        # so early that Python itself is still starting, its own KeyboardInterrupt is all there can be
        assert process.returncode in (1, 130, -signal.SIGINT), (moment, err)
        assert "multiprocessing" not in out + err, err
        assert gone(processes_with, mark)


@pytest.mark.slow
def test_points_lost_to_a_worker_that_always_dies_are_told_and_give_status_1(
    formula_cli: Start, sheet: Path, tmp_path: Path
) -> None:
    code, out, err = finished(formula_cli("run", sheet, "--out", tmp_path / "run", fault="die", load=10))
    assert code == 1, err
    assert re.search(r"^\d+ values, [1-9]\d* without an answer", out, re.MULTILINE)
    assert re.search(r"^no value: clk_to_q Q at typical: .*died or hung twice", out, re.MULTILINE)
    assert "the same command goes on" not in err


# ---------------------------------------------------------------- two at once, full, read-only


def test_a_second_run_in_the_folder_is_refused_and_names_the_first(
    formula_cli: Start, sheet: Path, tmp_path: Path, undisturbed: Path
) -> None:
    folder = tmp_path / "run"
    first = formula_cli("run", sheet, "--out", folder, pace=0.01)
    until = time.monotonic() + 30
    while time.monotonic() < until and not (folder / FILE).exists():
        time.sleep(0.05)
    code, out, err = finished(formula_cli("run", sheet, "--out", folder))
    assert (code, out) == (2, "")
    assert f"another run (process {first.pid}) is working in this folder" in err
    assert finished(first)[0] == 0
    assert tables_of(folder) == tables_of(undisturbed)


def _limited(size: int) -> Callable[[], None]:
    def limit() -> None:
        resource.setrlimit(resource.RLIMIT_FSIZE, (size, resource.getrlimit(resource.RLIMIT_FSIZE)[1]))

    return limit


@pytest.mark.parametrize(
    "size", [0, 6_000, *(pytest.param(n, marks=pytest.mark.slow) for n in (60_000, 150_000))]
)
def test_files_that_may_not_grow_end_a_run_with_a_reason_and_lose_nothing(
    formula_cli: Start,
    sheet: Path,
    tmp_path: Path,
    undisturbed: Path,
    monkeypatch: pytest.MonkeyPatch,
    size: int,
) -> None:
    folder = tmp_path / "run"
    real = subprocess.Popen
    monkeypatch.setattr(subprocess, "Popen", lambda *a, **k: real(*a, **k, preexec_fn=_limited(size)))
    code, _, err = finished(formula_cli("run", sheet, "--out", folder, *ONE))
    monkeypatch.setattr(subprocess, "Popen", real)
    assert code == 2, err
    assert re.search(r"cannot be (written|opened)", err), err
    kept = kept_trials(folder)
    code, _, err = finished(formula_cli("run", sheet, "--out", folder, *ONE))
    assert code == 0, err
    assert tables_of(folder) == tables_of(undisturbed)
    assert len(kept) + trials_reported(err) == len(kept_trials(undisturbed))


@pytest.fixture
def small_disk(tmp_path: Path) -> Iterator[Path]:
    """A file system of 160 kB, where this user may mount one."""
    folder = tmp_path / "disk"
    folder.mkdir()
    words = ["mount", "-t", "tmpfs", "-o", "size=160k", "tmpfs", str(folder)]
    if os.geteuid() or subprocess.run(words, capture_output=True, check=False).returncode:
        pytest.skip("this user cannot mount a small file system")
    yield folder
    subprocess.run(["umount", "-l", str(folder)], check=True)


def test_a_full_disk_ends_a_run_with_a_reason_and_more_space_lets_it_go_on(
    formula_cli: Start, sheet: Path, small_disk: Path, undisturbed: Path, tmp_path: Path
) -> None:
    folder = small_disk / "run"
    code, _, err = finished(formula_cli("run", sheet, "--out", folder, *ONE))
    assert code == 2, err
    assert re.search("cannot be written: (No space left on device|database or disk is full|disk I/O)", err), (
        err
    )
    subprocess.run(["mount", "-o", "remount,size=8m", str(small_disk)], check=True)
    kept = kept_trials(folder)
    assert kept
    code, _, err = finished(formula_cli("run", sheet, "--out", folder, *ONE))
    assert code == 0, err
    assert tables_of(folder) == tables_of(undisturbed)
    assert len(kept) + trials_reported(err) == len(kept_trials(undisturbed))


@pytest.fixture
def read_only_disk(tmp_path: Path) -> Iterator[Path]:
    folder = tmp_path / "disk"
    folder.mkdir()
    words = ["mount", "-t", "tmpfs", "-o", "size=8m", "tmpfs", str(folder)]
    if os.geteuid() or subprocess.run(words, capture_output=True, check=False).returncode:
        pytest.skip("this user cannot mount a file system")
    yield folder
    subprocess.run(["umount", "-l", str(folder)], check=True)


def test_a_folder_that_became_read_only_is_said_to_be(
    formula_cli: Start, sheet: Path, read_only_disk: Path, undisturbed: Path
) -> None:
    folder = read_only_disk / "run"
    assert finished(formula_cli("run", sheet, "--out", folder))[0] == 0
    subprocess.run(["mount", "-o", "remount,ro", str(read_only_disk)], check=True)
    code, out, err = finished(formula_cli("run", sheet, "--out", folder))
    assert (code, out) == (2, "")
    assert "cannot be written: Read-only file system" in err
    assert tables_of(folder) == tables_of(undisturbed)


# ---------------------------------------------------------------- a damaged store


@pytest.mark.parametrize("damage", [pytest.param("cut", marks=pytest.mark.slow), "noise"])
def test_a_damaged_store_is_told_kept_aside_and_measured_anew(
    formula_cli: Start, sheet: Path, tmp_path: Path, undisturbed: Path, damage: str
) -> None:
    folder = tmp_path / "run"
    shutil.copytree(undisturbed, folder)
    store = folder / FILE
    whole = store.read_bytes()
    damaged = whole[: len(whole) // 3] if damage == "cut" else random.Random(3).randbytes(len(whole))
    store.write_bytes(damaged)
    code, _, err = finished(formula_cli("run", sheet, "--out", folder))
    assert code == 0, err
    assert "is damaged" in err
    assert f"kept as {FILE}.damaged-1" in err
    assert (folder / f"{FILE}.damaged-1").read_bytes()[: len(damaged)] == damaged
    assert trials_reported(err) > 0
    assert tables_of(folder) == tables_of(undisturbed)


@pytest.mark.ngspice
def test_a_second_run_takes_under_two_seconds_and_no_transient(
    start_cli: Start, tiny_sheet: Path, tmp_path: Path
) -> None:
    assert finished(start_cli("run", tiny_sheet, "--out", tmp_path / "run"))[0] == 0
    before = tables_of(tmp_path / "run")
    seconds: list[float] = []  # of processor time: what else the machine does is not the question
    for _ in range(3):
        began = resource.getrusage(resource.RUSAGE_CHILDREN)
        code, out, _ = finished(start_cli("run", tiny_sheet, "--out", tmp_path / "run"))
        ended = resource.getrusage(resource.RUSAGE_CHILDREN)
        seconds.append(ended.ru_utime + ended.ru_stime - began.ru_utime - began.ru_stime)
        assert code == 0
        assert " 0 transients" in out
    assert min(seconds) < 2.0
    assert tables_of(tmp_path / "run") == before
