"""Work items on a dask scheduler: the same items, keys and parts; only who does the work is another.

Results come back through the scheduler and are stored here, so workers need to see the inputs and nothing else. A scene
to be rendered is rendered by one worker and passed on among them. A worker that dies takes its items back to the
scheduler, which gives them to others.
"""

from __future__ import annotations

import contextlib
import logging
import os
import tempfile
import time
import warnings
from collections import OrderedDict
from collections.abc import Iterator, Sequence
from concurrent.futures import CancelledError
from dataclasses import dataclass, field, replace
from pathlib import Path
from typing import Any

from unmix.batch.digests import numerics_version
from unmix.batch.feed import Outcome, Running, task_of
from unmix.batch.items import Items
from unmix.batch.scenes import SceneSource
from unmix.batch.store import Part, Store, encode_part, render_source
from unmix.batch.work import Task, failed, run_task
from unmix.cores import THREADS_VARIABLE
from unmix.errors import FileError, InputError, MissingExtraError, UnmixWarning

__all__ = ["ClusterEngine"]

ALLOWED_FAILURES = 1000
"""Deaths of workers that an item may live through. Three, the scheduler's own figure, is a bad hour of machines that
are taken away at will; an item that kills its workers is told by its name standing in the progress line."""
ANSWER_S = 10.0
PER_THREAD, FEWEST = 3, 16
"""Items handed to the scheduler for each thread of its workers, so that none waits and a million are not queued."""
TICK_S, LOOK_S = 1.0, 5.0
Bundle = dict[str, bytes]


@dataclass
class _Flight:
    """What the scheduler has of ours."""

    items: dict[Any, int] = field(default_factory=dict)
    bundles: dict[int, Any] = field(default_factory=dict)
    left: dict[int, int] = field(default_factory=dict)


class ClusterEngine:
    """Runs items on the scheduler at `address`. Raises InputError when it does not answer."""

    def __init__(self, items: Items, store: Store, address: str) -> None:
        self._items, self._store, self._address = items, store, address
        self._client = _connect(address)
        self._names: dict[str, str] = {}
        self._seen: dict[str, tuple[str, float]] = {}
        self._looked = 0.0
        self._began = time.monotonic()

    def run(self, pending: Sequence[int]) -> Iterator[list[Outcome]]:
        """Do the pending items; yields what has ended, now and then an empty list.

        Raises FileError when parts cannot be written here, or the scheduler is gone. Without a worker it waits for
        one, with a warning.
        """
        flight = _Flight()
        for index in pending:
            scene = self._items.place(index)[0]
            flight.left[scene] = flight.left.get(scene, 0) + 1
        waiting = iter(pending)
        try:
            self._prepare()
            while True:
                self._fill(flight, waiting)
                if not flight.items:
                    return
                yield [self._keep(flight, future) for future in self._ended(flight)]
        except (FileError, InputError):
            raise
        except Exception as error:
            # A call under way when the connection goes ends in whatever the library had in hand (an unbound variable
            # of its own among them), so the client is asked, not the error.
            if not isinstance(error, (OSError, CancelledError)) and self._client.status == "running":
                raise
            line = (str(error).splitlines() or [type(error).__name__])[0]
            raise FileError(
                f"{self._address}: the scheduler is gone ({line}); what was finished is kept: start it and run again"
            ) from None
        finally:
            self._close(flight)

    def _prepare(self) -> None:
        """Have the scheduler bear with dying workers, and see that the workers compute what is computed here."""
        self._client.run_on_scheduler(_bear_failures, ALLOWED_FAILURES)
        if not self._client.nthreads():
            warnings.warn(
                f"{self._address}: no worker is connected yet; waiting. Start some with `dask worker {self._address}`",
                UnmixWarning,
                stacklevel=2,
            )
        other = [
            worker for worker, version in self._client.run(numerics_version).items() if version != numerics_version()
        ]
        if other:
            raise InputError(f"{self._address}: worker {other[0]} has another version of unmix; install the same there")

    def _fill(self, flight: _Flight, waiting: Iterator[int]) -> None:
        window = max(FEWEST, PER_THREAD * sum(self._client.nthreads().values()))
        while len(flight.items) < window:
            index = next(waiting, None)
            if index is None:
                return
            scene = self._items.place(index)[0]
            source = self._items.scenes[scene]
            if source.spec is not None and scene not in flight.bundles:
                # Not pure: what was rendered for an earlier client may be gone with its worker.
                flight.bundles[scene] = self._client.submit(_render, source, pure=False)
            task = task_of(self._items, index, source.path or "scene.toml")
            future = self._client.submit(_do, task, flight.bundles.get(scene), numerics_version(), pure=False)
            self._names[future.key] = task.name
            flight.items[future] = index

    def _ended(self, flight: _Flight) -> list[Any]:
        from distributed import wait
        from distributed.client import FIRST_COMPLETED

        with contextlib.suppress(TimeoutError), self._client.as_current():
            ended: Any = wait(list(flight.items), timeout=TICK_S, return_when=FIRST_COMPLETED)  # type: ignore[no-untyped-call]
            return list(ended.done)
        return []

    def _keep(self, flight: _Flight, future: Any) -> Outcome:
        """Store what came back; failures of the cluster become failures of the item that may pass."""
        index = flight.items.pop(future)
        del self._names[future.key]
        scene = self._items.place(index)[0]
        flight.left[scene] -= 1
        if not flight.left[scene]:
            flight.bundles.pop(scene, None)
        if future.status == "finished":
            encoded, error = future.result()
        else:
            error = _why(future)
            encoded = encode_part(Part(error=error, passing=True))
        self._store.write(self._items.key(index), encoded)
        return Outcome(index, error)

    def running(self) -> list[Running]:
        """What the workers are at, the longest first; looked at every few seconds."""
        now = time.monotonic()
        if now - self._looked > LOOK_S:
            self._looked = now
            with contextlib.suppress(OSError, TimeoutError):
                at = {key: worker for worker, keys in self._client.processing().items() for key in keys}
                self._seen = {k: (worker, self._seen.get(k, ("", now))[1]) for k, worker in at.items()}
        if not self._client.nthreads():
            return [Running("no worker is connected", self._address, now - self._began)]
        found = [
            Running(self._names[key], f"worker {worker}", now - since)
            for key, (worker, since) in self._seen.items()
            if key in self._names
        ]
        return sorted(found, key=lambda r: -r.seconds)

    def _close(self, flight: _Flight) -> None:
        with contextlib.suppress(OSError, TimeoutError, CancelledError, UnboundLocalError):
            self._client.cancel([*flight.items, *flight.bundles.values()], force=True)
        with contextlib.suppress(OSError, TimeoutError, CancelledError, UnboundLocalError):
            self._client.close(timeout=ANSWER_S)


