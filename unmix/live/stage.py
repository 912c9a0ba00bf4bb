"""What a live separator runs on.

A stage is causal and has a fixed latency: it hands back as many samples as it takes, and sample t of what it hands
back belongs to sample t - latency of the recording.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from typing import Any, Protocol

import numpy as np
from numpy.typing import NDArray

from unmix.physics import wrapped
from unmix.scene import Talker

__all__ = ["LiveStage", "State", "turn"]

Floats = NDArray[np.float64]
State = dict[str, NDArray[Any]]
"""Plain arrays by name: all that a stage needs to go on where it stopped."""


class LiveStage(Protocol):
    """Turns (channels, n) samples into (talkers, n), late by `latency` samples; memory and work per sample constant."""

    @property
    def latency(self) -> int:
        """Samples by which what comes out is late."""

    @property
    def talkers(self) -> int:
        """Number of talkers."""

    def push(self, chunk: Floats) -> Floats:
        """Take (channels, n) finite samples, n of any size; return (talkers, n)."""

    def flush(self) -> Floats:
        """The last `latency` samples, as if silence followed; the stage then stands at the start of a new stream."""

    def prepare(self, talkers: Sequence[Talker]) -> Callable[[], None]:
        """Get ready for other bearings and return what changes over to them without a click.

        This takes its time, changes nothing, and may run in another thread; what it returns takes next to none. Raises
        UnsolvableError when it cannot.
        """

    def state(self) -> State:
        """Everything that depends on what was pushed."""

    def restore(self, state: State) -> None:
        """Go on from a state; raises KeyError or ValueError when it is not one of this stage's."""


def turn(old: Talker, new: Talker) -> float:
    """By how many radians a talker has turned: azimuth or elevation, whichever turned more."""
    around = abs(float(wrapped((new.azimuth or 0.0) - (old.azimuth or 0.0))))
    return max(around, abs(new.elevation - old.elevation))
