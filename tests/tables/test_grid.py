"""Rows as grids: which axes, which shape, which units."""

from __future__ import annotations

import math
from collections.abc import Callable

import pytest

from charflow.tables.flat import Row
from charflow.tables.grid import grids_of

MakeRow = Callable[..., Row]
SLEWS, LOADS, DATA = (10.0, 50.0, 200.0), (1.0, 5.0), (10.0, 50.0, 90.0, 200.0)


@pytest.fixture(scope="session")
def rows(make_row: MakeRow) -> list[Row]:
    delays = [
        make_row(output_edge=edge, clock_slew_ps=slew, load_ff=load, value_ps=slew + load)
        for edge in ("fall", "rise")
        for slew in SLEWS
        for load in LOADS
    ]
    setups = [
        make_row(setup=True, clock_slew_ps=slew, data_slew_ps=data, value_ps=data - slew)
        for slew in SLEWS
        for data in DATA
    ]
    return [*delays, *setups]


def test_each_arc_is_one_grid_in_the_order_of_the_rows(rows: list[Row]) -> None:
    assert [grid.title for grid in grids_of(rows)] == [
        "delay of Q fall from CK rise",
        "delay of Q rise from CK rise",
        "setup of D rise before CK rise",
    ]


def test_a_delay_grid_lies_over_clock_slew_and_load_with_units(rows: list[Row]) -> None:
    array = grids_of(rows)[0].to_xarray()
    assert array.dims == ("clock_slew", "load")
    assert array.shape == (3, 2)
    assert array.attrs == {
        "units": "ps",
        "long_name": "delay of Q fall from CK rise",
        "corner": "typical",
    }
    assert (array["clock_slew"].attrs["units"], array["load"].attrs["units"]) == ("ps", "fF")
    assert array.name == "clk_to_q"
    assert float(array.sel(clock_slew=50, load=5)) == 55.0


def test_a_setup_grid_lies_over_clock_slew_and_data_slew_with_units(rows: list[Row]) -> None:
    array = grids_of(rows)[2].to_xarray()
    assert array.dims == ("clock_slew", "data_slew")
    assert array.shape == (3, 4)
    assert (array.clock_slew.attrs["units"], array.data_slew.attrs["units"]) == ("ps", "ps")
    assert float(array.sel(clock_slew=200, data_slew=10)) == -190.0


def test_axes_rise_whatever_the_order_of_the_rows(rows: list[Row]) -> None:
    forward = {grid.title: grid.to_xarray() for grid in grids_of(rows)}
    for grid in grids_of(reversed(rows)):
        assert grid.to_xarray().identical(forward[grid.title])


def test_a_point_without_a_value_or_without_a_row_is_nan(rows: list[Row], make_row: MakeRow) -> None:
    lost = [row for row in rows if row.quantity == "setup"]
    lost[0] = make_row(setup=True, clock_slew_ps=10.0, data_slew_ps=10.0, value_ps=None)
    del lost[5]
    array = grids_of(lost)[0].to_xarray()
    holes = [
        (float(slew), float(data))
        for slew in array.clock_slew
        for data in array.data_slew
        if math.isnan(array.sel(clock_slew=slew, data_slew=data))
    ]
    assert holes == [(10.0, 10.0), (50.0, 50.0)]


@pytest.mark.parametrize(
    ("change", "title"),
    [
        ({"corner": "slow"}, "setup of D rise before CK rise"),
        ({"pin": "SI"}, "setup of SI rise before CK rise"),
        ({"pin_edge": "fall"}, "setup of D fall before CK rise"),
        ({"quantity": "hold"}, "hold of D rise after CK rise"),
        ({"when": "!SE"}, "setup of D rise before CK rise when !SE"),
    ],
)
def test_rows_that_differ_in_what_they_ask_are_in_different_grids(
    make_row: MakeRow, change: dict[str, str], title: str
) -> None:
    grids = grids_of([make_row(setup=True), make_row(setup=True, **change)])
    assert [grid.title for grid in grids] == ["setup of D rise before CK rise", title]
    assert [len(grid.cells) for grid in grids] == [1, 1]
