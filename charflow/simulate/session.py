"""ngspice in this process: a circuit is loaded once, then only its sources and loads are altered.

One libngspice a process, so one :class:`Session` a process; parallel means processes. PySpice drives the
library. Each circuit carries a title of its own, and a load counts only if ngspice says that this title
is current: a deck that fails to load otherwise leaves the circuit before it in charge.
"""

from __future__ import annotations

import logging
import math
import os
import time
from collections import OrderedDict
from collections.abc import Iterable, Mapping
from contextlib import suppress
from dataclasses import dataclass, field
from typing import Any

import numpy as np

from charflow.errors import LoadError, SimulatorError
from charflow.plan.deck import number
from charflow.simulate.library import find_library, private_folder
from charflow.simulate.messages import load_error, run_error
from charflow.simulate.waveform import Samples

DEFAULTS = {  # of ngspice 39, for options that settings set once and then leave out
    "reltol": "0.001",
    "abstol": "1e-12",
    "vntol": "1e-06",
    "chgtol": "1e-14",
    "trtol": "7",
    "gmin": "1e-12",
    "itl4": "10",
    "method": "trap",
    "maxord": "2",
    "bypass": "0",
}
MAX_CIRCUITS = 48  # loaded at a time; the least recently used goes first


@dataclass
class Loaded:
    """One circuit inside ngspice and what its sources, loads and options currently say."""

    title: str
    compatibility: str | None
    drives: dict[str, str] = field(default_factory=dict)
    loads: dict[str, str] = field(default_factory=dict)
    options: dict[str, str] = field(default_factory=dict)
    saved: tuple[str, ...] | None = None  # ngspice keeps a list of saves for each circuit


@dataclass
class Clock:
    """Where the time went [s] and how often, since the session began."""

    load: float = 0.0
    transient: float = 0.0
    loads: int = 0
    transients: int = 0

    def __add__(self, other: Clock) -> Clock:
        return Clock(
            self.load + other.load,
            self.transient + other.transient,
            self.loads + other.loads,
            self.transients + other.transients,
        )

    def __sub__(self, other: Clock) -> Clock:
        return self + Clock(-other.load, -other.transient, -other.loads, -other.transients)


