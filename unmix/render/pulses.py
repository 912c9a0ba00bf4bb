"""Band-limited pulse trains: many delays of any fraction of a sample, summed into one response.

The response wanted is h(f) = W(f) sum_j a_j exp(-i 2 pi f tau_j), with W a low-pass that all delays share: flat to
0.95 of the Nyquist frequency (ripple under 2e-6), nothing from the Nyquist frequency on, so that no fraction of a
sample aliases.

Each pulse is put on a grid Q times finer than the samples. With tau_j = (i_j + d_j) T/Q, |d_j| <= 1/2, the
exponential of the remainder is expanded, exp(-i w d) = sum_l (-i w)^l d^l / l!, so that a pulse costs one addition
per order and the derivatives are exact in the frequency domain. The remainder is at most (pi/(2Q))^(L+1)/(L+1)! at
the Nyquist frequency: with Q = 8 and L = 5, 8e-8 or -142 dB. What is left of W beyond the Nyquist frequency, and the
ends of its ringing, add errors under -105 dB.
"""

from __future__ import annotations

from functools import lru_cache

import numpy as np
import scipy.fft
import scipy.signal
from numpy.typing import NDArray

__all__ = ["BAND_EDGE", "FINENESS", "LEAD", "ORDER", "band_limit", "band_limit_spectrum", "pulse_train"]

Floats = NDArray[np.float64]

FINENESS = 8
ORDER = 5
LEAD = 160
"""Half-length of the low-pass in samples: a response starts this long before time zero and rings as long after."""
BAND_EDGE = 0.95
"""Share of the Nyquist frequency up to which responses are flat."""


@lru_cache(maxsize=1)
def band_limit() -> Floats:
    """Taps of the zero-phase low-pass W, (2 LEAD + 1,), the centre tap being time zero."""
    beta = scipy.signal.kaiser_beta(120.0)
    taps = scipy.signal.firwin(2 * LEAD + 1, 0.5 * (1.0 + BAND_EDGE), window=("kaiser", beta), scale=False)
    return np.asarray(taps / taps.sum(), dtype=np.float64)


def pulse_train(delays: Floats, amplitudes: Floats, samples: int, *, order: int = ORDER) -> Floats:
    """Response with a pulse of ``amplitudes[j]`` at ``delays[j]`` samples, band-limited.

    Parameters
    ----------
    delays, amplitudes : (pulses,)
        Delays in samples, from 0 to ``samples``; pulses outside are left out.
    samples : int
        Length of the stretch pulses may stand in. The result is longer: (LEAD + samples + LEAD,), index LEAD being
        time zero.
    order : int
        Expansion order; 0 puts pulses on the nearest point of the fine grid (off by up to pi/16 at the Nyquist
        frequency).
    """
    length = scipy.fft.next_fast_len(samples + 2 * LEAD + 2, real=True)
    length += length % 2
    if delays.size and (delays.min() < 0.0 or delays.max() > samples):
        inside = np.flatnonzero((delays >= 0.0) & (delays <= samples))
        delays, amplitudes = delays[inside], amplitudes[inside]
    rest = (delays + LEAD) * FINENESS
    nearest = np.rint(rest)
    rest -= nearest
    spot, weight = nearest.astype(np.intp), amplitudes
    omega = 2.0 * np.pi * np.arange(length // 2 + 1) / (length * FINENESS)
    spectrum = np.zeros(omega.size, dtype=np.complex128)
    factor = np.ones(omega.size, dtype=np.complex128)
    for power in range(order + 1):
        if power:
            weight = weight * rest
            factor = factor * (-1j * omega / power)
        grid = np.bincount(spot, weights=weight, minlength=length * FINENESS)
        spectrum += factor * scipy.fft.rfft(grid)[: omega.size]
    spectrum *= band_limit_spectrum(length)
    return np.asarray(scipy.fft.irfft(spectrum, length)[: samples + 2 * LEAD])


@lru_cache(maxsize=8)
def band_limit_spectrum(length: int) -> Floats:
    """W on the bins of a real FFT of ``length`` samples: (length // 2 + 1,), real."""
    taps = np.zeros(length)
    taps[: LEAD + 1] = band_limit()[LEAD:]
    taps[-LEAD:] = band_limit()[:LEAD]
    return np.asarray(scipy.fft.rfft(taps).real)
