"""What a SPICE file may ask for: an allow-list over the logical lines of untrusted files.

ngspice runs commands found in decks, shell commands too, and several cards open or write files. So a
line passes only if its kind is known to be harmless; anything else is refused, with the permission
that would let it pass where one exists.
"""

from __future__ import annotations

import difflib
import re
from collections.abc import Callable
from dataclasses import dataclass

from charflow.errors import RefusedError, SheetError
from charflow.sheet.lines import Line


def _words(text: str) -> frozenset[str]:
    return frozenset(text.split())


ELEMENTS = frozenset("rclkmxdqjbefghvistw")
DIRECTIVES = _words(
    ".subckt .ends .model .param .func .global .option .options .temp .if .elseif .else .endif .ic .nodeset"
)
DROPPED = _words(".end .title .prot .unprot .protect .unprotect")
RENAMED = {".macro": ".subckt", ".eom": ".ends", ".opt": ".option"}
MODELS = _words(
    "nmos pmos npn pnp lpnp d r res c cap l ind njf pjf nmf pmf sw csw vdmos vdmosn vdmosp nsoi psoi urc"
)
OPTIONS = _words(
    """
    scale scalm parser geoshrink temp tnom seed defl defw defad defas defm defnrd defnrs aspec
    gmin reltol abstol vntol chgtol trtol pivtol pivrel absv relv absi reli absmos relmos dv resmin
    method maxord mu xmu itl1 itl2 itl3 itl4 itl5 itl6 gminsteps srcsteps noopiter bypass trytocompact
    oldlimit badmos3 minbreak delmax limpts epsmin converge gshunt rshunt cshunt optran klu sparse autostop
    interp numdgt measdgt ingold co noacct acct nomod nopage noinit opts list node keepopinfo savecurrents
    post brief probe warn maxwarns captab dcap dccap cptime indverbosity noise wl wnflag
    """
)
ANALYSES = _words(
    """
    .tran .ac .dc .op .tf .noise .pz .sens .disto .pss .sp .hb .four .fourier .measure .meas .print .plot
    .save .probe .width .step .alter .data .enddata .mc .wcase
    """
)
# each of these runs commands or loads machine code
COMMANDS = _words(".control .endc .exec .shell .system .osdi .codemodel .source")

_WORD = re.compile(r"\.[A-Za-z0-9_]*")
_MODEL = re.compile(r"\.model\s+([^\s=(),'\"{}]+)\s+([^\s=(),'\"{}]+)", re.IGNORECASE)
_OPTION = re.compile(r"([A-Za-z_][A-Za-z0-9_]*)\s*(?:=\s*('[^']*'|\{[^}]*\}|[^\s'\"{}]+))?\s*,?\s*")
_FILE = re.compile(r"\b((?:\w*_)?file(?:name|_name)?)\s*=|\b(pwl_?file)\b", re.IGNORECASE)
_GATE = re.compile(r"\bn?(?:and|or)\s*\(", re.IGNORECASE)
_PERMISSION = re.compile(
    r"outside-folder:/.*|directive:\.[a-z0-9_]+|ignore:\.[a-z0-9_]+|element:[a-z]|model:[\w.]+|option:\w+"
    r"|argument:file",
    re.IGNORECASE,
)


def check_permissions(allow: frozenset[str]) -> None:
    """Check that every permission has a known form.

    Raises :class:`SheetError` for one that has not, and for one that nobody can give.
    """
    for entry in sorted(allow):
        kind, _, word = entry.partition(":")
        if kind.lower() in {"directive", "ignore"} and _is_command(word.lower()):
            raise SheetError(
                f"allow: {entry!r} cannot be given: {word} runs commands on your machine",
                todo="Remove it from allow, and the lines that need it from the file.",
            )
        if not _PERMISSION.fullmatch(entry):
            kinds = ("outside-folder", "directive", "ignore", "element", "model", "option", "argument")
            near = difflib.get_close_matches(kind, kinds, n=1)
            raise SheetError(
                f"allow: {entry!r} is no permission" + (f" (nearest: {near[0]}:...)" if near else ""),
                todo=(
                    'A permission is one of "outside-folder:/DIR", "directive:.WORD", "ignore:.WORD", '
                    '"element:LETTER", "model:TYPE", "option:NAME", "argument:file".'
                ),
            )


def _is_command(word: str) -> bool:
    return word in COMMANDS or word.startswith((".control", ".endc", ".pre_"))


