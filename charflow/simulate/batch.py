"""The same trial through the ngspice executable: one process a run, the deck as a file anyone can keep."""

from __future__ import annotations

import re
import subprocess
import tempfile
from dataclasses import replace
from pathlib import Path

import numpy as np

from charflow.errors import LoadError, SimulatorError, TrialTimeout
from charflow.plan.circuit import Circuit
from charflow.plan.deck import Settings, deck, nudged, span, spiceinit
from charflow.plan.trial import Outcome, Trial
from charflow.simulate.library import environment, find_executable, private_folder
from charflow.simulate.messages import load_error, run_error
from charflow.simulate.waveform import Samples, swing_of


def run_deck(text: str, compatibility: str | None, limit: float = 600.0) -> tuple[dict[str, Samples], str]:
    """Run the deck ``text`` in the ngspice executable.

    Returns the vectors of its transient by name, shape (n,), and what ngspice printed. ``limit`` is in
    seconds. Raises :class:`TrialError` with the cause in one line.
    """
    executable = find_executable()
    with tempfile.TemporaryDirectory(dir=private_folder()) as name:
        folder = Path(name)
        (folder / "trial.cir").write_text(text, encoding="utf-8")
        (folder / ".spiceinit").write_text(spiceinit(compatibility), encoding="utf-8")
        try:
            done = subprocess.run(
                [executable, "-b", "-r", "trial.raw", "trial.cir"],
                cwd=folder,
                env={**environment(), "HOME": name},
                capture_output=True,
                text=True,
                errors="replace",
                timeout=limit,
                check=False,
                stdin=subprocess.DEVNULL,
            )
        except subprocess.TimeoutExpired:
            raise TrialTimeout(f"ngspice took longer than {limit:g} s") from None
        except OSError as error:
            raise SimulatorError(f"{executable} does not run: {error}") from None
        said = done.stdout + done.stderr
        raw = folder / "trial.raw"
        if not raw.exists() or b"Binary:\n" not in raw.read_bytes():
            lines = said.splitlines()
            loaded = raw.exists() or re.search("singular|timestep|operating point", said, re.IGNORECASE)
            raise run_error(lines) if loaded else load_error(lines)
        return read_raw(raw), said


def read_raw(path: Path) -> dict[str, Samples]:
    """Return the vectors of a binary ngspice raw file by lower-case name, without the ``v()``; shape (n,)."""
    content = path.read_bytes()
    head, mark, body = content.partition(b"Binary:\n")
    if not mark:
        raise LoadError("ngspice wrote no binary result")
    text = head.decode("ascii", errors="replace")
    count = re.search(r"No\. Variables:\s*(\d+)", text)
    points = re.search(r"No\. Points:\s*(\d+)", text)
    if not count or not points:
        raise LoadError("ngspice wrote a result without its size")
    shape = (int(points[1]), int(count[1]))
    table = np.frombuffer(body, dtype=np.float64, count=shape[0] * shape[1]).reshape(shape)
    names = [
        line.split()[1] for line in text.partition("Variables:\n")[2].splitlines() if line.startswith("\t")
    ]
    return {re.sub(r"^v\((.*)\)$", r"\1", name.lower()): table[:, i].copy() for i, name in enumerate(names)}


def printed_measures(said: str) -> dict[str, float]:
    """Return the results of ``.measure`` lines in what ngspice printed, by name, in SI units."""
    found = re.findall(r"^(\w+)\s*=\s*([-+0-9.eE]+)\s+targ=", said, re.MULTILINE)
    return {name.lower(): float(value) for name, value in found}


def run_batch(
    circuit: Circuit, trial: Trial, settings: Settings, rest_volts: dict[str, float] | None = None
) -> Outcome:
    """Return what ``trial`` shows in the ngspice executable, cold or, with ``rest_volts`` [V], warm."""
    trial = nudged(trial, settings)
    text = deck(circuit, trial, replace(settings, nudge=0.0), rest_volts)
    waves, said = run_deck(text, circuit.compatibility)
    at = span(circuit, trial, settings, warm=rest_volts is not None)
    if waves["time"][-1] < at.stop * (1 - 1e-6):
        raise run_error(said.splitlines())
    begin = 0.0 if rest_volts is not None else circuit.rest * len(trial.start.vectors)
    keep = waves["time"] >= begin
    swings = tuple(
        swing_of(
            pin,
            waves["time"][keep],
            waves[circuit.nodes[pin]][keep] / circuit.supply,
            at.zero,
            circuit.fractions,
        )
        for pin in circuit.outputs
    )
    return Outcome(swings, f"{settings.name}, executable")
