"""Points between the grid and axis points inserted: judged rightly, the same in every run, measured once."""

from __future__ import annotations

import os
import signal
from collections.abc import Callable
from pathlib import Path
from typing import Any

import pytest

from charflow.campaign.run import Wish
from charflow.tables.certificate import facts_of, to_csv
from charflow.tables.flat import row_of
from charflow.tables.flat import to_csv as table_csv

pytestmark = pytest.mark.slow

AXES = {
    "clock_slew": '["10 ps", "50 ps", "200 ps"]',
    "data_slew": '["10 ps", "50 ps"]',
    "load": '["1 fF", "5 fF", "25 fF"]',
}
BENT = 5e8  # 1/s: at 200 ps it makes 20 ps, and a chord from 50 to 200 ps is off by up to 2.8 ps
Run = Callable[..., Any]


@pytest.fixture
def sheet(make_sheet: Callable[..., Path]) -> Path:
    return make_sheet(**AXES)


def both_csv(result: Any) -> tuple[str, str]:
    return table_csv(row_of(answer) for answer in result.answers), to_csv(result.certificates)


def delays(result: Any) -> list[Any]:
    return [found for found in result.certificates if found.table[1] == "clk_to_q"]


def test_every_table_is_judged_and_a_linear_register_has_no_error(formula_run: Run, sheet: Path) -> None:
    result = formula_run(sheet, wish=Wish(4))
    assert len(result.certificates) == len({found.table for found in result.certificates})
    for found in result.certificates:
        assert len(found.checks) == 4
        assert len(found.compared) == 4 or found.table[1] == "min_period"
    for found in delays(result):
        assert found.along == ("clock_slew", "load")
        assert found.largest_share < 1e-9
    setups = [found for found in result.certificates if found.table[1] in ("setup", "hold")]
    assert all(abs(found.worst.error) < 1e-12 for found in setups)  # within two brackets of 0.5 ps


def test_the_error_of_a_bent_delay_is_that_of_its_chord(formula_run: Run, sheet: Path) -> None:
    for found in delays(formula_run(sheet, wish=Wish(6), bent=BENT)):
        for check in found.checks:
            x = check.answer.clock_slew
            low, high = (10e-12, 50e-12) if x < 50e-12 else (50e-12, 200e-12)
            assert check.error == pytest.approx(BENT * (x - low) * (high - x), abs=1e-18)


def test_checks_change_no_table_and_cost_little_where_guesses_are_good(formula_run: Run, sheet: Path) -> None:
    plain, checked = formula_run(sheet, "plain"), formula_run(sheet, "checked", wish=Wish(4))
    assert plain.certificates == ()
    assert plain.answers == checked.answers
    costs = [
        check.answer.transients
        for found in checked.certificates
        if found.table[1] in ("setup", "hold")
        for check in found.checks
    ]
    assert sum(costs) / len(costs) <= 4.5
    assert max(costs) <= 7


def test_a_second_run_simulates_nothing_and_gives_the_same_bytes(formula_run: Run, sheet: Path) -> None:
    wish = Wish(4, 0.005)
    first = formula_run(sheet, wish=wish, bent=BENT)
    again = formula_run(sheet, wish=wish, bent=BENT, workers=2)
    assert again.transients == 0
    assert both_csv(again) == both_csv(first)
    assert again.refinement == first.refinement


@pytest.mark.parametrize("workers", [1, 3])
def test_a_run_cut_short_while_it_refines_ends_in_the_same_bytes(
    formula_run: Run, sheet: Path, workers: int
) -> None:
    wish = Wish(3, 0.005)
    whole = formula_run(sheet, "whole", wish=wish, bent=BENT)
    totals: set[int] = set()

    def press(progress: Any) -> None:
        totals.add(progress.points_total)
        if len(totals) > 2 and progress.points < progress.points_total:  # rows and checks, then insertions
            os.kill(os.getpid(), signal.SIGINT)

    cut = formula_run(sheet, "cut", wish=wish, bent=BENT, workers=workers, tell=press, pace=0.002)
    assert cut.interrupted
    assert cut.refinement is None
    after = formula_run(sheet, "cut", wish=wish, bent=BENT, workers=workers)
    assert both_csv(after) == both_csv(whole)


