"""Spoilt inputs at scale: every one ends in success or in an error charflow raises on purpose.

    python tests/bench/fuzz.py [--count 100000] [--seed 1] [--target T]... [--keep DIR] [--json]

No input may end in any other exception, take longer than 10 s, or need more than 1 GB; the exit status is 1
if one does, and ``--keep`` keeps it as a file. The same seed gives the same inputs.
"""

from __future__ import annotations

import argparse
import io
import json
import random
import resource
import shutil
import signal
import sys
import tempfile
import time
import traceback
from collections import Counter
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

import fuzz_seeds as seeds

from charflow.errors import CharflowError

LIMIT = 10.0  # s an input may take
MEMORY = 1 << 30  # bytes of address space the whole bench may take


class Hang(BaseException):
    """An input took longer than allowed. No handler in charflow catches it."""


def read_sheet(data: bytes, folder: Path) -> None:
    """Read a sheet and derive its arcs."""
    from charflow.plan.derive import arcs_of
    from charflow.sheet.read import read_sheet as read

    (folder / "sheet.toml").write_bytes(data)
    arcs_of(read(folder / "sheet.toml"))


def read_netlist(data: bytes, folder: Path) -> None:
    """Read and screen a netlist, find its cell, and prune it as models of a sound cell."""
    from charflow.sheet.lines import render
    from charflow.sheet.netlist import check_ports, find_subckt, loose_elements
    from charflow.sheet.prune import prune
    from charflow.sheet.sources import Rules, fingerprint, gather

    path = folder / "cell.spice"
    path.write_bytes(data)
    section = "tt" if b".lib tt" in data else None
    lines = gather(path, Rules((folder,)), section).lines
    fingerprint(lines)
    render(lines)
    loose_elements(lines)
    sound = gather(seeds.DECKS / "tarn_dffp_1.spice", Rules((seeds.DECKS,))).lines
    prune(lines, sound, "tarn_dffp_1")
    subckt = find_subckt(lines)
    prune(lines, lines, subckt.name)
    check_ports(subckt, subckt.ports)


def read_csv(data: bytes, folder: Path) -> None:
    """Read a table and write it again."""
    from charflow.tables.flat import to_csv
    from charflow.tables.sides import read_side
    from charflow.tables.text import to_markdown

    (folder / "tables.csv").write_bytes(data)
    rows = read_side(folder / "tables.csv").rows
    to_csv(rows)
    to_markdown("cell", (), rows)


def read_json(data: bytes, folder: Path) -> None:
    """Read the tables of a run folder."""
    from charflow.tables.folder import Tables, to_json
    from charflow.tables.sides import differing_facts, read_side

    (folder / "tables.json").write_bytes(data)
    side = read_side(folder)
    differing_facts(side, side)
    to_json(Tables(side.cell, (), side.facts, side.rows))


def open_store(data: bytes, folder: Path) -> None:
    """Open a store to read it, then to write it; whatever it then holds must be sound JSON."""
    from charflow.campaign.store import FILE, Store

    (folder / FILE).write_bytes(data)
    for readonly in (True, False):
        try:
            store = Store(folder, readonly=readonly)
        except CharflowError:
            if not readonly:
                raise
            continue
        try:
            for n in range(2):
                store.outcomes(f"label{n}")
            store.trial("key1")
            store.get("meta", "facts of corner typical")
            if not readonly:
                store.put("meta", "x", 1)
                assert store.get("meta", "x") == 1
        finally:
            store.close()


def compare_tables(data: bytes, folder: Path) -> None:
    """Compare a table with a sound one, in text and JSON."""
    from rich.console import Console

    from charflow.tables.compare import compare
    from charflow.tables.compare_text import comparison_facts, print_comparison
    from charflow.tables.sides import read_side

    (folder / "new.csv").write_bytes(data)
    (folder / "old.csv").write_bytes(_SOUND[0])
    old, new = read_side(folder / "old.csv"), read_side(folder / "new.csv")
    found = compare(old.rows, new.rows)
    json.dumps(comparison_facts(old, new, found, 0.02), allow_nan=False)
    print_comparison(Console(file=io.StringIO(), soft_wrap=True), old, new, found, 0.02, 3)


_SOUND = seeds.csv_tables()


@dataclass(frozen=True)
class Target:
    """What is fuzzed: the reader, what its inputs begin from, how they are spoilt, its share of inputs."""

    read: Callable[[bytes, Path], None]
    begin: Callable[[], list[bytes]]
    ways: tuple[seeds.Spoil, ...]
    share: int


