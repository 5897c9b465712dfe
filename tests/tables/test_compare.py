"""What moved between two tables is found, measured as stated, and nothing that differs is left out."""

from __future__ import annotations

import json
from collections.abc import Callable
from dataclasses import replace
from pathlib import Path

import pytest
from hypothesis import given
from hypothesis import strategies as st

from charflow.errors import InputError
from charflow.tables.compare import DELAY_FLOOR, FLOOR, Change, compare, subject
from charflow.tables.compare_text import comparison_facts, lists, percent, summary
from charflow.tables.flat import Row, from_csv, to_csv
from charflow.tables.folder import Tables, write_tables
from charflow.tables.sides import Side, differing_facts, floor_of, limit_of, read_side

MakeRow = Callable[..., Row]
SLEWS = (10.0, 50.0, 200.0)


@pytest.fixture(scope="session")
def table(make_row: MakeRow) -> tuple[Row, ...]:
    """Three delays and three setups, of 100 and of 20 ps."""
    delays = tuple(make_row(clock_slew_ps=slew, value_ps=100.0, key=f"d{slew:g}") for slew in SLEWS)
    setups = tuple(
        make_row(setup=True, clock_slew_ps=slew, value_ps=20.0, bracket_ps=0.1, key=f"s{slew:g}")
        for slew in SLEWS
    )
    return delays + setups


def moved(rows: tuple[Row, ...], index: int, value: float | None, **changes: object) -> tuple[Row, ...]:
    return tuple(replace(r, value_ps=value, **changes) if i == index else r for i, r in enumerate(rows))


def test_a_table_does_not_differ_from_itself(table: tuple[Row, ...]) -> None:
    found = compare(table, table)
    assert len(found.changes) == 6
    assert [c.ps for c in found.changes] == [0.0] * 6
    assert found.turned + found.appeared + found.vanished + found.only_old + found.only_new == ()
    assert found.worst(10) == []
    assert found.within(0.0)
    assert found.axes() == []


def test_a_delay_is_measured_against_its_old_value(table: tuple[Row, ...]) -> None:
    (change,) = compare(table, moved(table, 1, 103.0)).worst(9)
    assert (change.ps, change.fraction) == (pytest.approx(3.0), pytest.approx(0.03))


@pytest.mark.parametrize(
    ("before", "after", "fraction"),
    [(0.1, 0.3, 0.2 / FLOOR), (0.0, -1.0, -1.0 / FLOOR), (-20.0, -21.0, -0.05), (20.0, -20.0, -2.0)],
)
def test_a_constraint_near_zero_is_measured_against_the_floor(
    table: tuple[Row, ...], before: float, after: float, fraction: float
) -> None:
    found = compare(moved(table, 4, before), moved(table, 4, after))
    assert found.worst(1)[0].fraction == pytest.approx(fraction)


def test_the_floor_can_be_set_and_is_not_that_of_delays(table: tuple[Row, ...]) -> None:
    old, new = moved(moved(table, 4, 1.0), 0, 0.5), moved(moved(table, 4, 2.0), 0, 1.0)
    fractions = {c.new.quantity: c.fraction for c in compare(old, new, floor=4.0).worst(2)}
    assert fractions == {"setup": pytest.approx(1 / 4.0), "clk_to_q": pytest.approx(0.5 / DELAY_FLOOR)}


def test_a_change_no_larger_than_both_brackets_has_not_moved(table: tuple[Row, ...]) -> None:
    assert [c.moved for c in compare(table, moved(table, 4, 20.19)).worst(1)] == [False]
    assert [c.moved for c in compare(table, moved(table, 4, 20.21)).worst(1)] == [True]
    assert [c.moved for c in compare(table, moved(table, 0, 100.0001)).worst(1)] == [True]  # has no bracket


@pytest.mark.parametrize(
    ("index", "before", "after", "turned"),
    [(4, 0.5, -0.5, True), (4, -0.5, 0.0, True), (4, 0.5, 0.0, False), (0, 0.5, -0.5, False)],
)
def test_only_a_constraint_can_change_sign(
    table: tuple[Row, ...], index: int, before: float, after: float, turned: bool
) -> None:
    found = compare(moved(table, index, before), moved(table, index, after))
    assert bool(found.turned) is turned


