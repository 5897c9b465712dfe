"""Logic as Liberty writes it: ``!``, ``&``, ``|``, ``^`` with every operation in parentheses.

Parentheses because readers differ in how tightly ``^`` binds; ``a ? b : c`` has no Liberty spelling and
becomes ``(a & b) | (!a & c)``.
"""

from __future__ import annotations

import re
from collections.abc import Mapping

from charflow.sheet.logic import Logic, parse_logic

Tree = tuple[object, ...]

_PLAIN = re.compile(r"[A-Za-z_]\w*(\[\d+\])?")


def name_text(name: str) -> str:
    """Return a pin or variable name for use inside an expression: in quotes where it is not plain."""
    return name if _PLAIN.fullmatch(name) else f'"{name}"'


def expression(logic: Logic, rename: Mapping[str, str], fixed: Mapping[str, bool] | None = None) -> str:
    """Return ``logic`` as a Liberty expression, names replaced by ``rename``, inputs in ``fixed`` held."""
    return _text(folded(logic.tree, fixed or {}), rename)


def folded(tree: Tree, fixed: Mapping[str, bool]) -> Tree:
    """Return ``tree`` with the names in ``fixed`` replaced by their levels and constants worked out."""
    match tree:
        case ("name", str(name)):
            return ("const", fixed[name]) if name in fixed else tree
        case ("const", _):
            return tree
        case ("not", tuple(a)):
            return _negation(folded(a, fixed))
        case ("choose", tuple(c), tuple(a), tuple(b)):
            return folded(("or", ("and", c, a), ("and", ("not", c), b)), fixed)
        case (str(operator), tuple(a), tuple(b)):
            return _joined(operator, folded(a, fixed), folded(b, fixed))
    raise AssertionError(tree)


def _negation(tree: Tree) -> Tree:
    match tree:
        case ("const", bool(value)):
            return ("const", not value)
        case ("not", tuple(a)):
            return a
    return ("not", tree)


def _joined(operator: str, a: Tree, b: Tree) -> Tree:
    for one, other in ((a, b), (b, a)):
        match operator, one:
            case ("and", ("const", True)) | ("or", ("const", False)) | ("xor", ("const", False)):
                return other
            case ("and", ("const", False)) | ("or", ("const", True)):
                return one
            case ("xor", ("const", True)):
                return _negation(other)
    return (operator, a, b)


_SIGN = {"and": "&", "or": "|", "xor": "^"}


def _text(tree: Tree, rename: Mapping[str, str]) -> str:
    match tree:
        case ("name", str(name)):
            return name_text(rename.get(name, name))
        case ("const", bool(value)):
            return str(int(value))
        case ("not", tuple(a)):
            return f"!{_text(a, rename)}"
        case (str(operator), tuple(a), tuple(b)):
            return f"({_text(a, rename)} {_SIGN[operator]} {_text(b, rename)})"
    raise AssertionError(tree)


def literal(pin: str, level: bool) -> str:
    """Return the expression that is true while ``pin`` is at ``level``."""
    return f"{'' if level else '!'}{name_text(pin)}"


def side_levels(when: str) -> dict[str, bool] | None:
    """Return the pin levels of a side condition ``A & !B``, None where it is no such list."""
    if not when:
        return {}
    levels: dict[str, bool] = {}
    return levels if _collect(parse_logic(when).tree, levels) else None


def _collect(tree: Tree, levels: dict[str, bool]) -> bool:
    match tree:
        case ("and", tuple(a), tuple(b)):
            return _collect(a, levels) and _collect(b, levels)
        case ("name", str(name)):
            return levels.setdefault(name, True)
        case ("not", ("name", str(name))):
            return not levels.setdefault(name, False)
    return False


def sdf_condition(levels: Mapping[str, bool]) -> str:
    """Return the condition as the Standard Delay Format (IEEE 1497) writes it."""
    return " && ".join(f"{pin} == 1'b{int(level)}" for pin, level in levels.items())
