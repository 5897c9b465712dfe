"""Logic expressions of a sheet: ``next_state = "SE ? SI : D"``, ``shows = "!state"``.

Operators, loosest first: ``a ? b : c``, or (``|`` or ``+``), exclusive or (``^``), and (``&``, ``*`` or
side by side), not (``!a`` or ``a'``), parentheses, ``0`` and ``1``. The second spellings are those of the
open Liberty standard. Values are True, False or None for unknown.
"""

from __future__ import annotations

import re
from collections.abc import Mapping
from dataclasses import dataclass
from itertools import product

from charflow.errors import SheetError

_TOKEN = re.compile(r"\s*(?:([A-Za-z_][\w.$\[\]<>]*)|([01])|([!'()&|^?:*+]))")
_MAX_LENGTH = 10_000
_MAX_DEPTH = 60
_MAX_TOKENS = 400  # each may make the tree one deeper

Bit = bool | None


@dataclass(frozen=True)
class Logic:
    """A parsed expression. ``text`` is what the user wrote, ``names`` the pins (and states) it reads."""

    text: str
    names: tuple[str, ...]
    _tree: tuple[object, ...]

    @property
    def tree(self) -> tuple[object, ...]:
        """The parsed tree: name, const, not, and, or, xor or choose, each with its operands behind it."""
        return self._tree

    def value(self, levels: Mapping[str, Bit]) -> Bit:
        """Return the value under ``levels``; None where it depends on an unknown level."""
        unknown = [name for name in self.names if levels[name] is None]
        if not unknown:
            return _evaluate(self._tree, levels)
        seen = {
            _evaluate(self._tree, {**levels, **dict(zip(unknown, values, strict=True))})
            for values in product((False, True), repeat=len(unknown))
        }
        return seen.pop() if len(seen) == 1 else None


def parse_logic(text: str) -> Logic:
    """Return the parsed expression. Raises :class:`SheetError` with a caret under the offending place."""
    if len(text) > _MAX_LENGTH:
        raise SheetError(f"the expression is longer than {_MAX_LENGTH} characters")
    parser = _Parser(text)
    tree = parser.choice(0)
    parser.expect_end()
    return Logic(text, tuple(dict.fromkeys(parser.names)), tree)


def _evaluate(tree: tuple[object, ...], levels: Mapping[str, Bit]) -> bool:
    match tree:
        case ("name", str(name)):
            return bool(levels[name])
        case ("const", bool(value)):
            return value
        case ("not", tuple(a)):
            return not _evaluate(a, levels)
        case ("and", tuple(a), tuple(b)):
            return _evaluate(a, levels) and _evaluate(b, levels)
        case ("or", tuple(a), tuple(b)):
            return _evaluate(a, levels) or _evaluate(b, levels)
        case ("xor", tuple(a), tuple(b)):
            return _evaluate(a, levels) != _evaluate(b, levels)
        case ("choose", tuple(c), tuple(a), tuple(b)):
            return _evaluate(a, levels) if _evaluate(c, levels) else _evaluate(b, levels)
    raise AssertionError(tree)


class _Parser:
    """Recursive descent, one method a precedence level."""

    def __init__(self, text: str) -> None:
        self.text = text
        self.names: list[str] = []
        self.tokens: list[tuple[str, int]] = []
        place = 0
        end = len(text.rstrip())
        while place < end:
            match = _TOKEN.match(text, place)
            if match is None:
                skip = len(text[place:]) - len(text[place:].lstrip())
                raise self._error(place + skip, f"{text[place + skip]!r} is no operator or name")
            token = match.group(1) or match.group(2) or match.group(3)
            self.tokens.append((token, match.end() - len(token)))
            place = match.end()
            if len(self.tokens) > _MAX_TOKENS:
                raise SheetError(f"the expression has more than {_MAX_TOKENS} names and operators")
        self.at = 0

    def _error(self, place: int, why: str) -> SheetError:
        return SheetError(
            f"{why}\n    {self.text}\n    {' ' * place}^",
            todo="Operators are & | ! ^ ?: and parentheses, or Liberty's * + '.",
        )

    @property
    def token(self) -> str:
        return self.tokens[self.at][0] if self.at < len(self.tokens) else ""

    @property
    def place(self) -> int:
        return self.tokens[self.at][1] if self.at < len(self.tokens) else len(self.text.rstrip())

    def take(self) -> str:
        token = self.token
        self.at += 1
        return token

    def expect(self, wanted: str) -> None:
        if self.token != wanted:
            raise self._error(self.place, f"expected {wanted!r} here")
        self.take()

    def expect_end(self) -> None:
        if self.token:
            raise self._error(self.place, f"{self.token!r} does not fit here")

    def choice(self, depth: int) -> tuple[object, ...]:
        if depth > _MAX_DEPTH:
            raise self._error(self.place, "the expression nests too deeply")
        condition = self.any_of(depth)
        if self.token != "?":
            return condition
        self.take()
        yes = self.choice(depth + 1)
        self.expect(":")
        return ("choose", condition, yes, self.choice(depth + 1))

    def any_of(self, depth: int) -> tuple[object, ...]:
        tree = self.exclusive(depth)
        while self.token in ("|", "+"):
            self.take()
            tree = ("or", tree, self.exclusive(depth))
        return tree

    def exclusive(self, depth: int) -> tuple[object, ...]:
        tree = self.all_of(depth)
        while self.token == "^":
            self.take()
            tree = ("xor", tree, self.all_of(depth))
        return tree

    def all_of(self, depth: int) -> tuple[object, ...]:
        tree = self.negated(depth)
        while self.token in ("&", "*") or self._starts_operand():
            if self.token in ("&", "*"):
                self.take()
            tree = ("and", tree, self.negated(depth))
        return tree

    def _starts_operand(self) -> bool:
        token = self.token
        return bool(token) and (token in ("(", "!", "0", "1") or token[0].isalpha() or token[0] == "_")

    def negated(self, depth: int) -> tuple[object, ...]:
        if depth > _MAX_DEPTH:
            raise self._error(self.place, "the expression nests too deeply")
        if self.token == "!":
            self.take()
            return ("not", self.negated(depth + 1))
        tree = self.operand(depth)
        while self.token == "'":
            self.take()
            tree = ("not", tree)
        return tree

    def operand(self, depth: int) -> tuple[object, ...]:
        if self.token == "(":
            self.take()
            tree = self.choice(depth + 1)
            self.expect(")")
            return tree
        if self.token in ("0", "1"):
            return ("const", self.take() == "1")
        if not self._starts_operand():
            found = f"{self.token!r} found" if self.token else "the expression ends"
            raise self._error(self.place, f"{found} where a name was expected")
        self.names.append(self.token)
        return ("name", self.take())
