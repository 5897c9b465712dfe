"""Each fault that readers let pass is found before a library is written."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import replace
from pathlib import Path

import pytest

from charflow.tables.liberty.check import liberty_check
from charflow.tables.liberty.library import library_texts
from charflow.tables.liberty.parse import parse_library
from charflow.tables.liberty.syntax import Block, Complex, Simple

pytest.importorskip("liberty", reason="the package liberty-parser is not installed")
Edit = Callable[[Simple | Complex | Block], Simple | Complex | Block | None]


@pytest.fixture
def library(make_folder: Callable[..., Path], tmp_path: Path) -> Block:
    """A sound library of the flip-flop with clear and preset, as a tree."""
    (made,) = library_texts([make_folder("tarn_dffcsp_1")], "sound")
    path = tmp_path / "sound.lib"
    path.write_text(made.text, encoding="utf-8")
    return parse_library(path)


def _edited(block: Block, edit: Edit) -> Block:
    items = []
    for item in block.items:
        changed = edit(item)
        if isinstance(changed, Block):
            changed = _edited(changed, edit)
        if changed is not None:
            items.append(changed)
    return replace(block, items=tuple(items))


def _without(name: str) -> Edit:
    return lambda item: None if item.name == name else item


def _complex(name: str, values: tuple[str, ...]) -> Edit:
    return lambda item: (
        replace(item, values=values) if isinstance(item, Complex) and item.name == name else item
    )


def _simple(name: str, value: str) -> Edit:
    return lambda item: replace(item, value=value) if isinstance(item, Simple) and item.name == name else item


def test_a_library_as_written_is_sound(library: Block) -> None:
    assert liberty_check(library) == ()


@pytest.mark.parametrize(
    ("edit", "says"),
    [
        (_complex("values", ("1, nan, 3",)), "no finite number"),
        (_complex("values", ("1, 2",)), "2 values where the axes have"),
        (_complex("index_1", ("10, 10, 50",)), "index_1 does not increase"),
        (_without("related_pin"), "has no related_pin"),
        (_simple("related_pin", "CX"), "'CX', which the cell does not have"),
        (_without("clear_preset_var1"), "no clear_preset_var1"),
        (_without("timing_sense"), "timing clear has no timing_sense"),
        (_without("time_unit"), "no time_unit"),
        (_without("capacitive_load_unit"), "no capacitive_load_unit"),
        (_without("slew_upper_threshold_pct_fall"), "no slew_upper_threshold_pct_fall"),
        (_without("voltage_map"), "no voltage_map"),
        (_without("operating_conditions"), "no operating_conditions"),
        (_without("lu_table_template"), "there is no template"),
        (_without("rise_transition"), "only one of cell_rise and rise_transition"),
        (_simple("function", "IQ & MISSING"), "'MISSING', which is no pin"),
        (_simple("clear", "!"), "clear cannot be read"),
    ],
)
def test_a_fault_is_named(library: Block, edit: Edit, says: str) -> None:
    assert any(says in problem for problem in liberty_check(_edited(library, edit)))
