"""Currents of a cell's sources: integrated over a trial, or standing at an operating point."""

from __future__ import annotations

from dataclasses import replace

import numpy as np

from charflow.errors import TrialError
from charflow.plan.deck import Settings, circuit_lines, pwl, settle_points
from charflow.plan.flow import Flow, Standing
from charflow.plan.trial import Start, Trial
from charflow.simulate.engine import Engine
from charflow.simulate.waveform import Samples

TAIL = 0.1  # of the window at its end, over which the current that stays is taken
STILL = 2e-3  # of the charge delivered, by which the last two tails may differ
LEAST = 1e-19  # C; less than one electron, so noise of the integration

# ngspice adds gmin across every junction and stops at abstol: at their defaults of 1e-12 both are larger
# than what a cell of a 130 nm process leaks at room temperature (5 pA).
FAINT = (("gmin", 1e-16), ("abstol", 1e-17))


def flow_of(engine: Engine, trial: Trial) -> Flow:
    """Return what the sources deliver during ``trial``. Raises :class:`TrialError` where it fails."""
    circuit = engine.circuit
    pins = (*circuit.inputs, *circuit.powers, *circuit.grounds)
    branches = {pin: f"v_{circuit.nodes[pin]}#branch" for pin in pins}
    nodes = tuple(circuit.nodes[pin] for pin in circuit.outputs)
    waves, _, zero = engine.waves(trial, (*nodes, *branches.values()))
    time = waves["time"]
    charges, still = {}, True
    for pin, name in branches.items():
        current = -waves[name]  # ngspice counts what flows into the source's plus
        total, last, before = _charges(time, current)
        charges[pin] = total - last / TAIL
        still &= abs(last - before) <= STILL * abs(charges[pin]) + LEAST
    return Flow(charges, still, engine.swings(waves, zero))


def _charges(time: Samples, current: Samples) -> tuple[float, float, float]:
    """Return the charge [C] of the whole window, of its tail, and of as long a piece before that.

    It is added up from sample to sample by the trapezoidal rule, which is the solver's own: a current that
    alternates from step to step (the rule's answer to a corner in the voltage of a capacitor) cancels.
    """
    steps = (current[1:] + current[:-1]) / 2 * np.diff(time)
    so_far = np.concatenate(([0.0], np.cumsum(steps)))
    ends = time[0] + np.array([1 - 2 * TAIL, 1 - TAIL, 1.0]) * (time[-1] - time[0])
    early, late, total = (float(q) for q in np.interp(ends, time, so_far))
    return total, total - late, late - early


def standing_of(engine: Engine, start: Start) -> Standing:
    """Return the currents at the operating point that the settled state of ``start`` leads to.

    Raises :class:`TrialError` where there is none.
    """
    circuit, node, session = engine.circuit, engine.circuit.nodes, engine.session
    faint: Settings = replace(engine.settings, extra=FAINT)
    drives = {pin: settle_points(circuit, Start((start.vectors[-1],)), pin) for pin in circuit.inputs}
    key = (circuit.digest, circuit.rest, start, "standing")
    if not session.has(key):
        volts = engine.rest_volts(start)
        guesses = [f".nodeset v({name})={value:.17g}" for name, value in volts.items()]
        loads = dict.fromkeys(circuit.outputs, 1e-15)
        session.load(key, [*circuit_lines(circuit, drives, loads), *guesses, ".end"], circuit.compatibility)
    session.use(key)
    session.drive({f"v_{node[pin]}": pwl(points) for pin, points in drives.items()}, {}, faint.options)
    try:
        values = session.operating_point()
    except TrialError as error:
        raise error.at(f"operating point at corner {circuit.corner!r}") from None
    pins = (*circuit.inputs, *circuit.powers, *circuit.grounds)
    return Standing(
        {pin: -values[f"v_{node[pin]}#branch"] for pin in pins},
        {pin: values[node[pin]] / circuit.supply for pin in circuit.outputs},
    )
