"""A worker's own append-only record, one sealed JSON line an event, and the reader that follows all of them.

A worker writes what it begins and what came of it. Killed at any moment it leaves at most one broken last
line; the reader passes over every line that its seal does not fit.
"""

from __future__ import annotations

import json
import os
import shutil
from collections.abc import Iterator
from pathlib import Path
from typing import Any

from charflow.campaign.codec import seal
from charflow.errors import FolderError

SUFFIX = ".journal"


class Journal:
    """The journal this process writes, in ``folder``."""

    def __init__(self, folder: Path) -> None:
        self._path = folder / f"{os.getpid()}{SUFFIX}"
        self._file = self._path.open("ab", buffering=0)

    def write(self, **event: Any) -> None:
        """Append one event and hand it to the operating system. Raises :class:`FolderError`."""
        text = json.dumps(event, separators=(",", ":"))
        left = f"{seal(text)} {text}\n".encode()
        try:
            while left:
                left = left[self._file.write(left) :]
        except OSError as error:
            raise FolderError(
                f"the run folder cannot be written: {error.strerror}",
                where=(str(self._path),),
                todo="Free some space, or check the permissions; then run the same command again to go on.",
            ) from None

    def close(self) -> None:
        """Close the file; it stays."""
        self._file.close()


class Follower:
    """Reads the journals of a folder as they grow. ``busy`` maps a process to its job and trial at work."""

    def __init__(self, folder: Path) -> None:
        self.folder = folder
        self.busy: dict[int, tuple[str, str]] = {}
        self._read: dict[Path, int] = {}

    def new(self) -> Iterator[tuple[int, dict[str, Any]]]:
        """Yield (process, event) for each whole line written since the last call."""
        for path in self._journals():
            process = int(path.name.removesuffix(SUFFIX))
            with path.open("rb") as file:
                file.seek(self._read.get(path, 0))
                content = file.read()
            whole = content.rfind(b"\n") + 1
            self._read[path] = self._read.get(path, 0) + whole
            for line in content[:whole].split(b"\n"):
                event = _event(line)
                if event is not None:
                    self._note(process, event)
                    yield process, event

    def again(self) -> None:
        """Begin anew: the next :meth:`new` yields every event there is."""
        self._read.clear()

    def remove(self) -> None:
        """Delete the journals, and what killed workers left beside them; what they said is in the store."""
        for path in self._journals():
            path.unlink(missing_ok=True)
        for folder in self.folder.glob("charflow-*"):
            shutil.rmtree(folder, ignore_errors=True)
        self._read.clear()
        self.busy.clear()

    def _journals(self) -> list[Path]:
        return sorted(p for p in self.folder.glob(f"*{SUFFIX}") if p.name.removesuffix(SUFFIX).isdecimal())

    def _note(self, process: int, event: dict[str, Any]) -> None:
        if "job" in event:
            self.busy[process] = (event["job"], "")
        elif "begin" in event and process in self.busy:
            self.busy[process] = (self.busy[process][0], event["begin"])
        elif "key" in event and process in self.busy:
            self.busy[process] = (self.busy[process][0], "")
        elif "done" in event:
            self.busy.pop(process, None)


def _event(line: bytes) -> dict[str, Any] | None:
    stated, _, content = line.partition(b" ")
    text = content.decode("utf-8", "replace")
    if stated.decode("ascii", "replace") != seal(text):
        return None
    event: dict[str, Any] = json.loads(text)
    return event
