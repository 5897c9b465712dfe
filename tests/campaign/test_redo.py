"""What a run into a folder would redo is said beforehand, by the right corner and with the right cause."""

from __future__ import annotations

import json
import shutil
from collections.abc import Callable
from pathlib import Path
from typing import Any

import pytest

from charflow.campaign.facts import causes, facts_of
from charflow.campaign.redo import UNPROVED, CornerRedo, redo, redo_facts, redo_text
from charflow.campaign.store import FILE, Store
from charflow.errors import FolderError
from charflow.plan.circuit import circuit_of, read_sources
from charflow.sheet import read_sheet

LIBRARY = ("tarn130.lib", "tarn130_cards.inc", "tarn_dffp_1.spice")


@pytest.fixture
def deck(tmp_path: Path, tarn: Path) -> Path:
    """A folder of its own with the models and the netlist of the demo cell."""
    folder = tmp_path / "deck"
    folder.mkdir()
    for name in LIBRARY:
        shutil.copy(tarn / name, folder / name)
    return folder


@pytest.fixture
def sheet_of(deck: Path, make_sheet: Callable[..., Path], corner: Callable[..., str]) -> Callable[..., Path]:
    """Write the sheet of two corners, tt and ss, from that folder; keywords change it."""

    def make(slow: str = "1.1 V", **changes: Any) -> Path:
        models = f"{deck}/tarn130.lib"
        both = corner(f"{models}:tt", "typical") + corner(f"{models}:ss", "slow", supply=slow)
        return make_sheet(decks=deck, corners=both, **changes)

    return make


