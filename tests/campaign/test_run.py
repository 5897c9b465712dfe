"""A run gives the same answers whatever happens to its workers, and measures nothing twice."""

from __future__ import annotations

import json
import os
import shutil
import signal
import sqlite3
import threading
import time
from collections.abc import Callable
from pathlib import Path
from typing import Any

import pytest

from charflow.campaign.graph import nodes_of
from charflow.campaign.journal import Follower
from charflow.campaign.store import FILE
from charflow.errors import SheetError
from charflow.sheet import read_sheet
from charflow.tables.flat import row_of, to_csv

AXES = {
    "clock_slew": '["10 ps", "50 ps", "200 ps"]',
    "data_slew": '["10 ps", "50 ps"]',
    "load": '["1 fF", "10 fF", "25 fF"]',
}
FEWER = AXES | {"clock_slew": '["50 ps"]', "data_slew": '["50 ps"]'}
UNIQUE = 10  # fF: a load of Q in no trial but those of its own points


def csv_of(result: Any) -> str:
    return to_csv(row_of(answer) for answer in result.answers)


def trials_in(folder: Path) -> int:
    with sqlite3.connect(folder / FILE) as db:
        found = int(db.execute("SELECT count(*) FROM trials").fetchone()[0])
    db.close()
    return found


def relaxed_trials_in(folder: Path) -> set[str]:
    """Return the keys of the trials in which one input moves alone."""
    with sqlite3.connect(folder / FILE) as db:
        found = db.execute("SELECT key, trial FROM trials").fetchall()
    db.close()
    return {key for key, trial in found if len(json.loads(trial)["moves"]) == 1}


@pytest.fixture
def sheet(make_sheet: Callable[..., Path]) -> Path:
    return make_sheet(**AXES)


@pytest.fixture
def points(sheet: Path) -> int:
    """How many values the sheet asks for."""
    return sum(node.points for node in nodes_of(read_sheet(sheet), ("typical",)))


@pytest.fixture(scope="module")
def undisturbed(
    formula_run_in: Callable[..., Any],
    make_sheet_at: Callable[..., Path],
    tmp_path_factory: pytest.TempPathFactory,
) -> Any:
    folder = tmp_path_factory.mktemp("undisturbed")
    result = formula_run_in(make_sheet_at(folder / "tiny.toml", **AXES), folder / "run")
    assert len(result.answers) > 90
    assert result.failed == 0
    return result


@pytest.fixture(scope="module")
def undisturbed_few(
    formula_run_in: Callable[..., Any],
    make_sheet_at: Callable[..., Path],
    tmp_path_factory: pytest.TempPathFactory,
) -> Any:
    folder = tmp_path_factory.mktemp("undisturbed_few")
    return formula_run_in(make_sheet_at(folder / "tiny.toml", **FEWER), folder / "run")


# ---------------------------------------------------------------- the same answers


def test_answers_do_not_depend_on_the_number_of_workers(
    formula_run: Callable[..., Any], sheet: Path, undisturbed: Any
) -> None:
    assert csv_of(formula_run(sheet, workers=3)) == csv_of(undisturbed)


def test_answers_stand_in_the_order_of_the_sheet(
    formula_run: Callable[..., Any], make_sheet: Callable[..., Path], corner: Callable[..., str], tarn: Path
) -> None:
    models = f"{tarn}/tarn130.lib"
    both = corner(f"{models}:tt", "zeta") + corner(f"{models}:ss", "alpha", supply="1.1 V")
    rows = [row_of(answer) for answer in formula_run(make_sheet(corners=both, **AXES)).answers]
    half = len(rows) // 2
    assert [row.corner for row in rows] == ["zeta"] * half + ["alpha"] * half
    quantities = list(dict.fromkeys(row.quantity for row in rows))
    assert [q for q in quantities if q in ("clk_to_q", "transition", "setup", "hold")] == quantities[:4]
    loads = [row.load_ff for row in rows[:9]]
    assert loads == [1, 10, 25] * 3


def test_progress_ends_with_every_point_done(
    formula_run: Callable[..., Any], sheet: Path, points: int
) -> None:
    told: list[Any] = []
    result = formula_run(sheet, tell=told.append)
    assert told[-1].points == told[-1].points_total == points == len(result.answers)
    assert told[-1].transients == result.transients
    assert [p.points for p in told] == sorted(p.points for p in told)


