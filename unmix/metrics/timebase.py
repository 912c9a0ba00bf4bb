"""One time for references, microphones and estimates.

Time runs by the recording. Each reference is moved to where its talker is heard at the unprocessed microphone, then
each estimate by what it is late or early beyond that, to a fraction of a sample. Without the recording, the estimates
set the time.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from unmix.metrics.alignment import Offset, OffsetFinder, advance

__all__ = ["Matched", "Span", "Timebase", "clarity"]

Floats = NDArray[np.float64]
Signals = NDArray[np.floating[Any]]
Matched = list[int | None]
GRID_S = 0.064
"""Stretches start on this grid, five frames of STOI long, whose figures change with where frames begin."""
LONG_S = 600.0
"""Longer signals are kept in single precision once moved (rounded at -150 dB of each sample), not to fill memory."""
Offsets = dict[tuple[int, int], Offset]


@dataclass(frozen=True)
class Span:
    """Where each reference goes, in samples, and the stretch in which every moved signal has samples."""

    bases: tuple[float, ...]
    start: int
    stop: int


class Timebase:
    """Places references and estimates in time.

    Parameters
    ----------
    references : (references, samples)
    sample_rate : int
        In hertz.
    unprocessed : (samples,), optional
        The reference microphone.
    guard : int
        Moves up to this many samples do not shorten the stretch graded.
    max_offset_s : float
        How far offsets are searched.

    Attributes
    ----------
    finders : list of OffsetFinder
        One per reference.
    precision : type
        Of signals once they are moved.
    heard : list of Offset, or None
        By how much the microphone is behind each reference; None without a microphone.
    """

    def __init__(
        self,
        references: Signals,
        sample_rate: int,
        *,
        unprocessed: Signals | None,
        guard: int,
        max_offset_s: float,
    ) -> None:
        self.guard = guard
        self._grid = GRID_S * sample_rate
        self.precision = np.float32 if references.shape[1] > LONG_S * sample_rate else np.float64
        self.finders = [OffsetFinder(s, sample_rate, max_offset_s=max_offset_s) for s in references]
        self.heard = None if unprocessed is None else [finder.find(unprocessed) for finder in self.finders]

    def offsets(self, estimates: Signals, matched: Matched | None) -> Offsets:
        """Offset of each matched estimate behind its reference, or of every pair; keyed (estimate, reference)."""
        pairs = (
            np.ndindex(len(estimates), len(self.finders))
            if matched is None
            else ((e, k) for k, e in enumerate(matched) if e is not None)
        )
        return {(e, k): self.finders[k].find(estimates[e]) for e, k in pairs}

    def align(self, estimates: Signals, offsets: Offsets, matched: Matched) -> tuple[Span, Signals]:
        """The time to grade by, and the estimates moved to it and cut, (estimates, stop - start)."""
        behind = {k: offsets[e, k].samples for k, e in enumerate(matched) if e is not None}
        bases = self._bases(behind)
        latencies = np.zeros(len(estimates))
        for k, e in enumerate(matched):
            offset = behind.get(k)
            if e is not None and offset is not None:
                latencies[e] = offset - bases[k]
        span = self._span(bases, latencies, estimates.shape[1])
        moved = np.empty((len(estimates), span.stop - span.start), dtype=self.precision)
        for row, e, latency in zip(moved, estimates, latencies, strict=True):
            advance(e, span.start + latency, out=row)
        return span, moved

    def _bases(self, behind: dict[int, float | None]) -> tuple[float, ...]:
        """Where each reference goes: to its talker at the microphone, else by its estimate, else where it is."""
        heard = [None if self.heard is None else self.heard[k].samples for k in range(len(self.finders))]
        latencies = [late - at for k, at in enumerate(heard) if at is not None and (late := behind.get(k)) is not None]
        latency = float(np.median(latencies)) if latencies else 0.0
        bases = []
        for k, at in enumerate(heard):
            late = behind.get(k)
            bases.append(at if at is not None else 0.0 if late is None else late - latency)
        return tuple(bases)

    def _span(self, bases: tuple[float, ...], latencies: Floats, samples: int) -> Span:
        moves = [-base for base in bases] + [float(latency) for latency in latencies]
        first = max([0.0] + [-move for move in moves if move < -self.guard])
        start = round(np.ceil(first / self._grid) * self._grid)
        stop = min([samples] + [int(np.floor(samples - move)) for move in moves if move > self.guard])
        return Span(bases, start, stop) if start < stop else Span(bases, 0, samples)


def clarity(offsets: Offsets) -> Floats:
    """How clearly each estimate resembles each reference: (estimates, references)."""
    clear = np.zeros(tuple(np.max(list(offsets), axis=0) + 1))
    for pair, offset in offsets.items():
        clear[pair] = offset.clarity
    return clear
