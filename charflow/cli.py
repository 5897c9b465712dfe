"""The command line: parse arguments, call one function, print. Results to stdout, progress to stderr."""

from __future__ import annotations

import sys
from pathlib import Path
from typing import TYPE_CHECKING, Any

import click

from charflow import __version__
from charflow.cli_after import compare, cores, power, replay, workers_option
from charflow.errors import CharflowError, InputError, visible

if TYPE_CHECKING:
    from charflow.campaign.beyond import Wish
    from charflow.campaign.run import RunResult
    from charflow.sheet import Sheet
    from charflow.tables.folder import Tables


CHECKS = 4  # points between the grid that each table is checked at, unless the user says otherwise


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
            click.echo(f"charflow: cannot go on: {visible(str(error))}", err=True)
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


@main.command()
@click.option("--out", type=click.Path(path_type=Path), default=Path("charflow-demo"), show_default=True)
@workers_option
def demo(out: Path, workers: int | None) -> None:
    """Characterize the built-in cell, end to end.

    Example: charflow demo --out demo/
    """
    from charflow.sheet.demo import demo_sheet

    _run(demo_sheet(), out, workers)


@main.command()
@click.argument("sheet", type=click.Path(path_type=Path))
@click.option("--out", type=click.Path(path_type=Path), required=True, help="Folder for store and tables.")
@workers_option
@click.option("--corner", "corners", multiple=True, metavar="C", help="Only this corner; may be repeated.")
@click.option(
    "--check",
    type=click.IntRange(0, 1000),
    default=CHECKS,
    show_default=True,
    metavar="N",
    help="Points between the grid that each table is checked at; 0 for none.",
)
@click.option(
    "--refine",
    type=click.FloatRange(0, 100, min_open=True),
    metavar="PCT",
    help="Insert axis points until no check is off by more than PCT of a delay.",
)
@click.option(
    "--insert",
    type=click.IntRange(1, 100),
    default=8,
    show_default=True,
    metavar="N",
    help="Axis points that --refine may insert.",
)
@click.option("--timing", is_flag=True, help="Say where the time went, and keep it in timing.json.")
def run(
    sheet: Path,
    out: Path,
    workers: int | None,
    corners: tuple[str, ...],
    check: int,
    refine: float | None,
    insert: int,
    timing: bool,
) -> None:
    """Measure every point of a cell SHEET and write its tables into a folder.

    The same command goes on where an interrupted run stopped, and measures only what is missing.

    Each table is checked at points between its own, which a timing tool has to interpolate: the error is
    the table's accuracy. For setup and hold, --refine counts it in percent of the clock-to-output delay.

    Example: charflow run my_cell.toml --out run/
    """
    if refine is not None and not check:
        raise click.UsageError("--refine needs points to judge by: leave --check at 1 or more")
    from charflow.campaign.beyond import Wish

    wish = Wish(check, None if refine is None else refine / 100, insert)
    _run(sheet, out, workers, corners, wish, timing)


def _run(
    path: Path,
    out: Path,
    workers: int | None,
    corners: tuple[str, ...] = (),
    wish: Wish | None = None,
    timing: bool = False,
) -> None:
    import time

    from charflow.campaign.beyond import Wish
    from charflow.campaign.run import run_campaign
    from charflow.progress import live
    from charflow.sheet import read_sheet
    from charflow.tables.folder import keep_sheet, tables_of, write_tables

    sheet = read_sheet(path)
    text = _text_of(sheet)
    with live() as (tell, say):
        result = run_campaign(sheet, out, cores(workers), corners or None, tell, say, wish or Wish(CHECKS))
    ended = time.monotonic()
    tables = tables_of(sheet, result)
    if result.answers:
        write_tables(out, tables, result.certificates)
        keep_sheet(out, text)
    if timing and result.timing is not None:
        from charflow.campaign.timing import text as timing_text
        from charflow.tables.folder import write_timing

        report = result.timing.report(ended, time.monotonic() - ended)
        write_timing(out, report)
        click.echo(timing_text(report), err=True)
    _report(sheet, result, tables, out)


def _text_of(sheet: Sheet) -> str:
    return sheet.path.read_bytes().decode("utf-8")


