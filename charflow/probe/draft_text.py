"""The text of a drafted sheet: TOML with a comment for everything that was worked out or is in doubt."""

from __future__ import annotations

import json
import re
from collections.abc import Iterable, Iterator, Mapping
from dataclasses import dataclass

from charflow.plan.behaviour import STATE
from charflow.probe.axes import DraftAxes
from charflow.probe.explore import Map
from charflow.probe.expression import names_read
from charflow.probe.pins import Ports
from charflow.probe.roles import PinRole, roles_of
from charflow.probe.transistors import Network
from charflow.probe.truth import Function
from charflow.sheet import Role
from charflow.sheet.units import Unit, show

DOUBT = "NOT SURE: "
MISSING = "FILL IN: "
PLACEHOLDER_MODEL = "FILL_IN.lib:SECTION"
PLACEHOLDER_SUPPLY = "1 V"
_BARE_KEY = re.compile(r"[A-Za-z0-9_-]+")


@dataclass(frozen=True)
class Findings:
    """What was worked out from the netlist alone."""

    network: Network
    ports: Ports
    reached: Map
    function: Function


@dataclass(frozen=True)
class ModelChoice:
    """What the sheet says about files and the corner; paths as they stand in the sheet."""

    corner: str
    netlist: str
    models: tuple[str, ...]
    supply: str | None
    temperature: str
    compatibility: str | None
    options: Mapping[str, float]
    include_folders: tuple[str, ...]


@dataclass(frozen=True)
class Proof:
    """How the function was proved by simulation: how many flips, each vector held for ``rest`` [s]."""

    flips: int
    rest: float


def sheet_text(findings: Findings, choice: ModelChoice, axes: DraftAxes, proof: Proof | None) -> str:
    """Return the sheet as TOML text, ending in a newline."""
    lines = [
        *_head(findings, proof),
        *_cell(findings, choice),
        "",
        *_pins(findings),
        "",
        *_corner(choice),
        "",
        *_axes(axes),
    ]
    return "\n".join(lines) + "\n"


def _head(findings: Findings, proof: Proof | None) -> Iterator[str]:
    network, reached = findings.network, findings.reached
    flips = sum(1 for _ in reached.flips())
    yield f"# First sheet of {network.name}, drafted by charflow. Read it before you trust it."
    yield "#"
    devices, states = len(network.transistors), len(reached.places)
    yield f"# Worked out at switch level from {devices} transistors, parallel ones counted once."
    yield f"# {states} states at rest, {flips} single-input changes: the function below fits them all."
    if proof is None:
        yield f"# {DOUBT}nothing was simulated; draft again with --models, or let 'charflow run' prove it."
    else:
        yield (
            f"# Proved by simulation: {proof.flips} single-input changes, each vector held for "
            f"{show(proof.rest, Unit.SECOND, 3)}."
        )
    for doubt in _doubts(findings, proof is not None):
        yield f"# {doubt}"


def _doubts(findings: Findings, proved: bool) -> Iterator[str]:
    reached, network, function = findings.reached, findings.network, findings.function
    for node, vector in reached.charged:
        rest = ", ".join(f"{pin}={level}" for pin, level in zip(reached.inputs, vector, strict=True))
        yield f"Dynamic: node {node} holds the state on its charge alone, for example at {rest};"
        yield "  the clock must not rest there for long."
    if reached.raced:
        judged = "simulation bears it out" if proved else "simulation must decide"
        yield f"{'' if proved else DOUBT}the end of {reached.raced} of these changes hangs on which of two"
        yield f"  nodes is the faster, here judged by sizes; {judged}."
    unknown = sum(after < 0 for place in reached.places for after in place.next)
    if unknown:
        yield f"{DOUBT}{unknown} further changes end in a race or contest that is undecided at switch level."
    if network.unsized:
        yield f"{DOUBT}{network.unsized} devices have no plain size; they count as of equal strength."
    if function.clears and function.presets:
        yield "Left open: what outputs show while clear and preset act together, and the state after that."


