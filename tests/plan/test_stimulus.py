"""Waveforms: a slew is the time between its fractions, an offset is between the 50 % points."""

from __future__ import annotations

from collections.abc import Callable
from itertools import pairwise

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from charflow.plan.arcs import Kind
from charflow.plan.derive import arcs_of
from charflow.plan.stimulus import LEAD, Condition, Waveform, at_offset, begins, ramp_time, relaxed, waveform
from charflow.plan.trial import Move, Start, Trial, levels
from charflow.sheet import Sheet

MakeSheet = Callable[..., Sheet]
PS = 1e-12
TINY = 1e-9 * PS  # rounding of times of some hundred picoseconds
CONDITION = Condition("typical", 30 * PS, 60 * PS, 5e-15)
laws = settings(derandomize=True, deadline=None, max_examples=200)

fractions = st.tuples(st.floats(0.05, 0.45), st.floats(0.55, 0.95))
times = st.floats(-300, 300).map(lambda number: number * PS)
slews = st.floats(0.5, 500).map(lambda number: number * PS)


def trial(*moves: Move, **rest: bool) -> Trial:
    return Trial("typical", Start((levels(rest or {"CK": False, "D": False}),)), moves, (("Q", 1e-15),), 1e-9)


def level_at(points: Waveform, time: float) -> float:
    x, y = zip(*points, strict=True)
    return float(np.interp(time, x, y))


@laws
@given(fractions, times, slews, st.booleans())
def test_a_slew_is_the_time_between_the_stated_fractions(
    between: tuple[float, float], at: float, slew: float, rising: bool
) -> None:
    points = waveform(trial(Move("D", rising, at, slew), CK=False, D=not rising), "D", between)
    half = ramp_time(slew, between) / 2
    low, high = between
    for fraction in (low, 0.5, high):
        time = at + (fraction - 0.5) * 2 * half
        assert level_at(points, time) == pytest.approx(fraction if rising else 1 - fraction, abs=1e-6)
    assert ramp_time(slew, between) * (high - low) == pytest.approx(slew)


@laws
@given(times, slews, times, slews)
def test_the_transient_begins_before_the_first_ramp_with_every_input_at_rest(
    at: float, slew: float, other: float, more: float
) -> None:
    both = trial(Move("CK", True, other, more), Move("D", True, at, slew))
    begin = begins(both, (0.2, 0.8))
    first = min(at - slew / 0.6 / 2, other - more / 0.6 / 2)
    assert begin == pytest.approx(first - LEAD)
    for pin in ("CK", "D"):
        points = waveform(both, pin, (0.2, 0.8))
        assert points[0] == (begin, 0.0)
        assert points[1][0] >= begin + LEAD - TINY


def test_an_input_that_does_not_move_stays_at_rest() -> None:
    (point,) = waveform(trial(Move("CK", True, 0.0, 30 * PS), CK=False, D=True), "D", (0.2, 0.8))
    assert point[1] == 1.0


def test_a_pulse_whose_ramps_do_not_overlap_reaches_the_rail() -> None:
    pulse = trial(Move("CK", True, 0.0, 30 * PS), Move("CK", False, 200 * PS, 30 * PS))
    points = waveform(pulse, "CK", (0.2, 0.8))
    assert [level for _, level in points] == [0.0, 0.0, 1.0, 1.0, 0.0]
    assert [time / PS for time, _ in points[1:]] == pytest.approx([-25, 25, 175, 225])


def test_a_pulse_whose_ramps_overlap_is_a_triangle_of_the_same_width() -> None:
    # two 50 ps ramps 20 ps apart cross 10 ps after the first's middle: 0.5 + 10/50 of the rail
    pulse = trial(Move("CK", True, 0.0, 30 * PS), Move("CK", False, 20 * PS, 30 * PS))
    points = waveform(pulse, "CK", (0.2, 0.8))
    assert [level for _, level in points] == pytest.approx([0.0, 0.0, 0.7, 0.0])
    assert [time / PS for time, _ in points[1:]] == pytest.approx([-25, 10, 45])


