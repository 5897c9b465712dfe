"""Tables for people: Markdown and the terminal, with names that are data and nothing else."""

from __future__ import annotations

import io
import re
from collections.abc import Callable

import pytest
from rich.console import Console

from charflow.tables.flat import Row
from charflow.tables.text import CAUTION, print_tables, to_markdown

MakeRow = Callable[..., Row]


def cells(line: str) -> list[str]:
    return [cell.strip() for cell in re.split(r"(?<!\\)\|", line)[1:-1]]


def test_markdown_shows_cell_conditions_caution_corner_and_each_grid(make_row: MakeRow) -> None:
    rows = [make_row(clock_slew_ps=s, load_ff=f, value_ps=s + f) for s in (10.0, 50.0) for f in (1.0, 5.5)]
    lines = to_markdown("tarn_dffp_1", ["corner typical: 1.2 V"], rows).splitlines()
    assert lines[0] == "# tarn_dffp_1"
    assert "- corner typical: 1.2 V" in lines
    assert CAUTION in lines
    assert "## Corner typical" in lines
    begin = lines.index("### Delay of Q fall from CK rise [ps]") + 2
    assert cells(lines[begin])[1:] == ["1 fF", "5.5 fF"]
    assert cells(lines[begin + 1]) == ["---:"] * 3
    assert cells(lines[begin + 2]) == ["10 ps", "11.00", "15.50"]
    assert cells(lines[begin + 3]) == ["50 ps", "51.00", "55.50"]


def test_markdown_shows_a_dash_and_the_reason_where_there_is_no_value(make_row: MakeRow) -> None:
    text = to_markdown("c", [], [make_row(value_ps=None, status="no offset fails")])
    assert "| 10 ps | - |" in text
    assert re.search(r"^- no value at clock slew 10 ps.*: no offset fails$", text, re.MULTILINE)


HOSTILE = [
    "<b>",
    "<script>alert(1)</script>",
    "a|b",
    "[x](http://example.org)",
    "![x](http://example.org/x.png)",
    "`code`",
    "*bold*",
    "_slanted_",
    "a\n# heading",
    "\x1b[31mred",
    "&lt;b&gt;",
    "\\",
]


@pytest.mark.parametrize("name", HOSTILE)
def test_a_hostile_name_makes_no_mark_up_of_its_own(make_row: MakeRow, name: str) -> None:
    plain = to_markdown("X", ["X"], [make_row(setup=True, pin="X", corner="X", value_ps=None, status="X")])
    text = to_markdown(
        name, [name], [make_row(setup=True, pin=name, corner=name, value_ps=None, status=name)]
    )
    assert len(text.splitlines()) == len(plain.splitlines())
    assert [len(cells(line)) for line in text.splitlines()] == [
        len(cells(line)) for line in plain.splitlines()
    ]
    assert "<" not in text
    assert "\x1b" not in text
    for mark in ("*", "`", "[", "]"):
        body = "\n".join(line for line in text.splitlines() if not line.startswith("### "))
        assert not re.search(rf"(?<!\\){re.escape(mark)}", body), (mark, body)
    assert not re.search(r"(?<![\w\\])_|(?<!\\)_(?!\w)", text)


@pytest.mark.parametrize("name", ["D<3>", "data[7]", "a_1059_315#", "next.state", "n-1"])
def test_an_ordinary_name_reads_as_itself_once_rendered(make_row: MakeRow, name: str) -> None:
    import html

    text = to_markdown("c", [], [make_row(setup=True, pin=name)])
    rendered = html.unescape(re.sub(r"\\([!-/:-@\[-`{-~])", r"\1", text))
    assert f"### Setup of {name} rise before CK rise [ps]" in rendered


def test_the_terminal_shows_each_grid_and_the_reason_of_each_hole(make_row: MakeRow) -> None:
    out = io.StringIO()
    rows = [
        make_row(value_ps=142.0776),
        make_row(setup=True, pin="[red]D", value_ps=None, status="no offset passes"),
    ]
    print_tables(Console(file=out, width=100, soft_wrap=True, highlight=False), rows)
    text = out.getvalue()
    assert "typical: delay of Q fall from CK rise [ps]" in text
    assert re.search(r"10 ps +142\.08", text)
    assert "typical: setup of [red]D rise before CK rise [ps]" in text
    assert "no value: setup [red]D at typical: no offset passes" in text
