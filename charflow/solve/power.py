"""Input capacitance, switching energy and leakage of a cell, from what flows into it.

Definitions, with V the supply and all outputs but the observed one at the smallest load:

- Capacitance of an input edge: the charge its source delivers over the whole swing, until everything is
  still, divided by V: mean over the settled states it can come from, and their range.
- Energy of an event: V times the charge the supplies deliver beyond leakage, less C V^2 for each output
  that rises into a load C. Of that, half is in the load and half was lost on the way; analysis tools count
  C V^2 / 2 for each edge of a net, so over a rise and a fall nothing is counted twice or left out.
- An edge of the clock, gate or an asynchronous pin that moves an output also costs what the same edge
  costs when it moves none; that is counted with the pin and taken off here. Outputs that move together
  share what is left equally.
- Leakage: the power all sources deliver at the operating point.
"""

from __future__ import annotations

from collections.abc import Callable, Iterable, Iterator, Sequence
from dataclasses import dataclass, field
from statistics import fmean

from charflow.errors import TrialError
from charflow.plan.arcs import edge_name
from charflow.plan.behaviour import Behaviour
from charflow.plan.events import Event, events_of, resting_states
from charflow.plan.flow import Flow, Standing
from charflow.plan.stimulus import ramp_time
from charflow.plan.trial import Move, Start, Trial
from charflow.sheet import Sheet

RunFlow = Callable[[Trial], Flow]
RunStanding = Callable[[Start], Standing]

NEW_DATA = "new data waits"  # the edge lets it into the cell, though no output moves yet
FIRST_WINDOW = 1e-9  # s; doubled until all currents are still
LONGEST_WINDOW = 1e-5
WRONG_LEVEL = 0.05  # of supply, by which an output at rest may be off its rail


@dataclass(frozen=True)
class Power:
    """One measured quantity: capacitance [F], energy [J] or leakage [W]; slew in s, load in F.

    ``low`` and ``high`` are the least and the largest over the settled states ``value`` is the mean of.
    """

    corner: str
    quantity: str
    pin: str = ""
    pin_edge: str = ""
    output: str = ""
    output_edge: str = ""
    when: str = ""
    slew: float | None = None
    load: float | None = None
    value: float | None = None
    low: float | None = None
    high: float | None = None
    status: str = "measured"
    transients: int = 0


