"""What must be true of a crossing found on a curve that may dip, turn back, or end in a cliff."""

from __future__ import annotations

import math
from dataclasses import dataclass, field

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from charflow.solve.crossing import Crossing, Ending, Guess, Search
from charflow.solve.fake import NEVER, Curve

PS = 1e-12
LIMIT = 0.1
RESOLUTION = 0.1 * PS
SAFE, UNSAFE = 400 * PS, -400 * PS
ROUNDING = 1e-9 * PS  # the curves are exact to rounding, so a bracket may miss by no more

# Measured over thousands of random curves, then rounded up. Whoever makes the search cheaper lowers them.
GOOD_GUESS, GOOD_GUESS_AT_CLIFF = 6, 14
COLD, COLD_AT_CLIFF = 20, 22
BAD_GUESS = 40
LOST_LATE = 80


@dataclass
class Measured:
    """A curve that counts how often it is measured."""

    curve: Curve
    times: int = 0
    offsets: list[float] = field(default_factory=list)

    def __call__(self, offset: float) -> float | None:
        self.times += 1
        assert self.times <= 150, "a search that creeps"
        self.offsets.append(offset)
        return self.curve.push(offset)

    def patiently(self, offset: float) -> float | None:
        push = self(offset)
        return None if offset < self.curve.lost else push


def search(
    curve: Curve, guess: Guess | None = None, *, lookout: tuple[float, ...] = (), patient: bool = False
) -> tuple[Crossing, int]:
    measured = Measured(curve)
    found = Search(
        measured,
        LIMIT,
        RESOLUTION,
        SAFE,
        UNSAFE,
        lookout=lookout,
        confirm=measured.patiently if patient else None,
    ).run(guess)
    return found, measured.times


def falling(crossing: float, tau: float, **more: object) -> Curve:
    """Return the plain exponential that reaches the limit at ``crossing``."""
    return Curve(crossing + tau * math.log(LIMIT), tau, **more)  # type: ignore[arg-type]


def joined(points: list[tuple[float, float]]) -> tuple[tuple[float, float], ...]:
    """Return ``points`` in order, with zero at both ends so that the curve has no jump."""
    places = sorted(dict(points).items())
    ends = {places[0][0], places[-1][0]} if places else set()
    return tuple((x, 0.0 if x in ends else y) for x, y in places) if len(places) > 1 else ()


def check(found: Crossing, curve: Curve, truth: float) -> None:
    """Assert everything that a crossing with a value promises."""
    assert found.value is not None
    assert found.fails - ROUNDING < truth <= found.passes + ROUNDING
    assert found.fails <= found.value <= found.passes
    assert 0 < found.bracket <= RESOLUTION + ROUNDING
    low, high = curve.push(found.fails), curve.push(found.passes)
    assert high is not None
    assert high <= LIMIT
    assert low is None or low > LIMIT
    assert (found.ending is Ending.CLIFF) is (low is None)


def units(low: float, high: float) -> st.SearchStrategy[float]:
    """Return times between ``low`` and ``high`` in ps, as seconds."""
    return st.floats(low, high, allow_nan=False).map(lambda number: number * PS)


crossings = units(-150, 150)
whole = st.integers(-200, 200).map(lambda number: number * PS)  # so that no two points nearly meet
taus = units(0.5, 20)
laws = settings(derandomize=True, deadline=None, max_examples=150)


class TestExponential:
    @laws
    @given(crossings, taus)
    def test_the_bracket_holds_the_crossing_without_any_guess(self, truth: float, tau: float) -> None:
        curve = falling(truth, tau)
        found, times = search(curve)
        check(found, curve, truth)
        assert times <= COLD

    @laws
    @given(crossings, taus, st.floats(-0.3, 0.3), st.floats(0.7, 1.5))
    def test_a_good_guess_needs_few_transients(
        self, truth: float, tau: float, miss: float, steeper: float
    ) -> None:
        curve = falling(truth, tau)
        found, times = search(curve, Guess(truth + miss * tau, 2 * tau, tau * steeper))
        check(found, curve, truth)
        assert times <= GOOD_GUESS

    @laws
    @given(crossings, taus, units(-1000, 1000), units(0.01, 50), units(0.01, 100))
    def test_no_guess_is_so_wrong_that_the_answer_is(
        self, truth: float, tau: float, offset: float, spread: float, slope: float
    ) -> None:
        curve = falling(truth, tau)
        found, times = search(curve, Guess(offset, spread, slope))
        check(found, curve, truth)
        assert times <= BAD_GUESS

    @laws
    @given(crossings, taus)
    def test_the_value_between_the_ends_is_far_closer_than_the_bracket(
        self, truth: float, tau: float
    ) -> None:
        # log pushout is exactly straight here, so interpolation in it is exact but for rounding
        found, _ = search(falling(truth, tau))
        assert found.value == pytest.approx(truth, abs=1e-5 * PS)

    @laws
    @given(crossings, units(1, 20))
    def test_the_slope_it_teaches_is_the_curve_s_own(self, truth: float, tau: float) -> None:
        found, _ = search(falling(truth, tau), Guess(truth, 2 * tau, 1.4 * tau))
        # one pair of samples a tenth of a picosecond apart is enough, unless the pair is too close to tell
        assert found.slope == pytest.approx(tau, rel=1e-3) or found.slope == pytest.approx(1.4 * tau)

    def test_a_negative_crossing_is_an_answer_like_any_other(self) -> None:
        found, _ = search(falling(-87.3 * PS, 4 * PS))
        assert found.value == pytest.approx(-87.3 * PS, abs=1e-5 * PS)

    def test_a_crossing_outside_the_surveyed_range_is_still_found(self) -> None:
        curve = falling(450 * PS, 3 * PS)
        for guess in (None, Guess(0.0, 5 * PS, 3 * PS)):
            found, times = search(curve, guess)
            check(found, curve, 450 * PS)
            assert times <= BAD_GUESS


