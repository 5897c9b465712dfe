"""The cell sheet as frozen, validated objects. Times in seconds, capacitance in farads, volts, degrees C."""

from __future__ import annotations

import math
import re
from enum import StrEnum
from itertools import pairwise
from pathlib import Path
from typing import Annotated, Any, Literal, Self

from pydantic import BaseModel, BeforeValidator, ConfigDict, Field, field_validator, model_validator

from charflow.errors import SheetError
from charflow.sheet.units import Unit, parse

PIN_NAME = re.compile(r"[A-Za-z_][\w.$#<>\[\]/!+-]*")


def _quantity(unit: Unit) -> BeforeValidator:
    def convert(value: Any) -> float:
        if not isinstance(value, str):
            shown = f"{value!r} has no unit" if isinstance(value, int | float) else f"{value!r} is not text"
            raise ValueError(  # noqa: TRY004  # pydantic collects ValueError only
                f"{shown}; write it as quoted text with its unit, such as {_SAMPLE[unit]}"
            )
        try:
            return parse(value, unit)
        except SheetError as error:
            raise ValueError(str(error).replace("\n  ", ". ")) from None

    return BeforeValidator(convert)


_SAMPLE = {
    Unit.SECOND: '"10 ps"',
    Unit.FARAD: '"5 fF"',
    Unit.VOLT: '"1.2 V"',
    Unit.CELSIUS: '"25 C"',
    Unit.PERCENT: '"10 %"',
}

Seconds = Annotated[float, _quantity(Unit.SECOND)]
Farads = Annotated[float, _quantity(Unit.FARAD)]
Volts = Annotated[float, _quantity(Unit.VOLT)]
Celsius = Annotated[float, _quantity(Unit.CELSIUS)]
Fraction = Annotated[float, _quantity(Unit.PERCENT)]


class Role(StrEnum):
    """What a pin does in the cell."""

    CLOCK = "clock"
    GATE = "gate"
    DATA = "data"
    SCAN_DATA = "scan_data"
    SCAN_ENABLE = "scan_enable"
    ENABLE = "enable"
    CLEAR = "clear"
    PRESET = "preset"
    OUTPUT = "output"
    POWER = "power"
    GROUND = "ground"


class _Strict(BaseModel):
    model_config = ConfigDict(frozen=True, extra="forbid", populate_by_name=True)


class Cell(_Strict):
    """Which circuit: netlist file, subckt, and what may be read with it."""

    netlist: Path
    subckt: str | None = None
    next_state: str | dict[str, str] | None = None
    include_folders: tuple[Path, ...] = ()
    allow: frozenset[str] = frozenset()


class Pin(_Strict):
    """One port of the subckt and what it does."""

    role: Role
    active: Literal["rise", "fall", "high", "low"] | None = None
    shows: str | None = None

    @model_validator(mode="after")
    def _fits_role(self) -> Self:
        edges, levels = ("rise", "fall"), ("high", "low")
        wanted = {
            Role.CLOCK: edges,
            Role.GATE: levels,
            Role.CLEAR: levels,
            Role.PRESET: levels,
        }.get(self.role)
        if wanted is None and self.active is not None:
            raise ValueError(f"a pin of role {self.role.value!r} takes no 'active'; remove it")
        if wanted is not None and self.active not in wanted:
            found = "nothing" if self.active is None else repr(self.active)
            raise ValueError(
                f"a pin of role {self.role.value!r} needs active = {wanted[0]!r} or {wanted[1]!r}, "
                f"found {found}"
            )
        if self.role is Role.OUTPUT and self.shows is None:
            raise ValueError('an output needs shows, such as shows = "state" or shows = "!state"')
        if self.role is not Role.OUTPUT and self.shows is not None:
            raise ValueError(f"only an output takes 'shows'; this pin's role is {self.role.value!r}")
        return self


class Corner(_Strict):
    """One condition of process, voltage and temperature."""

    models: tuple[str, ...] = Field(min_length=1)
    supply: Volts = Field(gt=0, le=100)
    temperature: Celsius = Field(ge=-273, le=500)
    compatibility: str | None = Field(default=None, pattern=r"^[a-z]{2,12}$")
    options: dict[str, float] = {}

    @field_validator("options")
    @classmethod
    def _plain_options(cls, options: dict[str, float]) -> dict[str, float]:
        for name, value in options.items():
            if not re.fullmatch(r"[A-Za-z]\w{0,30}", name):
                raise ValueError(f"{name!r} is not the name of a SPICE option")
            if not math.isfinite(value):
                raise ValueError(f"{name} must be a finite number, found {value}")
        return options