TARGETS = {
    "sheet": Target(
        read_sheet,
        seeds.sheets,
        (
            *seeds.GENERAL,
            *[seeds.with_lines(seeds.SHEET_LINES)] * 6,
            *[seeds.with_quoted(seeds.QUANTITIES)] * 6,
            *[seeds.with_quoted(seeds.SHEET_WORDS)] * 12,
        ),
        22,
    ),
    "netlist": Target(
        read_netlist,
        seeds.netlists,
        (
            *seeds.GENERAL,
            *[seeds.with_lines(seeds.NETLIST_LINES)] * 12,
            *[seeds.with_words(seeds.NETLIST_WORDS, b" =\n")] * 16,
        ),
        32,
    ),
    "csv": Target(
        read_csv, seeds.csv_tables, (*seeds.GENERAL, *[seeds.with_words(seeds.TABLE_CELLS, b",\n")] * 5), 20
    ),
    "json": Target(
        read_json,
        seeds.json_tables,
        (*seeds.GENERAL, *[seeds.with_words(seeds.TABLE_CELLS, b":,\n")] * 4),
        10,
    ),
    "store": Target(
        open_store, seeds.stores, (*seeds.GENERAL, *[seeds.damaged_header] * 4, *[seeds.other_schema] * 2), 6
    ),
    "compare": Target(
        compare_tables,
        seeds.csv_tables,
        (
            seeds.with_words(seeds.TABLE_CELLS, b",\n"),
            seeds.GENERAL[0],
            *[seeds.with_words(("0", "-5.5", "1e14", "-1e14", "1e-300", "", "105.25"), b",")] * 4,
        ),
        10,
    ),
}


@dataclass
class Tally:
    """What came of the inputs of one target."""

    inputs: int = 0
    accepted: int = 0
    refused: Counter[str] = field(default_factory=Counter)
    failures: list[str] = field(default_factory=list)
    slowest: float = 0.0


@contextmanager
def alarm(seconds: float) -> Iterator[None]:
    """Raise :class:`Hang` in the block once ``seconds`` have passed."""

    def strike(number: int, frame: object) -> None:
        raise Hang(f"longer than {seconds:g} s")

    before = signal.signal(signal.SIGALRM, strike)
    signal.setitimer(signal.ITIMER_REAL, seconds)
    try:
        yield
    finally:
        signal.setitimer(signal.ITIMER_REAL, 0)
        signal.signal(signal.SIGALRM, before)


def fuzz(name: str, count: int, seed: int, folder: Path, keep: Path | None = None) -> Tally:
    """Put ``count`` spoilt inputs to a target and return what came of them; ``folder`` is emptied."""
    target, tally = TARGETS[name], Tally()
    chance = random.Random(f"{name} {seed}")
    begin = target.begin()
    for number in range(count):
        data = begin[number] if number < len(begin) else seeds.spoilt(begin, target.ways, chance)
        shutil.rmtree(folder, ignore_errors=True)
        folder.mkdir()
        started = time.monotonic()
        try:
            with alarm(LIMIT):
                target.read(data, folder)
            tally.accepted += 1
        except CharflowError as error:
            str(error)
            tally.refused[type(error).__name__] += 1
        except (Exception, SystemExit, Hang) as error:
            last = traceback.extract_tb(error.__traceback__)[-1]
            place = f"{Path(last.filename).name}:{last.lineno}"
            tally.failures.append(f"input {number}: {type(error).__name__} at {place}: {str(error)[:120]}")
            if keep is not None:
                keep.mkdir(parents=True, exist_ok=True)
                (keep / f"{name}-{seed}-{number}").write_bytes(data)
        tally.inputs += 1
        tally.slowest = max(tally.slowest, time.monotonic() - started)
    return tally


def shares(count: int, names: list[str]) -> dict[str, int]:
    """Return how many of ``count`` inputs each target gets; none gets fewer than its share."""
    whole = sum(TARGETS[name].share for name in names)
    return {name: -(-count * TARGETS[name].share // whole) for name in names}


def main() -> int:
    """Run the bench and print what was found."""
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawTextHelpFormatter)
    parser.add_argument("--count", type=int, default=100_000)
    parser.add_argument("--seed", type=int, default=1)
    parser.add_argument("--target", choices=TARGETS, action="append")
    parser.add_argument("--keep", type=Path, help="folder for inputs that fail")
    parser.add_argument("--json", action="store_true")
    asked = parser.parse_args()
    resource.setrlimit(resource.RLIMIT_AS, (MEMORY, MEMORY))
    found: dict[str, Any] = {}
    began = time.monotonic()
    with tempfile.TemporaryDirectory() as name:
        for target, count in shares(asked.count, asked.target or list(TARGETS)).items():
            tally = fuzz(target, count, asked.seed, Path(name) / "work", asked.keep)
            found[target] = vars(tally) | {"refused": dict(tally.refused)}
            if not asked.json:
                print(as_line(target, tally), flush=True)
                for failure in tally.failures[:20]:
                    print(f"    {failure}", flush=True)
    total = {
        "inputs": sum(tally["inputs"] for tally in found.values()),
        "failures": sum(len(tally["failures"]) for tally in found.values()),
        "seconds": round(time.monotonic() - began, 1),
        "peak_memory_mb": round(resource.getrusage(resource.RUSAGE_SELF).ru_maxrss / 1024),
    }
    print(json.dumps({**total, "targets": found}, indent=1) if asked.json else total)
    return 1 if total["failures"] else 0


def as_line(target: str, tally: Tally) -> str:
    """Return what came of a target as one line."""
    refused = ", ".join(f"{count} {kind}" for kind, count in tally.refused.most_common())
    return (
        f"{target}: {tally.inputs} inputs, {tally.accepted} accepted, refused {refused or 'none'}; "
        f"{len(tally.failures)} failures; slowest {tally.slowest:.2f} s"
    )


if __name__ == "__main__":
    sys.exit(main())
