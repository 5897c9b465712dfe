"""Live progress on standard error: points done, transients, time left. Plain lines into a file."""

from __future__ import annotations

import sys
import time
from collections.abc import Callable, Iterator
from contextlib import contextmanager

from charflow.campaign.run import Progress
from charflow.errors import visible

Tell = Callable[[Progress], None]
Say = Callable[[str], None]
_EVERY = 10.0  # s between lines where the output is a file


def line(progress: Progress) -> str:
    """Return the state of a run as one line."""
    left = "" if progress.left is None else f", about {_span(progress.left)} left"
    return (
        f"{progress.points} of {progress.points_total} points, {progress.transients} transients, "
        f"{_span(progress.elapsed)}{left}"
    )


def _span(seconds: float) -> str:
    whole = round(seconds)
    if whole < 90:
        return f"{whole} s"
    if whole < 5400:
        return f"{whole // 60} min {whole % 60:02d} s"
    return f"{whole // 3600} h {whole % 3600 // 60:02d} min"


@contextmanager
def live() -> Iterator[tuple[Tell, Say]]:
    """Give two functions, for progress and for notices, that write to standard error."""
    if sys.stderr.isatty():
        from rich.console import Console
        from rich.live import Live
        from rich.text import Text

        console = Console(stderr=True, highlight=False)
        with Live(Text(""), console=console, transient=True, refresh_per_second=5) as display:
            yield (
                lambda progress: display.update(Text(line(progress))),
                lambda text: console.print(Text(visible(text))),
            )
        return
    last = [time.monotonic()]

    def tell(progress: Progress) -> None:
        done = progress.points == progress.points_total
        if time.monotonic() - last[0] > _EVERY or done:
            last[0] = time.monotonic()
            print(line(progress), file=sys.stderr, flush=True)

    yield tell, lambda text: print(visible(text), file=sys.stderr, flush=True)