class TestCliff:
    @laws
    @given(crossings, taus, units(0.1, 60))
    def test_a_cliff_before_the_limit_is_the_answer_and_the_ending_says_so(
        self, truth: float, tau: float, ahead: float
    ) -> None:
        curve = falling(truth - ahead, tau, cliff=truth)
        found, times = search(curve)
        check(found, curve, truth)
        assert found.ending is Ending.CLIFF
        assert times <= COLD_AT_CLIFF

    @laws
    @given(crossings, taus, units(0.2, 60))
    def test_a_cliff_beyond_the_limit_changes_nothing(self, truth: float, tau: float, beyond: float) -> None:
        curve = falling(truth, tau, cliff=truth - beyond)
        found, _ = search(curve, Guess(truth + tau, 3 * tau, tau))
        check(found, curve, truth)
        assert found.ending is Ending.PUSHOUT

    @laws
    @given(crossings, taus, units(0, 30), st.floats(-0.3, 0.3))
    def test_a_good_guess_at_a_cliff_costs_little_more_than_bisection_from_its_spread(
        self, truth: float, tau: float, ahead: float, miss: float
    ) -> None:
        curve = falling(truth - ahead, tau, cliff=truth)
        found, times = search(curve, Guess(truth + miss * tau, 2 * tau, tau))
        check(found, curve, truth)
        assert times <= GOOD_GUESS_AT_CLIFF

    @laws
    @given(crossings, taus, units(0, 30), units(-1000, 1000), units(0.01, 50), units(0.01, 100))
    def test_no_guess_is_so_wrong_that_a_cliff_is_missed(
        self, truth: float, tau: float, ahead: float, offset: float, spread: float, slope: float
    ) -> None:
        curve = falling(truth - ahead, tau, cliff=truth)
        found, times = search(curve, Guess(offset, spread, slope))
        check(found, curve, truth)
        assert times <= BAD_GUESS


class TestShapes:
    @laws
    @given(crossings, taus, units(10, 60), st.floats(0.01, 0.3))
    def test_a_dip_below_zero_on_the_way_is_passed_over(
        self, truth: float, tau: float, width: float, depth: float
    ) -> None:
        dip = ((truth, 0.0), (truth + width / 2, -depth), (truth + width, 0.0))
        curve = falling(truth, tau, shape=dip)
        exact = curve.crossing(LIMIT)
        for guess in (None, Guess(truth, 2 * tau, tau), Guess(truth + width / 2, 2 * tau, tau)):
            found, times = search(curve, guess)
            check(found, curve, exact)
            assert times <= BAD_GUESS

    @laws
    @given(units(-100, 0), units(0.5, 10), units(30, 150))
    def test_a_curve_that_turns_back_is_answered_next_to_the_safe_side(
        self, low: float, tau: float, up: float
    ) -> None:
        # passes its limit over some 200 ps (wider than a step of the survey), returns, then fails for good
        top = low + up
        bump = ((top, 0.0), (top + 5 * PS, 0.3), (top + 205 * PS, 0.3), (top + 210 * PS, 0.0))
        curve = falling(low, tau, shape=bump)
        exact = curve.crossing(LIMIT)
        assert exact > top + 200 * PS
        found, _ = search(curve)
        check(found, curve, exact)

    @laws
    @given(units(-100, 0), units(0.5, 10), units(-5, 5))
    def test_the_lookout_catches_a_guess_on_the_wrong_side_of_a_turn(
        self, low: float, tau: float, miss: float
    ) -> None:
        bump = ((low + 40 * PS, 0.0), (low + 45 * PS, 0.3), (low + 95 * PS, 0.3), (low + 100 * PS, 0.0))
        curve = falling(low, tau, shape=bump)
        found, _ = search(curve, Guess(low + miss, 2 * tau, tau), lookout=(70 * PS,))
        check(found, curve, curve.crossing(LIMIT))

    @laws
    @given(units(-100, 100), st.sampled_from([0.0001, 0.05, 0.0999]), units(-200, 200))
    def test_a_level_stretch_below_the_limit_does_not_make_the_search_creep(
        self, truth: float, level: float, offset: float
    ) -> None:
        curve = Curve(0.0, PS, 0.0, shape=((-4000 * PS, level), (8000 * PS, level)), cliff=truth)
        found, times = search(curve, Guess(offset, 5 * PS, 2 * PS))
        check(found, curve, truth)
        assert times <= BAD_GUESS

    @laws
    @given(units(-100, 100), st.sampled_from([0.1001, 0.5, 1e9]), units(-200, 0))
    def test_a_level_stretch_above_the_limit_does_not_make_the_search_creep(
        self, truth: float, level: float, offset: float
    ) -> None:
        curve = Curve(0.0, PS, 0.0, shape=((-4000 * PS, level), (truth, level)))
        found, times = search(curve, Guess(truth + offset, 5 * PS, 2 * PS))
        check(found, curve, truth)
        assert times <= BAD_GUESS

    @settings(derandomize=True, deadline=None, max_examples=300)
    @given(
        crossings,
        taus,
        st.lists(st.tuples(whole, st.floats(-0.3, 0.3)), min_size=2, max_size=6),
        st.one_of(st.just(NEVER), units(-150, 150)),
        st.one_of(st.none(), st.builds(Guess, units(-300, 300), units(0.1, 50), units(0.1, 50))),
    )
    def test_on_any_curve_the_bracket_has_a_failing_and_a_passing_end(
        self,
        crossing: float,
        tau: float,
        points: list[tuple[float, float]],
        cliff: float,
        guess: Guess | None,
    ) -> None:
        curve = falling(crossing, tau, shape=joined(points), cliff=cliff)
        found, times = search(curve, guess)
        assert found.value is not None
        low, high = curve.push(found.fails), curve.push(found.passes)
        assert low is None or low > LIMIT
        assert high is not None
        assert high <= LIMIT
        assert found.bracket <= RESOLUTION + ROUNDING
        assert times <= BAD_GUESS + 30  # jumps of a curve are closed by bisection, twice at worst


