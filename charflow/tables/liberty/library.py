"""Run folders as Liberty libraries: one text a corner, cells of all folders in it.

Units are those of the rows: ps, fF, V; so energies are in fJ.
"""

from __future__ import annotations

import tomllib
from collections.abc import Sequence
from dataclasses import dataclass, field
from pathlib import Path

from charflow import __version__
from charflow.errors import FolderError, InputError
from charflow.plan.behaviour import behaviour_of
from charflow.sheet import Role, Sheet
from charflow.sheet.read import sheet_from
from charflow.tables.folder import Tables, read_tables
from charflow.tables.liberty.bus import BusTypes
from charflow.tables.liberty.cell import CellFacts, cell_block
from charflow.tables.liberty.check import liberty_check
from charflow.tables.liberty.lookup import Gaps, Templates
from charflow.tables.liberty.power import PowerWriter
from charflow.tables.liberty.syntax import Block, Complex, Simple, render
from charflow.tables.liberty.timing import Writer
from charflow.tables.power import PowerRow, read_power
from charflow.tables.text import CAUTION


@dataclass(frozen=True)
class Measured:
    """A run folder read back: its sheet (files it names are not looked at) and its tables."""

    folder: Path
    sheet: Sheet
    tables: Tables
    power: tuple[PowerRow, ...] = ()


@dataclass(frozen=True)
class Library:
    """The text of one library, and what was left out of it."""

    name: str
    corner: str
    text: str
    left_out: tuple[str, ...] = field(default=())


def read_measured(folder: Path) -> Measured:
    """Return the sheet and tables of a run folder. Raises :class:`FolderError` where they are missing."""
    tables = read_tables(folder)
    path = folder / "sheet.toml"
    try:
        text = path.read_text(encoding="utf-8")
        raw = tomllib.loads(text)
        raw["cell"] = {k: v for k, v in raw["cell"].items() if k not in ("include_folders", "allow")}
        raw["cell"]["netlist"] = "as measured"  # neither files nor variables need still be there
        raw["corners"] = {
            name: {**corner, "models": ["as measured"]} for name, corner in raw["corners"].items()
        }
    except OSError as error:
        raise FolderError(
            f"the copy of the sheet cannot be read: {error.strerror}",
            where=(str(path),),
            todo="charflow run writes it beside the tables.",
        ) from None
    except (ValueError, KeyError, TypeError, AttributeError) as error:
        raise FolderError(f"this is not the copy of a sheet: {error!r}", where=(str(path),)) from None
    return Measured(folder, sheet_from(raw, path, text), tables, read_power(folder))


def library_texts(folders: Sequence[Path], name: str, *, allow_gaps: bool = False) -> list[Library]:
    """Return the libraries of run ``folders``, one a corner, called ``name_CORNER``.

    Raises :class:`InputError` naming the holes where a table is not whole; with ``allow_gaps`` such a
    table is left out, and ``left_out`` tells of it.
    """
    measured = [read_measured(folder) for folder in folders]
    _check_cells(measured)
    corners = dict.fromkeys(row.corner for item in measured for row in item.tables.rows)
    return [_library(measured, f"{name}_{corner}", corner, Gaps(allow_gaps)) for corner in corners]


def _check_cells(measured: Sequence[Measured]) -> None:
    seen: dict[str, Path] = {}
    for item in measured:
        name = item.tables.cell
        if name in seen:
            raise InputError(
                f"the cell {name!r} is in {seen[name]} and in {item.folder}", todo="Name one of them."
            )
        seen[name] = item.folder
        known = {"", *item.sheet.pins}
        for row in item.tables.rows:
            strange = {row.pin, row.related_pin, row.output} - known
            if strange or row.corner not in item.sheet.corners:
                what = f"pin {strange.pop()!r}" if strange else f"corner {row.corner!r}"
                raise FolderError(
                    f"tables and sheet do not belong together: {what} is not in the sheet",
                    where=(str(item.folder),),
                    todo="Run charflow run SHEET --out DIR again.",
                )


