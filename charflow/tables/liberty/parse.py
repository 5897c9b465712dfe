"""Liberty text of anybody's as the tree of :mod:`charflow.tables.liberty.syntax`, through liberty-parser."""

from __future__ import annotations

from pathlib import Path
from typing import Any

from charflow.errors import InputError
from charflow.tables.liberty.syntax import Block, Complex, Simple, Value

_LARGEST = 256 * 2**20  # bytes; a foundry's whole library has about 100 MB


def parse_library(path: Path, cell: str | None = None) -> Block:
    """Return the library in the Liberty file ``path``; of its cells only ``cell``, where one is named.

    Raises :class:`InputError` where the file cannot be read or parsed, and where the registry package
    liberty-parser, which does the parsing, is not installed.
    """
    try:
        from liberty.parser import LibertyParser
    except ImportError:
        raise InputError(
            "reading a Liberty file needs the package liberty-parser",
            where=(str(path),),
            todo="Install it: pip install liberty-parser",
        ) from None
    try:
        if path.stat().st_size > _LARGEST:
            raise InputError(f"the file is larger than {_LARGEST / 1e6:.0f} MB", where=(str(path),))
        text = path.read_bytes().decode("utf-8", "replace")
    except OSError as error:
        raise InputError(f"the file cannot be read: {error.strerror}", where=(str(path),)) from None
    try:
        parser = LibertyParser()
        if cell is not None:
            parser.set_cell_name_filter(lambda name: str(_value(name)) == cell)
        block = _block(parser.parse_liberty(text))
    except Exception as error:  # the parser raises many kinds, assertions and index errors among them
        words = " ".join(str(error).split()) or type(error).__name__
        raise InputError(f"this is not Liberty text: {words[:200]}", where=(str(path),)) from None
    if block.name != "library":
        raise InputError(f"this holds a group {block.name!r}, expected a library", where=(str(path),))
    return block


def _block(group: Any) -> Block:
    items: list[Simple | Complex | Block] = []
    for attribute in group.attributes:
        if isinstance(attribute.value, list):
            items.append(Complex(attribute.name, tuple(map(_value, attribute.value))))
        else:
            items.append(Simple(attribute.name, _value(attribute.value)))
    items += [_block(inner) for inner in group.groups]
    return Block(str(group.group_name), tuple(str(_value(a)) for a in group.args), tuple(items))


def _value(raw: Any) -> Value:
    if isinstance(raw, bool):
        return raw
    if isinstance(raw, int | float):
        return float(raw)
    text = str(getattr(raw, "value", raw)) if type(raw).__name__ == "EscapedString" else str(raw)
    text = text.strip('"') if type(raw).__name__ == "ArithExpression" else text
    return {"true": True, "false": False}.get(text, text.replace('\\"', '"'))