def test_values_that_appear_vanish_or_never_were_are_told_apart(table: tuple[Row, ...]) -> None:
    old = moved(moved(table, 0, None), 1, None)
    new = moved(moved(table, 1, None), 2, None, status="no offset passes")
    found = compare(old, new)
    assert [b.clock_slew_ps for _, b in found.appeared] == [10.0]
    assert [b.clock_slew_ps for _, b in found.unanswered] == [50.0]
    assert [(a.value_ps, b.status) for a, b in found.vanished] == [(100.0, "no offset passes")]
    assert len(found.changes) == 3


def test_points_of_one_side_only_are_named_by_their_axis(table: tuple[Row, ...]) -> None:
    new = tuple(replace(r, clock_slew_ps=80.0) if r.clock_slew_ps == 200.0 else r for r in table)
    found = compare(table, new)
    assert [r.clock_slew_ps for r in found.only_old] == [200.0, 200.0]
    assert [r.clock_slew_ps for r in found.only_new] == [80.0, 80.0]
    assert found.axes() == [("clock_slew_ps", [200.0], [80.0])]
    (_, told), *_ = [item for item in lists(found) if "points" in item[0]]
    assert told == ["clock slew: only in old 200 ps", "clock slew: only in new 80 ps"]


def test_groups_are_by_corner_quantity_pin_and_edge_and_tell_largest_and_median(
    table: tuple[Row, ...],
) -> None:
    new = moved(moved(moved(table, 0, 101.0), 1, 104.0), 2, 98.0)
    delays, setups = compare(table, new).groups()
    assert (delays.corner, delays.quantity, delays.pin, delays.edge) == ("typical", "clk_to_q", "Q", "fall")
    assert (setups.quantity, setups.pin, setups.edge) == ("setup", "D", "rise")
    assert (delays.typical_ps, delays.typical) == (pytest.approx(1.0), pytest.approx(0.01))
    assert delays.largest.new.key == delays.largest_ps.new.key == "d50"
    assert (delays.moved, setups.moved) == (3, 0)


def test_the_largest_in_ps_need_not_be_the_largest_in_per_cent(table: tuple[Row, ...]) -> None:
    old = moved(table, 0, 10.0)
    group = compare(old, moved(moved(old, 0, 12.0), 1, 105.0)).groups()[0]
    assert group.largest_ps.ps == pytest.approx(5.0)
    assert group.largest.ps == pytest.approx(2.0)


@pytest.mark.parametrize(("limit", "within"), [(0.0199, False), (0.02, True), (0.03, True)])
def test_the_limit_itself_is_still_within(table: tuple[Row, ...], limit: float, within: bool) -> None:
    assert compare(table, moved(table, 0, 102.0)).within(limit) is within


def test_what_the_new_side_lost_is_beyond_every_limit_and_what_it_gained_is_not(
    table: tuple[Row, ...],
) -> None:
    assert not compare(table, moved(table, 0, None)).within(9.0)
    assert not compare(table, table[1:]).within(9.0)
    assert compare(moved(table, 0, None), table).within(0.0)
    assert compare(table[1:], table).within(0.0)


def test_a_point_twice_on_a_side_is_refused_by_name(table: tuple[Row, ...]) -> None:
    with pytest.raises(InputError, match=r"the new table holds a point twice: setup of 'D rise' .*200 ps"):
        compare(table, (*table, replace(table[-1], value_ps=1.0)))


def test_tables_without_a_common_point_are_refused_with_what_each_holds(table: tuple[Row, ...]) -> None:
    other = tuple(replace(row, corner="slow") for row in table)
    with pytest.raises(InputError, match=r"no point in common.*'typical'.*old.*'slow'.*new"):
        compare(table, other)
    with pytest.raises(InputError, match="nothing in the new one"):
        compare(table, ())


values = st.floats(-1e4, 1e4).map(lambda v: round(v, 4)) | st.none()


