"""Where the time of a run went: for each worker and in all, in seconds of the clock on the wall."""

from __future__ import annotations

import time
from collections.abc import Iterator
from contextlib import contextmanager
from dataclasses import dataclass, field
from typing import Any

from charflow.simulate.session import Clock

PARTS = ("starting", "loading", "transients", "solving", "journal", "waiting")


@dataclass(frozen=True)
class Spell:
    """One job in a worker process: monotonic times [s] of its begin and end, and what filled them.

    ``opened`` [s] is opening ngspice, ``journal`` [s] writing down trials. ``asked`` is when the job was
    handed out, before the process was even started if it is its first;
    ``seat`` is which of the pool's workers had it (one whose process was replaced stays the same).
    """

    process: int
    began: float
    ended: float
    opened: float
    journal: float
    clock: Clock
    asked: float | None = None
    seat: int = 0


@dataclass
class Timing:
    """The times [s] of a run. ``reading`` covers files, screening and pruning, ``storing`` the store."""

    began: float
    reading: float = 0.0
    storing: float = 0.0
    pool: float | None = None
    spells: list[Spell] = field(default_factory=list)

    @contextmanager
    def of(self, part: str) -> Iterator[None]:
        """Count the time of a block under ``reading`` or ``storing``."""
        began = time.perf_counter()
        try:
            yield
        finally:
            setattr(self, part, getattr(self, part) + time.perf_counter() - began)

    def report(self, ended: float, written: float = 0.0) -> dict[str, Any]:
        """Return all times, for a run that ended at ``ended`` and then wrote its tables in ``written`` [s].

        The parts of a worker add up to the time from the pool's start to the end.
        """
        workers = {
            str(number): self._worker(seat, ended)
            for number, seat in enumerate(sorted({spell.seat for spell in self.spells}), start=1)
        }
        totals = {part: round(sum(worker[part] for worker in workers.values()), 4) for part in PARTS}
        return {
            "unit": "s",
            "wall": round(ended - self.began + written, 4),
            "main": {
                "reading and pruning": round(self.reading, 4),
                "store": round(self.storing, 4),
                "tables": round(written, 4),
            },
            "workers": workers,
            "all workers": totals,
            "transients": sum(spell.clock.transients for spell in self.spells),
            "loads": sum(spell.clock.loads for spell in self.spells),
        }

    def _worker(self, seat: int, ended: float) -> dict[str, float]:
        spells = [spell for spell in self.spells if spell.seat == seat]
        begun = self.began if self.pool is None else self.pool
        busy = sum(spell.ended - spell.began for spell in spells)
        opened = sum(spell.opened for spell in spells)
        loading = sum(spell.clock.load for spell in spells)
        transients = sum(spell.clock.transient for spell in spells)
        journal = sum(spell.journal for spell in spells)
        starting = sum(s.began - s.asked for s in spells if s.asked is not None)
        return {
            "starting": round(starting + opened, 4),
            "loading": round(loading, 4),
            "transients": round(transients, 4),
            "solving": round(busy - opened - loading - transients - journal, 4),
            "journal": round(journal, 4),
            "waiting": round(max(ended - begun - starting - busy, 0.0), 4),
        }


def text(report: dict[str, Any]) -> str:
    """Return a report as a few aligned lines."""
    main = ", ".join(f"{name} {seconds:.2f}" for name, seconds in report["main"].items())
    width = max([len("all workers"), *(len(f"worker {name}") for name in report["workers"])])
    lines = [f"time in s: wall {report['wall']:.2f}; {main}"]
    lines.append(f"{'':{width}}" + "".join(f"{part:>12}" for part in PARTS))
    rows = {f"worker {name}": times for name, times in report["workers"].items()}
    for name, times in (rows | {"all workers": report["all workers"]}).items():
        lines.append(f"{name:{width}}" + "".join(f"{times[part]:12.2f}" for part in PARTS))
    busy = sum(report["all workers"][part] for part in PARTS if part not in ("waiting", "starting"))
    if busy:
        inside = report["all workers"]["transients"]
        lines.append(
            f"{report['transients']} transients are {inside / busy:.0%} of the workers' busy time; "
            f"{report['loads']} circuits loaded"
        )
    return "\n".join(lines)
