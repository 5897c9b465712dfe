"""One kept trial again, in the plain ngspice executable: its deck as a file, and what comes of it.

The deck is cold (it brings the cell to rest by itself) and measures with ngspice's own ``.measure``, so
neither charflow's session, nor its warm start, nor its reading of waveforms has a part in the number.
"""

from __future__ import annotations

import subprocess
from dataclasses import dataclass
from pathlib import Path

from charflow.errors import FolderError, SimulatorError, TrialTimeout
from charflow.plan.circuit import Circuit
from charflow.plan.deck import Settings, deck, nudged, number, span, spiceinit
from charflow.plan.stimulus import begins
from charflow.plan.trial import Outcome, Trial
from charflow.simulate.batch import printed_measures, run_batch
from charflow.simulate.library import environment, find_executable

LIMIT = 600.0  # s for one run


@dataclass(frozen=True)
class Reading:
    """Delay and transition [s] of one output as three ways see them; None where there is none.

    ``session`` is what the run kept, ``executable`` charflow's reading of the executable's waveform,
    ``printed`` what the executable's own ``.measure`` printed (it interpolates linearly).
    """

    output: str
    quantity: str
    session: float | None
    executable: float | None
    printed: float | None


def replay_deck(circuit: Circuit, trial: Trial, settings: Settings) -> str:
    """Return the text of a cold deck that measures delay and transition of every output.

    The delay is to the output's last crossing of half the supply, as charflow takes it.
    """
    text = deck(circuit, trial, settings)
    return text.removesuffix(".end\n") + "\n".join([*_measures(circuit, trial, settings), ".end"]) + "\n"


def _measures(circuit: Circuit, trial: Trial, settings: Settings) -> list[str]:
    trial = nudged(trial, settings)
    at = span(circuit, trial, settings, warm=False)
    begin = number(at.zero + begins(trial, circuit.fractions))
    half = number(circuit.supply / 2)
    lower, upper = (number(fraction * circuit.supply) for fraction in circuit.fractions)
    reference = next(move for move in trial.moves if move.at == 0.0)
    control = f"v({circuit.nodes[reference.pin]})"
    edge = f"{'rise' if reference.rising else 'fall'}=last"
    lines = []
    for index, (pin, _) in enumerate(trial.loads):
        node = f"v({circuit.nodes[pin]})"
        lines.append(
            f".measure tran delay_{index} trig {control} val={half} td={begin} {edge} "
            f"targ {node} val={half} td={begin} cross=last"
        )
        for name, near, far in (("rise", lower, upper), ("fall", upper, lower)):
            lines.append(
                f".measure tran {name}_{index} trig {node} val={near} td={begin} {name}=last "
                f"targ {node} val={far} td={begin} {name}=last"
            )
    return lines


def write_deck(folder: Path, name: str, circuit: Circuit, trial: Trial, settings: Settings) -> Path:
    """Write the deck as ``NAME.cir`` into ``folder``, and the ``.spiceinit`` it wants beside it.

    Raises :class:`FolderError` where that cannot be written.
    """
    path = folder / f"{name}.cir"
    try:
        folder.mkdir(parents=True, exist_ok=True)
        path.write_text(replay_deck(circuit, trial, settings), encoding="utf-8")
        (folder / ".spiceinit").write_text(spiceinit(circuit.compatibility), encoding="utf-8")
    except OSError as error:
        raise FolderError(f"the deck cannot be written: {error.strerror}", where=(str(path),)) from None
    return path


def run_again(path: Path, circuit: Circuit, trial: Trial, settings: Settings, kept: Outcome) -> list[Reading]:
    """Run the deck at ``path``, and the same text once more for its waveform; return all readings.

    ngspice does not measure while it writes a waveform file, hence two runs.
    """
    printed = printed_measures(_run(path))
    again = run_batch(circuit, trial, settings)
    readings = []
    for index, (pin, _) in enumerate(trial.loads):
        session, executable = kept.of(pin), again.of(pin)
        if not session.crossings and not executable.crossings:
            continue
        name = "fall" if (session.crossings or executable.crossings) and session.last < 0.5 else "rise"
        readings += [
            Reading(
                pin,
                "delay",
                session.crossings[-1] if session.crossings else None,
                executable.crossings[-1] if executable.crossings else None,
                printed.get(f"delay_{index}"),
            ),
            Reading(
                pin,
                "transition",
                session.transitions[-1] if session.transitions else None,
                executable.transitions[-1] if executable.transitions else None,
                printed.get(f"{name}_{index}"),
            ),
        ]
    return readings


def _run(path: Path) -> str:
    """Return what ``ngspice -b`` prints for the deck at ``path``."""
    executable = find_executable()
    try:
        done = subprocess.run(
            [executable, "-b", path.name],
            cwd=path.parent,
            env={**environment(), "HOME": str(path.parent.absolute())},
            capture_output=True,
            text=True,
            errors="replace",
            timeout=LIMIT,
            check=False,
            stdin=subprocess.DEVNULL,
        )
    except subprocess.TimeoutExpired:
        raise TrialTimeout(f"ngspice took longer than {LIMIT:g} s", where=(str(path),)) from None
    except OSError as error:
        raise SimulatorError(f"{executable} does not run: {error}") from None
    return done.stdout + done.stderr
