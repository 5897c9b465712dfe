"""Rows and answers to make tables of."""

from __future__ import annotations

from collections.abc import Callable
from typing import Any

import pytest

from charflow.tables.flat import Row

ROW = {
    "corner": "typical",
    "quantity": "clk_to_q",
    "pin": "",
    "pin_edge": "",
    "related_pin": "CK",
    "related_edge": "rise",
    "output": "Q",
    "output_edge": "fall",
    "when": "",
    "clock_slew_ps": 10.0,
    "data_slew_ps": None,
    "load_ff": 1.0,
    "value_ps": 142.0776,
    "bracket_ps": None,
    "status": "measured",
    "transients": 1,
    "key": "2b741b77e921b073ff65d11d",
}
SETUP = {
    "quantity": "setup",
    "pin": "D",
    "pin_edge": "rise",
    "output": "",
    "output_edge": "",
    "data_slew_ps": 50.0,
    "load_ff": 5.0,
    "bracket_ps": 0.08,
    "status": "pushout",
}


@pytest.fixture(scope="session")
def make_row() -> Callable[..., Row]:
    """Make a row of a delay table; keywords change it. ``setup=True`` makes one of a setup table."""

    def make(*, setup: bool = False, **changes: Any) -> Row:
        return Row(**{**ROW, **(SETUP if setup else {}), **changes})

    return make
