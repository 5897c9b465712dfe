"""What would be simulated, and about how long it takes, without simulating anything."""

from __future__ import annotations

from typing import Any

from charflow.errors import visible
from charflow.plan.arcs import DELAYS, WIDTHS, Kind
from charflow.plan.circuit import read_sources
from charflow.plan.derive import arcs_of
from charflow.sheet import Sheet
from charflow.sheet.netlist import find_subckt, read_subckts

# A warm trial of a 24 to 32 transistor flip-flop takes 10 to 25 ms on one 2.5 GHz class core: about half
# a millisecond a transistor. A constraint takes five trials on average, a delay one.
SECONDS_A_TRANSISTOR = 0.5e-3
TRIALS_A_DELAY, TRIALS_A_CONSTRAINT, TRIALS_A_WIDTH = 1.0, 4.5, 9.0
TRIALS_A_CORNER = 60.0  # proving the function and the rest


def outline(sheet: Sheet) -> dict[str, Any]:
    """Return the plan of ``sheet`` as plain values: arcs in words, points, trials, seconds on one core."""
    sources = read_sources(sheet)
    subckt = find_subckt(sources.netlist, sheet.cell.subckt)
    transistors = _transistors(sources.netlist, subckt.name)
    arcs = arcs_of(sheet)
    axes = sheet.axes
    listed: list[dict[str, Any]] = []
    trials = TRIALS_A_CORNER
    for arc in arcs:
        loads = len(axes.loads_of_constraints)
        if arc.kind in DELAYS:
            rows = axes.data_slew if arc.kind is Kind.DATA_TO_Q else axes.clock_slew
            points, each = len(rows) * len(axes.load), TRIALS_A_DELAY
        elif arc.kind in WIDTHS:
            points, each = len(axes.clock_slew) * loads, TRIALS_A_WIDTH
        else:
            points, each = len(axes.clock_slew) * len(axes.data_slew) * loads, TRIALS_A_CONSTRAINT
        trials += points * each
        listed.append({"arc": arc.words, "points": points * (2 if arc.kind in DELAYS else 1)})
    trials *= len(sheet.corners)
    return {
        "cell": subckt.name,
        "transistors": transistors,
        "corners": list(sheet.corners),
        "arcs": listed,
        "points": sum(item["points"] for item in listed) * len(sheet.corners),
        "trials_about": round(trials),
        "seconds_on_one_core_about": round(trials * max(transistors, 4) * SECONDS_A_TRANSISTOR, 1),
    }


def _transistors(lines: Any, name: str) -> int:
    """Return how many M elements, or X instances of something outside the netlist, the cell flattens to."""
    subckts = read_subckts(lines)

    def count(key: str, depth: int = 0) -> int:
        total = 0
        for line in subckts[key].body:
            words = line.text.split()
            if words[0][0] in "mM":
                total += 1
            elif words[0][0] in "xX" and depth < 20:
                inner = next((w.lower() for w in reversed(words) if w.lower() in subckts), None)
                total += count(inner, depth + 1) if inner else 1
        return total

    return count(name.lower())


def outline_text(facts: dict[str, Any]) -> str:
    """Return the plan as text a person checks in a minute."""
    lines = [
        f"{facts['cell']}: {facts['transistors']} transistors, corners {', '.join(facts['corners'])}",
        "",
    ]
    lines += [f"  {item['arc']}  ({item['points']} values a corner)" for item in facts["arcs"]]
    lines += [
        "",
        f"{facts['points']} values, about {facts['trials_about']} transients, "
        f"about {facts['seconds_on_one_core_about']:g} s on one core",
    ]
    if "decks" in facts:
        lines.append(f"{facts['decks']['count']} decks written to {visible(facts['decks']['folder'])}/")
    return "\n".join(lines)
