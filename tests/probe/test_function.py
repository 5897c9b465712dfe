"""Before any timing the cell must do what its sheet says; where it does not, the error shows what it did."""

from __future__ import annotations

import re
from pathlib import Path

import pytest

from charflow.campaign.run import run_campaign
from charflow.errors import FunctionError
from charflow.sheet.demo import decks_folder
from charflow.sheet.read import read_sheet

pytestmark = pytest.mark.ngspice


def failing(folder: Path, cell: str, *edits: tuple[str, str], extra: str = "") -> FunctionError:
    """Run a Tarn cell with a sheet altered by ``edits`` and return the error."""
    text = (decks_folder() / f"{cell}.toml").read_text()
    text = re.sub(r'"(tarn\w+\.(?:spice|lib))', rf'"{decks_folder()}/\1', text)
    for old, new in edits:
        assert old in text
        text = text.replace(old, new)
    (folder / "cell.toml").write_text(text + extra)
    with pytest.raises(FunctionError) as caught:
        run_campaign(read_sheet(folder / "cell.toml"), folder / "run", workers=1, corners=("typical",))
    return caught.value


def pictures(folder: Path) -> list[str]:
    return [path.name for path in (folder / "run").glob("*.png") if path.stat().st_size > 5000]


def test_a_clock_described_with_the_wrong_edge_is_found_with_vector_and_picture(tmp_path: Path) -> None:
    error = failing(tmp_path, "tarn_dffp_1", ('active = "rise"', 'active = "fall"'))
    assert "stored state=" in str(error)
    assert re.search(r"expected Q=0 afterwards, saw 1\.00 of supply", error.message)
    assert pictures(tmp_path) == ["mismatch_typical.png"]
    assert "mismatch_typical.png" in str(error)


def test_an_output_described_upside_down_is_found(tmp_path: Path) -> None:
    error = failing(tmp_path, "tarn_dffp_1", ('shows = "!state"', 'shows = "state"'))
    assert error.message.startswith("QN should show")


def test_a_clock_gate_described_as_a_latch_is_found(tmp_path: Path) -> None:
    error = failing(tmp_path, "tarn_icgp_1", ('shows = "state & CK"', 'shows = "state"'))
    assert "expected GCK=1 afterwards, saw 0.00 of supply" in error.message


def test_a_clear_of_the_wrong_level_is_found(tmp_path: Path) -> None:
    failing(tmp_path, "tarn_dffcp_1", ('role = "clear", active = "low"', 'role = "clear", active = "high"'))


def test_a_wrong_next_state_is_found(tmp_path: Path) -> None:
    failing(tmp_path, "tarn_icgtp_1", ('next_state = "E | TE"', 'next_state = "E & TE"'))


def test_a_dynamic_cell_that_leaks_its_state_within_the_rest_says_so(tmp_path: Path) -> None:
    edits = (("130.lib:tt", "130.lib:ff"), ('"1.2 V"', '"1.32 V"'), ('"25 C"', '"125 C"'))
    error = failing(tmp_path, "tarn_dyn_1", *edits, extra='rest = "4 us"\n')
    assert error.message.startswith("the cell loses what it stores within a rest of 4e-06 s")
    assert "dynamic" in error.todo
