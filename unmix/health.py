"""What a glance at the samples tells of each channel, gathered while a job reads them anyway."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

__all__ = ["ChannelHealth"]

Floats = NDArray[np.float64]

SILENT_DBFS = -120.0
"""Peak below which a channel counts as silent: under half a step of 20-bit samples."""
_SAME = 1e-12
_FULL = 0.999
"""Magnitude from which three samples in a row count as clipped."""


class ChannelHealth:
    """Peaks, clipped runs and the Gram matrix of the channels over all chunks; `findings` puts them into words."""

    def __init__(self, channels: int) -> None:
        self._peak = np.zeros(channels)
        self._gram = np.zeros((channels, channels))
        self._clipped = np.zeros(channels, np.int64)

    def add(self, chunk: Floats) -> None:
        """Take in (channels, samples)."""
        peak = np.maximum(chunk.max(axis=1, initial=0.0), -chunk.min(axis=1, initial=0.0))
        self._peak = np.maximum(self._peak, peak)
        self._gram += chunk @ chunk.T
        for channel in np.flatnonzero(peak >= _FULL):
            full = np.abs(chunk[channel]) >= _FULL
            self._clipped[channel] += np.count_nonzero(full[:-2] & full[1:-1] & full[2:])

    def findings(self) -> list[str]:
        """One line for every silent, duplicated or clipped channel (numbers are the array's, from zero)."""
        silent = self._peak <= 10.0 ** (SILENT_DBFS / 20.0)
        lines = [f"channel {c} is silent; leave it out of `channels` and of the array" for c in np.flatnonzero(silent)]
        power = np.diag(self._gram)
        for a in range(len(power)):
            for b in range(a + 1, len(power)):
                if silent[a] or silent[b]:
                    continue
                if power[a] + power[b] - 2.0 * self._gram[a, b] <= _SAME * (power[a] + power[b]):
                    lines.append(f"channels {a} and {b} hold the same samples; one of them is a copy: leave it out")
        lines += [
            f"channel {c} is clipped in {self._clipped[c]} places; record at a lower gain"
            for c in np.flatnonzero(self._clipped)
        ]
        return lines
