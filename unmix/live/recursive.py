"""A separator that adapts as it goes, as a live stage: its output held to one constant latency.

Such separators work on frames: they hand out nothing for some chunks and a whole frame for others, aligned with the
recording. Here as many samples leave as come in, each exactly `latency` samples after its own place.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from typing import Any, Protocol

import numpy as np
from numpy.typing import NDArray

from unmix.live.stage import State
from unmix.scene import Talker

__all__ = ["Recursive", "RecursiveStage"]

Floats = NDArray[np.float64]


class Recursive(Protocol):
    """What a separator must have to run live: what `unmix.solvers.streaming.Separator` has, and more.

    latency_samples  most samples by which what is handed out lags behind what was pushed
    """

    @property
    def latency_samples(self) -> int: ...

    def push(self, chunk: Floats) -> Floats:
        """Take (channels, n) samples; return the (talkers, n') samples that are ready."""

    def flush(self) -> Floats:
        """The rest, after the last chunk."""

    def state(self) -> dict[str, NDArray[Any]]:
        """Everything that depends on what was pushed."""

    def restore(self, state: dict[str, NDArray[Any]]) -> None:
        """Go on from a state."""


class RecursiveStage:
    """A recursive separator with as many samples out as in.

    make   a separator at the start of a stream, for talkers at their bearings
    steer  tells a running separator of other bearings; None where it cannot be told
    """

    def __init__(
        self,
        make: Callable[[Sequence[Talker]], Recursive],
        talkers: Sequence[Talker],
        *,
        channels: int,
        steer: Callable[[Recursive, Sequence[Talker]], None],
    ) -> None:
        self._make, self._steer = make, steer
        self._seats = tuple(talkers)
        self._inner = make(talkers)
        self.latency = self._inner.latency_samples
        self.talkers, self.channels = len(talkers), channels
        self._ready = np.zeros((self.talkers, self.latency))

    def push(self, chunk: Floats) -> Floats:
        """Take (channels, n) samples; return (talkers, n), late by `latency`."""
        ready = np.concatenate([self._ready, self._inner.push(chunk)], axis=1)
        count = chunk.shape[1]
        if ready.shape[1] < count:
            raise RuntimeError(f"the separator is {count - ready.shape[1]} samples later than it says")
        self._ready = ready[:, count:].copy()
        return ready[:, :count]

    def flush(self) -> Floats:
        """The last `latency` samples; the next stream starts anew, at the bearings that were told last."""
        rest = np.concatenate([self._ready, self._inner.flush()], axis=1)[:, : self.latency]
        self._inner = self._make(self._seats)
        self._ready = np.zeros((self.talkers, self.latency))
        return rest

    def steer(self, talkers: Sequence[Talker]) -> None:
        """Tell the separator of other bearings."""
        self._steer(self._inner, talkers)
        self._seats = tuple(talkers)

    def state(self) -> State:
        """The separator's state and what is ready to leave."""
        inner = {f"inner.{name}": value for name, value in self._inner.state().items()}
        return {"ready": self._ready.copy(), **inner}

    def restore(self, state: State) -> None:
        """Go on from a state."""
        ready = state["ready"]
        self._inner.restore({n.removeprefix("inner."): v for n, v in state.items() if n.startswith("inner.")})
        self._ready = ready.copy()
