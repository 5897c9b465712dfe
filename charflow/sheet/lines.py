"""SPICE files as logical lines: reading, comments, continuations, and text for the simulator again.

Comments and continuations are treated as ngspice 39 treats them, so that what is checked here is
what the simulator would have seen.
"""

from __future__ import annotations

import difflib
import re
import stat
from collections.abc import Iterable
from dataclasses import dataclass
from itertools import islice
from pathlib import Path

from charflow.errors import NetlistError

MAX_BYTES = 64 * 1024 * 1024
MAX_LINE = 1_000_000  # characters of one logical line
WIDTH = 2000  # characters a rendered line may have before it is wrapped

_SPACES = re.compile(r"[ \t\f\v\r]+")
_SPACES_OUTSIDE_QUOTES = re.compile(r'("[^"]*")|[ \t\f\v\r]+')
_DOLLAR = re.compile(r"(?:^|[ \t,])\$")
_FOLLOW = re.compile(r"\.(?:include|inc|lib)\b", re.IGNORECASE)
_FOREIGN = re.compile(r"[^\t\x20-\x7e]")
_JUNK = re.compile(rb"[\x00-\x08\x0e-\x1f]")


@dataclass(frozen=True, slots=True)
class Line:
    """One logical line: continuations joined, comments gone, white space squeezed, case kept.

    ``number`` is the first physical line, counted from 1.
    """

    text: str
    path: Path
    number: int

    @property
    def place(self) -> str:
        """``FILE:LINE``, for messages."""
        return f"{self.path}:{self.number}"


def read_text(path: Path) -> str:
    """Return the text of a netlist or model file; bytes that are not UTF-8 are read as Latin-1.

    Raises :class:`NetlistError` if the file is missing, not a regular file, unreadable, larger than
    64 MB, or not text.
    """
    place = str(path)
    try:
        state = path.stat()
        if stat.S_ISDIR(state.st_mode):
            raise NetlistError("this is a folder", where=(place,), todo="Name a netlist or model file in it.")
        if not stat.S_ISREG(state.st_mode):
            raise NetlistError("this is not an ordinary file", where=(place,), todo="Name a text file.")
        with path.open("rb") as file:
            raw = file.read(MAX_BYTES + 1)
    except FileNotFoundError:
        raise NetlistError("there is no such file", where=(place,), todo=_other_file(path)) from None
    except (OSError, ValueError) as problem:
        reason = getattr(problem, "strerror", None) or str(problem)
        raise NetlistError(
            f"the file cannot be read: {reason}", where=(place,), todo="Check its name and its permissions."
        ) from None
    if len(raw) > MAX_BYTES:
        raise NetlistError(
            f"the file has {state.st_size / 1e6:.0f} MB; at most {MAX_BYTES / 1e6:.0f} MB are read",
            where=(place,),
            todo="Name the netlist of one cell, or one corner of the models.",
        )
    raw = raw.rstrip(b"\x1a")  # DOS end of file
    junk = _JUNK.search(raw)
    if junk:
        number = raw.count(b"\n", 0, junk.start()) + 1
        raise NetlistError(
            f"the file is not text: byte 0x{junk.group()[0]:02x}",
            where=(f"{place}:{number}",),
            todo="Name a plain-text SPICE file; unpack it first if it is compressed.",
        )
    try:
        return raw.decode("utf-8-sig")
    except UnicodeDecodeError:
        return raw.decode("latin-1")


def _other_file(path: Path) -> str:
    try:
        names = [entry.name for entry in islice(path.parent.iterdir(), 2000)]
    except (OSError, ValueError):
        return "Check the path: its folder does not exist or cannot be read."
    near = difflib.get_close_matches(path.name, names, n=3)
    return f"Near names in that folder: {', '.join(near)}." if near else "Check the path."