class Session:
    """The ngspice of this process. Circuits are known by a key of the caller's."""

    _only: Session | None = None

    def __init__(self) -> None:
        if Session._only is not None:
            raise SimulatorError("this process already has an ngspice session")
        self.clock = Clock()
        self._shared = _open_library()
        Session._only = self
        self.version: int = self._shared.ngspice_version
        self._circuits: OrderedDict[object, Loaded] = OrderedDict()
        self._current: Loaded | None = None
        self._compatibility: str | None = None
        self._serial = 0
        self._broken = ""
        self.command("set num_threads=1")
        self.command("set ng_nomodcheck")

    @classmethod
    def here(cls) -> Session:
        """Return this process's session, opened on first use."""
        return cls._only or cls()

    def command(self, text: str) -> list[str]:
        """Run one ngspice command and return the lines it printed (standard output and error)."""
        with suppress(NameError):  # PySpice raises it for any line on standard error; the lines tell more
            self._shared.exec_command(text)
        return [*self._shared._stdout, *self._shared._stderr]

    def has(self, key: object) -> bool:
        """Tell whether the circuit ``key`` is loaded."""
        return key in self._circuits

    def load(self, key: object, lines: Iterable[str], compatibility: str | None) -> None:
        """Load the deck ``lines`` (title first) as the circuit ``key``, and make it current.

        Raises :class:`LoadError` with the cause in one line; then no circuit is current.
        """
        if self._broken:
            raise SimulatorError(
                f"this process's ngspice was left unusable by an earlier deck ({self._broken})",
                todo="Correct that deck and start again.",
            )
        began = time.perf_counter()
        self._forget_oldest()
        self._serial += 1
        title = f"charflow circuit {self._serial}"
        if compatibility != self._compatibility:
            self.command(f"set ngbehavior={compatibility}" if compatibility else "unset ngbehavior")
            self._compatibility = compatibility
        self._current = None
        self.command("unset scale")  # or the .option scale of the circuit before would still hold
        text = "\n".join([title, *list(lines)[1:]])
        with suppress(NameError):
            self._shared.load_circuit(text)
        said = [*self._shared._stdout, *self._shared._stderr]
        if any("cannot recover" in line for line in said):
            self._broken = load_error(said).message  # touching the library again may end the process
            raise load_error(said)
        if self._titles().get(title) is not True:
            raise load_error(said)
        self._current = self._circuits[key] = Loaded(title, compatibility)
        self.clock.load += time.perf_counter() - began
        self.clock.loads += 1

    def use(self, key: object) -> Loaded:
        """Make the loaded circuit ``key`` current."""
        wanted = self._circuits[key]
        self._circuits.move_to_end(key)
        if self._current is not wanted:
            number_of = list(self._titles()).index(wanted.title) + 1
            self.command(f"setcirc {number_of}")
            if self._titles().get(wanted.title) is not True:
                raise SimulatorError(f"ngspice did not switch to {wanted.title!r}")
            self._current = wanted
        return wanted

    def drive(
        self, sources: Mapping[str, str], loads: Mapping[str, float], options: Mapping[str, str]
    ) -> None:
        """Set the current circuit's sources (piecewise-linear number lists), loads [F] and options."""
        circuit = self._current
        if circuit is None:
            raise LoadError("no circuit is loaded")
        for name, points in sources.items():
            if circuit.drives.get(name) != points:
                self.command(f"alter @{name}[pwl] = [ {points} ]")
                circuit.drives[name] = points
        for name, farads in loads.items():
            text = number(farads)
            if circuit.loads.get(name) != text:
                self.command(f"alter {name} = {text}")
                circuit.loads[name] = text
        left = {name: DEFAULTS[name] for name in circuit.options if name not in options}
        for name, value in {**left, **options}.items():
            if circuit.options.get(name) != value:
                self.command(f"option {name}={value}")
                circuit.options[name] = value

    def transient(self, step: float, stop: float, save: tuple[str, ...]) -> dict[str, Samples]:
        """Run one transient of the current circuit and return ``time`` and the saved vectors, shape (n,).

        ``save`` names nodes; an empty tuple saves all of them. Raises :class:`TrialError` where the
        transient ends before ``stop`` [s].
        """
        if self._current is None:
            raise LoadError("no circuit is loaded")
        self._save(self._current, save)
        began = time.perf_counter()
        said = self.command(f"tran {number(step)} {number(stop)} 0 {number(step)}")
        self.clock.transient += time.perf_counter() - began
        self.clock.transients += 1
        try:
            name = self._shared.last_plot
            if not name.startswith("tran"):
                raise run_error(said)
            vectors = {key.lower(): vector._data for key, vector in self._shared.plot(None, name).items()}
            reached = vectors.get("time")
            if reached is None or not len(reached) or reached[-1] < stop * (1 - 1e-6):
                raise run_error(said)
            wrong = [node for node in save if node not in vectors or not np.isfinite(vectors[node]).all()]
            if wrong:
                raise run_error([*said, f"no finite values for node {wrong[0]}"])
            return vectors
        finally:
            self.command("destroy all")

    def operating_point(self) -> dict[str, float]:
        """Return node voltages [V] and source currents [A] of the current circuit at its DC operating point.

        Raises :class:`TrialError` where ngspice finds none.
        """
        if self._current is None:
            raise LoadError("no circuit is loaded")
        self._save(self._current, ())
        said = self.command("op")
        try:
            name = self._shared.last_plot
            if not name.startswith("op"):
                raise run_error(said)
            values = {k.lower(): float(v._data[-1]) for k, v in self._shared.plot(None, name).items()}
            if not all(map(math.isfinite, values.values())):
                raise run_error([*said, "no finite operating point"])
            return values
        finally:
            self.command("destroy all")

    def _save(self, circuit: Loaded, nodes: tuple[str, ...]) -> None:
        if nodes != circuit.saved:
            self.command("delete all")
            if nodes:
                self.command(f"save {' '.join(nodes)}")
            circuit.saved = nodes

    def _titles(self) -> dict[str, bool]:
        """Return the titles ngspice lists, newest first, and whether each is the current circuit."""
        titles: dict[str, bool] = {}
        for line in self.command("setcirc"):
            parts = line.split("\t")
            if len(parts) >= 2 and parts[-2].strip().isdigit():
                titles[parts[-1].strip()] = line.startswith("Current")
        return titles

    def _forget_oldest(self) -> None:
        while len(self._circuits) >= MAX_CIRCUITS:
            key = next(iter(self._circuits))
            self.use(key)
            self.command("remcirc")
            del self._circuits[key]
            self._current = None


def _open_library() -> Any:
    """Return PySpice's ngspice, opened in a private folder and with its own log turned off."""
    library = find_library()
    folder = str(private_folder())
    kept = os.environ.get("HOME")
    os.environ["HOME"] = folder
    os.environ.setdefault("OMP_NUM_THREADS", "1")
    before = os.getcwd()  # noqa: PTH109  # restored with chdir, which takes the same text
    os.chdir(folder)
    try:
        logging.getLogger("PySpice").setLevel(logging.CRITICAL + 1)
        from PySpice.Spice.NgSpice.Shared import NgSpiceShared

        NgSpiceShared.LIBRARY_PATH = library
        return NgSpiceShared.new_instance()
    except (OSError, AttributeError) as error:
        raise SimulatorError(
            f"the library {library!r} does not load as libngspice: {error}",
            todo="Check NGSPICE_LIBRARY_PATH, or install libngspice0.",
        ) from None
    finally:
        os.chdir(before)
        if kept is None:
            del os.environ["HOME"]
        else:
            os.environ["HOME"] = kept
