"""Nodes joined by closed switches: what they meet, over which resistance, and who wins a contest."""

from __future__ import annotations

import heapq
from collections.abc import Mapping, Sequence

LOW, HIGH, UNKNOWN = 0, 1, 2
CLEAR = 0.65  # of supply (or of charge): above this share a contest is won, below its complement lost

Links = Mapping[int, list[tuple[int, float]]]  # of each node: other end and conductance of closed switches


def resistances(group: list[int], rails: set[int], links: Links) -> dict[int, float]:
    """Return the least resistance from each node of a group to a rail (Dijkstra's shortest path)."""
    queue = [(1 / g, node) for node in group for other, g in links[node] if other in rails]
    heapq.heapify(queue)
    found: dict[int, float] = {}
    while queue:
        ohms, node = heapq.heappop(queue)
        if node not in found:
            found[node] = ohms
            for other, g in links[node]:
                if other in links and other not in found:
                    heapq.heappush(queue, (ohms + 1 / g, other))
    return found


def group(first: int, links: Links) -> tuple[list[int], set[int]]:
    """Return the nodes joined to ``first``, and the rails and driven pins they meet."""
    group, rails, waiting = [first], set(), [first]
    seen = {first}
    while waiting:
        for other, _ in links[waiting.pop()]:
            if other not in links:
                rails.add(other)
            elif other not in seen:
                seen.add(other)
                group.append(other)
                waiting.append(other)
    return group, rails


def divider(group: list[int], links: Links, values: Sequence[int]) -> dict[int, int]:
    """Return the levels of nodes between unequal rails, from the voltages of the resistive network."""
    size = len(group)
    place = {node: row for row, node in enumerate(group)}
    rows = [[0.0] * (size + 1) for _ in group]
    for node in group:
        row = rows[place[node]]
        for other, conductance in links[node]:
            row[place[node]] += conductance
            if other in place:
                row[place[other]] -= conductance
            else:
                row[size] += conductance * (0.5 if values[other] == UNKNOWN else values[other])
    for column in range(size):  # Gauss-Jordan; the matrix is diagonally dominant
        pivot = rows[column][column]
        for other in range(size):
            factor = rows[other][column] / pivot if other != column else 0.0
            if factor:
                rows[other] = [a - factor * b for a, b in zip(rows[other], rows[column], strict=True)]
    volts = {node: rows[place[node]][size] / rows[place[node]][place[node]] for node in group}
    return {node: HIGH if v >= CLEAR else LOW if v <= 1 - CLEAR else UNKNOWN for node, v in volts.items()}
