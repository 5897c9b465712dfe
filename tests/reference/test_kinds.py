"""Brute force on one Tarn cell of each kind: what charflow answers, found again the slow way.

The check shares nothing with charflow but the netlists: its decks, edges and verdicts are written out
here by hand, ngspice's own ``.measure`` does the measuring, steps of at most 2 ps at a tight tolerance and
plain bisection the rest. The pauses are those of charflow's rest, 2 ns: nodes that float creep, and with
another history the negative-edge cell's setup moves by 0.2 ps and more. Tolerance as for the sky130 brute
force: 0.3 ps, of which bisection takes 0.05 ps.
"""

from __future__ import annotations

import re
import subprocess
from collections.abc import Callable
from dataclasses import dataclass
from pathlib import Path

import pytest

from charflow.campaign.run import run_campaign
from charflow.plan.arcs import Kind
from charflow.sheet.demo import decks_folder
from charflow.sheet.read import read_sheet
from charflow.solve.answer import Answer

pytestmark = [pytest.mark.slow, pytest.mark.ngspice]

VDD = 1.2
RAMP = 50e-12 / 0.6  # a 50 ps slew between 20 % and 80 %, from rail to rail
PAUSE = 2e-9  # charflow's rest, stated in the sheet
AFTER = 0.9e-9
LOAD = 5e-15
Edge = tuple[str, float, int]  # pin, time of its 50 % point after the reference edge [s], level it goes to


@dataclass(frozen=True)
class Scenario:
    """A constraint acted out by hand.

    ``before`` lists single pin changes, a pause after each, from all inputs low; ``edges`` gives the edges
    of the trial at an offset, ``relaxed`` those of the reference. ``from_`` is the edge the delay counts
    from, None where the output must stay within a tenth of supply of the rail it is at.
    """

    cell: str
    quantity: Kind
    pin: str
    rising: bool
    output: str
    goes: int
    before: str
    edges: Callable[[float], tuple[Edge, ...]]
    relaxed: tuple[Edge, ...] = ()
    from_: str | None = "CK"
    when: str = ""
    slew: str = "50 ps"
    bracket: tuple[float, float] = (-150e-12, 250e-12)


FAR = 2e-9
SCENARIOS = (
    Scenario("tarn_dffn_1", Kind.SETUP, "D", True, "Q", 1, "CKN1 CKN0 CKN1",
             lambda x: (("D", -x, 1), ("CKN", 0, 0)), (("D", -FAR, 1), ("CKN", 0, 0)), "CKN"),
    Scenario("tarn_dffcp_1", Kind.RECOVERY, "CLRN", True, "Q", 1, "D1",
             lambda x: (("CLRN", -x, 1), ("CK", 0, 1)), (("CLRN", -FAR, 1), ("CK", 0, 1))),
    Scenario("tarn_dffcp_1", Kind.REMOVAL, "CLRN", True, "Q", 0, "D1",
             lambda x: (("CK", 0, 1), ("CLRN", x, 1)), from_=None),
    Scenario("tarn_sdffp_1", Kind.SETUP, "SI", True, "Q", 1, "SE1 CK1 CK0",
             lambda x: (("SI", -x, 1), ("CK", 0, 1)), (("SI", -FAR, 1), ("CK", 0, 1)), when="!D & SE"),
    Scenario("tarn_edffp_1", Kind.SETUP, "E", True, "Q", 1, "E1 CK1 CK0 E0 D1",
             lambda x: (("E", -x, 1), ("CK", 0, 1)), (("E", -FAR, 1), ("CK", 0, 1)), when="D"),
    Scenario("tarn_latp_1", Kind.SETUP, "D", True, "Q", 1, "G1 G0 G1",
             lambda x: (("D", -x, 1), ("G", 0, 0)), (("D", 0, 1),), "D"),
    Scenario("tarn_latp_1", Kind.HOLD, "D", False, "Q", 1, "D1 G1 G0 G1",
             lambda x: (("G", 0, 0), ("D", x, 0)), from_=None),
    Scenario("tarn_icgp_1", Kind.SETUP, "E", True, "GCK", 1, "CK1 CK0",
             lambda x: (("E", -x, 1), ("CK", 0, 1)), (("E", -FAR, 1), ("CK", 0, 1))),
    Scenario("tarn_icgp_1", Kind.SETUP, "E", False, "GCK", 0, "E1",
             lambda x: (("E", -x, 0), ("CK", 0, 1)), from_=None),
    Scenario("tarn_dffp2_1", Kind.SETUP, "D0", True, "Q0", 1, "D11 CK1 CK0",
             lambda x: (("D0", -x, 1), ("CK", 0, 1)), (("D0", -FAR, 1), ("CK", 0, 1))),
    Scenario("tarn_dyn_1", Kind.SETUP, "D", True, "Q", 1, "CK1 CK0",
             lambda x: (("D", -x, 1), ("CK", 0, 1)), (("D", -FAR, 1), ("CK", 0, 1))),
    Scenario("tarn_dffp_1", Kind.PULSE_WIDTH, "CK", True, "Q", 1, "CK1 CK0 D1",
             lambda x: (("CK", 0, 1), ("CK", x, 0)), (("CK", 0, 1),),
             slew="10 ps", bracket=(17e-12, 250e-12)),
)  # fmt: skip


