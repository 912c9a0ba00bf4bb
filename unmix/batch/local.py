"""Work items on this machine: worker processes that are started afresh, one BLAS thread each.

A pool of its own, since the standard library's ends as a whole when one of its processes is killed. A worker keeps its
scene while it can, writes each part itself, and says so; one that dies is replaced and its job given out again.
"""

from __future__ import annotations

import contextlib
import multiprocessing
import os
import shutil
import signal
import time
from collections.abc import Iterable, Iterator
from dataclasses import dataclass, field
from multiprocessing.connection import Connection, wait
from multiprocessing.process import BaseProcess
from pathlib import Path
from types import FrameType
from typing import Any, NoReturn

from unmix.batch.feed import Feed, Job, Outcome, Running, task_of
from unmix.batch.items import Items
from unmix.batch.store import Part, Store, encode_part
from unmix.cores import THREADS_VARIABLE
from unmix.errors import FileError, UnmixError

__all__ = ["LocalEngine"]

MOST_DEATHS = 3
"""A job that outlives so many workers is given up; so is a worker that never gets ready."""
FULL_BYTES = 32e6
"""Where a scene cannot be written and less than this is free, the disk is full, and no other scene will fit."""
TICK_S = 0.5
PATIENCE_S = 5.0
ONE_THREAD = (THREADS_VARIABLE, "OPENBLAS_NUM_THREADS", "OMP_NUM_THREADS", "MKL_NUM_THREADS", "VECLIB_MAXIMUM_THREADS")


@dataclass
class _Worker:
    process: BaseProcess
    pipe: Connection
    ready: bool = False
    job: Job | None = None
    scene: int | None = None
    since: float = field(default_factory=time.monotonic)


class LocalEngine:
    """Runs items in `workers` processes; parts go into `store` as they are finished."""

    def __init__(self, items: Items, store: Store, workers: int) -> None:
        self._items, self._store, self._count = items, store, workers
        self._workers: list[_Worker] = []
        self._deaths: dict[Job, int] = {}
        self._stillborn = 0

    def run(self, pending: Iterable[int]) -> Iterator[list[Outcome]]:
        """Do the pending items; yields what has ended, now and then an empty list.

        Raises FileError when parts cannot be written. However it ends, no worker is left behind.
        """
        feed = Feed(self._items, pending, self._store)
        try:
            self._workers = [self._start() for _ in range(self._count)]
            self._give_out(feed)
            while not feed.empty or any(w.job is not None for w in self._workers):
                outcomes = []
                for pipe in wait([w.pipe for w in self._workers], TICK_S):
                    worker = next(w for w in self._workers if w.pipe is pipe)
                    outcomes += self._hear(worker, feed)
                self._give_out(feed)
                yield outcomes
        finally:
            self._stop()

    def running(self) -> list[Running]:
        """What the workers are at, the longest first."""
        now = time.monotonic()
        found = [Running(self._name(w.job), f"process {w.process.pid}", now - w.since) for w in self._workers if w.job]
        return sorted(found, key=lambda r: -r.seconds)

    def _name(self, job: Job) -> str:
        return self._items.name(job.item) if job.item is not None else f"rendering {self._items.scenes[job.scene].name}"

    def _start(self) -> _Worker:
        context = multiprocessing.get_context("spawn")
        ours, theirs = context.Pipe()
        process = context.Process(target=_serve, args=(theirs, str(self._store.folder)), daemon=True)
        with _one_thread():
            process.start()
        theirs.close()
        return _Worker(process, ours)

    def _give_out(self, feed: Feed) -> None:
        for worker in self._workers:
            if worker.job is not None or not worker.ready:
                continue
            busy = {w.job.scene for w in self._workers if w.job is not None}
            job = feed.next(worker.scene, busy)
            if job is None:
                continue
            worker.job, worker.scene, worker.since = job, job.scene, time.monotonic()
            message = (
                ("render", self._items.scenes[job.scene])
                if job.item is None
                else ("item", task_of(self._items, job.item, feed.path(job.scene)))
            )
            with contextlib.suppress(OSError):  # its death is heard of where it is waited for
                worker.pipe.send(message)

    def _hear(self, worker: _Worker, feed: Feed) -> list[Outcome]:
        try:
            kind, said = worker.pipe.recv()
        except (EOFError, OSError):
            return self._replace(worker, feed)
        if kind == "ready":
            worker.ready, self._stillborn = True, 0
            return []
        if kind == "unwritable":
            raise FileError(f"{said}; what was finished is kept, run again to go on")
        job, worker.job = worker.job, None
        if job is None:
            return []
        if job.item is not None:
            return [Outcome(job.item, said)]
        if isinstance(said, Part):
            return self._give_up(feed.unrendered(job.scene), said)
        feed.rendered(job.scene, said)
        return []

    def _replace(self, worker: _Worker, feed: Feed) -> list[Outcome]:
        """Start a worker in place of a dead one; its job is given out again, unless it has killed too many."""
        worker.process.join(PATIENCE_S)
        self._stillborn += 0 if worker.ready else 1
        if self._stillborn >= MOST_DEATHS * self._count:
            raise UnmixError(
                f"worker processes end before they begin (exit status {worker.process.exitcode}); is memory short?"
            )
        self._workers[self._workers.index(worker)] = self._start()
        job = worker.job
        if job is None:
            return []
        self._deaths[job] = self._deaths.get(job, 0) + 1
        feed.put_back(job)
        if self._deaths[job] < MOST_DEATHS:
            return []
        part = Part(
            error=f"the worker process died {MOST_DEATHS} times in the middle of it (exit status "
            f"{worker.process.exitcode}); is memory short? Run with fewer --workers",
            passing=True,
        )
        return self._give_up(feed.unrendered(job.scene) if job.item is None else [feed.take(job.scene)], part)

    def _give_up(self, items: list[int], part: Part) -> list[Outcome]:
        for index in items:
            self._store.write(self._items.key(index), encode_part(part))
        return [Outcome(index, part.error) for index in items]

    def _stop(self) -> None:
        for worker in self._workers:
            with contextlib.suppress(OSError):
                worker.pipe.close()
            if worker.job is not None or not worker.ready:
                worker.process.terminate()
        until = time.monotonic() + PATIENCE_S
        for worker in self._workers:
            worker.process.join(max(0.0, until - time.monotonic()))
            if worker.process.is_alive():
                worker.process.kill()
                worker.process.join()


