"""A worker's own append-only record, one JSON line an event, and the reader that follows all of them.

A worker writes what it begins and what came of it. Killed at any moment it leaves at most one broken last
line, which the reader passes over.
"""

from __future__ import annotations

import json
import os
from collections.abc import Iterator
from pathlib import Path
from typing import Any, TextIO

SUFFIX = ".journal"


class Journal:
    """The journal this process writes, in ``folder``."""

    def __init__(self, folder: Path) -> None:
        self._file: TextIO = (folder / f"{os.getpid()}{SUFFIX}").open("a", encoding="utf-8")

    def write(self, **event: Any) -> None:
        """Append one event and hand it to the operating system."""
        self._file.write(json.dumps(event, separators=(",", ":")) + "\n")
        self._file.flush()


class Follower:
    """Reads the journals of a folder as they grow. ``busy`` maps a process to its job and trial at work."""

    def __init__(self, folder: Path) -> None:
        self.folder = folder
        self.busy: dict[int, tuple[str, str]] = {}
        self._read: dict[Path, int] = {}

    def new(self) -> Iterator[tuple[int, dict[str, Any]]]:
        """Yield (process, event) for each whole line written since the last call."""
        for path in sorted(self.folder.glob(f"*{SUFFIX}")):
            process = int(path.name.removesuffix(SUFFIX))
            with path.open("rb") as file:
                file.seek(self._read.get(path, 0))
                content = file.read()
            whole = content.rfind(b"\n") + 1
            self._read[path] = self._read.get(path, 0) + whole
            for line in content[:whole].splitlines():
                try:
                    event = json.loads(line)
                except ValueError:
                    continue
                if isinstance(event, dict):
                    self._note(process, event)
                    yield process, event

    def _note(self, process: int, event: dict[str, Any]) -> None:
        if "job" in event:
            self.busy[process] = (event["job"], "")
        elif "begin" in event and process in self.busy:
            self.busy[process] = (self.busy[process][0], event["begin"])
        elif "key" in event and process in self.busy:
            self.busy[process] = (self.busy[process][0], "")
        elif "done" in event:
            self.busy.pop(process, None)

    def remove(self) -> None:
        """Delete the journals; what they said is in the store."""
        for path in self.folder.glob(f"*{SUFFIX}"):
            path.unlink(missing_ok=True)
        self._read.clear()
        self.busy.clear()
