"""Libraries read back through the registry package liberty-parser (Thomas Kramer, GPL-3.0)."""

from __future__ import annotations

import json
from collections.abc import Callable
from pathlib import Path
from typing import Any

import pytest

from charflow.errors import InputError
from charflow.sheet.demo import decks_folder
from charflow.tables.flat import Row
from charflow.tables.folder import read_tables
from charflow.tables.liberty.library import library_texts
from charflow.tables.liberty.read import as_liberty_says, rows_from_liberty

CELLS = sorted(path.stem for path in decks_folder().glob("*.toml"))

pytest.importorskip("liberty", reason="the package liberty-parser is not installed")


def _values(rows: tuple[Row, ...]) -> dict[tuple[object, ...], float | None]:
    found: dict[tuple[object, ...], float | None] = {}
    for r in rows:
        key = (r.corner, r.quantity, r.pin, r.pin_edge, r.related_pin, r.related_edge, r.output)
        point = (*key, r.output_edge, r.when, r.clock_slew_ps, r.data_slew_ps, r.load_ff)
        assert point not in found
        found[point] = r.value_ps
    return found


@pytest.mark.parametrize("cell", CELLS)
def test_every_number_of_the_library_is_one_of_ours_at_its_own_place(
    cell: str, make_folder: Callable[..., Path], tmp_path: Path
) -> None:
    folder = make_folder(cell)
    (library,) = library_texts([folder], cell)
    path = tmp_path / "cell.lib"
    path.write_text(library.text, encoding="utf-8")

    read = rows_from_liberty(path, cell)

    ours = as_liberty_says(read_tables(folder).rows, 5.0)
    assert _values(read) == _values(ours)


def test_what_liberty_says_of_a_pulse_is_the_worst_over_outputs(make_row: Callable[..., Row]) -> None:
    base: dict[str, Any] = {"quantity": "pulse_width", "pin": "CK", "pin_edge": "rise", "load_ff": 5.0}
    rows = (make_row(**base, output="Q", value_ps=40.0), make_row(**base, output="QN", value_ps=60.0))
    (row,) = as_liberty_says(rows, 5.0)
    assert (row.value_ps, row.output, row.load_ff) == (60.0, "", 0.0)


LIBRARY = """
library (other) {{
  time_unit : "1ns"; capacitive_load_unit (1.0, "pf"); slew_derate_from_library : {derate};
  lu_table_template (d) {{ variable_1 : total_output_net_capacitance; variable_2 : input_net_transition;
    index_1 ("0.001, 0.002"); index_2 ("0.01, 0.02"); }}
  cell (x) {{
    ff (IQ, IQN) {{ clocked_on : "CK"; next_state : "D"; }}
    pin (CK) {{ direction : input; clock : true; }}
    pin (Q) {{ direction : output; timing () {{ related_pin : "CK"; timing_type : rising_edge;
      rise_transition (d) {{ values ("0.1, 0.2", "0.3, 0.4"); }}
      cell_rise (d) {{ values ("1.1, 1.2", "1.3, 1.4"); }} }} }}
  }}
}}
"""


def test_units_axis_order_and_derating_of_another_library_are_understood(tmp_path: Path) -> None:
    path = tmp_path / "other.lib"
    path.write_text(LIBRARY.format(derate="0.5"), encoding="utf-8")
    rows = {(r.quantity, r.clock_slew_ps, r.load_ff): r.value_ps for r in rows_from_liberty(path)}
    assert rows["clk_to_q", 5.0, 1.0] == 1100.0  # a slew of 0.01 ns between thresholds is 5 ps
    assert rows["clk_to_q", 10.0, 1.0] == 1200.0
    assert rows["clk_to_q", 5.0, 2.0] == 1300.0
    assert rows["transition", 5.0, 2.0] == 150.0


