"""The command line: parse arguments, call one function, print. Results to stdout, progress to stderr."""

from __future__ import annotations

import sys
from pathlib import Path
from typing import TYPE_CHECKING, Any

import click

from charflow import __version__
from charflow.errors import CharflowError

if TYPE_CHECKING:
    from charflow.campaign.run import RunResult
    from charflow.sheet import Sheet
    from charflow.tables.folder import Tables


class _Commands(click.Group):
    """Turns every charflow error into its text and exit status; no traceback reaches a user."""

    def invoke(self, ctx: click.Context) -> Any:
        """Run the command."""
        try:
            return super().invoke(ctx)
        except CharflowError as error:
            click.echo(f"charflow: {error}", err=True)
            sys.exit(error.exit_status)
        except BrokenPipeError:
            sys.exit(1)
        except OSError as error:  # all others are explained where they happen
            click.echo(f"charflow: cannot go on: {error}", err=True)
            sys.stdout = None  # or Python complains about it once more at the end
            sys.exit(1)


@click.group(
    cls=_Commands, context_settings={"help_option_names": ["-h", "--help"], "max_content_width": 100}
)
@click.version_option(__version__, prog_name="charflow")
def main() -> None:
    """Measure the timing of register cells in ngspice and write tables for timing analysis.

    Exit status: 0 done; 1 done, but points failed; 2 the input is wrong; 3 the simulator is missing
    or broken.
    """


def _workers(default: int | None) -> int:
    import os

    return default or len(os.sched_getaffinity(0))


_workers_option = click.option(
    "--workers", type=click.IntRange(1, 512), metavar="N", help="Processes to use; default one a core."
)


@main.command()
@click.option("--out", type=click.Path(path_type=Path), default=Path("charflow-demo"), show_default=True)
@_workers_option
def demo(out: Path, workers: int | None) -> None:
    """Characterize the built-in cell, end to end.

    Example: charflow demo --out demo/
    """
    from charflow.sheet.demo import demo_sheet

    _run(demo_sheet(), out, workers, ())


@main.command()
@click.argument("sheet", type=click.Path(path_type=Path))
@click.option("--out", type=click.Path(path_type=Path), required=True, help="Folder for store and tables.")
@_workers_option
@click.option("--corner", "corners", multiple=True, metavar="C", help="Only this corner; may be repeated.")
def run(sheet: Path, out: Path, workers: int | None, corners: tuple[str, ...]) -> None:
    """Measure every point of a cell SHEET and write its tables into a folder.

    The same command goes on where an interrupted run stopped, and measures only what is missing.

    Example: charflow run my_cell.toml --out run/
    """
    _run(sheet, out, workers, corners)


def _run(path: Path, out: Path, workers: int | None, corners: tuple[str, ...]) -> None:
    from charflow.campaign.run import run_campaign
    from charflow.progress import live
    from charflow.sheet import read_sheet
    from charflow.tables.folder import keep_sheet, tables_of, write_tables

    sheet = read_sheet(path)
    text = _text_of(sheet)
    with live() as (tell, say):
        result = run_campaign(sheet, out, _workers(workers), corners or None, tell, say)
    tables = tables_of(sheet, result)
    if result.answers:
        write_tables(out, tables)
        keep_sheet(out, text)
    _report(sheet, result, tables, out)


def _text_of(sheet: Sheet) -> str:
    return sheet.path.read_bytes().decode("utf-8")


def _report(sheet: Sheet, result: RunResult, tables: Tables, out: Path) -> None:
    from rich.console import Console

    from charflow.tables.text import CAUTION, print_tables

    console = Console(soft_wrap=True, highlight=False)
    click.echo(f"{tables.cell}")
    for line in tables.conditions:
        click.echo(f"  {line}")
    print_tables(console, tables.rows)
    click.echo(
        f"{len(result.answers)} values, {result.failed} without an answer; "
        f"{result.transients} transients in {result.seconds:.1f} s. Written to {out}/"
    )
    click.echo(CAUTION)
    if result.interrupted:
        click.echo("charflow: stopped before the end; the same command goes on from here.", err=True)
    if result.interrupted or result.failed:
        sys.exit(1)


