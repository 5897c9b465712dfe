"""One side of a comparison: a run folder or a ``tables.csv``, read with what it says of its conditions."""

from __future__ import annotations

from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

from charflow.errors import InputError
from charflow.sheet.units import Unit, parse
from charflow.tables.flat import Row, from_csv
from charflow.tables.folder import MAX_BYTES, read_tables

_DEFINING = ("pushout", "slew_fractions", "constraint_load_ff")  # other values answer another question


@dataclass(frozen=True)
class Side:
    """Rows and where they come from; a CSV file alone does not say its ``cell`` and ``facts``."""

    name: str
    rows: tuple[Row, ...]
    cell: str = ""
    facts: dict[str, Any] = field(default_factory=dict)


def read_side(path: Path) -> Side:
    """Return what the run folder or CSV file ``path`` holds.

    Raises :class:`InputError` where it is neither or cannot be read.
    """
    try:
        is_folder = path.is_dir()
    except (OSError, ValueError) as error:
        raise InputError(f"the path cannot be followed: {error}", where=(repr(str(path)),)) from None
    if is_folder:
        tables = read_tables(path)
        return Side(str(path), tables.rows, tables.cell, tables.facts)
    return Side(str(path), from_csv(_text(path), str(path)))


def _text(path: Path) -> str:
    try:
        if not path.is_file() and path.exists():
            raise InputError("this is neither a run folder nor a file", where=(str(path),))
        with path.open("rb") as file:
            raw = file.read(MAX_BYTES + 1)
    except FileNotFoundError:
        raise InputError(
            "there is no such run folder or table",
            where=(str(path),),
            todo="Name a folder made by charflow run, or a tables.csv.",
        ) from None
    except (OSError, ValueError) as error:
        reason = getattr(error, "strerror", None) or str(error)
        raise InputError(f"the table cannot be read: {reason}", where=(str(path),)) from None
    if len(raw) > MAX_BYTES:
        raise InputError(f"the table is larger than {MAX_BYTES / 1e6:.0f} MB", where=(str(path),))
    try:
        return raw.decode("utf-8-sig")
    except UnicodeDecodeError:
        raise InputError("the table is not UTF-8 text", where=(str(path),)) from None


def differing_facts(old: Side, new: Side) -> list[tuple[str, object, object]]:
    """Return (what, old, new) for whatever both sides state about themselves and do not agree on."""
    found: list[tuple[str, object, object]] = []
    if old.cell and new.cell and old.cell != new.cell:
        found.append(("cell", old.cell, new.cell))
    for name in (*_DEFINING, "ngspice", "charflow"):
        if name in old.facts and name in new.facts and old.facts[name] != new.facts[name]:
            found.append((name.removesuffix("_ff").replace("_", " "), old.facts[name], new.facts[name]))
    corners = old.facts.get("corners"), new.facts.get("corners")
    if isinstance(corners[0], dict) and isinstance(corners[1], dict):
        for corner in [name for name in corners[0] if name in corners[1]]:
            found += _conditions(corner, corners[0][corner], corners[1][corner])
    return found


def _conditions(corner: str, old: Any, new: Any) -> list[tuple[str, object, object]]:
    if not isinstance(old, dict) or not isinstance(new, dict):
        return []
    names = ("models", "supply_v", "temperature_c")
    return [
        (f"{name.partition('_')[0]} of corner {corner}", _plainly(old[name]), _plainly(new[name]))
        for name in names
        if name in old and name in new and old[name] != new[name]
    ]


def _plainly(value: object) -> object:
    return ", ".join(map(str, value)) if isinstance(value, list) else value


def limit_of(text: str) -> float:
    """Return a limit such as ``"2%"``, ``"2 %"`` or ``"2"`` (per cent) as a fraction.

    Raises :class:`InputError` for anything else.
    """
    stated = text.strip()
    limit = parse(stated if stated.endswith("%") else f"{stated} %", Unit.PERCENT)
    if limit < 0:
        raise InputError(f"a limit of {text} can hold nothing", todo="Write for example --limit 2%.")
    return limit


def floor_of(text: str) -> float:
    """Return a floor such as ``"10 ps"`` in ps. Raises :class:`InputError` below 1 fs and above 1 ms."""
    floor = parse(text, Unit.SECOND) * 1e12
    if not 1e-3 <= floor <= 1e9:
        raise InputError(
            f"a floor of {text} is not between 1 fs and 1 ms", todo='Write for example --floor "10 ps".'
        )
    return floor
