"""One row a number, in the columns the design states; CSV and back without loss."""

from __future__ import annotations

import csv
import io
from collections.abc import Callable
from dataclasses import astuple, replace

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from charflow.errors import CharflowError, InputError
from charflow.plan.arcs import Kind
from charflow.solve.answer import Answer
from charflow.tables.flat import COLUMNS, Row, from_csv, row_of, to_csv

MakeRow = Callable[..., Row]

# no surrogates (not UTF-8), no NUL (not CSV), no carriage return: names and reasons are one line
texts = st.text(st.characters(exclude_categories=("Cs",), exclude_characters="\0\r"), max_size=8)
# as row_of makes them: rounded to 0.1 fs, or 1e-6 of ps and fF
values = st.floats(-1e9, 1e9).map(lambda x: round(x, 4) + 0.0)
points = st.floats(1e-6, 1e9).map(lambda x: round(x, 6))
rows = st.builds(
    Row,
    **dict.fromkeys(
        ("corner", "pin", "pin_edge", "related_pin", "related_edge", "output", "output_edge"), texts
    ),
    quantity=st.sampled_from([kind.value for kind in Kind]),
    when=texts,
    clock_slew_ps=points,
    data_slew_ps=st.none() | points,
    load_ff=points,
    value_ps=st.none() | values,
    bracket_ps=st.none() | values,
    status=texts,
    transients=st.integers(0, 10**6),
    key=texts,
)


def test_the_columns_are_those_of_the_design() -> None:
    assert ",".join(COLUMNS) == (
        "corner,quantity,pin,pin_edge,related_pin,related_edge,output,output_edge,when,clock_slew_ps,"
        "data_slew_ps,load_ff,value_ps,bracket_ps,status,transients,key"
    )
    assert to_csv([]) == ",".join(COLUMNS) + "\n"


@settings(max_examples=40)
@given(st.lists(rows, max_size=2))
def test_rows_come_back_from_csv_as_they_were(original: list[Row]) -> None:
    assert from_csv(to_csv(original), "x.csv") == tuple(original)


def test_a_column_that_does_not_apply_is_empty(make_row: MakeRow) -> None:
    (line,) = csv.DictReader(io.StringIO(to_csv([make_row()])))
    assert {name for name, text in line.items() if text == ""} == {
        "pin",
        "pin_edge",
        "when",
        "data_slew_ps",
        "bracket_ps",
    }


def test_a_point_without_an_answer_has_an_empty_value_and_its_reason(make_row: MakeRow) -> None:
    row = make_row(value_ps=None, status="no offset passes: tried up to 90.0 ps")
    (line,) = csv.DictReader(io.StringIO(to_csv([row])))
    assert (line["value_ps"], line["status"]) == ("", "no offset passes: tried up to 90.0 ps")


@pytest.mark.parametrize(
    "name",
    ["D<3>", "a,b", 'he said "no"', "=1+1", "líne\nbreak", "tab\there", "'; DROP TABLE rows; --"],
)
def test_hostile_names_are_one_cell_and_come_back(make_row: MakeRow, name: str) -> None:
    row = make_row(setup=True, pin=name, status=name, when=name)
    text = to_csv([row])
    assert len(list(csv.reader(io.StringIO(text)))) == 2
    assert from_csv(text, "x.csv") == (row,)


def test_an_answer_in_seconds_and_farads_becomes_a_row_in_ps_and_ff() -> None:
    answer = Answer(
        corner="typical",
        quantity=Kind.HOLD,
        pin="D",
        pin_edge="fall",
        related_pin="CK",
        related_edge="rise",
        output="",
        output_edge="",
        when="SE",
        clock_slew=53.1e-12,
        data_slew=0.5e-9,
        load=9.00162e-15,
        value=-12.34567891e-12,
        bracket=4.2e-14,
        status="pushout",
        transients=5,
        key="abc",
    )
    row = row_of(answer)
    assert (row.clock_slew_ps, row.data_slew_ps, row.load_ff) == (53.1, 500.0, 9.00162)
    assert (row.value_ps, row.bracket_ps) == (-12.3457, 0.042)
    assert (row.quantity, row.when, row.transients) == ("hold", "SE", 5)
    nothing = row_of(replace(answer, value=None, bracket=None, data_slew=None))
    assert (nothing.value_ps, nothing.bracket_ps, nothing.data_slew_ps) == (None, None, None)


def test_a_tiny_negative_value_is_no_negative_zero() -> None:
    row = row_of(Answer("c", Kind.HOLD, *[""] * 7, 1e-11, None, 1e-15, -1e-18, None, "", 1, ""))
    assert str(row.value_ps) == "0.0"


# ---------------------------------------------------------------- what is no table


@pytest.mark.parametrize("text", ["", "\n", "corner,quantity\n", "a,b,c\n1,2,3\n", "PK\x03\x04junk"])
def test_text_without_the_columns_is_no_table(text: str) -> None:
    with pytest.raises(InputError, match=r"x\.csv: this is not a table of charflow.*\n.*Expected corner,"):
        from_csv(text, "x.csv")


@pytest.mark.parametrize(
    ("column", "text", "message"),
    [
        ("value_ps", "fast", r"value_ps: 'fast' is not a number"),
        ("value_ps", "nan", r"value_ps: nan is not a finite number"),
        ("value_ps", "-inf", r"value_ps: -inf is not a finite number"),
        ("value_ps", "1e300", r"value_ps: 1e\+300 is not a finite number"),
        ("bracket_ps", "1,5", r"18 columns, expected 17"),
        ("load_ff", "", r"load_ff is empty"),
        ("transients", "", r"transients is empty"),
        ("transients", "2.5", r"transients: '2.5' is not a number"),
        ("transients", "9" * 5000, r"transients: '9+' is not a number"),
        ("quantity", "speed", r"quantity: 'speed' is not known"),
    ],
)
def test_a_wrong_cell_is_named_with_file_line_and_column(
    make_row: MakeRow, column: str, text: str, message: str
) -> None:
    good = to_csv([make_row()]).splitlines()
    cells = good[1].split(",")
    cells[COLUMNS.index(column)] = text
    with pytest.raises(InputError, match=r"old/x\.csv:3: " + message):
        from_csv("\n".join([*good, ",".join(cells)]), "old/x.csv")


def test_a_line_cut_short_is_named(make_row: MakeRow) -> None:
    text = to_csv([make_row()])
    with pytest.raises(InputError, match=r"x\.csv:2: 11 columns, expected 17"):
        from_csv(",".join(text.split(",")[:27]), "x.csv")


@given(st.text(max_size=200))
def test_any_text_is_a_table_or_a_charflow_error(text: str) -> None:
    header = ",".join(COLUMNS) + "\n"
    for content in (text, header + text):
        try:
            found = from_csv(content, "x.csv")
        except CharflowError:
            continue
        assert all(len(astuple(row)) == len(COLUMNS) for row in found)