def _cell(findings: Findings, choice: ModelChoice) -> Iterator[str]:
    function = findings.function
    yield ""
    yield "[cell]"
    yield f"netlist = {quoted(choice.netlist)}"
    yield f"subckt = {quoted(findings.network.name)}"
    if choice.include_folders:
        yield f"include_folders = {_list(choice.include_folders)}"
    if len(function.next_state) > 1 or function.states != (STATE,):
        pairs = ", ".join(f"{state} = {quoted(text)}" for state, text in function.next_state)
        yield f"next_state = {{ {pairs} }}"
    elif _needs_next_state(findings):
        yield f"next_state = {quoted(function.next_state[0][1])}"


def _needs_next_state(findings: Findings) -> bool:
    """Tell whether the roles alone, one data pin and nothing else, do not say the next state."""
    data = [pin for pin, role in roles_of(findings.function).items() if role.role is Role.DATA]
    return findings.function.next_state[0][1] not in data or len(data) != 1


def _pins(findings: Findings) -> Iterator[str]:
    function, ports = findings.function, findings.ports
    roles = roles_of(function)
    rows: list[tuple[str, str, str]] = []
    for pin in findings.network.ports:
        note = ports.notes.get(pin, "")
        doubt = f"{DOUBT}{note}" if note else ""
        if pin in roles:
            rows.append((pin, _input(roles[pin]), "; ".join(filter(None, (_said(roles[pin]), doubt)))))
        elif pin in ports.outputs:
            text = dict(function.shows)[pin]
            odd = f"{DOUBT}it never moves" if text in ("0", "1") else _gated(function, text)
            body = f'{{ role = "output", shows = {quoted(text)} }}'
            rows.append((pin, body, "; ".join(filter(None, (odd, doubt)))))
        else:
            role = Role.POWER if pin in ports.powers else Role.GROUND
            rows.append((pin, f'{{ role = "{role}" }}', doubt))
    yield "[pins]"
    keys = [pin if _BARE_KEY.fullmatch(pin) else quoted(pin) for pin, _, _ in rows]
    wide, long = max(map(len, keys)), max(len(body) for _, body, _ in rows)
    for key, (_, body, words) in zip(keys, rows, strict=True):
        line = f"{key:<{wide}} = {body}"
        yield f"{line:<{wide + 3 + long}}  # {words}" if words else line


def _said(role: PinRole) -> str:
    return role.words if role.sure else DOUBT + role.words


def _gated(function: Function, text: str) -> str:
    pins = [name for name in dict.fromkeys(names_read(text)) if name not in function.states]
    return f"reads {', '.join(pins)} directly" if pins else ""


def _input(role: PinRole) -> str:
    active = f', active = "{role.active}"' if role.active else ""
    return f'{{ role = "{role.role}"{active} }}'


def _corner(choice: ModelChoice) -> Iterator[str]:
    if not choice.models:
        yield f"# {MISSING}the model file, with its section if it has any (FILE or FILE:SECTION), and check"
        yield "# supply and temperature. Until then this sheet reads but cannot run."
    yield f"[corners.{choice.corner}]"
    yield f"models = {_list(choice.models or (PLACEHOLDER_MODEL,))}"
    supply = f"supply = {quoted(choice.supply or PLACEHOLDER_SUPPLY)}"
    yield supply if choice.supply else f"{supply}  # {MISSING}a placeholder"
    yield f"temperature = {quoted(choice.temperature)}"
    if choice.compatibility:
        yield f"compatibility = {quoted(choice.compatibility)}"
    if choice.options:
        pairs = ", ".join(f"{_key(name)} = {float(value)!r}" for name, value in choice.options.items())
        yield f"options = {{ {pairs} }}"


def _key(name: str) -> str:
    return name if _BARE_KEY.fullmatch(name) else quoted(name)


def _axes(axes: DraftAxes) -> Iterator[str]:
    yield from (f"# {line}" for line in axes.words)
    yield "[axes]"
    slews = _list(show(value, Unit.SECOND, 3) for value in axes.slews)
    yield f"clock_slew = {slews}"
    yield f"data_slew = {slews}"
    yield f"load = {_list(show(value, Unit.FARAD, 3) for value in axes.loads)}"
    yield f"constraint_load = {quoted(show(axes.loads[1], Unit.FARAD, 3))}"


def quoted(text: str) -> str:
    """Return ``text`` as a TOML basic string."""
    return json.dumps(text, ensure_ascii=False).replace("\x7f", "\\u007f")


def _list(texts: Iterable[str]) -> str:
    return f"[{', '.join(quoted(text) for text in texts)}]"
