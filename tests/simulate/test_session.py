"""The simulator in this process: never an answer for another circuit, and the same answer every way."""

from __future__ import annotations

import subprocess
import sys
import textwrap
from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest

from charflow.errors import LoadError, SimulatorError
from charflow.plan.arcs import Kind
from charflow.plan.circuit import Circuit, circuit_of, read_sources
from charflow.plan.deck import Settings
from charflow.plan.derive import arcs_of
from charflow.plan.stimulus import Condition, at_offset, relaxed
from charflow.plan.trial import Outcome, Trial
from charflow.sheet import Sheet, read_sheet
from charflow.simulate import session as session_module
from charflow.simulate.batch import run_batch
from charflow.simulate.engine import Engine
from charflow.simulate.library import find_executable, find_library
from charflow.simulate.session import Session
from charflow.simulate.waveform import crossing_times

pytestmark = pytest.mark.ngspice

ROOT = Path(__file__).parents[2]
PS = 1e-12
NEAR = 0.05 * PS  # half the finest resolution the demo sheet asks for


def rc(ohms: float) -> list[str]:
    """Return a deck whose output crosses half of the supply at a time that tells ``ohms``."""
    return ["* rc", "v1 a 0 pwl(0 0 100p 0 101p 1)", f"r1 a b {ohms}", "c1 b 0 50f", ".end"]


def delay(session: Session) -> float:
    waves = session.transient(2 * PS, 900 * PS, ("b",))
    (found,) = crossing_times(waves["time"], waves["b"], 0.5)
    return found - 100.5 * PS


def expected(ohms: float) -> float:
    return ohms * 50e-15 * float(np.log(2))


@pytest.fixture
def session() -> Session:
    return Session.here()


class TestCircuits:
    def test_each_key_answers_for_its_own_circuit(self, session: Session) -> None:
        for ohms in (500, 1000, 2000):
            session.load(("own", ohms), rc(ohms), None)
        for ohms in (1000, 500, 2000, 500):
            session.use(("own", ohms))
            assert delay(session) == pytest.approx(expected(ohms), abs=0.1 * PS)

    @pytest.mark.parametrize(
        "bad",
        [
            ["m1 a a 0 0 nch w=1u l=1u"],
            ["x1 a 0 nosuch"],
            [".subckt inv a b", "r1 a b 1", ".ends", "x1 a 0 a inv"],
        ],
    )
    def test_a_failed_load_never_answers_for_the_circuit_before_it(
        self, session: Session, bad: list[str]
    ) -> None:
        session.load("before", rc(1000), None)
        with pytest.raises(LoadError):
            session.load("bad", ["* bad", "v1 a 0 1", *bad, ".end"], None)
        assert not session.has("bad")
        with pytest.raises(LoadError, match="no circuit is loaded"):
            session.transient(2 * PS, 900 * PS, ("b",))
        with pytest.raises(LoadError, match="no circuit is loaded"):
            session.drive({}, {}, {})
        session.use("before")
        assert delay(session) == pytest.approx(expected(1000), abs=0.1 * PS)
        session.load("after", rc(2000), None)
        assert delay(session) == pytest.approx(expected(2000), abs=0.1 * PS)

    def test_a_deck_with_an_undefined_parameter_does_not_end_the_process(self) -> None:
        # ngspice 39 says "cannot recover and awaits to be detached" and may abort at the next load
        code = """
            from charflow.errors import CharflowError
            from charflow.simulate.session import Session
            good = ["* g", "v1 a 0 pwl(0 0 1n 1)", "r1 a b 1k", "c1 b 0 50f", ".end"]
            session = Session.here()
            session.load("good", good, None)
            for name in range(3):
                try:
                    session.load(("bad", name), ["* b", "v1 a 0 {vdd}", "r1 a 0 1k", ".end"], None)
                except CharflowError as error:
                    print("refused", error.message)
                try:
                    session.load(("again", name), good, None)
                    session.transient(1e-11, 1e-9, ("b",))
                    print("fine")
                except CharflowError as error:
                    print("told", error.message)
        """
        done = subprocess.run(
            [sys.executable, "-c", textwrap.dedent(code)],
            capture_output=True,
            text=True,
            timeout=120,
            check=False,
            cwd=ROOT,
        )
        assert done.returncode == 0, done.stderr
        words = [line.split()[0] for line in done.stdout.splitlines()]
        assert words.count("refused") >= 1
        assert "the parameter 'vdd' is used but not defined" in done.stdout

    def test_the_oldest_circuit_makes_room_for_a_new_one(
        self, session: Session, monkeypatch: pytest.MonkeyPatch
    ) -> None:
        monkeypatch.setattr(session_module, "MAX_CIRCUITS", 3)
        for ohms in (500, 600, 700):
            session.load(("room", ohms), rc(ohms), None)
        session.use(("room", 500))
        session.load(("room", 800), rc(800), None)
        assert [session.has(("room", ohms)) for ohms in (500, 600, 700, 800)] == [True, False, True, True]
        for ohms in (700, 500, 800):
            session.use(("room", ohms))
            assert delay(session) == pytest.approx(expected(ohms), abs=0.1 * PS)

    def test_altered_sources_and_loads_act_on_their_own_circuit(self, session: Session) -> None:
        for name in ("one", "two"):
            session.load(name, rc(1000), None)
        session.use("one")
        session.drive({"v1": "0 0 2e-10 0 2.01e-10 1"}, {"c1": 100e-15}, {})
        late = delay(session)
        assert late == pytest.approx(100 * PS + 2 * expected(1000), abs=0.1 * PS)
        session.use("two")
        assert delay(session) == pytest.approx(expected(1000), abs=0.1 * PS)
        session.use("one")
        assert delay(session) == pytest.approx(late, abs=1e-6 * PS)

    def test_a_waveform_may_get_another_number_of_points(self, session: Session) -> None:
        session.load("points", rc(1000), None)
        for points in (
            "0 0 1e-10 0 1.01e-10 1",
            "0 0 5e-11 0 1e-10 0 1.01e-10 1 5e-10 1",
            "0 0 1e-10 0 1.01e-10 1",
        ):
            session.drive({"v1": points}, {}, {})
            assert delay(session) == pytest.approx(expected(1000), abs=0.1 * PS)

    def test_only_what_is_asked_for_is_saved(self, session: Session) -> None:
        session.load("saved", rc(1000), None)
        assert set(session.transient(5 * PS, 500 * PS, ("b",))) == {"time", "b"}
        assert {"a", "b", "time"} <= set(session.transient(5 * PS, 500 * PS, ()))

    def test_a_node_that_does_not_exist_is_an_error(self, session: Session) -> None:
        session.load("nodes", rc(1000), None)
        with pytest.raises(Exception, match=r"stopped before its end|no finite values"):
            session.transient(5 * PS, 500 * PS, ("nowhere",))

    def test_a_process_has_one_session(self, session: Session) -> None:
        assert Session.here() is session
        with pytest.raises(SimulatorError, match="already has an ngspice session"):
            Session()


