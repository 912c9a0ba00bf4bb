"""Recorders that ran on clocks of their own, put onto one.

Channel m hears at its time t + delta + epsilon (t - t_0) what the reference hears at t; y_m(t) = x_m of that time puts
it right. Samples between samples are interpolated by a sinc of `HALF` samples to either side under a Kaiser window:
-90 dB of error up to 0.9 of half the sample rate.
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import replace

import numpy as np
from numpy.typing import NDArray

from unmix.audio import Recording, Samples
from unmix.calibration.clocks import ClockFit, ClockMeter

__all__ = ["measure_clocks", "one_clock", "warped"]

Floats = NDArray[np.float64]

HALF = 32
_BETA = 9.0
_BLOCK_S = 4.0
_TABLE = 2048


def _kernel() -> Floats:
    """The windowed sinc at `_TABLE` steps between samples: (steps + 1, 2 HALF)."""
    shift = np.arange(_TABLE + 1)[:, None] / _TABLE
    x = np.arange(-HALF + 1, HALF + 1) - shift
    window = np.i0(_BETA * np.sqrt(np.maximum(1.0 - (x / HALF) ** 2, 0.0))) / np.i0(_BETA)
    taps = np.sinc(x) * window
    return np.asarray(taps / taps.sum(axis=1, keepdims=True))


def warped(x: Floats, position: Floats, kernel: Floats | None = None) -> Floats:
    """x (samples,) at fractional sample positions (n,), zero outside."""
    table = _kernel() if kernel is None else kernel
    whole = np.floor(position).astype(np.int64)
    step = (position - whole) * _TABLE
    low = step.astype(np.int64)
    share = (step - low)[:, None]
    taps = table[low] * (1.0 - share) + table[np.minimum(low + 1, _TABLE)] * share
    index = whole[:, None] + np.arange(-HALF + 1, HALF + 1)
    inside = (index >= 0) & (index < len(x))
    return np.asarray(np.sum(np.where(inside, x[np.clip(index, 0, len(x) - 1)], 0.0) * taps, axis=1))


def measure_clocks(recording: Recording | Samples, reference: int) -> list[ClockFit | None]:
    """Clocks of a recording's channels, in one pass."""
    size = 2 * recording.sample_rate
    meter = ClockMeter(reference, recording.sample_rate, recording.samples, size)
    for chunk in recording.chunks(size):
        meter.add(chunk)
    return meter.fits(len(recording.channels))


def one_clock(recording: Recording | Samples, clocks: list[ClockFit | None], reference: int) -> Iterator[Floats]:
    """The recording's chunks (channels, n), every channel on the reference's clock and at its time."""
    rate, kernel = recording.sample_rate, _kernel()
    size = round(_BLOCK_S * rate)
    for at in range(0, recording.samples, size):
        n = np.arange(at, min(at + size, recording.samples), dtype=np.float64)
        rows = []
        for channel, clock in enumerate(clocks):
            if clock is None or channel == reference:
                rows.append(_part(recording, channel, at, at + len(n)))
                continue
            shift = clock.delay_s + 1e-6 * clock.drift_ppm * (n / rate - clock.middle_s)
            place = n + shift * rate
            first = int(np.floor(place.min())) - HALF
            piece = _part(recording, channel, first, int(np.ceil(place.max())) + HALF + 1)
            rows.append(warped(piece, place - first, kernel))
        yield np.stack(rows)


def _part(recording: Recording | Samples, channel: int, first: int, last: int) -> Floats:
    """Samples first..last - 1 of one channel, zero where the recording has none."""
    start, stop = max(first, 0), min(last, recording.samples)
    out = np.zeros(last - first)
    if start >= stop:
        return out
    if isinstance(recording, Samples):
        out[start - first : stop - first] = recording.signals[channel, start:stop]
        return out
    part = replace(
        recording, channels=(recording.channels[channel],), start=recording.start + start, stop=recording.start + stop
    )
    out[start - first : stop - first] = part.read()[0]
    return out