def _without_comment(text: str, dollar_comments: bool) -> str:
    """Cut an end-of-line comment the way ngspice does: also inside quotes."""
    end = len(text)
    if ";" in text:
        end = text.index(";")
    if "//" in text:
        at = text.index("//")
        # a path may hold a doubled slash
        if not _FOLLOW.match(text) or text[:at].endswith((" ", "\t")):
            end = min(end, at)
    if dollar_comments and "$" in text:
        found = _DOLLAR.search(text)
        if found:
            end = min(end, found.end() - 1)
    return text[:end]


def _squeeze(text: str) -> str:
    if '"' in text:
        return _SPACES_OUTSIDE_QUOTES.sub(lambda found: found.group(1) or " ", text).strip()
    return _SPACES.sub(" ", text).strip()


def logical_lines(text: str, path: Path, *, dollar_comments: bool = True) -> list[Line]:
    """Return the logical lines of SPICE ``text``; ``path`` is only for messages.

    ``dollar_comments`` is false for ngspice's ``ps`` compatibility, where ``$`` starts no comment.
    Raises :class:`NetlistError` for a continuation of nothing and for a character outside plain ASCII
    that is not in a comment.
    """
    lines: list[Line] = []
    parts: list[str] = []
    start = 0
    joined = False  # the line before ended in two backslashes
    for number, physical in enumerate(text.split("\n"), start=1):
        bare = physical.strip(" \t\f\v\r")
        if not bare or bare[0] == "*":
            continue
        if ";" in bare or "$" in bare or "//" in bare:
            bare = _without_comment(bare, dollar_comments).rstrip(" \t\f\v\r")
            if not bare:
                continue
        if not bare.isascii() or not bare.isprintable():
            _refuse_foreign(bare, path, number)
        if joined:
            bare = "+" + bare
        joined = bare.endswith("\\\\")
        if joined:
            bare = bare.rstrip("\\ ")
            if not bare:
                continue
        if bare[0] == "+":
            if not parts:
                raise NetlistError(
                    "a continuation line (+) with nothing before it to continue",
                    where=(f"{path}:{number}",),
                    todo="Remove the + or put the line it continues before it, in the same file.",
                )
            parts.append(bare[1:])
            continue
        if parts:
            lines.append(_joined(parts, path, start, dollar_comments))
        parts = [bare]
        start = number
    if parts:
        lines.append(_joined(parts, path, start, dollar_comments))
    return lines


def _joined(parts: list[str], path: Path, number: int, dollar_comments: bool) -> Line:
    text = " ".join(parts)
    if "$" in text:
        # what became a comment by joining would be one to ngspice too
        text = _without_comment(text, dollar_comments)
    line = Line(_squeeze(text), path, number)
    if len(line.text) > MAX_LINE:
        raise NetlistError(
            f"a line of {len(line.text)} characters with its continuations; at most {MAX_LINE} are read",
            where=(line.place,),
            todo="Check that this is a SPICE file, and that its lines end in newlines.",
        )
    return line


def _refuse_foreign(text: str, path: Path, number: int) -> None:
    found = _FOREIGN.search(text)
    if found:
        raise NetlistError(
            f"the character {found.group()!r} outside a comment",
            where=(f"{path}:{number}",),
            todo="SPICE lines are plain ASCII; remove it, or move it into a comment.",
        )


def render(lines: Iterable[Line]) -> str:
    """Return SPICE text with one logical line a line, long ones wrapped with ``+``, ending in a newline."""
    out: list[str] = []
    for line in lines:
        text, start, prefix = line.text, 0, ""
        while len(text) - start > WIDTH:
            at = _break(text, start)
            if at < 0:
                break
            out.append(prefix + text[start:at])
            start, prefix = at + 1, "+ "
        out.append(prefix + text[start:])
    out.append("")
    return "\n".join(out)


def _break(text: str, start: int) -> int:
    """Return the last space in reach that is not inside double quotes, or -1."""
    at = text.rfind(" ", start + 1, start + WIDTH)
    while at > 0 and text.count('"', start, at) % 2:
        at = text.rfind(" ", start + 1, at)
    return at
