"""From a truth table to a short expression in the sheet's own operators.

Pins are taken out one by one (and, or, exclusive or, choice) wherever that needs the fewest names, which
finds ``SE ? SI : (E ? D : state)`` as well as ``E | TE``; a minimal sum of products (Quine 1952,
McCluskey 1956) is used where it is shorter.
"""

from __future__ import annotations

import re
from collections.abc import Mapping, Sequence
from functools import lru_cache
from itertools import product

Table = tuple[bool, ...]  # index: the variables' levels as a binary number, the first variable highest
MAX_PRODUCTS = 9  # variables up to which a sum of products is searched


def table_of(rows: Mapping[tuple[int, ...], bool], count: int) -> Table:
    """Return ``rows`` (levels -> value) as a table; rows that are missing are low."""
    return tuple(bool(rows.get(levels, False)) for levels in product((0, 1), repeat=count))


def support(rows: Mapping[tuple[int, ...], bool], count: int) -> list[int]:
    """Return which of ``count`` variables change the value of some row when they alone change."""
    found = []
    for variable in range(count):
        for levels, value in rows.items():
            other = (*levels[:variable], 1 - levels[variable], *levels[variable + 1 :])
            if rows.get(other, value) != value:
                found.append(variable)
                break
    return found


def express(table: Table, names: Sequence[str]) -> str:
    """Return an expression of ``table`` over ``names``; the first name is the highest bit of its index."""
    _, text, _ = _shortest(table, tuple(names))
    return text


_Found = tuple[tuple[int, int], str, int]  # cost (names read, operators), text, binding strength
_CHOICE, _OR, _XOR, _AND, _ATOM = range(5)


def cofactor(table: Table, variable: int, count: int, level: int) -> Table:
    """Return ``table`` with one of its ``count`` variables held at ``level``."""
    bit = 1 << (count - 1 - variable)
    return tuple(value for at, value in enumerate(table) if bool(at & bit) is bool(level))


def _wrap(found: _Found, at_least: int) -> str:
    return found[1] if found[2] >= at_least else f"({found[1]})"


@lru_cache(maxsize=50_000)
def _shortest(table: Table, names: tuple[str, ...]) -> _Found:
    count = len(names)
    if len(set(table)) == 1:
        return (0, 0), str(int(table[0])), _ATOM
    for variable in range(count):
        low, high = (cofactor(table, variable, count, level) for level in (0, 1))
        if low == high:
            return _shortest(low, names[:variable] + names[variable + 1 :])
    if count == 1:
        return ((1, 0), names[0], _ATOM) if table[1] else ((1, 1), f"!{names[0]}", _ATOM)
    ways = [_taken_out(table, names, variable) for variable in range(count)]
    if count <= MAX_PRODUCTS:
        ways.append(_sum_of_products(table, names))
    return min(ways, key=lambda way: way[0])


def _taken_out(table: Table, names: tuple[str, ...], variable: int) -> _Found:
    """Return the expression that treats one variable first."""
    count, name = len(names), names[variable]
    rest = names[:variable] + names[variable + 1 :]
    low, high = (cofactor(table, variable, count, level) for level in (0, 1))
    yes, no = _shortest(high, rest), _shortest(low, rest)
    if not any(low):
        return _pair(name, "&", yes, _AND, 0)
    if not any(high):
        return _pair(f"!{name}", "&", no, _AND, 1)
    if all(high):
        return _pair(name, "|", no, _OR, 0)
    if all(low):
        return _pair(f"!{name}", "|", yes, _OR, 1)
    if all(a != b for a, b in zip(low, high, strict=True)):
        return _pair(name, "^", no, _XOR, 0)
    cost = (1 + yes[0][0] + no[0][0], 1 + yes[0][1] + no[0][1])
    return cost, f"{name} ? {_wrap(yes, _OR)} : {_wrap(no, _OR)}", _CHOICE


def _pair(name: str, sign: str, other: _Found, strength: int, extra: int) -> _Found:
    cost = (1 + other[0][0], 1 + extra + other[0][1])
    return cost, f"{name} {sign} {_wrap(other, strength)}", strength


def _sum_of_products(table: Table, names: tuple[str, ...]) -> _Found:
    """Return a short sum of products: greedily the prime implicant that covers most of what is left."""
    count = len(names)
    left = {levels for levels, value in zip(product((0, 1), repeat=count), table, strict=True) if value}
    primes = _primes(left)
    chosen: list[_Cube] = []
    while left:
        best = max(primes, key=lambda cube: (len(primes[cube] & left), cube.count(_ANY), cube))
        chosen.append(best)
        left = left - primes[best]
    parts = []
    for cube in sorted(chosen, key=lambda cube: [(level == _ANY, -level) for level in cube]):
        literals = [
            name if level else f"!{name}" for name, level in zip(names, cube, strict=True) if level < _ANY
        ]
        parts.append(" & ".join(literals))
    used = sum(count - cube.count(_ANY) for cube in chosen)
    inverted = sum(cube.count(0) for cube in chosen)
    return (used, used - 1 + inverted), " | ".join(parts), _OR if len(parts) > 1 else _AND


_NAME = re.compile(r"[A-Za-z_][^\s()!|&^?:]*")
_ANY = 2  # of a cube: this variable does not matter
_Cube = tuple[int, ...]


def _primes(ones: set[_Cube]) -> dict[_Cube, set[_Cube]]:
    """Return the prime implicants of a function and what each covers (Quine's merging of neighbours)."""
    cubes = {levels: {levels} for levels in ones}
    primes: dict[_Cube, set[_Cube]] = {}
    while cubes:
        wider: dict[_Cube, set[_Cube]] = {}
        merged: set[_Cube] = set()
        for a, covered in cubes.items():
            for at, level in enumerate(a):
                b = (*a[:at], 1 - level, *a[at + 1 :]) if level < _ANY else a
                if level < _ANY and b in cubes:
                    merged |= {a, b}
                    wider[(*a[:at], _ANY, *a[at + 1 :])] = covered | cubes[b]
        primes |= {cube: covered for cube, covered in cubes.items() if cube not in merged}
        cubes = wider
    return primes


def names_read(text: str) -> list[str]:
    """Return every name an expression reads, as often as it does."""
    return _NAME.findall(text)
