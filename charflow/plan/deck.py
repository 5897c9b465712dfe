"""The text of a transient deck. The same text serves the in-process session and the ngspice executable.

A *cold* deck brings the cell to rest inside the transient; a *warm* deck begins at rest from node
voltages that an earlier settling run recorded (``.ic``, enforced by the operating point, so internal
device nodes are consistent too).
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from itertools import pairwise

from charflow.plan.circuit import Circuit
from charflow.plan.stimulus import Waveform, begins, waveform
from charflow.plan.trial import Start, Trial

PREAMBLE_RAMP = 1 / 40  # rail-to-rail ramp of the settling vectors, as a fraction of the rest time

LONGEST_STEP = 15  # the window in steps, where nothing happens; elsewhere the error control decides


@dataclass(frozen=True)
class Settings:
    """Numerical settings of one transient. ``max_step`` [s] bounds the time step, None leaves it to ngspice.

    ``nudge`` [s] shifts every edge but the reference: two sources whose corners coincide to rounding
    can stop ngspice with "timestep too small".
    """

    name: str = "standard"
    reltol: float = 1e-6
    trtol: float = 1.0
    method: str = "trap"
    max_step: float | None = None
    nudge: float = 0.0
    extra: tuple[tuple[str, float], ...] = (("bypass", 1.0),)

    @property
    def options(self) -> dict[str, str]:
        """The ``.option`` values of these settings as text."""
        values = {"reltol": f"{self.reltol:g}", "trtol": f"{self.trtol:g}", "method": self.method}
        return values | {name: f"{value:g}" for name, value in self.extra}


@dataclass(frozen=True)
class Span:
    """When a transient runs: ``zero`` is where the trial's time zero lies on the deck's time axis [s]."""

    zero: float
    stop: float
    step: float


def number(value: float) -> str:
    """Return ``value`` so that ngspice reads back the same double to 12 digits."""
    return f"{value:.12g}"


def span(circuit: Circuit, trial: Trial, settings: Settings, *, warm: bool) -> Span:
    """Return the time axis of the deck of ``trial``."""
    rest = 0.0 if warm else circuit.rest * len(trial.start.vectors)
    zero = rest - begins(trial, circuit.fractions)
    return Span(zero, zero + trial.until, settings.max_step or (trial.until + zero - rest) / LONGEST_STEP)


def source_points(circuit: Circuit, trial: Trial, pin: str, at: Span, *, warm: bool) -> Waveform:
    """Return the drive of ``pin`` on the deck's time axis: (time [s], volts) pairs."""
    points = [(at.zero + time, level) for time, level in waveform(trial, pin, circuit.fractions)]
    if warm:
        points[0] = (0.0, points[0][1])
    else:
        points = [*_preamble(circuit, trial.start, pin), *points]
    return tuple((time, level * circuit.supply) for time, level in points)


def _preamble(circuit: Circuit, start: Start, pin: str) -> list[tuple[float, float]]:
    ramp = circuit.rest * PREAMBLE_RAMP
    levels = [float(dict(vector)[pin]) for vector in start.vectors]
    points = [(0.0, levels[0])]
    for index, (before, after) in enumerate(pairwise(levels), start=1):
        if after != before:
            points += [(index * circuit.rest, before), (index * circuit.rest + ramp, after)]
    return points


def settle_points(circuit: Circuit, start: Start, pin: str) -> Waveform:
    """Return the drive of ``pin`` that brings the cell to the rest of ``start``: (time [s], volts)."""
    return tuple((time, level * circuit.supply) for time, level in _preamble(circuit, start, pin))


def settle_end(circuit: Circuit, start: Start) -> float:
    """Return how long the settling run lasts [s]."""
    return circuit.rest * len(start.vectors)


def pwl(points: Waveform) -> str:
    """Return the numbers of a piecewise-linear source."""
    return " ".join(f"{number(time)} {number(level)}" for time, level in points)


