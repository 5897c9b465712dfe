"""One row a number, in the columns of ``tables.csv``; times in picoseconds, loads in femtofarads."""

from __future__ import annotations

import csv
import io
from collections.abc import Iterable, Mapping
from dataclasses import dataclass, fields

from charflow.errors import InputError
from charflow.plan.arcs import Kind
from charflow.solve.answer import Answer


@dataclass(frozen=True)
class Row:
    """A table entry as text-friendly values. Empty text or None where a column does not apply."""

    corner: str
    quantity: str
    pin: str
    pin_edge: str
    related_pin: str
    related_edge: str
    output: str
    output_edge: str
    when: str
    clock_slew_ps: float | None
    data_slew_ps: float | None
    load_ff: float
    value_ps: float | None
    bracket_ps: float | None
    status: str
    transients: int
    key: str


COLUMNS = tuple(field.name for field in fields(Row))
_NUMBERS = {"clock_slew_ps", "data_slew_ps", "load_ff", "value_ps", "bracket_ps"}
_ALWAYS = {"load_ff", "transients"}
_LARGEST = 1e15


def row_of(answer: Answer) -> Row:
    """Return the flat row of ``answer``: ps and fF, values to 0.1 fs."""
    return Row(
        corner=answer.corner,
        quantity=answer.quantity.value,
        pin=answer.pin,
        pin_edge=answer.pin_edge,
        related_pin=answer.related_pin,
        related_edge=answer.related_edge,
        output=answer.output,
        output_edge=answer.output_edge,
        when=answer.when,
        clock_slew_ps=None if answer.clock_slew is None else _scaled(answer.clock_slew, 1e12, 6),
        data_slew_ps=None if answer.data_slew is None else _scaled(answer.data_slew, 1e12, 6),
        load_ff=_scaled(answer.load, 1e15, 6),
        value_ps=None if answer.value is None else _scaled(answer.value, 1e12, 4),
        bracket_ps=None if answer.bracket is None else _scaled(answer.bracket, 1e12, 4),
        status=answer.status,
        transients=answer.transients,
        key=answer.key,
    )


def _scaled(value: float, factor: float, digits: int) -> float:
    return round(value * factor, digits) + 0.0


def to_csv(rows: Iterable[Row]) -> str:
    """Return the rows as CSV text with a header line."""
    buffer = io.StringIO()
    writer = csv.writer(buffer, lineterminator="\n")
    writer.writerow(COLUMNS)
    for row in rows:
        writer.writerow([_text(getattr(row, name)) for name in COLUMNS])
    return buffer.getvalue()


def _text(value: object) -> str:
    if value is None:
        return ""
    return f"{value:.15g}" if isinstance(value, float) else str(value)


def from_csv(text: str, origin: str) -> tuple[Row, ...]:
    """Return the rows in CSV ``text``. Raises :class:`InputError` naming ``origin``, line and column."""
    try:
        lines = list(csv.reader(io.StringIO(text), strict=True))
    except csv.Error as error:
        raise InputError(f"this is not CSV: {error}", where=(origin,)) from None
    if not lines or tuple(lines[0]) != COLUMNS:
        raise InputError(
            "this is not a table of charflow: its first line does not name the columns",
            where=(origin,),
            todo=f"Expected {','.join(COLUMNS)}",
        )
    rows = []
    for number, line in enumerate(lines[1:], start=2):
        if len(line) != len(COLUMNS):
            raise InputError(f"{len(line)} columns, expected {len(COLUMNS)}", where=(f"{origin}:{number}",))
        rows.append(_row(dict(zip(COLUMNS, line, strict=True)), f"{origin}:{number}"))
    return tuple(rows)


def _row(cells: dict[str, str], place: str) -> Row:
    values: dict[str, object] = dict(cells)
    for name in (*_NUMBERS, "transients"):
        text = cells[name]
        try:
            values[name] = None if text == "" else int(text) if name == "transients" else float(text)
        except ValueError:
            raise InputError(f"{name}: {text!r} is not a number", where=(place,)) from None
    return row_from(values, place)


def row_from(values: Mapping[str, object], place: str) -> Row:
    """Return the row of ``values`` by column. Raises :class:`InputError` naming ``place`` and column."""
    for name in COLUMNS:
        if name not in values:
            raise InputError(f"the column {name} is missing", where=(place,))
        value = values[name]
        if name == "transients" or name in _NUMBERS:
            _check_number(name, value, place)
        elif not isinstance(value, str):
            raise InputError(f"{name}: {value!r} is not text", where=(place,))
    if values["quantity"] not in {kind.value for kind in Kind}:
        raise InputError(f"quantity: {values['quantity']!r} is not known", where=(place,))
    return Row(**{name: values[name] for name in COLUMNS})  # type: ignore[arg-type]  # each was just checked


def _check_number(name: str, value: object, place: str) -> None:
    if value is None:
        if name in _ALWAYS:
            raise InputError(f"{name} is empty", where=(place,))
    elif isinstance(value, bool) or not isinstance(value, int if name == "transients" else int | float):
        raise InputError(f"{name}: {value!r} is not a number", where=(place,))
    elif not abs(value) < _LARGEST:
        raise InputError(f"{name}: {value!r} is not a finite number", where=(place,))