def _names(s: Scenario) -> str:
    return f"{s.cell}-{s.quantity.value}-{s.pin}-{'rise' if s.rising else 'fall'}"


@pytest.mark.parametrize("scenario", SCENARIOS, ids=_names)
def test_the_answer_is_the_one_plain_bisection_finds(scenario: Scenario, tmp_path: Path) -> None:
    ours = _ours(scenario, tmp_path)
    assert ours.value is not None
    brute = _bisect(scenario, tmp_path)
    assert ours.value == pytest.approx(brute, abs=0.3e-12)


_cache: dict[tuple[str, str], tuple[Answer, ...]] = {}


def _ours(scenario: Scenario, tmp_path: Path) -> Answer:
    key = (scenario.cell, scenario.slew)
    if key not in _cache:
        text = (decks_folder() / f"{scenario.cell}.toml").read_text()
        text = re.sub(r'"(tarn\w+\.(?:spice|lib))', rf'"{decks_folder()}/\1', text)
        for axis in ("clock_slew", "data_slew"):
            text = re.sub(rf"^{axis} = .*$", f'{axis} = ["{scenario.slew}"]', text, flags=re.MULTILINE)
        text = re.sub(r"^load = .*$", 'load = ["5 fF"]', text, flags=re.MULTILINE)
        path = tmp_path / "cell.toml"
        path.write_text(f'{text}rest = "2 ns"\n')
        _cache[key] = run_campaign(read_sheet(path), tmp_path / "run", 2, ("typical",)).answers
    found = [
        a
        for a in _cache[key]
        if (a.quantity, a.pin, a.pin_edge, a.when)
        == (scenario.quantity, scenario.pin, "rise" if scenario.rising else "fall", scenario.when)
        and (
            not a.output
            or (a.output, a.output_edge) == (scenario.output, "rise" if scenario.goes else "fall")
        )
    ]
    assert len(found) == 1, [(a.quantity, a.pin, a.pin_edge, a.when, a.output) for a in _cache[key]]
    return found[0]


def _bisect(scenario: Scenario, folder: Path) -> float:
    """Return the offset [s] between passing and failing, to 0.1 ps."""
    allowed = 0.0
    if scenario.from_ is not None:
        reference = _delay(scenario, scenario.relaxed, folder)
        assert reference is not None
        allowed = 1.1 * reference
    low, high = scenario.bracket

    def passes(x: float) -> bool:
        if scenario.from_ is None:
            return _excursion(scenario, scenario.edges(x), folder) <= 0.1
        delay = _delay(scenario, scenario.edges(x), folder)
        return delay is not None and delay <= allowed

    assert passes(high)
    assert not passes(low)
    while high - low > 0.1e-12:
        middle = (low + high) / 2
        low, high = (low, middle) if passes(middle) else (middle, high)
    return (low + high) / 2