@pytest.fixture
def asked(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> Callable[..., dict[str, CornerRedo]]:
    """Ask what a run of a sheet into the test's run folder would do."""

    def ask(sheet: Path, version: int = 39) -> dict[str, CornerRedo]:
        monkeypatch.setattr("charflow.simulate.library.library_version", lambda: version)
        return {found.corner: found for found in redo(read_sheet(sheet), tmp_path / "run")}

    return ask


Asked = Callable[..., dict[str, CornerRedo]]


def test_a_folder_without_a_run_has_everything_before_it(
    asked: Asked, sheet_of: Callable[..., Path], tmp_path: Path
) -> None:
    for _ in range(2):
        for found in asked(sheet_of()).values():
            assert (found.points_kept, found.rows_kept, found.trials_kept) == (0, 0, 0)
            assert found.causes == ("nothing was measured in this folder",)
            assert found.points > 0
        (tmp_path / "run").mkdir(exist_ok=True)


def test_a_finished_run_has_nothing_before_it_and_asking_changes_nothing(
    asked: Asked, sheet_of: Callable[..., Path], formula_run: Callable[..., Any], tmp_path: Path
) -> None:
    sheet = sheet_of()
    result = formula_run(sheet)
    before = {p.name: p.read_bytes() for p in (tmp_path / "run").iterdir() if p.is_file()}
    found = asked(sheet)
    assert [c.causes for c in found.values()] == [(), ()]
    assert sum(c.points_kept for c in found.values()) == len(result.answers)
    assert {p.name: p.read_bytes() for p in (tmp_path / "run").iterdir() if p.is_file()} == before


def test_what_is_foretold_is_what_the_run_does(
    asked: Asked, sheet_of: Callable[..., Path], formula_run: Callable[..., Any], deck: Path
) -> None:
    sheet = sheet_of()
    formula_run(sheet)
    library = deck / "tarn130.lib"
    library.write_text(library.read_text().replace("tarn_dvthn=0.03 ", "tarn_dvthn=0.031 ", 1))
    found = asked(sheet)
    assert found["typical"].causes == ()
    assert found["slow"].causes == ("the models changed",)
    assert (found["slow"].points_kept, found["slow"].trials_kept) == (0, 0)
    alone = formula_run(sheet, "slow", corners=("slow",)).transients
    assert formula_run(sheet).transients == alone
    assert [c.causes for c in asked(sheet).values()] == [(), ()]


def test_comments_and_layout_of_the_models_are_no_change(
    asked: Asked, sheet_of: Callable[..., Path], formula_run: Callable[..., Any], deck: Path
) -> None:
    sheet = sheet_of()
    formula_run(sheet)
    for name in LIBRARY:
        path = deck / name
        path.write_text("* another comment\n\n" + path.read_text().replace("\n", "  \r\n"))
    assert [c.causes for c in asked(sheet).values()] == [(), ()]


@pytest.mark.parametrize(
    ("changes", "cause", "kept"),
    [
        ({"pushout": "5 %"}, "pushout was 10 %, is 5 %", True),
        ({"load": '["5 fF", "9 fF"]'}, "load: 9 fF new", True),
        ({"clock_slew": '["60 ps"]'}, "clock_slew: 60 ps new", None),
        ({"data_slew": '["20 ps", "50 ps"]'}, "data_slew: 20 ps new", True),
        ({"edit": ('resolution = "0.5 ps"', 'resolution = "1 ps"')}, "resolution was 500 fs, is 1 ps", True),
        (
            {"edit": ('constraint_load = "5 fF"', 'constraint_load = "6 fF"')},
            "constraint_load: 6 fF new",
            True,
        ),
    ],
)
def test_a_changed_sheet_is_named_as_the_cause_and_trials_that_fit_serve_again(
    asked: Asked,
    sheet_of: Callable[..., Path],
    formula_run: Callable[..., Any],
    changes: dict[str, Any],
    cause: str,
    kept: bool | None,
) -> None:
    formula_run(sheet_of())
    for found in asked(sheet_of(**changes)).values():
        assert cause in found.causes
        assert found.points_kept == 0
        if kept is not None:
            assert (found.trials_kept > 0) is kept


def test_another_supply_touches_its_own_corner_only(
    asked: Asked, sheet_of: Callable[..., Path], formula_run: Callable[..., Any]
) -> None:
    formula_run(sheet_of())
    found = asked(sheet_of(slow="1.05 V"))
    assert found["typical"].causes == ()
    assert found["slow"].causes == ("supply was 1.1 V, is 1.05 V",)


def test_another_ngspice_is_noticed_and_no_transient_of_the_old_one_is_promised(
    asked: Asked, sheet_of: Callable[..., Path], formula_run: Callable[..., Any]
) -> None:
    sheet = sheet_of()
    formula_run(sheet)
    for found in asked(sheet, version=42).values():
        assert found.causes == ("ngspice was version 39, is 42",)
        assert found.trials_kept == 0


def test_a_changed_netlist_is_told_from_changed_models(
    asked: Asked, sheet_of: Callable[..., Path], formula_run: Callable[..., Any], deck: Path
) -> None:
    sheet = sheet_of()
    formula_run(sheet)
    netlist = deck / "tarn_dffp_1.spice"
    text = netlist.read_text()
    element = next(line for line in text.splitlines() if line.lower().startswith("m"))
    netlist.write_text(text.replace(element, f"{element}\nc_new Q VSS 0.1f", 1))
    for found in asked(sheet).values():
        assert found.causes == ("the netlist changed",)


def test_a_corner_that_no_run_finished_is_said_to_be_new(
    asked: Asked, sheet_of: Callable[..., Path], formula_run: Callable[..., Any]
) -> None:
    sheet = sheet_of()
    formula_run(sheet, corners=("typical",))
    found = asked(sheet)
    assert found["typical"].causes == ()
    assert found["slow"].causes == ("no run finished this corner",)


def test_an_interrupted_run_is_said_to_be_unfinished(
    asked: Asked, sheet_of: Callable[..., Path], formula_run: Callable[..., Any], tmp_path: Path
) -> None:
    sheet = sheet_of()
    formula_run(sheet)
    store = Store(tmp_path / "run")
    (key,) = store._db.execute("SELECT key FROM rows LIMIT 1").fetchone()
    store._db.execute("DELETE FROM rows WHERE key = ?", (key,))
    store._db.commit()
    store.close()
    found = asked(sheet)
    (open_corner,) = [c for c in found.values() if c.causes]
    assert open_corner.rows_kept == open_corner.rows - 1
    assert "interrupted" in open_corner.causes[0]


def test_a_store_that_a_newer_charflow_keyed_otherwise_names_the_version(
    asked: Asked,
    sheet_of: Callable[..., Path],
    formula_run: Callable[..., Any],
    tmp_path: Path,
) -> None:
    sheet = sheet_of()
    formula_run(sheet)
    store = Store(tmp_path / "run")
    for corner in ("typical", "slow"):
        name = f"facts of corner {corner}"
        store.put("meta", name, store.get("meta", name) | {"charflow": "0.0.1"})
    store._db.execute("DELETE FROM corners")
    store._db.commit()
    store.close()
    assert "charflow was version 0.0.1" in asked(sheet)["slow"].causes[0]


def test_the_facts_of_one_sheet_do_not_differ_from_themselves_through_the_store(
    tmp_path: Path, tarn_sheet: Path
) -> None:
    sheet = read_sheet(tarn_sheet)
    facts = facts_of(sheet, circuit_of(sheet, read_sources(sheet), "typical"), 39)
    assert causes(json.loads(json.dumps(facts)), facts) == []
    assert causes({}, facts) != []


def test_a_file_in_place_of_the_folder_is_refused(tmp_path: Path, tiny_sheet: Path) -> None:
    with pytest.raises(FolderError, match="a file, not a folder"):
        redo(read_sheet(tiny_sheet), tiny_sheet)


def test_the_text_says_what_is_kept_and_why_the_rest_is_not() -> None:
    found = [
        CornerRedo("tt", 2, 2, 8, 8, 10, ()),
        CornerRedo("ss", 2, 0, 8, 0, 7, ("the models changed", "load: 9 fF new")),
    ]
    lines = redo_text(found, Path("run")).splitlines()
    assert lines[1] == "  tt: take all 8 values from the store"
    assert lines[2] == "  ss: solve 8 of 8 values, because"
    assert lines[3:5] == ["    the models changed", "    load: 9 fF new"]
    assert lines[5].startswith("    7 transients")
    assert json.loads(json.dumps(redo_facts(found)))[1]["causes"] == ["the models changed", "load: 9 fF new"]


def test_the_command_answers_in_text_and_json(
    run_cli: Callable[..., Any], tiny_sheet: Path, tmp_path: Path
) -> None:
    ran = run_cli("plan", tiny_sheet, "--against", tmp_path / "run")
    assert "typical: solve 18 of 18 values, because\n    nothing was measured" in ran.stdout
    ran = run_cli("plan", tiny_sheet, "--against", tmp_path / "run", "--json")
    assert json.loads(ran.stdout)["redo"][0]["points"] == 18
    assert not (tmp_path / "run" / FILE).exists()


def test_a_corner_known_to_need_the_whole_library_is_asked_with_it(
    asked: Asked,
    sheet_of: Callable[..., Path],
    formula_run: Callable[..., Any],
    monkeypatch: pytest.MonkeyPatch,
) -> None:
    sheet = sheet_of()
    formula_run(sheet)
    monkeypatch.setattr("charflow.simulate.proof.SMALL", 0)
    assert all(found.causes[-1] == UNPROVED for found in asked(sheet).values())
    monkeypatch.setattr(Store, "get", answers_differing(Store.get))
    for found in asked(sheet).values():
        assert found.causes == ("the models changed",)  # the whole ones are more than what the run pruned


def answers_differing(get: Callable[..., Any]) -> Callable[..., Any]:
    """Answer like the store, but say of every comparison of pruned models that it showed a difference."""

    def answer(store: Store, table: str, key: str) -> Any:
        found = get(store, table, key)
        is_proof = table == "meta" and not key.startswith("facts") and found is None
        return {"samples": 1, "difference": 0.5, "identical": False, "reason": ""} if is_proof else found

    return answer