@pytest.fixture(scope="module")
def sheet() -> Sheet:
    return read_sheet(ROOT / "decks" / "tarn_dffp_1.toml")


@pytest.fixture(scope="module")
def circuit(sheet: Sheet) -> Circuit:
    return circuit_of(sheet, read_sources(sheet), "typical")


@pytest.fixture(scope="module")
def engine(circuit: Circuit) -> Engine:
    return Engine(circuit)


CONDITION = Condition("typical", 50 * PS, 50 * PS, 5e-15)


def trials(sheet: Sheet) -> list[Trial]:
    """Return a relaxed trial and one each with setup and hold near their limits, both data edges."""
    made = []
    for arc in arcs_of(sheet):
        if arc.kind is Kind.SETUP:
            made += [
                relaxed(sheet, arc, CONDITION, 900 * PS),
                at_offset(sheet, arc, CONDITION, 60 * PS, 900 * PS),
            ]
        elif arc.kind is Kind.HOLD:
            made.append(at_offset(sheet, arc, CONDITION, 30 * PS, 900 * PS))
    assert len(made) == 6
    return made


def assert_alike(one: Outcome, other: Outcome) -> None:
    for first, second in zip(one.swings, other.swings, strict=True):
        assert first.pin == second.pin
        assert first.crossings
        assert first.crossings == pytest.approx(second.crossings, abs=NEAR)
        assert first.transitions == pytest.approx(second.transitions, abs=NEAR)
        assert (first.first, first.last) == pytest.approx((second.first, second.last), abs=1e-3)


