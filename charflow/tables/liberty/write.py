"""Libraries into files: which name, which folder, and what is said about it."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from pathlib import Path

from charflow.errors import FolderError, InputError
from charflow.tables.folder import read_tables, write_whole
from charflow.tables.liberty.library import library_texts


def write_libraries(
    folders: Sequence[Path], out: Path | None, allow_gaps: bool, say: Callable[[str], None]
) -> bool:
    """Write the libraries of run ``folders``, one file a corner; return whether anything was left out.

    One folder: ``CELL_CORNER.lib``, in ``out`` or else in the folder itself. Several: ``out`` must be
    given and its last part names the library. ``say`` hears of each file and of what is missing in it.
    Raises :class:`InputError` for tables with holes unless ``allow_gaps``.
    """
    if len(folders) > 1 and out is None:
        raise InputError(
            "several run folders make one library, which belongs to none of them",
            todo="Name its folder with --out FOLDER; the library takes the folder's name.",
        )
    place = folders[0] if out is None else out
    name = read_tables(folders[0]).cell if len(folders) == 1 else place.resolve().name
    libraries = library_texts(folders, name, allow_gaps=allow_gaps)
    try:
        place.mkdir(parents=True, exist_ok=True)
    except OSError as error:
        raise FolderError(f"the folder cannot be made: {error.strerror}", where=(str(place),)) from None
    for library in libraries:
        path = place / f"{library.name}.lib"
        write_whole(path, library.text)
        say(f"Written to {path}")
        for text in library.left_out:
            say(f"  left out: {text}")
    return any(library.left_out for library in libraries)