@given(st.lists(st.tuples(values, values), min_size=1, max_size=12))
def test_every_point_is_accounted_for_once_and_exchanging_the_sides_turns_every_sign(
    make_row: MakeRow, pairs: list[tuple[float | None, float | None]]
) -> None:
    old, new = (
        tuple(make_row(setup=True, load_ff=float(n), value_ps=pair[side]) for n, pair in enumerate(pairs))
        for side in (0, 1)
    )
    found, back = compare(old, new), compare(new, old)
    parts = (found.changes, found.appeared, found.vanished, found.unanswered)
    assert sum(map(len, parts)) == len(pairs)
    assert [c.ps for c in back.changes] == [-c.ps for c in found.changes]
    assert len(back.appeared) == len(found.vanished)
    assert len(back.turned) == len(found.turned)


# ---------------------------------------------------------------- the two sides


def test_a_folder_and_its_csv_file_are_the_same_side(tmp_path: Path, table: tuple[Row, ...]) -> None:
    write_tables(tmp_path, Tables("cell", (), {"pushout": 0.1}, table))
    folder, file = read_side(tmp_path), read_side(tmp_path / "tables.csv")
    assert folder.rows == file.rows == table
    assert (folder.cell, file.cell) == ("cell", "")


@pytest.mark.parametrize("change", [lambda t: t.replace("\n", "\r\n"), lambda t: "\ufeff" + t])
def test_a_table_that_went_through_a_spreadsheet_is_read(
    tmp_path: Path, table: tuple[Row, ...], change: Callable[[str], str]
) -> None:
    path = tmp_path / "t.csv"
    path.write_bytes(change(to_csv(table)).encode())
    assert read_side(path).rows == table


@pytest.mark.parametrize(
    ("content", "reason"),
    [
        (b"\xff\xfe\x00", "not UTF-8"),
        (b"", "its first line does not name the columns"),
        (b"PK\x03\x04junk", "its first line"),
        (b"a,b\n1,2\n", "its first line"),
    ],
)
def test_what_is_no_table_is_refused_by_its_name(tmp_path: Path, content: bytes, reason: str) -> None:
    path = tmp_path / "other.csv"
    path.write_bytes(content)
    with pytest.raises(InputError, match=rf"other\.csv.*{reason}"):
        read_side(path)


def test_a_side_that_is_not_there_is_refused(tmp_path: Path) -> None:
    with pytest.raises(InputError, match="no such run folder or table"):
        read_side(tmp_path / "nothing")
    with pytest.raises(InputError, match="holds no tables"):
        read_side(tmp_path)


def test_sides_measured_under_other_definitions_are_said_to_be() -> None:
    corner = {"models": ["a.lib:tt"], "supply_v": 1.2, "temperature_c": 25.0}
    old = Side("old", (), "x", {"pushout": 0.1, "ngspice": 39, "corners": {"t": corner}})
    new = Side("new", (), "y", {"pushout": 0.05, "corners": {"t": corner | {"supply_v": 1.1}}})
    assert differing_facts(old, new) == [
        ("cell", "x", "y"),
        ("pushout", 0.1, 0.05),
        ("supply of corner t", 1.2, 1.1),
    ]
    assert differing_facts(old, old) == []


@pytest.mark.parametrize("text", ["2%", "2 %", "2", " 2 % "])
def test_a_limit_is_per_cent_however_it_is_written(text: str) -> None:
    assert limit_of(text) == pytest.approx(0.02)


@pytest.mark.parametrize("text", ["", "%", "two", "-1%", "nan", "inf %", "2 ps", "2 % %"])
def test_a_limit_that_is_none_is_refused(text: str) -> None:
    with pytest.raises(InputError):
        limit_of(text)


def test_a_floor_needs_a_unit_and_is_above_zero() -> None:
    assert floor_of("0.01 ns") == pytest.approx(10.0)
    for text in ("10", "0 ps", "-5 ps", "1 V", "1e-30 s"):
        with pytest.raises(InputError):
            floor_of(text)


