"""A short, repeatable part of the fuzz bench: spoilt inputs end well or in an error raised on purpose."""

from __future__ import annotations

import importlib
import time
from pathlib import Path
from typing import Any

import pytest

BENCH = Path(__file__).parent / "bench"
COUNTS = {"sheet": 150, "netlist": 90, "csv": 120, "json": 100, "store": 25, "compare": 40}


@pytest.fixture(scope="module")
def bench() -> Any:
    """The fuzz bench as a module."""
    with pytest.MonkeyPatch.context() as patch:
        patch.syspath_prepend(BENCH)
        return importlib.import_module("fuzz")


@pytest.mark.parametrize("target", COUNTS)
def test_spoilt_inputs_are_read_or_refused(bench: Any, target: str, tmp_path: Path) -> None:
    tally = bench.fuzz(target, COUNTS[target], 20_000, tmp_path / "work")
    assert tally.failures == []
    assert tally.inputs == COUNTS[target]
    assert tally.accepted > 0
    assert tally.accepted + sum(tally.refused.values()) == tally.inputs
    assert tally.refused or target == "store"  # a damaged store is set aside, seldom refused


def test_every_target_of_the_bench_is_here(bench: Any) -> None:
    assert list(COUNTS) == list(bench.TARGETS)


def test_the_same_seed_gives_the_same_inputs(bench: Any, tmp_path: Path) -> None:
    first, again, other = (bench.fuzz("csv", 60, seed, tmp_path / "work") for seed in (1, 1, 2))
    assert first.refused == again.refused
    assert (first.accepted, first.refused) != (other.accepted, other.refused)


@pytest.mark.parametrize("error", [ValueError("x"), MemoryError(), RecursionError(), SystemExit(0)])
def test_the_bench_counts_whatever_is_no_charflow_error(
    bench: Any, tmp_path: Path, monkeypatch: pytest.MonkeyPatch, error: BaseException
) -> None:
    def fail(data: bytes, folder: Path) -> None:
        raise error

    target = bench.Target(fail, lambda: [b"seed"], (), 1)
    monkeypatch.setitem(bench.TARGETS, "failing", target)
    tally = bench.fuzz("failing", 1, 1, tmp_path / "work", tmp_path / "kept")
    assert [failure.split(" at ")[0] for failure in tally.failures] == [f"input 0: {type(error).__name__}"]
    assert (tmp_path / "kept" / "failing-1-0").read_bytes() == b"seed"


def test_the_bench_counts_a_hang(bench: Any, tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    target = bench.Target(lambda data, folder: time.sleep(5), lambda: [b""], (), 1)
    monkeypatch.setitem(bench.TARGETS, "hanging", target)
    monkeypatch.setattr(bench, "LIMIT", 0.05)
    (failure,) = bench.fuzz("hanging", 1, 1, tmp_path / "work").failures
    assert "Hang" in failure


def test_the_shares_of_the_bench_add_up_to_what_was_asked_for(bench: Any) -> None:
    counts = bench.shares(100_000, list(bench.TARGETS))
    assert sum(counts.values()) >= 100_000
    assert min(counts.values()) > 1000
