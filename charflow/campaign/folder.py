"""The run folder: made, checked, and held by one run at a time."""

from __future__ import annotations

import fcntl
import os
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path

from charflow.campaign.store import FILE
from charflow.errors import FolderError

LOCK = ".charflow.lock"
JOURNALS = ".journals"


def open_folder(folder: Path) -> Path:
    """Return ``folder``, made if need be. Raises :class:`FolderError` if it holds something else."""
    try:
        if folder.exists() and not folder.is_dir():
            raise FolderError(
                "this is a file, not a folder", where=(str(folder),), todo="Name another folder."
            )
        if folder.is_dir() and not (folder / FILE).exists():
            strangers = sorted(
                p.name for p in folder.iterdir() if p.name not in (LOCK, JOURNALS, "sheet.toml")
            )
            if strangers and not any(name.startswith(FILE) for name in strangers):
                raise FolderError(
                    f"the folder holds something that is not a run ({strangers[0]!r})",
                    where=(str(folder),),
                    todo="Name a new or empty folder; nothing was changed.",
                )
        (folder / JOURNALS).mkdir(parents=True, exist_ok=True)
        (folder / LOCK).touch()
    except OSError as error:
        raise FolderError(f"the folder cannot be written: {error.strerror}", where=(str(folder),)) from None
    return folder


@contextmanager
def held(folder: Path) -> Iterator[None]:
    """Hold ``folder`` for this process. Raises :class:`FolderError` naming the process that has it."""
    try:
        file = (folder / LOCK).open("rb+", buffering=0)
    except OSError as error:
        raise FolderError(f"the folder cannot be written: {error.strerror}", where=(str(folder),)) from None
    with file:
        try:
            fcntl.flock(file, fcntl.LOCK_EX | fcntl.LOCK_NB)
        except OSError:
            holder = file.read().decode("ascii", "replace").strip() or "unknown"
            raise FolderError(
                f"another run (process {holder}) is working in this folder",
                where=(str(folder),),
                todo="Wait for it, stop it, or name another folder.",
            ) from None
        try:
            file.seek(0)
            file.truncate()
            file.write(f"{os.getpid()}\n".encode())
        except OSError as error:
            raise FolderError(
                f"the folder cannot be written: {error.strerror}", where=(str(folder),)
            ) from None
        yield