@contextlib.contextmanager
def _one_thread() -> Iterator[None]:
    """What a process started within is told of threads: one, since workers share the cores among themselves."""
    before = {name: os.environ.get(name) for name in ONE_THREAD}
    os.environ.update(dict.fromkeys(ONE_THREAD, "1"))
    try:
        yield
    finally:
        for name, value in before.items():
            if value is None:
                del os.environ[name]
            else:
                os.environ[name] = value


def _serve(pipe: Connection, folder: str) -> None:
    """A worker's life: jobs in, answers out, until the other end is closed."""
    _mind_signals()
    store = Store(Path(folder))
    with contextlib.suppress(EOFError, OSError):
        pipe.send(("ready", None))
        while True:
            pipe.send(_answer(store, *pipe.recv()))


def _mind_signals() -> None:
    """Leave interruption to the parent, and go by way of every `finally` when told to."""

    def leave(signum: int, frame: FrameType | None) -> NoReturn:
        raise SystemExit(128 + signum)

    signal.signal(signal.SIGINT, signal.SIG_IGN)
    signal.signal(signal.SIGTERM, leave)


def _answer(store: Store, kind: str, job: Any) -> tuple[str, Any]:
    from unmix.batch.work import failed, run_task

    if kind == "render":
        try:
            return "rendered", str(store.render(job))
        except Exception as error:  # noqa: BLE001  a scene that cannot be rendered must not end the batch
            free = shutil.disk_usage(store.folder).free
            if isinstance(error, FileError) and free < FULL_BYTES:
                return "unwritable", f"{store.folder}: the disk is full ({free / 1e6:.0f} MB left); make room"
            return "rendered", failed(error)
    part = run_task(job)
    try:
        store.write(job.key, encode_part(part))
    except FileError as error:
        return "unwritable", str(error)
    return "done", part.error