@dataclass
class PowerSolver:
    """Measures one cell at one corner through two functions that run the simulator."""

    sheet: Sheet
    cell: Behaviour
    corner: str
    flow: RunFlow
    standing: RunStanding
    flows: dict[Trial, Flow] = field(default_factory=dict)

    @property
    def supply(self) -> float:
        """The supply voltage [V]."""
        return self.sheet.corners[self.corner].supply

    def pin(self, pin: str) -> list[Power]:
        """Return capacitance and energies of the edges of input ``pin``."""
        events = [event for event in events_of(self.cell) if event.pin == pin]
        found: list[Power] = []
        for rising in (True, False):
            mine = [event for event in events if event.rising is rising]
            found += self._capacitance(pin, rising, mine)
            found += self._quiet(pin, rising, mine)
            found += self._moving(pin, rising, mine)
        return found

    def leakage(self) -> list[Power]:
        """Return the leakage of every settled state, then the worst and the mean of all."""
        found = []
        for resting in resting_states(self.cell):
            try:
                standing = self.standing(resting.start)
                for pin, level in resting.outputs.items():
                    if abs(standing.levels[pin] - level) > WRONG_LEVEL:
                        raise TrialError(f"the state is not kept: {pin} is at {standing.levels[pin]:.3f}")
            except TrialError as error:
                found.append(self._none("leakage", str(error), when=resting.condition))
                continue
            watts = self.supply * sum(
                current
                for pin, current in standing.currents.items()
                if pin not in self.sheet.inputs or resting.inputs[pin]
                if pin in self.sheet.inputs or self._is_power(pin)
            )
            found.append(Power(self.corner, "leakage", when=resting.condition, value=watts, transients=1))
        values = [power.value for power in found if power.value is not None]
        if len(values) == len(found) and values:
            for quantity, value in (("leakage_worst", max(values)), ("leakage_mean", fmean(values))):
                found.append(Power(self.corner, quantity, value=value, low=min(values), high=max(values)))
        return found

    def _is_power(self, pin: str) -> bool:
        return self.sheet.pins[pin].role == "power"

    def _axis(self, pin: str) -> tuple[float, ...]:
        return self.sheet.axes.clock_slew if self._fast(pin) else self.sheet.axes.data_slew

    def _capacitance(self, pin: str, rising: bool, events: Sequence[Event]) -> Iterator[Power]:
        axis = self._axis(pin)
        slew = axis[len(axis) // 2]
        head = {"pin": pin, "pin_edge": edge_name(rising), "slew": slew}
        before = len(self.flows)
        try:
            sign = 1 if rising else -1
            values = [sign * self._run(e, slew, {}).charges[pin] / self.supply for e in events]
        except TrialError as error:
            yield self._none("capacitance", str(error), **head)
            return
        if values:
            yield self._mean("capacitance", values, len(self.flows) - before, **head)

    def _quiet(self, pin: str, rising: bool, events: Sequence[Event]) -> Iterator[Power]:
        """Yield the energy of edges that move no output, over the slew axis, for each side condition."""
        sides: dict[str, list[Event]] = {}
        for event in events:
            if not event.moved:
                sides.setdefault(self._side(event), []).append(event)
        for when, some in sides.items():
            for slew in self._axis(pin):
                head = {"pin": pin, "pin_edge": edge_name(rising), "when": when, "slew": slew}
                before = len(self.flows)
                try:
                    values = [self._energy(event, slew, {}) for event in some]
                except TrialError as error:
                    yield self._none("energy", str(error), **head)
                    continue
                yield self._mean("energy", values, len(self.flows) - before, **head)

    def _side(self, event: Event) -> str:
        """Return the condition an edge that moves no output is told apart by."""
        if self._fast(event.pin):
            return "" if event.idle else NEW_DATA
        return f"{'' if event.control else '!'}{self.cell.control}"

    def _fast(self, pin: str) -> bool:
        return pin == self.cell.control or pin in self.cell.asynchronous_pins

    def _moving(self, pin: str, rising: bool, events: Sequence[Event]) -> Iterator[Power]:
        """Yield the energy of edges that move an output, over slew and load, from one settled state each."""
        quiet = [e for e in events if not e.moved and e.idle] if self._fast(pin) else []
        first: dict[tuple[str, bool], Event] = {}
        for event in events:
            for moved in event.moved:
                first.setdefault(moved, event)
        for (output, up), event in first.items():
            for slew in self._axis(pin):
                for load in self.sheet.axes.load:
                    head = {
                        "pin": pin,
                        "pin_edge": edge_name(rising),
                        "output": output,
                        "output_edge": edge_name(up),
                        "slew": slew,
                        "load": load,
                    }
                    before = len(self.flows)
                    try:
                        own = fmean(self._energy(e, slew, {}) for e in quiet) if quiet else 0.0
                        joules = (self._energy(event, slew, {output: load}) - own) / len(event.moved)
                    except TrialError as error:
                        yield self._none("energy", str(error), **head)
                        continue
                    yield self._mean("energy", [joules], len(self.flows) - before, **head)

    def _energy(self, event: Event, slew: float, loads: dict[str, float]) -> float:
        flow = self._run(event, slew, loads)
        drawn = sum(charge for pin, charge in flow.charges.items() if self._is_power(pin))
        stored = sum(self._loads(loads)[pin] * self.supply for pin, up in event.moved if up)
        return self.supply * (drawn - stored)

    def _loads(self, loads: dict[str, float]) -> dict[str, float]:
        return {pin: loads.get(pin, self.sheet.axes.load[0]) for pin in self.sheet.outputs}

    def _run(self, event: Event, slew: float, loads: dict[str, float]) -> Flow:
        """Return the flow of an event in a window long enough for every current to come to rest."""
        ramp = ramp_time(slew, self.sheet.measure.slew_fractions)
        move = Move(event.pin, event.rising, 0.0, slew)
        given = tuple(self._loads(loads).items())
        trial = Trial(self.corner, event.start, (move,), given, FIRST_WINDOW + ramp / 2)
        if trial in self.flows:
            return self.flows[trial]
        asked = trial
        while True:
            flow = self.flow(trial)
            if flow.still:
                break
            if trial.until > LONGEST_WINDOW:
                raise TrialError(f"the currents are not still after {LONGEST_WINDOW:g} s")
            trial = trial.longer(2 * trial.until)
        self._check(event, flow)
        self.flows[asked] = flow
        return flow

    def _check(self, event: Event, flow: Flow) -> None:
        """Raise :class:`TrialError` where an output did not do what the function says."""
        for swing in flow.swings:
            wanted = dict(event.moved).get(swing.pin, swing.starts_high)
            if not swing.settled(wanted):
                raise TrialError(f"{swing.pin} ends at {swing.last:.3f} of supply, which is not its rail")

    def _mean(self, quantity: str, values: Sequence[float], transients: int, **head: object) -> Power:
        numbers = {"value": fmean(values), "low": min(values), "high": max(values)}
        return Power(self.corner, quantity, transients=transients, **head, **numbers)  # type: ignore[arg-type]

    def _none(self, quantity: str, why: str, **head: object) -> Power:
        return Power(self.corner, quantity, status=" ".join(why.split()), **head)  # type: ignore[arg-type]


def parts(cell: Behaviour) -> Iterable[str]:
    """Return what can be measured apart: each input pin, and ``""`` for the leakage."""
    return (*cell.inputs, "")
