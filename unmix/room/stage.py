"""The room stage as one object: push chunks of a recording, get the talkers.

Segments of the recording are solved one after the other. Each starts from the previous one's separating matrix, is
processed together with some sound before it, and is cross-faded into it; the last one takes the remainder, so that no
segment is a sliver. What comes out, joined, has the recording's length and is aligned with it.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, field
from functools import partial
from typing import Any, Literal

import numpy as np
from numpy.typing import NDArray

from unmix.room.bands import Bands
from unmix.room.chain import STAGES, ChainResult, Look, run_chain
from unmix.room.judge import MOST_STRANGE, Verdict
from unmix.room.stft import Complexes, Transform
from unmix.settings import RoomSettings
from unmix.solvers.streaming import Separator

__all__ = ["LookAt", "RoomReport", "RoomStage", "SegmentReport", "Turned"]

Floats = NDArray[np.float64]
Fallback = Literal["none", "model", "silence"]

SHORTEST_S = 1.0
"""Recordings below this give no statistics: the model alone answers."""

FULL_QUALITY_S = 8.0
"""Recordings below this are refined from few frames."""


Turned = Callable[[float, float], float]
"""From start and stop in seconds to how far any talker's bearing turns between them, in degrees."""

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
    why: str = ""
    verdict: Verdict | None = None
    turned_deg: float = 0.0

    def to_dict(self) -> dict[str, Any]:
        """Plain values, as they stand in results."""
        judged = self.verdict
        return {
            "start_s": self.start_s,
            "stop_s": self.stop_s,
            "iterations": self.iterations,
            "cost_decrease": self.cost_decrease,
            "fallback": self.fallback,
            "why": self.why,
            "fit_gain_db": judged.fit_gain_db if judged is not None and np.isfinite(judged.fit_gain_db) else None,
            "stranger": None if judged is None else judged.stranger,
            "turned_deg": self.turned_deg,
        }


@dataclass(frozen=True)
class RoomReport:
    """What the stage did to the whole recording.

    shares    of each stage's change in the energy of all changes, by talker: {"prediction": (K,), ...}
    fallback  "none", "model" (everywhere the model alone), "model in part", or "silence"
    reasons   a line for each reason to fall back, with the time it holds for
    """

    segments: tuple[SegmentReport, ...]
    shares: dict[str, tuple[float, ...]]
    fallback: str
    latency_ms: float
    reasons: tuple[str, ...]
    warnings: tuple[str, ...]
    responses: Complexes | None = field(default=None, repr=False)

    def to_dict(self) -> dict[str, Any]:
        """Plain values, as they stand in results."""
        return {
            "fallback": self.fallback,
            "reasons": list(self.reasons),
            "latency_ms": self.latency_ms,
            "shares": {name: list(values) for name, values in self.shares.items()},
            "segments": [s.to_dict() for s in self.segments],
            "warnings": list(self.warnings),
        }


