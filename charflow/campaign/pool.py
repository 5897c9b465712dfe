"""Where jobs run: worker processes on this machine, behind the interface of ``concurrent.futures``.

Each worker has a thread and a pipe of its own here, so no lock is shared between processes: a worker killed
at any moment takes nothing with it but its job.
"""

from __future__ import annotations

import multiprocessing
import os
import signal
import threading
import time
from collections.abc import Callable
from concurrent.futures import Future
from contextlib import suppress
from dataclasses import replace
from multiprocessing import resource_tracker
from multiprocessing.connection import Connection
from multiprocessing.context import SpawnProcess
from pathlib import Path
from queue import SimpleQueue
from types import TracebackType
from typing import Protocol, Self

from charflow.campaign.worker import Done, Job, begin, work

_GOODBYE = 5.0  # s a worker is given to end by itself


class WorkerLost(Exception):
    """The process that did a job ended, or failed in a way nobody foresaw."""


class Pool(Protocol):
    """Runs jobs somewhere, ``seats`` of them at once; ``submit`` returns a future of what came of one."""

    seats: int

    def submit(self, job: Job) -> Future[Done]:
        """Start ``job`` as soon as a worker is free. The future raises :class:`WorkerLost` if that dies."""
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
    """``workers`` processes on this machine. One that dies fails only its own job and is replaced."""

    def __init__(self, workers: int, journals: Path) -> None:
        self.seats = workers
        self._journals = str(journals.absolute())
        self._jobs: SimpleQueue[tuple[Job, Future[Done]] | None] = SimpleQueue()
        self._stopping = threading.Event()
        self._threads = [
            threading.Thread(target=self._serve, args=(seat,), daemon=True) for seat in range(workers)
        ]
        self._lock = threading.Lock()
        self._alive: set[SpawnProcess] = set()

    def submit(self, job: Job) -> Future[Done]:
        """Start ``job`` as soon as a worker is free. The future raises :class:`WorkerLost` if that dies."""
        future: Future[Done] = Future()
        self._jobs.put((job, future))
        return future

    def __enter__(self) -> Self:
        """Open the pool."""
        resource_tracker.ensure_running()  # it would unblock the signals that _serve blocks
        for thread in self._threads:
            thread.start()
        return self

    def __exit__(
        self, kind: type[BaseException] | None, error: BaseException | None, trace: TracebackType | None
    ) -> None:
        """Close the pool; after an error, at once."""
        if error is not None:
            with self._lock:
                self._stopping.set()
                for process in self._alive:
                    process.kill()
        for _ in self._threads:
            self._jobs.put(None)
        for thread in self._threads:
            thread.join()

    def _serve(self, seat: int) -> None:
        """Keep one worker busy. It dies with this thread, which therefore outlives it."""
        signal.pthread_sigmask(signal.SIG_BLOCK, {signal.SIGINT, signal.SIGTERM})  # the worker inherits it
        worker: _Worker | None = None
        while (item := self._jobs.get()) is not None:
            job, future = item
            if self._stopping.is_set():
                future.cancel()
                continue
            try:
                asked = time.monotonic()
                worker = worker or self._start()
                done = worker.ask(job)
                spell = done.spell and replace(done.spell, asked=asked, seat=seat)
                future.set_result(replace(done, spell=spell))
                if job.full is not None:  # a whole library stays in memory as long as its process
                    self._ended(worker)
                    worker = None
            except WorkerLost as error:
                future.set_exception(error)
                self._ended(worker)
                worker = None
            except Exception as error:  # what the job itself raised, for whoever waits for it
                future.set_exception(error)
        self._ended(worker)

    def _start(self) -> _Worker:
        with self._lock:
            if self._stopping.is_set():
                raise WorkerLost("the run is stopping")
            worker = _Worker(self._journals)
            self._alive.add(worker.process)
            return worker

    def _ended(self, worker: _Worker | None) -> None:
        if worker is not None:
            worker.end()
            with self._lock:
                self._alive.discard(worker.process)


class _Worker:
    """One worker process and the pipe to it."""

    def __init__(self, journals: str) -> None:
        context = multiprocessing.get_context("spawn")
        self._pipe, far = context.Pipe()
        with far:
            args = (far, journals, os.getpid(), work)
            self.process = context.Process(target=_do_jobs, args=args, daemon=True)
            self.process.start()

    def ask(self, job: Job) -> Done:
        """Return what came of ``job``, or raise what it raised."""
        try:
            self._pipe.send(job)
            done: Done | Exception = self._pipe.recv()
        except (EOFError, OSError):
            self.process.join(_GOODBYE)
            raise WorkerLost(
                f"process {self.process.pid} ended with status {self.process.exitcode}"
            ) from None
        if isinstance(done, Exception):
            raise done
        return done

    def end(self) -> None:
        """Let the process end; make it, if it does not."""
        self._pipe.close()
        self.process.join(_GOODBYE)
        if self.process.is_alive():
            self.process.kill()
            self.process.join()


def _do_jobs(pipe: Connection, journals: str, parent: int, do: Callable[[Job], Done]) -> None:
    """Do jobs until the pipe closes: what a worker process runs."""
    begin(journals, parent)
    while True:
        try:
            job = pipe.recv()
        except EOFError:
            return
        try:
            came: Done | Exception = do(job)
        except Exception as error:
            came = error
        try:
            pipe.send(came)
        except (TypeError, AttributeError, ValueError) as error:  # it does not pickle
            pipe.send(WorkerLost(f"{type(came).__name__}: {came} ({error})"))


def kill(process: int) -> None:
    """End a worker process that does not answer."""
    with suppress(ProcessLookupError):
        os.kill(process, signal.SIGKILL)