class TestPatience:
    @settings(derandomize=True, deadline=None, max_examples=60)
    @given(units(-100, 100), units(0.5, 40), st.booleans())
    def test_a_value_that_is_lost_late_does_not_count_as_captured(
        self, cliff: float, wide: float, guessed: bool
    ) -> None:
        curve = Curve(cliff - 100 * PS, 2 * PS, cliff=cliff, lost=cliff + wide, lost_after=1e-9)
        found, times = search(curve, Guess(cliff, 5 * PS, 2 * PS) if guessed else None, patient=True)
        check_late(found, curve)
        assert times <= LOST_LATE

    def test_a_pushout_crossing_needs_no_second_look(self) -> None:
        curve = falling(0.0, 4 * PS)
        assert search(curve, patient=True)[1] == search(curve)[1]


def check_late(found: Crossing, curve: Curve) -> None:
    truth = curve.crossing(LIMIT)
    assert found.value is not None
    assert found.fails - ROUNDING < truth <= found.passes + ROUNDING
    assert found.bracket <= RESOLUTION + ROUNDING
    assert found.ending is Ending.CLIFF


class TestNoAnswer:
    @pytest.mark.parametrize("guess", [None, Guess(0.0, 5 * PS, 2 * PS), Guess(-1e-9, PS, 0.1 * PS)])
    def test_a_curve_that_never_fails_has_no_value_and_says_why(self, guess: Guess | None) -> None:
        found, times = search(Curve(0.0, PS, 0.0), guess)
        assert (found.ending, found.value) == (Ending.NEVER_FAILS, None)
        assert min(sample.offset for sample in found.samples) <= UNSAFE
        assert times <= COLD

    @pytest.mark.parametrize("guess", [None, Guess(0.0, 5 * PS, 2 * PS), Guess(1e-9, PS, 0.1 * PS)])
    def test_a_curve_that_never_passes_has_no_value_and_says_why(self, guess: Guess | None) -> None:
        found, times = search(Curve(0.0, PS, 0.0, cliff=1.0), guess)
        assert (found.ending, found.value) == (Ending.NEVER_PASSES, None)
        assert max(sample.offset for sample in found.samples) >= SAFE
        assert times <= COLD

    def test_every_sample_is_kept(self) -> None:
        measured = Measured(falling(0.0, 3 * PS))
        found = Search(measured, LIMIT, RESOLUTION, SAFE, UNSAFE).run(None)
        assert [sample.offset for sample in found.samples] == measured.offsets


class TestTruth:
    """The formula register's own answer, checked without a solver: all above passes, just below fails."""

    @laws
    @given(
        crossings,
        taus,
        st.lists(st.tuples(whole, st.floats(-0.3, 0.3)), max_size=6),
        st.one_of(st.just(NEVER), units(-150, 150)),
    )
    def test_everything_above_it_passes_and_just_below_fails(
        self, crossing: float, tau: float, points: list[tuple[float, float]], cliff: float
    ) -> None:
        curve = falling(crossing, tau, shape=joined(points), cliff=cliff)
        truth = curve.crossing(LIMIT)
        for step in range(400):
            push = curve.push(truth + ROUNDING + step * PS)
            assert push is not None
            assert push <= LIMIT + 1e-9
        below = curve.push(truth - ROUNDING)
        assert below is None or below > LIMIT - 1e-9