@dataclass(frozen=True)
class Screen:
    """Judges logical lines; ``allow`` holds the permissions of the sheet."""

    allow: frozenset[str]

    def __post_init__(self) -> None:
        object.__setattr__(self, "allow", frozenset(entry.lower() for entry in self.allow))

    def line(self, line: Line) -> Line | None:
        """Return the line to hand on, or None for one to leave out.

        Raises :class:`RefusedError` for what is not on the allow-list.
        """
        text = line.text
        if "`" in text:
            raise _refusal(line, "`", "a backquote, which ngspice's command language runs as a shell command")
        if "\\\\" in text:
            raise _refusal(line, "\\\\", "two backslashes, which ngspice may take for a continuation")
        found = _FILE.search(text)
        if found and "argument:file" not in self.allow:
            word = found.group(1) or found.group(2)
            raise _refusal(line, word, "an argument that names a file to be opened", "argument:file")
        if text[0] == ".":
            return self._directive(line)
        letter = text[0].lower()
        if letter in ELEMENTS:
            if letter == "e" and _GATE.search(text) and "element:a" not in self.allow:
                why = "a logic gate, which becomes an XSPICE code model"
                raise _refusal(line, text.split()[0], why, "element:A")
            return line
        if not letter.isalpha():
            raise _refusal(line, text[0], "no element, directive or comment starts with this character")
        if f"element:{letter}" in self.allow:
            return line
        why = _WHY_ELEMENT.get(letter, "an element of a kind charflow does not know")
        raise _refusal(line, text.split()[0], why, f"element:{letter.upper()}")

    def _directive(self, line: Line) -> Line | None:
        found = _WORD.match(line.text)
        shown = found.group() if found else "."
        word = shown.lower()
        if word in RENAMED:
            line = Line(RENAMED[word] + line.text[len(word) :], line.path, line.number)
            word = RENAMED[word]
        if _is_command(word):
            raise _refusal(line, shown, "it makes ngspice run commands, the shell's included")
        if word in DROPPED:
            return None
        checks: dict[str, Callable[[Line], None]] = {
            ".model": self._model,
            ".option": self._options,
            ".options": self._options,
        }
        if word in checks:
            checks[word](line)
        elif word in ANALYSES:
            if f"ignore:{word}" in self.allow:
                return None
            why = "an analysis or an output; charflow writes its own"
            raise _refusal(line, shown, why, f"ignore:{word}", "leave the line out")
        elif word not in DIRECTIVES and f"directive:{word}" not in self.allow:
            near = difflib.get_close_matches(word, sorted(DIRECTIVES), n=1)
            why = "it is not a directive charflow knows to be harmless"
            why += f" (did you mean {near[0]}?)" if near else ""
            raise _refusal(line, shown, why, f"directive:{word}")
        return line

    def _model(self, line: Line) -> None:
        found = _MODEL.match(line.text)
        if not found:
            raise _refusal(line, line.text[:60], "a .model whose name and type cannot be read plainly")
        kind = found.group(2)
        if kind.lower() not in MODELS and f"model:{kind.lower()}" not in self.allow:
            why = "a model of this type can be compiled code, or read and write files"
            raise _refusal(line, kind, why, f"model:{kind.lower()}")

    def _options(self, line: Line) -> None:
        text = line.text.split(maxsplit=1)[1] if " " in line.text else ""
        at = 0
        while at < len(text):
            found = _OPTION.match(text, at)
            if not found:
                raise _refusal(line, text[at : at + 40], "an option that cannot be read plainly")
            name = found.group(1).lower()
            if name not in OPTIONS and f"option:{name}" not in self.allow:
                why = "an option charflow does not know to be harmless"
                raise _refusal(line, name, why, f"option:{name}")
            at = found.end()


_WHY_ELEMENT = {
    "a": "an XSPICE code model, which can read and write files",
    "n": "a device of compiled (OSDI) code",
    "u": "a digital or distributed device",
    "p": "a coupled line",
    "y": "a lossy line",
    "o": "a lossy line",
    "z": "a MESFET",
}


def _refusal(
    line: Line, word: str, why: str, permission: str = "", effect: str = "let it pass"
) -> RefusedError:
    todo = "Remove the line"
    if permission:
        todo += f', or, if you trust the file, {effect}: allow = ["{permission}"] in [cell] of the sheet.'
    else:
        todo += "; no permission can let it pass."
    return RefusedError(f"{word!r} is refused: {why}", where=(line.place,), todo=todo)
