"""What a trial ran on: circuit and settings, kept in the store so that a replay is of the very same.

The trial's key is a digest of both, so a replay proves that it has the right ones. What comes from a file
is screened again before ngspice sees it: a run folder may come from elsewhere.
"""

from __future__ import annotations

import hashlib
import json
import re
from dataclasses import asdict, dataclass, replace
from pathlib import Path
from typing import Any

from charflow.campaign.codec import outcome_from, settings_from, trial_from
from charflow.campaign.store import Store
from charflow.campaign.worker import trial_key
from charflow.errors import CharflowError, FolderError
from charflow.plan.circuit import Circuit, digest_of, parts_of
from charflow.plan.deck import Settings
from charflow.plan.trial import Outcome, Trial
from charflow.sheet.lines import Line, logical_lines, render
from charflow.sheet.schema import PIN_NAME
from charflow.sheet.screen import OPTIONS, Screen
from charflow.simulate.engine import ladder


@dataclass(frozen=True)
class Bench:
    """A circuit with its rest time, the settings of its trials, and the version of ngspice."""

    circuit: Circuit
    settings: Settings
    version: int


@dataclass(frozen=True)
class Kept:
    """A trial as the store has it: on which circuit and settings (its rung's) it ran, and what it showed."""

    circuit: Circuit
    settings: Settings
    trial: Trial
    outcome: Outcome


def keep_bench(store: Store, circuit: Circuit, settings: Settings, version: int) -> str:
    """Keep what trials ran on, unless it is there; return the id it has in the store."""
    value = {"circuit": asdict(circuit), "settings": asdict(settings), "version": version}
    name = f"bench:{hashlib.sha256(json.dumps(value, sort_keys=True).encode()).hexdigest()[:24]}"
    if store.get("meta", name) is None:
        store.put("meta", name, value)
    return name


def kept_trial(store: Store, bench: str, key: str, allow: frozenset[str] = frozenset()) -> Kept:
    """Return the trial ``key`` with all it ran on; ``allow`` are the sheet's permissions.

    Raises :class:`FolderError` where the store does not have it, or where it ran on something else, and
    :class:`RefusedError` where the kept circuit asks for what charflow does not run.
    """
    place = str(store.path)
    found, raw = store.trial(key), store.get("meta", bench)
    if found is None or raw is None:
        what = f"trial {key}" if found is None else f"circuit ({bench!r})"
        raise FolderError(
            f"the store does not hold the {what}",
            where=(place,),
            todo="Run charflow run again in this folder.",
        )
    try:
        on = _bench(raw)
        trial, outcome = trial_from(found[0]), outcome_from(found[1])
        matches = trial_key(on.circuit, on.settings, on.version, trial) == key
        circuit = _screened(on, trial, allow, place)
    except (KeyError, TypeError, ValueError, AttributeError) as error:
        raise FolderError(f"the store's entry cannot be read: {error!r}", where=(place,)) from None
    if not matches or digest_of(circuit.parts) != on.circuit.digest:
        raise FolderError(
            f"trial {key} did not run on the circuit and settings that the store names",
            where=(place,),
            todo="Run charflow run again in this folder.",
        )
    rung = next((s for s in ladder(on.settings) if s.name == outcome.rung), on.settings)
    return Kept(circuit, rung, trial, outcome)


def kept_reference(store: Store, kept: Kept) -> Outcome | None:
    """Return what the same edges show with the data relaxed: the reference of a constraint's trial, if kept.

    It is a trial of the reference edge alone, under the same loads and side inputs, in which the outputs
    go the same way.
    """
    edge = next((move for move in kept.trial.moves if move.at == 0.0), None)
    moved = {move.pin for move in kept.trial.moves}
    if edge is None or len(kept.trial.moves) < 2:
        return None
    side = {pin: level for pin, level in kept.trial.start.rest.items() if pin not in moved - {edge.pin}}
    ways = [(swing.starts_high, swing.last > 0.5) for swing in kept.outcome.swings]
    for raw, shown in store.trials():
        trial = trial_from(raw)
        if trial.moves != (edge,) or trial.loads != kept.trial.loads or trial.corner != kept.trial.corner:
            continue
        outcome = outcome_from(shown)
        rest = trial.start.rest
        same = all(rest[pin] == level for pin, level in side.items())
        if same and [(swing.starts_high, swing.last > 0.5) for swing in outcome.swings] == ways:
            return outcome
    return None


def _bench(raw: dict[str, Any]) -> Bench:
    fields: dict[str, Any] = {n: tuple(v) if isinstance(v, list) else v for n, v in raw["circuit"].items()}
    fields["options"] = tuple((str(n), float(v)) for n, v in fields["options"])
    return Bench(Circuit(**fields), settings_from(raw["settings"]), raw["version"])


def _screened(bench: Bench, trial: Trial, allow: frozenset[str], place: str) -> Circuit:
    """Return the circuit with nothing but screened text in it, its parts computed anew.

    Raises where more than that would get into a deck.
    """
    circuit, settings = bench.circuit, bench.settings
    pins = {*circuit.inputs, *circuit.outputs, *circuit.powers, *circuit.grounds}
    options = "|".join(OPTIONS)
    words = (
        (circuit.compatibility or "hs", r"[a-z]{2,12}"),
        (circuit.corner, r"[A-Za-z0-9_.+-]{1,60}"),
        (settings.method, "trap|gear"),
        *((name, PIN_NAME.pattern) for name in (circuit.subckt, *circuit.ports)),
        *((name.lower(), options) for name, _ in (*circuit.options, *settings.extra)),
    )
    odd = next((word for word, form in words if not re.fullmatch(form, word)), None)
    numbers = (
        *(circuit.supply, circuit.temperature, circuit.rest, *circuit.fractions),
        *(settings.reltol, settings.trtol, settings.nudge, settings.max_step or 0.0),
        *(value for _, value in (*circuit.options, *settings.extra, *trial.loads)),
        *(value for move in trial.moves for value in (move.at, move.slew)),
        trial.until,
    )
    odd = odd or next((repr(n) for n in numbers if not isinstance(n, int | float)), None)
    named = {move.pin for move in trial.moves} | dict(trial.loads).keys()
    odd = odd or next(iter(sorted(named - pins)), None)
    if odd is not None or set(circuit.ports) != pins:
        raise FolderError(f"the kept circuit is not sound: {odd or 'its pins'!r}", where=(place,))
    dollar = "ps" not in (circuit.compatibility or "")
    screen = Screen(allow)
    texts: list[tuple[Line, ...]] = []
    for name in ("models", "netlist"):
        lines = logical_lines(getattr(circuit, name), Path(f"kept {name}"), dollar_comments=dollar)
        try:
            kept = [screen.line(line) for line in lines]
        except CharflowError as error:
            raise error.at(place) from None
        texts.append(tuple(line for line in kept if line is not None))
    parts = parts_of(circuit, *texts)
    return replace(circuit, models=render(texts[0]), netlist=render(texts[1]), parts=parts)
