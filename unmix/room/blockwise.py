"""Chunks of any size into blocks of one: what the forms of fixed latency share."""

from __future__ import annotations

from abc import ABC, abstractmethod

import numpy as np
from numpy.typing import NDArray

__all__ = ["Blockwise"]

Floats = NDArray[np.float64]


class Blockwise(ABC):
    """Causal, of fixed latency: as many samples out as in, and sample t of what comes out belongs to t - latency.

    Samples come in chunks of any size; what comes out does not depend on how they were cut. Memory is constant.

    _in   (channels, n) samples that wait for their block to fill
    _out  (talkers, n) samples that wait to be asked for: one block at first, so that a push never lacks any
    """

    _in: Floats
    _out: Floats

    @property
    @abstractmethod
    def block(self) -> int:
        """Samples in a block."""

    @property
    @abstractmethod
    def latency(self) -> int:
        """Samples by which what comes out is late."""

    @abstractmethod
    def _step(self, block: Floats) -> Floats:
        """One block (channels, block) in, one of talkers (talkers, block) out."""

    @abstractmethod
    def _begin(self) -> None:
        """The start of a stream."""

    def push(self, chunk: Floats) -> Floats:
        """Take (channels, n) samples; return (talkers, n)."""
        self._in = np.concatenate([self._in, chunk], axis=1)
        ready = [self._out]
        while self._in.shape[1] >= self.block:
            ready.append(self._step(self._in[:, : self.block]))
            self._in = self._in[:, self.block :]
        out = np.concatenate(ready, axis=1)
        self._out = out[:, chunk.shape[1] :]
        return out[:, : chunk.shape[1]]

    def flush(self) -> Floats:
        """The last ``latency`` samples, as if silence followed; the stage then stands at the start of a new stream."""
        rest = self.push(np.zeros((len(self._in), self.latency)))
        self._begin()
        return rest
