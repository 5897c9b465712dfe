"""Points between the grid are the known sequence, the same every time, and come with fair first guesses."""

from __future__ import annotations

import math

import pytest
from scipy.stats import qmc

from charflow.sheet import Axes
from charflow.solve.between import columns, hints_at, places, radical_inverse
from charflow.solve.row import Hint, RowResult

AXES = Axes.model_construct(
    clock_slew=(10e-12, 50e-12, 200e-12),
    data_slew=(5e-12, 500e-12),
    load=(1e-15, 25e-15),
    constraint_load=5e-15,
    constraint_loads=(),
)


def test_the_sequence_is_haltons_as_scipy_has_it() -> None:
    theirs = qmc.Halton(3, scramble=False).random(20)
    for index in range(20):
        ours = [radical_inverse(index, base) for base in (2, 3, 5)]
        assert ours == pytest.approx(list(theirs[index]), abs=1e-15)


def test_points_lie_inside_the_axes_at_three_digits_and_follow_one_another() -> None:
    found = places(AXES, 40)
    assert found[10:] == places(AXES, 30, first=11)
    for place in found:
        assert 10e-12 < place.clock_slew < 200e-12
        assert 5e-12 < place.data_slew < 500e-12
        assert 1e-15 < place.load < 25e-15
        assert float(f"{place.clock_slew * 1e12:.3g}") == pytest.approx(place.clock_slew * 1e12, rel=1e-12)
    middle = sum(math.log(p.data_slew) for p in found) / len(found)
    assert middle == pytest.approx(math.log(50e-12), abs=0.15)  # log(5 .. 500) is spread evenly about 50


def test_an_axis_of_one_point_keeps_it() -> None:
    alone = AXES.model_copy(update={"load": (7e-15,)})
    assert {place.load for place in places(alone, 9)} == {7e-15}


def test_columns_change_what_is_solved_and_not_what_else_is_known() -> None:
    asked = columns(AXES, (33e-12,), ())
    assert (asked.data_slew, asked.load, asked.clock_slew) == ((33e-12,), (), AXES.clock_slew)


def test_a_guess_between_solved_points_is_their_interpolation_and_takes_the_nearest_shape() -> None:
    asked = ("setup", "D", True, ())

    def row(slew: float) -> RowResult:
        hints = {
            (asked, data): Hint(2 * slew - data, slope=slew, delay=100e-12 + slew, corner="c", shape=())
            for data in AXES.data_slew
        }
        return RowResult(slew, (), hints)

    guessed = hints_at([row(slew) for slew in AXES.clock_slew], 60e-12, [100e-12])
    hint = guessed.hints[asked, 100e-12]
    assert guessed.clock_slew == 60e-12
    assert hint.value == pytest.approx(20e-12)  # both fields are linear, so the interpolation is exact
    assert hint.delay == pytest.approx(160e-12)
    assert hint.slope == 50e-12
