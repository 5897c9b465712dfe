"""The accuracy certificate as numbers and words: facts for machines, CSV, Markdown and the terminal.

Times in picoseconds, loads in femtofarads, errors as table less measurement, shares in percent: of a delay
or transition of its own value, of a constraint of the reference delay at that point.
"""

from __future__ import annotations

import csv
import io
from collections.abc import Sequence
from typing import TYPE_CHECKING, Any

from charflow.campaign.beyond import Refinement
from charflow.solve.certificate import Certificate, Check, coordinates
from charflow.tables.flat import COLUMNS, row_of

if TYPE_CHECKING:
    from rich.console import Console, JustifyMethod

Facts = dict[str, Any]
CSV_COLUMNS = (
    *(name for name in COLUMNS if name not in ("value_ps", "bracket_ps", "status", "transients", "key")),
    "measured_ps",
    "table_ps",
    "error_ps",
    "error_pct",
    "bracket_ps",
    "status",
    "transients",
    "key",
)
_NAMES = COLUMNS[:9]
MEANING = (
    "What a timing tool reads between the points of a table, by linear interpolation along each axis, less "
    "what the solver measures there. Percent are of a delay or transition itself, and for a constraint of "
    "the reference delay at that point. A sample, not a bound."
)


def facts_of(certificates: Sequence[Certificate]) -> list[Facts]:
    """Return a certificate a table as JSON values."""
    return [_facts(certificate) for certificate in certificates]


def _facts(found: Certificate) -> Facts:
    facts: Facts = dict(zip(_NAMES, found.table, strict=True))
    facts |= {
        "along": list(found.along),
        "points": len(found.compared),
        "without_answer": len(found.checks) - len(found.compared),
        "largest_ps": None,
        "largest_pct": _percent(found.largest_share),
        "typical_ps": _ps(found.typical),
        "typical_pct": _percent(found.typical_share),
        "worst_at": None,
    }
    worst = found.worst
    if worst is not None and worst.error is not None:
        facts["largest_ps"] = _ps(abs(worst.error))
        facts["worst_at"] = _place(worst)
    return facts


def _place(check: Check) -> Facts:
    row = row_of(check.answer)
    units = {"clock_slew": "clock_slew_ps", "data_slew": "data_slew_ps", "load": "load_ff"}
    return {units[name]: getattr(row, units[name]) for name in coordinates(check.answer)}


def _ps(seconds: float | None) -> float | None:
    return None if seconds is None else round(seconds * 1e12, 4) + 0.0


def _percent(share: float | None) -> float | None:
    return None if share is None else round(share * 100, 3) + 0.0


def refinement_facts(found: Refinement | None) -> Facts | None:
    """Return how refining ended as JSON values."""
    if found is None:
        return None
    units = {"clock_slew": 1e12, "data_slew": 1e12, "load": 1e15}
    return {
        "limit_pct": _percent(found.limit),
        "reached": found.reached,
        "largest_pct": _percent(found.left),
        "inserted": [[new.axis, round(new.value * units[new.axis], 6)] for new in found.inserted],
    }


def refinement_words(facts: Facts) -> str:
    """Return how refining ended in a sentence."""
    units = {"clock_slew": "ps", "data_slew": "ps", "load": "fF"}
    points = ", ".join(f"{axis} {value:g} {units[axis]}" for axis, value in facts["inserted"]) or "none"
    if facts["largest_pct"] is None:
        return "refinement: no point between the grid could be compared, so nothing is known"
    left = (
        f"largest error of delays and constraints at the points checked {facts['largest_pct']:g} %, "
        f"wanted {facts['limit_pct']:g} %"
    )
    state = "reached" if facts["reached"] else "NOT reached"
    return f"refinement {state}: {left}; axis points inserted: {points}"


