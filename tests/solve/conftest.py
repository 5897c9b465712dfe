"""A flip-flop made of formulas, with the sheet that describes it."""

from __future__ import annotations

from collections.abc import Callable
from pathlib import Path
from typing import Any

import pytest

from charflow.plan.arcs import Kind
from charflow.plan.behaviour import behaviour_of
from charflow.sheet import Sheet
from charflow.sheet.read import sheet_from
from charflow.solve.fake import Curve, FakeOutput, FakeRegister

PS = 1e-12
FF = 1e-15

OUTPUTS = (FakeOutput("Q", 100 * PS, 30 * PS), FakeOutput("QN", 80 * PS, 20 * PS, share=0.5))


@pytest.fixture(scope="session")
def sheet() -> Sheet:
    return sheet_from(
        {
            "cell": {"netlist": "cell.spice"},
            "pins": {
                "CK": {"role": "clock", "active": "rise"},
                "D": {"role": "data"},
                "Q": {"role": "output", "shows": "state"},
                "QN": {"role": "output", "shows": "!state"},
                "VDD": {"role": "power"},
                "VSS": {"role": "ground"},
            },
            "corners": {"typical": {"models": ["m.lib"], "supply": "1.2 V", "temperature": "25 C"}},
            "axes": {
                "clock_slew": ["10 ps", "50 ps", "200 ps"],
                "data_slew": ["10 ps", "50 ps", "200 ps"],
                "load": ["1 fF", "5 fF"],
                "constraint_load": "5 fF",
            },
        },
        Path("cell.toml"),
    )


@pytest.fixture(scope="session")
def register(sheet: Sheet) -> Callable[..., FakeRegister]:
    """Return a maker of registers: the same curve for every edge unless ``curves`` say otherwise."""

    def make(
        curve: Curve | None = None,
        curves: dict[tuple[Kind, str, bool], Curve] | None = None,
        outputs: tuple[FakeOutput, ...] = OUTPUTS,
    ) -> FakeRegister:
        every: dict[tuple[Kind, str, bool], Any] = {
            (kind, "D", rising): curve for kind in (Kind.SETUP, Kind.HOLD) for rising in (True, False)
        }
        return FakeRegister(behaviour_of(sheet), outputs, every | (curves or {}))

    return make
