"""Where jobs run: worker processes on this machine, behind the interface of ``concurrent.futures``."""

from __future__ import annotations

import multiprocessing
import os
import signal
from concurrent.futures import Future
from pathlib import Path
from types import TracebackType
from typing import Protocol, Self

from charflow.campaign.worker import Done, Job, begin, work


class Pool(Protocol):
    """Runs jobs somewhere; ``submit`` returns a future of what came of one."""

    def submit(self, job: Job) -> Future[Done]:
        """Start ``job`` as soon as a worker is free."""
        ...

    def __enter__(self) -> Self:
        """Open the pool."""
        ...

    def __exit__(
        self, kind: type[BaseException] | None, error: BaseException | None, trace: TracebackType | None
    ) -> None:
        """Close the pool; after an error, at once."""
        ...


class LocalPool:
    """``workers`` processes on this machine. One that dies fails only its own job; another takes its place."""

    def __init__(self, workers: int, journals: Path) -> None:
        from pebble import ProcessPool

        self._pool = ProcessPool(
            max_workers=workers,
            context=multiprocessing.get_context("spawn"),
            initializer=begin,
            initargs=[str(journals)],
        )

    def submit(self, job: Job) -> Future[Done]:
        """Start ``job`` as soon as a worker is free."""
        future: Future[Done] = self._pool.schedule(work, args=[job])
        return future

    def __enter__(self) -> Self:
        """Open the pool."""
        return self

    def __exit__(
        self, kind: type[BaseException] | None, error: BaseException | None, trace: TracebackType | None
    ) -> None:
        """Close the pool; after an error, at once."""
        if error is None:
            self._pool.close()  # type: ignore[no-untyped-call]
        else:
            self._pool.stop()  # type: ignore[no-untyped-call]
        self._pool.join()


def kill(process: int) -> None:
    """End a worker process that does not answer."""
    try:
        os.kill(process, signal.SIGKILL)
    except ProcessLookupError:
        pass
