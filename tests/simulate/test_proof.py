"""Two runs are the same only if they are; what differs is measured."""

from __future__ import annotations

import numpy as np
import pytest

from charflow.simulate.proof import ALLOWED, Proof, difference

TIME = np.array([0.0, 1.0, 2.0, 4.0])


def wave(*volts: float, time: np.ndarray = TIME) -> dict[str, np.ndarray]:
    return {"time": time, "q": np.array(volts), "v1#branch": np.zeros(len(volts))}


def test_the_same_numbers_at_the_same_times_are_identical() -> None:
    proof = difference(wave(0, 1, 2, 2), wave(0, 1, 2, 2))
    assert proof == Proof(4, 0.0, True)
    assert proof.words == "pruned models: identical to the whole library on 4 samples"


def test_the_largest_difference_is_found_and_judged() -> None:
    near, far = (
        difference(wave(0, 1, 2, 2), wave(0, 1, 2, 2 + 0.4e-6)),
        difference(wave(0, 1, 2, 2), wave(0, 1.01, 2, 2)),
    )
    assert near.difference == pytest.approx(0.4e-6, rel=1e-6)
    assert not near.identical
    assert not near.differs
    assert far.differs
    assert "the whole library is used" in far.words


def test_other_time_points_are_compared_by_interpolation_and_are_not_identical() -> None:
    proof = difference(wave(0, 1, 2, 4), wave(0, 2, 4, time=np.array([0.0, 2.0, 4.0])))
    assert proof.difference == pytest.approx(0.0, abs=1e-15)
    assert not proof.identical


def test_a_missing_node_and_no_number_are_differences() -> None:
    assert difference(wave(0, 1, 2, 2), {**wave(0, 1, 2, 2), "x": TIME}).differs
    assert difference(wave(0, 1, 2, 2), wave(0, float("nan"), 2, 2)).differs
    assert not Proof(reason="which is small").differs
    assert Proof(difference=2 * ALLOWED).differs
