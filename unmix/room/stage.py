"""The room stage as one object: push chunks of a recording, get the talkers.

Segments of the recording are solved one after the other. Each starts from the previous one's separating matrix, is
processed together with some sound before it, and is cross-faded into it; the last one takes the remainder, so that no
segment is a sliver. What comes out, joined, has the recording's length and is aligned with it.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, field
from typing import Any, Literal

import numpy as np
from numpy.typing import NDArray

from unmix.room.bands import Bands
from unmix.room.chain import STAGES, ChainResult, Start, run_chain
from unmix.room.stft import Complexes, Reals, Transform
from unmix.settings import RoomSettings

__all__ = ["Look", "RoomReport", "RoomStage", "SegmentReport"]

Floats = NDArray[np.float64]
Fallback = Literal["none", "model", "silence"]

SHORTEST_S = 1.0
"""Recordings below this give no statistics: the model alone answers."""

FULL_QUALITY_S = 8.0
"""Recordings below this are refined from few frames."""


@dataclass(frozen=True)
class Look:
    """What the model knows of the talkers at the stage's frequencies.

    rows       (frequencies, K, M): separating matrix of the constrained solution
    responses  (frequencies, M, K): relative responses of the bearings, one at the reference channel
    """

    rows: Complexes
    responses: Complexes


LookAt = Callable[[NDArray[np.float64], float, float], Look]
"""From frequencies in hertz and a stretch of the recording, start and stop in seconds, to what the model knows."""


@dataclass(frozen=True)
class SegmentReport:
    """What happened in one segment."""

    start_s: float
    stop_s: float
    iterations: int
    cost_decrease: float
    reverted_rows: int
    fallback: Fallback


@dataclass(frozen=True)
class RoomReport:
    """What the stage did to the whole recording.

    shares    of each stage's change in the energy of all changes, by talker: {"prediction": (K,), ...}
    fallback  "none", "model" (everywhere the model alone), "model in part", or "silence"
    """

    segments: tuple[SegmentReport, ...]
    shares: dict[str, tuple[float, ...]]
    fallback: str
    latency_ms: float
    warnings: tuple[str, ...]
    responses: Complexes | None = field(default=None, repr=False)

    def to_dict(self) -> dict[str, Any]:
        """Plain values, as they stand in results."""
        return {
            "fallback": self.fallback,
            "latency_ms": self.latency_ms,
            "shares": {name: list(values) for name, values in self.shares.items()},
            "segments": [
                {
                    "start_s": s.start_s,
                    "stop_s": s.stop_s,
                    "iterations": s.iterations,
                    "cost_decrease": s.cost_decrease,
                    "fallback": s.fallback,
                }
                for s in self.segments
            ],
            "warnings": list(self.warnings),
        }


class RoomStage:
    """Push (channels, n) chunks, get (talkers, n') samples; flush gives the rest.

    look       called per segment with the stage's frequencies (hertz) and the segment's start and stop (seconds)
    reference  index of the reference channel
    workers    threads; the cores of the machine when None
    """

    def __init__(
        self,
        settings: RoomSettings,
        *,
        sample_rate: float,
        channels: int,
        talkers: int,
        reference: int,
        look: LookAt,
        workers: int | None = None,
    ) -> None:
        self._settings, self._rate = settings, sample_rate
        self._channels, self._talkers, self._reference = channels, talkers, reference
        self._look = look
        self._transform = Transform.from_settings(settings.transform, sample_rate)
        self._bands = Bands(self._transform.frame // 2 + 1, workers=workers)
        parts = settings.segments
        self._length = round(parts.length_s * sample_rate)
        self._fade = round(parts.fade_s * sample_rate)
        self._context = max(self._fade, round(parts.context_s * sample_rate))
        self._held = np.zeros((channels, 0))
        self._before = 0
        self._tail = np.zeros((talkers, 0))
        self._at = 0
        self._warm: Complexes | None = None
        self._responses: Complexes | None = None
        self._shares = np.zeros((len(STAGES), talkers))
        self._segments: list[SegmentReport] = []
        self._warnings: list[str] = []

    def push(self, chunk: Floats) -> Floats:
        """Take (channels, n) samples; return the (talkers, n') samples that are ready."""
        self._held = np.concatenate([self._held, chunk], axis=1)
        ready = []
        while self._held.shape[1] - self._before >= self._length + self._length // 2:
            ready.append(self._solve(self._length, last=False))
        return np.concatenate(ready, axis=1) if ready else np.zeros((self._talkers, 0))

    def flush(self) -> Floats:
        """The rest, after the last chunk."""
        rest = self._held.shape[1] - self._before
        if rest > 0:
            return self._solve(rest, last=True)
        out, self._tail = self._tail, self._tail[:, :0]
        return out

    def report(self) -> RoomReport:
        """What was done up to now."""
        total = self._shares.sum(axis=0)
        share = self._shares / np.where(total > 0.0, total, 1.0)
        kinds = {s.fallback for s in self._segments}
        fallback = "none" if kinds <= {"none"} else kinds.pop() if len(kinds) == 1 else "model in part"
        return RoomReport(
            segments=tuple(self._segments),
            shares={name: tuple(float(v) for v in share[i]) for i, name in enumerate(STAGES)},
            fallback=fallback,
            latency_ms=self.latency_s * 1e3,
            warnings=tuple(dict.fromkeys(self._warnings)),
            responses=self._responses,
        )

    @property
    def latency_s(self) -> float:
        """Algorithmic latency while streaming: a segment and the half that must follow it."""
        return 1.5 * self._length / self._rate

    def _solve(self, samples: int, *, last: bool) -> Floats:
        """Process ``samples`` new samples with the context held before them; return what is final.

        The previous segment keeps back its last ``fade`` samples; this one's first samples fade in over them.
        """
        stretch = self._held[:, : self._before + samples]
        talkers = self._process(stretch, samples)
        fade = self._tail.shape[1]
        talkers = talkers[:, self._before - fade :]
        if fade:
            ramp = (np.arange(fade) + 0.5) / fade
            talkers[:, :fade] = self._tail * (1.0 - ramp) + talkers[:, :fade] * ramp
        keep_back = 0 if last else min(self._fade, samples)
        stop = talkers.shape[1] - keep_back
        self._tail = talkers[:, stop:].copy()
        self._at += samples
        drop = max(0, self._before + samples - self._context)
        self._before = self._before + samples - drop
        self._held = self._held[:, drop:].copy()
        return talkers[:, :stop]

    def _process(self, stretch: Reals, samples: int) -> NDArray[np.float64]:
        start_s, stop_s = self._at / self._rate, (self._at + samples) / self._rate
        level = float(np.sqrt(np.mean(np.square(stretch))))
        if level == 0.0:
            self._note(start_s, stop_s, None, "silence")
            self._warnings.append(f"room stage: the recording is silent from {start_s:.1f} s to {stop_s:.1f} s")
            return np.zeros((self._talkers, stretch.shape[1]))
        x: Complexes = self._transform.analyse(stretch / level, workers=self._bands.workers)
        look = self._look(self._transform.frequencies_hz, start_s, stop_s)
        spectra: Complexes
        short = stretch.shape[1] < SHORTEST_S * self._rate
        if short:
            self._warnings.append(
                f"room stage: {stretch.shape[1] / self._rate:.2f} s are too short to refine; "
                f"{SHORTEST_S:g} s are needed ({FULL_QUALITY_S:g} s for full quality): the model alone"
            )
            spectra, result = look.rows.astype(x.dtype) @ x, None
        else:
            start = Start(look.rows, look.responses.astype(x.dtype), self._warm)
            with self._bands.running() as bands:
                result = run_chain(x, start, self._settings, self._reference, bands)
            spectra = result.talkers
            self._warm = result.rows
            self._responses = result.responses
            self._shares += result.shares * level**2
        self._note(start_s, stop_s, result, "model" if short else "none")
        out = self._transform.synthesise(spectra, stretch.shape[1], workers=self._bands.workers)
        return out.astype(np.float64) * level

    def _note(self, start_s: float, stop_s: float, result: ChainResult | None, fallback: Fallback) -> None:
        refined = None if result is None else result.refined
        self._segments.append(
            SegmentReport(
                start_s=start_s,
                stop_s=stop_s,
                iterations=0 if refined is None else refined.iterations,
                cost_decrease=0.0 if refined is None else refined.cost[0] - refined.cost[-1],
                reverted_rows=0 if refined is None else refined.reverted,
                fallback=fallback,
            )
        )
