"""Every second of a worker is accounted for once."""

from __future__ import annotations

import json

import pytest

from charflow.campaign.timing import PARTS, Spell, Timing, text
from charflow.simulate.session import Clock


def spell(seat: int, asked: float, began: float, ended: float, transient: float) -> Spell:
    clock = Clock(load=0.5, transient=transient, loads=1, transients=10)
    return Spell(100 + seat, began, ended, opened=0.1, journal=0.2, clock=clock, asked=asked, seat=seat)


def test_the_parts_of_a_worker_add_up_to_the_time_the_pool_was_open() -> None:
    timing = Timing(began=100.0, pool=101.0)
    timing.spells += [
        spell(0, 101.0, 102.0, 106.0, 3.0),
        spell(0, 106.5, 106.5, 109.0, 1.0),
        spell(1, 105.0, 107.0, 108.0, 0.1),
    ]
    report = timing.report(ended=110.0, written=0.5)
    for worker in report["workers"].values():
        assert sum(worker[part] for part in PARTS) == pytest.approx(9.0)
    assert report["workers"]["1"]["starting"] == pytest.approx(1.2)
    assert report["workers"]["1"]["waiting"] == pytest.approx(1.5)
    assert report["wall"] == pytest.approx(10.5)
    assert report["transients"] == 30
    assert json.loads(json.dumps(report)) == report
    assert "30 transients are" in text(report)


def test_a_run_without_workers_reports_too() -> None:
    report = Timing(began=1.0).report(ended=1.5)
    assert report["workers"] == {}
    assert text(report).startswith("time in s: wall 0.50")
