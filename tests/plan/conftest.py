"""Small sheets of register kinds, by their pins."""

from __future__ import annotations

from collections.abc import Callable
from pathlib import Path
from typing import Any

import pytest

from charflow.sheet import Sheet
from charflow.sheet.read import sheet_from

Pins = dict[str, dict[str, str]]

CLOCK: Pins = {"CK": {"role": "clock", "active": "rise"}}
FALLING: Pins = {"CKN": {"role": "clock", "active": "fall"}}
GATE: Pins = {"G": {"role": "gate", "active": "high"}}
DATA: Pins = {"D": {"role": "data"}}
ENABLE: Pins = {"E": {"role": "enable"}}
SCAN: Pins = {"SI": {"role": "scan_data"}, "SE": {"role": "scan_enable"}}
CLEAR: Pins = {"RN": {"role": "clear", "active": "low"}}
PRESET: Pins = {"S": {"role": "preset", "active": "high"}}
Q: Pins = {"Q": {"role": "output", "shows": "state"}}
QN: Pins = {"QN": {"role": "output", "shows": "!state"}}
RAILS: Pins = {"VDD": {"role": "power"}, "VSS": {"role": "ground"}}

KINDS: dict[str, Pins] = {
    "flip-flop": CLOCK | DATA | Q | QN,
    "falling flip-flop": FALLING | DATA | Q,
    "enable flip-flop": CLOCK | DATA | ENABLE | Q,
    "scan flip-flop": CLOCK | DATA | SCAN | Q,
    "clear flip-flop": CLOCK | DATA | CLEAR | Q,
    "clear and preset flip-flop": CLOCK | DATA | CLEAR | PRESET | Q,
    "latch": GATE | DATA | Q,
}


def _sheet(pins: Pins, **cell: Any) -> Sheet:
    return sheet_from(
        {
            "cell": {"netlist": "cell.spice", **cell},
            "pins": pins | RAILS,
            "corners": {"typical": {"models": ["m.lib"], "supply": "1.2 V", "temperature": "25 C"}},
            "axes": {
                "clock_slew": ["30 ps"],
                "data_slew": ["60 ps"],
                "load": ["1 fF", "5 fF"],
                "constraint_load": "5 fF",
            },
        },
        Path("cell.toml"),
    )


@pytest.fixture(scope="session")
def sheet_of() -> Callable[..., Sheet]:
    """Return a maker of sheets from the name of a register kind or from pins, and keys of [cell]."""

    def make(pins: str | Pins, **cell: Any) -> Sheet:
        return _sheet(KINDS[pins] if isinstance(pins, str) else pins, **cell)

    return make
