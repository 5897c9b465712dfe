"""Netlist and model files followed through their includes into one flat, screened list of lines.

Only what :func:`gather` returns is ever given to ngspice, so a file cannot smuggle in a command, and
ngspice itself opens no file.
"""

from __future__ import annotations

import difflib
import hashlib
import re
from collections.abc import Iterable
from dataclasses import dataclass
from pathlib import Path

from charflow.errors import NetlistError, RefusedError
from charflow.sheet.lines import Line, logical_lines, read_text
from charflow.sheet.screen import Screen, check_permissions

MAX_DEPTH = 40
MAX_CHARACTERS = 256 * 1024 * 1024

_ARGUMENT = re.compile(r"\"([^\"]*)\"|'([^']*)'|([^\s\"']+)")
_REMOTE = re.compile(r"[A-Za-z][A-Za-z0-9+.-]*://")
_NG_SCRIPT = re.compile(r"\s*\*\s*ng_script", re.IGNORECASE)
_FOLLOWED = frozenset({".include", ".inc", ".incl", ".lib", ".endl"})


@dataclass(frozen=True)
class Rules:
    """What may be read: ``folders`` that includes must lie in, and ``allow``, named narrow permissions.

    ``dollar_comments`` is false where the corner's compatibility is one of ngspice's ``ps`` kinds.
    """

    folders: tuple[Path, ...]
    allow: frozenset[str] = frozenset()
    dollar_comments: bool = True


@dataclass(frozen=True)
class Gathered:
    """The flat text of a file and all it includes, and the files it came from, in order of reading."""

    lines: tuple[Line, ...]
    files: tuple[Path, ...]


def gather(spec: str | Path, rules: Rules, section: str | None = None) -> Gathered:
    """Return the screened lines of a file, with every include and library section in its place.

    A string ``FILE:SECTION`` names a section as ``section`` does. Raises :class:`NetlistError` for files
    and sections that are missing, unreadable or circular, :class:`RefusedError` for what ``rules`` do not
    allow, and :class:`SheetError` for a permission that is none.
    """
    check_permissions(rules.allow)
    path = Path(spec)
    if isinstance(spec, str) and section is None and ":" in spec and not _exists(path):
        name, _, section = spec.rpartition(":")
        path = Path(name)
    walk = _Walk(rules)
    walk.file(path, section, ())
    return Gathered(tuple(walk.out), tuple(walk.texts))


def _exists(path: Path) -> bool:
    try:
        return path.exists()
    except (OSError, ValueError):
        return False


@dataclass(frozen=True)
class _Library:
    """One file: the lines outside its sections, and its sections by lower-case name."""

    loose: list[Line]
    sections: dict[str, list[Line]]
    names: dict[str, str]
    twice: frozenset[str]


class _Walk:
    """One traversal; ``out`` grows as files are met."""

    def __init__(self, rules: Rules) -> None:
        self.screen = Screen(rules.allow)
        self.dollar_comments = rules.dollar_comments
        granted = (entry.partition(":") for entry in rules.allow)
        extra = [folder for kind, _, folder in granted if kind.lower() == "outside-folder"]
        self.folders = [folder.resolve() for folder in (*rules.folders, *map(Path, extra))]
        self.out: list[Line] = []
        self.texts: dict[Path, _Library] = {}
        self.characters = 0

    def file(self, path: Path, section: str | None, chain: tuple[tuple[Path, str | None], ...]) -> None:
        """Append a file, or one section of it; ``chain`` is what is being read around it."""
        real = self._resolved(path)
        key = (real, section.lower() if section else None)
        if key in chain:
            around = " -> ".join(entry[0].name + (f":{entry[1]}" if entry[1] else "") for entry in chain)
            raise NetlistError(
                f"the file includes itself: {around} -> {path.name}", todo="Remove one of these includes."
            )
        if len(chain) >= MAX_DEPTH:
            raise NetlistError(
                f"includes are nested deeper than {MAX_DEPTH}", todo="Name the innermost file directly."
            )
        library = self._library(path, real)
        for line in self._chosen(path, library, section):
            self.characters += len(line.text)
            if self.characters > MAX_CHARACTERS:
                raise NetlistError(
                    f"more than {MAX_CHARACTERS // 2**20} MB of text with all includes",
                    where=(line.place,),
                    todo="Include one corner of the models, and each file once.",
                )
            if line.text[0] == "." and _directive(line.text) in _FOLLOWED:
                self._follow(line, (*chain, key))
            else:
                kept = self.screen.line(line)
                if kept is not None:
                    self.out.append(kept)

    def _follow(self, line: Line, chain: tuple[tuple[Path, str | None], ...]) -> None:
        name, section = _target(line)
        try:
            self.file(line.path.parent / name, section, chain)
        except (NetlistError, RefusedError) as error:
            raise error.at(f"included from {line.place}") from None

    def _resolved(self, path: Path) -> Path:
        try:
            real = path.resolve(strict=False)
        except (OSError, ValueError, RuntimeError) as problem:
            raise NetlistError(
                f"the path cannot be followed: {problem}", where=(str(path),), todo="Correct the path."
            ) from None
        if not any(real.is_relative_to(folder) for folder in self.folders):
            allowed = ", ".join(str(folder) for folder in self.folders) or "none"
            raise RefusedError(
                f"{str(path)!r} lies outside the folders that may be read ({allowed})"
                + (f"; it leads to {real}" if real != path else ""),
                todo=(
                    "Move the file, or, if you trust it, let that folder be read: "
                    f'allow = ["outside-folder:{real.parent}"] in [cell] of the sheet.'
                ),
            )
        return real

    def _library(self, path: Path, real: Path) -> _Library:
        if real not in self.texts:
            text = read_text(real)
            if _NG_SCRIPT.match(text):
                raise RefusedError(
                    "'*ng_script' is refused: it makes ngspice run the whole file as commands",
                    where=(f"{path}:1",),
                    todo="Remove the line; no permission can let it pass.",
                )
            # the path as written: relative includes start from there
            self.texts[real] = _divide(logical_lines(text, path, dollar_comments=self.dollar_comments))
        return self.texts[real]

    def _chosen(self, path: Path, library: _Library, section: str | None) -> list[Line]:
        names = list(library.names.values())
        if section is None:
            if names and not library.loose:
                raise NetlistError(
                    f"the file holds only library sections: {_shown(names)}",
                    where=(str(path),),
                    todo=f"Say which one, as in {path.name}:{names[0]}.",
                )
            return library.loose
        key = section.lower()
        if key in library.twice:
            raise NetlistError(
                f"the section {section!r} is defined twice in this file",
                where=(str(path),),
                todo="Keep one of the two; ngspice would silently use one of them.",
            )
        if key not in library.sections:
            near = difflib.get_close_matches(key, list(library.names), n=3)
            ordered = [library.names[name] for name in near]
            ordered += [name for name in names if name not in ordered]
            raise NetlistError(
                f"there is no section {section!r}" + (f"; there are: {_shown(ordered)}" if names else ""),
                where=(str(path),),
                todo="Name one of them." if names else "The file has no .lib NAME ... .endl: name none.",
            )
        return library.sections[key]


