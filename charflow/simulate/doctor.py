"""Is the simulator there and sound: versions, and a circuit whose answer is known in closed form."""

from __future__ import annotations

import math
from collections.abc import Iterator

from charflow.errors import SimulatorError
from charflow.simulate.batch import run_deck
from charflow.simulate.library import executable_version, find_executable, find_library, library_version
from charflow.simulate.session import Session
from charflow.simulate.waveform import Samples, crossing_times

RESISTANCE, CAPACITANCE = 1e3, 50e-15  # ohm, F
TAU = RESISTANCE * CAPACITANCE
# A ramp from rail to rail in T = tau drives R and C: its output passes 50 % at tau ln(2 (e - 1)) after the
# ramp begins, so 50 % to 50 % is that less T / 2 (closed form; 36.7236 ps here).
KNOWN = TAU * (math.log(2 * (math.e - 1)) - 0.5)
TOLERANCE = 0.01e-12  # s
_LINES = (
    "* RC",
    f"v1 in 0 pwl(0 0 10p 0 {10e-12 + TAU:.12g} 1)",
    f"r1 in out {RESISTANCE:g}",
    f"c1 out 0 {CAPACITANCE:g}",
    ".option reltol=1e-6 trtol=1",
)
_STEP, _STOP = 5e-12, 500e-12


def examine() -> Iterator[str]:
    """Yield findings line by line. Raises :class:`SimulatorError` at the first thing that is not sound."""
    library = find_library()
    version = library_version()
    yield f"ngspice library {library}: version {version}"
    executable = find_executable()
    yield f"ngspice executable {executable}: version {executable_version(executable)}"
    if executable_version(executable) != version:
        yield "  the two differ; a replayed entry may differ from its table in the last digits"
    session = Session.here()
    session.load("doctor", [*_LINES, ".end"], None)
    yield _judge("library", _delay(session.transient(_STEP, _STOP, ("in", "out"))))
    tran = f".tran {_STEP:g} {_STOP:g} 0 {_STEP:g}"
    waves, _ = run_deck("\n".join([*_LINES, ".save v(in) v(out)", tran, ".end"]) + "\n", None)
    yield _judge("executable", _delay(waves))
    yield "sound"


def _delay(waves: dict[str, Samples]) -> float:
    out = crossing_times(waves["time"], waves["out"], 0.5)
    begin = crossing_times(waves["time"], waves["in"], 0.5)
    return out[0] - begin[0] if out and begin else float("nan")


def _judge(what: str, found: float) -> str:
    error = found - KNOWN
    if not abs(error) < TOLERANCE:
        raise SimulatorError(
            f"the {what} measures {found * 1e12:.4f} ps on a circuit whose delay is {KNOWN * 1e12:.4f} ps"
        )
    return f"{what}: delay of a ramp through RC {found * 1e12:.4f} ps, known {KNOWN * 1e12:.4f} ps"
