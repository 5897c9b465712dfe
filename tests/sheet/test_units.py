"""Quantities: a number needs its unit, and a wrong unit is explained."""

from __future__ import annotations

import math

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from charflow.errors import SheetError
from charflow.sheet.units import Unit, parse, show

laws = settings(derandomize=True, deadline=None, max_examples=300)


@pytest.mark.parametrize(
    ("text", "unit", "value"),
    [
        ("10 ps", Unit.SECOND, 10e-12),
        ("10ps", Unit.SECOND, 10e-12),
        ("0.1 ps", Unit.SECOND, 0.1e-12),
        ("1 ns", Unit.SECOND, 1e-9),
        ("1e-12 s", Unit.SECOND, 1e-12),
        ("-3 ps", Unit.SECOND, -3e-12),
        ("5 fF", Unit.FARAD, 5e-15),
        ("0.005 pF", Unit.FARAD, 5e-15),
        ("1.2 V", Unit.VOLT, 1.2),
        ("900 mV", Unit.VOLT, 0.9),
        ("25 C", Unit.CELSIUS, 25.0),
        ("-40 C", Unit.CELSIUS, -40.0),
        ("25 °C", Unit.CELSIUS, 25.0),
        ("10 %", Unit.PERCENT, 0.1),
        ("10%", Unit.PERCENT, 0.1),
        ("0.5 %", Unit.PERCENT, 0.005),
    ],
)
def test_a_number_with_its_unit_is_read_to_the_last_digit(text: str, unit: Unit, value: float) -> None:
    assert parse(text, unit) == pytest.approx(value, rel=1e-15)


@pytest.mark.parametrize(
    ("text", "unit", "said"),
    [
        ("10", Unit.SECOND, "'10' has no unit; expected a time in seconds"),
        ("10 p", Unit.SECOND, "'10 p' has no unit; expected a time in seconds"),
        ("5 V", Unit.FARAD, "'5 V' is in 'V'; expected a capacitance in farads"),
        ("5 fV", Unit.FARAD, "'5 fV' is in 'V'; expected a capacitance in farads"),
        ("10 ps", Unit.VOLT, "'10 ps' is in 's'; expected a voltage in volts"),
        ("300 K", Unit.CELSIUS, "'300 K' is in 'K'; expected a temperature in degrees Celsius"),
        ("0.1", Unit.PERCENT, "'0.1' has no unit; expected a percentage"),
        ("fast", Unit.SECOND, "'fast' is not a quantity; expected a time in seconds"),
        ("", Unit.SECOND, "'' is not a quantity; expected a time in seconds"),
        ("ps", Unit.SECOND, "'ps' is not a quantity; expected a time in seconds"),
        ("nan s", Unit.SECOND, "expected a time in seconds"),
        ("inf s", Unit.SECOND, "expected a time in seconds"),
        ("1e999 s", Unit.SECOND, "'1e999 s' is not finite; expected a time in seconds"),
        ("1e999 %", Unit.PERCENT, "'1e999 %' is not finite; expected a percentage"),
    ],
)
def test_what_is_wrong_is_said_with_what_was_expected(text: str, unit: Unit, said: str) -> None:
    with pytest.raises(SheetError) as caught:
        parse(text, unit)
    assert said in caught.value.message
    assert caught.value.todo.startswith('Write for example "')


@pytest.mark.parametrize("unit", list(Unit))
def test_the_example_in_the_advice_is_itself_accepted(unit: Unit) -> None:
    with pytest.raises(SheetError) as caught:
        parse("nonsense", unit)
    example = caught.value.todo.removeprefix('Write for example "').removesuffix('".')
    assert parse(example, unit) > 0


@laws
@given(st.text(max_size=30), st.sampled_from(list(Unit)))
def test_any_text_is_a_finite_number_or_a_sheet_error(text: str, unit: Unit) -> None:
    try:
        value = parse(text, unit)
    except SheetError:
        return
    assert math.isfinite(value)


@laws
@given(st.text(alphabet="0123456789.eE+-_ ,'$xinfaumpkGTK%sFVC°", max_size=16), st.sampled_from(list(Unit)))
def test_any_text_that_looks_like_a_quantity_is_a_finite_number_or_a_sheet_error(
    text: str, unit: Unit
) -> None:
    try:
        value = parse(text, unit)
    except SheetError:
        return
    assert math.isfinite(value)


@laws
@given(st.floats(1e-18, 1e3, allow_nan=False), st.sampled_from([Unit.SECOND, Unit.FARAD, Unit.VOLT]))
def test_what_is_shown_is_read_back_to_the_digits_shown(value: float, unit: Unit) -> None:
    assert parse(show(value, unit), unit) == pytest.approx(value, rel=1e-5)  # six digits


@laws
@given(st.floats(-273, 500), st.floats(0, 10))
def test_temperatures_and_percentages_are_read_back_too(celsius: float, fraction: float) -> None:
    assert parse(show(celsius, Unit.CELSIUS), Unit.CELSIUS) == pytest.approx(celsius, rel=1e-5, abs=1e-300)
    assert parse(show(fraction, Unit.PERCENT), Unit.PERCENT) == pytest.approx(fraction, rel=1e-5, abs=1e-300)


@pytest.mark.parametrize(
    ("value", "unit", "text"),
    [
        (10e-12, Unit.SECOND, "10 ps"),
        (5e-15, Unit.FARAD, "5 fF"),
        (1.2, Unit.VOLT, "1.2 V"),
        (0.1, Unit.PERCENT, "10 %"),
        (-40.0, Unit.CELSIUS, "-40 C"),
    ],
)
def test_a_number_is_shown_short(value: float, unit: Unit, text: str) -> None:
    assert show(value, unit) == text