def _report(sheet: Sheet, result: RunResult, tables: Tables, out: Path) -> None:
    from rich.console import Console

    from charflow.tables.certificate import print_certificate
    from charflow.tables.text import CAUTION, print_tables

    console = Console(soft_wrap=True, highlight=False)
    click.echo(visible(tables.cell))
    for line in tables.conditions:
        click.echo(f"  {visible(line)}")
    print_tables(console, tables.rows)
    print_certificate(console, tables.facts.get("certificate", ()))
    for name, facts in tables.facts["corners"].items():
        click.echo(f"{name}: {facts['models_proved']}")
    click.echo(
        f"{len(result.answers)} values, {result.failed} without an answer; "
        f"{result.transients} transients in {result.seconds:.1f} s. Written to {visible(str(out))}/"
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
@click.option(
    "--against",
    type=click.Path(path_type=Path),
    metavar="DIR",
    help="Say what a run into DIR would redo, and why.",
)
@click.option("--json", "as_json", is_flag=True, help="Print the plan as JSON.")
def plan(sheet: Path, decks: Path | None, against: Path | None, as_json: bool) -> None:
    """Say what would be simulated for SHEET and about how long it takes; write decks on request.

    Each deck runs by itself: cd DIR, then ngspice -b NAME.cir, which prints clock-to-output delays.
    With --against, a run folder is asked what it already holds; nothing in it is changed.

    Example: charflow plan my_cell.toml --against run/
    """
    from charflow.sheet import read_sheet

    read = read_sheet(sheet)
    from charflow.plan.outline import outline, outline_text

    facts = outline(read)
    if decks is not None:
        from charflow.plan.decks import write_decks

        facts["decks"] = write_decks(read, decks)
    text = "" if as_json else outline_text(facts)
    if against is not None:
        from charflow.campaign.redo import redo, redo_facts, redo_text

        found = redo(read, against)
        facts["redo"] = redo_facts(found)
        text += "\n\n" + redo_text(found, against)
    if as_json:
        import json

        text = json.dumps(facts, indent=1)
    click.echo(text)


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
    marked = draft_to(netlist, out, wanted, lambda text: click.echo(f"charflow: {visible(text)}", err=True))
    click.echo(f"Written to {visible(str(out))}; read it before you trust it.")
    if marked:
        click.echo(f"Lines marked NOT SURE or FILL IN: {marked}.")


@main.command()
@click.argument("folders", metavar="DIR...", nargs=-1, required=True, type=click.Path(path_type=Path))
@click.option(
    "--format",
    "form",
    type=click.Choice(["text", "csv", "json", "markdown", "liberty"]),
    default="text",
    show_default=True,
)
@click.option("--allow-gaps", is_flag=True, help="Liberty: leave tables with holes out, and say so.")
@click.option(
    "--out", type=click.Path(path_type=Path), metavar="FOLDER", help="Liberty: write NAME_CORNER.lib here."
)
def tables(folders: tuple[Path, ...], form: str, allow_gaps: bool, out: Path | None) -> None:
    """Print the tables of a run folder, or write those of several as a Liberty library.

    Liberty goes into files, one a corner: CELL_CORNER.lib in the run folder, or, where several folders make
    one library, FOLDER/FOLDER_CORNER.lib.

    Example: charflow tables run/ --format csv > my_cell.csv
    """
    if form == "liberty":
        from charflow.tables.liberty.write import write_libraries

        if write_libraries(folders, out, allow_gaps, click.echo):
            sys.exit(1)
        return
    if len(folders) > 1 or out is not None or allow_gaps:
        raise InputError("several folders, --out and --allow-gaps go with --format liberty only")
    (folder,) = folders
    from charflow.tables.flat import to_csv
    from charflow.tables.folder import failures, read_tables, to_json
    from charflow.tables.text import print_tables, to_markdown

    found = read_tables(folder)
    if form == "csv":
        click.echo(to_csv(found.rows), nl=False)
    elif form == "json":
        click.echo(to_json(found), nl=False)
    elif form == "markdown":
        click.echo(to_markdown(found.cell, found.conditions, found.rows, found.facts))
    else:
        from rich.console import Console

        from charflow.tables.certificate import print_certificate

        console = Console(soft_wrap=True, highlight=False)
        print_tables(console, found.rows)
        print_certificate(console, found.facts.get("certificate", ()))
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


for _command in (replay, compare, power):
    main.add_command(_command)


if __name__ == "__main__":
    main()
