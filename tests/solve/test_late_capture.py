"""A window that ends when the answer is known must still be long enough: a late capture is no failure.

A slow corner at a low supply, slow ramps and a large load make captures late; fast ramps leave them the least
time. Every verdict of the usual window is compared with that of one ten times longer.
"""

from __future__ import annotations

from collections.abc import Callable
from pathlib import Path

import pytest

from charflow.plan.arcs import Arc, Kind
from charflow.plan.circuit import circuit_of, read_sources
from charflow.plan.deck import Settings
from charflow.plan.stimulus import Condition, at_offset
from charflow.sheet import Sheet, read_sheet
from charflow.simulate.engine import Engine
from charflow.solve.constraint import PATIENCE, solve_constraint, window
from charflow.solve.reference import Evaluate, reference
from charflow.solve.row import groups_of
from charflow.solve.verdict import NotSettled, Reference, pushout

pytestmark = [pytest.mark.slow, pytest.mark.ngspice]

PS, FF = 1e-12, 1e-15
LONGER = 10.0
# Steps from the crossing in units of the curve's own slope, from far on the safe side to far on the other.
STEPS = (40, 10, 5, 3, 2, 1, 0.5, 0, -0.5, -1, -1.5, -2, -2.5, -3, -4, -7, -40)
CLOSER = 8  # bisections between the last capture and the first failure, where captures are latest
# One bound on the step for both windows, so that they compute the same curve and only its end differs.
SETTINGS = Settings(max_step=50e-12)
SLOW, FAST = 1500 * PS, 5 * PS

Pair = tuple[float | None, float | None]


@pytest.fixture(scope="module")
def slow_sheet(
    make_sheet_at: Callable[..., Path],
    corner: Callable[..., str],
    tmp_path_factory: pytest.TempPathFactory,
    tarn: Path,
) -> Sheet:
    path = make_sheet_at(
        tmp_path_factory.mktemp("late") / "slow.toml",
        corners=corner(f"{tarn}/tarn130.lib:ss", "slow", "0.9 V"),
        clock_slew='["5 ps", "1500 ps"]',
        data_slew='["5 ps", "1500 ps"]',
        load='["0.5 fF", "160 fF"]',
    )
    return read_sheet(path)


@pytest.fixture(scope="module")
def evaluate(slow_sheet: Sheet) -> Evaluate:
    circuit = circuit_of(slow_sheet, read_sources(slow_sheet), "slow").rested(8e-9)
    return Engine(circuit, SETTINGS).run


def arc_of(sheet: Sheet, kind: Kind, rising: bool) -> Arc:
    arcs = (arc for group in groups_of(sheet) for arc in group.constraints)
    return next(arc for arc in arcs if arc.kind is kind and arc.rising is rising)


def verdict(
    evaluate: Evaluate,
    sheet: Sheet,
    arc: Arc,
    condition: Condition,
    base: Reference,
    offset: float,
    longer: float,
) -> float | None:
    """Return the pushout seen through a window ``longer`` times the usual time after the last ramp."""
    until = window(sheet, arc, condition, base, offset, longer)
    for _ in range(PATIENCE):
        try:
            outcome = evaluate(at_offset(sheet, arc, condition, offset, until))
            return pushout(arc, outcome, base, sheet.measure.glitch, sheet.measure.pushout)
        except NotSettled:
            until *= 2
    return None


@pytest.fixture(
    scope="module",
    params=[
        (kind, rising, clock, data, load)
        for kind, rising in ((Kind.SETUP, True), (Kind.SETUP, False), (Kind.HOLD, True), (Kind.HOLD, False))
        for clock, data, load in (
            (SLOW, SLOW, 160 * FF),
            (FAST, SLOW, 160 * FF),
            (FAST, FAST, 160 * FF),  # no ramp that lengthens the window for other reasons
            (SLOW, FAST, 0.5 * FF),
        )
    ],
    ids=lambda p: f"{p[0].value} {'rise' if p[1] else 'fall'} {p[2] / PS:g} {p[3] / PS:g} {p[4] / FF:g}",
)
def sweep(request: pytest.FixtureRequest, slow_sheet: Sheet, evaluate: Evaluate) -> tuple[float, list[Pair]]:
    """Pushouts through the usual and the long window over offsets about the crossing, and the limit."""
    kind, rising, clock, data, load = request.param
    arc = arc_of(slow_sheet, kind, rising)
    condition = Condition("slow", clock, data, load)
    base = reference(evaluate, slow_sheet, arc, condition)
    solved = solve_constraint(evaluate, slow_sheet, arc, condition, base)
    assert solved.value is not None
    offsets = [solved.value + step * solved.crossing.slope for step in STEPS]

    def both(offset: float) -> Pair:
        usual, long = (
            verdict(evaluate, slow_sheet, arc, condition, base, offset, times) for times in (1.0, LONGER)
        )
        return usual, long

    found = {offset: both(offset) for offset in offsets}
    captured = min(offset for offset, (_, long) in found.items() if long is not None)
    failed = max(offset for offset, (_, long) in found.items() if long is None)
    for _ in range(CLOSER):
        middle = (captured + failed) / 2
        found[middle] = both(middle)
        captured, failed = (captured, middle) if found[middle][1] is None else (middle, failed)
    pairs = list(found.values())
    return slow_sheet.measure.pushout, pairs


def test_what_a_long_window_sees_captured_the_usual_one_sees_too(sweep: tuple[float, list[Pair]]) -> None:
    _, pairs = sweep
    missed = [long for usual, long in pairs if usual is None and long is not None]
    assert not missed


def test_what_a_long_window_sees_lost_the_usual_one_does_not_call_captured(
    sweep: tuple[float, list[Pair]],
) -> None:
    _, pairs = sweep
    assert not [usual for usual, long in pairs if long is None and usual is not None]


def test_a_pushout_is_the_same_through_both_windows(sweep: tuple[float, list[Pair]]) -> None:
    limit, pairs = sweep
    for usual, long in pairs:
        if usual is not None and long is not None:
            # The last step of the shorter transient is cut to fit its end; nothing else differs.
            assert usual == pytest.approx(long, rel=1e-3, abs=1e-3 * limit)


def test_the_sweep_holds_captures_on_time_late_ones_and_failures(sweep: tuple[float, list[Pair]]) -> None:
    limit, pairs = sweep
    seen = [usual for usual, _ in pairs]
    assert any(push is not None and push <= limit for push in seen)
    assert any(push is not None and push > 1.5 * limit for push in seen)
    assert None in seen
