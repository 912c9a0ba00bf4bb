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

__all__ = ["SEGMENT_S", "SegmentGains", "SegmentReference", "segment_gains"]

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


class SegmentReference:
    """The reference's side, computed once for any number of signals.

    Parameters
    ----------
    reference : (samples,)
    sample_rate : int
        In hertz.
    """

    def __init__(self, reference: Signals, sample_rate: int) -> None:
        self._length = round(SEGMENT_S * sample_rate)
        starts = np.arange(0, reference.size - self._length + 1, self._length)
        speaks = _speaks(reference, starts, self._length, sample_rate)
        spoken = [int(s) for s, so in zip(starts, speaks, strict=True) if so]
        self._silent = len(starts) - len(spoken)
        if len(spoken) > MOST_SEGMENTS:
            spoken = [spoken[i] for i in np.linspace(0, len(spoken) - 1, MOST_SEGMENTS).round().astype(int)]
        self._starts = spoken
        self._speech = [SpeechReference(reference[s : s + self._length], sample_rate) for s in spoken]

    def figures(self, signal: Signals) -> Floats:
        """STOI and ESTOI of `signal` (samples,), aligned with the reference, in each segment: (segments, 2).

        NaN where they are undefined.
        """
        heard = [
            speech.compare(signal[s : s + self._length]) for s, speech in zip(self._starts, self._speech, strict=True)
        ]
        return np.array([(h.stoi, h.estoi) for h in heard], dtype=np.float64).reshape(-1, 2)

    def gains(self, after: Floats, before: Floats) -> SegmentGains:
        """Gains from what `figures` gave for two signals."""
        gains = after - before
        table = gains[np.isfinite(gains).all(axis=1)]
        stoi, estoi = mean_intervals(table)
        return SegmentGains(SEGMENT_S, len(table), self._silent, stoi, estoi)


def segment_gains(reference: Signals, after: Signals, before: Signals, sample_rate: int) -> SegmentGains:
    """Gains of `after` over `before`, both (samples,) and aligned with the reference."""
    segments = SegmentReference(reference, sample_rate)
    return segments.gains(segments.figures(after), segments.figures(before))


def _speaks(reference: Signals, starts: NDArray[np.intp], length: int, sample_rate: int) -> list[bool]:
    size = max(1, round(FRAME_S * sample_rate))
    frames = reference[: reference.size // size * size].reshape(-1, size)
    power = np.einsum("fn,fn->f", frames, frames, dtype=np.float64)
    loud = power > power.max(initial=0.0) * 10.0 ** (-BELOW_DB / 10.0)
    counts = [np.count_nonzero(loud[s // size : (s + length) // size]) for s in starts]
    return [bool(count * FRAME_S >= LEAST_SPEECH_S) for count in counts]