def _delay(scenario: Scenario, edges: tuple[Edge, ...], folder: Path) -> float | None:
    """Return the delay [s] of the output's only crossing, None if it does not end where it should."""
    half = VDD / 2
    zero = _zero(scenario, edges)
    end = zero + AFTER
    begin = zero - 0.5e-9
    first = next(edge for edge in edges if edge[0] == scenario.from_)
    word = "rise" if scenario.goes else "fall"
    said = _run(
        scenario,
        edges,
        f".measure tran t0 when v({scenario.from_})={half} td={begin} {'rise' if first[2] else 'fall'}=1\n"
        f".measure tran t1 when v({scenario.output})={half} td={begin} {word}=last\n"
        f".measure tran last find v({scenario.output}) at={end:.12g}\n",
        folder,
    )
    values = dict(re.findall(r"^(t0|t1|last)\s*=\s*([-+.\deE]+)", said, re.MULTILINE))
    if "t1" not in values or abs(float(values["last"]) / VDD - scenario.goes) > 0.1:
        return None
    return float(values["t1"]) - float(values["t0"])


def _excursion(scenario: Scenario, edges: tuple[Edge, ...], folder: Path) -> float:
    what = "min" if scenario.goes else "max"
    said = _run(
        scenario,
        edges,
        f".measure tran peak {what} v({scenario.output}) from={_zero(scenario, edges) - 0.5e-9:.12g} "
        f"to={_zero(scenario, edges) + AFTER:.12g}\n",
        folder,
    )
    peak = float(re.findall(r"^peak\s*=\s*([-+.\deE]+)", said, re.MULTILINE)[0]) / VDD
    return 1 - peak if scenario.goes else peak


def _zero(scenario: Scenario, edges: tuple[Edge, ...]) -> float:
    """Return when [s] the reference edge comes: one pause after the last step before it."""
    steps = len(scenario.before.split()) + sum(at == -FAR for _, at, _ in edges)
    return PAUSE * (steps + 1) + 0.1e-9


def _run(scenario: Scenario, edges: tuple[Edge, ...], measures: str, folder: Path) -> str:
    text = (decks_folder() / f"{scenario.cell}.spice").read_text()
    ports = re.search(r"^\.subckt\s+\S+\s+(.*)$", text, re.MULTILINE | re.IGNORECASE)
    assert ports
    pins = ports[1].split()
    outputs = {"Q", "QN", "GCK", "Q0", "Q1"} & set(pins)
    zero, ramp = _zero(scenario, edges), float(scenario.slew.split()[0]) * 1e-12 / 0.6
    moves: dict[str, list[tuple[float, int]]] = {pin: [] for pin in pins}
    for number, step in enumerate(scenario.before.split(), start=1):
        moves[step[:-1]].append((number * PAUSE, int(step[-1])))
    for pin, at, level in edges:
        moves[pin].append((zero + at, level))
    lines = [
        "* brute force",
        f'.lib "{decks_folder()}/tarn130.lib" tt',
        f'.include "{decks_folder()}/{scenario.cell}.spice"',
    ]
    lines.append(f"x1 {' '.join(pins)} {scenario.cell}")
    for pin in pins:
        if pin in outputs:
            lines.append(f"c{pin} {pin} 0 {LOAD}")
        elif pin in ("VDD", "VSS"):
            lines.append(f"v{pin} {pin} 0 {VDD if pin == 'VDD' else 0}")
        else:
            lines.append(f"v{pin} {pin} 0 pwl({_pwl(moves[pin], ramp)})")
    lines += [
        ".options reltol=1e-6 trtol=1",
        ".temp 25",
        f".tran 2p {zero + AFTER + 2e-12:.12g} 0 2p",
        measures,
        ".end",
    ]
    (folder / "brute.cir").write_text("\n".join(lines))
    (folder / ".spiceinit").write_text("set num_threads=1\n")  # more only get in each other's way here
    done = subprocess.run(
        ["ngspice", "-b", "brute.cir"],
        cwd=folder,
        capture_output=True,
        text=True,
        check=False,
        env={
            "PATH": "/usr/bin:/bin",
            "HOME": str(folder),
            "OMP_NUM_THREADS": "1",
            "NGSPICE_MEAS_PRECISION": "12",
        },
    )
    return done.stdout


def _pwl(moves: list[tuple[float, int]], ramp: float) -> str:
    level, points = 0, ["0 0"]
    for at, to in sorted(moves):
        points += [f"{at - ramp / 2:.12g} {level * VDD}", f"{at + ramp / 2:.12g} {to * VDD}"]
        level = to
    return " ".join(points)
