"""TOML text to :class:`Sheet`: paths resolved, environment variables filled in, mistakes explained."""

from __future__ import annotations

import os
import re
import tomllib
from difflib import get_close_matches
from pathlib import Path
from typing import Any, get_args

from pydantic import BaseModel, ValidationError

from charflow.errors import SheetError
from charflow.sheet.schema import Axes, Cell, Corner, Measure, Pin, Role, Sheet

_MAX_BYTES = 1_000_000
_MAX_DOTS = 300  # in a line; reading a key of thousands of parts takes gigabytes
_TABLES: dict[str, type[BaseModel]] = {
    "cell": Cell,
    "pins": Pin,
    "corners": Corner,
    "axes": Axes,
    "measure": Measure,
}
_PER_NAME = ("pins", "corners")  # tables whose keys are the user's own names


def read_sheet(path: Path | str) -> Sheet:
    """Return the validated sheet in the TOML file ``path``.

    Relative paths in it are taken from the sheet's own folder. Raises :class:`SheetError` naming the
    file, the line where it can be told, the key, what was found and what was expected.
    """
    path = Path(path)
    text = _read_text(path)
    for number, line in enumerate(text.splitlines(), start=1):
        if line.count(".") > _MAX_DOTS and not line.lstrip().startswith("#"):
            raise SheetError("this nests too deeply to be a sheet", where=(f"{path}:{number}",))
    try:
        raw = tomllib.loads(text)
    except tomllib.TOMLDecodeError as error:
        raise SheetError(f"this is not TOML: {error}", where=(str(path),), todo=_TODO_TOML) from None
    except RecursionError:
        raise SheetError("this nests too deeply to be a sheet", where=(str(path),)) from None
    return sheet_from(raw, path, text)


_TODO_TOML = 'A sheet has tables such as [cell] and lines such as netlist = "my_cell.spice".'


def sheet_from(raw: dict[str, Any], path: Path, text: str = "") -> Sheet:
    """Return the validated sheet for parsed TOML ``raw``; ``path`` and ``text`` serve errors and paths."""
    for table in raw:
        if table not in _TABLES:
            raise _unknown(path, text, (table,), tuple(_TABLES))
    prepared = dict(raw)
    try:
        if isinstance(raw.get("cell"), dict):
            prepared["cell"] = _with_paths(raw["cell"], ("netlist", "include_folders"), path.parent)
        if isinstance(raw.get("corners"), dict):
            prepared["corners"] = {
                name: _with_models(corner, path.parent) for name, corner in raw["corners"].items()
            }
    except SheetError as error:
        raise error.at(str(path)) from None
    try:
        return Sheet.model_validate({**prepared, "path": path})
    except ValidationError as error:
        raise _explain(error, path, text) from None


def _read_text(path: Path) -> str:
    try:
        if path.stat().st_size > _MAX_BYTES:
            raise SheetError(f"the file is larger than {_MAX_BYTES:,} bytes", where=(str(path),))
        return path.read_bytes().decode("utf-8")
    except UnicodeDecodeError:
        raise SheetError("the file is not UTF-8 text", where=(str(path),)) from None
    except FileNotFoundError:
        raise SheetError(
            "there is no such sheet",
            where=(str(path),),
            todo="Check the name, or see the README for a first one.",
        ) from None
    except (OSError, ValueError) as error:
        reason = getattr(error, "strerror", None) or str(error)
        raise SheetError(f"the sheet cannot be read: {reason}", where=(str(path),)) from None


def expand(text: str) -> str:
    """Return ``text`` with each ``${NAME}`` replaced from the environment; unset names are errors."""

    def value(match: re.Match[str]) -> str:
        name = match.group(1)
        if name not in os.environ:
            raise SheetError(
                f"the environment has no variable {name!r}, which {text!r} uses",
                todo=f"Set it before running, for example: export {name}=/path/to/files",
            )
        return os.environ[name]

    return re.sub(r"\$\{(\w+)\}", value, text)


def _absolute(text: str, folder: Path) -> str:
    path = Path(expand(text))
    try:
        path = path.expanduser()
    except RuntimeError:
        raise SheetError(f"{text!r} names the home folder of a user there is not") from None
    return os.path.normpath(folder.absolute() / path)


