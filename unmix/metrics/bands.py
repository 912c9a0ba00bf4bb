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

from typing import Any

import numpy as np
import scipy.signal
from numpy.typing import NDArray

__all__ = ["BAND_CENTRES_HZ", "BAND_IMPORTANCE", "importance_weighted_db"]

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
FLOOR = 1e-20
"""Interference this far below the target (-200 dB) is rounding."""


def importance_weighted_db(target: Signals, interference: Signals, sample_rate: int) -> float | None:
    """The weighted ratio of two signals (samples,); None where no band holds both."""
    centres = np.array(BAND_CENTRES_HZ, dtype=float)
    inside = centres * 2.0 ** (1.0 / 6.0) <= sample_rate / 2.0
    T, I = (_band_powers(s, sample_rate, centres[inside]) for s in (target, interference))  # noqa: E741
    heard = FLOOR * T.max(initial=0.0) < T
    usable = heard & (FLOOR * np.maximum(T, np.finfo(float).tiny) < I)
    if not usable.any():
        return None
    weights = np.array(BAND_IMPORTANCE)[inside][usable]
    return float(weights @ (10.0 * np.log10(T[usable] / I[usable])) / weights.sum())


def _band_powers(signal: Signals, sample_rate: int, centres: Floats) -> Floats:
    length = min(signal.size, round(RESOLUTION_S * sample_rate))
    frequency, power = scipy.signal.welch(signal, sample_rate, nperseg=length, detrend=False)
    low, high = centres * 2.0 ** (-1.0 / 6.0), centres * 2.0 ** (1.0 / 6.0)
    return np.array([power[(frequency >= f) & (frequency < g)].sum() for f, g in zip(low, high, strict=True)])
