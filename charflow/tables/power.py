"""Capacitance, energy and leakage as flat rows: ``power.csv``, each value with its unit."""

from __future__ import annotations

import csv
import io
import math
from collections.abc import Iterable, Sequence
from dataclasses import dataclass, fields
from pathlib import Path

from charflow.errors import FolderError, InputError
from charflow.sheet import Sheet
from charflow.solve.power import Power
from charflow.tables.folder import read_tables, write_whole

FILE = "power.csv"
_UNITS = {"capacitance": ("fF", 1e15), "energy": ("fJ", 1e15), "leakage": ("pW", 1e12)}


@dataclass(frozen=True)
class PowerRow:
    """An entry as text-friendly values. Empty text or None where a column does not apply.

    ``value`` is in ``unit``, the mean of what lies between ``low`` and ``high``.
    """

    corner: str
    quantity: str
    pin: str
    pin_edge: str
    output: str
    output_edge: str
    when: str
    slew_ps: float | None
    load_ff: float | None
    value: float | None
    unit: str
    low: float | None
    high: float | None
    status: str
    transients: int


COLUMNS = tuple(field.name for field in fields(PowerRow))
_NUMBERS = ("slew_ps", "load_ff", "value", "low", "high")


def power_row(power: Power) -> PowerRow:
    """Return the flat row of ``power``: fF, fJ or pW to six digits."""
    unit, factor = _UNITS[power.quantity.partition("_")[0]]

    def scaled(value: float | None, by: float) -> float | None:
        return None if value is None else float(f"{value * by:.6g}") + 0.0

    return PowerRow(
        corner=power.corner,
        quantity=power.quantity,
        pin=power.pin,
        pin_edge=power.pin_edge,
        output=power.output,
        output_edge=power.output_edge,
        when=power.when,
        slew_ps=scaled(power.slew, 1e12),
        load_ff=scaled(power.load, 1e15),
        value=scaled(power.value, factor),
        unit=unit,
        low=scaled(power.low, factor),
        high=scaled(power.high, factor),
        status=power.status,
        transients=power.transients,
    )


def power_csv(rows: Iterable[PowerRow]) -> str:
    """Return the rows as CSV text with a header line."""
    buffer = io.StringIO()
    writer = csv.writer(buffer, lineterminator="\n")
    writer.writerow(COLUMNS)
    for row in rows:
        values = (getattr(row, name) for name in COLUMNS)
        writer.writerow(["" if v is None else f"{v:.10g}" if isinstance(v, float) else v for v in values])
    return buffer.getvalue()


def write_power(folder: Path, rows: Iterable[PowerRow]) -> None:
    """Write ``power.csv`` into ``folder``, whole or not at all."""
    write_whole(folder / FILE, power_csv(rows))


def read_power(folder: Path) -> tuple[PowerRow, ...]:
    """Return the rows of ``power.csv`` in ``folder``, none where there is no such file.

    Raises :class:`InputError` naming line and column where it is damaged.
    """
    path = folder / FILE
    try:
        text = path.read_text(encoding="utf-8")
    except FileNotFoundError:
        return ()
    except (OSError, ValueError) as error:
        raise FolderError(f"the table cannot be read: {error}", where=(str(path),)) from None
    lines = list(csv.reader(io.StringIO(text)))
    if not lines or tuple(lines[0]) != COLUMNS:
        raise InputError("the first line does not name the columns of power.csv", where=(str(path),))
    return tuple(_row(line, f"{path}:{number}") for number, line in enumerate(lines[1:], start=2))


def _row(line: list[str], place: str) -> PowerRow:
    if len(line) != len(COLUMNS):
        raise InputError(f"{len(line)} columns, expected {len(COLUMNS)}", where=(place,))
    values: dict[str, object] = dict(zip(COLUMNS, line, strict=True))
    try:
        for name in _NUMBERS:
            values[name] = float(str(values[name])) if values[name] != "" else None
            if values[name] is not None and not math.isfinite(float(str(values[name]))):
                raise InputError(f"{name} is no finite number", where=(place,))
        values["transients"] = int(str(values["transients"]))
    except ValueError as error:
        raise InputError(f"{error}", where=(place,)) from None
    if str(values["quantity"]).partition("_")[0] not in _UNITS:
        raise InputError(f"quantity: {values['quantity']!r} is not known", where=(place,))
    return PowerRow(**values)  # type: ignore[arg-type]  # numbers were just made of them


def rests_of(folder: Path, sheet: Sheet) -> dict[str, float]:
    """Return how long [s] the run in ``folder`` let the cell of ``sheet`` rest at each corner it measured.

    Raises :class:`FolderError` where the folder holds the run of another cell, or does not say.
    """
    tables = read_tables(folder)
    name = sheet.cell.subckt or sheet.cell.netlist.stem
    if tables.cell != name:
        raise FolderError(f"the folder holds a run of {tables.cell!r}, not of {name!r}", where=(str(folder),))
    corners = tables.facts.get("corners")
    try:
        rests = {str(name): float(facts["rest_s"]) for name, facts in dict(corners or {}).items()}
    except (TypeError, KeyError, ValueError):
        rests = {}
    known = {name: rest for name, rest in rests.items() if name in sheet.corners}
    if not known:
        raise FolderError(
            "the tables do not say how long the cell rested",
            where=(str(folder),),
            todo="Run charflow run SHEET --out DIR first.",
        )
    return known


def power_summary(rows: Sequence[PowerRow]) -> list[str]:
    """Return what people ask first: capacitances, mean and worst leakage, what has no value."""
    lines = []
    for row in rows:
        if row.value is None:
            lines.append(f"{row.corner}: no {row.quantity} of {row.pin or 'the cell'}: {row.status}")
        elif row.quantity == "capacitance":
            lines.append(
                f"{row.corner}: capacitance of {row.pin}, {row.pin_edge}: {row.value:.3f} fF "
                f"({row.low:.3f} to {row.high:.3f} over the settled states)"
            )
        elif row.quantity in ("leakage_mean", "leakage_worst"):
            lines.append(f"{row.corner}: {row.quantity.replace('_', ', ')}: {row.value:.4g} pW")
    energies = sum(row.quantity == "energy" for row in rows)
    return [*lines, f"{energies} energies; all of it in power.csv"]