def test_every_row_is_taught_only_by_rows_of_its_own_corner_that_come_before_it(sheet: Path) -> None:
    read = read_sheet(sheet)
    seen: set[str] = set()
    for node in nodes_of(read, ("typical",)):
        assert set(node.after) <= seen
        assert all(label.startswith(f"{node.corner}:") for label in node.after)
        seen.add(node.label)
    assert len(seen) > 1 + 3 * 2


def test_an_unknown_corner_is_named_with_those_there_are(
    formula_run: Callable[..., Any], sheet: Path
) -> None:
    with pytest.raises(SheetError, match=r"no corner 'typicall'\n.*typical"):
        formula_run(sheet, corners=("typicall",))


# ---------------------------------------------------------------- workers that fail


@pytest.mark.parametrize(
    "fault", ["die", *(pytest.param(how, marks=pytest.mark.slow) for how in ("abort", "exit"))]
)
def test_a_worker_that_dies_once_changes_no_answer(
    formula_run: Callable[..., Any], sheet: Path, undisturbed: Any, tmp_path: Path, fault: str
) -> None:
    result = formula_run(sheet, fault=fault, load=UNIQUE, once=tmp_path / "struck")
    assert (tmp_path / "struck").exists()
    assert csv_of(result) == csv_of(undisturbed)


@pytest.mark.parametrize("fault", ["die", pytest.param("exit", marks=pytest.mark.slow)])
def test_a_trial_that_always_kills_its_worker_costs_its_own_points_and_no_others(
    formula_run: Callable[..., Any],
    make_sheet: Callable[..., Path],
    undisturbed_few: Any,
    tmp_path: Path,
    fault: str,
) -> None:
    result = formula_run(make_sheet(**FEWER), fault=fault, load=UNIQUE, count=tmp_path / "count")
    lost = [answer for answer in result.answers if answer.value is None]
    assert {(round(a.load * 1e15), a.quantity.value, a.output) for a in lost} == {
        (UNIQUE, "clk_to_q", "Q"),
        (UNIQUE, "transition", "Q"),
    }
    assert len(lost) == 2 * 2
    assert all("died or hung twice" in answer.status for answer in lost)
    assert (tmp_path / "count").stat().st_size == 2 * 2, "two trials, each once more"
    rest = [answer for answer in result.answers if answer.value is not None]
    assert rest == [a for a in undisturbed_few.answers if (round(a.load * 1e15), a.output) != (UNIQUE, "Q")]


def test_a_point_lost_to_a_dying_worker_is_tried_again_by_the_next_run(
    formula_run: Callable[..., Any], make_sheet: Callable[..., Path], undisturbed_few: Any
) -> None:
    sheet = make_sheet(**FEWER)
    assert formula_run(sheet, fault="die", load=UNIQUE).failed == 4
    assert csv_of(formula_run(sheet)) == csv_of(undisturbed_few)


def test_a_worker_that_hangs_is_ended_after_the_limit_and_changes_no_answer(
    formula_run: Callable[..., Any],
    sheet: Path,
    undisturbed: Any,
    tmp_path: Path,
    monkeypatch: pytest.MonkeyPatch,
) -> None:
    monkeypatch.setattr("charflow.campaign.schedule.TRIAL_LIMIT", 1.0)
    began = time.monotonic()
    result = formula_run(sheet, fault="hang", load=UNIQUE, once=tmp_path / "struck")
    assert 1.0 < time.monotonic() - began < 20
    assert csv_of(result) == csv_of(undisturbed)


@pytest.mark.parametrize(
    ("fault", "reason"),
    [("error", "an index out of its range"), pytest.param("odd", "unforeseen", marks=pytest.mark.slow)],
)
def test_an_error_nobody_foresaw_costs_its_rows_and_is_told(
    formula_run: Callable[..., Any], make_sheet: Callable[..., Path], fault: str, reason: str
) -> None:
    result = formula_run(make_sheet(**FEWER), fault=fault, load=UNIQUE)
    lost = [answer for answer in result.answers if answer.value is None]
    assert 0 < len(lost) < len(result.answers)
    assert all(reason in answer.status or "died or hung twice" in answer.status for answer in lost)