def circuit_lines(circuit: Circuit, sources: Mapping[str, Waveform], loads: Mapping[str, float]) -> list[str]:
    """Return the deck from its title to the loads, without analysis."""
    node = circuit.nodes
    lines = [f"* {circuit.subckt} at corner {circuit.corner}"]
    lines += [f".option {name}={value:g}" for name, value in circuit.options]
    lines += [f".temp {circuit.temperature:g}"]
    lines += circuit.models.splitlines()
    lines += circuit.netlist.splitlines()
    lines.append(f"xcell {' '.join(node[port] for port in circuit.ports)} {circuit.subckt}")
    lines += [f"v_{node[pin]} {node[pin]} 0 {number(circuit.supply)}" for pin in circuit.powers]
    lines += [f"v_{node[pin]} {node[pin]} 0 0" for pin in circuit.grounds]
    lines += [f"v_{node[pin]} {node[pin]} 0 pwl({pwl(points)})" for pin, points in sources.items()]
    lines += [f"c_{node[pin]} {node[pin]} 0 {number(load)}" for pin, load in loads.items()]
    return lines


def initial_conditions(volts: Mapping[str, float]) -> list[str]:
    """Return the ``.ic`` lines of a warm deck; ``volts`` is keyed by node."""
    return [f".ic v({node})={value:.17g}" for node, value in volts.items()]


def deck(
    circuit: Circuit,
    trial: Trial,
    settings: Settings,
    rest_volts: Mapping[str, float] | None = None,
    measures: bool = False,
) -> str:
    """Return the whole text of a deck for ``trial``: warm if ``rest_volts`` is given, else cold.

    With ``measures`` it prints clock-to-output delays through ngspice's own ``.measure``.
    """
    warm = rest_volts is not None
    trial = nudged(trial, settings)
    at = span(circuit, trial, settings, warm=warm)
    sources = {pin: source_points(circuit, trial, pin, at, warm=warm) for pin in circuit.inputs}
    lines = circuit_lines(circuit, sources, dict(trial.loads))
    if rest_volts is not None:
        lines += initial_conditions(rest_volts)
    lines += [f".option {name}={value}" for name, value in settings.options.items()]
    lines.append(
        f".save {' '.join(f'v({circuit.nodes[pin]})' for pin in (*circuit.inputs, *circuit.outputs))}"
    )
    lines.append(f".tran {number(at.step)} {number(at.stop)} 0 {number(at.step)}")
    if measures:
        lines += _measures(circuit, trial, at)
    lines.append(".end")
    return "\n".join(lines) + "\n"


def _measures(circuit: Circuit, trial: Trial, at: Span) -> list[str]:
    """Return ``.measure`` lines: delay from the reference edge, 50 % to 50 %, of every output."""
    node, half = circuit.nodes, number(circuit.supply / 2)
    reference = next(move for move in trial.moves if move.at == 0.0)
    begin = number(at.zero + begins(trial, circuit.fractions))
    edge = "rise" if reference.rising else "fall"
    return [
        f".measure tran clk_to_{node[pin][2:]} trig v({node[reference.pin]}) val={half} td={begin} {edge}=1 "
        f"targ v({node[pin]}) val={half} td={begin} cross=1"
        for pin, _ in trial.loads
    ]


def nudged(trial: Trial, settings: Settings) -> Trial:
    """Return ``trial`` with every edge but the reference shifted by the settings' nudge."""
    if not settings.nudge:
        return trial
    moves = tuple(
        move if move.at == 0.0 else type(move)(move.pin, move.rising, move.at + settings.nudge, move.slew)
        for move in trial.moves
    )
    return Trial(trial.corner, trial.start, moves, trial.loads, trial.until)


def spiceinit(compatibility: str | None) -> str:
    """Return the ``.spiceinit`` to lay beside a deck: the compatibility mode its models want, and one thread.

    Several threads make a circuit as small as a cell several times slower.
    """
    mode = f"set ngbehavior={compatibility}\n" if compatibility else ""
    return f"{mode}set ng_nomodcheck\nset num_threads=1\n"