# ---------------------------------------------------------------- for people and programs


def test_the_summary_counts_what_moved_and_judges_the_limit(table: tuple[Row, ...]) -> None:
    found = compare(table, moved(moved(table, 0, 103.0), 4, 20.05))
    first, last = summary(found, 0.02)
    assert first == "6 values compared: 4 the same, 1 changed within their brackets, 1 moved further"
    assert last == "BEYOND the limit of 2 %: 1 values moved further"
    assert summary(found, 0.03)[-1].startswith("within the limit of 3 %")


def test_json_has_every_change_largest_first_with_its_keys(table: tuple[Row, ...]) -> None:
    new = moved(moved(table, 0, 101.0, key="n"), 4, 24.0)
    facts = comparison_facts(Side("a", table), Side("b", new), compare(table, new), 0.02)
    facts = json.loads(json.dumps(facts, allow_nan=False))
    assert [c["change_ps"] for c in facts["changes"]] == [pytest.approx(4.0), pytest.approx(1.0)]
    assert (facts["changes"][1]["old_key"], facts["changes"][1]["new_key"]) == ("d10", "n")
    assert (facts["within_limit"], facts["limit"], facts["compared"]) == (False, 0.02, 6)
    assert facts["floor_ps"] == {"constraints": FLOOR, "others": DELAY_FLOOR}


def test_huge_changes_print_in_a_few_characters() -> None:
    assert percent(0.0123) == "+1.23 %"
    assert len(percent(-1.5e15)) < 12


def test_a_value_is_about_its_input_or_else_its_output(table: tuple[Row, ...]) -> None:
    assert subject(table[0]) == ("Q", "fall")
    assert subject(table[3]) == ("D", "rise")


def test_a_change_of_nothing_is_zero_even_at_zero(make_row: MakeRow) -> None:
    row = make_row(setup=True, value_ps=0.0)
    assert Change(row, row, 0.0, 0.0, FLOOR).fraction == 0.0


# ---------------------------------------------------------------- the command


@pytest.fixture
def two_sides(tmp_path: Path, table: tuple[Row, ...]) -> tuple[Path, Path]:
    old, new = tmp_path / "old.csv", tmp_path / "new"
    old.write_text(to_csv(table))
    new.mkdir()
    write_tables(new, Tables("cell", (), {}, moved(moved(table, 0, 103.0, key="k" * 24), 4, -1.0)))
    return old, new


@pytest.mark.parametrize(("limit", "code"), [("1%", 1), ("250 %", 0), ("211", 0), ("x", 2)])
def test_the_exit_status_follows_the_limit(
    run_cli: Callable[..., object], two_sides: tuple[Path, Path], limit: str, code: int
) -> None:
    assert run_cli("compare", *two_sides, "--limit", limit).code == code  # type: ignore[attr-defined]


def test_the_command_tells_what_moved_with_whole_keys_in_a_narrow_terminal(
    run_cli: Callable[..., object], two_sides: tuple[Path, Path]
) -> None:
    ran = run_cli("compare", *two_sides, env={"COLUMNS": "40"})
    assert ran.code == 0  # type: ignore[attr-defined]
    text = ran.stdout  # type: ignore[attr-defined]
    assert f"key d10 -> {'k' * 24}" in text
    assert "or by 10 ps for a smaller constraint" in text
    assert "-105.00 %" in text
    assert "constraints that changed sign (1)" in text
    assert "\u2026" not in text


def test_the_command_prints_json_and_draws(
    run_cli: Callable[..., object], two_sides: tuple[Path, Path], tmp_path: Path
) -> None:
    ran = run_cli("compare", *two_sides, "--json", "--picture", tmp_path / "c.svg")
    assert json.loads(ran.stdout)["changed_sign"][0]["new_ps"] == -1.0  # type: ignore[attr-defined]
    assert (tmp_path / "c.svg").read_text().startswith("<?xml")


def test_from_csv_still_reads_what_compare_was_given(two_sides: tuple[Path, Path]) -> None:
    assert len(from_csv(two_sides[0].read_text(), "old")) == 6
