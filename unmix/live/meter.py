"""What running live costs, and whether it kept up."""

from __future__ import annotations

import time
from collections.abc import Iterator
from contextlib import contextmanager
from dataclasses import dataclass
from typing import Any

__all__ = ["Meter"]


@dataclass
class Meter:
    """Counts chunks and the time that each takes; a chunk that takes longer than it lasts is an under-run.

    sample_rate  hertz
    """

    sample_rate: int
    samples: int = 0
    chunks: int = 0
    under_runs: int = 0
    busy_s: float = 0.0
    cpu_s: float = 0.0
    longest_s: float = 0.0

    @contextmanager
    def chunk(self, samples: int) -> Iterator[None]:
        """Time the work on one chunk."""
        began, worked = time.perf_counter(), time.thread_time()
        yield
        self.cpu_s += time.thread_time() - worked
        took = time.perf_counter() - began
        self.chunks += 1
        self.samples += samples
        self.busy_s += took
        self.longest_s = max(self.longest_s, took)
        self.under_runs += took > samples / self.sample_rate

    @property
    def cost(self) -> float:
        """Share of real time that the work took; above 1 it cannot keep up."""
        return self.busy_s * self.sample_rate / self.samples if self.samples else 0.0

    @property
    def cpu_share(self) -> float:
        """The same in time of the processor alone, without waiting for it."""
        return self.cpu_s * self.sample_rate / self.samples if self.samples else 0.0

    def to_dict(self) -> dict[str, Any]:
        """Plain values."""
        return {
            "duration_s": self.samples / self.sample_rate,
            "chunks": self.chunks,
            "under_runs": self.under_runs,
            "cost": self.cost,
            "cpu_share": self.cpu_share,
            "longest_chunk_ms": 1e3 * self.longest_s,
        }