def test_refining_reaches_its_limit_on_the_axis_that_bends_and_keeps_what_was_measured(
    formula_run: Run, sheet: Path
) -> None:
    plain = formula_run(sheet, "plain", wish=Wish(4), bent=BENT)
    assert max(found.largest_share for found in delays(plain)) > 0.01
    fine = formula_run(sheet, wish=Wish(4, 0.005), bent=BENT)
    assert fine.refinement.reached
    assert fine.refinement.left <= 0.005
    assert {new.axis for new in fine.refinement.inserted} == {"clock_slew"}
    assert set(plain.answers) <= set(fine.answers)
    assert len(fine.axes.clock_slew) == 3 + len(fine.refinement.inserted)
    grids = {(row.clock_slew, row.load) for row in fine.answers if row.quantity.value == "clk_to_q"}
    assert len(grids) == len(fine.axes.clock_slew) * 3  # still a full rectangle
    fresh = [check for found in delays(fine) for check in found.checks]
    assert len(fresh) > 4 * len(delays(fine))  # the last word had points that took no part


def test_a_limit_out_of_reach_is_not_claimed(formula_run: Run, sheet: Path) -> None:
    result = formula_run(sheet, wish=Wish(2, 1e-6, most=2), bent=BENT)
    assert not result.refinement.reached
    assert len(result.refinement.inserted) == 2
    assert result.refinement.left > 1e-6


def test_axes_with_one_point_have_no_certificate_along_them(
    formula_run: Run, make_sheet: Callable[..., Path]
) -> None:
    alone = formula_run(make_sheet(), wish=Wish(4))
    assert all(not found.checks and not found.along for found in alone.certificates)
    assert all(facts["largest_ps"] is None for facts in facts_of(alone.certificates))
    line = formula_run(make_sheet("line.toml", clock_slew=AXES["clock_slew"]), "line", wish=Wish(4))
    assert all(found.along == ("clock_slew",) for found in delays(line))
    assert all(len(found.compared) == 4 for found in delays(line))


def test_a_hole_in_a_table_is_told_from_an_error(formula_run: Run, make_sheet: Callable[..., Path]) -> None:
    wider = make_sheet(**{**AXES, "load": '["1 fF", "5 fF", "12 fF", "25 fF"]'})
    result = formula_run(wider, wish=Wish(6), fault="die", load=12)
    lost = [found for found in delays(result) if found.table[6] == "Q"]
    assert any(check.read is None for found in lost for check in found.checks)
    assert all(check.error is None for found in lost for check in found.checks if check.read is None)
    assert all(found.compared for found in lost)


# ---------------------------------------------------------------- pruned models


def test_models_that_agree_are_compared_once_and_used_pruned(
    formula_run: Run, sheet: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setattr("charflow.simulate.proof.SMALL", 0)
    first = formula_run(sheet)
    assert first.proofs["typical"].identical
    assert "identical to the whole library on 100 samples" in first.proofs["typical"].words
    monkeypatch.setattr("charflow.campaign.pool.LocalPool.__enter__", None)
    assert formula_run(sheet).proofs == first.proofs


def test_models_that_differ_are_not_used_and_that_is_said(
    formula_run: Run, sheet: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setattr("charflow.simulate.proof.SMALL", 0)
    said: list[str] = []
    pruned = formula_run(sheet, "pruned")
    whole = formula_run(sheet, apart=2e-6, say=said.append)
    assert [line for line in said if "2 uV" in line and "the whole library is used" in line]
    assert whole.proofs["typical"].differs
    assert [a.value for a in whole.answers] == [a.value for a in pruned.answers]
    assert not {a.key for a in whole.answers} & {a.key for a in pruned.answers}  # another circuit
    again = formula_run(sheet, apart=2e-6)
    assert again.transients == 0
    assert again.proofs == whole.proofs
    assert again.answers == whole.answers
