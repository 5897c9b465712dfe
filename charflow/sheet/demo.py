"""Where the built-in scenario lies: inside an installed package, beside it in the source tree."""

from __future__ import annotations

from pathlib import Path

import charflow
from charflow.errors import InputError

DEMO_CELL = "tarn_dffp_1.toml"


def decks_folder() -> Path:
    """Return the folder of the Tarn cells. Raises :class:`InputError` where the installation lacks it."""
    package = Path(charflow.__file__).parent
    for folder in (package.parent / "decks", package / "decks"):
        if (folder / DEMO_CELL).is_file():
            return folder
    raise InputError("this installation lacks the demo cells", todo="Install charflow again.")


def demo_sheet() -> Path:
    """Return the sheet of the demo cell."""
    return decks_folder() / DEMO_CELL
