"""Crossings and transitions of a sampled waveform, against closed forms, other interpolators and ngspice."""

from __future__ import annotations

import math
import re
import subprocess
from pathlib import Path

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from numpy.typing import NDArray
from scipy.interpolate import CubicSpline, PchipInterpolator

from charflow.simulate.batch import run_deck
from charflow.simulate.library import environment, find_executable
from charflow.simulate.session import Session
from charflow.simulate.waveform import crossing_times, swing_of

PS = 1e-12
FRACTIONS = (0.2, 0.8)
Samples = NDArray[np.float64]
laws = settings(derandomize=True, deadline=None, max_examples=200)

# One resistor of 1 kohm into 50 fF. The response to a step is 1 - exp(-t/tau), so from 20 to 80 % it takes
# tau ln(0.8/0.2). The response to a ramp of length T is, after the ramp, 1 - (tau/T)(exp(T/tau) - 1)
# exp(-t/tau); with T = tau it is at one half at tau ln(2 (e - 1)), and the ramp at T/2.
TAU = 50 * PS
STEP_20_80 = TAU * math.log(4)
RAMP_50_50 = TAU * math.log(2 * (math.e - 1)) - TAU / 2
CLOSE = 0.01 * PS  # a tenth of the resolution of a sheet's default


def ramp_response(time: Samples) -> Samples:
    """Return the RC response to a ramp from zero to one within one time constant, beginning at zero."""
    x = np.maximum(time / TAU, 0.0)
    during = x - 1 + np.exp(-x)
    after = 1 - (math.e - 1) * np.exp(-x)
    return np.where(x < 1, during, after)


def test_the_closed_form_is_the_published_number() -> None:
    assert pytest.approx(36.7236, abs=5e-5) == RAMP_50_50 / PS


class TestClosedForm:
    @pytest.mark.parametrize("step", [0.5 * PS, 2 * PS, 5 * PS])
    def test_the_delay_of_an_rc_circuit_from_samples(self, step: float) -> None:
        time = np.arange(-20 * PS, 600 * PS, step)
        (found,) = crossing_times(time, ramp_response(time), 0.5)
        assert found - TAU / 2 == pytest.approx(RAMP_50_50, abs=CLOSE)

    @pytest.mark.parametrize("step", [0.5 * PS, 2 * PS, 5 * PS])
    def test_the_transition_of_an_rc_circuit_from_samples(self, step: float) -> None:
        time = np.arange(0.0, 600 * PS, step)
        swing = swing_of("Q", time, 1 - np.exp(-time / TAU), 0.0, FRACTIONS)
        assert swing.transitions == pytest.approx((STEP_20_80,), abs=CLOSE)

    def test_a_falling_edge_is_measured_like_a_rising_one(self) -> None:
        time = np.arange(0.0, 600 * PS, 3 * PS)
        up = swing_of("Q", time, 1 - np.exp(-time / TAU), 0.0, FRACTIONS)
        down = swing_of("Q", time, np.exp(-time / TAU), 0.0, FRACTIONS)
        assert down.crossings == pytest.approx(up.crossings, abs=1e-9 * PS)
        assert down.transitions == pytest.approx(up.transitions, abs=1e-9 * PS)

    def test_the_error_is_of_fourth_order_where_a_straight_line_s_is_of_second(self) -> None:
        def errors(step: float) -> tuple[float, float]:
            # worst over where the samples fall; the waveform is smooth, 1 / (1 + exp(-t))
            cubic = line = 0.0
            for shift in np.linspace(0, step, 17):
                time = np.arange(-8 - shift, 8, step)
                value = 1 / (1 + np.exp(-time))
                i = int(np.flatnonzero((value[1:] > 0.7) & (value[:-1] <= 0.7))[0])
                straight = time[i] + step * (0.7 - value[i]) / (value[i + 1] - value[i])
                exact = math.log(0.7 / 0.3)
                cubic = max(cubic, abs(crossing_times(time, value, 0.7)[0] - exact))
                line = max(line, abs(straight - exact))
            return cubic, line

        coarse, fine = errors(0.4), errors(0.1)
        assert 100 < coarse[0] / fine[0] < 600  # 4^4 = 256
        assert 8 < coarse[1] / fine[1] < 32  # 4^2 = 16
        assert fine[0] < fine[1] / 200


