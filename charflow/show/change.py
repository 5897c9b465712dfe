"""The picture of a comparison: old against new, the change by quantity and pin, and over the worst tables."""

from __future__ import annotations

from collections.abc import Sequence
from pathlib import Path
from typing import TYPE_CHECKING, Any

from charflow.errors import InputError, visible
from charflow.show import style
from charflow.tables.compare import CONSTRAINTS, Change, Comparison, measure
from charflow.tables.grid import Grid, axis_unit, grids_of

if TYPE_CHECKING:
    from matplotlib.axes import Axes
    from matplotlib.figure import Figure

_MAPS = 4  # tables shown whole
_STRIPS = 24  # quantities and pins that have room
Looks = dict[str, tuple[str, str]]  # colour and marker of each quantity
_AXIS_WORDS = {"clock_slew": "clock slew", "data_slew": "data slew", "load": "output load"}
_QUANTITY_WORDS = {
    "clk_to_q": "clock to output",
    "gate_to_q": "gate to output",
    "data_to_q": "data to output",
    "async_to_q": "async. to output",
    "pulse_width": "pulse width",
    "min_period": "min. period",
}


def draw_change(path: Path, found: Comparison, limit: float | None, names: tuple[str, str]) -> None:
    """Draw ``found`` into an SVG or PNG file; ``limit`` is a fraction, ``names`` say what old and new are.

    Raises :class:`InputError` where no value is on both sides or the suffix is another.
    """
    style.kind_of(path)
    if not found.changes:
        raise InputError("no point has a value on both sides, so there is nothing to draw")
    with style.figure(13.0, 10.0) as drawn:
        _draw(drawn, found, limit, names)
        style.save(drawn, path)


def _draw(drawn: Figure, found: Comparison, limit: float | None, names: tuple[str, str]) -> None:
    old, new = (_short(name, 60) for name in names)
    drawn.suptitle(
        visible(f"What moved from {old} to {new}"), x=0.01, ha="left", fontsize=13, fontweight="bold"
    )
    parts: Any = drawn.subfigures(2, 1, height_ratios=(1.3, 1.0), hspace=0.04)
    above, below = parts
    looks = {
        quantity: style.FAMILIES[number % len(style.FAMILIES)][:2]
        for number, quantity in enumerate(dict.fromkeys(change.old.quantity for change in found.changes))
    }
    constraints = [change for change in found.changes if change.old.quantity in CONSTRAINTS]
    others = [change for change in found.changes if change.old.quantity not in CONSTRAINTS]
    panels = [("Delays, transitions, widths", others), ("Constraints", constraints)]
    panels = [(title, changes) for title, changes in panels if changes]
    *squares, right = above.subplots(1, len(panels) + 1, width_ratios=[1.0] * len(panels) + [1.25])
    for axes, (title, changes) in zip(squares, panels, strict=True):
        _against(axes, changes, looks, limit, title)
    _strips(right, found, looks, limit)
    _maps(below, found)
    above.supxlabel(visible(_note(found, limit)), fontsize=8, color=style.INK, x=0.01, ha="left")


def _note(found: Comparison, limit: float | None) -> str:
    count = len(found.changes)
    text = f"{count} values on both sides. "
    if limit is not None:
        beyond = len(found.beyond(limit))
        text += f"Limit {100 * limit:g} %: {beyond} beyond it, ringed. "
    missing = len(found.vanished) + len(found.only_old)
    if missing:
        text += f"{missing} values of the old side have none to compare with. "
    return text + measure(found.floor)[0].upper() + measure(found.floor)[1:] + "."


def _against(axes: Axes, changes: Sequence[Change], looks: Looks, limit: float | None, title: str) -> None:
    """Plot new over old values [ps]; the line is where both are equal."""
    style.label(axes, title, "old value [ps]", "new value [ps]")
    axes.grid(visible=True)
    values = [value for change in changes for value in (change.before, change.after)]
    span = max(values) - min(values) or max(abs(values[0]), 1.0)
    low, high = min(values) - 0.05 * span, max(values) + 0.05 * span
    if limit is not None:
        ends = [low + (high - low) * step / 100 for step in range(101)]
        allowed = [limit * max(abs(end), changes[0].floor) for end in ends]
        axes.fill_between(
            ends,
            [end - by for end, by in zip(ends, allowed, strict=True)],
            [end + by for end, by in zip(ends, allowed, strict=True)],
            color=style.FAINT,
            linewidth=0,
            label=f"within {100 * limit:g} %",
        )
    axes.plot([low, high], [low, high], color=style.GUIDE, linewidth=1.0, label="unchanged")
    for quantity in dict.fromkeys(change.old.quantity for change in changes):
        colour, marker = looks[quantity]
        some = [change for change in changes if change.old.quantity == quantity]
        axes.scatter(
            [change.before for change in some],
            [change.after for change in some],
            s=20,
            color=colour,
            marker=marker,
            alpha=0.75,
            linewidth=0,
            label=_quantity(quantity),
        )
    _ring(axes, [(c.before, c.after) for c in changes if limit is not None and abs(c.fraction) > limit])
    axes.set_xlim(low, high)
    axes.set_ylim(low, high)
    axes.set_aspect("equal", adjustable="box")
    axes.set_anchor("N")
    axes.legend(loc="upper left", handletextpad=0.2, borderpad=0.1)