def test_killing_workers_that_have_nothing_to_do_changes_no_answer(
    formula_run: Callable[..., Any], sheet: Path, undisturbed: Any
) -> None:
    killed: list[int] = []

    def kill_idle(progress: Any) -> None:
        busy = Follower(sheet.parent / "run" / ".journals")
        list(busy.new())
        children = {int(p.name.partition(".")[0]) for p in busy.folder.glob("*.journal")}
        for process in children - set(busy.busy) - set(killed):
            if len(killed) < 1:  # twice on one row would be its end
                killed.append(process)
                try:
                    os.kill(process, signal.SIGKILL)
                except ProcessLookupError:
                    killed.remove(process)

    result = formula_run(sheet, workers=2, tell=kill_idle, pace=0.01)
    assert killed
    assert csv_of(result) == csv_of(undisturbed)


def test_no_worker_is_left_when_a_run_is_over(
    formula_run: Callable[..., Any],
    sheet: Path,
    processes_with: Callable[[str], list[int]],
    monkeypatch: pytest.MonkeyPatch,
) -> None:
    monkeypatch.setenv("FORMULA_MARK", mark := f"left-over-{time.monotonic_ns()}")
    formula_run(sheet)
    assert processes_with(f"FORMULA_MARK={mark}") == []
    assert list((sheet.parent / "run" / ".journals").iterdir()) == []


# ---------------------------------------------------------------- nothing twice


def test_the_second_run_gives_the_same_answers_without_a_transient(
    formula_run: Callable[..., Any], sheet: Path
) -> None:
    first = formula_run(sheet)
    again = formula_run(sheet, fault="die", load=UNIQUE)
    assert again.transients == 0
    assert csv_of(again) == csv_of(first)


def test_comments_layout_and_file_dates_redo_nothing(
    formula_run: Callable[..., Any], make_sheet: Callable[..., Path], tarn: Path, tmp_path: Path
) -> None:
    decks = tmp_path / "decks"
    shutil.copytree(tarn, decks)
    corners = {"decks": decks, **AXES}
    first = formula_run(make_sheet(**corners))
    netlist = decks / "tarn_dffp_1.spice"
    netlist.write_text("* another comment\n" + netlist.read_text().replace("   ", " "))
    os.utime(decks / "tarn130.lib", (0, 0))
    again = formula_run(make_sheet(**corners))
    assert again.transients == 0
    assert csv_of(again) == csv_of(first)


@pytest.mark.parametrize(
    ("axis", "longer"),
    [
        ("load", '["1 fF", "10 fF", "18 fF", "25 fF"]'),
        pytest.param("data_slew", '["10 ps", "50 ps", "90 ps"]', marks=pytest.mark.slow),
    ],
)
def test_a_longer_axis_repeats_no_delay_already_measured(
    formula_run: Callable[..., Any], make_sheet: Callable[..., Path], tmp_path: Path, axis: str, longer: str
) -> None:
    first = formula_run(make_sheet(**AXES))
    kept = trials_in(tmp_path / "run")
    more = formula_run(make_sheet(**{**AXES, axis: longer}))
    fresh = formula_run(make_sheet(**{**AXES, axis: longer}), "fresh")
    assert csv_of(more) == csv_of(fresh)
    added = trials_in(tmp_path / "run") - kept
    assert 0 < added < trials_in(tmp_path / "fresh") / 2
    old = {row.key for row in map(row_of, first.answers) if row.quantity == "clk_to_q"}
    assert old <= {row.key for row in map(row_of, more.answers)}


def test_another_pushout_repeats_no_reference_already_measured(
    formula_run: Callable[..., Any], make_sheet: Callable[..., Path], tmp_path: Path
) -> None:
    formula_run(make_sheet(**AXES))
    kept, relaxed = trials_in(tmp_path / "run"), relaxed_trials_in(tmp_path / "run")
    other = formula_run(make_sheet(**AXES, pushout="5 %"))
    fresh = formula_run(make_sheet(**AXES, pushout="5 %"), "fresh")
    assert csv_of(other) == csv_of(fresh)
    assert relaxed_trials_in(tmp_path / "run") == relaxed
    assert 0 < trials_in(tmp_path / "run") - kept <= trials_in(tmp_path / "fresh") - len(relaxed)


