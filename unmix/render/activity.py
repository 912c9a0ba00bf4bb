"""When talkers speak, from their clean signals."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
from numpy.typing import NDArray

__all__ = ["quiet_stretches", "speech_stretches"]

Floats = NDArray[np.float64]
Stretches = list[tuple[float, float]]

_FRAME_S = 0.02
_BELOW_DB = 40.0
_SHORTEST_S = 0.3


def speech_stretches(signal: Floats, sample_rate: int) -> Stretches:
    """Stretches in seconds where ``signal`` (samples,) is less than 40 dB below its loudest 20 ms frame.

    Pauses shorter than 0.3 s belong to the stretch about them.
    """
    size = max(1, round(_FRAME_S * sample_rate))
    frames = -(-signal.size // size)
    padded = np.zeros(frames * size)
    padded[: signal.size] = signal
    power = np.mean(padded.reshape(frames, size) ** 2, axis=1)
    if not power.any():
        return []
    active = power > power.max() * 10.0 ** (-_BELOW_DB / 10.0)
    edges = np.flatnonzero(np.diff(np.concatenate([[False], active, [False]]).astype(np.int8)))
    found: Stretches = []
    for start, stop in edges.reshape(-1, 2) * size / sample_rate:
        if found and start - found[-1][1] < _SHORTEST_S:
            found[-1] = (found[-1][0], float(stop))
        else:
            found.append((float(start), float(stop)))
    end = signal.size / sample_rate
    return [(round(start, 3), round(min(stop, end), 3)) for start, stop in found]


def quiet_stretches(spoken: Sequence[Stretches], duration_s: float, *, ring_s: float) -> Stretches:
    """Stretches of at least 0.3 s without any talker, ``ring_s`` after the last word and later."""
    free_from, quiet = 0.0, []
    for start, stop in sorted(stretch for stretches in spoken for stretch in stretches):
        if start - free_from >= _SHORTEST_S:
            quiet.append((round(free_from, 3), round(start, 3)))
        free_from = max(free_from, stop + ring_s)
    if duration_s - free_from >= _SHORTEST_S:
        quiet.append((round(free_from, 3), round(duration_s, 3)))
    return quiet