def _with_paths(table: dict[str, Any], keys: tuple[str, ...], folder: Path) -> dict[str, Any]:
    done = dict(table)
    for key in keys:
        value = table.get(key)
        if isinstance(value, str):
            done[key] = _absolute(value, folder)
        elif isinstance(value, list) and all(isinstance(item, str) for item in value):
            done[key] = [_absolute(item, folder) for item in value]
    return done


def _with_models(corner: Any, folder: Path) -> Any:
    if not isinstance(corner, dict) or not isinstance(corner.get("models"), list):
        return corner
    models = []
    for entry in corner["models"]:
        if not isinstance(entry, str):
            return corner
        file, colon, section = expand(entry).rpartition(":")
        if not colon or not re.fullmatch(r"[\w.+-]+", section):
            file, section = expand(entry), ""
        models.append(_absolute(file, folder) + (f":{section}" if section else ""))
    return {**corner, "models": models}


def _explain(error: ValidationError, path: Path, text: str) -> SheetError:
    """Turn one of pydantic's complaints into one sentence about the user's own line."""
    found = error.errors(include_url=False)
    first = next((one for one in found if one["type"] == "extra_forbidden"), found[0])  # a misspelt key
    loc = tuple(str(part) for part in first["loc"])
    model = _TABLES.get(loc[0]) if loc else None
    key = loc[-1] if loc else ""
    kind = first["type"]
    if kind == "extra_forbidden" and model is not None:
        return _unknown(path, text, loc, tuple(model.model_fields))
    if kind == "missing":
        what = "table" if len(loc) == 1 else "key"
        return SheetError(f"the {what} {_dotted(loc)} is missing", where=_place(path, text, loc[:-1]))
    if kind == "enum" and key == "role":
        return _unknown(path, text, (*loc, str(first["input"])), tuple(role.value for role in Role))
    if kind == "too_short":
        return SheetError(
            f"{_dotted(loc)} is empty; it needs at least one entry", where=_place(path, text, loc)
        )
    message = str(first["msg"]).removeprefix("Value error, ")
    if kind != "value_error":
        message = f"{message[0].lower()}{message[1:]}, found {_shorten(first.get('input'))}"
    if kind == "literal_error" and model is not None:
        allowed = (
            get_args(get_args(model.model_fields[key].annotation)[0]) if key in model.model_fields else ()
        )
        message = f"expected one of {', '.join(map(str, allowed))}, found {_shorten(first.get('input'))}"
    return SheetError(f"{_dotted(loc)}: {message}" if loc else message, where=_place(path, text, loc))


def _unknown(path: Path, text: str, loc: tuple[str, ...], known: tuple[str, ...]) -> SheetError:
    key = loc[-1]
    near = get_close_matches(key.lower(), known, n=1, cutoff=0.5)
    hint = f"Did you mean {near[0]!r}?" if near else f"Known here: {', '.join(known)}."
    what = "role" if len(loc) > 1 and loc[-2] == "role" else "key" if len(loc) > 1 else "table"
    name = key if what == "role" else _dotted(loc)
    return SheetError(f"unknown {what} {name!r}", where=_place(path, text, loc), todo=hint)


def _dotted(loc: tuple[str, ...]) -> str:
    return ".".join(loc)


def _shorten(value: Any) -> str:
    shown = repr(value)
    return shown if len(shown) <= 60 else shown[:57] + "..."


def _place(path: Path, text: str, loc: tuple[str, ...]) -> tuple[str, ...]:
    line = _line_of(text, loc)
    return (f"{path}:{line}",) if line else (str(path),)


def _line_of(text: str, loc: tuple[str, ...]) -> int | None:
    """Return the line of the last part of ``loc`` that can be found after the parts before it."""
    found, start = None, 0
    lines = text.splitlines()
    for part in loc:
        pattern = re.compile(
            rf"(^\s*\[+[^\]#]*\b{re.escape(part)}\b|^\s*\"?{re.escape(part)}\"?\s*=|[{{,]\s*{re.escape(part)}\s*=)"
        )
        for number in range(start, len(lines)):
            if pattern.search(lines[number]):
                found, start = number + 1, number
                break
    return found
