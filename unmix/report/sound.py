"""Sound for the page: a stretch of every signal, level-matched, as FLAC that the page carries inside itself."""

from __future__ import annotations

import base64
import io
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from unmix.report.loudness import loudness

__all__ = ["BASE64", "Sound", "encode", "matched_levels", "most_seconds"]

Floats = NDArray[np.float64]

TARGET = -26.0
"""Loudness everything is brought to, in dB re full scale; lower where a peak would go beyond full scale."""
PEAK = 10.0 ** (-1.0 / 20.0)
BASE64 = 4.0 / 3.0
BYTES_PER_SAMPLE = 1.5
"""What a 16-bit sample of speech takes as FLAC, on the safe side; measured 1.0 to 1.4."""


@dataclass(frozen=True)
class Sound:
    """One signal as the page plays it.

    data        FLAC, 16 bits, as base64; its peak lies 1 dB below full scale
    matched     gain that brings the stored signal to the common loudness
    as_it_was   gain that brings it back to the level it had
    """

    data: str
    matched: float
    as_it_was: float


def matched_levels(signals: Sequence[Floats], sample_rate: int) -> list[float]:
    """Gain for each (samples,) that makes all equally loud (ITU-R BS.1770-4) without any going beyond full scale.

    Loudness is measured at full scale: what the standard counts as silence is far below a programme's level, and a
    recording may be that quiet as a whole.
    """
    gains = []
    for signal in signals:
        peak = float(np.abs(signal).max(initial=0.0))
        found = loudness(signal / peak, sample_rate) if peak > 0.0 else None
        gains.append(1.0 if found is None else float(10.0 ** ((TARGET - found) / 20.0)) / peak)
    peaks = [g * float(np.abs(s).max(initial=0.0)) for g, s in zip(gains, signals, strict=True)]
    down = min(1.0, PEAK / max(*peaks, 1e-12))
    return [g * down for g in gains]


def encode(signal: Floats, sample_rate: int, matched: float) -> Sound:
    """One signal of (samples,) for the page; `matched` is its gain of `matched_levels`."""
    import soundfile

    peak = float(np.abs(signal).max(initial=0.0))
    up = PEAK / peak if peak > 0.0 else 1.0
    stream = io.BytesIO()
    soundfile.write(stream, signal * up, sample_rate, format="FLAC", subtype="PCM_16")
    return Sound(base64.b64encode(stream.getvalue()).decode("ascii"), matched / up, 1.0 / up)


def most_seconds(megabytes: float, signals: int, sample_rate: int) -> float:
    """How long a stretch of so many signals fits into so many megabytes."""
    return megabytes * 1e6 / (BASE64 * BYTES_PER_SAMPLE * sample_rate * max(1, signals))
