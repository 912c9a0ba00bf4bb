"""The forms of the room stage that run block by block, late by a fixed number of samples."""

from __future__ import annotations

from collections.abc import Callable

import numpy as np
from numpy.typing import NDArray

from unmix.errors import InputError
from unmix.room.chain import Look
from unmix.room.frames import RecursiveDereverberation
from unmix.room.low_latency import AdaptiveFilters
from unmix.room.stage import RoomReport
from unmix.settings import RoomSettings

__all__ = ["Aligned", "CausalStage", "asks_for_causal", "causal_stage"]

Floats = NDArray[np.float64]
CausalStage = AdaptiveFilters | RecursiveDereverberation


def asks_for_causal(settings: RoomSettings) -> bool:
    """Whether the settings ask for one of these forms."""
    return settings.low_latency is not None or (settings.prediction is not None and settings.prediction.recursive)


def causal_stage(
    settings: RoomSettings, look: Callable[[Floats], Look], *, sample_rate: float, channels: int, reference: int
) -> CausalStage:
    """The form that the settings ask for; ``look`` goes from frequencies in hertz to what the model knows there.

    Raises InputError for recursive prediction with parts that need whole segments.
    """
    if settings.low_latency is not None:
        return AdaptiveFilters(settings, look, sample_rate=sample_rate, reference=reference)
    if settings.refinement is not None or settings.post is not None:
        raise InputError(
            'room.prediction.recursive runs frame by frame, refinement and post do not: start from base = "dereverb"'
        )
    return RecursiveDereverberation(settings, look, sample_rate=sample_rate, channels=channels)


class Aligned:
    """A causal stage as a separator of recordings: what comes out is aligned with what went in.

    Drops the first ``latency`` samples and gives the rest at the end.

    where  from a time in seconds to the bearings then; None while nothing moves
    """

    def __init__(
        self,
        stage: CausalStage,
        *,
        sample_rate: float,
        where: Callable[[float], Look] | None = None,
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
