"""The tables of a run folder: written, and read back."""

from __future__ import annotations

import json
import os
from collections.abc import Sequence
from contextlib import suppress
from dataclasses import asdict, dataclass
from pathlib import Path
from typing import Any

from charflow import __version__
from charflow.campaign.run import RunResult
from charflow.errors import FolderError
from charflow.sheet import Sheet
from charflow.sheet.units import Unit, show
from charflow.solve.certificate import Certificate
from charflow.tables.certificate import facts_of, refinement_facts, refinement_words
from charflow.tables.certificate import to_csv as certificate_csv
from charflow.tables.flat import Row, row_from, row_of, to_csv
from charflow.tables.text import CAUTION, to_markdown

FORMAT = 1
MAX_BYTES = 32 * 2**20  # of a file with tables; one of 2,000 values has one


@dataclass(frozen=True)
class Tables:
    """What a run folder holds: the cell's name, lines about its conditions, facts for machines, and rows."""

    cell: str
    conditions: tuple[str, ...]
    facts: dict[str, Any]
    rows: tuple[Row, ...]


def tables_of(sheet: Sheet, result: RunResult) -> Tables:
    """Return the tables of ``result``."""
    rows = tuple(row_of(answer) for answer in result.answers)
    corners = {
        name: {
            "models": [Path(spec).name for spec in corner.models],
            "supply_v": corner.supply,
            "temperature_c": corner.temperature,
            **_proved(result, name),
        }
        for name, corner in sheet.corners.items()
        if any(row.corner == name for row in rows)
    }
    low, high = sheet.measure.slew_fractions
    facts: dict[str, Any] = {
        "charflow": __version__,
        "ngspice": result.version,
        "corners": corners,
        "pushout": sheet.measure.pushout,
        "slew_fractions": [low, high],
        "constraint_load_ff": sheet.axes.constraint_load * 1e15,
    }
    if result.certificates:
        facts["certificate"] = facts_of(result.certificates)
    if result.refinement is not None:
        facts["refinement"] = refinement_facts(result.refinement)
    name = sheet.cell.subckt or sheet.cell.netlist.stem
    conditions = _conditions(sheet, corners)
    if "refinement" in facts:
        conditions.append(refinement_words(facts["refinement"]))
    return Tables(name, tuple(conditions), facts, rows)


def _proved(result: RunResult, corner: str) -> dict[str, Any]:
    """Return what preparing a corner showed: rest, settings, and what they leave uncertain."""
    rest, accuracy = result.rests[corner], result.accuracy[corner]
    proof = result.proofs.get(corner)
    return {
        "models_proved": proof.words if proof else "pruned models: not compared, the run was cut short",
        "bench": result.benches[corner],
        "rest_s": rest.seconds,
        "rest_doubled_moved": rest.moved,
        "flips_checked": rest.flips,
        "reltol": accuracy.settings.reltol,
        "method": accuracy.settings.method,
        "delays_converged_to_fraction": accuracy.delay_share,
        "constraints_converged_to_ps": accuracy.constraint * 1e12,
    }


def _conditions(sheet: Sheet, corners: dict[str, Any]) -> list[str]:
    low, high = sheet.measure.slew_fractions
    lines = [
        f"corner {name}: {', '.join(facts['models'])}, {facts['supply_v']:g} V, {facts['temperature_c']:g} C"
        for name, facts in corners.items()
    ]
    lines.append(
        f"delays and offsets from 50 % to 50 % of supply; "
        f"slews and transitions between {low:.0%} and {high:.0%}"
    )
    load = show(sheet.axes.constraint_load, Unit.FARAD)
    lines.append(
        f"setup and hold: the offset at which clock-to-output delay has grown by {sheet.measure.pushout:g} "
        f"of its relaxed value, or capture fails before that; outputs loaded with {load}"
    )
    return lines


def write_tables(folder: Path, tables: Tables, certificates: Sequence[Certificate] = ()) -> None:
    """Write ``tables.csv``, ``tables.json`` and ``tables.md`` into ``folder``, each whole or not at all.

    With ``certificates`` there is ``certificate.csv`` too; else one of an earlier run is removed.
    """
    write_whole(folder / "tables.csv", to_csv(tables.rows))
    write_whole(folder / "tables.json", to_json(tables))
    write_whole(folder / "tables.md", to_markdown(tables.cell, tables.conditions, tables.rows, tables.facts))
    if certificates:
        write_whole(folder / "certificate.csv", certificate_csv(certificates))
    else:
        (folder / "certificate.csv").unlink(missing_ok=True)


def write_timing(folder: Path, report: dict[str, Any]) -> None:
    """Write ``timing.json``."""
    write_whole(folder / "timing.json", json.dumps(report, indent=1) + "\n")


def keep_sheet(folder: Path, text: str) -> None:
    """Write the copy of the sheet, as it was read, into the run folder."""
    write_whole(folder / "sheet.toml", text)


def to_json(tables: Tables) -> str:
    """Return the tables as JSON text."""
    content = {
        "format": FORMAT,
        "cell": tables.cell,
        "caution": CAUTION,
        "conditions": list(tables.conditions),
        "facts": tables.facts,
        "rows": [asdict(row) for row in tables.rows],
    }
    return json.dumps(content, indent=1) + "\n"


def read_tables(folder: Path) -> Tables:
    """Return the tables of a run folder. Raises :class:`FolderError` where there are none."""
    path = folder / "tables.json"
    try:
        with path.open("rb") as file:
            content = file.read(MAX_BYTES + 1)
        if len(content) > MAX_BYTES:
            raise FolderError(f"the file is larger than {MAX_BYTES / 1e6:.0f} MB", where=(str(path),))
        raw = json.loads(content.decode("utf-8"))
        if raw["format"] != FORMAT:
            raise FolderError(
                f"tables of format {raw['format']!r}, this charflow reads {FORMAT}", where=(str(path),)
            )
        rows = tuple(row_from(dict(row), f"{path}: row {n}") for n, row in enumerate(raw["rows"], start=1))
        return Tables(str(raw["cell"]), tuple(map(str, raw["conditions"])), dict(raw["facts"]), rows)
    except FileNotFoundError:
        raise FolderError(
            "the folder holds no tables",
            where=(str(folder),),
            todo="Make them with charflow run SHEET --out DIR.",
        ) from None
    except (ValueError, KeyError, TypeError, RecursionError) as error:
        raise FolderError(f"the tables cannot be read: {error!r}", where=(str(path),)) from None
    except OSError as error:
        raise FolderError(f"the tables cannot be read: {error.strerror}", where=(str(path),)) from None


def write_whole(path: Path, text: str) -> None:
    """Write ``text`` to ``path``, whole or not at all. Raises :class:`FolderError` where it cannot."""
    part = path.with_name(f".{path.name}.part")
    try:
        part.write_text(text, encoding="utf-8")
        os.replace(part, path)  # noqa: PTH105  # atomic on one file system
    except OSError as error:
        with suppress(OSError):
            part.unlink(missing_ok=True)
        raise FolderError(f"the file cannot be written: {error.strerror}", where=(str(path),)) from None


def failures(rows: Sequence[Row]) -> int:
    """Return how many rows have no value."""
    return sum(row.value_ps is None for row in rows)
