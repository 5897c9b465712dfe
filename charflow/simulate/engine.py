"""A trial in, its outcome out: settles the cell once for each start, then runs warm trials in the session.

A trial that does not converge is tried again on :data:`LADDER`, and the outcome names the rung used.
"""

from __future__ import annotations

from dataclasses import replace

from charflow.errors import ConvergenceError, TrialError
from charflow.plan.circuit import Circuit
from charflow.plan.deck import (
    Settings,
    circuit_lines,
    initial_conditions,
    nudged,
    pwl,
    settle_end,
    settle_points,
    source_points,
    span,
)
from charflow.plan.trial import Outcome, Start, Swing, Trial
from charflow.simulate.session import Session
from charflow.simulate.waveform import Samples, swing_of

STANDARD = Settings()


def ladder(settings: Settings) -> tuple[Settings, ...]:
    """Return the settings tried in turn on a trial that does not converge, the given ones first."""
    plain = replace(settings, nudge=1e-15, extra=(("bypass", 0.0), ("gmin", 1e-12)))
    shunted = (("bypass", 0.0), ("gmin", 1e-11), ("itl4", 200.0))
    return (
        replace(settings, extra=(*settings.extra, ("gmin", 1e-12))),
        replace(plain, name="nudged"),
        replace(plain, name="gear", method="gear"),
        replace(plain, name="gear, gmin 1e-11", method="gear", extra=shunted),
        replace(plain, name="gear, loose", method="gear", reltol=settings.reltol * 10, extra=shunted),
    )


class Engine:
    """Runs trials of one circuit (a cell at a corner). ``settled`` keeps the node voltages of each start."""

    def __init__(self, circuit: Circuit, settings: Settings = STANDARD) -> None:
        self.circuit = circuit
        self.settings = settings
        self.session = Session.here()
        self.settled: dict[Start, dict[str, float]] = {}
        self._nodes = tuple(circuit.nodes[pin] for pin in (*circuit.inputs, *circuit.outputs))
        self._identity = (circuit.digest, circuit.rest)

    def run(self, trial: Trial) -> Outcome:
        """Return what ``trial`` shows. Raises :class:`TrialError` where no rung of the ladder converges."""
        waves, rung, zero = self.waves(trial)
        return Outcome(self.swings(waves, zero), rung)

    def swings(self, waves: dict[str, Samples], zero: float) -> tuple[Swing, ...]:
        """Return the swing of every output in ``waves``; ``zero`` [s] is the trial's time zero there."""
        circuit = self.circuit
        return tuple(
            swing_of(pin, waves["time"], waves[circuit.nodes[pin]] / circuit.supply, zero, circuit.fractions)
            for pin in circuit.outputs
        )

    def waves(
        self, trial: Trial, save: tuple[str, ...] | None = None
    ) -> tuple[dict[str, Samples], str, float]:
        """Return waveforms [V] by node with ``time`` [s], the rung used, and the trial's time zero there."""
        errors: list[TrialError] = []
        for settings in ladder(self.settings):
            try:
                waves, zero = self._attempt(trial, settings, self._nodes if save is None else save)
            except ConvergenceError as error:
                errors.append(error)
            else:
                return waves, settings.name, zero
        raise errors[0].at(f"corner {self.circuit.corner!r}")

    def rest_volts(self, start: Start) -> dict[str, float]:
        """Return the settled node voltages [V] of ``start``, running the settling transient on first use."""
        if start not in self.settled:
            errors: list[TrialError] = []
            for settings in ladder(STANDARD):  # the same for all settings, so that no answer depends on them
                try:
                    self.settled[start] = self._settle(start, settings)
                    break
                except ConvergenceError as error:
                    errors.append(error)
            else:
                raise errors[0].at(f"settling at corner {self.circuit.corner!r}")
        return self.settled[start]

    def _settle(self, start: Start, settings: Settings) -> dict[str, float]:
        circuit, node = self.circuit, self.circuit.nodes
        drives = {pin: settle_points(circuit, start, pin) for pin in circuit.inputs}
        key = (*self._identity, "cold")
        if not self.session.has(key):
            loads = dict.fromkeys(circuit.outputs, 1e-15)
            self.session.load(key, [*circuit_lines(circuit, drives, loads), ".end"], circuit.compatibility)
        self.session.use(key)
        self.session.drive(
            {f"v_{node[pin]}": pwl(points) for pin, points in drives.items()}, {}, settings.options
        )
        stop = settle_end(circuit, start)
        waves = self.session.transient(circuit.rest / 20, stop, ())
        return {name: float(wave[-1]) for name, wave in waves.items() if _is_node(name)}

    def _attempt(
        self, trial: Trial, settings: Settings, save: tuple[str, ...]
    ) -> tuple[dict[str, Samples], float]:
        circuit, node = self.circuit, self.circuit.nodes
        trial = nudged(trial, settings)
        at = span(circuit, trial, settings, warm=True)
        drives = {pin: source_points(circuit, trial, pin, at, warm=True) for pin in circuit.inputs}
        key = (*self._identity, trial.start)
        if not self.session.has(key):
            volts = self.rest_volts(trial.start)
            lines = [*circuit_lines(circuit, drives, dict(trial.loads)), *initial_conditions(volts), ".end"]
            self.session.load(key, lines, circuit.compatibility)
        self.session.use(key)
        self.session.drive(
            {f"v_{node[pin]}": pwl(points) for pin, points in drives.items()},
            {f"c_{node[pin]}": load for pin, load in trial.loads},
            settings.options,
        )
        return self.session.transient(at.step, at.stop, save), at.zero


def _is_node(name: str) -> bool:
    """Tell circuit nodes from time, branch currents and the inner nodes of devices (which .ic cannot set)."""
    return name != "time" and not name.endswith("#branch") and not name.startswith(("m.", "d.", "q.", "@"))
