"""Axes suited to a cell: loads from what its own inputs weigh, slews from its own output transitions."""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass
from math import sqrt
from statistics import fmean

import numpy as np

from charflow.errors import TrialError
from charflow.plan.behaviour import Behaviour
from charflow.plan.trial import Move, Trial
from charflow.probe.function import Flip, flips
from charflow.probe.pins import Ports
from charflow.probe.transistors import Network
from charflow.sheet import Sheet
from charflow.simulate.engine import Engine

SPREAD = 8.0  # the slowest output transition on the axes over the fastest
FANOUT = 4.0
FO4_PER_LENGTH = 0.4e-3  # s/m: delay of an inverter driving four like it, about 0.4 ns per um of length


@dataclass(frozen=True)
class DraftAxes:
    """Three slews [s] and three loads [F], rising, and in words where they come from."""

    slews: tuple[float, float, float]
    loads: tuple[float, float, float]
    words: tuple[str, ...]


def axes_from_sizes(network: Network, ports: Ports) -> DraftAxes:
    """Return axes estimated from device sizes alone.

    The fan-out-of-four delay is taken as 0.4 ns per um of channel length (the range Weste and Harris give,
    CMOS VLSI Design, ch. 4), an input's capacitance as its gates and wires.
    """
    lengths = [d.length for d in network.transistors if d.length]
    inputs = [network.capacitance.get(pin.lower(), 0.0) for pin in ports.inputs]
    usual = (10e-12, 50e-12, 200e-12), (1e-15, 5e-15, 25e-15)
    if not lengths or not any(inputs) or network.unsized:
        return DraftAxes(*usual, ("Sizes are not plain numbers in the netlist; these are placeholders.",))
    fo4 = min(max(FO4_PER_LENGTH * min(lengths), 1e-12), 1e-9)
    load = min(max(fmean(inputs), 1e-17), 1e-12)
    drive = max(1.0, _strength(network, ports.outputs) / _typical(network))
    words = (
        f"Estimated from sizes, not simulated: an input weighs about {load * 1e15:.2g} fF, and a fan-out of",
        f"four takes about {fo4 * 1e12:.2g} ps at {min(lengths) * 1e6:.2g} um.",
    )
    return _axes(fo4 / 2, load, load * 2 * FANOUT * drive, words)


def _typical(network: Network) -> float:
    widths = sorted(d.width for d in network.transistors if d.width)
    return widths[len(widths) // 2]


def _strength(network: Network, outputs: Iterable[str]) -> float:
    nodes = {pin.lower() for pin in outputs}
    widths = [d.width for d in network.transistors if d.width and nodes & set(d.ends)]
    return fmean(widths) if widths else _typical(network)


def _axes(slew: float, low: float, high: float, words: tuple[str, ...]) -> DraftAxes:
    high = max(high, 4 * low)
    return DraftAxes(
        slews=(_round(slew), _round(slew * sqrt(SPREAD)), _round(slew * SPREAD)),
        loads=(_round(low), _round(sqrt(low * high)), _round(high)),
        words=words,
    )


def _round(value: float) -> float:
    return float(f"{value:.2g}")


def axes_by_simulation(engine: Engine, cell: Behaviour, sheet: Sheet) -> DraftAxes:
    """Return axes measured on the cell itself: see the words of the result for how.

    The transition of an output is taken as a straight line in the load, through one and eight input
    capacitances. Raises :class:`TrialError` where no output could be measured.
    """
    until = engine.circuit.rest
    every = list(flips(cell, sheet, engine.circuit.corner, until))
    weighed = [_weight(engine, every, pin) for pin in cell.inputs]
    own = fmean([farads for farads in weighed if farads > 0] or [1e-15])
    moved = _moving(every, cell)
    near = fmean(_transitions(engine, moved, own))
    far = fmean(_transitions(engine, moved, 8 * own))
    slope = max((far - near) / (7 * own), near / (100 * own))  # s/F
    top = own + (SPREAD - 1) * near / slope
    low, high = sheet.measure.slew_fractions
    words = (
        f"Measured: an input weighs {own * 1e15:.2g} fF on average (the charge of an edge over the supply).",
        f"Loads go from one such input to where the outputs' own transition ({low:.0%} to {high:.0%}) is",
        f"{SPREAD:g} times that at the first load; slews are those transitions, {near * 1e12:.2g} ps and up.",
    )
    return _axes(near, own, top, words)


def _moving(every: list[Flip], cell: Behaviour) -> list[tuple[Flip, str, bool]]:
    """Return a flip of the control for each output and direction it can move in."""
    found: dict[tuple[str, bool], Flip] = {}
    for flip in every:
        if flip.trial.moves[0].pin == cell.control:
            before = dict(flip.before)
            for pin, level in flip.after:
                if level is not None and before[pin] is not None and level != before[pin]:
                    found.setdefault((pin, level), flip)
    return [(flip, pin, rising) for (pin, rising), flip in found.items()]


def _transitions(engine: Engine, moved: list[tuple[Flip, str, bool]], load: float) -> list[float]:
    times = []
    for flip, pin, _ in moved:
        old = flip.trial
        loads = tuple((name, load) for name, _ in old.loads)
        swing = engine.run(Trial(old.corner, old.start, old.moves, loads, old.until)).of(pin)
        if swing.transitions and swing.transitions[-1]:
            times.append(swing.transitions[-1])
    if not times:
        raise TrialError("no output made a whole transition, so no axes can be chosen")
    return times


def _weight(engine: Engine, every: list[Flip], pin: str) -> float:
    """Return what ``pin`` weighs [F]: the charge its source delivers in one edge over supply, both edges."""
    node = engine.circuit.nodes[pin]
    weights = []
    for rising in (True, False):
        trial = next((f.trial for f in every if f.trial.moves[0] == _edge(f.trial, pin, rising)), None)
        if trial is None:
            continue
        waves, _, _ = engine.waves(trial, save=(f"v_{node}#branch",))
        current, time = waves[f"v_{node}#branch"], waves["time"]
        charge = float(np.sum((current[1:] + current[:-1]) * np.diff(time)) / 2)
        weights.append(abs(charge) / engine.circuit.supply)
    return fmean(weights) if weights else 0.0


def _edge(trial: Trial, pin: str, rising: bool) -> Move:
    return Move(pin, rising, 0.0, trial.moves[0].slew)
