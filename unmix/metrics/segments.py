"""Gains in STOI and ESTOI over segments of 3 s, with intervals; segments in which the talker is silent are left out.

An interval over segments says how much the gain varies along this recording. Neighbouring segments are not quite
independent, and another recording is another matter: for that, intervals over scenes are needed (`unmix batch`).
"""

from __future__ import annotations

from dataclasses import asdict, dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from unmix.metrics.intelligibility import SpeechReference
from unmix.metrics.intervals import Interval, mean_intervals

__all__ = ["SEGMENT_S", "SegmentGains", "segment_gains"]

Floats = NDArray[np.float64]
Signals = NDArray[np.floating[Any]]

SEGMENT_S = 3.0
FRAME_S = 0.02
BELOW_DB = 40.0
LEAST_SPEECH_S = 0.75
"""A segment needs so much speech, counted in frames less than 40 dB below the talker's loudest."""
MOST_SEGMENTS = 400
"""Of a longer recording so many segments are looked at, spread evenly."""


@dataclass(frozen=True)
class SegmentGains:
    """Gains over segments: `used` of them, `silent` ones left out."""

    length_s: float
    used: int
    silent: int
    stoi: Interval
    estoi: Interval

    def to_dict(self) -> dict[str, Any]:
        """Plain values for JSON."""
        return asdict(self)

    @classmethod
    def from_dict(cls, tree: dict[str, Any]) -> SegmentGains:
        """What `to_dict` made, back again."""
        return cls(**tree | {name: Interval(**tree[name]) for name in ("stoi", "estoi")})


def segment_gains(reference: Signals, after: Signals, before: Signals, sample_rate: int) -> SegmentGains:
    """Gains of `after` over `before`, both (samples,) and aligned with the reference."""
    length = round(SEGMENT_S * sample_rate)
    starts = np.arange(0, reference.size - length + 1, length)
    spoken = [s for s, speaks in zip(starts, _speaks(reference, starts, length, sample_rate), strict=True) if speaks]
    if len(spoken) > MOST_SEGMENTS:
        spoken = [spoken[i] for i in np.linspace(0, len(spoken) - 1, MOST_SEGMENTS).round().astype(int)]
    gains = [g for s in spoken if (g := _gains(reference, after, before, slice(s, s + length), sample_rate))]
    table = np.array(gains, dtype=np.float64).reshape(-1, 2)
    stoi, estoi = mean_intervals(table)
    return SegmentGains(SEGMENT_S, len(gains), len(starts) - len(spoken), stoi, estoi)


def _speaks(reference: Signals, starts: NDArray[np.intp], length: int, sample_rate: int) -> list[bool]:
    size = max(1, round(FRAME_S * sample_rate))
    frames = reference[: reference.size // size * size].reshape(-1, size)
    power = np.einsum("fn,fn->f", frames, frames, dtype=np.float64)
    loud = power > power.max(initial=0.0) * 10.0 ** (-BELOW_DB / 10.0)
    counts = [np.count_nonzero(loud[s // size : (s + length) // size]) for s in starts]
    return [bool(count * FRAME_S >= LEAST_SPEECH_S) for count in counts]


def _gains(
    reference: Signals, after: Signals, before: Signals, part: slice, sample_rate: int
) -> tuple[float, float] | None:
    speech = SpeechReference(reference[part], sample_rate)
    late, early = speech.compare(after[part]), speech.compare(before[part])
    if late.stoi is None or early.stoi is None or late.estoi is None or early.estoi is None:
        return None
    return late.stoi - early.stoi, late.estoi - early.estoi
