"""Signal-to-interference ratio weighted by what each band matters to speech.

With T_i and I_i the powers in third octave i of the target and of the interference in an estimate, as BSS Eval splits
it (`unmix.metrics.distortion`), and w_i the band importances of the speech intelligibility index [1]_,

    SIR_w = sum_i w_i 10 log10(T_i / I_i),

an intelligibility-weighted ratio [2]_. Bands that reach beyond half the sample rate are left out and the weights of
the others brought to a sum of 1.

.. [1] ANSI S3.5-1997, "Methods for calculation of the speech intelligibility index", table 3.
.. [2] J. E. Greenberg, P. M. Peterson, P. M. Zurek, "Intelligibility-weighted measures of speech-to-interference ratio
   and speech system performance", J. Acoustical Society of America 94(5), 1993.
"""

from __future__ import annotations

from collections.abc import Iterable
from typing import Any

import numpy as np
import scipy.fft
import scipy.signal
from numpy.typing import NDArray

__all__ = ["BAND_CENTRES_HZ", "BAND_IMPORTANCE", "importance_weighted_db", "weighted_ratio_db"]

Floats = NDArray[np.float64]
Signals = NDArray[np.floating[Any]]

BAND_CENTRES_HZ = (
    160, 200, 250, 315, 400, 500, 630, 800, 1000, 1250, 1600, 2000, 2500, 3150, 4000, 5000, 6300, 8000
)  # fmt: skip
BAND_IMPORTANCE = (
    0.0083, 0.0095, 0.0150, 0.0289, 0.0440, 0.0578, 0.0653, 0.0711, 0.0818,
    0.0844, 0.0882, 0.0898, 0.0868, 0.0844, 0.0771, 0.0527, 0.0364, 0.0185,
)  # fmt: skip
RESOLUTION_S = 0.125
"""Length of the spectra's frames: 8 Hz, several bins in the lowest band."""
FRAMES = 256
"""Frames worked on at a time."""
FLOOR = 1e-20
"""Interference this far below the target (-200 dB) is rounding."""


def importance_weighted_db(target: Signals, interference: Signals, sample_rate: int) -> float | None:
    """The weighted ratio of two signals (samples,); None where no band holds both."""
    return weighted_ratio_db([np.array([target, interference])], target.size, sample_rate)


def weighted_ratio_db(stretches: Iterable[Signals], samples: int, sample_rate: int) -> float | None:
    """The same for signals of `samples` samples that come in `stretches`, (2, n) each: target and interference."""
    centres = np.array(BAND_CENTRES_HZ, dtype=float)
    inside = centres * 2.0 ** (1.0 / 6.0) <= sample_rate / 2.0
    T, I = _band_powers(stretches, samples, sample_rate, centres[inside])  # noqa: E741
    heard = FLOOR * T.max(initial=0.0) < T
    usable = heard & (FLOOR * np.maximum(T, np.finfo(float).tiny) < I)
    if not usable.any():
        return None
    weights = np.array(BAND_IMPORTANCE)[inside][usable]
    return float(weights @ (10.0 * np.log10(T[usable] / I[usable])) / weights.sum())


def _band_powers(stretches: Iterable[Signals], samples: int, sample_rate: int, centres: Floats) -> Floats:
    """Powers in bands about the centres, by Welch's method with Hann windows that overlap by half: (2, bands)."""
    length = min(samples, round(RESOLUTION_S * sample_rate))
    hop, window = length - length // 2, scipy.signal.get_window("hann", length)
    power, rest = np.zeros((2, length // 2 + 1)), np.zeros((2, 0))
    for stretch in stretches:
        rest = np.concatenate([rest, stretch], axis=1)
        frames = max(0, (rest.shape[1] - length) // hop + 1)
        for first in range(0, frames, FRAMES):
            count = min(FRAMES, frames - first)
            part = rest[:, first * hop : (first + count - 1) * hop + length]
            views = np.lib.stride_tricks.sliding_window_view(part, length, axis=1)[:, ::hop]
            spectra = scipy.fft.rfft(views * window, axis=-1)
            power += np.sum(np.square(spectra.real) + np.square(spectra.imag), axis=1)
        rest = rest[:, frames * hop :]
    frequency = scipy.fft.rfftfreq(length, 1.0 / sample_rate)
    low, high = centres * 2.0 ** (-1.0 / 6.0), centres * 2.0 ** (1.0 / 6.0)
    bins = [(frequency >= f) & (frequency < g) for f, g in zip(low, high, strict=True)]
    return np.array([power[:, chosen].sum(axis=1) for chosen in bins]).T.reshape(2, -1)
