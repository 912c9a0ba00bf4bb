"""Each channel by itself, gathered chunk by chunk: level, peak, clipping, DC, noise floor, hum, drop-outs.

level        mean square, DC taken out
noise floor  mean square that the quietest twentieth of the 32 ms frames stays below
clipping     three or more equal samples in a row within 2 % of the channel's largest magnitude
drop-outs    runs of equal samples (zeros or repeats) of `DROPOUT_S` or more, not at the recording's ends
hum          power of half-second frames (2 Hz apart), averaged in dB so that speech between them counts little
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass

import numpy as np
import scipy.fft
from numpy.typing import NDArray

__all__ = ["HUM_HARMONICS", "MAINS_HZ", "ChannelMeter", "ChannelReading", "Run"]

Floats = NDArray[np.float64]

FRAME_S = 0.032
HUM_FRAME_S = 0.5
HUM_TOP_HZ = 400.0
HUM_FRAMES = 240
HUM_RATE = 2000
MAINS_HZ = (50.0, 60.0)
HUM_HARMONICS = 6
DROPOUT_S = 1.5e-3
NEAR_PEAK = 0.98
_LEAST_CLIP = 0.01
_TINY = 1e-30


@dataclass(frozen=True)
class Run:
    """A stretch of equal samples: where it begins, how long it is, and the value."""

    start_s: float
    length_s: float
    value: float


@dataclass(frozen=True)
class ChannelReading:
    """One channel's figures. Powers are mean squares of full scale 1.

    clipped    samples in clipped runs
    runs       drop-outs, the first `KEPT_RUNS` of `run_count`
    hum_db     (mains, harmonics) how far a line stands above its surroundings
    """

    peak: float
    power: float
    dc: float
    floor_power: float
    loud_power: float
    clipped: int
    run_count: int
    runs: tuple[Run, ...]
    hum_db: Floats


KEPT_RUNS = 20


class ChannelMeter:
    """Takes in (channels, samples) chunks in order; memory grows by a few bytes per 32 ms only."""

    def __init__(self, channels: int, sample_rate: int, samples: int) -> None:
        self._rate, self._samples = sample_rate, samples
        self._frame = round(FRAME_S * sample_rate)
        self._factor = max(1, sample_rate // HUM_RATE)
        self._hum_frame = int(HUM_FRAME_S * sample_rate) // self._factor * self._factor
        self._window = np.hanning(self._hum_frame // self._factor).astype(np.float32)
        self._hum_bins = int(HUM_TOP_HZ * HUM_FRAME_S) + 8
        self._every = max(1, round(samples / self._hum_frame / HUM_FRAMES))
        self._at = 0
        self._hum_seen = 0
        self._hum = np.zeros((channels, self._hum_bins))
        self._hum_count = 0
        self._sum = np.zeros(channels)
        self._square = np.zeros(channels)
        self._peak = np.zeros(channels)
        self._clip_level = np.full(channels, _LEAST_CLIP)
        self._clipped = np.zeros(channels, np.int64)
        self._powers: list[NDArray[np.float32]] = []
        self._runs: list[list[Run]] = [[] for _ in range(channels)]
        self._run_count = np.zeros(channels, np.int64)

    def add(self, chunk: Floats) -> None:
        """Take in the next chunk."""
        if chunk.shape[1] == 0:
            return
        self._sum += chunk.sum(axis=1)
        self._square += np.einsum("mn,mn->m", chunk, chunk)
        peak = np.maximum(chunk.max(axis=1), -chunk.min(axis=1))
        for channel in np.flatnonzero(peak >= self._clip_level):
            self._count_clipped(int(channel), chunk[channel], float(peak[channel]))
        self._peak = np.maximum(self._peak, peak)
        frames = chunk.shape[1] // self._frame
        cut = chunk[:, : frames * self._frame].reshape(len(chunk), frames, self._frame)
        power = np.einsum("mfn,mfn->mf", cut, cut) / self._frame - cut.mean(axis=2) ** 2
        self._powers.append(np.maximum(power, 0.0).astype(np.float32))
        self._find_runs(chunk)
        self._add_hum(chunk)
        self._at += chunk.shape[1]

    def _count_clipped(self, channel: int, x: Floats, peak: float) -> None:
        if peak > self._peak[channel] / NEAR_PEAK:
            self._clipped[channel] = 0  # what looked like the ceiling was none
        top = max(peak, self._peak[channel])
        high = np.flatnonzero(np.abs(x) >= NEAR_PEAK * top)
        # Three neighbours of the same value: a flat top, which no sound has.
        flat = (np.diff(high, n=1)[:-1] == 1) & (np.diff(high)[1:] == 1) if len(high) > 2 else np.zeros(0, bool)
        same = np.flatnonzero(flat)
        same = same[(x[high[same]] == x[high[same + 1]]) & (x[high[same + 1]] == x[high[same + 2]])]
        self._clipped[channel] += len(np.unique(np.concatenate([same, same + 1, same + 2])))
        self._clip_level[channel] = max(_LEAST_CLIP, NEAR_PEAK * top)

    def _find_runs(self, chunk: Floats) -> None:
        least = max(8, round(DROPOUT_S * self._rate))
        grid = chunk[:, :: least // 2]
        still = grid[:, 1:] == grid[:, :-1]
        for channel in np.flatnonzero(still.any(axis=1)):
            for start, length in _equal_runs(chunk[channel], least):
                first, last = self._at + start, self._at + start + length
                if first <= 1 or last >= self._samples - 1:
                    continue
                self._run_count[channel] += 1
                if len(self._runs[channel]) < KEPT_RUNS:
                    run = Run(first / self._rate, length / self._rate, float(chunk[channel, start]))
                    self._runs[channel].append(run)

    def _add_hum(self, chunk: Floats) -> None:
        for at in range(0, chunk.shape[1] - self._hum_frame + 1, self._hum_frame):
            self._hum_seen += 1
            if (self._hum_seen - 1) % self._every:
                continue
            # Means of neighbours: what they fold onto hum is 26 dB down at least.
            part = chunk[:, at : at + self._hum_frame].reshape(len(chunk), -1, self._factor).mean(axis=2)
            part = (part - part.mean(axis=1, keepdims=True)).astype(np.float32)
            spectrum = scipy.fft.rfft(part * self._window, axis=1)[:, : self._hum_bins]
            self._hum += np.log10(np.abs(spectrum) ** 2 + _TINY)
            self._hum_count += 1

    def readings(self) -> list[ChannelReading]:
        """What was found, one reading per channel."""
        n = max(self._at, 1)
        dc = self._sum / n
        powers = np.concatenate(self._powers, axis=1) if self._powers else np.zeros((len(dc), 1), np.float32)
        if powers.shape[1] == 0:
            powers = (self._square / n)[:, None].astype(np.float32)
        floor, loud = np.quantile(powers, [0.05, 0.95], axis=1)
        hum = self._lines()
        return [
            ChannelReading(
                peak=float(self._peak[m]),
                power=float(max(self._square[m] / n - dc[m] ** 2, 0.0)),
                dc=float(dc[m]),
                floor_power=float(floor[m]),
                loud_power=float(loud[m]),
                clipped=int(self._clipped[m]),
                run_count=int(self._run_count[m]),
                runs=tuple(self._runs[m]),
                hum_db=hum[m],
            )
            for m in range(len(dc))
        ]

    def _lines(self) -> Floats:
        """How far each mains harmonic stands above both of its sides: (channels, mains, harmonics) in dB."""
        out = np.zeros((len(self._hum), len(MAINS_HZ), HUM_HARMONICS))
        if self._hum_count == 0:
            return out
        level = 10.0 * self._hum / self._hum_count
        for a, mains in enumerate(MAINS_HZ):
            for h in range(HUM_HARMONICS):
                middle = round((h + 1) * mains * HUM_FRAME_S)
                if middle + 9 > self._hum_bins or (h + 1) * mains > HUM_TOP_HZ:
                    continue
                line = level[:, middle - 1 : middle + 2].max(axis=1)
                below, above = level[:, middle - 7 : middle - 3], level[:, middle + 4 : middle + 8]
                out[:, a, h] = line - np.maximum(below.max(axis=1), above.max(axis=1))
        return out


def _equal_runs(x: Floats, least: int) -> Iterator[tuple[int, int]]:
    """Start and length of every run of `least` or more equal samples."""
    same = np.concatenate([[False], x[1:] == x[:-1], [False]])
    edges = np.flatnonzero(np.diff(same.astype(np.int8)))
    for start, stop in zip(edges[::2], edges[1::2], strict=True):
        length = int(stop - start) + 1
        if length >= least:
            yield int(start), length