class TestOtherInterpolators:
    @laws
    @given(
        st.lists(st.floats(0.3, 3.0), min_size=8, max_size=30),
        st.floats(0.5, 4.0),
        st.floats(0.1, 0.9),
        st.booleans(),
    )
    def test_a_smooth_edge_crosses_where_a_spline_does(
        self, gaps: list[float], width: float, level: float, rising: bool
    ) -> None:
        time = np.cumsum(np.array([0.0, *gaps]))
        middle = time[-1] / 2
        value = 1 / (1 + np.exp(-(time - middle) / width))
        if not rising:
            value = 1 - value
        roots = list(CubicSpline(time, value).solve(level, extrapolate=False))
        found = crossing_times(time, value, level)
        inside = [i for i in range(len(time) - 1) if (value[i] > level) != (value[i + 1] > level)]
        assert len(found) == len(inside)
        if len(roots) == len(found) == 1 and 0 < inside[0] < len(time) - 2:
            gap = float(time[inside[0] + 1] - time[inside[0]])
            # both are cubic: they differ by the fourth difference of the edge, which may be one gap wide
            assert found[0] == pytest.approx(roots[0], abs=0.12 * gap)

    @laws
    @given(
        st.lists(st.integers(0, 1000).map(lambda n: n / 1000), min_size=2, max_size=40),
        st.integers(50, 950).map(lambda n: n / 1000),
    )
    def test_any_waveform_crosses_as_often_and_in_the_same_intervals_as_a_monotone_one(
        self, values: list[float], level: float
    ) -> None:
        time = np.arange(len(values), dtype=float)
        value = np.array(values)
        found = crossing_times(time, value, level)
        above = value > level
        intervals = np.flatnonzero(above[1:] != above[:-1])
        assert len(found) == len(intervals)
        for at, i in zip(found, intervals, strict=True):
            assert time[i] <= at <= time[i + 1]
        assert found == sorted(found)
        if len(value) > 1 and not np.any(value == level):
            roots = PchipInterpolator(time, value).solve(level, extrapolate=False)
            assert len(roots) == len(found)

    @laws
    @given(st.floats(-5, 5), st.floats(0.2, 3), st.floats(0.1, 0.9))
    def test_a_straight_ramp_is_exact(self, begin: float, length: float, level: float) -> None:
        time = np.linspace(begin, begin + length, 7)
        value = (time - begin) / length
        (found,) = crossing_times(time, value, level)
        assert found == pytest.approx(begin + level * length, abs=1e-9)

    @laws
    @given(st.floats(0.01, 0.99), st.floats(1e-6, 1.0), st.floats(1.0, 50.0))
    def test_samples_of_very_uneven_spacing_cross_between_their_neighbours(
        self, level: float, short: float, long: float
    ) -> None:
        # ngspice takes tiny steps after a corner and long ones before it
        time = np.cumsum([0.0, long, short, short, short * 3, long])
        value = np.array([0.0, 0.0, 0.0, 0.3, 0.9, 1.0])
        (found,) = crossing_times(time, value, level)
        i = int(np.flatnonzero(value > level)[0])
        assert time[i - 1] <= found <= time[i]


class TestSwing:
    def test_a_glitch_is_several_crossings_of_alternating_direction(self) -> None:
        time = np.linspace(0, 10, 2001)
        value = np.interp(time, [0, 2, 3, 4, 5, 6, 7, 10], [0, 0, 1, 1, 0.1, 0.1, 1, 1])
        swing = swing_of("Q", time, value, 0.0, FRACTIONS)
        # up from 2 to 3; down 0.9 from 4 to 5; up 0.9 from 6 to 7
        assert swing.crossings == pytest.approx((2.5, 4 + 0.5 / 0.9, 6 + 0.4 / 0.9), abs=1e-6)
        assert swing.transitions == pytest.approx((0.6, 0.6 / 0.9, 0.6 / 0.9), abs=1e-6)
        assert (swing.first, swing.last) == (0.0, 1.0)
        assert swing.low == pytest.approx(0.1)

    def test_an_edge_that_turns_back_before_the_far_fraction_has_no_transition(self) -> None:
        time = np.linspace(0, 10, 2001)
        value = np.interp(time, [0, 2, 3, 4, 10], [0, 0, 0.7, 0, 0])
        swing = swing_of("Q", time, value, 0.0, FRACTIONS)
        assert len(swing.crossings) == 2
        assert swing.transitions == (None, None)
        assert swing.high == pytest.approx(0.7, abs=1e-3)

    def test_a_window_that_ends_before_the_far_fraction_leaves_no_transition(self) -> None:
        time = np.linspace(0, 2.6, 2001)
        swing = swing_of("Q", time, np.interp(time, [0, 2, 3], [0, 0, 1]), 0.0, FRACTIONS)
        assert swing.crossings == pytest.approx((2.5,), abs=1e-6)
        assert swing.transitions == (None,)
        assert not swing.settled(rising=True)

    def test_an_output_that_never_crosses_has_no_crossings_and_its_own_extremes(self) -> None:
        time = np.linspace(0, 10, 101)
        swing = swing_of("Q", time, 0.1 + 0.3 * np.sin(time) ** 2, 0.0, FRACTIONS)
        assert (swing.crossings, swing.transitions) == ((), ())
        assert swing.high == pytest.approx(0.4, abs=1e-2)
        assert swing.low == pytest.approx(0.1, abs=1e-2)

    def test_times_count_from_the_reference_edge(self) -> None:
        time = np.linspace(0, 10, 101)
        value = np.interp(time, [0, 4, 5, 10], [0, 0, 1, 1])
        assert swing_of("Q", time, value, 3.0, FRACTIONS).crossings == pytest.approx((1.5,))
        assert swing_of("Q", time, value, 6.0, FRACTIONS).crossings == pytest.approx((-1.5,))

    def test_a_sample_exactly_on_the_level_is_one_crossing(self) -> None:
        time = np.arange(5.0)
        assert crossing_times(time, np.array([0.0, 0.25, 0.5, 0.75, 1.0]), 0.5) == pytest.approx([2.0])
        assert crossing_times(time, np.array([1.0, 0.75, 0.5, 0.25, 0.0]), 0.5) == pytest.approx([2.0])

    def test_a_waveform_that_touches_the_level_from_below_does_not_cross_it(self) -> None:
        assert crossing_times(np.arange(3.0), np.array([0.0, 0.5, 0.0]), 0.5) == []

    def test_noise_of_rounding_on_a_flat_rail_is_no_crossing(self) -> None:
        time = np.arange(100.0)
        value = 1.0 + 1e-12 * np.cos(time)
        assert crossing_times(time, value, 0.5) == []