def _library(measured: Sequence[Measured], name: str, corner: str, gaps: Gaps) -> Library:
    types, templates, powers = BusTypes(), Templates(), Templates("power_lut_template", "power_over")
    absent, cells, sheets = [], [], []
    for item in measured:
        rows = tuple(row for row in item.tables.rows if row.corner == corner)
        if not rows:
            absent.append(f"{item.tables.cell}: not measured at corner {corner}")
            continue
        cell = behaviour_of(item.sheet)
        load = round(item.sheet.axes.constraint_load * 1e15, 6)
        writer = Writer(cell, item.tables.cell, load, templates, gaps)
        sheets.append((item.tables.cell, item.sheet))
        power = tuple(row for row in item.power if row.corner == corner)
        facts = CellFacts(item.tables.cell, item.sheet, cell, rows)
        cells.append(cell_block(facts, writer, PowerWriter(item.tables.cell, power, powers, gaps), types))
    gaps.finish()
    shared = (*types.blocks(), *templates.blocks(), *powers.blocks())
    block = Block("library", (name,), (*_header(sheets, corner), *shared, *cells))
    problems = liberty_check(block)
    if problems:
        raise InputError(
            "the library would be wrong:\n    " + "\n    ".join(problems[:8]), where=(f"corner {corner!r}",)
        )
    return Library(name, corner, render(block), (*absent, *gaps.found))


def _header(sheets: Sequence[tuple[str, Sheet]], corner: str) -> tuple[Simple | Complex | Block, ...]:
    first_name, first = sheets[0]
    at = first.corners[corner]
    for name, sheet in sheets[1:]:
        for what, ours, theirs in (
            ("supply", at.supply, sheet.corners[corner].supply),
            ("temperature", at.temperature, sheet.corners[corner].temperature),
            ("slew_fractions", first.measure.slew_fractions, sheet.measure.slew_fractions),
        ):
            if ours != theirs:
                raise InputError(
                    f"{what} of corner {corner!r} is {ours} in {first_name} and {theirs} in {name}",
                    todo="One library holds one condition; write them apart.",
                )
    low, high = (100 * fraction for fraction in first.measure.slew_fractions)
    condition = (Simple("process", 1.0), Simple("voltage", at.supply), Simple("temperature", at.temperature))
    return (
        Complex("technology", ("cmos",)),
        Simple("delay_model", "table_lookup"),
        Simple("comment", f"Measured by charflow {__version__} in ngspice. {CAUTION}"),
        Simple("time_unit", "1ps"),
        Simple("voltage_unit", "1V"),
        Simple("current_unit", "1uA"),
        Simple("pulling_resistance_unit", "1kohm"),
        Simple("leakage_power_unit", "1pW"),
        Complex("capacitive_load_unit", (1.0, "ff")),
        *_thresholds(low, high),
        Simple("slew_derate_from_library", 1.0),
        *(Simple(f"nom_{item.name}", item.value) for item in condition),
        *_voltages([sheet for _, sheet in sheets], at.supply),
        Block("operating_conditions", (corner,), condition),
        Simple("default_operating_conditions", corner),
    )


def _thresholds(low: float, high: float) -> tuple[Simple, ...]:
    low, high = round(low, 9), round(high, 9)
    return (
        *(Simple(f"{way}put_threshold_pct_{e}", 50.0) for way in ("in", "out") for e in ("rise", "fall")),
        *(Simple(f"slew_lower_threshold_pct_{e}", low) for e in ("rise", "fall")),
        *(Simple(f"slew_upper_threshold_pct_{e}", high) for e in ("rise", "fall")),
    )


def _voltages(sheets: Sequence[Sheet], supply: float) -> tuple[Complex, ...]:
    volts: dict[str, float] = {}
    for role, value in ((Role.POWER, supply), (Role.GROUND, 0.0)):
        for pin in (pin for sheet in sheets for pin in sheet.with_role(role)):
            if volts.setdefault(pin, value) != value:
                raise InputError(f"{pin} is a supply in one cell and a ground in another")
    return tuple(Complex("voltage_map", pair) for pair in volts.items())
