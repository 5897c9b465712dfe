"""Quantities with units: text such as ``"10 ps"`` to SI floats, and back for people.

quantiphy reads the text; this module decides which unit each key of a sheet expects and explains a
mismatch.
"""

from __future__ import annotations

import math
from enum import StrEnum
from functools import lru_cache

from charflow.errors import SheetError


class Unit(StrEnum):
    """The units a sheet uses; the value is the SI symbol the text must end with."""

    SECOND = "s"
    FARAD = "F"
    VOLT = "V"
    CELSIUS = "C"
    PERCENT = "%"


_EXAMPLES = {
    Unit.SECOND: "10 ps",
    Unit.FARAD: "5 fF",
    Unit.VOLT: "1.2 V",
    Unit.CELSIUS: "25 C",
    Unit.PERCENT: "10 %",
}
_NAMES = {
    Unit.SECOND: "a time in seconds",
    Unit.FARAD: "a capacitance in farads",
    Unit.VOLT: "a voltage in volts",
    Unit.CELSIUS: "a temperature in degrees Celsius",
    Unit.PERCENT: "a percentage",
}


@lru_cache(maxsize=4096)
def parse(text: str, unit: Unit) -> float:
    """Return ``text`` as a float in SI base units (percent as a fraction, Celsius as degrees Celsius).

    Raises :class:`SheetError` when the unit is missing or another one, or the number is not finite.
    """
    from quantiphy import InvalidNumber, Quantity

    example = f'Write for example "{_EXAMPLES[unit]}".'
    expected = f"expected {_NAMES[unit]}"
    try:
        quantity = Quantity(text, ignore_sf=unit in (Unit.PERCENT, Unit.CELSIUS))
    except InvalidNumber:
        raise SheetError(f"{text!r} is not a quantity; {expected}", todo=example) from None
    found = quantity.units
    if unit is Unit.CELSIUS:
        found = found.removeprefix("°").removeprefix("deg")
    if found != unit.value:
        said = f"{text!r} has no unit" if not found else f"{text!r} is in {found!r}"
        raise SheetError(f"{said}; {expected}", todo=example)
    number = float(quantity)
    if not math.isfinite(number):
        raise SheetError(f"{text!r} is not finite; {expected}", todo=example)
    return number / 100 if unit is Unit.PERCENT else number


def show(value: float, unit: Unit, digits: int = 6) -> str:
    """Return ``value`` (SI base unit) as short text with an SI prefix, e.g. ``"10 ps"``."""
    from quantiphy import Quantity

    if unit is Unit.PERCENT:
        return f"{value * 100:.{digits}g} %"
    if unit is Unit.CELSIUS:
        return f"{value:.{digits}g} C"
    return str(Quantity(value, unit.value).render(prec=max(digits - 1, 0), strip_zeros=True))
