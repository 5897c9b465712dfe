"""What the certificate says of a table, and where a further axis point goes."""

from __future__ import annotations

import math
from collections.abc import Callable, Sequence

import pytest

from charflow.plan.arcs import Kind
from charflow.sheet import Axes
from charflow.solve.answer import Answer
from charflow.solve.certificate import certify, surfaces
from charflow.solve.refine import insertion
from charflow.solve.row import Hint, RowResult

SLEWS, LOADS = (10e-12, 50e-12, 200e-12), (1e-15, 5e-15, 25e-15)
AXES = Axes.model_construct(
    clock_slew=SLEWS, data_slew=SLEWS, load=LOADS, constraint_load=5e-15, constraint_loads=()
)
Curve = Callable[[float, float], float | None]


def entry(kind: Kind, slew: float, column: float, value: float | None, corner: str = "c") -> Answer:
    delay = kind in (Kind.CLK_TO_Q, Kind.TRANSITION)
    return Answer(
        corner=corner,
        quantity=kind,
        pin="" if delay else "D",
        pin_edge="" if delay else "rise",
        related_pin="CK",
        related_edge="rise",
        output="Q" if delay else "",
        output_edge="rise" if delay else "",
        when="",
        clock_slew=slew,
        data_slew=None if delay else column,
        load=column if delay else 5e-15,
        value=value,
        bracket=0.0,
        status="measured",
        transients=1,
        key="k",
    )


def table(
    kind: Kind, curve: Curve, slews: Sequence[float] = SLEWS, across: Sequence[float] = LOADS
) -> list[Answer]:
    return [entry(kind, x, y, curve(x, y)) for x in slews for y in across]


def between(kind: Kind, curve: Curve, *points: tuple[float, float]) -> list[RowResult]:
    return [RowResult(x, (entry(kind, x, y, curve(x, y)),), {}) for x, y in points]


def test_a_bilinear_table_has_no_error() -> None:
    def curve(x: float, y: float) -> float:
        return 100e-12 + 0.3 * x + 2e3 * y + 1e13 * x * y

    (found,) = certify(
        table(Kind.CLK_TO_Q, curve), between(Kind.CLK_TO_Q, curve, (30e-12, 3e-15), (90e-12, 20e-15))
    )
    assert found.along == ("clock_slew", "load")
    assert found.largest_share == pytest.approx(0.0, abs=1e-12)


def test_errors_are_table_less_measurement_and_the_largest_has_its_place() -> None:
    def bent(x: float, y: float) -> float:
        return 100e-12 + 1e9 * x * x

    points = ((30e-12, 3e-15), (125e-12, 3e-15), (50e-12, 2e-15))
    (found,) = certify(table(Kind.CLK_TO_Q, bent), between(Kind.CLK_TO_Q, bent, *points))
    # a chord over [a, b] of c x^2 is above it by c (x - a)(b - x)
    errors = [check.error for check in found.checks]
    assert errors == pytest.approx([0.4e-12, 0.0, 5.625e-12], abs=1e-17)
    assert found.worst is not None
    assert found.worst.answer.clock_slew == 125e-12
    assert found.typical == pytest.approx(0.4e-12)
    assert found.largest_share == pytest.approx(5.625 / 115.625)


def test_a_constraint_counts_in_parts_of_the_reference_delay_at_that_point() -> None:
    def curve(x: float, y: float) -> float:
        return 1e9 * y * y - 2.5e-12  # about zero at the check: its own value says nothing

    (row,) = between(Kind.SETUP, curve, (30e-12, 30e-12))
    hint = Hint(0.0, 1e-12, delay=80e-12, corner="c")
    row = RowResult(row.clock_slew, row.answers, {(("setup", "D", True, ()), 30e-12): hint})
    (found,) = certify(table(Kind.SETUP, curve, across=SLEWS), [row])
    assert found.largest_share == pytest.approx(0.4e-12 / 80e-12)


def test_points_of_the_grid_and_points_without_an_answer_are_not_compared() -> None:
    def curve(x: float, y: float) -> float | None:
        return None if x > 100e-12 and y > 10e-15 else 1e-10

    rows = between(
        Kind.CLK_TO_Q, curve, (50e-12, 5e-15), (30e-12, 3e-15), (90e-12, 20e-15), (120e-12, 20e-15)
    )
    (found,) = certify(table(Kind.CLK_TO_Q, curve), rows)
    assert len(found.checks) == 3
    assert len(found.compared) == 1


def test_a_whole_line_of_holes_is_not_read_across() -> None:
    def curve(x: float, y: float) -> float | None:
        return None if y == 5e-15 else 1e-10

    (found,) = certify(table(Kind.CLK_TO_Q, curve), between(Kind.CLK_TO_Q, curve, (30e-12, 3e-15)))
    assert [check.read for check in found.checks] == [None]
    assert found.along == ("clock_slew", "load")


def test_a_table_of_one_point_along_an_axis_says_so() -> None:
    def curve(x: float, y: float) -> float:
        return 1e-10 + x

    answers = table(Kind.CLK_TO_Q, curve, across=(5e-15,))
    (found,) = certify(answers, between(Kind.CLK_TO_Q, curve, (30e-12, 5e-15)))
    assert found.along == ("clock_slew",)


def log_mean(low: float, high: float) -> float:
    return (high - low) / math.log(high / low)


@pytest.mark.parametrize(
    ("curve", "axis", "low", "high"),
    [
        (lambda x, y: 1e-10 + 5e8 * x * x, "clock_slew", 50e-12, 200e-12),
        (lambda x, y: 1e-10 + 1e17 * y * y, "load", 5e-15, 25e-15),
    ],
)
def test_a_point_is_inserted_along_the_axis_that_bends_in_the_interval_of_the_worst_check(
    curve: Curve, axis: str, low: float, high: float
) -> None:
    answers = table(Kind.CLK_TO_Q, curve)
    checks = [
        c
        for f in certify(answers, between(Kind.CLK_TO_Q, curve, (30e-12, 3e-15), (120e-12, 12e-15)))
        for c in f.checks
    ]
    found = insertion(AXES, surfaces(answers), checks, 0.001)
    assert found is not None
    assert found.axis == axis
    assert found.value == pytest.approx(log_mean(low, high), rel=5e-3)  # three digits
    assert found.value in getattr(found.into(AXES), axis)
    assert insertion(AXES, surfaces(answers), checks, 0.9) is None


def test_with_two_points_an_axis_an_insertion_goes_to_the_axis_whose_bend_is_unknown() -> None:
    def curve(x: float, y: float) -> float:
        return 1e-10 + 5e8 * x * x

    axes = AXES.model_copy(update={"clock_slew": (10e-12, 200e-12)})
    answers = table(Kind.CLK_TO_Q, curve, slews=(10e-12, 200e-12))
    (proved,) = certify(answers, between(Kind.CLK_TO_Q, curve, (60e-12, 12e-15)))
    found = insertion(axes, surfaces(answers), proved.checks, 0.001)
    assert found is not None
    assert found.axis == "clock_slew"
