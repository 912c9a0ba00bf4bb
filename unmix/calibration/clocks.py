"""Whether channels run on one clock: delays between them chunk by chunk, and the line through those.

In each chunk the cross-spectrum of a channel with the reference, every frequency weighted alike (phase transform),
is turned into a correlation over lags of up to the chunk's length; its largest magnitude is the delay, refined by a
parabola, its sign the polarity. Delays over time fit tau(t) = tau_0 + drift (t - t_middle): the slope is taken as the
median over pairs (Theil 1950, Sen 1968), which single wrong chunks do not move.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import scipy.fft
from numpy.typing import NDArray

__all__ = ["ClockFit", "ClockMeter", "fit_clock"]

Floats = NDArray[np.float64]

CHUNKS = 200
"""Chunks of a recording that are looked at, spread over it."""
LOWEST_HZ, HIGHEST_HZ = 150.0, 6000.0
PLAIN = 8.0
"""A correlation peak this many times the deviation of all lags is taken for one."""


@dataclass(frozen=True)
class ClockFit:
    """Delay of one channel against the reference over time.

    delay_s     in the middle of the recording, positive when the channel is late
    spread_s    robust deviation of single chunks from the line
    drift_ppm   how much slower the channel's delay grows per second: positive when its clock is slow
    drift_std_ppm  deviation of that; infinite with fewer than three chunks
    sign        of the correlation's peak: -1 when most chunks say so
    chunks      that had a plain peak; positive share of them in `positive`
    """

    delay_s: float
    spread_s: float
    drift_ppm: float
    drift_std_ppm: float
    sign: int
    positive: float
    chunks: int
    middle_s: float


class ClockMeter:
    """Takes in chunks in order; keeps one delay per channel and chunk looked at."""

    def __init__(self, reference: int, sample_rate: int, samples: int, chunk: int) -> None:
        self._reference, self._rate = reference, sample_rate
        self._every = max(1, round(samples / max(chunk, 1) / CHUNKS))
        self._at = self._seen = 0
        self.time_s: list[float] = []
        self.delay_s: list[Floats] = []
        self.peak: list[Floats] = []

    def add(self, chunk: Floats) -> None:
        """Take in (channels, samples)."""
        samples = chunk.shape[1]
        if self._seen % self._every == 0 and samples >= 0.25 * self._rate and np.any(chunk[self._reference]):
            delay, peak = chunk_delays(chunk, self._reference, self._rate)
            self.time_s.append((self._at + 0.5 * samples) / self._rate)
            self.delay_s.append(delay)
            self.peak.append(peak)
        self._seen += 1
        self._at += samples

    def fits(self, channels: int) -> list[ClockFit | None]:
        """A fit for each channel; None where no chunk had a plain peak."""
        if not self.time_s:
            return [None] * channels
        time_s, delay, peak = np.array(self.time_s), np.array(self.delay_s), np.array(self.peak)
        return [fit_clock(time_s, delay[:, m], peak[:, m]) for m in range(channels)]


def chunk_delays(chunk: Floats, reference: int, sample_rate: float) -> tuple[Floats, Floats]:
    """Delay in seconds of each channel against the reference, and the signed height of the correlation's peak in
    deviations of all lags."""
    # Lags are far below the chunk's length: what wraps around its ends is a little noise.
    long = scipy.fft.next_fast_len(chunk.shape[1], real=True)
    top = int(min(HIGHEST_HZ, 0.45 * sample_rate) * long / sample_rate) + 1
    spectrum = scipy.fft.rfft(chunk.astype(np.float32), long, axis=1)[:, :top]
    spectrum[:, : int(LOWEST_HZ * long / sample_rate)] = 0.0
    cross = spectrum * spectrum[reference].conj()
    magnitude = np.abs(cross)
    cross = np.where(magnitude > 1e-12, cross / np.maximum(magnitude, 1e-12), 0.0)
    # No more lags between samples than the band calls for.
    size = scipy.fft.next_fast_len(3 * top, real=True)
    sample_rate = sample_rate * size / long
    correlation = scipy.fft.irfft(cross, size, axis=1)
    middle = size // 2
    at = np.argmax(np.abs(correlation), axis=1)
    rows = np.arange(len(chunk))
    height = correlation[rows, at]
    before, after = correlation[rows, at - 1], correlation[rows, (at + 1) % size]
    bend = before - 2.0 * height + after
    shift = np.where(np.abs(bend) > 1e-12, 0.5 * (before - after) / np.where(bend == 0.0, 1.0, bend), 0.0)
    lag = np.where(at > middle, at - size, at) + np.clip(shift, -0.5, 0.5)
    deviation = np.sqrt(np.mean(correlation**2, axis=1))
    return np.asarray(lag / sample_rate, np.float64), np.asarray(height / np.maximum(deviation, 1e-12), np.float64)


def fit_clock(time_s: Floats, delay_s: Floats, peak: Floats) -> ClockFit | None:
    """The line through a channel's delays; None when no chunk is plain."""
    plain = np.abs(peak) >= PLAIN
    if not plain.any():
        return None
    t, d, p = time_s[plain], delay_s[plain], peak[plain]
    middle = float(0.5 * (t[0] + t[-1]))
    slope, deviation = _slope(t, d)
    rest = d - slope * (t - middle)
    delay = float(np.median(rest))
    spread = float(1.4826 * np.median(np.abs(rest - delay)))
    positive = float(np.mean(p > 0.0))
    return ClockFit(delay, spread, 1e6 * slope, 1e6 * deviation, 1 if positive >= 0.5 else -1, positive, len(t), middle)


def _slope(t: Floats, d: Floats) -> tuple[float, float]:
    if len(t) < 3:
        return 0.0, np.inf
    first, second = np.triu_indices(len(t), 1)
    slope = float(np.median((d[second] - d[first]) / (t[second] - t[first])))
    rest = d - slope * t
    spread = 1.4826 * float(np.median(np.abs(rest - np.median(rest))))
    # Least squares' deviation, widened by the median's efficiency of 64 %.
    return slope, spread / 0.8 / float(np.sqrt(np.sum((t - t.mean()) ** 2)))