def test_changed_models_redo_only_the_corner_that_uses_them(
    formula_run: Callable[..., Any],
    make_sheet: Callable[..., Path],
    corner: Callable[..., str],
    tarn: Path,
    tmp_path: Path,
) -> None:
    decks = tmp_path / "decks"
    shutil.copytree(tarn, decks)
    library = (decks / "tarn130.lib").read_text()
    (decks / "new.lib").write_text(library.replace("tarn130_cards.inc", "new_cards.inc"))
    cards = (decks / "tarn130_cards.inc").read_text()
    (decks / "new_cards.inc").write_text(cards)
    both = corner(f"{decks}/new.lib:tt", "new") + corner(f"{decks}/tarn130.lib:tt", "old", supply="1.1 V")
    sheet = make_sheet(corners=both, decks=decks, **AXES)
    before = formula_run(sheet)

    (decks / "new_cards.inc").write_text(cards + "\n.model tarn_unused nmos level=54\n")
    assert formula_run(sheet).transients == 0, "a model that the cell does not use decides nothing"

    assert "vth0" in cards
    (decks / "new_cards.inc").write_text(cards.replace("vth0", "u0=0.03 vth0", 1))
    after = formula_run(sheet, slower=1e-12)
    assert after.transients == before.transients / 2

    def values(result: Any, name: str) -> list[float]:
        return [answer.value for answer in result.answers if answer.corner == name]

    assert values(after, "old") == values(before, "old")
    assert values(after, "new") != values(before, "new")


def test_another_version_of_ngspice_is_noticed_and_measured_anew(
    formula_run: Callable[..., Any], sheet: Path
) -> None:
    first = formula_run(sheet)
    assert formula_run(sheet, version=40).transients == first.transients
    again = formula_run(sheet, version=41, slower=1e-12)
    moved = [
        b.value - a.value
        for a, b in zip(first.answers, again.answers, strict=True)
        if a.quantity.value == "clk_to_q"
    ]
    assert moved == pytest.approx([1e-12] * len(moved), rel=1e-6)


# ---------------------------------------------------------------- interrupted, and odd clocks


def test_a_run_stopped_by_ctrl_c_keeps_what_is_done_and_goes_on_from_there(
    formula_run: Callable[..., Any], sheet: Path, undisturbed: Any, tmp_path: Path
) -> None:
    def press(progress: Any) -> None:
        if 0 < progress.points < progress.points_total:
            os.kill(os.getpid(), signal.SIGINT)

    stopped = formula_run(sheet, tell=press, pace=0.005)
    assert stopped.interrupted
    assert 0 < len(stopped.answers) < len(undisturbed.answers)
    assert set(stopped.answers) <= set(undisturbed.answers)
    assert signal.getsignal(signal.SIGINT) is signal.default_int_handler
    kept = trials_in(tmp_path / "run")
    told: list[Any] = []
    whole = formula_run(sheet, tell=told.append)
    assert not whole.interrupted
    assert csv_of(whole) == csv_of(undisturbed)
    assert kept + told[-1].transients == trials_in(tmp_path / "run") == undisturbed.transients


def test_a_run_works_in_a_thread_that_gets_no_signals(
    formula_run: Callable[..., Any], sheet: Path, undisturbed: Any
) -> None:
    results: list[Any] = []
    thread = threading.Thread(target=lambda: results.append(formula_run(sheet)))
    thread.start()
    thread.join(60)
    assert [csv_of(result) for result in results] == [csv_of(undisturbed)]


def test_a_clock_of_the_machine_that_jumps_changes_nothing(
    formula_run: Callable[..., Any], sheet: Path, undisturbed: Any, monkeypatch: pytest.MonkeyPatch
) -> None:
    jumps = iter([1e9, -5e8] * 100_000)
    real = time.time
    monkeypatch.setattr(time, "time", lambda: real() + next(jumps))
    told: list[Any] = []
    result = formula_run(sheet, tell=told.append, pace=0.002)
    assert csv_of(result) == csv_of(undisturbed)
    assert all(0 <= progress.elapsed < 60 for progress in told)
    assert result.seconds < 60
