"""The tree of a Liberty file and its text: groups of simple attributes, complex attributes and groups."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass

from charflow.errors import InputError

Value = str | float | bool


@dataclass(frozen=True)
class Simple:
    """``name : value ;``, text in quotes."""

    name: str
    value: Value


@dataclass(frozen=True)
class Complex:
    """``name (value, ...) ;``, text in quotes; ``lines`` puts each value on a line of its own."""

    name: str
    values: tuple[Value, ...]
    lines: bool = False


@dataclass(frozen=True)
class Block:
    """``name (argument, ...) { ... }``; ``items`` keep their order."""

    name: str
    arguments: tuple[str, ...]
    items: tuple[Simple | Complex | Block, ...]

    def blocks(self, *names: str) -> Iterator[Block]:
        """Yield the groups directly inside, of the given names or all."""
        return (i for i in self.items if isinstance(i, Block) and (not names or i.name in names))

    def simple(self, name: str) -> Value | None:
        """Return the value of the simple attribute ``name``, None where there is none."""
        return next((i.value for i in self.items if isinstance(i, Simple) and i.name == name), None)

    def text(self, name: str) -> str:
        """Return the simple attribute ``name`` as text, empty where there is none."""
        value = self.simple(name)
        return "" if value is None else number(value) if isinstance(value, float) else str(value)

    def complex(self, name: str) -> tuple[Value, ...] | None:
        """Return the values of the complex attribute ``name``, None where there is none."""
        return next((i.values for i in self.items if isinstance(i, Complex) and i.name == name), None)

    @property
    def argument(self) -> str:
        """The first argument, empty where there is none."""
        return self.arguments[0] if self.arguments else ""


def number(value: float) -> str:
    """Return ``value`` to ten digits, more than any of charflow's numbers has."""
    return f"{value:.10g}"


def render(block: Block, depth: int = 0) -> str:
    """Return the text of ``block``, two spaces a level. Raises :class:`InputError` for an unwritable name."""
    return "\n".join(_lines(block, depth)) + "\n"


def _lines(block: Block, depth: int) -> Iterator[str]:
    pad = "  " * depth
    yield f"{pad}{block.name} ({', '.join(_quoted(text) for text in block.arguments)}) {{"
    for item in block.items:
        if isinstance(item, Block):
            yield from _lines(item, depth + 1)
        elif isinstance(item, Simple):
            yield f"{pad}  {item.name} : {_value(item.value)};"
        elif item.lines:
            inner = f", \\\n{pad}    ".join(map(_value, item.values))
            yield f"{pad}  {item.name} ( \\\n{pad}    {inner} \\\n{pad}  );"
        else:
            yield f"{pad}  {item.name} ({', '.join(map(_value, item.values))});"
    yield f"{pad}}}"


def _value(value: Value) -> str:
    if isinstance(value, bool):
        return "true" if value else "false"
    return _quoted(value) if isinstance(value, str) else number(value)


def _quoted(text: str) -> str:
    if not text.isprintable():
        raise InputError(f"{text!r} holds characters that a Liberty file cannot", todo="Rename it.")
    escaped = text.replace("\\", "\\\\").replace('"', '\\"')
    return f'"{escaped}"'