def _ascending(values: tuple[float, ...], what: str) -> None:
    for before, after in pairwise(values):
        if after <= before:
            raise ValueError(
                f"{what} must rise from entry to entry; {after:g} comes after {before:g}. "
                "Sort the list and remove repeats"
            )


class Axes(_Strict):
    """Where the tables have their points: slews in seconds (between the slew fractions), loads in farads."""

    clock_slew: tuple[Seconds, ...] = Field(min_length=1)
    data_slew: tuple[Seconds, ...] = Field(min_length=1)
    load: tuple[Farads, ...] = Field(min_length=1)
    constraint_load: Farads
    constraint_loads: tuple[Farads, ...] = ()

    @property
    def loads_of_constraints(self) -> tuple[float, ...]:
        """Loads [F] at which constraints are measured: ``constraint_load`` and any asked for beside it."""
        return tuple(dict.fromkeys((self.constraint_load, *self.constraint_loads)))

    @model_validator(mode="after")
    def _ordered(self) -> Self:
        for name in ("clock_slew", "data_slew", "load"):
            values = getattr(self, name)
            _ascending(values, name)
            if values[0] <= 0:
                raise ValueError(f"{name} must be greater than zero, found {values[0]:g}")
            limit = 1e-6 if name != "load" else 1e-9
            if values[-1] > limit:
                raise ValueError(
                    f"{name} of {values[-1]:g} is beyond {limit:g}: check the prefix of the unit"
                )
        if self.constraint_loads:
            _ascending(self.constraint_loads, "constraint_loads")
        if min(self.loads_of_constraints) <= 0:
            raise ValueError(f"constraint_load must be greater than zero, found {self.constraint_load:g}")
        return self


class Measure(_Strict):
    """How a number is defined: pushout as a fraction, slew fractions of supply, resolution in seconds.

    ``rest`` [s] is how long the cell is left alone before a trial; without it charflow finds one.
    ``glitch`` is how far, as a fraction of supply, an output that must stay may move.
    """

    pushout: Fraction = Field(default=0.1, gt=0, le=10)
    slew_fractions: tuple[float, float] = (0.2, 0.8)
    resolution: Seconds = Field(default=0.1e-12, ge=1e-15, le=1e-9)
    glitch: Fraction = Field(default=0.1, gt=0, lt=0.5)
    rest: Seconds | None = Field(default=None, ge=1e-11, le=1e-3)

    @model_validator(mode="after")
    def _sane_fractions(self) -> Self:
        low, high = self.slew_fractions
        if not 0 < low < 0.5 < high < 1:
            raise ValueError(
                f"slew_fractions must be two numbers either side of 0.5 and inside 0 to 1, "
                f"found {low:g}, {high:g}"
            )
        return self


class Sheet(_Strict):
    """A validated cell sheet. ``pins`` keep the order of the sheet; ``corners`` likewise."""

    cell: Cell
    pins: dict[str, Pin]
    corners: dict[str, Corner] = Field(min_length=1)
    axes: Axes
    measure: Measure = Measure()
    path: Path = Field(default=Path("sheet.toml"), exclude=True)

    @model_validator(mode="after")
    def _whole(self) -> Self:
        seen: dict[str, str] = {}
        for name in self.pins:
            if not PIN_NAME.fullmatch(name):
                raise ValueError(f"pins: {name!r} is not a name a netlist port can have")
            if name.lower() in seen:
                raise ValueError(
                    f"pins: {name!r} and {seen[name.lower()]!r} are one name to SPICE, which ignores case"
                )
            seen[name.lower()] = name
        for name in self.corners:
            if not re.fullmatch(r"[A-Za-z0-9_.+-]{1,60}", name) or name.startswith("."):
                raise ValueError(f"corners: {name!r} may hold only letters, digits and _ . + -")
        for role in (Role.OUTPUT, Role.POWER, Role.GROUND):
            if not self.with_role(role):
                raise ValueError(f"pins: none has the role {role.value!r}")
        return self

    def with_role(self, *roles: Role) -> tuple[str, ...]:
        """Return the names of the pins that have one of ``roles``, in the order of the sheet."""
        return tuple(name for name, pin in self.pins.items() if pin.role in roles)

    @property
    def inputs(self) -> tuple[str, ...]:
        """Names of all driven signal pins, in the order of the sheet."""
        outside = (Role.OUTPUT, Role.POWER, Role.GROUND)
        return tuple(name for name, pin in self.pins.items() if pin.role not in outside)

    @property
    def outputs(self) -> tuple[str, ...]:
        """Names of all outputs, in the order of the sheet."""
        return self.with_role(Role.OUTPUT)