class RoomStage:
    """Push (channels, n) chunks, get (talkers, n') samples; flush gives the rest.

    model      separator of the model alone: what a segment falls back to
    look       called per segment with the stage's frequencies (hertz) and the segment's start and stop (seconds)
    reference  index of the reference channel
    turned     how far bearings turn between two times in seconds, in degrees; None while nothing moves
    workers    threads; the cores of the machine when None
    """

    def __init__(
        self,
        settings: RoomSettings,
        *,
        model: Separator,
        sample_rate: float,
        channels: int,
        talkers: int,
        reference: int,
        look: LookAt,
        turned: Turned | None = None,
        workers: int | None = None,
    ) -> None:
        self._settings, self._rate = settings, sample_rate
        self._talkers, self._reference = talkers, reference
        self._look, self._turned = look, turned
        self._transform = Transform.from_settings(settings.transform, sample_rate)
        self._bands = Bands(self._transform.frame // 2 + 1, workers=workers)
        parts = settings.segments
        self._length = round((parts.moving_length_s if turned else parts.length_s) * sample_rate)
        self._fade = round(parts.fade_s * sample_rate)
        self._context = max(self._fade, round(parts.context_s * sample_rate))
        self._held = np.zeros((channels, 0))
        self._model, self._modelled = model, np.zeros((talkers, 0))
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
        self._modelled = np.concatenate([self._modelled, self._model.push(chunk)], axis=1)
        ready = []
        while self._complete():
            ready.append(self._solve(self._length, last=False))
        return np.concatenate(ready, axis=1) if ready else np.zeros((self._talkers, 0))

    def flush(self) -> Floats:
        """The rest, after the last chunk."""
        self._modelled = np.concatenate([self._modelled, self._model.flush()], axis=1)
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
            reasons=tuple(self._reasons()),
            warnings=tuple(dict.fromkeys(self._warnings)),
            responses=self._responses,
        )

    @property
    def latency_s(self) -> float:
        """Algorithmic latency while streaming: a segment and the half that must follow it."""
        return 1.5 * self._length / self._rate

    def _complete(self) -> bool:
        """Whether a segment, the half that must follow it and the model's answer are there."""
        held = self._held.shape[1] - self._before >= self._length + self._length // 2
        return held and self._modelled.shape[1] - self._before >= self._length

    def _solve(self, samples: int, *, last: bool) -> Floats:
        """Process ``samples`` new samples with the context held before them; return what is final.

        The previous segment keeps back its last ``fade`` samples; this one's first samples fade in over them.
        """
        stop = self._before + samples
        talkers = self._process(self._held[:, :stop], self._modelled[:, :stop], samples)
        fade = self._tail.shape[1]
        talkers = talkers[:, self._before - fade :]
        if fade:
            ramp = (np.arange(fade) + 0.5) / fade
            talkers[:, :fade] = self._tail * (1.0 - ramp) + talkers[:, :fade] * ramp
        kept = talkers.shape[1] - (0 if last else min(self._fade, samples))
        self._tail = talkers[:, kept:].copy()
        self._at += samples
        drop = max(0, stop - self._context)
        self._before = stop - drop
        self._held = self._held[:, drop:].copy()
        self._modelled = self._modelled[:, drop:].copy()
        return talkers[:, :kept]

    def _process(self, stretch: Floats, modelled: Floats, samples: int) -> Floats:
        """The talkers of a stretch; ``modelled`` is what the model alone makes of it."""
        start_s, stop_s = self._at / self._rate, (self._at + samples) / self._rate
        turned = 0.0 if self._turned is None else self._turned(start_s, stop_s)
        note = partial(self._note, start_s, stop_s, turned_deg=turned)
        level = float(np.sqrt(np.mean(np.square(stretch))))
        if level == 0.0:
            note(fallback="silence")
            return np.zeros_like(modelled)
        if stretch.shape[1] < SHORTEST_S * self._rate:
            note(fallback="model", why=f"fewer than {SHORTEST_S:g} s give no statistics")
            return modelled.copy()
        most = self._settings.segments.most_turn_deg
        if turned > most:
            note(fallback="model", why=f"bearings turn by more than {most:g} degrees within one segment")
            return modelled.copy()
        result = self._refined(stretch / level, start_s, stop_s)
        self._shares += result.shares * level**2
        if result.talkers is None:
            note(result, fallback="model", why="the delays alone explain the recording as well as anything learned")
            return modelled.copy()
        out = self._transform.synthesise(result.talkers, stretch.shape[1], workers=self._bands.workers)
        if not np.isfinite(out).all():
            note(result, fallback="model", why="the statistics were singular beyond repair")
            self._warm = None
            return modelled.copy()
        note(result)
        return out.astype(np.float64) * level

    def _refined(self, stretch: Floats, start_s: float, stop_s: float) -> ChainResult:
        """Through the chain, started from the segment before."""
        x: Complexes = self._transform.analyse(stretch, workers=self._bands.workers)
        frequencies_hz = self._transform.frequencies_hz
        look = self._look(frequencies_hz, start_s, stop_s)
        # Rows learned where talkers stood a segment ago mislead once they have moved on.
        warm = None if self._turned else self._warm
        with self._bands.running() as bands:
            result = run_chain(x, look, self._settings, self._reference, bands, frequencies_hz, warm=warm)
        self._warm, self._responses = result.rows, result.responses
        return result

    def _note(
        self,
        start_s: float,
        stop_s: float,
        result: ChainResult | None = None,
        *,
        fallback: Fallback = "none",
        why: str = "",
        turned_deg: float = 0.0,
    ) -> None:
        refined = None if result is None else result.refined
        verdict = None if result is None else result.verdict
        if stop_s - start_s < FULL_QUALITY_S and refined is not None and self._turned is None:
            self._warnings.append(
                f"room stage: {stop_s - start_s:.1f} s are few to learn from; from {FULL_QUALITY_S:g} s on talkers "
                "come out better"
            )
        if verdict is not None and verdict.unnamed_voice:
            self._warnings.append(
                f"room stage: {100 * verdict.stranger:.0f} % of the power outside the talkers' paths follows none of "
                f"them (at most {100 * MOST_STRANGE:.0f} % is usual): somebody else speaks, or something else sounds; "
                "add the talker to the scene, or run `unmix locate`"
            )
        self._segments.append(
            SegmentReport(
                start_s=start_s,
                stop_s=stop_s,
                iterations=0 if refined is None else refined.iterations,
                cost_decrease=0.0 if refined is None else refined.cost[0] - refined.cost[-1],
                reverted_rows=0 if refined is None else refined.reverted,
                fallback=fallback,
                why=why,
                verdict=verdict,
                turned_deg=turned_deg,
            )
        )

    def _reasons(self) -> list[str]:
        """One line for each reason to fall back, with the time it holds for."""
        lines = []
        for why in dict.fromkeys(s.why for s in self._segments if s.fallback == "model"):
            those = [s for s in self._segments if s.why == why]
            seconds = sum(s.stop_s - s.start_s for s in those)
            lines.append(f"room stage: the model alone for {seconds:.1f} s from {those[0].start_s:.1f} s on: {why}")
        silent = [s for s in self._segments if s.fallback == "silence"]
        lines += [f"room stage: the recording is silent from {s.start_s:.1f} s to {s.stop_s:.1f} s" for s in silent]
        return lines