def _connect(address: str) -> Any:
    # What goes wrong is said here, in one line; the library would say it in fifty.
    logging.getLogger("distributed").setLevel(logging.CRITICAL)
    try:
        from distributed import Client
    except ImportError:
        raise MissingExtraError("--cluster needs dask; install unmix-talkers[cluster]") from None
    try:
        return Client(address, timeout=ANSWER_S, set_as_default=False)  # type: ignore[no-untyped-call]
    except (OSError, TimeoutError, ValueError) as error:
        line = (str(error).splitlines() or [type(error).__name__])[0]
        raise InputError(
            f"{address}: no scheduler answers ({line}); start one with `dask scheduler`, or correct --cluster"
        ) from None


def _bear_failures(most: int, dask_scheduler: Any = None) -> None:
    """Runs in the scheduler."""
    dask_scheduler.allowed_failures = max(dask_scheduler.allowed_failures, most)


def _why(future: Any) -> str:
    if future.status == "error":
        error = future.exception()
        return f"the cluster gave it up: {type(error).__name__}: {' '.join(str(error).split())}"
    return f"the cluster gave it up: {future.status}"


def _render(source: SceneSource) -> Bundle | Part:
    """Runs in a worker: the files of a rendered scene, or what went wrong."""
    try:
        with _one_thread(), tempfile.TemporaryDirectory(prefix="unmix-scene-") as name:
            render_source(source, Path(name))
            return {path.name: path.read_bytes() for path in Path(name).iterdir()}
    except Exception as error:  # noqa: BLE001  a scene that cannot be rendered must not end the batch
        return failed(error)


def _do(task: Task, bundle: Bundle | Part | None, version: str) -> tuple[bytes, str | None]:
    """Runs in a worker: the encoded part, and its error."""
    if version != numerics_version():
        part = Part(error="a worker has another version of unmix; install the same there", passing=True)
    elif isinstance(bundle, Part):
        part = bundle
    else:
        with _one_thread():
            part = run_task(task if bundle is None else replace(task, path=_unpacked(task.digest, bundle)))
    return encode_part(part), part.error


KEPT = 2
_unpacked_scenes: OrderedDict[str, tempfile.TemporaryDirectory[str]] = OrderedDict()


def _unpacked(digest: str, bundle: Bundle) -> str:
    """The scene's file, its bundle written into a folder of this worker's that lives while its items come."""
    if digest not in _unpacked_scenes:
        while len(_unpacked_scenes) >= KEPT:
            _unpacked_scenes.popitem(last=False)[1].cleanup()
        folder = tempfile.TemporaryDirectory(prefix="unmix-scene-")
        for name, content in bundle.items():
            (Path(folder.name) / name).write_bytes(content)
        _unpacked_scenes[digest] = folder
    return str(Path(_unpacked_scenes[digest].name) / "scene.toml")


@contextlib.contextmanager
def _one_thread() -> Iterator[None]:
    """One thread, of BLAS and of one's own, as on this machine, so that results are the same."""
    from threadpoolctl import threadpool_limits

    os.environ[THREADS_VARIABLE] = "1"  # and left so: a worker's threads share its environment
    with threadpool_limits(1):
        yield