def _shown(names: list[str]) -> str:
    return ", ".join(names[:12]) + (f" and {len(names) - 12} more" if len(names) > 12 else "")


def _directive(text: str) -> str:
    return text.split(maxsplit=1)[0].lower()


def _words(line: Line) -> list[str]:
    return ["".join(parts) for parts in _ARGUMENT.findall(line.text)][1:]


def _target(line: Line) -> tuple[str, str | None]:
    """Return file and section of an include line."""
    words = _words(line)
    lib = _directive(line.text) == ".lib"
    if len(words) != (2 if lib else 1) or not all(words):
        form = ".lib FILE SECTION" if lib else ".include FILE"
        raise NetlistError(
            f"found {line.text[:80]!r}", where=(line.place,), todo=f"Write {form}; quote a name with spaces."
        )
    name = words[0]
    if name[0] == "~" or "$" in name or _REMOTE.match(name):
        raise RefusedError(
            f"{name!r} is refused: only plain paths are followed, without ~, $ or an address",
            where=(line.place,),
            todo="Write the path itself, relative to the file that includes it.",
        )
    return name, (words[1] if lib else None)


def _divide(lines: list[Line]) -> _Library:
    """Split a file into its library sections and the rest."""
    loose: list[Line] = []
    sections: dict[str, list[Line]] = {}
    names: dict[str, str] = {}
    twice: set[str] = set()
    into = loose
    opened: Line | None = None
    for line in lines:
        word = _directive(line.text) if line.text[0] == "." else ""
        if word == ".endl":
            if opened is None:
                raise NetlistError(
                    "an .endl without a .lib NAME before it", where=(line.place,), todo="Remove it."
                )
            # its name may differ, as ngspice lets it: sections cannot nest
            into, opened = loose, None
        elif word == ".lib" and len(_words(line)) == 1:
            if opened is not None:
                raise NetlistError(
                    f"a section starts inside {opened.text!r} ({opened.place})",
                    where=(line.place,),
                    todo="Put .endl before it, or name file and section: .lib FILE SECTION.",
                )
            name = _words(line)[0]
            if name.lower() in sections:
                twice.add(name.lower())
            opened, into = line, sections.setdefault(name.lower(), [])
            names.setdefault(name.lower(), name)
        else:
            into.append(line)
    if opened is not None:
        raise NetlistError(
            f"the section {opened.text!r} has no .endl",
            where=(opened.place,),
            todo="Add .endl after its last line.",
        )
    return _Library(loose, sections, names, frozenset(twice))


_EQUALS = re.compile(r" ?= ?")


def fingerprint(lines: Iterable[Line]) -> str:
    """Return the SHA-256, as hexadecimal digits, of what the lines mean.

    Comments, white space, case outside double quotes, file names, line numbers and wrapping do not count.
    """
    digest = hashlib.sha256()
    for line in lines:
        parts = line.text.split('"')
        parts[::2] = [_EQUALS.sub("=", part.lower()) for part in parts[::2]]
        digest.update('"'.join(parts).encode() + b"\n")
    return digest.hexdigest()
