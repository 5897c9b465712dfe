"""A comparison for people (a terminal) and for programs (JSON values)."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import asdict
from typing import TYPE_CHECKING, Any

from charflow.errors import visible
from charflow.tables.compare import DELAY_FLOOR, Change, Comparison, Group, measure, place, subject
from charflow.tables.flat import Row
from charflow.tables.sides import Side, differing_facts

if TYPE_CHECKING:
    from rich.console import Console

FORMAT = 1
_LISTED = 12  # entries of a list that are printed; JSON has them all
_AXES = {
    "clock_slew_ps": ("clock slew", " ps"),
    "data_slew_ps": ("data slew", " ps"),
    "load_ff": ("load", " fF"),
}


def print_comparison(
    console: Console, old: Side, new: Side, found: Comparison, limit: float | None, worst: int
) -> None:
    """Print what moved between ``old`` and ``new``; ``limit`` is a fraction, ``worst`` a count."""
    from rich.text import Text

    def say(text: str, style: str = "") -> None:
        console.print(Text(visible(text), style=style))

    for name, side in (("old", old), ("new", new)):
        cell = f", {side.cell}" if side.cell else ""
        say(f"{name}  {side.name}{cell}, {len(side.rows)} values")
    for what, before, after in differing_facts(old, new):
        say(f"note: {what} was {before}, is now {after}")
    say("")
    for line in summary(found, limit):
        say(line, "bold")
    say(measure(found.floor) + ("; ! marks what is beyond the limit" if limit is not None else ""))
    if found.changes:
        _print_groups(console, found.groups(), limit)
        _print_worst(console, found, limit, worst)
    for title, lines in lists(found):
        say("")
        say(f"{title} ({len(lines)})", "bold")
        for line in lines[:_LISTED]:
            say(f"  {line}")
        if len(lines) > _LISTED:
            say(f"  ... and {len(lines) - _LISTED} more; --json lists all")


def summary(found: Comparison, limit: float | None) -> list[str]:
    """Return the outcome in a few lines."""
    count = len(found.changes)
    same = sum(change.ps == 0 for change in found.changes)
    moved = sum(change.moved for change in found.changes)
    lines = [
        f"{count} values compared: {same} the same, {count - same - moved} changed within their brackets, "
        f"{moved} moved further"
    ]
    kept = [
        (found.turned, "constraints changed sign"),
        (found.appeared, "values appeared"),
        (found.vanished, "values vanished"),
        (found.unanswered, "without a value on both sides"),
        (found.only_old, "points only in old"),
        (found.only_new, "points only in new"),
    ]
    counts = ", ".join(f"{len(rows)} {words}" for rows, words in kept if rows)
    lines += [counts] if counts else []
    if limit is not None:
        beyond = len(found.beyond(limit))
        gone = len(found.vanished) + len(found.only_old)
        word = "within" if found.within(limit) else "BEYOND"
        lost = f", {gone} of the old values missing in the new" if gone else ""
        lines.append(f"{word} the limit of {100 * limit:g} %: {beyond} values moved further{lost}")
    return lines


def _print_groups(console: Console, groups: Sequence[Group], limit: float | None) -> None:
    """Print one table a corner; what goes beyond the limit is marked."""
    from rich import box
    from rich.table import Table
    from rich.text import Text

    for corner in dict.fromkeys(group.corner for group in groups):
        console.print()
        table = Table(
            title=Text(f"corner {visible(corner)}"),
            title_justify="left",
            title_style="bold",
            box=box.SIMPLE_HEAD,
            header_style="",
            pad_edge=False,
        )
        table.add_column("", no_wrap=True)
        for name in ("values", "moved", "typical", "", "largest", "", ""):
            table.add_column(name, justify="right", no_wrap=True)
        for group in groups:
            if group.corner != corner:
                continue
            far = limit is not None and abs(group.largest.fraction) > limit
            table.add_row(
                Text(visible(f"{group.quantity} {group.pin} {group.edge}")),
                str(len(group.changes)),
                str(group.moved),
                f"{group.typical_ps:+.2f} ps",
                percent(group.typical),
                f"{group.largest.ps:+.2f} ps",
                percent(group.largest.fraction),
                "!" if far else "",
            )
        table.width = table.__rich_measure__(console, console.options.update(max_width=1000)).maximum
        console.print(table)  # a narrow terminal breaks its lines; no number is cut short


def _print_worst(console: Console, found: Comparison, limit: float | None, count: int) -> None:
    """Print the largest changes, two lines each: nothing is cut short, keys least of all."""
    from rich.text import Text

    worst = found.worst(count)
    if not worst:
        return
    several = len({change.new.corner for change in found.changes}) > 1
    console.print(Text("largest changes, with the keys of the deciding trials", style="bold"))
    for change in worst:
        far = " !" if limit is not None and abs(change.fraction) > limit else ""
        keys = dict.fromkeys((change.old.key, change.new.key))
        values = f"{change.ps:+.2f} ps: {change.before:.2f} -> {change.after:.2f} ps"
        first = f"{percent(change.fraction):>10}  {values}  {named(change.new, corner=several)}{far}"
        console.print(Text(visible(first)))
        console.print(Text(visible(f"{'':12}{place(change.new)}; key {' -> '.join(keys)}"), style="dim"))


def percent(fraction: float) -> str:
    """Return a relative change as text: per cent with its sign."""
    if abs(fraction) >= 100:
        return f"{100 * fraction:+.2g} %"
    return f"{100 * fraction:+.2f} %"


def named(row: Row, *, corner: bool = True) -> str:
    """Return which value a row holds, in words, without its place on the axes."""
    pin, edge = subject(row)
    words = [row.quantity, pin, edge]
    if row.when:
        words.append(f"when {row.when}")
    return " ".join([f"{row.corner}:"] * corner + words)


def lists(found: Comparison) -> list[tuple[str, list[str]]]:
    """Return what cannot be put as a change, as titles with lines; empty ones left out."""
    turned = [f"{_whole(c.new)}: {c.before:.2f} -> {c.after:.2f} ps" for c in found.turned]
    vanished = [f"{_whole(b)}: was {a.value_ps:.2f} ps, now {b.status}" for a, b in found.vanished]
    appeared = [f"{_whole(b)}: {b.value_ps:.2f} ps, before {a.status}" for a, b in found.appeared]
    axes = []
    for name, old, new in found.axes():
        words, unit = _AXES.get(name, (name, ""))
        for side, entries in (("old", old), ("new", new)):
            if entries:
                axes.append(f"{words}: only in {side} {', '.join(_entry(e, unit) for e in entries)}")
    everything = [
        ("constraints that changed sign", turned),
        ("values that vanished", vanished),
        ("values that appeared", appeared),
        ("tables that differ in their points", axes),
    ]
    return [(title, lines) for title, lines in everything if lines]


def _whole(row: Row) -> str:
    return f"{named(row)} at {place(row)}"


def _entry(value: str | float, unit: str) -> str:
    return f"{value:g}{unit}" if isinstance(value, float | int) else value or "(none)"


def comparison_facts(old: Side, new: Side, found: Comparison, limit: float | None) -> dict[str, Any]:
    """Return the comparison as JSON values; times in ps, loads in fF, relative changes as fractions."""
    return {
        "format": FORMAT,
        "old": {"name": old.name, "cell": old.cell, "values": len(old.rows)},
        "new": {"name": new.name, "cell": new.cell, "values": len(new.rows)},
        "notes": [{"what": what, "old": a, "new": b} for what, a, b in differing_facts(old, new)],
        "floor_ps": {"constraints": found.floor, "others": DELAY_FLOOR},
        "limit": limit,
        "within_limit": None if limit is None else found.within(limit),
        "compared": len(found.changes),
        "same": sum(change.ps == 0 for change in found.changes),
        "moved": sum(change.moved for change in found.changes),
        "groups": [_group_facts(group) for group in found.groups()],
        "changes": [_change_facts(change) for change in found.worst(len(found.changes))],
        "changed_sign": [_change_facts(change) for change in found.turned],
        "appeared": [{"old": asdict(a), "new": asdict(b)} for a, b in found.appeared],
        "vanished": [{"old": asdict(a), "new": asdict(b)} for a, b in found.vanished],
        "unanswered": [{"old": asdict(a), "new": asdict(b)} for a, b in found.unanswered],
        "only_old": [asdict(row) for row in found.only_old],
        "only_new": [asdict(row) for row in found.only_new],
    }


def _group_facts(group: Group) -> dict[str, Any]:
    return {
        "corner": group.corner,
        "quantity": group.quantity,
        "pin": group.pin,
        "edge": group.edge,
        "values": len(group.changes),
        "moved": group.moved,
        "typical_ps": group.typical_ps,
        "typical": group.typical,
        "largest_ps": group.largest_ps.ps,
        "largest": group.largest.fraction,
        "largest_key": group.largest.new.key,
    }


def _change_facts(change: Change) -> dict[str, Any]:
    row = asdict(change.new)
    point = {
        name: row[name]
        for name in row
        if name not in ("value_ps", "bracket_ps", "status", "transients", "key")
    }
    return point | {
        "old_ps": change.before,
        "new_ps": change.after,
        "change_ps": change.ps,
        "change": change.fraction,
        "moved": change.moved,
        "old_key": change.old.key,
        "new_key": change.new.key,
    }
