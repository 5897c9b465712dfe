"""What the results of a corner follow from, kept beside them, so that a later change can be named."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from typing import Any

from charflow import __version__
from charflow.campaign.schedule import Campaign
from charflow.campaign.store import Store
from charflow.plan.circuit import Circuit
from charflow.sheet import Sheet
from charflow.sheet.units import Unit, show

_TIMES = ("clock_slew", "data_slew")
_LOADS = ("load", "constraint_load", "constraint_loads")
_NAMED_PARTS = {
    "models": "the models changed",
    "netlist": "the netlist changed",
    "subckt": "the cell is another subckt",
    "ports": "the ports of the cell changed",
    "inputs": "the inputs of the cell changed",
    "powers": "the supply pins changed",
    "options": "the SPICE options of the corner changed",
    "compatibility": "the compatibility mode of the corner changed",
}


def facts_of(sheet: Sheet, circuit: Circuit, version: int) -> dict[str, Any]:
    """Return, as JSON values, all that decides the results of one corner; SI units."""
    return {
        "parts": dict(circuit.parts),
        "supply": circuit.supply,
        "temperature": circuit.temperature,
        "pins": {name: repr(pin) for name, pin in sheet.pins.items()},
        "next_state": repr(sheet.cell.next_state),
        "axes": _plain(sheet.axes.model_dump()),
        "measure": _plain(sheet.measure.model_dump()),
        "ngspice": version,
        "charflow": __version__,
    }


def _plain(values: dict[str, Any]) -> dict[str, Any]:
    return {name: list(value) if isinstance(value, tuple) else value for name, value in values.items()}


def remember(campaign: Campaign) -> None:
    """Keep the facts of every corner that is prepared, for the next run to be held against."""
    for corner in campaign.rests:
        facts = facts_of(campaign.sheet, campaign.circuits[corner], campaign.version)
        if remembered(campaign.store, corner) != facts:
            campaign.store.put("meta", _name(corner), facts)


def remembered(store: Store, corner: str) -> dict[str, Any] | None:
    """Return the facts of the last run that prepared ``corner``, None where there was none."""
    facts = store.get("meta", _name(corner))
    return facts if isinstance(facts, dict) else None


def _name(corner: str) -> str:
    return f"facts of corner {corner}"


def causes(old: dict[str, Any], new: dict[str, Any]) -> list[str]:
    """Return in words what is another now than it was; charflow's own version is not among it."""
    found: list[str] = []
    before, after = old.get("parts", {}), new["parts"]
    found += [text for name, text in _NAMED_PARTS.items() if before.get(name) != after.get(name)]
    found += _moved("supply", old.get("supply"), new["supply"], lambda v: show(v, Unit.VOLT))
    found += _moved(
        "temperature", old.get("temperature"), new["temperature"], lambda v: show(v, Unit.CELSIUS)
    )
    if old.get("ngspice") != new["ngspice"]:
        found.append(f"ngspice was version {old.get('ngspice')}, is {new['ngspice']}")
    found += _pins(old.get("pins", {}), new["pins"])
    if old.get("next_state") != new["next_state"]:
        found.append("next_state changed")
    found += _axes(old.get("axes", {}), new["axes"])
    found += _measure(old.get("measure", {}), new["measure"])
    return found


def _moved(name: str, old: Any, new: Any, words: Callable[[Any], str]) -> list[str]:
    if old == new:
        return []
    was, now = ("not set" if value is None else words(value) for value in (old, new))
    return [f"{name} was {was}, is {now}"]


def _pins(old: dict[str, Any], new: dict[str, Any]) -> list[str]:
    changed = [name for name in {**old, **new} if old.get(name) != new.get(name)]
    if changed:
        return [f"what the sheet says of pin {', '.join(changed)} changed"]
    return ["the order of the pins changed"] if list(old) != list(new) else []


def _axes(old: dict[str, Any], new: dict[str, Any]) -> list[str]:
    found = []
    for name in (*_TIMES, *_LOADS):
        unit = Unit.SECOND if name in _TIMES else Unit.FARAD
        was, now = _listed(old.get(name)), _listed(new.get(name))
        for word, values in (("new", _without(now, was)), ("gone", _without(was, now))):
            if values:
                found.append(f"{name}: {', '.join(show(value, unit) for value in values)} {word}")
    return found or ([] if old == new else ["the axes changed"])


def _listed(value: Any) -> list[float]:
    return value if isinstance(value, list) else [] if value is None else [value]


def _without(values: Sequence[float], others: Sequence[float]) -> list[float]:
    return [value for value in values if value not in others]


def _measure(old: dict[str, Any], new: dict[str, Any]) -> list[str]:
    found = []
    for name, value in new.items():
        unit = Unit.PERCENT if name in ("pushout", "glitch") else Unit.SECOND

        def words(stated: Any, unit: Unit = unit) -> str:
            if isinstance(stated, list):
                return " to ".join(show(v, Unit.PERCENT) for v in stated)
            return show(stated, unit)

        found += _moved(name, old.get(name), value, words)
    return found
