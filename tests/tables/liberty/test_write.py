"""``charflow tables DIR... --format liberty``: files, holes, names."""

from __future__ import annotations

import re
from collections.abc import Callable, Sequence
from dataclasses import replace
from pathlib import Path
from typing import Any

import pytest

from charflow.errors import FolderError, InputError
from charflow.tables.flat import Row
from charflow.tables.liberty.library import library_texts

MakeFolder = Callable[..., Path]
Change = Callable[[Sequence[Row]], Sequence[Row]]
RunCli = Callable[..., Any]


def test_a_table_with_a_hole_is_an_error_that_names_it(make_folder: MakeFolder, with_hole: Change) -> None:
    with pytest.raises(
        InputError, match=r"hold of D .* no value at clock slew 10 ps, data slew 10 ps"
    ) as caught:
        library_texts([make_folder("tarn_dffp_1", with_hole)], "x")
    assert "no offset passes" in str(caught.value)
    assert "--allow-gaps" in str(caught.value)


def test_with_gaps_allowed_the_table_is_left_out_and_the_rest_stays(
    make_folder: MakeFolder, with_hole: Change
) -> None:
    (whole,) = library_texts([make_folder("tarn_dffp_1")], "x")
    (library,) = library_texts([make_folder("tarn_dffp_1", with_hole)], "x", allow_gaps=True)
    assert len(library.left_out) == 1
    assert "hold of D" in library.left_out[0]
    missing = whole.text.count("_constraint (") - library.text.count("_constraint (")
    assert missing == 1
    assert "nan" not in library.text.lower()


def test_a_point_that_was_never_measured_is_a_hole_too(make_folder: MakeFolder) -> None:
    def drop(rows: Sequence[Row]) -> Sequence[Row]:
        first = next(row for row in rows if row.quantity == "setup")
        return [row for row in rows if row is not first]

    with pytest.raises(InputError, match=r"setup of D .*not measured"):
        library_texts([make_folder("tarn_dffp_1", drop)], "x")


def test_the_pin_attribute_of_a_pulse_is_what_the_cell_decided_not_the_ramps(make_folder: MakeFolder) -> None:
    def ramps(rows: Sequence[Row]) -> Sequence[Row]:
        slow = ("pulse_width", 200.0)
        return [
            replace(row, value_ps=9999.0, status="limited by its ramps")
            if (row.quantity, row.clock_slew_ps) == slow
            else row
            for row in rows
        ]

    (library,) = library_texts([make_folder("tarn_dffp_1", ramps)], "x")
    assert "9999" in library.text
    assert not re.search(r"min_pulse_width_\w+ : 9999", library.text)


def test_one_folder_is_written_into_itself_one_file_a_corner(
    make_folder: MakeFolder, run_cli: RunCli
) -> None:
    folder = make_folder("tarn_dffp_1")
    done = run_cli("tables", folder, "--format", "liberty")
    assert done.code == 0, done.stderr
    assert (folder / "tarn_dffp_1_typical.lib").read_text().startswith('library ("tarn_dffp_1_typical")')


def test_several_folders_make_one_library_named_after_its_folder(
    make_folder: MakeFolder, run_cli: RunCli, tmp_path: Path
) -> None:
    folders = [make_folder("tarn_dffp_1"), make_folder("tarn_latp_1")]
    done = run_cli("tables", *folders, "--format", "liberty", "--out", tmp_path / "tarn")
    assert done.code == 0, done.stderr
    text = (tmp_path / "tarn" / "tarn_typical.lib").read_text()
    assert re.findall(r'cell \("(\w+)"\)', text) == ["tarn_dffp_1", "tarn_latp_1"]
    alone = run_cli("tables", *folders, "--format", "liberty")
    assert alone.code == 2
    assert "--out" in alone.stderr


def test_a_library_with_something_left_out_ends_with_status_one(
    make_folder: MakeFolder, with_hole: Change, run_cli: RunCli
) -> None:
    folder = make_folder("tarn_dffp_1", with_hole)
    assert run_cli("tables", folder, "--format", "liberty").code == 2
    done = run_cli("tables", folder, "--format", "liberty", "--allow-gaps")
    assert done.code == 1
    assert "left out: tarn_dffp_1: hold of D" in done.stdout


def test_conditions_that_differ_cannot_be_one_library(make_folder: MakeFolder) -> None:
    folders = [
        make_folder("tarn_dffp_1"),
        make_folder("tarn_latp_1", sheet_edit=('supply = "1.2 V"', 'supply = "1.1 V"')),
    ]
    with pytest.raises(
        InputError, match=r"supply of corner .typical. is 1\.2 in tarn_dffp_1 and 1\.1 in tarn_latp_1"
    ):
        library_texts(folders, "x")


def test_the_files_and_variables_a_sheet_names_need_not_be_there_any_more(make_folder: MakeFolder) -> None:
    folder = make_folder("tarn_dffp_1")
    sheet = folder / "sheet.toml"
    text = sheet.read_text()
    text = text.replace('"tarn_dffp_1.spice"', '"${GONE}/x.spice"').replace("tarn130.lib", "${GONE}/y.lib")
    sheet.write_text(text)
    (library,) = library_texts([folder], "x")
    assert 'next_state : "D"' in library.text


def test_a_folder_without_its_sheet_is_refused(make_folder: MakeFolder) -> None:
    folder = make_folder("tarn_dffp_1")
    (folder / "sheet.toml").unlink()
    with pytest.raises(FolderError, match="copy of the sheet"):
        library_texts([folder], "x")


def test_tables_of_another_cell_are_refused(make_folder: MakeFolder) -> None:
    def rename(rows: Sequence[Row]) -> Sequence[Row]:
        return [replace(row, output="ZZ") if row.output else row for row in rows]

    with pytest.raises(FolderError, match="pin 'ZZ'"):
        library_texts([make_folder("tarn_dffp_1", rename)], "x")
