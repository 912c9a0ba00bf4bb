"""Responses from an exponential sine sweep played at known bearings.

    s(t) = sin(2 pi f1 L (exp(t / L) - 1)),      L = T / ln(f2 / f1)

The recording divided by the sweep's spectrum, Y S* / |S|^2 where the sweep has power, is the response; distortion of
the loudspeaker comes out ahead of it and is cut off. T20 and the direct-to-reverberant ratio are read off the whole
response; a window around the direct sound leaves what the array itself does.

Source: A. Farina, "Simultaneous measurement of impulse response and distortion with a swept-sine technique", 108th AES
Convention, 2000.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import scipy.fft
from numpy.typing import NDArray

from unmix.errors import InputError
from unmix.metrics.decay import direct_onset, measure_decay

__all__ = ["MeasuredResponse", "deconvolve", "exponential_sweep", "measure_response", "windowed"]

Floats = NDArray[np.float64]

RESPONSE_S = 1.5
BEFORE_S = 0.001
"""Kept ahead of the earliest direct sound."""
_BAND_DB = -15.0
LEAST_ABOVE_DB = 30.0


@dataclass(frozen=True)
class MeasuredResponse:
    """Responses of all channels to one source.

    taps      (channels, samples) up to `RESPONSE_S`, time zero at the sweep's start plus whatever delay the player had
    onset     sample of the earliest direct sound among the channels
    t20_s, drr_db  at the reference channel; None where undefined, with the reason
    """

    taps: Floats
    onset: int
    t20_s: float | None
    drr_db: float | None
    undefined: dict[str, str]


def exponential_sweep(f1_hz: float, f2_hz: float, seconds: float, sample_rate: int) -> Floats:
    """A sweep of amplitude 1, faded over 20 ms at both ends."""
    t = np.arange(round(seconds * sample_rate)) / sample_rate
    rate = seconds / np.log(f2_hz / f1_hz)
    sweep = np.sin(2.0 * np.pi * f1_hz * rate * np.expm1(t / rate))
    fade = max(2, round(0.02 * sample_rate))
    ramp = np.sin(0.5 * np.pi * np.arange(fade) / fade) ** 2
    sweep[:fade] *= ramp
    sweep[-fade:] *= ramp[::-1]
    return np.asarray(sweep)


def deconvolve(recording: Floats, sweep: Floats) -> Floats:
    """Responses (channels, samples) of a recording (channels, samples) to a sweep (samples,); as long as the recording
    goes on, what comes before time zero (distortion) dropped."""
    size = scipy.fft.next_fast_len(recording.shape[1] + len(sweep), real=True)
    s = scipy.fft.rfft(sweep, size)
    power = np.abs(s) ** 2
    # Outside the sweep's band there is nothing but noise to divide.
    least = 10.0 ** (_BAND_DB / 10.0) * np.median(power[power > 1e-3 * power.max()])
    inverse = np.where(power > least, s.conj() / np.maximum(power, least), 0.0)
    taps = scipy.fft.irfft(scipy.fft.rfft(recording, size, axis=1) * inverse, size, axis=1)
    return np.asarray(taps[:, : recording.shape[1]])


def measure_response(
    recording: Floats, sweep: Floats, sample_rate: int, reference: int, *, where: str = "take"
) -> MeasuredResponse:
    """Responses of one take. Raises InputError when the sweep is not in it."""
    taps = deconvolve(recording, sweep)
    peaks = np.abs(taps).max(axis=1)
    floor = np.sqrt(np.median(taps**2, axis=1)) + 1e-15
    weak = np.flatnonzero(20.0 * np.log10(peaks / floor + 1e-15) < LEAST_ABOVE_DB)
    if len(weak):
        raise InputError(
            f"{where}: channel {weak[0]} does not hold the sweep; is it the file that was played, at the same sample "
            "rate, and is the recording complete?"
        )
    onsets = np.array([direct_onset(row) for row in taps])
    onset = int(onsets.min())
    kept = taps[:, max(0, onset - round(0.1 * sample_rate)) : onset + round(RESPONSE_S * sample_rate)]
    onset -= max(0, onset - round(0.1 * sample_rate))
    decay = measure_decay(kept[reference], sample_rate)
    return MeasuredResponse(kept, onset, decay.t20_s, decay.drr_db, decay.undefined)


def windowed(response: MeasuredResponse, sample_rate: int, window_s: float) -> Floats:
    """The direct sound alone: from 1 ms before the earliest onset to `window_s` behind it, faded over a quarter of
    that; (channels, samples)."""
    before, after = round(BEFORE_S * sample_rate), round(window_s * sample_rate)
    start = response.onset - before
    taps = np.zeros((len(response.taps), before + after))
    first = max(start, 0)
    piece = response.taps[:, first : start + before + after]
    taps[:, first - start : first - start + piece.shape[1]] = piece
    rise, fall = max(2, before // 2), max(4, after // 4)
    taps[:, :rise] *= np.sin(0.5 * np.pi * np.arange(rise) / rise) ** 2
    taps[:, -fall:] *= np.cos(0.5 * np.pi * (np.arange(fall) + 1) / fall) ** 2
    return taps
