"""Capacitance, energy and leakage of a finished run, over worker processes of their own.

They are apart from the timing rows: saving currents would slow those down, and one transient an event is
a small part of what constraints cost. A pin is one job; a cell of four inputs takes some seconds.
"""

from __future__ import annotations

import multiprocessing
from collections.abc import Callable, Mapping
from concurrent.futures import ProcessPoolExecutor, as_completed
from concurrent.futures.process import BrokenProcessPool
from dataclasses import dataclass

from charflow.errors import SimulatorError
from charflow.plan.behaviour import behaviour_of
from charflow.plan.circuit import Circuit, circuit_of, read_sources
from charflow.plan.deck import Settings
from charflow.sheet import Sheet
from charflow.simulate.engine import Engine
from charflow.simulate.flows import flow_of, standing_of
from charflow.solve.power import Power, PowerSolver, parts


@dataclass(frozen=True)
class PowerJob:
    """What one process measures: the edges of ``pin``, or the leakage where it is empty."""

    sheet: Sheet
    circuit: Circuit
    settings: Settings
    pin: str


def measure_power(
    sheet: Sheet,
    rests: Mapping[str, float],
    workers: int,
    tell: Callable[[str], None] = lambda text: None,
) -> tuple[Power, ...]:
    """Return every quantity at every corner in ``rests``, which says how long [s] circuits rest there.

    ``tell`` hears what is done. A quantity that cannot be measured has no value and its reason as status.
    """
    corners = tuple(rests)
    sources = read_sources(sheet, corners)
    jobs = []
    for corner in corners:
        circuit = circuit_of(sheet, sources, corner).rested(rests[corner])
        jobs += [PowerJob(sheet, circuit, Settings(), pin) for pin in parts(behaviour_of(sheet))]
    context = multiprocessing.get_context("spawn")
    done: dict[int, tuple[Power, ...]] = {}
    try:
        with ProcessPoolExecutor(min(workers, len(jobs) or 1), mp_context=context) as pool:
            futures = {pool.submit(measure, job): number for number, job in enumerate(jobs)}
            for future in as_completed(futures):
                number = futures[future]
                done[number] = future.result()
                tell(f"charflow: {jobs[number].circuit.corner}: {jobs[number].pin or 'leakage'}")
    except BrokenProcessPool:
        raise SimulatorError(
            "a process that measures power died", todo="Try charflow doctor; a model may crash ngspice."
        ) from None
    return tuple(power for number in sorted(done) for power in done[number])


def measure(job: PowerJob) -> tuple[Power, ...]:
    """Do one job in this process."""
    engine = Engine(job.circuit, job.settings)
    solver = PowerSolver(
        job.sheet,
        behaviour_of(job.sheet),
        job.circuit.corner,
        lambda trial: flow_of(engine, trial),
        lambda start: standing_of(engine, start),
    )
    return tuple(solver.pin(job.pin) if job.pin else solver.leakage())
