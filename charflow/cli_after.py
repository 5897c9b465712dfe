"""Commands for what comes after a run: comparing, replaying, power. See :mod:`charflow.cli`."""

from __future__ import annotations

import sys
from pathlib import Path

import click


def cores(default: int | None) -> int:
    """Return the number of workers asked for, or one for each core this process may use."""
    import os

    return default or len(os.sched_getaffinity(0))


workers_option = click.option(
    "--workers", type=click.IntRange(1, 512), metavar="N", help="Processes to use; default one a core."
)


@click.command()
@click.argument("folder", metavar="DIR", type=click.Path(path_type=Path))
@click.argument("key")
def replay(folder: Path, key: str) -> None:
    """Run the trial that decided one table entry again, in plain ngspice, and compare.

    KEY is the entry's key, in the last column of tables.csv, or its first characters. The deck is written
    to DIR/replay/KEY.cir; it brings the cell to rest by itself and measures with ngspice's own .measure.

    Example: charflow replay run/ 3f9a2c
    """
    from charflow.tables.replay import replay as replay_entry
    from charflow.tables.replay import words

    for line in words(replay_entry(folder, key)):
        click.echo(line)


@click.command()
@click.argument("old", type=click.Path(path_type=Path))
@click.argument("new", type=click.Path(path_type=Path))
@click.option("--limit", metavar="PCT", help='Exit status 1 beyond this change, such as "2%".')
@click.option("--floor", default="10 ps", show_default=True, metavar="TIME", help="For small constraints.")
@click.option("--worst", type=click.IntRange(0), default=10, show_default=True, help="Entries listed.")
@click.option("--picture", type=click.Path(path_type=Path), metavar="FILE", help="Draw it: .svg or .png.")
@click.option("--json", "as_json", is_flag=True, help="Print the comparison as JSON.")
def compare(
    old: Path, new: Path, limit: str | None, floor: str, worst: int, picture: Path | None, as_json: bool
) -> None:
    """Say what moved from OLD to NEW, each a run folder, a tables.csv or a Liberty file (.lib).

    A change in % is relative to the size of the old value, and for setup, hold, recovery and removal, which
    may be zero or negative, to the floor where that is larger. "Moved" is what the brackets of both values
    do not explain. With --limit the exit status is 1 where a change is larger, or an old value has no
    counterpart; values and points that are new do not count.

    Example: charflow compare run_old/ run_new/ --limit 2% --picture change.svg
    """
    from charflow.tables.compare import compare as compared
    from charflow.tables.liberty.side import read_sides
    from charflow.tables.sides import floor_of, limit_of

    most = None if limit is None else limit_of(limit)
    sides = read_sides(old, new)
    found = compared(sides[0].rows, sides[1].rows, floor_of(floor))
    if picture is not None:
        from charflow.show.change import draw_change

        draw_change(picture, found, most, (sides[0].name, sides[1].name))
    if as_json:
        import json

        from charflow.tables.compare_text import comparison_facts

        click.echo(json.dumps(comparison_facts(*sides, found, most), indent=1))
    else:
        from rich.console import Console

        from charflow.tables.compare_text import print_comparison

        print_comparison(Console(soft_wrap=True, highlight=False), *sides, found, most, worst)
    if most is not None and not found.within(most):
        sys.exit(1)


@click.command()
@click.argument("sheet", type=click.Path(path_type=Path))
@click.option("--out", type=click.Path(path_type=Path), required=True, help="Folder of a finished run.")
@workers_option
def power(sheet: Path, out: Path, workers: int | None) -> None:
    """Measure input capacitance, switching energy and leakage of the cell of SHEET into its run folder.

    They go into power.csv there, and from it into Liberty. Each input edge is simulated from every settled
    state, or from eight of many.

    Example: charflow power my_cell.toml --out run/
    """
    from charflow.campaign.power import measure_power
    from charflow.sheet import read_sheet
    from charflow.tables.power import power_row, power_summary, rests_of, write_power

    read = read_sheet(sheet)
    rests = rests_of(out, read)
    found = measure_power(read, rests, cores(workers), lambda text: click.echo(text, err=True))
    rows = [power_row(item) for item in found]
    write_power(out, rows)
    for line in power_summary(rows):
        click.echo(line)
    if any(row.value is None for row in rows):
        sys.exit(1)
