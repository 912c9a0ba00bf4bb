"""Levels over time, read chunk by chunk: who speaks when, and which stretch is worth listening to."""

from __future__ import annotations

from collections.abc import Iterable

import numpy as np
from numpy.typing import NDArray

from unmix.audio import Recording, Samples
from unmix.bearings.activity import active_stretches

__all__ = ["STEP_S", "frame_powers", "level_db", "spoken", "telling_stretch"]

Floats = NDArray[np.float64]

STEP_S = 0.05
"""Length of the frames whose powers are kept."""
BELOW_DB = 30.0
"""A talker speaks where the level is at most this far below their loud speech (its 95th percentile)."""
FLOOR_DB = -100.0


def frame_powers(recording: Recording | Samples, channel: int = 0) -> Floats:
    """Mean square of each frame of `STEP_S` of one channel: (frames,). Memory does not grow with the samples."""
    step = max(1, round(STEP_S * recording.sample_rate))
    return np.concatenate(list(_powers((chunk[channel] for chunk in recording.chunks()), step)))


def _powers(chunks: Iterable[Floats], step: int) -> Iterable[Floats]:
    left = np.empty(0)
    for chunk in chunks:
        joined = np.concatenate([left, chunk])
        whole = len(joined) // step * step
        yield np.square(joined[:whole].reshape(-1, step)).mean(axis=1)
        left = joined[whole:]
    if len(left):
        yield np.array([np.square(left).mean()])


def level_db(powers: Floats) -> Floats:
    """Powers as levels in dB re full scale, not below -100."""
    return np.asarray(10.0 * np.log10(np.maximum(powers, 10.0 ** (FLOOR_DB / 10.0))))


def spoken(powers: Floats) -> list[tuple[float, float]]:
    """Stretches (start, stop) in seconds in which a signal with these frame powers is speech; none for silence."""
    levels = level_db(powers)
    loud = float(np.percentile(levels, 95.0)) if len(levels) else FLOOR_DB
    if loud <= FLOOR_DB + BELOW_DB:
        return []
    time_s: Floats = (np.arange(len(levels), dtype=np.float64) + 0.5) * STEP_S
    return active_stretches(time_s, levels > loud - BELOW_DB, STEP_S)


def telling_stretch(powers: Floats, length_s: float) -> tuple[float, float]:
    """The stretch of at most `length_s` in which the least audible talker has most to say.

    powers  (talkers, frames)
    """
    frames = powers.shape[1]
    length = min(frames, max(1, round(length_s / STEP_S)))
    levels = level_db(powers)
    speaking = levels > (np.percentile(levels, 95.0, axis=1) - BELOW_DB)[:, None]
    sums = np.cumsum(np.pad(speaking, ((0, 0), (1, 0))), axis=1)
    in_window: Floats = (sums[:, length:] - sums[:, :-length]).min(axis=0)
    start = int(np.argmax(in_window))
    return start * STEP_S, (start + length) * STEP_S