def to_csv(certificates: Sequence[Certificate]) -> str:
    """Return every check as a row of ``certificate.csv``."""
    text = io.StringIO()
    writer = csv.writer(text, lineterminator="\n")
    writer.writerow(CSV_COLUMNS)
    for found in certificates:
        for check in found.checks:
            row = row_of(check.answer)
            extra = {
                "measured_ps": row.value_ps,
                "table_ps": _ps(check.read),
                "error_ps": _ps(check.error),
                "error_pct": _percent(check.share),
            }
            cells = [extra[name] if name in extra else getattr(row, name) for name in CSV_COLUMNS]
            writer.writerow(["" if cell is None else cell for cell in cells])
    return text.getvalue()


def _name(facts: Facts) -> str:
    ends = f"{facts['pin']} {facts['pin_edge']}", f"{facts['output']} {facts['output_edge']}"
    name = " ".join([facts["quantity"], *(end for end in ends if end.strip())])
    return f"{name}, {facts['when']}" if facts["when"] else name


def _cells(facts: Facts) -> list[str]:
    if facts["largest_ps"] is None:
        why = "no point gave an answer" if facts["along"] else "one point, nothing between"
        return [_name(facts), "-", "-", why]
    units = {"clock_slew": ("clock_slew_ps", "{:g} ps"), "data_slew": ("data_slew_ps", "{:g} ps")}
    units["load"] = ("load_ff", "{:g} fF")
    place = [units[name][1].format(facts["worst_at"][units[name][0]]) for name in facts["along"]]
    sizes = [f"{facts[f'{w}_ps']:.2f} ps {facts[f'{w}_pct']:5.2f} %" for w in ("largest", "typical")]
    return [_name(facts), *sizes, ", ".join(place)]


_HEADINGS = ("table", "largest", "typical", "largest at")


def notes(certificates: Sequence[Facts]) -> list[str]:
    """Return what the certificate does not say: axes with one point, points without an answer."""
    found = []
    wanted = {"setup": 2, "hold": 2, "recovery": 2, "removal": 2, "pulse_width": 1, "min_period": 1}
    flat = [f for f in certificates if 0 < len(f["along"]) < wanted.get(f["quantity"], 2)]
    if flat:
        what = "an axis has one point, and nothing is known of the error along it: only along "
        found.append(what + _along(flat))
    lost = sum(f["without_answer"] for f in certificates)
    if lost:
        found.append(f"{lost} points between the grid gave no answer or lean on a hole in the table")
    return found


def _along(certificates: Sequence[Facts]) -> str:
    kinds = {(f["quantity"], ", ".join(f["along"])) for f in certificates}
    return "; ".join(f"{along} for {quantity}" for quantity, along in sorted(kinds)).replace("_slew", " slew")


def to_markdown(certificates: Sequence[Facts], plain: Any) -> list[str]:
    """Return a section of Markdown lines; ``plain`` makes text safe to show."""
    if not certificates:
        return []
    lines = ["## Accuracy between the points", "", MEANING, ""]
    for corner in dict.fromkeys(facts["corner"] for facts in certificates):
        lines += [f"Corner {plain(corner)}:", ""]
        lines += [f"| {' | '.join(_HEADINGS)} |", "|---|---:|---:|---|"]
        for facts in certificates:
            if facts["corner"] == corner:
                lines.append(f"| {' | '.join(plain(cell) for cell in _cells(facts))} |")
        lines.append("")
    for note in notes(certificates):
        lines += [f"- {plain(note)}", ""]
    return lines


def print_certificate(console: Console, certificates: Sequence[Facts]) -> None:
    """Print one compact table a corner to the terminal."""
    from rich import box
    from rich.table import Table
    from rich.text import Text

    for corner in dict.fromkeys(facts["corner"] for facts in certificates):
        table = Table(
            title=Text(f"{corner}: error of the tables between their points"),
            title_justify="left",
            box=box.SIMPLE_HEAD,
            pad_edge=False,
            title_style="",
        )
        for number, heading in enumerate(_HEADINGS):
            justify: JustifyMethod = "right" if number in (1, 2) else "left"
            table.add_column(heading, justify=justify, no_wrap=number in (1, 2))
        for facts in certificates:
            if facts["corner"] == corner:
                table.add_row(*(Text(cell) for cell in _cells(facts)))
        console.print(table)
    for note in notes(certificates):
        console.print(Text(note))
