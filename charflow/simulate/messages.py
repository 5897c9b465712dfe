"""ngspice's own words, turned into one cause a person can act on."""

from __future__ import annotations

import re
from collections.abc import Iterable
from typing import TypeVar

from charflow.errors import ConvergenceError, LoadError, TrialError

Kind = TypeVar("Kind", bound=TrialError)

_LOAD = (
    (
        r"can't find model '?([^\s']+)'? from line",
        "the model {0!r} is used but not defined",
        _T := "Name the file and section that define it in the corner's models.",
    ),
    (
        r"could not find a valid modelname",
        "a transistor names a model that is not defined, or no bin of it fits its size",
        _T,
    ),
    (
        r"unknown subckt: (.+)",
        "an instance names a subckt that is not defined: {0}",
        "Add the file that defines it to the corner's models, or to the netlist.",
    ),
    (r"unable to find definition of model (\S+)", "the model {0!r} is used but not defined", _T),
    (
        r"no such function '?([^\s']+)",
        "an expression uses the function {0!r}, which ngspice does not know",
        "Set the corner's compatibility, if the models need one.",
    ),
    (
        r"(?:undefined parameter|cannot find parameter|Undefined number) \[?([^\]\s]+)",
        "the parameter {0!r} is used but not defined",
        "Add the file that defines it to the corner's models.",
    ),
    (
        r"mif-error.*|code ?model",
        "the deck uses a code model",
        "charflow simulates transistors and passive elements only.",
    ),
    (
        r"Too many parameters for subcircuit type \"(\w+)\"",
        "an instance of {0!r} has more nodes than the subckt has ports",
        "",
    ),
    (
        r"Too few parameters for subcircuit type \"(\w+)\"",
        "an instance of {0!r} has fewer nodes than the subckt has ports",
        "",
    ),
)
_RUN = (
    (
        r"singular matrix:?\s*(?:check nodes? )?(.*)",
        "singular matrix {0}",
        "A node has no path for direct current, or two sources are in parallel.",
    ),
    (
        r"[Tt]imestep too small.*?trouble with ([^\n]+)",
        "the time step became too small (trouble with {0})",
        "",
    ),
    (r"[Tt]imestep too small", "the time step became too small", ""),
    (
        r"iteration limit reached|Transient op (?:failed|aborted)|no convergence|stepping failed",
        "no operating point was found",
        "",
    ),
)


def load_error(lines: Iterable[str]) -> LoadError:
    """Return the cause of a deck that did not load, from ngspice's messages."""
    return _classified(lines, _LOAD, LoadError, "ngspice did not accept the deck")


def run_error(lines: Iterable[str]) -> TrialError:
    """Return the cause of a transient that ended before its time, from ngspice's messages."""
    return _classified(lines, _RUN, ConvergenceError, "the transient stopped before its end")


def _classified(
    lines: Iterable[str], table: tuple[tuple[str, str, str], ...], kind: type[Kind], otherwise: str
) -> Kind:
    said = [line.strip() for line in lines if line.strip()]
    text = "\n".join(said)
    for pattern, cause, todo in table:
        match = re.search(pattern, text, re.IGNORECASE)
        if match:
            groups = [(group or "").strip().rstrip(".") for group in match.groups()]
            return kind(" ".join(cause.format(*groups).split()), todo=todo)
    worst = [line for line in said if re.search("error|warning|fail|can't|cannot", line, re.IGNORECASE)]
    last = "; ".join((worst or said)[-3:])
    return kind(f"{otherwise}; ngspice said: {last}" if last else otherwise)