class TestSameAnswer:
    @pytest.mark.slow
    @pytest.mark.parametrize("index", [1, 4])
    def test_a_warm_session_and_the_executable_started_cold_agree(
        self, sheet: Sheet, circuit: Circuit, engine: Engine, index: int
    ) -> None:
        trial = trials(sheet)[index]
        assert_alike(engine.run(trial), run_batch(circuit, trial, engine.settings))

    @pytest.mark.parametrize("index", range(6))
    def test_the_same_warm_deck_gives_the_same_in_session_and_executable(
        self, sheet: Sheet, circuit: Circuit, engine: Engine, index: int
    ) -> None:
        trial = trials(sheet)[index]
        volts = engine.rest_volts(trial.start)
        assert_alike(engine.run(trial), run_batch(circuit, trial, engine.settings, volts))

    def test_a_trial_gives_the_same_whatever_ran_before_it(self, sheet: Sheet, engine: Engine) -> None:
        made = trials(sheet)
        first = [engine.run(trial) for trial in made]
        again = [engine.run(trial) for trial in reversed(made)][::-1]
        assert first == again

    def test_a_trial_gives_the_same_after_one_with_other_settings(
        self, sheet: Sheet, circuit: Circuit, engine: Engine
    ) -> None:
        trial = trials(sheet)[1]
        apart = replace(
            circuit, digest="a circuit of this test's own"
        )  # nothing it does reaches another test
        plain = Engine(apart)
        plain.settled = engine.settled | {trial.start: engine.rest_volts(trial.start)}
        before = plain.run(trial)
        shunts = (("gmin", 1e-9), ("itl4", 200.0), ("abstol", 1e-8))
        rough = Engine(apart, Settings(name="rough", reltol=1e-2, trtol=7.0, method="gear", extra=shunts))
        rough.settled = plain.settled
        assert rough.run(trial).swings != before.swings
        assert plain.run(trial) == before

    def test_the_nudge_of_an_edge_does_not_shift_the_time_axis(
        self, sheet: Sheet, circuit: Circuit, engine: Engine
    ) -> None:
        # the data edge comes first here, so the transient begins with it; delays still count from the clock
        trial = trials(sheet)[1]
        volts = engine.rest_volts(trial.start)
        plain = run_batch(circuit, trial, Settings(), volts)
        moved = run_batch(circuit, trial, Settings(nudge=-5 * PS), volts)  # data earlier: hardly any effect
        assert moved.of("Q").crossings == pytest.approx(plain.of("Q").crossings, abs=2 * PS)


class TestFinding:
    def test_a_library_that_is_not_there_is_named(self, monkeypatch: pytest.MonkeyPatch) -> None:
        monkeypatch.setenv("NGSPICE_LIBRARY_PATH", "/nowhere/libngspice.so.0")
        with pytest.raises(
            SimulatorError, match=r"names '/nowhere/libngspice\.so\.0', which is not there"
        ) as e:
            find_library()
        assert e.value.todo == "Correct it or unset it."
        assert e.value.exit_status == 3

    def test_no_library_at_all_is_told_with_what_to_install(self, monkeypatch: pytest.MonkeyPatch) -> None:
        monkeypatch.delenv("NGSPICE_LIBRARY_PATH", raising=False)
        monkeypatch.setattr("ctypes.util.find_library", lambda name: None)
        with pytest.raises(SimulatorError, match="was not found") as caught:
            find_library()
        assert "apt-get install" in caught.value.todo

    def test_no_executable_is_told_with_what_to_install(
        self, monkeypatch: pytest.MonkeyPatch, tmp_path: Path
    ) -> None:
        monkeypatch.delenv("NGSPICE_EXECUTABLE", raising=False)
        monkeypatch.setenv("PATH", str(tmp_path))
        with pytest.raises(SimulatorError, match="the ngspice executable was not found") as caught:
            find_executable()
        assert "apt-get install" in caught.value.todo

    def test_a_named_executable_that_is_not_there_is_named(self, monkeypatch: pytest.MonkeyPatch) -> None:
        monkeypatch.setenv("NGSPICE_EXECUTABLE", "/nowhere/ngspice")
        with pytest.raises(SimulatorError, match="NGSPICE_EXECUTABLE names '/nowhere/ngspice'"):
            find_executable()

    @pytest.mark.parametrize("library", ["text", "libc"])
    def test_a_library_that_is_something_else_is_a_simulator_error(
        self, tmp_path: Path, library: str
    ) -> None:
        if library == "text":
            path = tmp_path / "libngspice.so"
            path.write_text("not a library", encoding="utf-8")
            named = str(path)
        else:  # loads, but knows nothing of ngspice
            import _ctypes

            named = str(_ctypes.__file__)
        code = """
            from charflow.errors import SimulatorError
            from charflow.simulate.session import Session
            try:
                Session.here()
            except SimulatorError as error:
                print("told", error)
        """
        done = subprocess.run(
            [sys.executable, "-c", textwrap.dedent(code)],
            capture_output=True,
            text=True,
            timeout=120,
            check=False,
            cwd=ROOT,
            env={"NGSPICE_LIBRARY_PATH": named, "PATH": "/usr/bin:/bin"},
        )
        assert done.stdout.startswith("told"), done.stderr
        assert named in done.stdout