@pytest.mark.parametrize(
    ("text", "says"),
    [
        ("", "not Liberty"),
        ("library (a) { cell (b) {", "not Liberty"),
        ('library (a) { time_unit : "1ns"; capacitive_load_unit (1, pf); }', "no cell"),
        ("library (a) { cell (x) { } }", "time_unit"),
        (LIBRARY.format(derate="1").replace('"0.1, 0.2", ', ""), "values where"),
        (LIBRARY.format(derate="1").replace("input_net_transition", "mystery"), "mystery"),
    ],
)
def test_a_library_that_cannot_be_understood_is_refused_with_its_name(
    text: str, says: str, tmp_path: Path
) -> None:
    path = tmp_path / "odd.lib"
    path.write_text(text, encoding="utf-8")
    with pytest.raises(InputError, match=says) as caught:
        rows_from_liberty(path)
    assert "odd.lib" in str(caught.value)


def _published_text(cell: dict[str, Any]) -> str:
    """Return Liberty text of the published timing of a cell: the JSON's groups, nothing more."""
    axes = {3: ("related_pin_transition", "constrained_pin_transition")}
    templates: list[str] = []

    def table(name: str, values: dict[str, Any], variables: tuple[str, str]) -> str:
        template = f"t{len(templates)}"
        lines = [f"variable_{i} : {v};" for i, v in enumerate(variables, start=1)]
        templates.append(f"lu_table_template ({template}) {{ {' '.join(lines)} }}")
        index = [f'index_{i} ("{", ".join(map(str, values[f"index_{i}"]))}");' for i in (1, 2)]
        rows = ", ".join(f'"{", ".join(map(str, row))}"' for row in values["values"])
        return f"{name} ({template}) {{ {' '.join(index)} values ({rows}); }}"

    pins = []
    for pin, facts in cell["pins"].items():
        groups = []
        for timing in facts["timing"]:
            constraint = timing["timing_type"].startswith(("setup", "hold"))
            if not constraint and timing["timing_type"] != "rising_edge":
                continue
            variables = axes[3] if constraint else ("input_net_transition", "total_output_net_capacitance")
            tables = [table(k, v, variables) for k, v in timing.items() if isinstance(v, dict)]
            head = f'related_pin : "{timing["related_pin"]}"; timing_type : "{timing["timing_type"]}";'
            groups.append(f"timing () {{ {head} {' '.join(tables)} }}")
        clock = "clock : true;" if pin == "CLK" else ""
        pins.append(f"pin ({pin}) {{ {clock} {' '.join(groups)} }}")
    head = 'time_unit : "1ns"; capacitive_load_unit (1.0, "pf"); slew_derate_from_library : 1.0;'
    body = f'cell (dfxtp_1) {{ ff (IQ, IQN) {{ clocked_on : "CLK"; next_state : "D"; }} {" ".join(pins)} }}'
    return f"library (published) {{ {head} {' '.join(templates)} {body} }}"


def test_the_published_tables_of_an_open_cell_come_through_whole(
    shared_reference: Path, tmp_path: Path
) -> None:
    """Source: google/skywater-pdk-libs-sky130_fd_sc_hd, dfxtp_1 at tt, 25 C, 1.8 V (Apache-2.0)."""
    published = json.loads((shared_reference / "sky130" / "dfxtp_1_published.json").read_text())
    path = tmp_path / "published.lib"
    path.write_text(_published_text(published), encoding="utf-8")

    rows = rows_from_liberty(path, corner="typical")

    setup = [r for r in rows if r.quantity == "setup" and r.pin_edge == "rise"]
    (timing,) = [t for t in published["pins"]["D"]["timing"] if t["timing_type"] == "setup_rising"]
    wanted = [1000 * v for line in timing["rise_constraint"]["values"] for v in line]
    assert [r.value_ps for r in setup] == pytest.approx(wanted, abs=1e-6)
    assert {r.related_pin for r in setup} == {"CLK"}
    assert {r.related_edge for r in setup} == {"rise"}
    # the README of the reference data: clock-to-q at 10 ps and 0.5 fF is 269.2 (rise) and 265.2 ps (fall)
    first = {
        r.output_edge: r.value_ps
        for r in rows
        if r.quantity == "clk_to_q" and (r.clock_slew_ps, r.load_ff) == (10.0, 0.5)
    }
    assert first == pytest.approx({"rise": 269.2, "fall": 265.2}, abs=0.1)