RC = """* rc
v1 a 0 {drive}
r1 a b 1k
c1 b 0 50f
.option reltol=1e-6 trtol=1
.tran {step} 800p 0 {step}
"""


@pytest.mark.ngspice
class TestNgspice:
    @pytest.mark.parametrize("step", ["20p", "2p"])
    def test_the_delay_of_an_rc_circuit_in_this_process(self, step: str) -> None:
        session = Session.here()
        lines = RC.format(drive="pwl(0 0 100p 0 150p 1)", step="1p").splitlines()
        session.load(("rc ramp", step), [*lines[:-1], ".end"], None)
        waves = session.transient(float(step[:-1]) * PS, 800 * PS, ("a", "b"))
        (drive,) = crossing_times(waves["time"], waves["a"], 0.5)
        (output,) = crossing_times(waves["time"], waves["b"], 0.5)
        assert drive == pytest.approx(125 * PS, abs=1e-4 * PS)
        assert output - drive == pytest.approx(RAMP_50_50, abs=CLOSE)

    def test_the_transition_of_an_rc_circuit_in_this_process(self) -> None:
        session = Session.here()
        lines = RC.format(drive="pwl(0 0 100p 0 100.001p 1)", step="1p").splitlines()
        session.load("rc step", [*lines[:-1], ".end"], None)
        # at longer steps ngspice's own integration is off by 0.013 ps; the interpolation, by 6e-6 ps
        waves = session.transient(1 * PS, 800 * PS, ("b",))
        swing = swing_of("B", waves["time"], waves["b"], 100 * PS, FRACTIONS)
        assert swing.transitions == pytest.approx((STEP_20_80,), abs=CLOSE)

    def test_crossings_agree_with_ngspice_s_own_measure_on_the_same_waveform(self, tmp_path: Path) -> None:
        # .measure draws straight lines; steps of 0.2 ps on tau = 50 ps make that good to 1e-4 ps
        text = RC.format(drive="pwl(0 0 100p 0 150p 1 400p 1 450p 0)", step="0.2p")
        asked = {"up": ("a", "b", "rise"), "down": ("a", "b", "fall")}
        for name, (trig, targ, edge) in asked.items():
            text += f".measure tran {name} trig v({trig}) val=0.5 {edge}=1 targ v({targ}) val=0.5 {edge}=1\n"
        text += ".measure tran tr trig v(b) val=0.2 rise=1 targ v(b) val=0.8 rise=1\n.end\n"
        (tmp_path / "rc.cir").write_text(text, encoding="utf-8")
        said = subprocess.run(
            [find_executable(), "-b", "rc.cir"],
            cwd=tmp_path,
            env=environment(),
            capture_output=True,
            text=True,
            timeout=60,
            check=True,
            stdin=subprocess.DEVNULL,
        ).stdout
        measured = {
            name: float(value) for name, value in re.findall(r"^(\w+)\s+=\s+(\S+) targ=", said, re.MULTILINE)
        }
        assert set(measured) == {"up", "down", "tr"}
        waves, _ = run_deck(text, None)
        drive = crossing_times(waves["time"], waves["a"], 0.5)
        swing = swing_of("B", waves["time"], waves["b"], 0.0, FRACTIONS)
        assert swing.crossings[0] - drive[0] == pytest.approx(measured["up"], abs=1e-3 * PS)
        assert swing.crossings[1] - drive[1] == pytest.approx(measured["down"], abs=1e-3 * PS)
        assert swing.transitions[0] == pytest.approx(measured["tr"], abs=1e-3 * PS)