@main.command()
@click.argument("sheet", type=click.Path(path_type=Path))
@click.option(
    "--decks", type=click.Path(path_type=Path), metavar="DIR", help="Write transient decks into DIR."
)
@click.option("--json", "as_json", is_flag=True, help="Print the plan as JSON.")
def plan(sheet: Path, decks: Path | None, as_json: bool) -> None:
    """Say what would be simulated for SHEET and about how long it takes; write decks on request.

    Each deck runs by itself: cd DIR, then ngspice -b NAME.cir, which prints clock-to-output delays.

    Example: charflow plan my_cell.toml --decks decks/
    """
    from charflow.sheet import read_sheet

    read = read_sheet(sheet)
    from charflow.plan.outline import outline, outline_text

    facts = outline(read)
    if decks is not None:
        from charflow.plan.decks import write_decks

        facts["decks"] = write_decks(read, decks)
    if as_json:
        import json

        click.echo(json.dumps(facts, indent=1))
    else:
        click.echo(outline_text(facts))


@main.command()
@click.argument("netlist", type=click.Path(path_type=Path))
@click.option(
    "-o", "--out", type=click.Path(path_type=Path), required=True, help="Sheet to write; a new file."
)
@click.option("--subckt", metavar="S", help="Which subckt, if the netlist has several.")
@click.option("--models", multiple=True, metavar="FILE[:SECTION]", help="Model file; may be repeated.")
@click.option("--supply", metavar="V", help='Supply of the corner, such as "1.8 V".')
@click.option("--temperature", metavar="C", default="25 C", show_default=True)
@click.option("--compatibility", metavar="KIND", help="ngspice's ngbehavior, where the models need it.")
@click.option(
    "--option", "options", multiple=True, metavar="NAME=VALUE", help="SPICE option; may be repeated."
)
@click.option(
    "--include-folder",
    "folders",
    multiple=True,
    type=click.Path(path_type=Path),
    metavar="DIR",
    help="Folder that files may be included from; may be repeated.",
)
def draft(
    netlist: Path,
    out: Path,
    subckt: str | None,
    models: tuple[str, ...],
    supply: str | None,
    temperature: str,
    compatibility: str | None,
    options: tuple[str, ...],
    folders: tuple[Path, ...],
) -> None:
    """Work out the pins and the function of a cell from its NETLIST, and write a first sheet.

    With models the function is proved by simulation and the axes are measured; without, the sheet says so.

    Example: charflow draft my_cell.spice --models my.lib:tt --supply "1.2 V" -o my_cell.toml
    """
    from charflow.probe.draft import Wanted, draft_to, option_values

    wanted = Wanted(
        subckt, models, supply, temperature, compatibility, option_values(options), tuple(folders)
    )
    marked = draft_to(netlist, out, wanted, lambda text: click.echo(f"charflow: {text}", err=True))
    click.echo(f"Written to {out}; read it before you trust it.")
    if marked:
        click.echo(f"Lines marked NOT SURE or FILL IN: {marked}.")


@main.command()
@click.argument("folder", metavar="DIR", type=click.Path(path_type=Path))
@click.option(
    "--format",
    "form",
    type=click.Choice(["text", "csv", "json", "markdown"]),
    default="text",
    show_default=True,
)
def tables(folder: Path, form: str) -> None:
    """Print the tables of a run folder.

    Example: charflow tables run/ --format csv > my_cell.csv
    """
    from charflow.tables.flat import to_csv
    from charflow.tables.folder import failures, read_tables, to_json
    from charflow.tables.text import print_tables, to_markdown

    found = read_tables(folder)
    if form == "csv":
        click.echo(to_csv(found.rows), nl=False)
    elif form == "json":
        click.echo(to_json(found), nl=False)
    elif form == "markdown":
        click.echo(to_markdown(found.cell, found.conditions, found.rows))
    else:
        from rich.console import Console

        print_tables(Console(soft_wrap=True, highlight=False), found.rows)
    if failures(found.rows):
        sys.exit(1)


@main.command()
def doctor() -> None:
    """Check that the simulator is there and sound.

    Loads libngspice, runs the ngspice executable, and measures a circuit whose answer is known in both.

    Example: charflow doctor
    """
    from charflow.simulate.doctor import examine

    for line in examine():
        click.echo(line)


if __name__ == "__main__":
    main()
