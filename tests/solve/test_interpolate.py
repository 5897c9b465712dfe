"""A table is read as timing tools read it."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from scipy.interpolate import RegularGridInterpolator

from charflow.solve.interpolate import surface


def test_the_published_worked_example_comes_out() -> None:
    # x 0.1 and 0.3, y 0.35 and 1.43; a worked example of bilinear interpolation of a timing table
    table = surface({(0.1, 0.35): 0.1937, (0.1, 1.43): 0.7280, (0.3, 0.35): 0.2327, (0.3, 1.43): 0.7676})
    assert table.at((0.15, 1.16)) == pytest.approx(0.6043, abs=5e-5)  # printed to four digits


axes = st.lists(st.integers(1, 400), min_size=2, max_size=5, unique=True).map(sorted)


@given(st.lists(axes, min_size=1, max_size=3), st.data())
def test_it_agrees_with_scipy_inside_and_outside_the_grid(grid: list[list[int]], data: st.DataObject) -> None:
    shape = tuple(len(axis) for axis in grid)
    numbers = st.lists(st.integers(-999, 999), min_size=int(np.prod(shape)), max_size=int(np.prod(shape)))
    values = np.array(data.draw(numbers), dtype=float).reshape(shape)
    table = surface(
        {
            tuple(float(axis[i]) for axis, i in zip(grid, index, strict=True)): float(values[index])
            for index in np.ndindex(shape)
        }
    )
    point = tuple(data.draw(st.floats(-50, 500)) for _ in grid)
    continued = RegularGridInterpolator(grid, values, bounds_error=False, fill_value=None)
    scale = 1e3 * 1e3 ** len(grid)  # a steep outer cell carried far outside
    assert table.at(point) == pytest.approx(float(continued([point])[0]), rel=1e-9, abs=1e-9 * scale)


def test_an_axis_of_one_point_leaves_the_value_the_same_along_it() -> None:
    table = surface({(1.0, 5.0): 10.0, (3.0, 5.0): 20.0})
    assert table.at((2.0, 5.0)) == table.at((2.0, 500.0)) == 15.0


def test_a_point_that_leans_on_a_hole_has_no_value_and_others_keep_theirs() -> None:
    table = surface({(0.0, 0.0): 1.0, (0.0, 1.0): 2.0, (1.0, 0.0): 3.0, (2.0, 0.0): 5.0, (2.0, 1.0): 6.0})
    assert table.at((0.5, 0.5)) is None
    assert table.at((0.0, 0.5)) == 1.5
    assert table.at((1.5, 0.0)) == 4.0