def _ring(axes: Axes, places: Sequence[tuple[float, float]]) -> None:
    if places:
        axes.scatter(
            [x for x, _ in places],
            [y for _, y in places],
            s=70,
            facecolors="none",
            edgecolors=style.ALARM,
            linewidth=0.9,
        )


def _strips(axes: Axes, found: Comparison, looks: Looks, limit: float | None) -> None:
    """Plot every relative change, one line a quantity, pin, edge and corner; a tick marks the median."""
    groups = found.groups()
    several = len({group.corner for group in groups}) > 1
    shown = sorted(groups, key=lambda group: -abs(group.largest.fraction))[:_STRIPS]
    shown = [group for group in groups if group in shown]
    title = (
        "Change"
        if len(shown) == len(groups)
        else f"Change: the {len(shown)} of {len(groups)} that moved most"
    )
    style.label(axes, title, "change [%]", "")
    if limit is not None:
        axes.axvspan(-100 * limit, 100 * limit, color=style.FAINT, linewidth=0)
    axes.axvline(0.0, color=style.GUIDE, linewidth=1.0)
    for line, group in enumerate(shown):
        colour, marker = looks[group.quantity]
        places = [100 * change.fraction for change in group.changes]
        axes.scatter(places, [line] * len(places), s=16, color=colour, marker=marker, alpha=0.55, linewidth=0)
        typical = 100 * group.typical
        axes.plot([typical, typical], [line - 0.35, line + 0.35], color=style.INK, linewidth=1.8)
        _ring(
            axes,
            [
                (100 * c.fraction, line)
                for c in group.changes
                if limit is not None and abs(c.fraction) > limit
            ],
        )
    names = [
        " ".join([f"{group.corner}:"] * several + [_quantity(group.quantity), group.pin, group.edge])
        for group in shown
    ]
    axes.set_yticks(range(len(shown)), [visible(_short(name, 40)) for name in names])
    axes.set_ylim(len(shown) - 0.5, -0.5)
    axes.tick_params(axis="y", length=0)
    axes.spines["left"].set_visible(False)
    axes.margins(x=0.08)


def _maps(part: Any, found: Comparison) -> None:
    """Show the change over the tables that moved most, on one colour scale."""
    from matplotlib.colors import Normalize

    by_row = {id(change.new): change for change in found.changes}
    grids = [
        (grid, {point: by_row[id(row)] for point, row in grid.cells.items() if id(row) in by_row})
        for grid in grids_of(change.new for change in found.changes)
    ]
    grids.sort(key=lambda item: -max(abs(change.fraction) for change in item[1].values()))
    grids = grids[:_MAPS]
    part.suptitle(
        "The change over the tables that moved most [%]", x=0.01, ha="left", fontsize=11, fontweight="bold"
    )
    reach = max(abs(100 * change.fraction) for _, cells in grids for change in cells.values()) or 1.0
    norm = Normalize(-reach, reach)
    panels = part.subplots(1, _MAPS, squeeze=False)[0]
    several = len({change.new.corner for change in found.changes}) > 1
    for axes, item in zip(panels, grids, strict=False):
        _map(axes, *item, norm, several=several)
    for axes in panels[len(grids) :]:
        axes.set_axis_off()


def _map(
    axes: Axes, grid: Grid, cells: dict[tuple[float, float], Change], norm: Any, *, several: bool
) -> None:
    colours = style.change_colours()
    size = 8.5 if max(len(grid.columns), len(grid.rows)) <= 5 else 6.5
    for y, row in enumerate(grid.rows):
        for x, column in enumerate(grid.columns):
            change = cells.get((row, column))
            if change is None:
                axes.text(x, y, "-", ha="center", va="center", color=style.GUIDE)
                continue
            percent = 100 * change.fraction
            fill = colours(norm(percent))
            axes.fill_between([x - 0.48, x + 0.48], y - 0.48, y + 0.48, color=fill, linewidth=0)
            axes.text(
                x, y, _signed(percent), ha="center", va="center", fontsize=size, color=style.ink_on(fill)
            )
    title = f"{grid.corner}: {grid.title}" if several else grid.title
    style.label(
        axes,
        _wrapped(title),
        f"{_AXIS_WORDS[grid.column]} [{axis_unit(grid.column)}]",
        f"{_AXIS_WORDS[grid.row]} [{axis_unit(grid.row)}]",
    )
    axes.title.set_fontsize(9)
    axes.set_xticks(range(len(grid.columns)), [f"{value:g}" for value in grid.columns])
    axes.set_yticks(range(len(grid.rows)), [f"{value:g}" for value in grid.rows])
    axes.set_xlim(-0.5, len(grid.columns) - 0.5)
    axes.set_ylim(len(grid.rows) - 0.5, -0.5)
    axes.tick_params(length=0)
    for side in ("left", "bottom"):
        axes.spines[side].set_visible(False)


def _signed(percent: float) -> str:
    text = f"{percent:+.1f}" if abs(percent) < 1000 else f"{percent:+.0e}"
    return text.replace("-", "\u2212")


def _quantity(name: str) -> str:
    return _QUANTITY_WORDS.get(name, name)


def _short(text: str, most: int) -> str:
    return text if len(text) <= most else f"{text[: most - 1]}\u2026"


def _wrapped(title: str) -> str:
    from textwrap import wrap

    return "\n".join(wrap(_short(visible(title), 100), 34)[:3])
