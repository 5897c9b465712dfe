"""Pruned models proved: one transient on the whole library and on what is left of it, compared."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from charflow.errors import TrialError
from charflow.plan.circuit import Circuit
from charflow.plan.deck import Settings
from charflow.plan.trial import Trial
from charflow.simulate.engine import Engine
from charflow.simulate.waveform import Samples

ALLOWED = 1e-6  # V; ngspice's own tolerance of node voltages (vntol)
SMALL = 200_000  # characters of models that load in no time; nothing is gained by doubting their pruning


@dataclass(frozen=True)
class Proof:
    """What comparing showed: samples (all nodes, all time points), and the largest difference [V].

    ``identical`` tells that both runs chose the same time points and gave the same numbers to the last
    bit. ``difference`` is None where nothing was compared; ``reason`` then says why.
    """

    samples: int = 0
    difference: float | None = None
    identical: bool = False
    reason: str = ""

    @property
    def differs(self) -> bool:
        """Whether the pruned models must not be used: more than :data:`ALLOWED` apart."""
        return self.difference is not None and not self.difference <= ALLOWED

    @property
    def words(self) -> str:
        """The finding in words."""
        if self.difference is None:
            return f"pruned models: not compared with the whole library, {self.reason}"
        if self.identical:
            return f"pruned models: identical to the whole library on {self.samples} samples"
        shown = f"{self.difference * 1e6:.3g} uV on {self.samples} samples"
        used = "; the whole library is used" if self.differs else ""
        return f"pruned models: differ from the whole library by at most {shown}{used}"


def needless(full: Circuit, pruned: Circuit) -> Proof | None:
    """Return the proof of what needs none: nothing left out, or a library too small to matter; else None."""
    if full.digest == pruned.digest:
        return Proof(reason="nothing was left out")
    if len(full.models) < SMALL:
        return Proof(reason=f"which has {len(full.models) / 1000:.0f} kB only")
    return None


def compare(full: Circuit, pruned: Circuit, trial: Trial) -> Proof:
    """Run ``trial`` on both and compare every node at every time point.

    Where the time points differ, the pruned waveform is interpolated linearly at those of the full one.
    A trial that fails on one of them is reason enough not to call them proved.
    """
    try:
        whole, _, _ = Engine(full, Settings()).waves(trial, save=())
        slim, _, _ = Engine(pruned, Settings()).waves(trial, save=())
    except TrialError as error:
        return Proof(reason=f"as the trial failed: {' '.join(str(error).split())}")
    return difference(whole, slim)


def difference(whole: dict[str, Samples], slim: dict[str, Samples]) -> Proof:
    """Return how far the node voltages [V] of two runs are apart."""
    if whole.keys() != slim.keys():
        odd = sorted(whole.keys() ^ slim.keys())
        return Proof(difference=float("inf"), reason=f"node {odd[0]} is in one of them only")
    nodes = [name for name in whole if name != "time" and "#" not in name]
    time, other = whole["time"], slim["time"]
    same = np.array_equal(time, other)
    against = {name: slim[name] if same else np.interp(time, other, slim[name]) for name in nodes}
    apart = float(np.max([np.abs(whole[name] - against[name]) for name in nodes]))  # NaN stays NaN
    return Proof(len(nodes) * len(time), apart, same and apart == 0.0)
