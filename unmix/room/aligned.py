"""A causal stage of fixed latency as a separator of recordings: what comes out is aligned with what went in."""

from __future__ import annotations

from collections.abc import Callable
from typing import Protocol

import numpy as np
from numpy.typing import NDArray

from unmix.room.low_latency import Bearings
from unmix.room.stage import RoomReport

__all__ = ["Aligned", "Causal"]

Floats = NDArray[np.float64]


class Causal(Protocol):
    """As many samples out as in; sample t of what comes out belongs to t - latency."""

    @property
    def latency(self) -> int:
        """Samples by which what comes out is late."""

    def push(self, chunk: Floats) -> Floats:
        """Take (channels, n) samples; return (talkers, n)."""

    def flush(self) -> Floats:
        """The last ``latency`` samples."""

    def follow(self, bearings: Bearings) -> None:
        """Bearings that have moved on a little."""


class Aligned:
    """Drops the first ``latency`` samples and gives the rest at the end.

    where  from a time in seconds to the bearings then; None while nothing moves
    """

    def __init__(
        self,
        stage: Causal,
        *,
        sample_rate: float,
        where: Callable[[float], Bearings] | None = None,
        every_s: float = 0.25,
    ) -> None:
        self._stage, self._rate = stage, sample_rate
        self._drop = stage.latency
        self._where, self._every = where, max(1, round(every_s * sample_rate))
        self._at = 0

    def push(self, chunk: Floats) -> Floats:
        """Take (channels, n) samples; return the (talkers, n') samples that are ready."""
        ready = []
        while chunk.shape[1]:
            if self._where is not None and self._at % self._every == 0 and self._at:
                self._stage.follow(self._where(self._at / self._rate))
            n = min(chunk.shape[1], self._every - self._at % self._every)
            ready.append(self._kept(self._stage.push(chunk[:, :n])))
            self._at += n
            chunk = chunk[:, n:]
        return np.concatenate(ready, axis=1) if ready else self._stage.push(chunk)

    def flush(self) -> Floats:
        """The rest, after the last chunk."""
        return self._kept(self._stage.flush())

    def report(self) -> RoomReport:
        """What was done: nothing is judged, nothing falls back."""
        latency_ms = 1e3 * self._stage.latency / self._rate
        return RoomReport(segments=(), shares={}, fallback="none", latency_ms=latency_ms, reasons=(), warnings=())

    def _kept(self, talkers: Floats) -> Floats:
        n = min(self._drop, talkers.shape[1])
        self._drop -= n
        return talkers[:, n:]