@laws
@given(st.floats(1, 400).map(lambda number: number * PS), slews, slews, st.booleans())
def test_a_pulse_has_its_width_between_the_50_percent_points_whether_its_ramps_meet_or_not(
    width: float, first: float, second: float, up: bool
) -> None:
    pulse = trial(Move("CK", up, 0.0, first), Move("CK", not up, width, second), CK=not up, D=False)
    points = waveform(pulse, "CK", (0.2, 0.8))
    assert all(b[0] > a[0] for a, b in pairwise(points) if a != b)
    assert all(-1e-9 <= level <= 1 + 1e-9 for _, level in points)
    for time in (0.0, width):
        assert level_at(points, time) == pytest.approx(0.5, abs=1e-6)
    inside = level_at(points, width / 2)
    assert (inside > 0.5) is up


def test_moves_need_not_be_given_in_order() -> None:
    forth = trial(Move("CK", True, 0.0, 30 * PS), Move("CK", False, 90 * PS, 30 * PS))
    back = trial(*reversed(forth.moves))
    assert waveform(forth, "CK", (0.2, 0.8)) == waveform(back, "CK", (0.2, 0.8))


class TestTrials:
    def test_setup_puts_the_data_edge_before_the_clock_edge_and_hold_after_it(
        self, sheet_of: MakeSheet
    ) -> None:
        sheet = sheet_of("flip-flop")
        for arc in arcs_of(sheet):
            if arc.kind not in (Kind.SETUP, Kind.HOLD):
                continue
            made = at_offset(sheet, arc, CONDITION, 70 * PS, 1e-9)
            clock, data = made.moves
            assert clock == Move("CK", True, 0.0, 30 * PS)
            assert data == Move("D", arc.rising, (-70 if arc.kind is Kind.SETUP else 70) * PS, 60 * PS)
            assert made.start == arc.start

    def test_observed_outputs_carry_the_load_of_the_row_and_others_the_smallest(
        self, sheet_of: MakeSheet
    ) -> None:
        sheet = sheet_of("flip-flop")
        for arc in arcs_of(sheet):
            loads = dict(relaxed(sheet, arc, CONDITION, 1e-9).loads)
            watched = {pin for pin, _ in (*arc.observed, *arc.quiet)}
            assert loads == {pin: 5e-15 if pin in watched else 1e-15 for pin in ("Q", "QN")}

    def test_setup_of_a_rise_and_hold_of_a_fall_share_one_relaxed_trial(self, sheet_of: MakeSheet) -> None:
        sheet = sheet_of("flip-flop")
        trials = {
            (arc.kind, arc.rising): relaxed(sheet, arc, CONDITION, 1e-9)
            for arc in arcs_of(sheet)
            if arc.kind in (Kind.SETUP, Kind.HOLD)
        }
        assert trials[Kind.SETUP, True] == trials[Kind.HOLD, False]
        assert trials[Kind.SETUP, False] == trials[Kind.HOLD, True]
        assert trials[Kind.SETUP, True] != trials[Kind.SETUP, False]

    def test_a_relaxed_trial_moves_the_clock_alone(self, sheet_of: MakeSheet) -> None:
        sheet = sheet_of("scan flip-flop")
        for arc in arcs_of(sheet):
            if arc.kind in (Kind.SETUP, Kind.HOLD):
                assert relaxed(sheet, arc, CONDITION, 1e-9).moves == (Move("CK", True, 0.0, 30 * PS),)

    def test_a_pulse_is_as_wide_as_its_offset(self, sheet_of: MakeSheet) -> None:
        sheet = sheet_of("flip-flop")
        found = [arc for arc in arcs_of(sheet) if arc.kind is Kind.PULSE_WIDTH]
        assert found
        for arc in found:
            first, second = at_offset(sheet, arc, CONDITION, 70 * PS, 1e-9).moves
            assert second.at - first.at == pytest.approx(70 * PS)
            assert first.rising is arc.rising
            assert second.rising is not arc.rising
            assert 0.0 in (first.at, second.at)
