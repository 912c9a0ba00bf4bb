"""Work shared out over frequency bands: one thread per core, one BLAS thread each.

Small matrices by the thousand gain nothing from a threaded BLAS and much from threads over frequency; NumPy releases
the interpreter lock in both.
"""

from __future__ import annotations

from collections.abc import Callable, Iterator
from concurrent.futures import ThreadPoolExecutor
from contextlib import contextmanager
from itertools import pairwise
from typing import TypeVar

from unmix.cores import usable_threads

__all__ = ["Bands"]

T = TypeVar("T")


class Bands:
    """Slices of the frequency axis and the threads that work on them.

    frequencies  number of frequencies
    workers      threads; as many as the process may use when None
    widest       most frequencies in one slice: bounds the memory of whatever a slice needs
    """

    def __init__(self, frequencies: int, *, workers: int | None = None, widest: int = 128) -> None:
        self.workers = max(1, workers or usable_threads())
        count = max(self.workers, -(-frequencies // widest))
        count = min(frequencies, -(-count // self.workers) * self.workers)
        edges = [frequencies * i // count for i in range(count + 1)]
        self.slices = [slice(a, b) for a, b in pairwise(edges)]
        self._pool: ThreadPoolExecutor | None = None

    @contextmanager
    def running(self) -> Iterator[Bands]:
        """Threads started and BLAS held to one thread, for the length of the block."""
        from threadpoolctl import threadpool_limits

        with threadpool_limits(limits=1, user_api="blas"), ThreadPoolExecutor(self.workers) as pool:
            self._pool = pool if self.workers > 1 else None
            try:
                yield self
            finally:
                self._pool = None

    def each(self, work: Callable[[slice], T]) -> list[T]:
        """``work`` on every slice, in order; what it raises comes out here."""
        if self._pool is None:
            return [work(band) for band in self.slices]
        return list(self._pool.map(work, self.slices))
