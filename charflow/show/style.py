"""How charflow's pictures look: paper, type, and colours by role.

The colours of :data:`FAMILIES` differ in lightness as well as in hue (the first four: about 20, 43, 59 and
71 of 100), and each goes with a marker and a line style of its own, so that a grey print and a colour-blind
reader lose nothing. Names from netlists are data: no text in a picture is read as mathematics.
"""

from __future__ import annotations

import os
from collections.abc import Iterator
from contextlib import contextmanager, suppress
from pathlib import Path
from typing import TYPE_CHECKING, Any

from charflow.errors import FolderError, InputError, visible

if TYPE_CHECKING:
    from matplotlib.axes import Axes
    from matplotlib.colors import Colormap
    from matplotlib.figure import Figure

INK = "#1c2126"  # text, and what a picture is about
GUIDE = "#8a929a"  # axes, reference lines, what is there to compare with
FAINT = "#dde1e5"  # grids and bands
PAPER = "#ffffff"
ALARM = "#b3261e"  # beyond a limit, no value; always with a word or a mark beside it

# (colour, marker, line style) of things shown side by side, in the order they are taken
FAMILIES = (
    ("#12355b", "o", "-"),
    ("#ad430f", "s", "--"),
    ("#4596bd", "^", "-."),
    ("#d9a514", "D", ":"),
    ("#7a3b69", "v", (0, (5, 1, 1, 1, 1, 1))),
    ("#6b7f3a", "P", (0, (1, 1))),
)
_DOWN, _UP = ("#0f4c75", "#6ba4c9", "#dbe8f0"), ("#f6e3d3", "#e0955a", "#a63d0a")
_RC: Any = {
    "font.family": ["DejaVu Sans"],
    "font.size": 9.0,
    "text.color": INK,
    "text.parse_math": False,
    "axes.edgecolor": GUIDE,
    "axes.labelcolor": INK,
    "axes.labelsize": 9.0,
    "axes.titlesize": 10.0,
    "axes.titleweight": "bold",
    "axes.titlelocation": "left",
    "axes.titlepad": 8.0,
    "axes.linewidth": 0.8,
    "axes.spines.top": False,
    "axes.spines.right": False,
    "axes.axisbelow": True,
    "axes.unicode_minus": True,
    "grid.color": FAINT,
    "grid.linewidth": 0.8,
    "xtick.color": GUIDE,
    "ytick.color": GUIDE,
    "xtick.labelcolor": INK,
    "ytick.labelcolor": INK,
    "legend.frameon": False,
    "legend.fontsize": 8.5,
    "lines.linewidth": 1.6,
    "lines.markersize": 5.0,
    "figure.facecolor": PAPER,
    "savefig.facecolor": PAPER,
    "svg.hashsalt": "charflow",
    "svg.fonttype": "path",
}
_KINDS = {".png": "png", ".svg": "svg"}


@contextmanager
def figure(width: float, height: float) -> Iterator[Figure]:
    """Give an empty figure of ``width`` by ``height`` inches; draw on it and save it inside the block."""
    import matplotlib as mpl
    from matplotlib.backends.backend_agg import FigureCanvasAgg
    from matplotlib.figure import Figure

    with mpl.rc_context(_RC):
        drawn = Figure(figsize=(width, height), layout="constrained")
        FigureCanvasAgg(drawn)
        yield drawn


def kind_of(path: Path) -> str:
    """Return the file format that the suffix of ``path`` names. Raises :class:`InputError` for others."""
    kind = _KINDS.get(path.suffix.lower())
    if kind is None:
        raise InputError(
            f"pictures are written as {' or '.join(_KINDS)}, found {path.suffix or 'no suffix'!r}",
            where=(str(path),),
            todo="Name the file so, for example change.svg.",
        )
    return kind


def save(drawn: Figure, path: Path, dots: int = 144) -> None:
    """Write the figure whole or not at all, the same bytes every time; ``dots`` an inch where it has any.

    Raises :class:`FolderError` where the file cannot be written, :class:`InputError` for another suffix.
    """
    kind = kind_of(path)
    part = path.with_name(f".{path.name}.part")
    blank: dict[str, Any] = (
        {"Date": None, "Creator": "charflow"} if kind == "svg" else {"Software": "charflow"}
    )
    try:
        drawn.savefig(part, format=kind, dpi=dots, metadata=blank)
        os.replace(part, path)  # noqa: PTH105  # atomic on one file system
    except (OSError, ValueError) as error:
        with suppress(OSError, ValueError):
            part.unlink(missing_ok=True)
        reason = getattr(error, "strerror", None) or str(error)
        raise FolderError(f"the picture cannot be written: {reason}", where=(str(path),)) from None


def change_colours() -> Colormap:
    """Return the colours of a signed change: blue less, white none, orange more; print its sign beside it."""
    from matplotlib.colors import LinearSegmentedColormap

    return LinearSegmentedColormap.from_list("change", [*_DOWN, PAPER, *_UP])


def ink_on(colour: tuple[float, ...]) -> str:
    """Return the text colour that reads on ``colour``, red, green and blue from 0 to 1."""
    red, green, blue = colour[:3]
    return PAPER if 0.299 * red + 0.587 * green + 0.114 * blue < 0.5 else INK


def label(axes: Axes, title: str, across: str, up: str) -> None:
    """Write title and axis labels; each may hold names from a netlist, the title line breaks."""
    axes.set_title("\n".join(map(visible, title.split("\n"))))
    axes.set_xlabel(visible(across))
    axes.set_ylabel(visible(up))
